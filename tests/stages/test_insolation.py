"""Do lattice, levels and nodes lose nothing of the sun, and does the grid's north point to where the projection says?"""

import datetime as dt
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from pyproj import Geod, Proj, Transformer

from firnlight.core.grid import Grid, Window
from firnlight.core.lattice import Lattice
from firnlight.core.settings import AtmosphereSettings, Insolation
from firnlight.io.ground import positions
from firnlight.physics import clearsky, sun
from firnlight.physics.clearsky_fast import day_light
from firnlight.physics.day_sky import ClearIndex, Cloud
from firnlight.stages import insolation
from firnlight.stages.insolation import (
    DIRECTIONS,
    LEVEL_STEP_M,
    ORDERS,
    SkyInputs,
    around_step,
    atmosphere,
    flat_insolation,
    grid_north_deg,
    lattice_step,
    levels_m,
    sky_lattice,
)

FILL = -32768
AIR = atmosphere(Insolation().atmosphere)
DAYS = [dt.date(2024, 3, 20), dt.date(2024, 6, 21), dt.date(2024, 12, 21)]
PLAIN = SkyInputs()
LATITUDES = [0.0, 46.5, 66.0, 80.0, -33.4]
# CRS, centre of the tile: west and east of the central meridian, both hemispheres, far north, across 180 degrees
TILES = [
    ("EPSG:32632", 8.0, 46.5),
    ("EPSG:32632", 11.5, 46.5),
    ("EPSG:32632", 6.5, 61.0),
    ("EPSG:32719", -70.5, -33.4),
    ("EPSG:32719", -67.0, -33.4),
    ("EPSG:32633", 18.5, 78.2),
    ("EPSG:32601", 179.9, 65.0),
    ("EPSG:32760", 178.5, -44.0),
]


def tile(crs, lon, lat, cells=3660):
    x, y = Transformer.from_crs("EPSG:4326", crs, always_xy=True).transform(lon, lat)
    return Grid(crs, x - cells * 15, y + cells * 15, 30.0, 30.0, cells, cells)


def nodes(grid, step=None):
    return positions(grid, step or lattice_step(30.0))


@pytest.mark.parametrize(("crs", "lon", "lat"), TILES)
def test_grid_north_is_the_meridian_convergence_of_the_projection(crs, lon, lat):
    """To 0.01 degrees. PROJ's convergence is the bearing of grid north: the next test has the sign from the ground."""
    grid = tile(crs, lon, lat)
    longitude, latitude = nodes(grid)
    got = grid_north_deg(latitude.values, longitude.values).reshape(np.array(longitude.values.shape) - 1)
    half, step = longitude.row_step // 2, longitude.row_step
    middle = (np.arange(got.shape[0]) * step + half + 0.5) * 30.0
    x, y = np.meshgrid(grid.left + middle, grid.top - middle)
    there = Proj(crs)(x, y, inverse=True)
    wanted = Proj(crs).get_factors(*there).meridian_convergence
    np.testing.assert_allclose(got, wanted, atol=0.01)
    assert np.abs(wanted).max() > 0.5


@pytest.mark.parametrize(("crs", "lon", "lat"), TILES)
def test_a_step_to_grid_north_goes_where_grid_north_points(crs, lon, lat):
    """The bearing of 1 km up a column of cells, clockwise from true north, on the ellipsoid."""
    grid = tile(crs, lon, lat, 256)
    longitude, latitude = nodes(grid, 256)
    x, y = grid.left + 128.5 * 30, grid.top - 128.5 * 30
    low, high = (Proj(crs)(x, y + up, inverse=True) for up in (-500.0, 500.0))
    bearing, _, length = Geod(ellps="WGS84").inv(*low, *high)
    assert length == pytest.approx(1000, rel=0.002)
    assert grid_north_deg(latitude.values, longitude.values)[0] == pytest.approx(bearing, abs=0.01)


def test_sign_of_grid_north_east_of_the_central_meridian():
    """In the northern hemisphere meridians lean to the central one, so east of it grid north lies east of true north."""
    for lon, sign in ((11.5, 1), (6.5, -1)):
        longitude, latitude = nodes(tile("EPSG:32632", lon, 46.5, 256), 256)
        assert np.sign(grid_north_deg(latitude.values, longitude.values)[0]) == sign


