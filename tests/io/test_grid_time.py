"""Are days and months of any calendar counted right, and do units become ours?"""

import datetime as dt
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.errors import InputProblem
from firnlight.io import grid_time, grids, quantities
from grid_maker import DAY, HOURLY, STARTS, write

SAMPLE = Path(__file__).parents[2] / "sample_tiles"
EACH = np.stack([STARTS, STARTS + 1], axis=1)


# times


@given(st.dates(dt.date(1583, 1, 1), dt.date(2200, 1, 1)))
def test_days_are_counted_as_python_counts(day):
    for calendar in ("standard", "proleptic_gregorian"):
        base = grid_time.day_number(2000, 1, 1, calendar)
        assert grid_time.day_number(day.year, day.month, day.day, calendar) - base == (day - dt.date(2000, 1, 1)).days


@given(st.dates(dt.date(1900, 1, 1), dt.date(2200, 1, 1)), st.sampled_from(grid_time.CALENDARS))
def test_months_of_times(day, calendar):
    number = grid_time.day_number(day.year, day.month, min(day.day, 28), calendar)
    days = number - grid_time.day_number(1850, 1, 1, calendar)
    clock = grid_time.Clock(np.array([float(days)]), "days since 1850-01-01", calendar, "file")
    assert clock.months() == [day.month]


# quantities


@pytest.mark.parametrize(
    ("quantity", "units", "given", "ours"),
    [
        ("air_temperature", "degC", -10.0, 263.15),
        ("air_temperature", "K", 263.15, 263.15),
        ("dew_point", "Celsius", -10.0, None),
        ("dew_point", "celsius", -10.0, 263.15),
        ("vapour_pressure", "Pa", 611.0, 6.11),
        ("vapour_pressure", "kPa", 0.611, 6.11),
        ("vapour_pressure", "hPa", 6.11, 6.11),
        ("relative_humidity", "%", 70.0, 0.7),
        ("cloud_fraction", "1", 0.7, 0.7),
        ("cloud_fraction", "oktas", 8.0, 1.0),
        ("cloud_fraction", "1", 70.0, None),
        ("specific_humidity", "g/kg", 4.0, 0.004),
        ("wind_speed", "km h**-1", 36.0, 10.0),
        ("air_pressure", "hPa", 840.0, 84_000.0),
        ("water_vapour", "kg m-2", 12.0, 1.2),
        ("ozone", "DU", 300.0, 0.3),
        # 1 DU is 2.1415e-5 kg m-2 (four digits)
        ("ozone", "kg m-2", 300 * 2.1415e-5, 0.3),
        ("air_temperature", "degC", 263.15, None),
    ],
)
def test_units_become_ours(quantity, units, given, ours):
    def convert():
        rule = quantities.conversion(quantity, units, "file", "field")
        value = np.array([given, np.nan]) * rule.factor + rule.offset
        rule.check(value, "file", "field", units)
        return value[0]

    if ours is None:
        with pytest.raises(InputProblem):
            convert()
    else:
        assert convert() == pytest.approx(ours, rel=3e-5 if units == "kg m-2" else 1e-12)


def test_states_without_a_word_are_instants(tmp_path):
    path = write(tmp_path / "t.nc", HOURLY / 90 - 5, STARTS, units="degC")
    field = grids.read_day(path, "sw", DAY, "air_temperature")
    np.testing.assert_allclose(field.values, (HOURLY[24:48] + HOURLY[25:49]) / 180 - 5 + 273.15)
