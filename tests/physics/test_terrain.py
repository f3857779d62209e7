"""Are slopes, beams and corrections right at edges, holes and on planes, where the answer is known?"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.physics import terrain

CELL_M = 30.0
slopes = st.floats(-3, 3)
lines = st.tuples(st.integers(0, 2**32 - 1), st.floats(0.02, 2), st.floats(0, 3))


def plane(east, north, rows=5, cols=6):
    y, x = np.mgrid[rows + 1 : -1 : -1, 0 : cols + 2] * CELL_M
    return 1000 + east * x + north * y


@given(slopes, slopes)
def test_gradient_of_a_plane_is_the_planes(east, north):
    for got, wanted in zip(terrain.gradient(plane(east, north), CELL_M), (east, north), strict=True):
        np.testing.assert_allclose(got, wanted, atol=1e-12)


@given(st.integers(0, 2**32 - 1))
def test_a_plane_stays_a_plane_where_one_of_each_pair_of_neighbours_is_missing(seed):
    """The line goes on through the centre: edges and coasts of a plane keep its slope."""
    rng = np.random.default_rng(seed)
    window = plane(0.3, -0.7, 1, 1)
    for row, col in ((0, 0), (0, 1), (0, 2), (1, 0)):
        way = rng.integers(0, 3)
        if way:
            at = (row, col) if way == 1 else (2 - row, 2 - col)
            window[at] = np.nan
    east, north = terrain.gradient(window, CELL_M)
    assert (east.item(), north.item()) == (pytest.approx(0.3, abs=1e-12), pytest.approx(-0.7, abs=1e-12))


def test_a_margin_of_nothing_keeps_the_slope_of_a_plane_but_at_corners_pairs_are_lost():
    field = plane(0.2, 0.1)
    field[0], field[-1], field[:, 0], field[:, -1] = np.nan, np.nan, np.nan, np.nan
    east, north = terrain.gradient(field, CELL_M)
    np.testing.assert_allclose(east[1:-1, 1:-1], 0.2)
    np.testing.assert_allclose(east[0, 1:-1], 0.2)
    np.testing.assert_allclose(north[1:-1, -1], 0.1)
    # north-west corner: north-east and south-west are both missing, as if level with the centre
    assert east[0, 0] == pytest.approx((2 * (0.2 - 0.1) + 4 * 0.2) / 8)


def test_a_cell_alone_is_flat_and_no_cell_has_no_slope():
    window = np.full((3, 4), np.nan)
    window[1, 1] = 7.0
    east, north = terrain.gradient(window, CELL_M)
    np.testing.assert_array_equal(east, [[0, np.nan]])
    np.testing.assert_array_equal(north, [[0, np.nan]])


def test_weights_are_one_two_one():
    for (row, col), (east, north) in {
        (0, 0): (-1, 1), (0, 1): (0, 2), (0, 2): (1, 1), (1, 0): (-2, 0),
        (1, 2): (2, 0), (2, 0): (-1, -1), (2, 1): (0, -2), (2, 2): (1, -1), (1, 1): (0, 0),
    }.items():  # fmt: skip
        window = np.zeros((3, 3))
        window[row, col] = 8 * CELL_M
        got = terrain.gradient(window, CELL_M)
        assert (got[0].item(), got[1].item()) == pytest.approx((east, north))


def test_precision_in_is_precision_out():
    assert {a.dtype for a in terrain.gradient(plane(1, 1).astype(np.float32), CELL_M)} == {np.dtype(np.float32)}
    assert {a.dtype for a in terrain.gradient(plane(1, 1).astype(np.int16), CELL_M)} == {np.dtype(np.float64)}
    single = terrain.slope_aspect_deg(np.float32([1, 0]), np.float32([1, 0]))
    assert {a.dtype for a in single} == {np.dtype(np.float32)}


def test_gradient_needs_a_margin():
    with pytest.raises(ValueError, match="margin"):
        terrain.gradient(np.zeros((1, 5)), CELL_M)


@pytest.mark.parametrize(
    ("east", "north", "aspect"),
    [(0, -1, 0), (-1, -1, 45), (-1, 0, 90), (-1, 1, 135), (0, 1, 180), (1, 1, 225), (1, 0, 270), (1, -1, 315)],
)
def test_aspect_looks_downslope_clockwise_from_north(east, north, aspect):
    slope, got = terrain.slope_aspect_deg(east, north)
    assert got == pytest.approx(aspect)
    assert slope == pytest.approx(np.degrees(np.arctan(np.hypot(east, north))))


def test_flat_ground_has_no_aspect_and_north_is_never_360():
    slope, aspect = terrain.slope_aspect_deg([0.0, 1e-20, np.nan], [0.0, -1.0, 0.0])
    np.testing.assert_array_equal(slope, [0, 45, np.nan])
    np.testing.assert_array_equal(aspect, [np.nan, 0, np.nan])


@given(st.lists(st.floats(0, 1.5), min_size=32, max_size=32), st.floats(0, 85), st.floats(0, 359))
def test_sky_view_is_a_share_and_no_more_than_the_open_slope_sees(around, slope, aspect):
    azimuths = np.arange(32) * 11.25
    open_view = terrain.sky_view(np.zeros((32, 1)), azimuths, [slope], [aspect])[0]
    got = terrain.sky_view(np.array(around)[:, np.newaxis], azimuths, [slope], [aspect])[0]
    assert -1e-12 <= got <= open_view + 1e-12
    assert open_view == pytest.approx((1 + np.cos(np.radians(slope))) / 2, abs=2e-3)  # 32 sectors, kink at the plane


def test_sky_view_turns_with_the_ground():
    rng = np.random.default_rng(5)
    around, azimuths = rng.uniform(0, 1, (36, 4, 3)), np.arange(36) * 10.0
    slope, aspect = rng.uniform(0, 60, (4, 3)), rng.uniform(0, 360, (4, 3))
    turned = terrain.sky_view(np.roll(around, 7, axis=0), azimuths, slope, (aspect + 70) % 360)
    np.testing.assert_allclose(terrain.sky_view(around, azimuths, slope, aspect), turned, atol=1e-12)


def test_sky_view_is_unknown_where_something_is():
    around = np.zeros((4, 5))
    around[2, 0] = np.nan
    got = terrain.sky_view(around, [0, 90, 180, 270], [10, np.nan, 10, 0, 10], [5, 5, np.nan, np.nan, 5])
    np.testing.assert_array_equal(np.isnan(got), [True, True, True, False, False])
    with pytest.raises(ValueError, match="horizons"):
        terrain.sky_view(around, [0, 90, 180], 10, 5)


@given(slopes, slopes, st.floats(0, 89), st.floats(0, 360))
def test_beam_factor_is_cos_i_over_cos_slope(east, north, zenith, azimuth):
    z, a = np.radians(zenith), np.radians(azimuth)
    toward = np.array([np.sin(z) * np.sin(a), np.sin(z) * np.cos(a), np.cos(z)])
    normal = np.cross([1, 0, east], [0, 1, north])
    cos_slope = 1 / np.linalg.norm(normal)
    cos_i = max(toward @ normal * cos_slope, 0)
    factor = terrain.beam_factor(east, north, *toward)
    assert factor == pytest.approx(cos_i / cos_slope, abs=1e-12)
    slope, _ = terrain.slope_aspect_deg(east, north)
    assert terrain.slope_parallel(factor, slope) == pytest.approx(cos_i, abs=1e-12)


def test_beam_is_zero_behind_and_unknown_where_the_slope_is():
    got = terrain.beam_factor([0.0, 5.0, np.nan], [0.0, 0.0, 0.0], 0.6, 0.0, 0.8)
    np.testing.assert_array_equal(got, [0.8, 0, np.nan])
    assert np.isnan(terrain.slope_parallel(np.nan, 10))


@given(lines)
def test_c_makes_ground_that_only_the_relief_darkens_even(line):
    seed, rise, c = line
    rng = np.random.default_rng(seed)
    cos_i = rng.uniform(0.15, 1, 400)
    rho = rise * (cos_i + c)
    fitted = terrain.fit_c(rho, cos_i)
    assert fitted == pytest.approx(c, abs=1e-9)
    level = terrain.illumination_correction(rho, cos_i, 0.7, 12.0, fitted)
    np.testing.assert_allclose(level, rise * (0.7 + c), rtol=1e-9)


def test_c_is_fitted_to_lit_and_known_cells_only():
    cos_i = np.linspace(0.15, 1, 300)
    rho = 0.4 * (cos_i + 0.5)
    spoilt_rho = np.concatenate([rho, np.full(50, 9.0), [np.nan, np.inf, 0.3]])
    spoilt_cos_i = np.concatenate([cos_i, np.full(50, 0.1), [0.5, 0.5, np.nan]])
    assert terrain.fit_c(spoilt_rho, spoilt_cos_i) == pytest.approx(0.5)


def test_no_c_where_nothing_speaks_for_it():
    cos_i = np.linspace(0.2, 1, terrain.LEAST_CELLS)
    assert terrain.fit_c(0.1 + cos_i, cos_i) == pytest.approx(0.1)
    assert terrain.fit_c(0.1 + cos_i[1:], cos_i[1:]) is None
    assert terrain.fit_c(1 - 0.5 * cos_i, cos_i) is None
    assert terrain.fit_c(np.full(cos_i.size, 0.5), cos_i) is None
    assert terrain.fit_c(cos_i, np.full(cos_i.size, 0.5)) is None
    for level in np.linspace(0.31, 0.97, 20):  # means of equal numbers are rounded, up or down
        assert terrain.fit_c(cos_i + level, np.full(cos_i.size, level)) is None
    assert terrain.fit_c([], []) is None


def test_c_is_not_negative():
    cos_i = np.linspace(0.2, 1, 200)
    assert terrain.fit_c(cos_i - 0.1, cos_i) == 0


@pytest.mark.parametrize("c", [0.0, 0.3, None])
@pytest.mark.parametrize("method", ["c", "scs+c"])
def test_dark_and_unknown_cells_get_no_corrected_reflectance(c, method):
    got = terrain.illumination_correction(
        [0.5, 0.5, 0.5, np.nan, 0.5], [0.149, -0.3, np.nan, 0.5, 0.15], 0.5, 20.0, c, method
    )
    np.testing.assert_array_equal(np.isnan(got), [True, True, True, True, False])


def test_without_c_the_reflectance_stays_and_level_ground_stays_in_any_case():
    np.testing.assert_array_equal(terrain.illumination_correction([0.2, 0.9], [0.4, 1.0], 0.6, 30.0, None), [0.2, 0.9])
    for method in ("c", "scs+c"):
        assert terrain.illumination_correction(0.8, 0.6, 0.6, 0.0, 0.3, method) == pytest.approx(0.8)
    single = terrain.illumination_correction(np.float32([0.2]), np.float32([0.4]), np.float32(0.6), 30, 0.3)
    assert single.dtype == np.float32
    with pytest.raises(ValueError, match="method"):
        terrain.illumination_correction(0.8, 0.6, 0.6, 0.0, 0.3, "cosine")
