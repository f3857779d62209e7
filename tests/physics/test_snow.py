"""Is the snow test the one that was published, and does the snow fraction stay a fraction?"""

import warnings

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.errors import InputProblem
from firnlight.physics.snow import is_snow, ndsi, snow_fraction, snow_limits

NAMES = ["salomonson_appel_2004", "salomonson_appel_2006", "gascoin_2020"]
reflectances = st.floats(-0.05, 1.2)


@given(st.lists(st.one_of(reflectances, st.just(float("nan")), st.just(0.0)), min_size=2, max_size=8))
def test_any_cell_gives_an_answer_without_a_warning(values):
    green, swir = np.array(values), np.array(values[::-1])
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        with np.errstate(all="raise", under="ignore"):
            index = ndsi(green, swir)
            shares = [snow_fraction(index, name) for name in NAMES]
            is_snow(green, green, swir)
    empty = np.isnan(green) | np.isnan(swir)
    for share in shares:
        assert (np.isnan(share) == empty).all()
        assert ((share[~empty] >= 0) & (share[~empty] <= 1)).all()


@pytest.mark.parametrize("name", NAMES)
def test_a_higher_index_never_gives_less_snow(name):
    share = snow_fraction(np.linspace(-1, 1, 401), name)
    assert (np.diff(share) >= 0).all()
    assert (share[:201] == 0).all()  # NDSI <= 0
    assert share[-1] > 0.9


def test_the_index_keeps_its_range_and_its_sign():
    assert ndsi([0.5, 0.5, 0.0, -0.01], [0.0, 0.5, 0.5, -0.02]).tolist() == [1, 0, -1, -1]
    assert ndsi(0.8, 0.1).shape == ()


def test_each_limit_is_kept_and_nan_is_not_snow():
    least, nir, green = snow_limits()
    assert (least, nir, green) == (0.4, 0.11, 0.1)  # tables/snow.toml, as in the papers it names
    low = 0.5 * (1 - least) / (1 + least)  # swir that gives exactly the least NDSI with green 0.5
    assert is_snow(0.5, 0.5, low - 1e-6)
    assert not is_snow(0.5, 0.5, low + 1e-6)
    assert not is_snow(0.5, nir, 0.05)
    assert is_snow(0.5, nir + 1e-6, 0.05)
    assert not is_snow(green, 0.5, 0.01)
    assert is_snow(green + 1e-6, 0.5, 0.01)
    nan = float("nan")
    assert not any(is_snow(*cell) for cell in [(nan, 0.5, 0.05), (0.5, nan, 0.05), (0.5, 0.5, nan)])


def test_water_has_a_high_index_but_is_not_snow():
    """Why the test asks for near infrared and green too: water 0.06, 0.02, 0.01 (common practice, no source)."""
    assert ndsi(0.06, 0.01) > 0.4
    assert not is_snow(0.06, 0.02, 0.01)


def test_an_unknown_formula_gets_the_nearest():
    with pytest.raises(InputProblem, match="write 'gascoin_2020'"):
        snow_fraction(0.5, "gascoin_2002")
