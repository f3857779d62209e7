"""Is a day's light on slopes that of its own integral, in both twins, and never a number where nothing is known?"""

import datetime as dt

import numpy as np
import pytest

from firnlight.core.grid import Grid, Window
from firnlight.core.lattice import Lattice
from firnlight.core.layers import layer
from firnlight.core.settings import Insolation
from firnlight.io.ground import positions
from firnlight.physics import light, sun
from firnlight.physics.clearsky import bird, day_mean_insolation, pressure_pa
from firnlight.physics.day_sky import DaySky, Places
from firnlight.physics.light_fast import flat_block
from firnlight.stages import insolation as stage

FILL = -32768
GRID = Grid("EPSG:32624", 540_000.0, 5_150_000.0, 30.0, 30.0, 70, 90)
MARCH, JUNE, DECEMBER = dt.date(2031, 3, 10), dt.date(2031, 6, 20), dt.date(2031, 12, 20)
SLOPES, ASPECTS = np.array([0, 10, 30, 45, 60, 75]), np.arange(0, 360, 45)


def sky_of(day, grid=GRID, step=32):
    return stage.sky_lattice(day, (0.0,), *positions(grid, step), Insolation(), heights_m=(1500.0, 2500.0))


def on(sky, slope, aspect, horizon_deg=0.0, view=1.0, around=0.0, window=None, elevation=2000.0):
    """Insolation and light from terrain of a row of cells. [W m-2]"""
    slope, aspect = np.broadcast_arrays(np.asarray(slope, float), np.asarray(aspect, float))
    n = slope.size
    relief = stage.Relief(
        np.round(slope * 100).astype(np.int16).reshape(1, n), np.round(aspect * 50).astype(np.int16).reshape(1, n),
        np.full((1, n), round(view * 10_000), np.int16),
        np.full((len(sky.directions), 1, n), round(horizon_deg / light.CODE_DEG), np.uint8),
    )  # fmt: skip
    made = stage.slope_insolation(
        np.ones((1, n), bool), np.full((1, n), elevation, np.float32), relief, np.full((2, 2), around), 17,
        window or Window(10, 2, 1, n), sky,
    )  # fmt: skip
    return made["insolation"][0], made["terrain_light"][0]


def by_minutes(day, window, slope, aspect, horizon_deg):
    """Direct light per map area and diffuse light on the flat, summed minute by minute. [W m-2]"""
    lon, lat = (lattice.at(window)[0] for lattice in positions(GRID, 32))
    north = stage.grid_north_deg(*(lattice.values for lattice in reversed(positions(GRID, 32))))[0]
    air = stage.atmosphere(Insolation().atmosphere)
    start = dt.datetime(day.year, day.month, day.day, tzinfo=dt.UTC).timestamp()
    s, direct, diffuse = np.radians(slope), np.zeros(slope.size), np.zeros(slope.size)
    times = start + np.arange(30, 86_400, 60)
    for time in times:
        zenith, bearing, distance = sun.position(float(time), lat, lon)
        sky = bird(zenith, sun.solar_constant_wm2() / distance**2, pressure_pa(2000.0), air)
        z, turn = np.radians(zenith), np.radians(bearing - north - aspect)
        cos_i = np.cos(z) * np.cos(s) + np.sin(z) * np.sin(s) * np.cos(turn)
        direct += np.maximum(cos_i, 0) / np.cos(s) * sky.direct_normal_wm2 * (90 - zenith > horizon_deg)
        diffuse += sky.black_ground_wm2 - sky.direct_horizontal_wm2
    return direct / times.size, diffuse / times.size


