"""Is energy kept when a day's means are told over other intervals, and is what is missing not invented?"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.physics import day_steps

HOURS = np.arange(25.0)
THREE_HOURLY = np.arange(0, 25, 3.0)
DAY = [0.0, 24.0]

cuts = st.sets(st.integers(1, 24 * 60 - 1), max_size=20).map(lambda minutes: np.array([0, *sorted(minutes), 24 * 60]) / 60)
fluxes = st.floats(0, 1400)


def energy(edges, values):
    edges = np.asarray(edges, float)
    lengths = np.diff(edges) if edges.ndim == 1 else edges[:, 1] - edges[:, 0]
    return (np.asarray(values).T * lengths).sum(axis=-1)


def sun(edges):
    """A clear day: light from 6 to 18 h."""
    middle = (np.asarray(edges)[:-1] + np.asarray(edges)[1:]) / 2
    return np.maximum(900 * np.sin((middle - 6) * np.pi / 12), 0)


@given(cuts, cuts, st.data())
def test_energy_is_kept_on_any_other_cut_of_the_day(source, out, data):
    values = np.array(data.draw(st.lists(fluxes, min_size=source.size - 1, max_size=source.size - 1)))
    means = day_steps.overlap_mean(source, values, out)
    assert energy(out, means) == pytest.approx(energy(source, values), rel=1e-12, abs=1e-9)
    assert means.min() >= values.min() - 1e-9
    assert means.max() <= values.max() + 1e-9


def test_means_by_hand():
    means = day_steps.overlap_mean([0, 3, 6], [10.0, 40.0], [[0, 2], [2, 4], [4, 6]])
    np.testing.assert_allclose(means, [10, 25, 40])


def test_cells_stay_apart():
    values = np.arange(24 * 6, dtype=float).reshape(24, 2, 3)
    means = day_steps.overlap_mean(HOURS, values, THREE_HOURLY)
    np.testing.assert_allclose(means, values.reshape(8, 3, 2, 3).mean(axis=1))


def test_a_missing_hour_empties_what_it_touches_and_no_more():
    values = np.ones((24, 2))
    values[4, 0] = np.nan
    means = day_steps.overlap_mean(HOURS, values, THREE_HOURLY)
    assert np.isnan(means[:, 0]).tolist() == [False, True, *[False] * 6]
    assert np.isfinite(means[:, 1]).all()


def test_the_least_share_decides_how_much_may_be_missing():
    values = np.arange(24.0)
    values[4] = np.nan  # two of three hours of the second step are known: 3 and 5
    for share, expected in ((0.6, 4.0), (2 / 3, 4.0), (0.7, np.nan)):
        means = day_steps.overlap_mean(HOURS, values, THREE_HOURLY, least_share=share)
        np.testing.assert_allclose(means[1], expected)


def test_hours_outside_the_given_ones_are_missing():
    means = day_steps.overlap_mean([[0, 6], [12, 18]], [1.0, 3.0], [0, 6, 9, 15, 24])
    np.testing.assert_allclose(means, [1, np.nan, np.nan, np.nan])
    means = day_steps.overlap_mean([[0, 6], [12, 18]], [1.0, 3.0], [0, 6, 9, 15, 24], least_share=0)
    np.testing.assert_allclose(means, [1, np.nan, 3, 3])


@pytest.mark.parametrize(
    ("edges", "values", "out", "share"),
    [
        ([[0, 3], [2, 5]], [1, 1], DAY, 1),
        ([3, 0], [1], DAY, 1),
        ([0, 3], [1, 2], DAY, 1),
        ([0, 3], [1], [0], 1),
        ([0, 3], [1], DAY, 1.5),
        ([0, np.nan], [1], DAY, 1),
    ],
)
def test_what_makes_no_sense_is_refused(edges, values, out, share):
    with pytest.raises(ValueError, match=r"interval|edges|share"):
        day_steps.overlap_mean(edges, np.asarray(values, float), out, least_share=share)


@given(st.lists(fluxes, min_size=8, max_size=8), st.sampled_from([3, 1, 0.5, 1 / 6]))
def test_each_interval_keeps_its_mean_and_nights_stay_dark(flux, step):
    edges = np.linspace(0, 24, round(24 / step) + 1)
    profile = sun(edges)
    got = day_steps.split_by_sun(np.array(flux), THREE_HOURLY, edges, profile)
    back = day_steps.overlap_mean(edges, got.values, THREE_HOURLY)
    np.testing.assert_allclose(back, flux, rtol=1e-12, atol=1e-9)
    lit = np.repeat(~got.sunless, round(3 / step))
    assert (got.values[(profile == 0) & lit] == 0).all()


def test_the_course_is_the_suns():
    edges = np.linspace(0, 24, 49)
    profile = sun(edges)
    got = day_steps.split_by_sun([0.6 * profile.mean()], DAY, edges, profile)
    np.testing.assert_allclose(got.values, 0.6 * profile, rtol=1e-12)
    assert not got.sunless.any()


def test_energy_without_sun_is_spread_evenly_and_told():
    flux = np.zeros(8)
    flux[0], flux[7] = 5.0, 0.0
    got = day_steps.split_by_sun(flux, THREE_HOURLY, HOURS, sun(HOURS))
    assert got.values[:3].tolist() == [5, 5, 5]
    assert got.sunless.tolist() == [True, *[False] * 7]


def test_a_sun_too_weak_to_measure_is_no_sun():
    got = day_steps.split_by_sun([4.0], [0.0, 3.0], [0, 1, 2, 3], [5e-324, 0, 0])
    assert got.values.tolist() == [4, 4, 4]
    assert got.sunless.all()


def test_profiles_and_fluxes_broadcast():
    profile = sun(HOURS)
    places = np.stack([profile, 2 * profile], axis=1)
    one = day_steps.split_by_sun(np.full(8, 30.0), THREE_HOURLY, HOURS, places)
    other = day_steps.split_by_sun(np.full((8, 3, 2), 30.0), THREE_HOURLY, HOURS, profile)
    assert one.values.shape == (24, 2)
    assert other.values.shape == (24, 3, 2)
    np.testing.assert_allclose(one.values, other.values[:, 0])


def test_missing_flux_or_profile_empties_its_own_interval():
    flux, profile = np.full(8, 10.0), sun(HOURS)
    flux[3], profile[13] = np.nan, np.nan
    got = day_steps.split_by_sun(flux, THREE_HOURLY, HOURS, profile)
    assert np.flatnonzero(np.isnan(got.values)).tolist() == [9, 10, 11, 12, 13, 14]


def test_steps_outside_the_intervals_are_empty():
    got = day_steps.split_by_sun([10.0], [[6, 9]], HOURS, np.ones(24))
    assert np.flatnonzero(np.isfinite(got.values)).tolist() == [6, 7, 8]


def test_a_profile_below_zero_counts_as_no_sun():
    got = day_steps.split_by_sun([6.0], [0, 3], [0, 1, 2, 3], [-3.0, 1.0, 1.0])
    assert got.values.tolist() == [0, 9, 9]


@pytest.mark.parametrize("steps", [[0, 2, 4, 6], [0, 1, 2], [[0, 1], [2, 3], [3, 6]]])
def test_steps_that_do_not_fit_are_refused(steps):
    count = len(steps) if np.ndim(steps) == 2 else len(steps) - 1
    with pytest.raises(ValueError, match="steps must fill"):
        day_steps.split_by_sun([1.0, 2.0], [0, 3, 6], steps, np.ones(count))
    with pytest.raises(ValueError, match="as many"):
        day_steps.split_by_sun([1.0], [0, 3, 6], [0, 3, 6], np.ones(2))
