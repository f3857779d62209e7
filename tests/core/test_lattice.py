"""Does a lattice give every cell one value, the same bits however the tile is cut?"""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.grid import Grid, Window
from firnlight.core.lattice import Lattice, node_positions


@st.composite
def lattices(draw):
    """A tile's shape and a lattice that covers it, with or without a third axis."""
    rows, cols = draw(st.integers(1, 40)), draw(st.integers(1, 40))
    row_step, col_step = draw(st.integers(1, 17)), draw(st.integers(1, 17))
    shape = (
        (rows - 1) // row_step + 2,
        (cols - 1) // col_step + 2,
        *draw(st.sampled_from([(), (3,), (2, 2)])),
    )
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    return (rows, cols), Lattice(row_step, col_step, rng.normal(size=shape) * 1e3)


@given(lattices())
def test_each_value_has_the_bits_of_the_scalar_formula(made):
    """The formula is written out cell by cell, in the order that the kernels repeat."""
    (rows, cols), lattice = made
    got, v = lattice.at(Window(0, 0, rows, cols)), lattice.values
    for r in range(rows):
        for c in range(cols):
            i, j = r // lattice.row_step, c // lattice.col_step
            fr, fc = (
                (r - i * lattice.row_step) / lattice.row_step,
                (c - j * lattice.col_step) / lattice.col_step,
            )
            top = v[i, j] + (v[i, j + 1] - v[i, j]) * fc
            bottom = v[i + 1, j] + (v[i + 1, j + 1] - v[i + 1, j]) * fc
            assert np.array_equal(got[r, c], top + (bottom - top) * fr)


@given(lattices(), st.data())
def test_cutting_never_changes_a_bit(made, data):
    (rows, cols), lattice = made
    whole = lattice.at(Window(0, 0, rows, cols))
    row, col = data.draw(st.integers(0, rows - 1)), data.draw(st.integers(0, cols - 1))
    height, width = data.draw(st.integers(1, rows - row)), data.draw(st.integers(1, cols - col))
    part = lattice.at(Window(row, col, height, width))
    assert part.tobytes() == np.ascontiguousarray(whole[row : row + height, col : col + width]).tobytes()


def test_a_bilinear_function_is_met_and_nodes_are_kept():
    grid = Grid("EPSG:32624", 600000.0, 5160000.0, 30.0, 20.0, 23, 31)
    x, y = node_positions(grid, 8, 5)
    assert (len(x), len(y)) == (8, 4)
    lattice = Lattice(8, 5, 2.0 + 3e-3 * x[np.newaxis, :] - 1e-3 * y[:, np.newaxis] + 1e-9 * np.outer(y, x))
    cell_x, cell_y = grid.centres(grid.whole)
    want = 2.0 + 3e-3 * cell_x[np.newaxis, :] - 1e-3 * cell_y[:, np.newaxis] + 1e-9 * np.outer(cell_y, cell_x)
    np.testing.assert_allclose(lattice.at(grid.whole), want, rtol=1e-14)
    assert np.array_equal(lattice.at(grid.whole)[::8, ::5], lattice.values[:3, :7])


def test_missing_nodes_and_cells_beyond_the_nodes():
    lattice = Lattice(4, 4, np.array([[1.0, math.nan, 3.0], [1.0, 2.0, 3.0], [1.0, 2.0, 3.0]]))
    got = lattice.at(Window(0, 0, 8, 8))
    assert np.isnan(got[:4]).any()
    assert np.isfinite(got[4:]).all()
    with pytest.raises(IndexError):
        lattice.at(Window(0, 0, 9, 8))