@pytest.mark.parametrize("horizon_deg", [0.0, 10.08])
@pytest.mark.parametrize("day", [MARCH, JUNE, DECEMBER], ids=str)
def test_direct_light_is_the_integral_by_minutes(day, horizon_deg):
    """Half-hour trapezoids against minutes: within 0.3 W m-2 and half a per cent of the beam."""
    slope, aspect = (v.ravel().astype(float) for v in np.meshgrid(SLOPES, ASPECTS))
    window = Window(10, 2, 1, slope.size)
    got, _ = on(sky_of(day), slope, aspect, horizon_deg, window=window)
    direct, diffuse = by_minutes(day, window, slope, aspect, horizon_deg)
    beam = got * 0.1 - diffuse / np.cos(np.radians(slope))
    assert np.abs(beam - direct).max() > 0
    assert (np.abs(beam - direct) <= 0.3 + 0.005 * direct + 0.003 * diffuse).all()


def test_level_open_ground_gets_the_flat_insolation():
    for day in (MARCH, JUNE, DECEMBER):
        sky = sky_of(day)
        here = sky.moments.at(Window(10, 2, 1, 1))[0, 0]
        level = (2000.0 - stage.LOWEST_M) / stage.LEVEL_STEP_M
        moments = here[int(level)] + (here[int(level) + 1] - here[int(level)]) * (level % 1)
        wanted = float(day_mean_insolation(moments[:-1], 0.6))
        got, ground = on(sky, [0.0], [0.0], around=0.6)
        assert got[0] * 0.1 == pytest.approx(wanted, abs=0.11)
        assert ground[0] == 0


def test_a_valley_floor_in_shadow_all_day_gets_sky_and_ground_alone():
    sky = sky_of(DECEMBER)
    dark, _ = on(sky, [0.0], [0.0], horizon_deg=60.0, view=0.25, around=0.8)
    plain, _ = on(sky, [0.0], [0.0], horizon_deg=60.0, view=0.25, around=0.0)
    _, diffuse = by_minutes(DECEMBER, Window(10, 2, 1, 1), np.zeros(1), np.zeros(1), 60.0)
    assert plain[0] * 0.1 == pytest.approx(0.25 * diffuse[0], abs=0.2)
    assert dark[0] > plain[0]


def test_deep_and_bright_ground_gives_more_light():
    sky = sky_of(JUNE)
    _, bright = on(sky, [20.0], [180.0], view=0.6, around=0.8)
    _, dim = on(sky, [20.0], [180.0], view=0.6, around=0.1)
    assert bright[0] > 8 * dim[0] > 0


@pytest.mark.parametrize(("month", "light_wanted"), [(6, True), (12, False)])
def test_polar_day_and_night_are_numbers(month, light_wanted):
    grid = Grid("EPSG:32633", 500_000.0, 8_660_000.0, 30.0, 30.0, 70, 90)  # 78 N
    sky = sky_of(dt.date(2031, month, 20), grid)
    got, ground = on(sky, [0.0, 30.0, 30.0, 60.0], [0.0, 0.0, 180.0, 90.0], view=0.9, around=0.7)
    if light_wanted:
        assert (got > 1000).all()
        assert got[1] > 0.5 * got[2]  # the midnight sun reaches north slopes
    else:
        assert (got == 0).all()
        assert (ground == 0).all()


def test_cliffs_and_unknown_ground_are_gaps_not_numbers():
    sky = sky_of(JUNE)
    got, ground = on(sky, [79.0, 81.0], [180.0, 180.0])
    assert got[0] > 0
    assert got[1] == ground[1] == FILL
    got, _ = on(sky, [10.0], [180.0], elevation=np.nan)
    assert got[0] == FILL
    got, _ = on(sky, [10.0], [180.0], elevation=9500.0)
    assert got[0] == FILL


