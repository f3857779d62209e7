"""Is reflectance that the relief darkened brought back, per band and cover, and left alone where it must be?"""

import datetime as dt

import numpy as np
import pytest

from firnlight.core.grid import Grid, Window
from firnlight.core.layers import flag_bit
from firnlight.io.ground import positions
from firnlight.physics.horizon import CODE_DEG
from firnlight.stages import illumination
from firnlight.stages.insolation import Relief

GRID = Grid("EPSG:32624", 540_000.0, 5_150_000.0, 30.0, 30.0, 60, 60)
WINDOW = Window(0, 0, 60, 60)
TIME = dt.datetime(2031, 3, 10, 13, 0, tzinfo=dt.UTC).timestamp()
BANDS = ("green", "nir", "swir16")


@pytest.fixture
def slopes():
    rng = np.random.default_rng(5)
    scene_sun = illumination.SceneSun.at(TIME, *positions(GRID, 64))
    directions = scene_sun.directions()
    shape = (60, 60)
    relief = Relief(
        rng.integers(0, 4500, shape).astype(np.int16), rng.integers(0, 18_000, shape).astype(np.int16),
        np.full(shape, 9000, np.int16), np.zeros((len(directions), *shape), np.uint8),
    )  # fmt: skip
    return scene_sun, directions, relief


def test_a_fit_brings_back_what_the_relief_took(slopes):
    scene_sun, directions, relief = slopes
    light = illumination.incidence(relief, directions, WINDOW, scene_sun)
    cover = np.where(np.arange(60)[:, np.newaxis] < 30, 1, 2) * np.ones((60, 60), int)
    level = np.where(cover == 1, 0.12, 0.3)
    true_c = np.where(cover == 1, 0.4, 1.1)
    factor = (light.cos_i + true_c) / (light.cos_zenith + true_c)
    rho = np.stack([level * factor] * 3)
    use = np.ones((60, 60), bool)
    sums = illumination.FitSums()
    for rows in (slice(0, 17), slice(17, 60)):
        part = illumination.Incidence(*(getattr(light, n)[rows] for n in ("cos_i", "cos_zenith", "slope_deg", "lit")))
        sums.add(rho[:, rows], use[rows], cover[rows], part)
    fit = sums.fit()
    assert fit[0, 1] == pytest.approx(0.4, abs=0.01)
    assert fit[2, 2] == pytest.approx(1.1, abs=0.02)
    out = illumination.levelled(rho, use, cover, light, fit, "c")
    lit = light.lit
    assert 0.5 < lit.mean() < 1
    assert np.abs(out[0] - level)[lit].max() < 0.003
    assert (out[:, ~lit] == rho[:, ~lit].astype(np.float32)).all()  # grazing light is no measure of the ground


def test_ground_that_the_relief_does_not_darken_is_left(slopes):
    scene_sun, directions, relief = slopes
    light = illumination.incidence(relief, directions, WINDOW, scene_sun)
    sums = illumination.FitSums()
    rho = np.stack([0.4 - 0.1 * light.cos_i] * 3)
    sums.add(rho, np.ones((60, 60), bool), None, light)
    assert set(sums.fit().values()) == {None}
    few = illumination.FitSums()
    use = np.zeros((60, 60), bool)
    use[0, :50] = True
    few.add(np.stack([light.cos_i * 0.2] * 3), use, None, light)
    assert set(few.fit().values()) == {None}


def test_cosines_are_those_of_the_sun_and_ridges_shade(slopes):
    scene_sun, directions, relief = slopes
    light = illumination.incidence(relief, directions, WINDOW, scene_sun)
    vector = scene_sun.nodes.at(WINDOW)
    s, a = np.radians(relief.slope * 0.01), np.radians(relief.aspect * 0.02)
    normal = np.stack([np.sin(s) * np.sin(a), np.sin(s) * np.cos(a), np.cos(s)], axis=-1)
    assert np.abs(light.cos_i - (normal * vector).sum(axis=-1)).max() < 1e-5
    height_deg = np.degrees(np.arcsin(vector[..., 2]))
    ridge = Relief(relief.slope * 0, relief.aspect, relief.sky_view, relief.codes + round(height_deg.max() / CODE_DEG + 2))
    assert not illumination.incidence(ridge, directions, WINDOW, scene_sun).lit.any()
    low = Relief(relief.slope * 0, relief.aspect, relief.sky_view, relief.codes)
    assert illumination.incidence(low, directions, WINDOW, scene_sun).lit.all()


def test_snow_and_flagged_cells_are_not_corrected_unless_asked():
    rho = np.stack([np.array([[0.8, 0.1, 0.1, np.nan]]), np.array([[0.7, 0.3, 0.3, 0.3]]), np.array([[0.1, 0.2, 0.2, 0.2]])])
    flags = np.array([[0, 0, flag_bit("cloud"), 0]], np.uint8)
    assert illumination.level_cells(rho, BANDS, flags, over_snow=False).tolist() == [[False, True, False, False]]
    assert illumination.level_cells(rho, BANDS, flags, over_snow=True).tolist() == [[True, True, False, False]]
