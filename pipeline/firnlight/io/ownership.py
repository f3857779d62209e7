"""To which tile does ground belong that several tiles hold? To the one whose centre is nearest."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import SHIFT_LIMIT_CELLS, Grid, Window
from firnlight.core.lattice import Lattice, node_positions
from firnlight.io.ground import between, cell_size_m, centre_lonlat, is_geographic, to_lonlat, unit_of

NODE_SPACING_M = 4000.0  # of the map from one tile's cells to another's: off by less than a hundredth of a cell
OUTLINE_POINTS = 22

_Holds = NDArray[np.bool_]  # cells of a window that the other tile holds
_Two = tuple[Any, Any]  # squared distances of its cells from the own centre and from the other's, in one unit


def _bounds_lonlat(grid: Grid, centre_lon: float) -> tuple[float, float, float, float]:
    """West, south, east, north of a tile's outline; longitudes within half a turn of `centre_lon`."""
    along = np.linspace(0, 1, OUTLINE_POINTS)
    x = grid.left + along * (grid.right - grid.left)
    y = grid.bottom + along * (grid.top - grid.bottom)
    flat = np.ones(OUTLINE_POINTS)
    xs = np.concatenate([x, x, grid.left * flat, grid.right * flat])
    ys = np.concatenate([grid.bottom * flat, grid.top * flat, y, y])
    move = to_lonlat(grid.crs)
    lon, lat = move.transform(xs, ys)
    lon = centre_lon + (lon - centre_lon + 180) % 360 - 180
    west, south, east, north = lon.min(), lat.min(), lon.max(), lat.max()
    if not is_geographic(grid.crs):
        for pole in (-90.0, 90.0):  # inside the outline every longitude and the pole itself are met
            px, py = move.transform(0.0, pole, direction="INVERSE")
            if grid.left <= px <= grid.right and grid.bottom <= py <= grid.top:
                west, east = centre_lon - 180, centre_lon + 180
                south, north = min(south, pole), max(north, pole)
    return west, south, east, north


def neighbours(grids: dict[str, Grid], tile: str) -> list[str]:
    """Other tiles that may hold ground of `tile`, in the fixed order."""
    centre = centre_lonlat(grids[tile])[0]
    west, south, east, north = _bounds_lonlat(grids[tile], centre)
    near = []
    for name, grid in grids.items():
        w, s, e, n = _bounds_lonlat(grid, centre)
        if name != tile and w <= east and e >= west and s <= north and n >= south:
            near.append(name)
    return near


def _unit_vectors(lon_deg: NDArray[np.float64], lat_deg: NDArray[np.float64]) -> NDArray[np.float64]:
    lon, lat = np.radians(lon_deg), np.radians(lat_deg)
    return np.stack([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)], axis=-1)


def _cells(window: Window) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    rows = np.arange(window.row, window.row + window.rows, dtype=np.int64)
    cols = np.arange(window.col, window.col + window.cols, dtype=np.int64)
    return rows[:, np.newaxis], cols[np.newaxis, :]


@dataclass(frozen=True)
class _SameCells:
    """A neighbour on the same cells: counted in half cells, so that nothing is rounded."""

    own: Grid
    other: Grid
    row: int  # of the other's first cell, in the own grid
    col: int
    weights: tuple[float, float]  # of squared rows and columns; the same for all tiles of the CRS

    def holds(self, window: Window) -> _Holds:
        r, c = _cells(window)
        return ((r >= self.row) & (r < self.row + self.other.rows)) & ((c >= self.col) & (c < self.col + self.other.cols))

    def distances(self, window: Window) -> _Two:
        r, c = _cells(window)

        def squared(grid: Grid, row: int, col: int) -> Any:
            down, across = (2 * (r - row) + 1 - grid.rows) ** 2, (2 * (c - col) + 1 - grid.cols) ** 2
            return down + across if self.weights[0] == self.weights[1] else self.weights[0] * down + self.weights[1] * across

        return squared(self.own, 0, 0), squared(self.other, self.row, self.col)


@dataclass(frozen=True)
class _SamePlane:
    """A neighbour of the same CRS on other cells; `shift` brings its x near (a turn of longitude)."""

    own: Grid
    other: Grid
    shift: float

    def _centres(self, window: Window) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        x, y = self.own.centres(window)
        return x[np.newaxis, :], y[:, np.newaxis]

    def holds(self, window: Window) -> _Holds:
        x, y = self._centres(window)
        left, right = self.other.left + self.shift, self.other.right + self.shift
        return ((x >= left) & (x < right)) & ((y > self.other.bottom) & (y <= self.other.top))

    def distances(self, window: Window) -> _Two:
        x, y = self._centres(window)

        def squared(grid: Grid, shift: float) -> Any:
            return (x - (grid.left + grid.right) / 2 - shift) ** 2 + (y - (grid.top + grid.bottom) / 2) ** 2

        return squared(self.own, 0.0), squared(self.other, self.shift)


