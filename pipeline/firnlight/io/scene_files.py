"""Do the files of a scene hold what its item says, and what do they tell that the item left out?"""

from __future__ import annotations

import math
from dataclasses import replace
from functools import lru_cache
from typing import Any

import numpy as np
from rasterio.crs import CRS

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid
from firnlight.core.tables import load_table
from firnlight.io.quality import marks_missing, with_nodata
from firnlight.io.rasters import dataset_grid, open_raster
from firnlight.io.sources import BandSource, QualitySource, Scene

BAND_TYPES = ("uint8", "int16", "uint16", "float32")
QUALITY_TYPES = {"uint8": np.uint8, "int8": np.uint8, "uint16": np.uint16, "int16": np.uint16}
LARGEST_RATIO = 100  # beyond it the files do not show the same scene


def forget_trail(problem: InputProblem) -> None:
    """Cut a problem off from GDAL's own errors behind it: some cannot travel between worker processes."""
    problem.__cause__ = problem.__context__ = None


class OpenFiles:
    """Files of one owner, each opened once."""

    def __init__(self) -> None:
        self._open: dict[str, Any] = {}

    def get(self, path: str) -> Any:
        if path not in self._open:
            try:
                self._open[path] = open_raster(path)
            except InputProblem as problem:
                forget_trail(problem)
                raise
        return self._open[path]

    def close(self) -> None:
        for dataset in self._open.values():
            dataset.close()
        self._open.clear()


def open_scene(scene: Scene, bands: tuple[str, ...]) -> Scene:
    """Compare the files of needed bands and quality with the item, and fill in what it left out.

    Scale, offset and nodata come from the item, then from the file's own tags; scale and offset then from
    the sensors table where it says `fixed_for_all_versions`.

    Parameters
    ----------
    bands : common names of the bands that are needed; others are not looked at.

    Returns
    -------
    The scene with scale, offset and ratio of every needed band; nodata is None where no number means empty.

    Raises
    ------
    InputProblem : a band is missing, a file cannot be opened, lies on another grid or holds other numbers
        than the item says, or scale, offset or nodata is told nowhere.
    """
    files = OpenFiles()
    try:
        quality = tuple(_open_quality(scene, source, files) for source in scene.quality)
        empty_told = any(marks_missing(one.flags) for one in quality)
        opened = dict(scene.bands)
        for name in bands:
            if name not in scene.bands:
                raise InputProblem(
                    scene.item_path,
                    f"band {name} of scene {scene.id}",
                    "no asset for it; there are " + (", ".join(scene.bands) or "no bands at all"),
                    f"the bands {', '.join(bands)}",
                    "add the band to the item, or choose another conversion",
                )
            opened[name] = _open_band(scene, name, files, empty_told)
        return replace(scene, bands=opened, quality=quality)
    finally:
        files.close()


@lru_cache(maxsize=256)
def _same_crs(one: str, other: str) -> bool:
    return one == other or bool(CRS.from_user_input(one) == CRS.from_user_input(other))


def grid_ratio(grid: Grid, found: Grid, where: str, what: str) -> int:
    """How many times finer (n) or coarser (-n) a file is than the scene's grid; 1 on the same grid.

    Raises
    ------
    InputProblem : the file's grid is not the scene's, nor a whole number of times finer or coarser.
    """
    if _same_crs(grid.crs, found.crs):
        found = replace(found, crs=grid.crs)
    ratio, wanted = 1, grid
    finer, coarser = round(grid.dx / found.dx), round(found.dx / grid.dx)
    if 1 < finer <= LARGEST_RATIO:
        ratio = finer
        wanted = replace(grid, dx=grid.dx / finer, dy=grid.dy / finer, rows=grid.rows * finer, cols=grid.cols * finer)
    elif 1 < coarser <= LARGEST_RATIO and grid.rows % coarser == 0 and grid.cols % coarser == 0:
        ratio = -coarser
        wanted = replace(
            grid,
            dx=grid.dx * coarser,
            dy=grid.dy * coarser,
            rows=grid.rows // coarser,
            cols=grid.cols // coarser,
        )
    difference = wanted.difference(found)
    if difference:
        raise InputProblem(
            where,
            f"{what}, grid",
            difference,
            "the grid in the item, or one a whole number of times finer or coarser",
            "deliver the band on the scene's grid, or write the item again if the grid in the item is wrong",
        )
    return ratio


