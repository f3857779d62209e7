"""What is a hydrological year, and into which periods is a span of days cut?"""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator

EVERY = ("day", "week", "month", "year")


def year_start(name: int, starts: str) -> dt.date:
    """First day of the hydrological year called `name`, the calendar year it ends in."""
    month, day = map(int, starts.split("-"))
    own = dt.date(name, month, day)
    return own if (month, day) == (1, 1) else own.replace(year=name - 1)


def year_span(name: int, starts: str) -> tuple[dt.date, dt.date]:
    """First and last day of a hydrological year."""
    return year_start(name, starts), year_start(name + 1, starts) - dt.timedelta(days=1)


def year_name(day: dt.date, starts: str) -> int:
    """The hydrological year that a day belongs to."""
    return day.year + 1 if day >= year_start(day.year + 1, starts) else day.year


def periods(since: dt.date, until: dt.date, every: str | None, starts: str) -> Iterator[tuple[dt.date, dt.date]]:
    """Cut since..until (both included) into days, ISO weeks, calendar months or hydrological years.

    The first and last period end with the span; None gives the span itself.
    """
    first = since
    while first <= until:
        if every is None:
            last = until
        elif every == "day":
            last = first
        elif every == "week":
            last = first + dt.timedelta(days=6 - first.weekday())
        elif every == "month":
            last = (first.replace(day=1) + dt.timedelta(days=31)).replace(day=1) - dt.timedelta(days=1)
        else:
            last = year_span(year_name(first, starts), starts)[1]
        last = min(last, until)
        yield first, last
        first = last + dt.timedelta(days=1)
