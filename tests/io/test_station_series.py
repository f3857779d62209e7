"""Is a station's file read into the right hours and units, are gaps kept, and is a bad line named?"""

import datetime as dt
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from firnlight.core.errors import InputProblem
from firnlight.io.station_series import column_units, day_series, read_series

SAMPLE = Path(__file__).parents[2] / "sample_tiles" / "stations" / "high_camp.csv"
DAY = dt.date(2031, 3, 10)
HALF_HOURS = np.arange(48) / 2


def table(path, rows, header="time,sw_wm2,t_c", separator=","):
    lines = [header.replace(",", separator), *(separator.join(map(str, row)) for row in rows)]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def stamps(start=dt.datetime(2031, 3, 9), count=72, minutes=60):
    return [start + dt.timedelta(minutes=minutes * n) for n in range(count)]


def hourly(path, shift_h=0.0, form="{:%Y-%m-%d %H:%M}", **more):
    rows = [(form.format(t + dt.timedelta(hours=shift_h)), n, n / 10 - 5) for n, t in enumerate(stamps())]
    return table(path, rows, **more)


def flux(path, day=DAY, **more):
    return day_series(path, "sw_wm2", day, "flux", **{"label": "start", **more})


def problem(path, **more):
    with pytest.raises(InputProblem) as caught:
        flux(path, **more)
    return caught.value


TRUE = np.arange(24.0) + 24


def test_the_sample_is_readable():
    series = day_series(SAMPLE, "sw_down_wm2", DAY, "flux", label="start")
    np.testing.assert_allclose(series.edges_h, np.stack([HALF_HOURS, HALF_HOURS + 0.5], axis=1))
    rows = [line.split(",") for line in SAMPLE.read_text().splitlines() if line.startswith(str(DAY))]
    np.testing.assert_array_equal(series.values, [float(row[1]) for row in rows])
    air = day_series(SAMPLE, "air_temperature_c", DAY, "air_temperature", label="start")
    np.testing.assert_allclose(air.values, [float(row[4]) + 273.15 for row in rows])
    humidity = day_series(SAMPLE, "relative_humidity_percent", DAY, "relative_humidity", label="start")
    np.testing.assert_allclose(humidity.values, [float(row[5]) / 100 for row in rows])
    assert (series.units, air.units, humidity.units) == ("W m-2", "K", "1")


@pytest.mark.parametrize(
    ("written", "settings"),
    [
        ({}, {}),
        ({"shift_h": 1}, {"label": "end"}),
        ({"shift_h": 0.5}, {"label": "middle"}),
        ({"shift_h": -2}, {"utc_offset_hours": -2}),
        ({"shift_h": 5.75}, {"utc_offset_hours": 5.75}),
        ({"shift_h": 1, "form": "{:%Y-%m-%dT%H:%M:%S+01:00}"}, {"utc_offset_hours": 7}),
        ({"form": "{:%d.%m.%Y %H:%M}"}, {"time_format": "%d.%m.%Y %H:%M"}),
        ({"separator": ";"}, {}),
        ({"separator": "\t"}, {}),
        ({"header": "# a comment\n\nDate and time,sw_wm2,t_c"}, {}),
        ({"header": "t_c,sw_wm2,when"}, None),
    ],
)
def test_every_form_gives_the_same_day(tmp_path, written, settings):
    path = hourly(tmp_path / "s.csv", **written)
    if settings is None:  # the time in the last column
        rows = [line.split(",")[::-1] for line in hourly(path).read_text().splitlines()[1:]]
        table(path, rows, header=written["header"])
        settings = {"time_column": "when"}
    series = flux(path, **settings)
    np.testing.assert_array_equal(series.values, TRUE)
    np.testing.assert_allclose(series.edges_h[:, 0], np.arange(24))


def test_decimal_commas(tmp_path):
    path = table(tmp_path / "s.csv", [(f"{t:%Y-%m-%d %H:%M}", f"{n},5", 1) for n, t in enumerate(stamps())], separator=";")
    np.testing.assert_array_equal(flux(path).values, TRUE + 0.5)


def test_amounts_are_of_each_interval(tmp_path):
    path = table(tmp_path / "s.csv", [(t, n * 3600, 0) for n, t in enumerate(stamps())], header="time,sw_jm2,t_c")
    np.testing.assert_allclose(day_series(path, "sw_jm2", DAY, "flux", label="start").values, TRUE)


def test_instants_are_joined_by_straight_lines(tmp_path):
    np.testing.assert_allclose(flux(hourly(tmp_path / "s.csv"), label="instant").values, TRUE + 0.5)


def test_gaps_stay_gaps(tmp_path):
    rows = [[t, n, 0] for n, t in enumerate(stamps())]
    for n, cell in ((24, ""), (25, "NaN"), (26, "-9999"), (27, "-999.0"), (28, "NA"), (29, "inf")):
        rows[n][1] = cell
    del rows[40:42]
    series = flux(table(tmp_path / "s.csv", rows))
    expected = TRUE.copy()
    expected[[0, 1, 2, 3, 4, 5, 16, 17]] = np.nan
    np.testing.assert_array_equal(series.values, expected)
    np.testing.assert_allclose(series.edges_h[:, 1], np.arange(24) + 1)


