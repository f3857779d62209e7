"""Where on the demo's plane lie the cells of a tile, and how are smooth fields of the plane read at cells?"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from pyproj import Transformer

from firnlight.core.grid import Grid
from firnlight.core.lattice import node_positions
from firnlight.demo.noise import Floats

LONGITUDE_DEG, LATITUDE_DEG = -36.0, 46.5  # the plane's origin: open ocean on the edge of two UTM zones
PLANE = f"+proj=tmerc +lat_0={LATITUDE_DEG} +lon_0={LONGITUDE_DEG} +k=1 +datum=WGS84 +units=m +type=crs"
NODE_CELLS = 64  # between exact positions; bilinear in between is good to 0.2 m

Field = Callable[[Floats, Floats], Floats]
Whole = NDArray[np.int64]
Doubles = NDArray[np.float64]


@lru_cache(maxsize=64)
def _between(source: str, target: str) -> Transformer:
    return Transformer.from_crs(source, target, always_xy=True)


def to_plane(x: Doubles, y: Doubles, crs: str) -> tuple[Doubles, Doubles]:
    """From coordinates of a CRS to the plane; any shape. [m]"""
    px, py = _between(crs, PLANE).transform(x, y)
    return np.asarray(px, np.float64), np.asarray(py, np.float64)


def from_plane(x_m: Doubles, y_m: Doubles, crs: str) -> tuple[Doubles, Doubles]:
    """From the plane to coordinates of a CRS, longitude first; any shape."""
    x, y = _between(PLANE, crs).transform(x_m, y_m)
    return np.asarray(x, np.float64), np.asarray(y, np.float64)


class TilePlane:
    """Plane coordinates of the cells of a tile, also a few cells outside it."""

    def __init__(self, grid: Grid) -> None:
        self.grid = grid
        x, y = node_positions(grid, NODE_CELLS, NODE_CELLS)
        self._nodes = to_plane(*np.meshgrid(x, y), grid.crs)

    def at(self, rows: Whole, cols: Whole) -> tuple[Floats, Floats]:
        """x and y of the cells at these rows and columns: (rows, cols) each. [m]"""
        return self._read(self._nodes[0], rows, cols), self._read(self._nodes[1], rows, cols)

    def _read(self, nodes: Doubles, rows: Whole, cols: Whole) -> Floats:
        i, j = (np.clip(n // NODE_CELLS, 0, size - 2) for n, size in zip((rows, cols), nodes.shape, strict=True))
        fr, fc = (rows / NODE_CELLS - i)[:, np.newaxis], cols / NODE_CELLS - j
        first = int(i.min())
        near = nodes[first : int(i.max()) + 2]
        wide = near[:, j] + (near[:, j + 1] - near[:, j]) * fc
        i = i - first
        return (wide[i] + (wide[i + 1] - wide[i]) * fr).astype(np.float32)

    def smooth(self, field: Field, rows: Whole, cols: Whole, step: int) -> Floats:
        """A field read at every `step`-th cell and run smoothly between: (rows, cols).

        Rows and columns must be without gaps. A cell's value depends on its place in the tile alone.
        Good for fields whose hills are many steps wide (third-order convolution).
        """
        node_rows, node_cols = _nodes_for(rows, step), _nodes_for(cols, step)
        coarse = field(*self.at(node_rows * step, node_cols * step))
        j, weights = _taps(cols, node_cols[0], step)
        wide = weights[0] * coarse[:, j]
        for tap in (1, 2, 3):
            wide += weights[tap] * coarse[:, j + tap]
        i, weights = _taps(rows, node_rows[0], step)
        out = weights[0][:, np.newaxis] * wide[i]
        for tap in (1, 2, 3):
            out += weights[tap][:, np.newaxis] * wide[i + tap]
        return np.asarray(out, np.float32)


def _nodes_for(cells: Whole, step: int) -> Whole:
    return np.arange(cells[0] // step - 1, cells[-1] // step + 3)


def _taps(cells: Whole, first: int, step: int) -> tuple[Whole, Floats]:
    """First of the four nodes around each cell, and the weights of the four (Catmull-Rom)."""
    node = cells // step
    t = (cells - node * step) / step
    weights = (
        ((2 - t) * t - 1) * t / 2,
        ((3 * t - 5) * t * t + 2) / 2,
        ((4 - 3 * t) * t + 1) * t / 2,
        (t - 1) * t * t / 2,
    )
    return node - 1 - first, np.array(weights, np.float32)
