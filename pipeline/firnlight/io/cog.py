"""The one way to write a map: blocks in any order, then one cloud-optimised GeoTIFF."""

from __future__ import annotations

import errno
import os
import shutil
import threading
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
import rasterio.shutil
from numpy.typing import NDArray
from rasterio.windows import Window as RasterWindow

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid, Window
from firnlight.core.layers import Layer
from firnlight.io.atomic import move_into_place, scratch_path
from firnlight.io.fingerprints import content_id

TILE = 512
LITTLE_ROOM_BYTES = 16 << 20  # a write that failed with less room than this failed for want of it


@dataclass(frozen=True)
class Written:
    """A finished file: its size in bytes and its content id."""

    size: int
    digest: str


def _write_failure(path: Path, text: str) -> OSError:
    """What a failed write of GDAL means: it does not pass the system's reason on, so the disk is asked."""
    if shutil.disk_usage(path.parent).free < LITTLE_ROOM_BYTES:
        return OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), str(path))
    return OSError(f"{path}: the map could not be written: {text}")


class CogWriter:
    """Collects the blocks of one layer and turns them into a COG beside its final place.

    Parameters
    ----------
    path : where the map will lie.
    layer : name, unit, step, nodata and bands of the file.
    grid : the tile's grid.
    tags : text tags of the file (key, date, tile).

    Notes
    -----
    `write` may be called from several threads. Nothing is seen at `path` before `publish`.
    Statistics, histogram and times are left out, so equal cells give equal bytes.
    """

    def __init__(self, path: Path, layer: Layer, grid: Grid, tags: dict[str, str]) -> None:
        self.path, self.layer, self.grid, self.tags = path, layer, grid, tags
        path.parent.mkdir(parents=True, exist_ok=True)
        self._raw, self._done = scratch_path(path), scratch_path(path)
        self._lock = threading.Lock()
        self._dataset: Any = rasterio.open(
            self._raw, "w", driver="GTiff", width=grid.cols, height=grid.rows, count=len(layer.parts),
            dtype=layer.dtype, crs=grid.crs, transform=rasterio.Affine(*grid.transform), nodata=layer.nodata,
            tiled=True, blockxsize=TILE, blockysize=TILE, interleave="band", bigtiff="IF_SAFER", sparse_ok=True,
        )  # fmt: skip
        self._describe()

    def _describe(self) -> None:
        layer, dataset = self.layer, self._dataset
        dataset.update_tags(**self.tags, AREA_OR_POINT="Area")
        for number, part in enumerate(layer.parts, 1):
            dataset.set_band_description(number, part if len(layer.parts) > 1 else layer.name)
            dataset.set_band_unit(number, layer.unit)
            tags = {"long_name": layer.long_name, "standard_name": layer.standard_name, "units": layer.unit}
            if layer.flags:
                tags["flag_meanings"] = " ".join(layer.flags)
                tags["flag_masks"] = " ".join(str(1 << bit) for bit in range(len(layer.flags)))
            dataset.update_tags(number, **{name: text for name, text in tags.items() if text})
        dataset.scales = [layer.step] * len(layer.parts)
        dataset.offsets = [0.0] * len(layer.parts)

    def write(self, window: Window, values: NDArray[Any]) -> None:
        """Store a block: (rows, cols), or (bands, rows, cols) for a layer of several parts."""
        block = values if values.ndim == 3 else values[np.newaxis]
        where = RasterWindow(window.col, window.row, window.cols, window.rows)
        failed = None
        with self._lock:
            try:
                self._dataset.write(block, window=where)
            except rasterio.errors.RasterioError as error:
                failed = str(error)
        if failed is not None:
            raise _write_failure(self.path, failed)

    @property
    def scratch(self) -> Path:
        """The plain raster of all blocks, to be read after `complete` and before `finish`."""
        return self._raw

    def complete(self) -> None:
        """All blocks are written: what is in memory goes to the scratch file.

        Raises
        ------
        OSError : it could not be written.
        """
        failed = None
        with self._lock:
            try:
                self._dataset.close()
            except rasterio.errors.RasterioError as error:
                failed = str(error)
        if failed is not None:
            raise _write_failure(self.path, failed)

    def finish(self, threads: int = 1) -> Written:
        """Close, build the COG, open it again and check it; the map is not yet in place.

        Raises
        ------
        OSError : GDAL could not write the file (no room, no permission).
        """
        failed = None
        try:
            with self._lock:
                self._dataset.close()
            rasterio.shutil.copy(
                str(self._raw), str(self._done), driver="COG", compress="ZSTD", level=1, predictor="YES",
                blocksize=TILE, overviews="IGNORE_EXISTING", overview_resampling=self.layer.overviews.upper(),
                overview_compress="ZSTD", overview_predictor="YES", num_threads=str(threads), bigtiff="IF_SAFER",
            )  # fmt: skip
            self._check()
        except (rasterio.errors.RasterioError, SystemError) as error:
            failed = str(error)
        finally:
            self._raw.unlink(missing_ok=True)
        if failed is not None:
            raise _write_failure(self.path, failed)
        return Written(self._done.stat().st_size, content_id(self._done))

    def _check(self) -> None:
        with rasterio.open(self._done) as dataset:
            layout = dataset.tags(ns="IMAGE_STRUCTURE").get("LAYOUT")
            if layout != "COG" or dataset.shape != self.grid.shape or dataset.count != len(self.layer.parts):
                raise OSError(f"{self._done}: not the map that was written")

    def publish(self) -> None:
        """Move the finished COG into place."""
        move_into_place(self._done, self.path)

    def discard(self) -> None:
        """Remove whatever is unpublished."""
        with self._lock:
            self._dataset.close()
        self._raw.unlink(missing_ok=True)
        self._done.unlink(missing_ok=True)


def read_block(dataset: Any, window: Window) -> NDArray[Any]:
    """All bands of a window of one of our maps: (bands, rows, cols).

    Raises
    ------
    InputProblem : the file is damaged.
    """
    try:
        return dataset.read(window=RasterWindow(window.col, window.row, window.cols, window.rows))
    except rasterio.errors.RasterioIOError as error:
        raise InputProblem(
            dataset.name,
            "cells",
            str(error),
            "a readable map",
            "delete the file: the next night makes it again",
        ) from error