def random_case(seed, window, day=JUNE, step=32):
    rng, sky, shape = np.random.default_rng(seed), sky_of(day, step=step), (window.rows, window.cols)
    relief = stage.Relief(
        rng.integers(0, 8200, shape).astype(np.int16), rng.integers(-1, 18_000, shape).astype(np.int16),
        rng.integers(3000, 10_001, shape).astype(np.int16),
        rng.integers(0, 120, (len(sky.directions), *shape)).astype(np.uint8),
    )  # fmt: skip
    height = rng.uniform(1500, 2500, shape).astype(np.float32)
    height[rng.random(shape) < 0.05] = np.nan
    seen, around = rng.random(shape) < 0.9, rng.uniform(0.1, 0.9, (5, 6))
    return sky, relief, height, seen, around


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("day", [JUNE, DECEMBER], ids=str)
def test_slope_kernel_equals_the_plain_one(seed, day):
    window = Window(20, 25, 40, 50)
    sky, relief, height, seen, around = random_case(seed, window, day)
    made = stage.slope_insolation(seen, height, relief, around, 17, window, sky)
    plain = light.slope_block(
        seen, height, relief.slope, relief.aspect, relief.sky_view, relief.codes, around, 17, window, sky.moments,
        stage.LOWEST_M, stage.LEVEL_STEP_M, sky.paths, FILL, layer("insolation").high,
    )  # fmt: skip
    for got, wanted in zip(made.values(), plain, strict=True):
        assert ((got == FILL) == (wanted == FILL)).all()
        assert (got != FILL).mean() > 0.5
        # single precision: the compiler may join a product and a sum, so a tie can fall the other way
        assert np.abs(got.astype(int) - wanted.astype(int)).max() <= 1
        assert (got != wanted).mean() < 0.01


def test_cutting_a_window_changes_no_cell():
    whole = Window(16, 8, 48, 64)
    sky, relief, height, seen, around = random_case(9, whole)
    made = stage.slope_insolation(seen, height, relief, around, 17, whole, sky)["insolation"]
    for rows, cols in ((slice(0, 13), slice(0, 64)), (slice(13, 48), slice(5, 30)), (slice(40, 48), slice(63, 64))):
        part = stage.Relief(*(one[..., rows, cols].copy() for one in vars(relief).values()))
        window = Window(16 + rows.start, 8 + cols.start, rows.stop - rows.start, cols.stop - cols.start)
        got = stage.slope_insolation(seen[rows, cols].copy(), height[rows, cols].copy(), part, around, 17, window, sky)
        assert (got["insolation"] == made[rows, cols]).all()


@pytest.mark.parametrize("seed", range(4))
def test_flat_kernel_equals_the_plain_one(seed):
    rng = np.random.default_rng(seed)
    window = Window(int(rng.integers(0, 60)), int(rng.integers(0, 60)), 23, 37)
    shape = (window.rows, window.cols)
    albedo = rng.integers(0, 10_001, shape).astype(np.int16)
    albedo[rng.random(shape) < 0.1] = FILL
    height = rng.uniform(-600, 5000, shape).astype(np.float32)
    height[rng.random(shape) < 0.05] = np.nan
    first = rng.uniform(0, 500, (8, 8, 22, 1)) * (rng.random((8, 8, 1, 1)) < 0.9)
    moments = Lattice(16, 16, np.concatenate([*(first * 0.1**k for k in range(4)), first * 0.7], axis=-1))
    moments.values[3, 3, 4] = np.nan
    got = np.empty(shape, np.int16)
    flat_block(albedo, height, window.row, window.col, moments.values, 16, 16, -500.0, 250.0, np.int16(FILL), 30_000.0, got)
    wanted = light.flat_block(albedo, height, window, moments, -500.0, 250.0, FILL, 30_000)
    assert ((got == FILL) == (wanted == FILL)).all()
    assert np.abs(got.astype(int) - wanted.astype(int)).max() <= 1
    assert (got != wanted).mean() < 0.001


def test_the_general_sky_is_the_fast_one_where_both_know_it():
    lat, lon, heights = np.array([46.5, -33.0, 78.0]), np.array([-36.0, 20.0, 15.0]), np.array([0.0, 1500.0, 4000.0])
    air = stage.atmosphere(Insolation().atmosphere)
    general = DaySky(JUNE, Places(lat, lon, heights, air)).moments(4)
    fast = stage.day_light(JUNE, lat, lon, heights, air, orders=4)
    np.testing.assert_allclose(general, fast, rtol=1e-9, atol=1e-9)
