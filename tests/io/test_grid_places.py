"""Is a supplied field met at the right places, on any grid, and is a climatology met on the right day?"""

import datetime as dt
import pickle
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st
from pyproj import CRS, Transformer

from firnlight.core.errors import InputProblem
from firnlight.io import grids
from grid_maker import DAY, HOURLY, LAT, LON, STARTS, TRUE, climatology, read, write, write_tif

SAMPLE = Path(__file__).parents[2] / "sample_tiles"
EACH = np.stack([STARTS, STARTS + 1], axis=1)


def problem(*args, **more):
    with pytest.raises(InputProblem) as caught:
        read(*args, **more)
    assert pickle.loads(pickle.dumps(caught.value)).fix == caught.value.fix
    return caught.value


# places


def utm_field(tmp_path, unit, mapping):
    """A plane in x and y on a UTM grid, y falling."""
    crs = CRS.from_epsg(32624)
    scale = {"m": 1.0, "km": 1000.0}[unit]
    x, y = 700_000 + 5000.0 * np.arange(9), 5_200_000 - 5000.0 * np.arange(7)
    values = (1e-3 * (x - 7e5)[None, :] + 2e-3 * (y - 5.1e6)[:, None])[None].repeat(24, axis=0)
    data = xr.Dataset(
        {"sw": (("time", "y", "x"), values, {"units": "W m-2", **({"grid_mapping": "grid: x y"} if mapping else {})})},
        {
            "time": ("time", np.arange(24.0), {"units": f"hours since {DAY}"}),
            "y": ("y", y / scale, {"standard_name": "projection_y_coordinate", "units": unit}),
            "x": ("x", x / scale, {"standard_name": "projection_x_coordinate", "units": unit}),
        },
    )
    if mapping:
        about = crs.to_cf()
        data["grid"] = ((), 0, {k: v for k, v in about.items() if (k == "crs_wkt") == (mapping == "wkt")})
    data.to_netcdf(tmp_path / "utm.nc", engine="h5netcdf")
    return tmp_path / "utm.nc", Transformer.from_crs(crs, "EPSG:4326", always_xy=True)


