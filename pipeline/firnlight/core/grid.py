"""Where are the cells of a tile, and how is a tile cut into windows?"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from firnlight.core.errors import InputProblem

SHIFT_LIMIT_CELLS = 0.01  # a larger shift between two rasters of one tile is another grid


LOWEST_M, HIGHEST_M = -500.0, 9000.0  # heights of ground that are believed; others are holes in the elevation


@dataclass(frozen=True, slots=True)
class Window:
    """A rectangle of cells: first row, first column, number of rows, number of columns."""

    row: int
    col: int
    rows: int
    cols: int

    @property
    def slices(self) -> tuple[slice, slice]:
        return slice(self.row, self.row + self.rows), slice(self.col, self.col + self.cols)


@dataclass(frozen=True, slots=True)
class Grid:
    """Where the cells are: CRS, top-left corner, cell size, and size in cells; north is up.

    Attributes
    ----------
    crs : "EPSG:n" where there is a code, else WKT.
    left, top : outer corner of the first cell. [CRS units]
    dx, dy : cell width and height, both > 0. [CRS units]
    rows, cols : size. [cells]
    """

    crs: str
    left: float
    top: float
    dx: float
    dy: float
    rows: int
    cols: int

    def __post_init__(self) -> None:
        if not (self.dx > 0 and self.dy > 0 and self.rows > 0 and self.cols > 0):
            raise InputProblem(
                "grid",
                "cell size and shape",
                (self.dx, self.dy, self.rows, self.cols),
                "positive cell sizes and at least one cell",
                "write the raster north-up with a positive cell size",
            )

    @property
    def shape(self) -> tuple[int, int]:
        return self.rows, self.cols

    @property
    def right(self) -> float:
        return self.left + self.cols * self.dx

    @property
    def bottom(self) -> float:
        return self.top - self.rows * self.dy

    @property
    def transform(self) -> tuple[float, float, float, float, float, float]:
        """Affine coefficients a..f: x = a col + b row + c, y = d col + e row + f."""
        return self.dx, 0.0, self.left, 0.0, -self.dy, self.top

    def centres(self, window: Window) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """x of each column (cols,) and y of each row (rows,) of a window, cell centres. [CRS units]"""
        cols = np.arange(window.col, window.col + window.cols, dtype=np.float64)
        rows = np.arange(window.row, window.row + window.rows, dtype=np.float64)
        x: NDArray[np.float64] = self.left + (cols + 0.5) * self.dx
        y: NDArray[np.float64] = self.top - (rows + 0.5) * self.dy
        return x, y

    def windows(self, rows: int, cols: int) -> Iterator[Window]:
        """Cut into windows of at most (rows, cols), anchored at the top-left corner, row by row."""
        for row in range(0, self.rows, rows):
            for col in range(0, self.cols, cols):
                yield Window(row, col, min(rows, self.rows - row), min(cols, self.cols - col))

    @property
    def whole(self) -> Window:
        return Window(0, 0, self.rows, self.cols)

    def difference(self, other: Grid) -> str | None:
        """None if the grids are the same, else one sentence that says how they differ."""
        if self.crs != other.crs:
            return f"CRS {other.crs} against {self.crs}"
        if self.shape != other.shape:
            return f"shape {other.rows} x {other.cols} against {self.rows} x {self.cols}"
        if abs(other.dx / self.dx - 1) * self.cols > SHIFT_LIMIT_CELLS or (
            abs(other.dy / self.dy - 1) * self.rows > SHIFT_LIMIT_CELLS
        ):
            return f"cell size {other.dx} x {other.dy} against {self.dx} x {self.dy}"
        shift = max(abs(self.left - other.left) / self.dx, abs(self.top - other.top) / self.dy)
        return f"origin shifted by {shift:.3f} of a cell" if shift > SHIFT_LIMIT_CELLS else None