def band_index(dataset: Any, path: str, what: str, band: int) -> int:
    if band > dataset.count:
        raise InputProblem(
            path,
            what,
            f"{dataset.count} bands",
            f"at least {band} bands as the item says",
            "correct `bands` in the item, or deliver the right file",
        )
    return band - 1


def _open_quality(scene: Scene, source: QualitySource, files: OpenFiles) -> QualitySource:
    dataset = files.get(source.path)
    index = band_index(dataset, source.path, "quality", source.band)
    kind = dataset.dtypes[index]
    largest = 256 if kind in ("uint8", "int8") else 65536
    if kind not in QUALITY_TYPES or largest > len(source.flags):
        raise InputProblem(
            source.path,
            "quality, data type",
            kind,
            "uint8" if len(source.flags) == 256 and kind in QUALITY_TYPES else "uint8, uint16 or int16",
            "correct data_type of the quality asset in the item, or write the raster in that type",
        )
    ratio = grid_ratio(scene.grid, dataset_grid(dataset), source.path, "quality")
    nodata = dataset.nodatavals[index]
    # the file's tag: GDAL has checked that it fits
    flags = with_nodata(source.flags, nodata if nodata is not None and float(nodata).is_integer() else None)
    return replace(source, flags=flags, ratio=ratio)


def _open_band(scene: Scene, name: str, files: OpenFiles, empty_told: bool) -> BandSource:
    source = scene.bands[name]
    what = f"band {name}"
    dataset = files.get(source.path)
    index = band_index(dataset, source.path, what, source.band)
    kind = dataset.dtypes[index]
    if kind not in BAND_TYPES:
        raise InputProblem(
            source.path,
            f"{what}, data type",
            kind,
            "one of " + ", ".join(BAND_TYPES),
            "write the raster in one of these",
        )
    if source.data_type and source.data_type != kind:
        raise InputProblem(
            source.path,
            f"{what}, data type",
            kind,
            f"{source.data_type} as the item says",
            "correct data_type in the item, or deliver the right file",
        )
    ratio = grid_ratio(scene.grid, dataset_grid(dataset), source.path, what)
    scale, offset = _scaling(scene, source, what, dataset.scales[index], dataset.offsets[index])
    nodata = source.nodata if source.nodata is not None else dataset.nodatavals[index]
    if nodata is None and kind != "float32" and not empty_told:
        raise InputProblem(
            source.path,
            f"{what}, nodata",
            "none in the item nor in the file",
            "the stored number of an empty cell, or a quality class such as fill",
            "add nodata to the band in the item, or run `firnlight describe` with --nodata",
        )
    if nodata is not None and kind != "float32" and not _holds(kind, nodata):
        raise InputProblem(
            source.path,
            f"{what}, nodata",
            nodata,
            f"a number that {kind} can hold",
            "correct nodata in the item",
        )
    return replace(source, scale=scale, offset=offset, nodata=nodata, ratio=ratio, data_type=kind)


def _holds(kind: str, number: float) -> bool:
    limits = np.iinfo(kind)
    return float(number).is_integer() and limits.min <= number <= limits.max


def _scaling(scene: Scene, source: BandSource, what: str, tag_scale: float, tag_offset: float) -> tuple[float, float]:
    scale, offset = source.scale, source.offset
    # a GeoTIFF holds both tags or none, and 1 and 0 are not written: they cannot be told from "no tags"
    if (tag_scale, tag_offset) != (1.0, 0.0):
        scale = tag_scale if scale is None else scale
        offset = tag_offset if offset is None else offset
    row = load_table("sensors").row(scene.sensor)
    if row["fixed_for_all_versions"]:
        scale = row["scale"] if scale is None else scale
        offset = row["offset"] if offset is None else offset
    for word, told in (("scale", scale), ("offset", offset)):
        if told is None or not math.isfinite(told) or (word == "scale" and told <= 0):
            raise InputProblem(
                source.path,
                f"{what}, {word}",
                "none in the item nor in the file" if told is None else told,
                f"the {word} that turns stored numbers into reflectance",
                f"add raster:{word} to the band in {scene.item_path} (a file that holds reflectance "
                "itself: scale 1, offset 0), or run `firnlight describe`",
            )
    assert scale is not None
    assert offset is not None
    return scale, offset
