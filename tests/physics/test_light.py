"""Is a day's light on slopes that of the sun, the sky and the ground around, with no energy made or lost?"""

import datetime as dt
from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from firnlight.core.grid import LOWEST_M, Window
from firnlight.core.lattice import Lattice
from firnlight.core.settings import Insolation
from firnlight.physics import clearsky, light, sun
from firnlight.physics.day_sky import Cloud
from firnlight.physics.horizon_fast import horizon_codes, sky_view_add
from firnlight.physics.terrain import gradient, slope_aspect_deg
from firnlight.stages.insolation import (
    DIRECTIONS,
    LEVEL_STEP_M,
    Relief,
    SkyInputs,
    atmosphere,
    flat_insolation,
    sky_lattice,
    slope_insolation,
)

FILL, HIGHEST, LEVEL = -32768, 30000, -32768  # of the layers; an aspect of level ground is fill too
STEP = 16
DAYS = {  # day, latitude, longitude
    "summer": (dt.date(2024, 6, 21), 46.5, 8.0),
    "winter": (dt.date(2024, 12, 21), 46.5, 8.0),
    "polar day": (dt.date(2024, 6, 21), 78.0, 16.0),
    "polar night": (dt.date(2024, 12, 21), 78.0, 16.0),
    "south": (dt.date(2024, 1, 15), -33.4, -70.0),
    "two halves": (dt.date(2024, 11, 3), -44.0, 170.0),  # the sun is up at both ends of the UTC day
}
HEIGHTS = (1000.0, 3000.0)


@cache
def sky_of(name, shape=(2, 2), spread_deg=0.02, cloud=None):
    """A lattice of `shape` cells of 16 x 16, so narrow that the sun is the same all over, unless told."""
    day, lat, lon = DAYS[name]
    rows, cols = (np.arange(n + 1) - n / 2 for n in shape)
    lats, lons = np.meshgrid(lat - rows * spread_deg, lon + cols * spread_deg, indexing="ij")
    inputs = SkyInputs() if cloud is None else SkyInputs(cloud=Cloud(np.array([0.0, 24.0]), np.full((2, lats.size), cloud)))
    return sky_lattice(day, (), Lattice(STEP, STEP, lons), Lattice(STEP, STEP, lats), Insolation(), inputs, HEIGHTS)


def plain(seen, elevation, relief, around, step, window, sky):
    return light.slope_block(
        seen, elevation, relief.slope, relief.aspect, relief.sky_view, relief.codes, around, step, window, sky.moments,
        LOWEST_M, LEVEL_STEP_M, sky.paths, FILL, HIGHEST,
    )  # fmt: skip


def ground(rng, shape, directions):
    """Any terrain, hard cases among it: cells without a number, level, too steep, too high."""
    slope = rng.integers(0, 9001, shape).astype(np.int16)
    aspect = rng.integers(0, 18001, shape).astype(np.int16)
    view = rng.integers(0, 10001, shape).astype(np.int16)
    codes = (rng.integers(0, 250, (directions, *shape)) * rng.random(shape) ** 2).astype(np.uint8)
    elevation = rng.uniform(-700, 9300, shape).astype(np.float32)
    slope[rng.random(shape) < 0.1] = 0
    aspect[rng.random(shape) < 0.1] = LEVEL
    view[rng.random(shape) < 0.05] = 10000
    codes[:, rng.random(shape) < 0.05] = 255
    for values in (slope, view, elevation):
        values[rng.random(shape) < 0.03] = np.nan if values.dtype.kind == "f" else FILL
    return elevation, Relief(slope, aspect, view, codes)


def cut(relief, part):
    return Relief(
        relief.slope[part], relief.aspect[part], relief.sky_view[part], np.ascontiguousarray(relief.codes[:, *part])
    )


