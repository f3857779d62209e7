"""How high is the ground of a tile and around it, on the tile's own grid?"""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.enums import Resampling
from rasterio.warp import reproject, transform_bounds

from firnlight.core.errors import InputProblem
from firnlight.core.grid import HIGHEST_M, LOWEST_M, Grid, Window
from firnlight.io.ground import areas, is_geographic, unit_of
from firnlight.io.rasters import dataset_grid, open_raster, read_window

SQUARE = 1e-6  # relative difference of a cell's sides that is rounding
UNEVEN = 0.01  # of cells of one projection within a tile; slopes are then right to a per cent


def square_cell_m(grid: Grid, where: str) -> float:
    """Side of the tile's cells on the ground, at the tile's centre. [m]

    Raises
    ------
    InputProblem : cells in degrees, not square, or of very different size within the tile: slopes and horizons cannot be
        worked out on them.
    """
    if is_geographic(grid.crs) or abs(grid.dx - grid.dy) > SQUARE * grid.dx:
        raise InputProblem(
            where, "grid", f"cells of {grid.dx:g} x {grid.dy:g} in {grid.crs[:40]}", "square cells in metres",
            "warp scenes and elevation to a projected grid, or set insolation.terrain = false",
        )  # fmt: skip
    nominal = grid.dx * unit_of(grid.crs)
    sides = np.sqrt(areas(grid).values) / 100  # from cm2
    true = float(sides[sides.shape[0] // 2, sides.shape[1] // 2])
    if np.ptp(sides) > UNEVEN * true:
        raise InputProblem(
            where, "grid", f"cells of {sides.min():.4g} to {sides.max():.4g} m on the ground", "cells of one size",
            "warp scenes and elevation to a projection made for the area, such as UTM, or set insolation.terrain = false",
        )  # fmt: skip
    return nominal if abs(nominal - true) < UNEVEN * true else true


def bounds_in(grid: Grid, crs: str) -> tuple[float, float, float, float]:
    """Left, bottom, right, top of a grid in another CRS."""
    box = transform_bounds(grid.crs, crs, grid.left, grid.bottom, grid.right, grid.top)
    return float(box[0]), float(box[1]), float(box[2]), float(box[3])


def reaches(other: Grid, grid: Grid, margin: float) -> bool:
    """Whether `other` covers some ground within `margin` of `grid`, in its units."""
    left, bottom, right, top = bounds_in(other, grid.crs)
    return (
        left < grid.right + margin
        and right > grid.left - margin
        and bottom < grid.top + margin
        and top > grid.bottom - margin
    )


def with_margin(
    grid: Grid, window: Window, margin: int, own: str | Path, around: Iterable[str | Path], unread: set[str]
) -> NDArray[np.float32]:
    """Elevation of a window of a tile and `margin` cells around it.

    Parameters
    ----------
    own : the tile's elevation, on its grid.
    around : other files that may cover the margin, the best last; any CRS and cell size, read by bilinear interpolation.
    unread : told of each of them that cannot be read: it is the ground of another tile, and this one goes on without.

    Returns
    -------
    (rows + 2 margin, cols + 2 margin); NaN where no file knows the ground. [m]

    Raises
    ------
    InputProblem : the tile's own file is damaged.
    """
    rows, cols = window.rows + 2 * margin, window.cols + 2 * margin
    out = np.full((rows, cols), np.nan, np.float32)
    left = grid.left + (window.col - margin) * grid.dx
    top = grid.top - (window.row - margin) * grid.dy
    place = rasterio.Affine(grid.dx, 0, left, 0, -grid.dy, top)
    for path in around:
        found = np.full((rows, cols), np.nan, np.float32)
        try:
            with open_raster(path) as source:
                dataset_grid(source)  # refuses what has no place
                reproject(
                    rasterio.band(source, 1), found, dst_transform=place, dst_crs=grid.crs, dst_nodata=np.nan,
                    resampling=Resampling.bilinear,
                )  # fmt: skip
        except (rasterio.errors.RasterioError, InputProblem):
            unread.add(str(path))
            continue
        np.copyto(out, found, where=_believed(found))
    row0, col0 = max(window.row - margin, 0), max(window.col - margin, 0)
    row1 = min(window.row + window.rows + margin, grid.rows)
    col1 = min(window.col + window.cols + margin, grid.cols)
    with open_raster(own) as source:
        values = own_heights(source, Window(row0, col0, row1 - row0, col1 - col0))
    at = (
        slice(row0 - window.row + margin, row1 - window.row + margin),
        slice(col0 - window.col + margin, col1 - window.col + margin),
    )
    np.copyto(out[at], values, where=~np.isnan(values))
    return out


def own_heights(dataset: object, window: Window) -> NDArray[np.float32]:
    """Elevation of a window of a tile: (rows, cols); NaN where the file has none, or none that ground can have. [m]"""
    values = plain_values(dataset, window)
    values[~_believed(values)] = np.nan
    return values


def plain_values(dataset: object, window: Window) -> NDArray[np.float32]:
    """The first band of a window: (rows, cols); NaN where the file has no data."""
    values: NDArray[np.float32] = read_window(dataset, window).astype(np.float32)
    nodata = getattr(dataset, "nodata", None)
    if nodata is not None:
        values[values == np.float32(nodata)] = np.nan
    return values


def _believed(values: NDArray[np.float32]) -> NDArray[np.bool_]:
    """Heights of ground; a hole that the file does not declare is often -9999 or -32768."""
    return np.asarray((values >= LOWEST_M) & (values <= HIGHEST_M))