def test_the_sun_paths_stand_in_the_grids_directions():
    """In a tile turned by 2 degrees the path's vector is the sun's bearing less that of grid north."""
    crs, lon, lat = "EPSG:32632", 11.5, 46.5
    grid, day = tile(crs, lon, lat, 256), DAYS[1]
    longitude, latitude = nodes(grid, 256)
    paths = sky_lattice(day, (), longitude, latitude, Insolation(), heights_m=(500.0, 1500.0)).paths
    centre = Proj(crs)(grid.left + 128.5 * 30, grid.top - 128.5 * 30, inverse=True)
    north = Proj(crs).get_factors(*centre).meridian_convergence
    assert north > 1.5
    start = dt.datetime(day.year, day.month, day.day, tzinfo=dt.UTC).timestamp()
    zenith, azimuth, _ = sun.position(start + 1800.0 * np.arange(49), centre[1], centre[0])
    z, a = np.radians(zenith), np.radians(azimuth - north)
    expected = np.stack([np.sin(z) * np.sin(a), np.sin(z) * np.cos(a), np.cos(z)], axis=1)
    up = np.nonzero(zenith < 90)[0]
    found = paths.sun[0, 0]
    for n in up:
        assert np.abs(found - expected[n]).max(axis=1).min() < 3e-4  # 0.01 degrees
    assert len(found) == len(up) + 2  # and a node of night on both sides
    assert not paths.follows[0]
    assert paths.follows[1:].all()


def test_horizon_directions_stand_beside_the_sun():
    longitude, latitude = nodes(tile("EPSG:32632", 8.0, 46.5))
    sky = sky_lattice(DAYS[2], (), longitude, latitude, Insolation(), heights_m=(500.0, 3500.0))
    paths, width = sky.paths, 360 / DIRECTIONS
    bearing = np.degrees(np.arctan2(paths.sun[..., 0], paths.sun[..., 1])) % 360
    near, far = (np.array(sky.directions)[b] * width for b in (paths.bin0, paths.bin1))
    np.testing.assert_allclose((far - near) % 360, width)
    np.testing.assert_allclose((near + paths.bin_share * width - bearing + 180) % 360, 180, atol=1e-3)
    np.testing.assert_allclose(np.sin(np.radians(paths.sun_code * 0.36)), paths.sun[..., 2], atol=1e-5)
    assert len(sky.directions) < DIRECTIONS // 2  # a winter sun needs the south alone
    polar = sky_lattice(DAYS[2], (), *nodes(tile("EPSG:32633", 16.0, 78.0)), Insolation(), heights_m=(0.0, 500.0))
    assert polar.paths.sun.shape[2] == 0
    assert polar.directions


def exact(lat, lon, heights, day, albedo, orders=24):
    moments = clearsky.day_moments(day, [lat], [lon], heights, AIR, orders=orders)
    return clearsky.day_mean_insolation(moments[0], np.full(len(heights), albedo))


@pytest.mark.parametrize("day", DAYS, ids=str)
@pytest.mark.parametrize("lat", LATITUDES)
def test_levels_and_orders_lose_nothing(lat, day):
    """Straight lines between levels 250 m apart, and four moments with a geometric tail: 0.002 W m-2 each."""
    middle = levels_m()[:-1] + LEVEL_STEP_M / 2
    for albedo in (0.0, 0.6, 1.0):
        at_levels = exact(lat, 8.0, levels_m(), day, albedo)
        assert np.abs((at_levels[1:] + at_levels[:-1]) / 2 - exact(lat, 8.0, middle, day, albedo)).max() < 0.002
        few = clearsky.day_mean_insolation(day_light(day, [lat], [8.0], levels_m(), AIR, ORDERS)[0, :, :-1], albedo)
        assert np.abs(few - at_levels).max() < 0.002


@pytest.mark.parametrize("day", DAYS, ids=str)
@pytest.mark.parametrize("place", [TILES[0], TILES[5], TILES[6]], ids=str)
def test_nodes_twelve_kilometres_apart_lose_nothing(place, day):
    """Cells of a large tile against the formulas at the cells themselves, within a stored step."""
    grid = tile(*place)
    sky = sky_lattice(day, (), *nodes(grid), Insolation())
    rng = np.random.default_rng(1)
    inverse = Proj(grid.crs)
    for row, col in rng.integers(0, grid.rows, (6, 2)):
        height, albedo = float(rng.uniform(0, 4000)), int(rng.integers(0, 10001))
        got = flat_insolation(
            np.array([[albedo]], np.int16), np.full((1, 1), height, np.float32), Window(int(row), int(col), 1, 1), sky
        )
        lon, lat = inverse(grid.left + (col + 0.5) * 30, grid.top - (row + 0.5) * 30, inverse=True)
        assert got.item() / 10 == pytest.approx(exact(lat, lon, [height], day, albedo / 10000)[0], abs=0.1)


