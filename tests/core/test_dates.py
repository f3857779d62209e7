"""Are hydrological years and periods cut right at their edges?"""

import datetime as dt
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.dates import EVERY, periods, year_name, year_span

DAY = dt.timedelta(days=1)
STARTS = st.sampled_from(["10-01", "04-01", "07-01", "01-01", "02-28"])
DAYS = st.dates(dt.date(1970, 1, 1), dt.date(2070, 12, 31))


def test_a_year_is_named_by_the_year_it_ends_in():
    assert year_span(2031, "10-01") == (dt.date(2030, 10, 1), dt.date(2031, 9, 30))
    assert year_span(2031, "01-01") == (dt.date(2031, 1, 1), dt.date(2031, 12, 31))
    assert year_name(dt.date(2030, 9, 30), "10-01") == 2030
    assert year_name(dt.date(2030, 10, 1), "10-01") == 2031


@given(DAYS, STARTS)
def test_every_day_lies_in_the_year_it_is_named_for(day, starts):
    first, last = year_span(year_name(day, starts), starts)
    assert first <= day <= last
    assert year_span(year_name(day, starts) + 1, starts)[0] == last + DAY


@given(DAYS, st.integers(0, 800), st.sampled_from([*EVERY, None]), STARTS)
def test_periods_cover_the_span_without_gap_or_overlap(since, length, every, starts):
    until = since + dt.timedelta(days=length)
    cut = list(periods(since, until, every, starts))
    assert cut[0][0] == since
    assert cut[-1][1] == until
    assert all(first <= last for first, last in cut)
    assert all(b[0] == a[1] + DAY for a, b in pairwise(cut))


@pytest.mark.parametrize(("every", "count"), [("day", 366), ("month", 12), ("year", 2), ("week", 53), (None, 1)], ids=str)
def test_a_leap_year_has_the_periods_one_counts_by_hand(every, count):
    cut = list(periods(dt.date(2028, 1, 1), dt.date(2028, 12, 31), every, "10-01"))
    assert len(cut) == count
    if every == "month":
        assert cut[1] == (dt.date(2028, 2, 1), dt.date(2028, 2, 29))
