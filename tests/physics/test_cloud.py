"""Is a cloud fraction a fraction, does the darker sky have more of it, and is night filled from the days beside it?"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.physics import cloud
from firnlight.physics.clearsky import global_horizontal

indices = st.floats(-0.2, 1.6)
fractions = st.floats(0, 1)
FORMS = ["crawford_duchon1999", "kasten_czeplak1980"]


@given(indices, st.sampled_from(FORMS))
def test_fraction_is_a_fraction(index, form):
    assert 0 <= cloud.cloud_from_index(index, form) <= 1


@pytest.mark.parametrize("form", FORMS)
def test_darker_is_cloudier(form):
    got = cloud.cloud_from_index(np.linspace(0, 1.2, 300), form)
    assert (np.diff(got) <= 0).all()
    assert cloud.cloud_from_index(1.0, form) == 0


@given(fractions)
def test_kasten_czeplak_is_its_own_inverse(fraction):
    """To 1e-4: a thin cloud of 0.01 takes 1e-7 of the light."""
    back = cloud.cloud_from_index(cloud.transmission(fraction), "kasten_czeplak1980")
    assert back == pytest.approx(fraction, abs=1e-4)


def test_kasten_czeplak_by_hand():
    """Kasten & Czeplak (1980): 1 - 0.75 (N / 8)^3.4; an overcast lets a quarter through."""
    np.testing.assert_allclose(cloud.transmission([0, 0.5, 1]), [1, 1 - 0.75 * 2**-3.4, 0.25])


def test_crawford_duchon_by_hand():
    np.testing.assert_allclose(cloud.cloud_from_index([0.3, 1.1, -0.1]), [0.7, 0, 1])


def test_index_is_of_light_summed_over_the_interval():
    measured, clear = np.array([100.0, 300, 0, 800]), np.array([200.0, 300, 400, 800])
    np.testing.assert_allclose(cloud.clear_sky_index(measured, clear, 40.0, 2), [400 / 500, 800 / 1200])
    np.testing.assert_allclose(cloud.clear_sky_index(measured, clear, 40.0), [0.5, 1, 0, 1])


def test_index_is_missing_by_night_and_where_half_is_missing():
    measured = np.array([100.0, np.nan, np.nan, np.nan, 5.0, 5.0, 0.0, -1.0])
    clear = np.array([100.0, 100, 100, 100, 50, 50, 0, 0])
    zenith = np.array([40.0, 40, 40, 40, 85, 85, 100, 100])
    np.testing.assert_array_equal(cloud.clear_sky_index(measured, clear, zenith, 2), [1, np.nan, np.nan, np.nan])


def test_index_of_several_places():
    clear = np.full((4, 2), 100.0)
    measured = np.array([[50.0, 80], [50, 80], [np.nan, 90], [np.nan, 90]])
    got = cloud.clear_sky_index(measured, clear, np.full((4, 1), 30.0), 2)
    np.testing.assert_allclose(got, [[0.5, 0.8], [np.nan, 0.9]])


def test_steps_must_fill_the_intervals():
    with pytest.raises(ValueError, match="intervals of 3"):
        cloud.clear_sky_index(np.ones(4), np.ones(4), 40.0, 3)


def test_night_is_a_straight_line_and_the_ends_are_held():
    nan = np.nan
    got = cloud.fill_between([nan, 0.2, nan, nan, 0.8, nan])
    np.testing.assert_allclose(got, [0.2, 0.2, 0.4, 0.6, 0.8, 0.8])
    got = cloud.fill_between([nan, 0.2, nan, nan, 0.8, nan, nan], longest_gap=1)
    np.testing.assert_array_equal(got, [0.2, 0.2, nan, nan, 0.8, nan, nan])
    assert np.isnan(cloud.fill_between([nan, nan])).all()


@given(st.lists(st.one_of(fractions, st.just(float("nan"))), min_size=1, max_size=12))
def test_filling_keeps_what_is_known_and_stays_between(values):
    given_, got = np.array(values), cloud.fill_between(values)
    known = ~np.isnan(given_)
    np.testing.assert_array_equal(got[known], given_[known])
    if known.any():
        assert got.min() >= given_[known].min() - 1e-12
        assert got.max() <= given_[known].max() + 1e-12


def test_places_are_filled_apart():
    nan = np.nan
    got = cloud.fill_between([[0.0, nan], [nan, 0.5], [1.0, nan]])
    np.testing.assert_allclose(got, [[0, 0.5], [0.5, 0.5], [1, 0.5]])


def test_the_whole_way():
    clear, zenith = np.array([500.0, 500, 0, 0, 500, 500]), np.array([40.0, 40, 100, 100, 40, 40])
    measured = np.array([500.0, 500, 0, 0, 0, 0])
    np.testing.assert_allclose(cloud.cloud_through_the_day(measured, clear, zenith, 2), [0, 0.5, 1])
    got = cloud.cloud_through_the_day(measured, clear, zenith, 2, longest_gap=0)
    np.testing.assert_array_equal(got, [0, np.nan, 1])


@given(fractions, st.floats(0, 0.9), st.floats(0.05, 0.2))
def test_light_trapped_over_snow_is_taken_out_again(fraction, albedo, sky):
    """Light over ground of that albedo, under a sky of that cloud, made with the forward form; back to rounding."""
    black = 1 - fraction
    over_ground = global_horizontal(black, cloud.clouded_sky_albedo(sky, fraction), albedo)
    assert cloud.index_over_bright_ground(over_ground, albedo, sky) == pytest.approx(black, abs=1e-12)


def test_bright_ground_makes_the_sky_look_clearer():
    """An index of 0.5 over snow (0.8, r 0.07): 0.5 x 0.6 / (1 - 0.5 x 0.8 x 0.43) = 0.3623."""
    assert cloud.index_over_bright_ground(0.5, 0.8, 0.07) == pytest.approx(0.3 / 0.828)
    assert cloud.index_over_bright_ground(0.5, 0.0, 0.07) == 0.5
    # cloud beside the sun: nothing but the cloudless sky throws light back, 1.3 (1 - 0.8 x 0.07)
    assert cloud.index_over_bright_ground(1.3, 0.8, 0.07) == pytest.approx(1.2272)
    assert np.isnan(cloud.index_over_bright_ground(0.5, 1.2, 0.07))
    assert np.isnan(cloud.index_over_bright_ground([np.nan, 0.5], [0.8, np.nan], 0.07)).all()


def test_index_over_bright_ground_rises_with_the_light():
    got = cloud.index_over_bright_ground(np.linspace(-0.1, 1.6, 500), 0.8, 0.07)
    assert (np.diff(got) > 0).all()


def test_nan_and_impossible_fractions():
    for form in FORMS:
        assert np.isnan(cloud.cloud_from_index(np.nan, form))
    np.testing.assert_array_equal(
        cloud.believable_fraction([-0.01, 1.01, 0.4, -0.1, 40.0, np.nan]), [0, 1, 0.4, np.nan, np.nan, np.nan]
    )
    assert np.isnan(cloud.transmission([np.nan, 3.0])).all()
    assert np.isnan(cloud.clouded_sky_albedo([np.nan, 0.1], [0.5, np.nan])).all()
    assert np.isnan(cloud.angstrom_prescott([1.2, -0.1, np.nan], 30.0)).all()
    assert np.isnan(cloud.clear_day_fao56(30.0, [7000.0, np.nan])).all()


def test_unknown_form_is_refused():
    with pytest.raises(ValueError, match="kasten_czeplak1980"):
        cloud.cloud_from_index(0.5, "oktas")