@given(st.floats(0.1, 2000))
def test_steps_of_lattice_and_surroundings(cell_m):
    step = lattice_step(cell_m)
    assert step & (step - 1) == 0
    assert 1 <= step <= 4096
    assert step == 1 or step * cell_m <= 12_000
    assert step == 4096 or step * 2 * cell_m > 12_000
    assert around_step(cell_m) >= 1
    assert cell_m > 500 or around_step(cell_m) * cell_m == pytest.approx(500, abs=cell_m / 2 + 1e-9)


def small(day=DAYS[1], inputs=PLAIN, heights=(1000.0, 3000.0), setting=None, **more):
    lats, lons = np.meshgrid([46.6, 46.5, 46.4], [8.0, 8.1, 8.2, 8.3], indexing="ij")
    return sky_lattice(
        day, (), Lattice(32, 32, lons), Lattice(32, 32, lats), setting or Insolation(), inputs, heights, **more
    )


def test_a_cloudless_sky_told_as_weather_is_the_plain_one():
    plain = small()
    count = plain.moments.values.shape[0] * plain.moments.values.shape[1]
    for inputs in (
        SkyInputs(cloud=Cloud(np.array([0.0, 24.0]), np.zeros((2, count)))),
        SkyInputs(air=tuple(np.full(count, v) for v in AIR.numbers())),
    ):
        assert not inputs.plain
        told = small(inputs=inputs)
        np.testing.assert_allclose(told.moments.values, plain.moments.values, rtol=1e-9)
        np.testing.assert_allclose(told.paths.beam, plain.paths.beam, rtol=1e-4, atol=1e-3)


def test_weather_at_the_centres_is_the_mean_of_four_nodes():
    values = np.arange(12.0).reshape(3, 4) ** 2
    two = np.stack([values.ravel(), 2 * values.ravel()])
    inputs = SkyInputs(
        air=(values.ravel(),) * 5,
        cloud=Cloud(np.array([0.0, 24.0]), two),
        supplied=ClearIndex(np.array([[0, 12], [12, 24]]), two),
    )
    centre = inputs.at_centres((3, 4))
    wanted = [np.mean([values[i + a, j + b] for a in (0, 1) for b in (0, 1)]) for i in range(2) for j in range(3)]
    np.testing.assert_allclose(centre.air[3], wanted)
    np.testing.assert_allclose(centre.cloud.fraction, [wanted, np.multiply(wanted, 2)])
    np.testing.assert_allclose(centre.supplied.index, [wanted, np.multiply(wanted, 2)])
    gap = two.copy()
    gap[0, 0] = np.nan
    hole = replace(inputs, cloud=Cloud(np.array([0.0, 24.0]), gap)).at_centres((3, 4))
    assert np.isnan(hole.cloud.fraction).sum() == 1


def test_flat_ground_needs_no_paths_and_level_tiles_have_some():
    assert small(heights=None).paths is None
    level = small(heights=(1500.0, 1500.0)).paths
    assert np.isfinite(level.beam).all()
    assert level.height_span_m > 0


def test_the_suns_height_at_the_scenes_is_that_of_the_nodes():
    lats, lons = np.meshgrid([46.6, 46.4], [8.0, 8.2], indexing="ij")
    times = [dt.datetime(2024, 6, 21, hour, tzinfo=dt.UTC).timestamp() for hour in (10, 15)]
    sky = sky_lattice(DAYS[1], tuple(times), Lattice(8, 8, lons), Lattice(8, 8, lats), Insolation())
    for zenith, time in zip(sky.zenith_deg, times, strict=True):
        np.testing.assert_array_equal(zenith, sun.position(time, lats, lons)[0])


def test_settings_of_the_air_are_taken():
    hazy = Insolation(atmosphere=AtmosphereSettings(aerosol_500nm=0.4, water_vapour_cm=2.5, ozone_cm=0.35))
    assert atmosphere(hazy.atmosphere) == clearsky.Atmosphere.of(0.4, 2.5, 0.35)
    own = atmosphere(AtmosphereSettings(aerosol_500nm=0.4, aerosol_380nm=0.5))
    assert own.aerosol_380nm == 0.5
    assert (small(setting=hazy).moments.values[..., 0] < small().moments.values[..., 0]).all()


def test_slope_parallel_is_less_by_the_cosine_and_keeps_gaps():
    flux = np.array([[1000, 1000, 1000, 0, FILL]], np.int16)
    slope = np.array([[0, 3000, 6000, 6000, 3000]], np.int16)
    assert insolation.slope_parallel(flux, slope).tolist() == [[1000, 866, 500, 0, FILL]]
