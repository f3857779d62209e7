"""Rasters in: open with care, say on which grid they lie, read a window."""

from __future__ import annotations

import os
import stat
from pathlib import Path
from typing import Any

import rasterio
from numpy.typing import NDArray
from rasterio.windows import Window as RasterWindow

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid, Window

# formats that hold their own cells, by their first bytes: a VRT or a text driver could name any other file
MAGIC = {
    b"II*\0": "GTiff", b"MM\0*": "GTiff", b"II+\0": "GTiff", b"MM\0+": "GTiff",
    b"\0\0\0\x0cjP  ": "JP2OpenJPEG", b"\xff\x4f\xff\x51": "JP2OpenJPEG", b"EHFA_HEADER_TAG": "HFA",
}  # fmt: skip
# blocks are read once and whole, so GDAL's cache only costs memory
os.environ.setdefault("GDAL_CACHEMAX", "16")
os.environ.setdefault("GDAL_DISABLE_READDIR_ON_OPEN", "EMPTY_DIR")


def open_raster(path: str | Path) -> Any:
    """Open a raster file for reading.

    Raises
    ------
    InputProblem : no plain file, or not a raster of an allowed format.
    """
    name = str(path)
    wanted = "a raster file (GeoTIFF, JPEG 2000 and such)"
    try:
        mode = os.stat(name).st_mode
    except (OSError, ValueError) as error:
        text = getattr(error, "strerror", None) or str(error)
        raise InputProblem(name, "file", text, wanted, "deliver the file, or correct its path") from None
    if not stat.S_ISREG(mode):
        raise InputProblem(name, "file", "a folder or device", wanted, "replace it by the file itself")
    if os.path.getsize(name) == 0:
        raise InputProblem(name, "file", "0 bytes", wanted, "deliver the file again")
    try:
        with open(name, "rb") as stream:
            first = stream.read(16)
    except OSError as error:
        raise InputProblem(name, "file", error.strerror or str(error), wanted, "make the file readable") from None
    driver = next((known for magic, known in MAGIC.items() if first.startswith(magic)), None)
    if driver is None:
        raise InputProblem(name, "file", f"bytes that begin {first!r}", wanted, "deliver the file again as a raster")
    try:
        return rasterio.open(name, driver=driver, sharing=False)
    except rasterio.errors.RasterioError as error:
        found = f"a broken {driver} file ({error})"
        raise InputProblem(name, "file", found, wanted, "deliver the file again: it is damaged or cut short") from None


def crs_text(crs: Any, where: str) -> str:
    """A CRS as "EPSG:n" where it has a code, else as WKT.

    Raises
    ------
    InputProblem : there is none.
    """
    if crs is None or not crs.to_wkt():
        raise InputProblem(where, "CRS", "none", "a coordinate reference system", "write the CRS into the file")
    code = crs.to_epsg()
    return f"EPSG:{code}" if code else str(crs.to_wkt())


def dataset_grid(dataset: Any) -> Grid:
    """The grid of an open raster.

    Raises
    ------
    InputProblem : no CRS, or rotated or south-up cells.
    """
    t = dataset.transform
    if t.b or t.d or t.a <= 0 or t.e >= 0:
        raise InputProblem(
            dataset.name,
            "geotransform",
            tuple(t)[:6],
            "north-up cells without rotation",
            "warp the raster north-up",
        )
    return Grid(crs_text(dataset.crs, dataset.name), t.c, t.f, t.a, -t.e, dataset.height, dataset.width)


def grid_of(path: str | Path) -> Grid:
    """The grid of a raster file; what `open_raster` and `dataset_grid` refuse is refused."""
    with open_raster(path) as dataset:
        return dataset_grid(dataset)


def read_window(dataset: Any, window: Window, band: int = 1) -> NDArray[Any]:
    """The cells of one band in a window: (rows, cols).

    Raises
    ------
    InputProblem : the file is damaged or cut short.
    """
    try:
        return dataset.read(band, window=RasterWindow(window.col, window.row, window.cols, window.rows))
    except rasterio.errors.RasterioError:
        found = f"cells that cannot be read near row {window.row}, column {window.col}"
        fix = "deliver the file again: it is damaged or cut short"
        raise InputProblem(dataset.name, f"band {band}", found, "a whole file", fix) from None


def read_bands(dataset: Any, window: Window, bands: list[int]) -> NDArray[Any]:
    """The cells of some bands in a window: (bands, rows, cols).

    Raises
    ------
    InputProblem : the file is damaged or cut short.
    """
    try:
        return dataset.read(bands, window=RasterWindow(window.col, window.row, window.cols, window.rows))
    except rasterio.errors.RasterioError:
        found = f"cells that cannot be read near row {window.row}, column {window.col}"
        raise InputProblem(dataset.name, "cells", found, "a whole file", "delete the file: it is made again") from None
