"""How are the demo's scenes and their truth written, block by block, whatever their size?"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.windows import Window

from firnlight.core.grid import Grid
from firnlight.core.layers import layer
from firnlight.demo import sky, terrain, truth
from firnlight.demo.item import write_item
from firnlight.demo.layout import Extent, Tile, outside_swath
from firnlight.demo.plane import TilePlane
from firnlight.demo.slopes import LARGEST_CELLS, Slopes, day_fluxes, slopes_of, true_albedo
from firnlight.demo.spectra import BANDS
from firnlight.demo.weather import Climate

STRIP_CELLS = 200_000  # worked on at once, so that it stays in the processor's cache
TOGETHER_BYTES = 200_000_000  # of unwritten blocks held for overpasses that share one pass over the ground
BYTES_A_CELL = 20  # of an overpass: six bands, quality and truth
CLOUD_BITS = (
    "bits: 1 cloud, 2 cloud shadow, 4 clear snow edge that the quality mask calls cloud, 8 thin cloud that it misses"
)
FLUX_LAYERS = ("insolation", "net_longwave")  # what follows from these and albedo is not written


@dataclass(frozen=True)
class Overpass:
    """An acquisition: its number, the state of season and sky, and the ground around."""

    number: int
    day: sky.Day
    around: Extent

    def scene(self, tile: Tile) -> str:
        return f"{tile.name}_{self.day.time:%Y%m%d}"


def _block(size: int) -> int:
    return 512 if size >= 512 else 256


def _profile(grid: Grid, dtype: str, nodata: float | None) -> dict[str, Any]:
    block, large = _block(grid.cols), grid.cols >= 1024
    return {
        "driver": "GTiff",
        "width": grid.cols,
        "height": grid.rows,
        "count": 1,
        "dtype": dtype,
        "nodata": nodata,
        "crs": grid.crs,
        "transform": rasterio.Affine(*grid.transform),
        "tiled": True,
        "blockxsize": block,
        "blockysize": block,
        "compress": "deflate",
        "predictor": 3 if dtype == "float32" else 2,
        "zlevel": 1 if large else 9,
        "num_threads": "all_cpus" if large else 1,
    }


class _Writer:
    """One raster being written; blocks are gathered row by row and written whole."""

    def __init__(
        self, path: Path, grid: Grid, dtype: str, nodata: float | None, stack: ExitStack, tags: dict[str, str]
    ) -> None:
        path.parent.mkdir(parents=True, exist_ok=True)
        self.path, self._block = path, _block(grid.cols)
        self._dataset = stack.enter_context(rasterio.open(path, "w", **_profile(grid, dtype, nodata)))
        self._rows = np.empty((min(self._block, grid.rows), grid.cols), dtype)
        if tags:
            self._dataset.update_tags(1, **tags)

    def put(self, first: int, values: NDArray[Any]) -> None:
        """Take rows in order; they never cross the edge of a block."""
        start = first % self._block
        self._rows[start : start + len(values)] = values
        if start + len(values) == self._block or first + len(values) == self._dataset.height:
            whole = self._rows[: start + len(values)]
            self._dataset.write(whole, 1, window=Window(0, first - start, whole.shape[1], len(whole)))


def _strips(grid: Grid, strip_rows: int) -> Iterator[tuple[int, int]]:
    """First and last + 1 row of strips that end where a block ends."""
    block = _block(grid.cols)
    for top in range(0, grid.rows, block):
        bottom = min(top + block, grid.rows)
        for first in range(top, bottom, strip_rows):
            yield first, min(first + strip_rows, bottom)


@dataclass(frozen=True)
class _SceneFiles:
    bands: tuple[_Writer, ...]
    quality: _Writer
    albedo: _Writer
    fluxes: tuple[_Writer, ...]  # none where the tile is too large to follow its slopes
    cloud: _Writer


def _open_scene(folder: Path, tile: Tile, scene: str, stack: ExitStack) -> _SceneFiles:
    def writer(part: str, name: str, dtype: str, nodata: float | None, **tags: str) -> _Writer:
        return _Writer(folder / part / scene / f"{name}.tif", tile.grid, dtype, nodata, stack, tags)

    def truth_layer(name: str) -> _Writer:
        return writer("truth", name, "int16", layer(name).nodata, unit=layer(name).unit, step=str(layer(name).step))

    return _SceneFiles(
        tuple(writer("scenes", band, "uint16", 0) for band in BANDS),
        writer("scenes", "quality", "uint8", None),
        truth_layer("albedo"),
        tuple(truth_layer(name) for name in FLUX_LAYERS) if follows_slopes(tile.grid) else (),
        writer("truth", "cloud", "uint8", None, meaning=CLOUD_BITS),
    )


def _fill_strip(
    files: _SceneFiles,
    plane: TilePlane,
    ground: terrain.Ground,
    tile: Tile,
    one: Overpass,
    first: int,
    last: int,
) -> tuple[Any, Any]:
    """Write the rows of a scene; its true albedo, and where snow covers most of a cell."""
    state, over = sky.surface(ground, one.day), sky.sky_rows(plane, first, last, one.day)
    lit, cloud = sky.light(ground, over, one.day), sky.true_cloud(state, over)
    missing = outside_swath(ground.x_m, ground.y_m, one.around, one.number)
    saturated = np.zeros(cloud.shape, bool)
    for band, writer in enumerate(files.bands):
        numbers, full = sky.product(state, over, lit, band, one.day, tile.name, first)
        numbers[missing] = 0
        saturated |= full
        writer.put(first, numbers)
    quality = sky.provider_mask(state, cloud, saturated)
    quality[missing] = sky.FILL
    files.quality.put(first, quality)
    albedo = true_albedo(ground.x_m, ground.y_m, state.albedo, one.day.seed, one.day.time.date())
    files.albedo.put(first, truth.stored("albedo", albedo))
    files.cloud.put(first, cloud)
    return albedo, state.snow * (np.float32(1) - state.canopy) > np.float32(0.4)


def follows_slopes(grid: Grid) -> bool:
    """Whether a tile is small enough for the truth of its fluxes."""
    return max(grid.rows, grid.cols) <= LARGEST_CELLS


def _write_fluxes(files: _SceneFiles, slopes: Slopes, one: Overpass, rows: list[tuple[Any, Any]], climate: Climate) -> None:
    albedo, snow = (np.concatenate([part[n] for part in rows]) for n in range(2))
    fluxes = day_fluxes(slopes, one.day.time.date(), one.day.seed, albedo, snow, climate)
    layers = truth.stored("insolation", fluxes.insolation), truth.stored("net_longwave", fluxes.net_longwave)
    for writer, values in zip(files.fluxes, layers, strict=True):
        for start in range(0, len(values), _block(slopes.grid.cols)):
            writer.put(start, values[start : start + _block(slopes.grid.cols)])


def _no_step(scene: str) -> None:
    """Say nothing."""


def write_tile(
    folder: Path,
    tile: Tile,
    overpasses: list[Overpass],
    climate: Climate,
    strip_rows: int | None = None,
    on_scene: Callable[[str], None] = _no_step,
) -> list[Path]:
    """Write a tile's ground, its scenes with their items, and their truth; of fluxes up to LARGEST_CELLS a side.

    Parameters
    ----------
    folder : gets static/, scenes/ and truth/.
    strip_rows : rows worked on at once; changes no cell.
    on_scene : called with the id of each scene when it is written.
    """
    rows = strip_rows or max(1, STRIP_CELLS // tile.grid.cols)
    block_bytes = BYTES_A_CELL * tile.grid.cols * min(_block(tile.grid.cols), tile.grid.rows)
    together = min(16, max(1, TOGETHER_BYTES // block_bytes))
    plane, written = TilePlane(tile.grid), []
    slopes = slopes_of(plane) if follows_slopes(tile.grid) else None
    for start in range(0, len(overpasses), together):
        group = overpasses[start : start + together]
        with ExitStack() as stack:
            static = folder / "static" / tile.name
            ground_files = []
            if start == 0:
                height = _Writer(static / "elevation.tif", tile.grid, "float32", -9999.0, stack, {"unit": "m"})
                ground_files = [height, _Writer(static / "land_cover.tif", tile.grid, "uint8", 0, stack, {})]
            files = [_open_scene(folder, tile, one.scene(tile), stack) for one in group]
            kept: list[list[tuple[Any, Any]]] = [[] for _ in group]
            for first, last in _strips(tile.grid, rows):
                ground = terrain.ground_rows(plane, first, last)
                if ground_files:
                    ground_files[0].put(first, terrain.stored_elevation(ground))
                    ground_files[1].put(first, ground.cover)
                for scene_files, one, parts in zip(files, group, kept, strict=True):
                    part = _fill_strip(scene_files, plane, ground, tile, one, first, last)
                    if slopes is not None:
                        parts.append(part)
            for scene_files, one, parts in zip(files, group, kept, strict=True):
                if slopes is not None:
                    _write_fluxes(scene_files, slopes, one, parts, climate)
        written += [writer.path for writer in ground_files]
        for scene_files, one in zip(files, group, strict=True):
            written += [
                w.path
                for w in (
                    *scene_files.bands,
                    scene_files.quality,
                    scene_files.albedo,
                    *scene_files.fluxes,
                    scene_files.cloud,
                )
            ]
            written.append(write_item(scene_files.quality.path.parent, tile, one.scene(tile), one.day.time))
            on_scene(one.scene(tile))
    return written
