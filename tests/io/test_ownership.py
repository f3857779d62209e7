"""Does every piece of ground that tiles share have one owner?"""

from dataclasses import replace

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Geod, Transformer

from firnlight.core.grid import Grid, Window
from firnlight.io.ground import areas, cell_areas_cm2
from firnlight.io.ownership import neighbours, owned

SCALES = {  # cell width and height, and the corner of the common cells; some without an exact binary form
    "EPSG:32624": (30.0, 30.0, 600000.0, 5160000.0),
    "EPSG:32625": (0.1, 0.7, 300000.3, 5160000.1),
    "EPSG:4326": (1 / 3600, 1 / 1200, 179.99, 46.5),
    "EPSG:3035": (20.0, 10.0, 4e6, 3e6),
}


@st.composite
def tiles(draw):
    """Up to five tiles on one cell grid: the grids, and each tile's first row and column."""
    crs = draw(st.sampled_from(sorted(SCALES)))
    dx, dy, left, top = SCALES[crs]
    grids, corners = {}, {}
    same = draw(st.booleans())  # equal sizes make ties
    size = draw(st.integers(1, 12)), draw(st.integers(1, 12))
    for n in range(draw(st.integers(1, 5))):
        row, col = draw(st.integers(0, 14)), draw(st.integers(0, 14))
        rows, cols = size if same else (draw(st.integers(1, 12)), draw(st.integers(1, 12)))
        grids[f"t{n}"] = Grid(crs, left + col * dx, top - row * dy, dx, dy, rows, cols)
        corners[f"t{n}"] = row, col
    return grids, corners


@given(tiles())
@settings(deadline=None, max_examples=150)
def test_every_cell_of_a_common_grid_has_one_owner(made):
    grids, corners = made
    owners, held = np.zeros((30, 30), int), np.zeros((30, 30), bool)
    for name, grid in grids.items():
        row, col = corners[name]
        there = slice(row, row + grid.rows), slice(col, col + grid.cols)
        owners[there] += owned(grids, name).mask(grid.whole)
        held[there] = True
    assert np.array_equal(owners == 1, held)
    assert owners.max() == 1


@given(tiles(), st.integers(1, 5), st.integers(1, 5))
@settings(deadline=None, max_examples=50)
def test_cutting_never_changes_the_owner(made, rows, cols):
    grids, _ = made
    name = next(iter(grids))
    owner = owned(grids, name)
    whole = owner.mask(grids[name].whole)
    for window in grids[name].windows(rows, cols):
        assert np.array_equal(owner.mask(window), whole[window.slices])


def test_nearest_centre_wins_and_ties_go_to_the_earlier():
    first = Grid("EPSG:32624", 600000.0, 5160000.0, 30.0, 30.0, 10, 10)
    second = replace(first, left=600000.0 + 5 * 30)  # shares columns 5 to 9; the middle one, 7, is a tie
    a, b = owned({"a": first, "b": second}, "a"), owned({"a": first, "b": second}, "b")
    assert a.mask(first.whole)[0].tolist() == [True] * 8 + [False] * 2
    assert b.mask(second.whole)[0].tolist() == [False] * 3 + [True] * 7
    turned = owned({"b": second, "a": first}, "a").mask(first.whole)[0]
    assert turned.tolist() == [True] * 7 + [False] * 3


def test_distance_is_measured_on_the_ground_not_in_cells():
    """Cells four times as high as wide, against distances from coordinates (exact here)."""
    first = Grid("EPSG:32624", 600000.0, 5160000.0, 10.0, 40.0, 20, 20)
    second = replace(first, left=600050.0, top=5160000.0 - 7 * 40)
    x, y = first.centres(first.whole)
    x, y = x[np.newaxis, :], y[:, np.newaxis]
    holds = (x > second.left) & (y < second.top)
    far = [(x - (g.left + g.right) / 2) ** 2 + (y - (g.top + g.bottom) / 2) ** 2 for g in (first, second)]
    want = ~holds | (far[0] <= far[1])
    assert np.array_equal(owned({"a": first, "b": second}, "a").mask(first.whole), want)


def test_other_cells_of_one_crs_are_compared_by_coordinates():
    fine = Grid("EPSG:32624", 600000.0, 5160000.0, 10.0, 10.0, 60, 60)
    coarse = Grid("EPSG:32624", 600305.0, 5160000.0, 30.0, 30.0, 20, 20)
    grids = {"fine": fine, "coarse": coarse}
    x = fine.centres(fine.whole)[0]
    want = (x < coarse.left) | (np.abs(x - 600300) <= np.abs(x - 600605))
    assert np.array_equal(owned(grids, "fine").mask(fine.whole)[0], want)
    total = sum(owned(grids, n).mask(g.whole).sum() * g.dx * g.dy for n, g in grids.items())
    assert total == pytest.approx((coarse.right - fine.left) * 600, rel=0.02)


