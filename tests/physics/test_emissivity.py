"""Does every kind of ground have an emissivity that a surface can have?"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.errors import SettingsProblem
from firnlight.core.tables import load_table
from firnlight.physics import emissivity


@given(st.floats(-1, 1), st.floats(0, 0.6))
def test_land_is_nearly_black(ndvi, red):
    assert 0.95 < emissivity.from_ndvi(ndvi, red) <= 0.99


def test_ndvi_thresholds():
    """Sobrino, Jimenez-Munoz & Paolini (2004), Remote Sens. Environ. 90:434-440, worked by hand."""
    got = emissivity.from_ndvi([0.1, 0.1, 0.2, 0.35, 0.5, 0.8], [0.0, 0.2, 0.2, 0.2, 0.2, 0.2])
    np.testing.assert_allclose(got, [0.979, 0.972, 0.986, 0.987, 0.990, 0.990], atol=1e-12)


def test_greener_is_blacker_above_the_lower_threshold():
    got = emissivity.from_ndvi(np.linspace(0.2, 1, 400), 0.1)
    assert (np.diff(got) >= 0).all()


def test_missing_and_impossible_indices():
    assert np.isnan(emissivity.from_ndvi([np.nan, 1.2, -1.01, 0.5], [0.1, 0.1, 0.1, np.nan])).all()
    assert np.isnan(emissivity.from_leaf_area([np.nan, -0.1])).all()


def test_leaf_area():
    """0.95 + 0.01 LAI, 0.98 at most."""
    np.testing.assert_allclose(emissivity.from_leaf_area([0, 1.5, 3, 6]), [0.95, 0.965, 0.98, 0.98])


def test_covers_are_within_what_their_row_says():
    for name, row in load_table("emissivity").rows.items():
        if "emissivity" in row:
            low, high = row["range"]
            assert low <= emissivity.covers()[name] <= high <= 1, name
            assert row["source"] != load_table("emissivity").source
    assert 0.98 <= emissivity.covers()["snow"] <= 0.99  # from memory: fresh snow


@pytest.mark.parametrize(
    ("name", "cover"),
    [("snow", "snow"), ("conifer forest", "vegetation"), ("Bare Rock", "bare"), ("glacier", "ice"), ("lake", "water"),
     ("open ground", "ground"), ("forest road", "built")],
)  # fmt: skip
def test_land_cover_names_are_understood(name, cover):
    assert emissivity.of_cover(name) == emissivity.covers()[cover]


def test_given_values_come_first():
    given = {"conifer forest": 0.975, "water": 0.96}
    got = emissivity.by_cover(["conifer forest", "lake", "beech forest"], given)
    np.testing.assert_array_equal(got, [0.975, 0.96, emissivity.covers()["vegetation"]])


def test_unknown_name_is_refused_with_the_cure():
    with pytest.raises(SettingsProblem, match=r'"tarmac" = 0\.97'):
        emissivity.of_cover("tarmac")
