"""How is a smooth function of cell position kept on few nodes and read at any cell to the same bits?"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import Grid, Window


@dataclass(frozen=True, eq=False)
class Lattice:
    """Values at the centres of rows 0, row_step, 2 row_step, ... and columns 0, col_step, ...

    Attributes
    ----------
    row_step, col_step : cells between nodes.
    values : (nr, nc) or (nr, nc, ...); the last nodes lie beyond the tile's last cell.
    """

    row_step: int
    col_step: int
    values: NDArray[np.float64]

    def at(self, window: Window) -> NDArray[np.float64]:
        """Bilinear values at the cells of a window: (rows, cols, ...); NaN beside a NaN node.

        A cell's value depends on its position alone, not on the window. Kernels repeat the same operations
        in the same order: along the columns on the node rows above and below, then between the two.

        Raises
        ------
        IndexError : the window reaches beyond the nodes.
        """
        r = np.arange(window.row, window.row + window.rows)
        c = np.arange(window.col, window.col + window.cols)
        i, j = r // self.row_step, c // self.col_step
        extra = (1,) * (self.values.ndim - 2)
        fr = ((r - i * self.row_step) / self.row_step).reshape(-1, 1, *extra)
        fc = ((c - j * self.col_step) / self.col_step).reshape(1, -1, *extra)
        # each node row is run along the columns once; the cells between two node rows share it
        v = self.values[i[0] : i[-1] + 2]
        along = v[:, j] + (v[:, j + 1] - v[:, j]) * fc
        top, bottom = along[i - i[0]], along[i - i[0] + 1]
        bottom -= top  # top + (bottom - top) * fr, in place
        bottom *= fr
        bottom += top
        return bottom


def node_positions(grid: Grid, row_step: int, col_step: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """x of each node column and y of each node row of a tile. [CRS units]"""
    rows = np.arange((grid.rows - 1) // row_step + 2) * row_step
    cols = np.arange((grid.cols - 1) // col_step + 2) * col_step
    x, y = grid.left + (cols + 0.5) * grid.dx, grid.top - (rows + 0.5) * grid.dy
    return x.astype(np.float64), y.astype(np.float64)
