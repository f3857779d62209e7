"""Is a tile cut into windows that cover it once, and does a grid say how it differs from another?"""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid

GRID = Grid("EPSG:32624", 600000.0, 5160000.0, 30.0, 30.0, 100, 80)


@given(st.integers(1, 70), st.integers(1, 70), st.integers(1, 40), st.integers(1, 40))
def test_windows_cover_every_cell_once(rows, cols, block_rows, block_cols):
    grid = replace(GRID, rows=rows, cols=cols)
    count = np.zeros(grid.shape, int)
    for window in grid.windows(block_rows, block_cols):
        count[window.slices] += 1
    assert (count == 1).all()


def test_centres_lie_half_a_cell_inside():
    x, y = GRID.centres(GRID.whole)
    assert (x[0], y[0]) == (600015.0, 5159985.0)
    assert (x[-1], y[-1]) == (GRID.right - 15, GRID.bottom + 15)


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"crs": "EPSG:32625"}, "CRS EPSG:32625"),
        ({"rows": 99}, "shape 99 x 80"),
        ({"left": 600015.0}, "shifted by 0.500"),
        ({"dx": 30.1}, "cell size 30.1"),
    ],
    ids=["crs", "shape", "shift", "size"],
)
def test_a_difference_is_said_in_words(change, said):
    assert said in GRID.difference(replace(GRID, **change))


def test_float_noise_is_no_difference():
    assert GRID.difference(replace(GRID, left=600000.0000001)) is None


def test_nonsense_is_refused():
    with pytest.raises(InputProblem, match="positive"):
        replace(GRID, dx=-30.0)
