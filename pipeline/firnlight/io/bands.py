"""Which numbers stand in a window of a scene's bands?"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Window
from firnlight.io.rasters import open_raster, read_window
from firnlight.io.scene_files import QUALITY_TYPES, OpenFiles, band_index, forget_trail
from firnlight.io.sources import BandSource, QualitySource, Scene

Numbers = NDArray[Any]
Read = tuple[Numbers, NDArray[np.float64], NDArray[np.uint8]]


def content_files(scene: Scene) -> list[str]:
    """Every file that the scene's item names for its bands and quality, once each."""
    sources: tuple[BandSource | QualitySource, ...] = (*scene.bands.values(), *scene.quality)
    return list(dict.fromkeys(one.path for one in sources))


def native_block(scene: Scene) -> tuple[int, int]:
    """Rows and columns of the blocks that the first band's file is cut into.

    Raises
    ------
    InputProblem : the scene has no band, or its file cannot be opened.
    """
    if not scene.bands:
        raise InputProblem(scene.item_path, f"scene {scene.id}", "no band", "at least one band", "add bands to the item")
    first = next(iter(scene.bands.values()))
    with open_raster(first.path) as dataset:
        rows, cols = dataset.block_shapes[band_index(dataset, first.path, "first band", first.band)]
    return int(rows), int(cols)


class SceneReader:
    """Reads windows of an opened scene; owns its file handles, so each thread needs a reader of its own.

    Parameters
    ----------
    scene : as `open_scene` returned it.
    bands : common names, in the order of the first axis of what is read.

    Raises
    ------
    InputProblem : a file has gone or cannot be opened any more.
    """

    def __init__(self, scene: Scene, bands: Sequence[str]) -> None:
        self._files = OpenFiles()
        self._names, self._scene = tuple(bands), scene
        self._sources = [scene.bands[name] for name in bands]
        self._quality = [(one, np.frombuffer(one.flags, np.uint8)) for one in scene.quality]
        kinds = {self._files.get(one.path).dtypes[one.band - 1] for one in self._sources}
        # one type on the scene's grid: handed on as stored; else float32 with NaN for empty
        self._as_stored = len(kinds) == 1 and all(one.ratio == 1 for one in self._sources)
        self.dtype = np.dtype(kinds.pop() if self._as_stored else np.float32)
        told = [one.nodata for one in self._sources]
        self._nodata = np.array([math.nan if one is None else one for one in told], np.float64)
        if not self._as_stored:
            self._nodata[:] = math.nan

    def read(self, window: Window) -> Read:
        """The numbers of a window, whatever the window's size.

        Returns
        -------
        values : (bands, rows, cols) in the files' common type, not yet scaled; float32 with NaN for empty
            cells where types differ or a band has another resolution.
        nodata : (bands,) stored number of an empty cell; NaN where there is none (a NaN is empty anyway).
        flags : (rows, cols) bits of our quality flags, joined over the quality bands; 0 without one.

        Raises
        ------
        InputProblem : cells cannot be read; names file, band and window.
        """
        values = np.empty((len(self._sources), window.rows, window.cols), self.dtype)
        for n, source in enumerate(self._sources):
            values[n] = self._band(self._names[n], source, window)
        flags = np.zeros((window.rows, window.cols), np.uint8)
        for one, table in self._quality:
            flags |= self._flags(one, table, window)
        return values, self._nodata.copy(), flags

    def close(self) -> None:
        """Close the files; the reader is of no use afterwards."""
        self._files.close()

    def _cells(self, what: str, path: str, band: int, window: Window) -> Numbers:
        try:
            return read_window(self._files.get(path), window, band)
        except InputProblem as problem:
            forget_trail(problem)
            problem.what = f"{what} of scene {self._scene.id}"
            problem.found = (
                f"cells that cannot be read in rows {window.row} to {window.row + window.rows - 1}, "
                f"columns {window.col} to {window.col + window.cols - 1} of band {band} of the file"
            )
            raise

    def _band(self, name: str, source: BandSource, window: Window) -> Numbers:
        cells = self._cells(f"band {name}", source.path, source.band, _file_window(window, source.ratio))
        if self._as_stored:
            return cells
        numbers = cells.astype(np.float64)
        if source.nodata is not None:
            numbers[cells == np.asarray(source.nodata).astype(cells.dtype)] = math.nan
        n = source.ratio
        if n > 1:
            # one fixed order of sums: no cutting into windows changes a bit; one empty cell empties the mean
            total = np.zeros((window.rows, window.cols))
            for i in range(n):
                for j in range(n):
                    total += numbers[i::n, j::n]
            numbers = total / (n * n)
        return _repeated(numbers, window, n).astype(np.float32)

    def _flags(self, source: QualitySource, table: NDArray[np.uint8], window: Window) -> NDArray[np.uint8]:
        cells = self._cells("quality", source.path, source.band, _file_window(window, source.ratio))
        flags: NDArray[np.uint8] = table[cells.view(QUALITY_TYPES[cells.dtype.name])]
        n = source.ratio
        if n > 1:
            joined = np.zeros((window.rows, window.cols), np.uint8)
            for i in range(n):
                for j in range(n):
                    joined |= flags[i::n, j::n]
            flags = joined
        return _repeated(flags, window, n)


def _file_window(window: Window, ratio: int) -> Window:
    """The cells of a file that a window of the scene's grid needs."""
    if ratio >= 1:
        return Window(window.row * ratio, window.col * ratio, window.rows * ratio, window.cols * ratio)
    n = -ratio
    row, col = window.row // n, window.col // n
    return Window(row, col, -(-(window.row + window.rows) // n) - row, -(-(window.col + window.cols) // n) - col)


def _repeated(cells: Numbers, window: Window, ratio: int) -> Numbers:
    if ratio >= 1:
        return cells
    n = -ratio
    row, col = window.row % n, window.col % n
    return cells.repeat(n, axis=0).repeat(n, axis=1)[row : row + window.rows, col : col + window.cols]