@pytest.mark.parametrize("name", DAYS)
@given(seed=st.integers(0, 2**32 - 1))
@settings(deadline=None, max_examples=6)
def test_kernel_equals_the_plain_formulas_and_cutting_changes_no_bit(name, seed):
    """Both sum in single precision over the same nodes in the same order: the integers are equal."""
    rng = np.random.default_rng(seed)
    sky = sky_of(name, (4, 5), 0.4)
    row_step, col_step = (int(n) for n in rng.integers(7, 20, 2))
    sky = replace(sky, moments=Lattice(row_step, col_step, sky.moments.values))
    window = Window(*(int(n) for n in rng.integers(0, 9, 2)), 19, 23)
    shape = window.rows, window.cols
    elevation, relief = ground(rng, shape, len(sky.directions))
    seen = rng.random(shape) < 0.9
    around = rng.choice([0.0, 0.3, 0.9, 1.0], tuple(rng.integers(1, 7, 2)))
    step = int(rng.integers(1, 9))
    got = slope_insolation(seen, elevation, relief, around, step, window, sky)
    for one, expected in zip(got.values(), plain(seen, elevation, relief, around, step, window, sky), strict=True):
        np.testing.assert_array_equal(one, expected)
    known = got["insolation"] != FILL
    assert known.any()
    assert (known == (got["terrain_light"] != FILL)).all()
    assert (got["insolation"][known] >= got["terrain_light"][known]).all()
    assert name != "polar night" or not got["insolation"][known].any()
    albedo = rng.integers(0, 10001, shape).astype(np.int16)
    albedo[~seen] = FILL
    flat = flat_insolation(albedo, elevation, window, sky)
    np.testing.assert_array_equal(
        flat, light.flat_block(albedo, elevation, window, sky.moments, LOWEST_M, LEVEL_STEP_M, FILL, HIGHEST)
    )
    r, c = int(rng.integers(1, shape[0])), int(rng.integers(1, shape[1]))
    for rows, cols in ((slice(0, r), slice(0, c)), (slice(r, None), slice(0, c)), (slice(0, r), slice(c, None))):
        part = rows, cols
        mine = Window(window.row + rows.start, window.col + cols.start, *seen[part].shape)
        piece = slope_insolation(seen[part], elevation[part], cut(relief, part), around, step, mine, sky)
        for layer_name, values in piece.items():
            assert values.tobytes() == np.ascontiguousarray(got[layer_name][part]).tobytes()
        assert flat_insolation(albedo[part], elevation[part], mine, sky).tobytes() == flat[part].tobytes()


