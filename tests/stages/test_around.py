"""Is the albedo of the surroundings the mean of what was seen, however blocks are cut and threads take turns?"""

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from firnlight.core.grid import Window
from firnlight.stages.chain import Around

FILL = -32768


def some_albedo(rng, rows, cols, unseen):
    albedo = rng.integers(0, 10001, (rows, cols)).astype(np.int16)
    albedo[rng.random((rows, cols)) < unseen] = FILL
    return albedo


def gathered(albedo, step, windows):
    around = Around(*albedo.shape, step)
    for window in windows:
        around.add(albedo[window.slices], window)
    return around.mean()


def cut(rng, rows, cols):
    """Windows that fill the tile, cut at any row and column."""
    edges = []
    for size in (rows, cols):
        inner = rng.choice(np.arange(1, size), rng.integers(0, min(size, 5)), replace=False) if size > 1 else []
        edges.append([0, *sorted(int(one) for one in inner), size])
    return [
        Window(r, c, to - r, right - c)
        for r, to in zip(edges[0][:-1], edges[0][1:], strict=True)
        for c, right in zip(edges[1][:-1], edges[1][1:], strict=True)
    ]


@given(st.integers(0, 2**32 - 1), st.integers(1, 40), st.integers(1, 40), st.integers(1, 45))
@settings(deadline=None, max_examples=60)
def test_mean_of_the_seen_cells_in_each_coarse_cell(seed, rows, cols, step):
    rng = np.random.default_rng(seed)
    albedo = some_albedo(rng, rows, cols, 0.4)
    mean = gathered(albedo, step, [Window(0, 0, rows, cols)])
    assert mean.shape == (-(-rows // step), -(-cols // step))
    seen = albedo != FILL
    for i, j in np.ndindex(mean.shape):
        part = slice(i * step, (i + 1) * step), slice(j * step, (j + 1) * step)
        if seen[part].any():
            assert mean[i, j] == pytest.approx(albedo[part][seen[part]].mean() / 10000, abs=1e-12)
    if seen.any():
        assert albedo[seen].min() / 10000 - 1e-12 <= mean.min() <= mean.max() <= albedo[seen].max() / 10000 + 1e-12


@given(st.integers(0, 2**32 - 1), st.integers(1, 40), st.integers(1, 40), st.integers(1, 17))
@settings(deadline=None, max_examples=60)
def test_cutting_and_the_order_of_blocks_change_no_bit(seed, rows, cols, step):
    rng = np.random.default_rng(seed)
    albedo = some_albedo(rng, rows, cols, 0.4)
    whole = gathered(albedo, step, [Window(0, 0, rows, cols)])
    windows = cut(rng, rows, cols)
    rng.shuffle(windows)
    assert gathered(albedo, step, windows).tobytes() == whole.tobytes()


def test_threads_in_any_order_give_the_same_bytes():
    rng = np.random.default_rng(5)
    albedo = some_albedo(rng, 300, 280, 0.3)
    windows = [Window(r, c, min(13, 300 - r), min(11, 280 - c)) for r in range(0, 300, 13) for c in range(0, 280, 11)]
    expected = gathered(albedo, 17, windows).tobytes()
    for _ in range(3):
        rng.shuffle(windows)
        around = Around(300, 280, 17)
        with ThreadPoolExecutor(8) as pool:
            list(pool.map(lambda window, to=around: to.add(albedo[window.slices], window), windows))
        assert around.mean().tobytes() == expected


def test_a_cell_without_a_seen_one_takes_the_mean_of_those_beside_it():
    """Weighted by the cells seen: 4 of 0.2 and 2 of 0.5 beside the first gap; the second is two steps away from any."""
    albedo = np.full((2, 8), FILL, np.int16)
    albedo[:, 0:2] = 2000
    albedo[0, 4:6] = 5000
    mean = gathered(albedo, 2, [Window(0, 0, 2, 8)])[0]
    np.testing.assert_allclose(mean, [0.2, 0.3, 0.5, 0.5], atol=1e-12)
    far = np.full((1, 9), FILL, np.int16)
    far[0, 0] = 7000
    np.testing.assert_allclose(gathered(far, 1, [Window(0, 0, 1, 9)]), 0.7, atol=1e-12)


def test_what_was_seen_is_not_changed_by_filling():
    rng = np.random.default_rng(2)
    albedo = some_albedo(rng, 60, 60, 0.0)
    full = gathered(albedo, 10, [Window(0, 0, 60, 60)])
    albedo[10:30, 20:50] = FILL
    part = gathered(albedo, 10, [Window(0, 0, 60, 60)])
    kept = np.ones((6, 6), bool)
    kept[1:3, 2:5] = False
    np.testing.assert_array_equal(part[kept], full[kept])
    assert np.isfinite(part).all()


@pytest.mark.parametrize("blocks", [0, 1])
def test_nothing_seen_is_black_ground(blocks):
    albedo = np.full((7, 9), FILL, np.int16)
    mean = gathered(albedo, 4, [Window(0, 0, 7, 9)] * blocks)
    assert mean.shape == (2, 3)
    assert not mean.any()


def test_a_large_tile_of_white_ground_does_not_overflow():
    """16 million cells of one coarse cell, added in blocks; the sum is beyond 32 bits."""
    block = np.full((1000, 1000), 10000, np.int16)
    around = Around(4000, 4000, 4000)
    for row in range(0, 4000, 1000):
        for col in range(0, 4000, 1000):
            around.add(block, Window(row, col, 1000, 1000))
    assert around.mean() == pytest.approx(1.0, abs=1e-12)
