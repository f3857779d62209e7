"""Does a supplied field give the same day in whatever form it is written, with all its energy and its gaps?"""

import datetime as dt
from pathlib import Path

import numpy as np
import pytest
import rasterio
import xarray as xr

from firnlight.core.errors import InputProblem
from firnlight.io import grid_time, grids
from firnlight.physics.day_steps import overlap_mean
from grid_maker import DAY, FIRST, HOURLY, LAT, LON, STARTS, TRUE, read, write, write_tif

SAMPLE = Path(__file__).parents[2] / "sample_tiles"
EACH = np.stack([STARTS, STARTS + 1], axis=1)
HOUR_EDGES = np.stack([np.arange(24.0), np.arange(1.0, 25)], axis=1)


def ended(per_day):
    """Totals since the last of `per_day` starts of each day, at the ends of the hours. [J m-2]"""
    parts = HOURLY.reshape(3 * per_day, 24 // per_day, *HOURLY.shape[1:])
    return 3600 * parts.cumsum(axis=1).reshape(HOURLY.shape)


def running_bounds(per_day):
    return np.stack([STARTS // (24 // per_day) * (24 // per_day), STARTS + 1], axis=1)


REFERENCE = (
    "time",
    running_bounds(2)[:, 0],
    {"standard_name": "forecast_reference_time", "units": "hours since 2031-03-09"},
)
LEAD = ("time", 60 * (STARTS % 12 + 1), {"standard_name": "forecast_period", "units": "minutes"})
SHUFFLE = np.random.default_rng(1).permutation(72)
FORMS = {
    "bounds": ({"bounds": EACH}, {}),
    "bounds and labels in the middle": ({"bounds": EACH, "hours": STARTS + 0.5}, {}),
    "label at the start": ({}, {"label": "start"}),
    "label in the middle": ({"hours": STARTS + 0.5}, {"label": "middle"}),
    "label at the end": ({"hours": STARTS + 1}, {"label": "end"}),
    "a label that overrules wrong bounds": ({"bounds": EACH + 3}, {"label": "start"}),
    "amounts with bounds": ({"values": HOURLY * 3600, "units": "J m**-2", "bounds": EACH}, {}),
    "amounts of each interval": (
        {"values": HOURLY * 0.0036, "units": "MJ/m2", "hours": STARTS + 1},
        {"label": "end", "accumulated": "interval"},
    ),
    "watt hours": ({"values": HOURLY, "units": "Wh m-2"}, {"label": "start", "accumulated": "interval"}),
    "a rate per day": ({"values": HOURLY * 0.0864, "units": "MJ m-2 day-1"}, {"label": "start"}),
    "amounts since 00 UTC": (
        {"values": ended(1), "units": "J m-2", "hours": STARTS + 1},
        {"accumulated": "since start", "starts_hours": [0]},
    ),
    "amounts since 00 and 12 UTC": (
        {"values": ended(2), "units": "J m-2", "hours": STARTS + 1},
        {"accumulated": "since start", "starts_hours": [0, 12]},
    ),
    "amounts since the forecast's time": (
        {"values": ended(2), "units": "J m-2", "hours": STARTS + 1, "reference": REFERENCE},
        {"accumulated": "since start"},
    ),
    "amounts over the forecast's lead": (
        {"values": ended(2), "units": "J m-2", "hours": STARTS + 1, "lead": LEAD},
        {"accumulated": "since start"},
    ),
    "amounts since one forecast's time": (
        {
            "values": HOURLY.cumsum(axis=0) * 3.6,
            "units": "kJ m-2",
            "hours": STARTS + 1,
            "reference": ((), 0.0, REFERENCE[2]),
        },
        {"accumulated": "since start"},
    ),
    "running amounts with bounds": ({"values": ended(4), "units": "J m-2", "bounds": running_bounds(4)}, {}),
    "running means with bounds": (
        {"values": ended(1) / 3600 / (STARTS % 24 + 1)[:, None, None], "bounds": running_bounds(1)},
        {},
    ),
    "seconds": ({"hours": STARTS * 3600, "since": "seconds since 2031-03-09"}, {"label": "start"}),
    "days from long ago": (
        {"hours": STARTS / 24 + (FIRST - dt.date(1900, 1, 1)).days, "since": "days since 1900-01-01 00:00:0.0"},
        {"label": "start"},
    ),
    "an epoch in a zone": ({"since": "hours since 2031-03-09T05:30:00 +05:30"}, {"label": "start"}),
    "an epoch west of Greenwich": ({"since": "hours since 2031-03-08 21:00 -3"}, {"label": "start"}),
    "proleptic": (
        {
            "hours": STARTS + 24 * (FIRST - dt.date(1, 1, 1)).days,
            "since": "hours since 1-1-1",
            "calendar": "proleptic_gregorian",
        },
        {"label": "start"},
    ),
    # the mixed calendar's year 1 is Julian: its first day lies two days before the proleptic one's
    "gregorian": (
        {"hours": STARTS + 24 * (FIRST - dt.date(1, 1, 1)).days + 48, "since": "hours since 1-1-1", "calendar": "gregorian"},
        {"label": "start"},
    ),
    "noleap": (
        {"hours": STARTS + 24 * (365 * 31 + 31 + 28 + 8), "since": "hours since 2000-01-01", "calendar": "noleap"},
        {"label": "start"},
    ),
    "360_day": (
        {"hours": STARTS + 24 * (360 * 31 + 68), "since": "hours since 2000-01-01", "calendar": "360_day"},
        {"label": "start"},
    ),
    "all_leap": (
        {"hours": STARTS + 24 * (366 * 31 + 68), "since": "hours since 2000-01-01", "calendar": "all_leap"},
        {"label": "start"},
    ),
    "from north to south": ({"values": HOURLY[:, ::-1], "lat": LAT[::-1], "bounds": EACH}, {}),
    "longitudes 0 to 360": ({"lon": LON + 360, "bounds": EACH}, {}),
    "from east to west": ({"values": HOURLY[:, :, ::-1], "lon": LON[::-1] + 360, "bounds": EACH}, {}),
    "shuffled times": ({"values": HOURLY[SHUFFLE], "hours": STARTS[SHUFFLE]}, {"label": "start"}),
    "shuffled running amounts": (
        {"values": ended(1)[SHUFFLE], "units": "J m-2", "bounds": running_bounds(1)[SHUFFLE]},
        {},
    ),
    "packed": (
        {
            "values": np.round(HOURLY * 10).astype("i2"),
            "attrs": {"scale_factor": 0.1, "add_offset": 0.0},
            "encoding": {"_FillValue": -32767},
            "bounds": EACH,
        },
        {},
    ),
    "packed with an offset": (
        {
            "values": np.round((HOURLY - 400) * 10).astype("i4"),
            "attrs": {"scale_factor": 0.1, "add_offset": 400.0},
            "bounds": EACH,
        },
        {},
    ),
}


@pytest.mark.parametrize("form", FORMS)
def test_every_form_gives_the_same_day(tmp_path, form):
    written, settings = FORMS[form]
    field = read(write(tmp_path / "sw.nc", **written), **settings)
    np.testing.assert_allclose(field.edges_h, HOUR_EDGES, atol=1e-9)
    # running totals of a day reach 1e8 J m-2, of which an hour's is a difference in doubles
    np.testing.assert_allclose(field.values, TRUE, rtol=1e-9, atol=1e-8)
    np.testing.assert_allclose(field.x, LON)
    np.testing.assert_allclose(field.y, LAT)
    assert (field.name, field.units) == ("sw", "W m-2")


def test_other_axis_orders_and_a_level_of_one(tmp_path):
    data = xr.load_dataset(write(tmp_path / "a.nc", bounds=EACH), engine="h5netcdf", decode_cf=False)
    data["sw"] = data["sw"].expand_dims(height=[2.0]).transpose("lon", "height", "lat", "time")
    data.to_netcdf(tmp_path / "b.nc", engine="h5netcdf")
    assert (read(tmp_path / "b.nc").values == TRUE).all()


@pytest.mark.parametrize("top_down", [True, False])
def test_raster_with_the_day_in_its_name(tmp_path, top_down):
    field = read(write_tif(tmp_path / "sw_20310310_v2.tif", TRUE, top_down))
    np.testing.assert_array_equal(field.values, TRUE)
    np.testing.assert_allclose(field.edges_h, HOUR_EDGES)
    np.testing.assert_allclose(field.y, LAT)
    with pytest.raises(grid_time.DayMissing):
        read(tmp_path / "sw_20310310_v2.tif", dt.date(2031, 3, 11))


@pytest.mark.parametrize("how", ["description", "tag"])
def test_raster_with_band_times(tmp_path, how):
    path = write_tif(tmp_path / "sw.tif", HOURLY)
    with rasterio.open(path, "r+") as out:
        for band in range(1, 73):
            time = (dt.datetime(2031, 3, 9) + dt.timedelta(hours=band - 1)).isoformat()
            if how == "tag":
                out.update_tags(band, TIME=time + "Z")
            else:
                out.set_band_description(band, time)
    np.testing.assert_array_equal(read(path, label="start").values, TRUE)
    with pytest.raises(InputProblem, match="label"):
        read(path)


def test_raster_fill_scale_and_lack_of_times(tmp_path):
    path = write_tif(tmp_path / "sw_2031-03-10.tif", np.where(TRUE > 800, -1.0, TRUE))
    with rasterio.open(path, "r+") as out:
        out.scales = [0.5] * 24
        out.offsets = [3.0] * 24
    np.testing.assert_array_equal(read(path).values, np.where(TRUE > 800, np.nan, TRUE * 0.5 + 3))
    with pytest.raises(InputProblem, match="no time axis"):
        read(write_tif(tmp_path / "sw.tif", TRUE))


# energy


@pytest.mark.parametrize("step", [1, 3, 6, 24])
@pytest.mark.parametrize("kind", ["means", "amounts"])
def test_coarser_steps_keep_the_days_energy(tmp_path, step, kind):
    coarse = HOURLY.reshape(72 // step, step, *HOURLY.shape[1:]).mean(axis=1)
    units = {"means": "W m-2", "amounts": "J m-2"}[kind]
    values = coarse if kind == "means" else coarse * 3600 * step
    starts = STARTS[::step]
    field = read(write(tmp_path / "sw.nc", values, starts, bounds=np.stack([starts, starts + step], axis=1), units=units))
    assert field.values.shape[0] == 24 // step
    np.testing.assert_allclose(overlap_mean(field.edges_h, field.values, [0, 24])[0], TRUE.mean(axis=0), rtol=1e-12)


def test_steps_over_the_days_edge_share_their_energy(tmp_path):
    """Three-hourly means around 0, 3, 6 ...: the first of the day is cut in half, and its halves are on both days."""
    times = STARTS[::3]
    values = HOURLY[:24]
    path = write(tmp_path / "sw.nc", values, times)
    days = [read(path, DAY + dt.timedelta(days=n), label="middle") for n in (0, 1)]
    np.testing.assert_allclose(days[0].edges_h[[0, 1, -1]], [[0, 1.5], [1.5, 4.5], [22.5, 24]])
    np.testing.assert_array_equal(days[0].values[-1], days[1].values[0])
    np.testing.assert_array_equal(days[0].values, values[8:17])


def test_instants_are_joined_by_straight_lines(tmp_path):
    course = np.repeat(np.repeat((10.0 * STARTS[::3])[:, None, None], LAT.size, 1), LON.size, 2)
    path = write(tmp_path / "t.nc", course, STARTS[::3] + 1, attrs={"cell_methods": "time: point"})
    field = read(path)  # labels at -2, 1, 4 ... h: 10 per hour, 0 an hour after the file's start
    np.testing.assert_allclose(field.edges_h[[0, 1, -1]], [[0, 1], [1, 4], [22, 24]])
    middle = field.edges_h.mean(axis=1)
    np.testing.assert_allclose(field.values[:, 0, 0], 10 * (middle + 24 - 1))


def test_a_gap_between_instants_is_held_half_a_step_on_each_side(tmp_path):
    keep = [0, 3, 6, 9, 24, 27, 36, 39, 42, 45, 48]  # 30 and 33 lack: 6 and 9 h of the day
    path = write(tmp_path / "t.nc", HOURLY[keep], np.array(keep, float), attrs={"cell_methods": "time: point"})
    field = read(path)
    known = np.isfinite(field.values[:, 0, 0])
    np.testing.assert_allclose(field.edges_h[~known][[0, -1], [0, 1]], [4.5, 10.5])
    np.testing.assert_array_equal(field.values[1], HOURLY[27])


# gaps


def test_missing_hours_and_cells_stay_gaps(tmp_path):
    values = HOURLY.copy()
    values[30, 1, 1] = np.nan
    keep = np.delete(np.arange(72), [24, 36, 37])
    field = read(write(tmp_path / "sw.nc", values[keep], STARTS[keep]), label="start")
    expected = values[24:48].copy()
    expected[[0, 12, 13]] = np.nan
    np.testing.assert_allclose(field.edges_h, HOUR_EDGES)
    np.testing.assert_array_equal(field.values, expected)


def test_a_file_that_ends_within_the_day(tmp_path):
    field = read(write(tmp_path / "sw.nc", HOURLY[:40], STARTS[:40], bounds=EACH[:40]))
    assert np.isfinite(field.values[:16]).all()
    assert np.isnan(field.values[16:]).all()
    assert field.edges_h[-1, 1] == 24


def test_a_lacking_running_total_leaves_a_longer_mean(tmp_path):
    keep = np.delete(np.arange(72), 30)
    field = read(
        write(tmp_path / "sw.nc", ended(1)[keep], units="J m-2", hours=STARTS[keep], bounds=running_bounds(1)[keep])
    )
    assert field.edges_h[6].tolist() == [6, 8]
    np.testing.assert_allclose(field.values[6], TRUE[6:8].mean(axis=0), rtol=1e-9)


@pytest.mark.parametrize(
    "spoil",
    [
        {"attrs": {"missing_value": np.float64(7.0)}},
        {"attrs": {"valid_max": np.float64(6.0)}},
        {"attrs": {"valid_range": np.array([0.0, 6.5])}},
        {"encoding": {"_FillValue": 7.0}},
    ],
)
def test_what_the_file_calls_missing_is_nan(tmp_path, spoil):
    values = np.full_like(HOURLY, 5.0)
    values[25, 0, 1] = 7.0
    field = read(write(tmp_path / "sw.nc", values, bounds=EACH, **spoil))
    assert np.argwhere(np.isnan(field.values)).tolist() == [[1, 0, 1]]


@pytest.mark.parametrize(("calendar", "day"), [("noleap", dt.date(2032, 2, 29)), ("360_day", dt.date(2031, 3, 31))])
def test_a_day_that_the_calendar_lacks_is_told_as_missing(tmp_path, calendar, day):
    start = grid_time.day_number(day.year, day.month, 28, calendar) - grid_time.day_number(2000, 1, 1, calendar)
    path = write(tmp_path / "sw.nc", hours=STARTS + 24 * start, since="hours since 2000-01-01", calendar=calendar)
    with pytest.raises(grid_time.DayMissing, match=calendar):
        read(path, day, label="start")
    # the days around it are there, and are not shifted
    np.testing.assert_array_equal(read(path, day.replace(day=28), label="start").values, HOURLY[:24])
    after = day + dt.timedelta(days=1)
    at = grid_time.day_number(after.year, after.month, 1, calendar) - grid_time.day_number(day.year, day.month, 28, calendar)
    if at < 3:
        np.testing.assert_array_equal(read(path, after, label="start").values, HOURLY[24 * at : 24 * at + 24])


def test_no_such_day_names_what_there_is(tmp_path):
    path = write(tmp_path / "sw.nc", bounds=EACH)
    with pytest.raises(grid_time.DayMissing, match="2031-03-09 00:00 to 2031-03-11 23:00"):
        read(path, dt.date(2031, 3, 12))


# the sample


def test_the_samples_weather_and_insolation_are_readable():
    sun = grids.read_day(SAMPLE / "insolation.nc", None, DAY, "flux", around=(-36.1, 46.4, -35.9, 46.6))
    assert sun.values.shape[0] == 24
    assert np.isfinite(sun.values).all()
    with xr.open_dataset(SAMPLE / "insolation.nc", engine="h5netcdf") as data:
        name = "surface_downwelling_shortwave_flux_in_air"
        np.testing.assert_array_equal(sun.values, data[name].sel(time=str(DAY)).values)
    for name in ("air_temperature", "vapour_pressure", "cloud_fraction"):
        field = grids.read_day(SAMPLE / "weather.nc", name, DAY, name)
        assert field.values.shape[0] == 8
        assert np.isfinite(grids.field_at(field, -36.005863, 46.506747)).all()
