"""Is the sky's share of the light a share, does it fall as the sky clears, and does a missing value stay missing?"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.physics import diffuse

indices = st.floats(-0.5, 1.5)
hours = st.floats(0, 24)
altitudes = st.floats(0, 90)


@given(indices)
def test_erbs_is_a_share(k):
    assert 0.164 < diffuse.erbs(k) <= 1


@given(indices, hours, altitudes, indices, indices)
def test_brl_is_a_share(k, time, altitude, day, persistence):
    assert 0 < diffuse.brl(k, time, altitude, day, persistence) < 1


def test_erbs_falls_with_clearness():
    """But for the polynomial's rise before 0.80: 0.0007, in the published numbers."""
    share = diffuse.erbs(np.linspace(0, 1, 20_001))
    assert np.max(share - np.minimum.accumulate(share)) < 0.0008
    below = diffuse.erbs(np.linspace(0, 0.79, 20_001))
    assert (np.diff(below) <= 0).all()


def test_erbs_joins_its_three_parts():
    """The published parts meet within 0.0003."""
    for k in (0.22, 0.80):
        assert abs(diffuse.erbs(np.nextafter(k, 1)) - diffuse.erbs(k)) < 0.0003


@given(st.floats(0, 1), st.floats(0, 1), hours, altitudes, st.floats(0, 1))
def test_brl_falls_with_each_clearness(low, high, time, altitude, other):
    low, high = sorted((low, high))
    for place in (0, 3, 4):
        darker, clearer = ([other, time, altitude, other, other] for _ in range(2))
        darker[place], clearer[place] = low, high
        assert diffuse.brl(*clearer) <= diffuse.brl(*darker)


def test_clearness_is_clipped_to_its_range():
    assert diffuse.erbs([-0.2, 1.7]).tolist() == diffuse.erbs([0.0, 1.0]).tolist()
    assert diffuse.brl(-1, 12, 60, 3, 2) == diffuse.brl(0, 12, 60, 1, 1)


def test_nan_in_gives_nan():
    assert np.isnan(diffuse.erbs(np.nan))
    for place in range(5):
        inputs = [0.5, 12.0, 60.0, 0.55, 0.5]
        inputs[place] = np.nan
        assert np.isnan(diffuse.brl(*inputs)), place


def test_shapes_broadcast():
    assert diffuse.erbs(np.zeros((2, 3))).shape == (2, 3)
    assert diffuse.brl(np.zeros((4, 1)), np.full(3, 12.0), 45.0, np.zeros((4, 1)), 0.5).shape == (4, 3)


def test_clearness_index():
    k = diffuse.clearness_index([500.0, 0.0, 1500.0, 3.0, np.nan, 10.0], [1000.0, 1000.0, 1000.0, 0.0, 10.0, np.nan])
    np.testing.assert_array_equal(k, [0.5, 0, 1, np.nan, np.nan, np.nan])


def test_neighbour_mean_takes_the_one_there_is_at_sunrise_and_sunset():
    night = np.nan
    around = diffuse.neighbour_mean([night, 0.2, 0.4, 0.8, 0.6, night])
    np.testing.assert_allclose(around, [np.nan, 0.4, 0.5, 0.5, 0.8, np.nan])
    assert np.isnan(diffuse.neighbour_mean([night, 0.5, night])).all()


def test_neighbour_mean_keeps_places_apart():
    k = np.array([[0.2, 0.9], [0.4, 0.7], [0.6, np.nan]])
    np.testing.assert_allclose(diffuse.neighbour_mean(k), [[0.4, 0.7], [0.4, 0.9], [0.4, np.nan]])


@pytest.mark.parametrize("ends", [(0.0, 0.0), (1.0, 1.0)])
def test_neighbour_mean_stays_between(ends):
    assert (diffuse.neighbour_mean(ends) == ends).all()