def test_degrees_are_counted_on_across_180():
    east = Grid("EPSG:4326", 179.5, 46.5, 0.05, 0.05, 10, 20)  # to 180.5
    west = Grid("EPSG:4326", -180.0, 46.5, 0.05, 0.05, 10, 20)  # the same ground from 180 to 181
    grids = {"east": east, "west": west}
    assert neighbours(grids, "east") == ["west"]
    assert owned(grids, "east").mask(east.whole)[0].tolist() == [True] * 15 + [False] * 5
    assert owned(grids, "west").mask(west.whole)[0].tolist() == [False] * 5 + [True] * 15


def test_far_tiles_are_no_neighbours_and_a_pole_is_seen():
    grid = Grid("EPSG:32624", 600000.0, 5160000.0, 30.0, 30.0, 100, 100)
    grids = {"a": grid, "far": replace(grid, top=6e6), "other": replace(grid, crs="EPSG:32601")}
    assert neighbours(grids, "a") == []
    cap = Grid("EPSG:3413", -200000.0, 200000.0, 1000.0, 1000.0, 400, 400)
    strip = Grid("EPSG:4326", 100.0, 89.9, 0.1, 0.01, 5, 50)
    assert neighbours({"cap": cap, "strip": strip}, "strip") == ["cap"]
    assert neighbours({"cap": cap, "strip": strip}, "cap") == ["strip"]


def outline_lonlat(grid):
    box = shapely.segmentize(shapely.box(grid.left, grid.bottom, grid.right, grid.top), 500)
    move = Transformer.from_crs(grid.crs, "EPSG:4326", always_xy=True)
    return shapely.transform(box, lambda xy: np.column_stack(move.transform(xy[:, 0], xy[:, 1])))


def test_two_zones_hold_their_union_once():
    """Owned areas of four tiles of two UTM zones against their union's geodesic area (pyproj.Geod, shapely).

    A cell on a tile's outline or on the line between two owners is in or out as a whole; its error is within
    half a cell and random, so over the outlines it stays below a hundredth of their cells' area.
    """
    lon, lat = -36.0, 46.5  # where zones 24 and 25 meet
    grids = {}
    for name, crs, shift_x, shift_y in (
        ("a", "EPSG:32624", -20000, 3000),
        ("b", "EPSG:32625", -6000, 1000),
        ("c", "EPSG:32624", -17000, -12000),
        ("d", "EPSG:32625", -9000, -9000),
    ):
        x, y = Transformer.from_crs("EPSG:4326", crs, always_xy=True).transform(lon, lat)
        left, top = round(x / 50) * 50 + shift_x, round(y / 50) * 50 + shift_y
        grids[name] = Grid(crs, left, top, 50.0, 50.0, 420, 460)
    total = 0
    for name, grid in grids.items():
        owner, area = owned(grids, name), areas(grid)
        for window in grid.windows(200, 300):
            total += int(cell_areas_cm2(area, window)[owner.mask(window)].sum())
    union = shapely.union_all([outline_lonlat(grid) for grid in grids.values()])
    want = abs(Geod(ellps="WGS84").geometry_area_perimeter(union)[0])
    boundary = 4 * 2 * (420 + 460) * 50.0 * 50.0
    assert abs(total / 1e4 - want) < 0.01 * boundary
    assert want > 1.2 * areas(grids["a"]).at(Window(0, 0, 1, 1))[0, 0] / 1e4 * 420 * 460


def test_neighbours_in_two_zones_agree_cell_by_cell():
    """Each cell centre of a tile that the next zone's tile holds too is owned by one of both, but for centres
    within a cell of the line between them."""
    west = Grid("EPSG:32624", 715000.0, 5160000.0, 30.0, 30.0, 400, 400)
    move = Transformer.from_crs("EPSG:32624", "EPSG:32625", always_xy=True)
    x, y = move.transform(721000.0, 5160000.0)
    east = Grid("EPSG:32625", round(x / 30) * 30.0, round(y / 30) * 30.0, 30.0, 30.0, 400, 400)
    grids = {"west": west, "east": east}
    mine, theirs = owned(grids, "west").mask(west.whole), owned(grids, "east").mask(east.whole)
    cx, cy = west.centres(west.whole)
    ex, ey = move.transform(*np.meshgrid(cx, cy))
    col, row = np.floor((ex - east.left) / 30).astype(int), np.floor((east.top - ey) / 30).astype(int)
    shared = (row >= 0) & (row < 400) & (col >= 0) & (col < 400)
    assert mine[~shared].all()
    both = mine[shared].astype(int) + theirs[row[shared], col[shared]]
    assert shared.sum() > 40000
    assert (both != 1).sum() < 400
    assert 0.3 < mine[shared].mean() < 0.7