def cells(sky, slope_deg, aspect_deg, codes=0, view=1.0, elevation=2000.0, albedo=0.0):
    """Light on single cells at the middle of a lattice cell, where its sun path is that of the place: W m-2."""
    slope, aspect, codes, view, elevation = (
        a.ravel()
        for a in np.broadcast_arrays(*(np.asarray(v, float) for v in (slope_deg, aspect_deg, codes, view, elevation)))
    )
    found = []
    for n in range(slope.size):
        relief = Relief(
            np.array([[round(slope[n] * 100)]], np.int16), np.array([[round(aspect[n] * 50)]], np.int16),
            np.array([[round(view[n] * 10000)]], np.int16), np.full((len(sky.directions), 1, 1), codes[n], np.uint8),
        )  # fmt: skip
        got = slope_insolation(
            np.ones((1, 1), bool), np.full((1, 1), elevation[n], np.float32), relief, np.array([[albedo]]), 64,
            Window(STEP // 2, STEP // 2, 1, 1), sky,
        )  # fmt: skip
        found.append([got["insolation"].item(), got["terrain_light"].item()])
    out = np.array(found, float)
    out[out == FILL] = np.nan
    return out.T / 10


def brute(name, slope_deg, aspect_deg, horizon_deg=0.0, elevation=2000.0, step_s=60.0):
    """Day mean of direct light per map area, from the angle between sun and normal at each minute: W m-2.

    Also that of flat ground under an open sky, and of diffuse light.
    """
    day, lat, lon = DAYS[name]
    lat, lon = lat + 0.01, lon - 0.01  # the first cell of sky_of: its centre
    zenith, azimuth, distance = sun.position(clearsky.day_times_unix_s(day, step_s), lat, lon)
    clear = clearsky.bird(
        zenith, sun.solar_constant_wm2() / distance**2, clearsky.pressure_pa(elevation), atmosphere(Insolation().atmosphere)
    )
    z, turn = np.radians(zenith), np.radians(azimuth)
    slope, aspect = (np.radians(np.asarray(v, float))[..., np.newaxis] for v in (slope_deg, aspect_deg))
    cosine = np.cos(z) * np.cos(slope) + np.sin(z) * np.sin(slope) * np.cos(turn - aspect)
    lit = 90 - zenith > horizon_deg
    beam = (clear.direct_normal_wm2 * np.maximum(cosine, 0) * lit).mean(axis=-1) / np.cos(slope[..., 0])
    return beam, clear.direct_horizontal_wm2.mean(), (clear.black_ground_wm2 - clear.direct_horizontal_wm2).mean()


LIT_DAYS = [name for name in DAYS if name != "polar night"]
SLOPES, ASPECTS = (v.ravel() for v in np.meshgrid([10.0, 25, 40, 55, 75], np.arange(8) * 45.0))


@pytest.mark.parametrize("code", [0, 28, 56])
@pytest.mark.parametrize("name", LIT_DAYS)
def test_beam_on_slopes_is_the_integral_over_the_minutes(name, code):
    """Slopes see no sky here and the ground around is black: only the beam is left, under horizons of 0, 10, 20 degrees.

    Half-hour trapezoids follow a cosine law to (pi/24)^2/12 = 0.1 %; where sun or slope come up or go down inside a step,
    straight lines are off by up to a tenth of a step's light at that end of the day, of some 25 steps: 1 % of the beam on
    the slope or on flat ground, whichever is more.
    """
    beam, flat, _ = brute(name, SLOPES, ASPECTS, code * light.CODE_DEG)
    got, terrain_light = cells(sky_of(name), SLOPES, ASPECTS, code, view=0.0)
    assert (np.abs(got - beam) <= 0.01 * np.maximum(beam, flat) + 0.05).all()
    assert not terrain_light.any()
    assert np.ptp(beam) > 0.5 * flat or not beam.any()  # slopes matter, or the sun stays behind the horizon


@pytest.mark.parametrize("name", DAYS)
@pytest.mark.parametrize("albedo", [0.0, 0.6, 0.95])
@pytest.mark.parametrize("elevation", [1000.0, 1730.0, 3000.0])
def test_open_level_ground_gets_the_flat_insolation_of_its_surroundings(name, albedo, elevation):
    """To one stored step: its beam is a sum in single precision over the same sum over flat ground."""
    sky = sky_of(name)
    got, terrain_light = cells(sky, 0, 0, elevation=elevation, albedo=albedo)
    stored = np.full((1, 1), round(albedo * 10000), np.int16)
    flat = flat_insolation(stored, np.full((1, 1), elevation, np.float32), Window(8, 8, 1, 1), sky).item() / 10
    assert abs(got[0] - flat) <= 0.1 + 1e-9
    assert terrain_light[0] == 0
    assert (flat == 0) == (name == "polar night")


@pytest.mark.parametrize("name", LIT_DAYS)
def test_a_cell_in_shadow_all_day_gets_sky_and_terrain_only(name):
    """Its horizon stands at 80 degrees all round: higher than the sun of any of these days but one."""
    sky = sky_of(name)
    slope, view, albedo = 35.0, 0.3, 0.7
    got, terrain_light = cells(sky, slope, 140, codes=222, view=view, albedo=albedo)
    lit = (
        flat_insolation(np.array([[7000]], np.int16), np.full((1, 1), 2000, np.float32), Window(8, 8, 1, 1), sky).item() / 10
    )
    _, direct, _ = brute(name, 0, 0)
    widen = 1 / np.cos(np.radians(slope))
    expected = (1 - view) * widen * albedo * lit * view / (1 - albedo * (1 - view))
    assert terrain_light[0] == pytest.approx(expected, abs=0.1)
    assert got[0] - terrain_light[0] == pytest.approx((lit - direct) * view * widen, rel=0.002, abs=0.2)
    open_to_sun, _ = cells(sky, slope, 140, view=view, albedo=albedo)
    assert open_to_sun[0] > got[0] + 10


def test_the_sun_of_the_tropics_comes_over_a_horizon_of_80_degrees():
    """The shadow above is the horizon's work: the same horizon lets a higher sun in."""
    DAYS["tropics"] = dt.date(2024, 3, 20), 0.0, 0.0
    beam, flat, _ = brute("tropics", 0, 0, 222 * light.CODE_DEG)
    got, _ = cells(sky_of("tropics"), 0, 0, 222, view=0.0)
    del DAYS["tropics"]
    assert 0 < beam < 0.2 * flat
    assert got[0] == pytest.approx(beam, abs=0.01 * flat)


def test_a_deep_valley_of_snow_lights_itself_more_than_one_of_rock():
    sky = sky_of("winter")
    bright, bare = (cells(sky, 45, 90, codes=125, view=0.5, albedo=a)[1][0] for a in (0.8, 0.1))
    assert bright > 8 * bare > 0  # eight times the light comes back at once, and more from wall to wall
    assert cells(sky, 45, 90, view=1.0, albedo=0.8)[1][0] == 0
    assert cells(sky, 45, 90, view=0.5, albedo=0.0)[1][0] == 0
    assert cells(sky, 45, 90, view=0.0, albedo=1.0)[1][0] == 0  # a closed box of white walls: no light gets in, no crash


@given(
    slope=st.floats(0, 70),
    aspect=st.floats(0, 359),
    view=st.floats(0.02, 1),
    albedo=st.sampled_from([0.0, 0.3, 0.9, 1.0]),
)
@settings(deadline=None, max_examples=30)
def test_under_an_even_sky_a_hollow_keeps_what_comes_in(slope, aspect, view, albedo):
    """Overcast, so all light is the sky's: what a hollow's walls take and let out again is what its opening let in.

    And no surface, however white its surroundings, gets more than open level ground: what reflects is no brighter than
    the sky that lights it.
    """
    sky = sky_of("summer", cloud=1.0)
    view, slope = round(view, 4), round(slope, 2)
    whole, terrain_light = (v[0] for v in cells(sky, slope, aspect, view=view, albedo=albedo))
    open_ground, _ = cells(sky, 0, 0, albedo=albedo)
    per_surface, rounding = whole * np.cos(np.radians(slope)), 0.11
    assert per_surface <= open_ground[0] + rounding
    assert per_surface * (1 - albedo + albedo * view) == pytest.approx(view * open_ground[0], abs=rounding)
    assert 0 <= terrain_light <= whole


@pytest.mark.parametrize(
    "change",
    [
        {"slope_deg": 80.01},
        {"slope_deg": 89.99},
        {"slope_deg": FILL / 100},
        {"view": FILL / 10000},
        {"elevation": np.nan},
        {"elevation": -501.0},
        {"elevation": 9001.0},
    ],
    ids=str,
)
def test_what_is_unknown_is_never_a_number(change):
    good = {"slope_deg": 80.0, "aspect_deg": 90, "view": 0.5, "elevation": 2000.0, "albedo": 0.5}
    assert not np.isnan(cells(sky_of("summer"), **good)).any()
    assert np.isnan(cells(sky_of("summer"), **{**good, **change})).all()


def test_a_gap_in_the_weather_is_a_gap_on_slopes_and_on_flat_ground():
    sky = sky_of("summer")
    nodes = sky.moments.values.copy()
    nodes[0, 0] = np.nan
    sky = replace(sky, moments=Lattice(STEP, STEP, nodes))
    shape = 2 * STEP, 2 * STEP
    window, elevation = Window(0, 0, *shape), np.full(shape, 2000, np.float32)
    level = Relief(
        *(np.full(shape, v, np.int16) for v in (1000, 0, 9000)), np.zeros((len(sky.directions), *shape), np.uint8)
    )
    got = slope_insolation(np.ones(shape, bool), elevation, level, np.full((1, 1), 0.5), 32, window, sky)
    flat = flat_insolation(np.full(shape, 5000, np.int16), elevation, window, sky)
    gap = np.zeros(shape, bool)
    gap[:STEP, :STEP] = True  # all cells of the lattice cell at that node
    for values in (*got.values(), flat):
        np.testing.assert_array_equal(values == FILL, gap)


def test_a_day_without_any_weather_is_a_gap():
    sky = sky_of("summer", cloud=np.nan)
    assert np.isnan(cells(sky, 30, 90, view=0.5, albedo=0.5)).all()
    assert not np.isnan(cells(sky_of("summer", cloud=0.5), 30, 90, view=0.5, albedo=0.5)).any()


def gauss(x, y):
    return 300 * np.exp(-(x**2 + y**2) / 2 / 300**2)


def cone(x, y):
    return np.maximum(300 - np.hypot(x, y) / 2, 0)


def beam_of_a_hill(hill, name, cell_m):
    """What the beam on a hill and the plain around it is more than on the plain alone, and how much of it has moved.

    Both as shares of the light on the hill's foot. The height is told to the sky as one, so that the air is the same.
    """
    sky, half = sky_of(name, spread_deg=1e-4), 14000.0
    n = round(2 * half / cell_m)
    at = (np.arange(n) + 0.5) * cell_m - half
    z = hill(*np.meshgrid(at, -at)).astype(np.float32)
    east, north = gradient(np.pad(z, 1, mode="edge"), cell_m)
    slope, aspect = slope_aspect_deg(east, north)
    horizon, view = np.empty((DIRECTIONS, n, n), np.uint8), np.zeros((n, n), np.float32)
    for k in range(DIRECTIONS):
        horizon_codes(z, k * 360 / DIRECTIONS, cell_m, np.inf, horizon[k])
        sky_view_add(horizon[k], k * 360 / DIRECTIONS, east, north, 1 / DIRECTIONS, view)
    relief = Relief(
        np.round(slope * 100).astype(np.int16), np.where(np.isnan(aspect), LEVEL, np.round(aspect * 50)).astype(np.int16),
        np.round(np.clip(view, 0, 1) * 10000).astype(np.int16), horizon[list(sky.directions)],
    )  # fmt: skip
    # one lattice cell over all, and more light, so that rounding to stored steps does not matter
    sky = replace(sky, moments=Lattice(n, n, sky.moments.values * (8 if name == "winter" else 2)))

    def made(relief):
        got = slope_insolation(
            np.ones((n, n), bool), np.full((n, n), 2000, np.float32), relief, np.zeros((1, 1)), n, Window(0, 0, n, n), sky
        )
        return got["insolation"].astype(int)

    none = np.zeros((n, n), np.int16)
    whole, beam = made(relief), made(replace(relief, sky_view=none))
    plane = made(Relief(none, relief.aspect, none + np.int16(10000), np.zeros_like(horizon)))[0, 0]
    flat = made(Relief(none, relief.aspect, none, np.zeros_like(horizon)))[0, 0]
    assert FILL < whole.min() < whole.max() < HIGHEST
    sky_part = (plane - flat) * (relief.sky_view / 10000) / np.cos(np.radians(relief.slope * 0.01))
    assert np.abs(whole - beam - sky_part).max() <= 2.5  # each of the four is rounded by 0.5, two of them times 1.2
    foot = (z > 0.05 * z.max()).sum() * flat
    return (beam - flat).sum() / foot, np.abs(beam - flat).sum() / foot


@pytest.mark.parametrize(("hill", "name", "moved"), [(cone, "summer", 0.05), (gauss, "winter", 0.8), (cone, "winter", 1.1)])
def test_a_hill_takes_from_the_beam_what_its_shadow_lacks(hill, name, moved):
    """Slopes of 27 and 31 degrees, 300 m high on a plain of 28 km; nothing of the beam may be lost or made.

    What is left, of the light on the hill's foot: cells across a shadow's edge (most in winter, half as much with cells
    half as wide), half hours, 32 horizons in steps of 0.36 degrees: 0.5 % where 6 % (summer) to 117 % (winter) has moved.
    """
    coarse, _ = beam_of_a_hill(hill, name, 60.0)
    fine, turned = beam_of_a_hill(hill, name, 30.0)
    assert turned > moved
    assert abs(fine) < 0.005
    assert abs(fine) < abs(coarse) * (1.0 if name == "summer" else 0.6) < 0.008