def test_a_day_that_the_file_lacks_is_empty_throughout(tmp_path):
    series = flux(hourly(tmp_path / "s.csv"), day=dt.date(2031, 6, 1))
    assert series.values.shape == (24,)
    assert np.isnan(series.values).all()
    np.testing.assert_allclose(series.edges_h[[0, -1]], [[0, 1], [23, 24]])


def test_lines_out_of_order_and_repeated_lines(tmp_path):
    rows = [(t, n, 0) for n, t in enumerate(stamps())]
    path = table(tmp_path / "s.csv", rows[::-1] + rows[3:9])
    np.testing.assert_array_equal(flux(path).values, TRUE)
    assert (np.diff(read_series(path, "sw_wm2", "flux").times_s) == 3600).all()


def test_many_days_from_one_reading(tmp_path):
    series = read_series(hourly(tmp_path / "s.csv"), "t_c", "air_temperature", label="start")
    days = [series.day(DAY + dt.timedelta(days=n)).values for n in (-1, 0, 1)]
    np.testing.assert_allclose(np.concatenate(days), np.arange(72) / 10 - 5 + 273.15)


@pytest.mark.parametrize(
    ("name", "units"),
    [
        ("sw_down_wm2", "W m-2"),
        ("SWin [W/m2]", "W/m2"),
        ("T (degC)", "degC"),
        ("air_c", "degC"),
        ("rh_percent", "%"),
        ("e_hpa", "hPa"),
        ("sw_down", None),
        ("k", None),
    ],
)
def test_units_in_a_columns_name(name, units):
    assert column_units(name) == units


def changed(path, line, text):
    lines = hourly(path).read_text().splitlines()
    lines[line - 1] = text
    path.write_text("\n".join(lines), encoding="utf-8")
    return path


@pytest.mark.parametrize(
    ("line", "text", "where", "word"),
    [
        (5, "2031-03-09 03:00,4", "line 5", "2 cells"),
        (6, "2031-03-09 04:00,4x,0", "line 6, sw_wm2", "'4x'"),
        (7, "9 March,4,0", "line 7, time", "time_format"),
        (8, "2031-03-09 04:00,4000,0", "line 8, time", "line 6"),
        (9, "2031-03-09 07:00,40000,0", "sw_wm2", "within"),
        (2, "\0\0\0,1,1", "line 2", "no text"),
    ],
)
def test_a_bad_line_is_named(tmp_path, line, text, where, word):
    found = problem(changed(tmp_path / "s.csv", line, text))
    assert found.what == where
    assert word in str(found)


def test_what_cannot_be_told_is_refused_by_name(tmp_path):
    path = hourly(tmp_path / "s.csv")
    assert problem(path, label=None).what == "label"
    assert "W m-2" in problem(path, units="feet").wanted
    with pytest.raises(InputProblem, match="write 'sw_wm2'"):
        day_series(path, "sw_wm", DAY, "flux", label="start")
    with pytest.raises(InputProblem, match="no units"):
        day_series(hourly(path, header="time,sw,t"), "sw", DAY, "flux", label="start")
    assert problem(tmp_path / "no.csv").what == "file"
    assert problem(tmp_path).what == "file"
    for text in ("", "one column\n1\n"):
        path.write_text(text)
        assert problem(path).what == "header"
    path.write_text("time,sw_wm2\n")
    assert "no measurement" in str(problem(path))


def netcdf(path, **attrs):
    time = {"units": "hours since 2031-03-09", **attrs.pop("time", {})}
    data = xr.Dataset(
        {
            "sw": (("time", "station"), np.arange(72.0)[:, None], {"units": "W m-2", **attrs}),
            "bounds": (("time", "two"), np.stack([np.arange(72.0), np.arange(1.0, 73)], axis=1)),
        },
        {"time": ("time", np.arange(72.0) + 1, time)},
    )
    data.to_netcdf(path, engine="h5netcdf")
    return path


def test_netcdf(tmp_path):
    bounded = day_series(netcdf(tmp_path / "a.nc", time={"bounds": "bounds"}), "sw", DAY, "flux")
    labelled = day_series(netcdf(tmp_path / "b.nc"), "sw", DAY, "flux", label="end")
    instants = day_series(netcdf(tmp_path / "c.nc", cell_methods="time: point"), "sw", DAY, "flux")
    np.testing.assert_array_equal(bounded.values, TRUE)
    np.testing.assert_array_equal(labelled.values, TRUE)
    np.testing.assert_allclose(instants.values, TRUE - 0.5)


def test_netcdf_refusals(tmp_path):
    with pytest.raises(InputProblem, match="calendar"):
        day_series(netcdf(tmp_path / "a.nc", time={"calendar": "noleap"}), "sw", DAY, "flux", label="end")
    with pytest.raises(InputProblem, match="write 'sw'"):
        day_series(netcdf(tmp_path / "b.nc"), "sv", DAY, "flux", label="end")
    with pytest.raises(InputProblem, match='label = "start"'):
        day_series(netcdf(tmp_path / "c.nc"), "sw", DAY, "flux")
    (tmp_path / "d.nc").write_bytes(b"\x89HDF\r\n\x1a\n" + bytes(99))
    with pytest.raises(InputProblem, match="cannot be opened"):
        day_series(tmp_path / "d.nc", "sw", DAY, "flux")