@dataclass(frozen=True)
class _OtherPlane:
    """A neighbour in another CRS, seen from a tile's cells: its row and column, and both squared chords."""

    other: Grid
    row: Lattice
    col: Lattice
    to_own_centre: Lattice
    to_other_centre: Lattice

    def holds(self, window: Window) -> _Holds:
        row, col = self.row.at(window), self.col.at(window)
        return (row >= 0) & (row < self.other.rows) & (col >= 0) & (col < self.other.cols)

    def distances(self, window: Window) -> _Two:
        return self.to_own_centre.at(window), self.to_other_centre.at(window)


def _other_plane(own: Grid, other: Grid) -> _OtherPlane:
    step = max(1, min(64, int(NODE_SPACING_M / cell_size_m(own))))
    x, y = np.meshgrid(*node_positions(own, step, step))
    there_x, there_y = between(own.crs, other.crs).transform(x, y)
    points = _unit_vectors(*to_lonlat(own.crs).transform(x, y))

    def chords(grid: Grid) -> NDArray[np.float64]:
        centre = _unit_vectors(*(np.asarray(v) for v in centre_lonlat(grid)))
        return np.asarray(((points - centre) ** 2).sum(axis=-1))

    finite = np.isfinite(there_x) & np.isfinite(there_y)
    there_x, there_y = np.where(finite, there_x, 0.0), np.where(finite, there_y, 0.0)
    if is_geographic(other.crs):
        turn, middle = 2 * math.pi / unit_of(other.crs), (other.left + other.right) / 2
        there_x = middle + (there_x - middle + turn / 2) % turn - turn / 2
    row = np.where(finite, (other.top - there_y) / other.dy, -1e9)  # what has no place there is far outside
    col = np.where(finite, (there_x - other.left) / other.dx, -1e9)
    return _OtherPlane(other, *(Lattice(step, step, v) for v in (row, col, chords(own), chords(other))))


def _same_crs(own: Grid, other: Grid, first: Grid) -> _SameCells | _SamePlane:
    shift = 0.0
    if is_geographic(own.crs):
        turn = 2 * math.pi / unit_of(own.crs)
        shift = turn * round((own.left + own.right - other.left - other.right) / 2 / turn)
    col, row = (other.left + shift - own.left) / own.dx, (own.top - other.top) / own.dy
    stretch = max(abs(other.dx / own.dx - 1) * other.cols, abs(other.dy / own.dy - 1) * other.rows)
    if max(stretch, abs(col - round(col)), abs(row - round(row))) > SHIFT_LIMIT_CELLS:
        return _SamePlane(own, other, shift)
    return _SameCells(own, other, round(row), round(col), (first.dy**2, first.dx**2))


class Owner:
    """Which cells of a tile it owns itself; see `owned`."""

    def __init__(self, grids: dict[str, Grid], tile: str) -> None:
        own, order = grids[tile], list(grids)
        first = next(grid for grid in grids.values() if grid.crs == own.crs)
        self._rivals: list[tuple[bool, _SameCells | _SamePlane | _OtherPlane]] = []
        for name in neighbours(grids, tile):
            other = grids[name]
            rival = _same_crs(own, other, first) if other.crs == own.crs else _other_plane(own, other)
            self._rivals.append((order.index(name) < order.index(tile), rival))

    def mask(self, window: Window) -> NDArray[np.bool_]:
        """True where the tile owns the cell: (rows, cols)."""
        own = np.ones((window.rows, window.cols), bool)
        for earlier, rival in self._rivals:
            holds = rival.holds(window)
            rows, cols = np.flatnonzero(holds.any(axis=1)), np.flatnonzero(holds.any(axis=0))
            if rows.size == 0:
                continue
            shared = Window(int(rows[0]), int(cols[0]), int(rows[-1] - rows[0]) + 1, int(cols[-1] - cols[0]) + 1)
            there = replace(shared, row=window.row + shared.row, col=window.col + shared.col)
            mine, theirs = rival.distances(there)
            own[shared.slices] &= ~(holds[shared.slices] & ((theirs <= mine) if earlier else (theirs < mine)))
        return own


def owned(grids: dict[str, Grid], tile: str) -> Owner:
    """The ground that a tile owns, out of all tiles in their fixed order.

    A cell belongs to the tile unless another tile that holds the cell's centre has its own centre nearer, or
    as near and stands earlier in the order. Tiles of one CRS are compared in its plane, on common cells in
    whole numbers, so that every cell there has one owner. Tiles of two CRSs are compared by chords of the
    sphere; cells on the line between their halves overlap or gape by parts of a cell.
    """
    return Owner(grids, tile)
