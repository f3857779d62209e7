"""Is the uncertainty of a sum over blocks of ground that of the sum over all pairs of its cells?"""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from firnlight.core import correlation
from firnlight.core.correlation import block_cells, group_correlation, sum_variance

SIZE = 110  # cells along the side of the test ground


def over_pairs(field, length):
    """Sum of exp(-d / L) v v' over all pairs of cells: the definition."""
    at = np.argwhere(field).astype(float)
    v = field[field != 0]
    return v @ np.exp(-np.hypot(*(at[:, np.newaxis] - at).T) / length) @ v


def in_blocks(field, side):
    """Sums, centres and spreads per block of `side` cells, for cells of 1 m2."""
    at = np.argwhere(field)
    blocks, number = np.unique(at // side, axis=0, return_inverse=True)
    number = number.ravel()
    count = np.bincount(number)
    inside = (at + 0.5) / side - blocks[number]
    centres = np.stack([np.bincount(number, inside[:, k]) / count for k in range(2)], axis=1)
    spread = np.bincount(number, ((inside - centres[number]) ** 2).sum(axis=1)) / count
    return blocks, np.bincount(number, field[field != 0])[:, np.newaxis], centres, spread


def over_blocks(field, length):
    side = block_cells(length, 1.0)
    return sum_variance(*in_blocks(field, side), float(side), length)[0]


def alike(shape, length):
    """Mean correlation of the pairs of an even field."""
    return over_blocks(np.ones(shape), length) / math.prod(shape) ** 2


def compact(rng, size):
    """A region grown cell by cell from one: connected, ragged."""
    cells = [tuple(rng.integers(30, 80, 2))]
    taken = set(cells)
    while len(cells) < size:
        row, col = cells[rng.integers(len(cells))]
        down, across = ((0, 1), (0, -1), (1, 0), (-1, 0))[rng.integers(4)]
        new = row + down, col + across
        if new not in taken and min(new) >= 0 and max(new) < SIZE:
            taken.add(new)
            cells.append(new)
    out = np.zeros((SIZE, SIZE), bool)
    out[tuple(np.array(cells).T)] = True
    return out


def contour(rng, width):
    """Bands along the contour lines of a smooth height, as elevation bands are."""
    y, x = np.mgrid[:SIZE, :SIZE] / SIZE
    waves = (np.sin(2 * np.pi * (rng.uniform(-2, 2) * x + rng.uniform(-2, 2) * y + rng.random())) for _ in range(4))
    height = sum(waves)
    return abs(height - height[55, 55]) < width


def scattered(rng, share):
    out = rng.random((SIZE, SIZE)) < share
    out[rng.integers(0, SIZE, 3), rng.integers(0, SIZE, 3)] = True
    return out


# check values: exp(-d / L) summed over all pairs of cells by lag, worked out apart from this code. L up to two cells
# makes blocks of one cell, where only the mixture of normal curves departs (0.00003 of each pair); else blocks of 2 to
# 83 cells are taken as normal clouds of the same spread, which is 0.6 % of one block's own variance at most, and less
# of many blocks
@pytest.mark.parametrize(
    ("shape", "length", "mean", "within"),
    [
        ((2, 1), 1.0, 0.68393972, 0.0001),  # (1 + exp(-1)) / 2
        ((10, 10), 1.0, 0.05091035, 0.0005),
        ((10, 10), 2.0, 0.14557480, 0.0005),
        ((10, 10), 5.0, 0.39846103, 0.001),
        ((10, 10), 100.0, 0.94974256, 0.002),
        ((20, 20), 5.0, 0.19358538, 0.001),
        ((1000, 1000), 5000.0 / 30.0, 0.10992188, 0.001),
    ],
)
def test_mean_correlations_worked_out_over_all_pairs(shape, length, mean, within):
    assert alike(shape, length) == pytest.approx(mean, rel=within)


def test_three_kinds_of_errors_make_the_sum_worked_out_by_hand():
    local = 0.02 * math.sqrt(alike((10, 10), 5.0))
    # .03 / sqrt(100), .02 x sqrt(rho), .01: .003, .012624754, .01 -> .016382442
    assert math.hypot(0.003, local, 0.01) == pytest.approx(0.016382442, rel=0.001)


def test_no_correlation_leaves_the_sum_of_squares():
    assert alike((10, 10), 1e-6) == pytest.approx(0.01, rel=1e-6)


@pytest.mark.parametrize("blocks", [20, 50, 100])
def test_a_large_area_has_one_independent_value_per_two_pi_length_squared(blocks):
    # over a square of side a, (1 - |x| / a)(1 - |y| / a) exp(-r / L) integrates to
    # 2 pi L^2 - 16 L^3 / a + 12 L^4 / a^2, but for what lies beyond a
    a, places = blocks / 2.0, np.indices((blocks, blocks)).reshape(2, -1).T
    many = len(places)
    even = np.ones((many, 1)), np.full((many, 2), 0.5), np.full(many, 1 / 6)
    mean = sum_variance(places, *even, 0.5, 1.0)[0] / many**2
    assert mean * a**2 == pytest.approx(2 * math.pi - 16 / a + 12 / a**2, rel=0.0005)
    assert 1 / mean == pytest.approx(a**2 / (2 * math.pi), rel=4 / a)


@given(st.floats(0, 20), st.floats(1, 1e5))
def test_single_cells_have_the_exponential_correlation(far, length):
    assert group_correlation(np.array((far * length) ** 2), np.array(0.0), length) == pytest.approx(
        math.exp(-far), abs=0.0005
    )


@given(st.floats(0, 50), st.floats(0, 2), st.floats(0.001, 10), st.floats(0.001, 2))
def test_correlation_falls_with_distance_and_is_at_most_one(far2, spread2, farther, wider):
    def at(d, s):
        return float(group_correlation(np.array(d), np.array(s), 1.0))

    assert 0 <= at(far2 + farther, spread2) < at(far2, spread2) <= 1
    assert at(0.0, spread2 + wider) < at(0.0, spread2)
    assert at(0.0, 0.0) == pytest.approx(1, abs=1e-12)


@pytest.mark.parametrize(("down", "across"), [(0, 0), (0, 1), (1, 1), (2, 0), (3, 5), (8, 0)])
def test_two_square_blocks_against_the_average_over_their_cells(down, across):
    # blocks of half a length with 14 x 14 cells
    cells = (np.indices((14, 14)).reshape(2, -1).T + 0.5) / 14 * 0.5
    other = cells + np.array([down, across]) * 0.5
    direct = np.exp(-np.hypot(*(cells[:, np.newaxis] - other).T)).mean()
    spread2 = 2 * ((cells - cells.mean(axis=0)) ** 2).sum(axis=1).mean()
    apart2 = float(((other.mean(axis=0) - cells.mean(axis=0)) ** 2).sum())
    found = group_correlation(np.array(apart2), np.array(spread2), 1.0)
    # a square is not a normal cloud: 0.6 % with itself (mean distance 0.5214 of the side, not 0.5117), less farther off
    assert found == pytest.approx(direct, rel=0.007 if (down, across) == (0, 0) else 0.002)


@pytest.mark.parametrize("length", [6.0, 10.0, 20.0, 40.0])
@pytest.mark.parametrize("size", [3, 10, 30, 100, 300, 1000, 3000])
def test_ragged_regions_against_the_sum_over_all_pairs(length, size):
    rng = np.random.default_rng(size)
    for _ in range(6 if size < 1000 else 1):
        field = compact(rng, size) * rng.uniform(0.5, 1.5, (SIZE, SIZE))
        assert math.sqrt(over_blocks(field, length) / over_pairs(field, length)) == pytest.approx(1, abs=0.015)


@pytest.mark.parametrize("length", [6.0, 10.0, 20.0, 40.0])
@pytest.mark.parametrize(("kind", "amount"), [(contour, 0.02), (contour, 0.1), (scattered, 0.0005), (scattered, 0.01)])
def test_bands_and_scattered_cells_against_the_sum_over_all_pairs(length, kind, amount):
    rng = np.random.default_rng(3)
    for _ in range(4):
        field = kind(rng, amount) * rng.uniform(0.5, 1.5, (SIZE, SIZE))
        assert math.sqrt(over_blocks(field, length) / over_pairs(field, length)) == pytest.approx(1, abs=0.015)


@pytest.mark.parametrize("across", [False, True])
def test_two_patches_in_far_corners_of_one_block_are_the_worst_case(across):
    field = np.zeros((SIZE, SIZE))
    field[40:42, 40:42] = 1
    field[58:60, 58:60] = 1  # blocks of 20 cells: both in the one from 40 to 59
    if across:
        field = np.ascontiguousarray(field[:, ::-1])
    assert math.sqrt(over_blocks(field, 40.0) / over_pairs(field, 40.0)) == pytest.approx(1, abs=0.05)


def test_blocks_summed_by_lag_equal_blocks_summed_by_pairs(monkeypatch):
    rng = np.random.default_rng(8)
    even = in_blocks(np.ones((100, 80)), 5)
    ragged = in_blocks(contour(rng, 0.1) * rng.uniform(0.5, 1.5, (SIZE, SIZE)), 5)
    found = {}
    for few in (0, 10**6):
        monkeypatch.setattr(correlation, "FEW", few)
        found[few] = [sum_variance(*blocks, 5.0, 10.0)[0] for blocks in (even, ragged)]
    assert found[0][0] == pytest.approx(found[10**6][0], rel=1e-10)
    assert math.sqrt(found[0][1] / found[10**6][1]) == pytest.approx(1, abs=0.01)


@pytest.mark.parametrize("lag", [(0, 1), (1, 0), (1, 1), (1, -1), (2, -3), (0, 3), (3, 0)])
def test_near_blocks_take_the_places_of_their_own_cells(lag):
    # 64 pairs of single cells far from each other, the two of a pair at the edges or corners where their blocks are
    # nearest; so many blocks are summed by lag
    first = np.indices((8, 8)).reshape(2, -1).T * 40 + 5
    toward = 0.5 + 0.45 * np.sign(lag)
    blocks, centres = np.concatenate([first, first + lag]), np.repeat([toward, 1 - toward], 64, axis=0)
    assert len(blocks) > correlation.FEW
    apart = math.hypot(*(lag + (1 - toward) - toward))
    found = sum_variance(blocks, np.ones((128, 1)), centres, np.zeros(128), 1.0, 2.0)[0]
    assert found == pytest.approx(128 * (1 + math.exp(-apart / 2)), rel=1e-4)


@st.composite
def regions(draw):
    """Blocks with signed sums of two errors, their centres and spreads."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    many = draw(st.integers(1, 150))
    places = rng.choice(400, many, replace=False)
    blocks = np.stack([places // 20, places % 20], axis=1)
    sign = draw(st.sampled_from([1.0, -1.0]))
    sums = rng.uniform(0.0, 1.0, (many, 2)) * np.array([1.0, sign])
    return blocks, sums, rng.uniform(0.3, 0.7, (many, 2)), rng.uniform(0, 0.1, many)


@given(regions(), st.floats(1, 4))
@settings(deadline=None, max_examples=50)
def test_a_sum_lies_between_independent_and_fully_added_blocks(region, length):
    blocks, sums, centres, spread = region
    found = sum_variance(*region, 1.0, length)
    own = group_correlation(np.zeros(len(spread)), 2 * spread, length)
    assert (found >= own @ sums**2 * (1 - 1e-9)).all()
    assert (found <= sums.sum(axis=0) ** 2 * (1 + 1e-9)).all()
    # an error's sign, the place on the tile and the order of blocks are of no account
    other = np.random.default_rng(1).permutation(len(blocks))
    moved = sum_variance(blocks[other] + 7, -sums[other], centres[other], spread[other], 1.0, length)
    assert_allclose(moved, found, rtol=1e-9)
    assert_allclose(sum_variance(*region, 500.0, 500.0 * length), found, rtol=1e-9)


def test_errors_of_opposite_sign_cancel_nearby_and_not_far_off():
    even = np.full((2, 2), 0.5), np.zeros(2)
    signed = np.array([[1.0], [-1.0]])
    near = sum_variance(np.array([[0, 0], [0, 1]]), signed, *even, 1.0, 1000.0)[0]
    far = sum_variance(np.array([[0, 0], [0, 90]]), signed, *even, 1.0, 2.0)[0]
    assert near == pytest.approx(0.002, rel=0.3)  # 2 - 2 exp(-1 / 1000)
    assert far == pytest.approx(2.0)


def test_nothing_has_no_variance():
    none = np.zeros((0, 2), np.int64), np.zeros((0, 3)), np.zeros((0, 2)), np.zeros(0)
    assert sum_variance(*none, 1.0, 2.0).tolist() == [0.0, 0.0, 0.0]


@pytest.mark.parametrize(("length", "cell", "side"), [(5000.0, 10.0, 250), (5000.0, 30.0, 83), (1000.0, 5000.0, 1)])
def test_a_block_is_half_a_correlation_length_or_one_cell(length, cell, side):
    assert block_cells(length, cell) == side