@pytest.mark.parametrize("unit", ["m", "km"])
@pytest.mark.parametrize("mapping", ["wkt", "parameters"])
def test_a_projected_grid_is_met_by_longitude_and_latitude(tmp_path, unit, mapping):
    path, back = utm_field(tmp_path, unit, mapping)
    for more in ({}, {"around": (-36.2, 46.85, -36.1, 46.9)}):
        field = read(path, label="start", **more)
        x, y = 717_300.0, 5_191_800.0
        lon, lat = back.transform(x, y)
        expected = 1e-3 * (x - 7e5) + 2e-3 * (y - 5.1e6)
        # the CRS from parameters may differ from UTM's by rounding of its ellipsoid
        np.testing.assert_allclose(grids.field_at(field, lon, lat), expected, atol=1e-6)
        col, row = (grids.cell_index(field, lon, lat) % field.x.size, grids.cell_index(field, lon, lat) // field.x.size)
        assert (field.x[col], field.y[row]) == pytest.approx((715_000, 5_190_000))


def test_a_projected_grid_without_crs_needs_one(tmp_path):
    path, _ = utm_field(tmp_path, "m", None)
    assert problem(path, label="start").what == "CRS"
    assert CRS.from_wkt(read(path, label="start", crs="EPSG:32624").crs_wkt).to_epsg() == 32624


def one(x, y, values, crs="EPSG:4326"):
    return grids.DayField(
        np.asarray(values, float)[None], np.array([[0.0, 24.0]]), np.asarray(x, float), np.asarray(y, float),
        CRS.from_user_input(crs).to_wkt(), "f", "1",
    )  # fmt: skip


@given(st.floats(-36.2, -35.8), st.floats(46.4, 46.6), st.integers(-2, 2))
def test_a_plane_is_met_exactly_on_any_turn_of_longitude(lon, lat, turns):
    plane = 3 * (LON[None, :] + 36) - 2 * (LAT[:, None] - 46)
    got = one(LON, LAT, plane).at(lon + 360 * turns, lat)
    np.testing.assert_allclose(got, 3 * (lon + 36) - 2 * (lat - 46), atol=1e-10)


def test_beyond_the_last_centres_the_nearest_within_half_a_cell():
    field = one([0, 1, 2], [10, 11], [[1, 2, 3], [4, 5, 6]])
    assert field.at([-0.5, 2.5, 1, 1], [10, 11, 9.5, 11.5]).tolist() == [[1, 6, 2, 5]]
    assert np.isnan(field.at([-0.51, 2.51, 1, 1, np.nan, 1], [10, 11, 9.49, 11.51, 10, np.nan])).all()
    assert grids.cell_index(field, [-0.5, 0.49, 0.5, 2.5, -0.51, np.nan], [9.5, 10.5, 11.5, 11.5, 10, 10]).tolist() == [
        0, 3, 4, 5, -1, -1,
    ]  # fmt: skip


def test_an_empty_cell_empties_only_what_it_has_weight_in():
    field = one([0, 1, 2], [10, 11], [[1, np.nan, 3], [4, 5, 6]])
    np.testing.assert_array_equal(
        field.at([0, 0.5, 1, 1, 2, 0.5], [10, 10, 10, 11, 10.5, 11]), [[1, np.nan, np.nan, 5, 4.5, 4.5]]
    )


@pytest.mark.parametrize("first", [0.0, -180.0, 5.0])
@pytest.mark.parametrize("closed", [False, True])
def test_a_grid_around_the_globe_has_no_seam(tmp_path, first, closed):
    lon = first + np.arange(0, 361 if closed else 360, 30.0)
    lat = np.arange(-75, 76, 30.0)
    values = np.cos(np.radians(lon))[None, None, :] * np.ones((24, lat.size, 1)) + 500
    path = write(tmp_path / "sw.nc", values, STARTS[24:48], lon=lon, lat=lat)
    field = read(path, label="start")
    assert field.x.size == 12
    at = first + np.array([-15.0, 345.0, 360.0, 15.0, -720.0])
    beside = first + np.array([[0, -30.0], [0, -30], [0, 0], [0, 30], [0, 0]])
    expected = np.cos(np.radians(beside)).mean(axis=1) + 500
    np.testing.assert_allclose(grids.field_at(field, at, 0.0)[0], expected)
    cells = grids.cell_index(field, first + np.array([-14.0, 14.0, 346.0, 344.0]), -75.0)
    assert len(set(cells[:3].tolist())) == 1
    assert cells[3] != cells[0]
    # a box over the seam reads its own columns alone and gives the same
    part = read(path, label="start", around=(first - 20, -10, first + 20, 10))
    assert part.x.size < 12
    np.testing.assert_allclose(grids.field_at(part, at[:2], 0.0)[0], expected[:2])


def test_on_a_globe_every_longitude_has_a_cell_in_spite_of_rounding():
    lon = np.arange(3600) * 0.1 - 179.95
    field = one(lon, [0.0, 1.0], np.zeros((2, 3600)))
    for turn in (-720, -360, 0, 360, 720):
        borders = turn + np.arange(-1800, 1801) * 0.1
        at = np.concatenate([borders, np.nextafter(borders, -999), np.nextafter(borders, 999)])
        cells = grids.cell_index(field, at, 0.2)
        assert cells.min() >= 0
        away = np.abs(np.mod(at - lon[cells % 3600] + 180, 360) - 180)
        assert away.max() < 0.05 + 1e-9
        assert np.isfinite(grids.field_at(field, at, 0.2)).all()


def test_a_region_over_the_date_line(tmp_path):
    lon = np.array([178.0, 179, -180, -179])
    values = np.arange(4.0) + np.zeros((24, 3, 1))
    field = read(write(tmp_path / "sw.nc", values, STARTS[24:48], lon=lon), label="start")
    assert grids.field_at(field, [178.5, -179.5, 180.5, 179.5], 46.5)[0].tolist() == [0.5, 2.5, 2.5, 1.5]


def test_an_area_reads_no_more_than_it_needs(tmp_path):
    lon, lat = np.arange(-60, 0, 0.5), np.arange(60, 30, -0.5)
    values = (lon[None, None, :] + lat[None, :, None] + 100) * np.ones((24, 1, 1))
    path = write(tmp_path / "sw.nc", values, STARTS[24:48], lon=lon, lat=lat)
    field = read(path, label="start", around=(-36.3, 46.1, -35.9, 46.6))
    assert field.values.size <= 24 * 7 * 7
    np.testing.assert_allclose(grids.field_at(field, -36.3, 46.6), 110.3)
    whole = read(path, label="start")
    np.testing.assert_allclose(grids.field_at(whole, -36.1, 46.2), grids.field_at(field, -36.1, 46.2))


# without time


@pytest.mark.parametrize(
    ("day", "expected"),
    [
        (dt.date(2031, 1, 16), 1.0),  # noon of the 16th is the middle of 31 days
        (dt.date(2031, 4, 15), 4 - 0.5 / 30.5),  # half a day before the middle of April, 30.5 after that of March
        (dt.date(2031, 1, 1), 1 + 11 * 15 / 31),
        (dt.date(2031, 12, 31), 12 - 11 * 15 / 31),
        (dt.date(2032, 2, 29), 2 + 14 / 30),
        (dt.date(2032, 12, 31), 12 - 11 * 15 / 31),
    ],
)
def test_months_are_mixed_by_their_middles(tmp_path, day, expected):
    field = grids.read_static_field(climatology(tmp_path / "a.nc", np.arange(1, 13)), "aod", day, "aerosol_optical_depth")
    np.testing.assert_allclose(field.values, expected / 100)
    assert field.values.shape == (1, 3, 5)
    assert field.edges_h.tolist() == [[0, 24]]


def test_months_in_another_order(tmp_path):
    order = np.array([7, 8, 9, 10, 11, 12, 1, 2, 3, 4, 5, 6])
    path = climatology(tmp_path / "a.nc", order, month=("month", order))
    days = np.cumsum([0, 31, 31, 30, 31, 30, 31, 31, 28, 31, 30, 31]) + 15.0
    timed = climatology(tmp_path / "b.nc", order, month=("month", days, {"units": "days since 2030-07-01"}))
    for one_path in (path, timed):
        field = grids.read_static_field(one_path, "aod", dt.date(2031, 1, 16), "aerosol_optical_depth")
        np.testing.assert_allclose(field.values, 0.01)


def test_a_field_without_time(tmp_path):
    field = grids.read_static_field(SAMPLE / "weather.nc", "surface_altitude", DAY, "surface_altitude")
    assert field.values.shape == (1, field.y.size, field.x.size)
    tif = write_tif(tmp_path / "aod.tif", TRUE[:1] / 900)
    static = grids.read_static_field(tif, None, DAY, "aerosol_optical_depth", units="1")
    np.testing.assert_array_equal(static.values, TRUE[:1] / 900)


def test_other_numbers_of_times_are_refused(tmp_path):
    with pytest.raises(InputProblem, match="twelve months"):
        grids.read_static_field(write(tmp_path / "a.nc"), "sw", DAY, "flux")
    with pytest.raises(InputProblem, match="twelve months"):
        grids.read_static_field(write_tif(tmp_path / "a.tif", TRUE[:3]), None, DAY, "flux")
    with pytest.raises(InputProblem, match="twelve months"):
        grids.read_static_field(write(tmp_path / "b.nc", HOURLY[:12], STARTS[:12]), "sw", DAY, "flux")
