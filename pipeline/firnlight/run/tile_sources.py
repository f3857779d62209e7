"""What a tile-day is made from: its open files, and the light of its day."""

from __future__ import annotations

import datetime as dt
import threading
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid, Window
from firnlight.core.lattice import Lattice
from firnlight.core.layers import day_layers, layer
from firnlight.core.settings import Workflow
from firnlight.io.bands import SceneReader
from firnlight.io.cog import CogWriter, read_block
from firnlight.io.elevation import own_heights, plain_values
from firnlight.io.ground import cell_size_m, positions
from firnlight.io.rasters import dataset_grid, open_raster, read_bands, read_window
from firnlight.io.scenes import Scene
from firnlight.physics.longwave import AIR_RANGE_K
from firnlight.run.ground import TileGround
from firnlight.run.ledger import Product
from firnlight.run.relief import horizon_path, read_relief_table
from firnlight.run.store import Store
from firnlight.run.weather import day_weather
from firnlight.stages import chain
from firnlight.stages.albedo import AlbedoNumbers, stored_fill
from firnlight.stages.insolation import Relief, around_step, lattice_step, sky_lattice
from firnlight.stages.longwave import emissivities, longwave_lattice

BLOCK_ROWS, BLOCK_COLS = 512, 2048  # whole tiles of the usual inputs and of our own maps
FROM_SCENES = ("albedo", "albedo_u", "snow_fraction", "quality")


@dataclass(frozen=True)
class TileJob:
    """All that a worker must know of one tile-day; plain data, so it travels.

    Attributes
    ----------
    scenes : opened scenes, the preferred one first, and the albedo numbers of each.
    weather_keys : of the weather that the keys were made with.
    keys : key of every product; `stale` are those to be made.
    inputs : (path, size, mtime_ns) of every input when the plan was made.
    """

    store: Store
    tile: str
    day: dt.date
    grid: Grid
    scenes: tuple[Scene, ...]
    numbers: tuple[AlbedoNumbers, ...]
    ground: TileGround
    workflow: Workflow
    weather_keys: tuple[str, str]
    keys: dict[str, str]
    stale: tuple[str, ...]
    kept: tuple[Product, ...]
    inputs: tuple[tuple[str, int, int], ...]
    block: tuple[int, int] = (BLOCK_ROWS, BLOCK_COLS)

    def with_block(self, block: tuple[int, int]) -> TileJob:
        """The same job cut into other blocks."""
        return replace(self, block=block)

    @property
    def layers(self) -> tuple[str, ...]:
        """Names of the layers that the workflow asks for."""
        return day_layers(*self.workflow.wanted)

    @property
    def on_slopes(self) -> bool:
        return self.workflow.insolation.terrain


def lattice_positions(grid: Grid) -> tuple[Lattice, Lattice]:
    """Longitude and latitude of the nodes at which sun, sky and weather are worked out. [deg]"""
    return positions(grid, lattice_step(cell_size_m(grid)))


def surface_temperature_file(workflow: Workflow, tile: str, day: dt.date) -> str | None:
    """The raster of a tile's surface temperature on a day, where there is one."""
    written = workflow.longwave.surface_temperature if workflow.longwave is not None else None
    if written is None:
        return None
    path = workflow.tile_path(written.replace("{date}", day.isoformat()), tile)
    return str(path) if path.is_file() else None


class Sources(threading.local):
    """Open files of one thread: GDAL datasets must not be shared."""

    def __init__(self, job: TileJob, writers: dict[str, CogWriter]) -> None:
        self._job, self._writers = job, writers
        self._open: dict[str | Path, Any] = {}
        self._readers: list[SceneReader] | None = None

    def _dataset(self, path: str | Path) -> Any:
        if path not in self._open:
            self._open[path] = open_raster(str(path))
        return self._open[path]

    @property
    def readers(self) -> list[SceneReader]:
        """Of each scene."""
        if self._readers is None:
            pairs = zip(self._job.scenes, self._job.numbers, strict=True)
            self._readers = [SceneReader(scene, numbers.bands) for scene, numbers in pairs]
        return self._readers

    def strata(self, window: Window) -> NDArray[np.int32]:
        out: NDArray[np.int32] = read_window(self._dataset(self._job.store.strata(self._job.tile)), window)
        return out

    def elevation(self, window: Window) -> NDArray[np.float32]:
        """Heights, 0 where the workflow names no elevation. [m]"""
        if self._job.ground.elevation is None:
            return np.zeros((window.rows, window.cols), np.float32)
        return own_heights(self._dataset(self._job.ground.elevation), window)

    def surface_k(self, window: Window) -> NDArray[np.float32] | None:
        """Surface temperature where a raster of the day tells it, else NaN; None without a raster. [K]"""
        path = surface_temperature_file(self._job.workflow, self._job.tile, self._job.day)
        if path is None:
            return None
        dataset = self._dataset(path)
        difference = self._job.grid.difference(dataset_grid(dataset))
        if difference:
            raise InputProblem(
                path, "grid", difference, f"the grid of tile {self._job.tile}", "warp the raster to the tile's grid"
            )  # fmt: skip
        values = plain_values(dataset, window)
        believed = (values >= AIR_RANGE_K[0]) & (values <= AIR_RANGE_K[1])
        return np.where(believed, values, np.float32(np.nan))

    def cover(self, window: Window) -> NDArray[Any] | None:
        """Land cover codes, where the workflow names a land cover."""
        if self._job.ground.land_cover is None:
            return None
        codes: NDArray[Any] = read_window(self._dataset(self._job.ground.land_cover), window)
        return codes

    def stored(self, window: Window, names: tuple[str, ...]) -> chain.Blocks:
        """Layers as they lie in the store, or in the finished scratch of a writer."""
        out = {}
        for name in names:
            writer = self._writers.get(name)
            path = self._job.store.product(self._job.tile, self._job.day, name) if writer is None else writer.scratch
            bands = read_block(self._dataset(path), window)
            out[name] = bands if len(layer(name).parts) > 1 else bands[0]
        return out

    def relief(self, window: Window, directions: tuple[int, ...], seen: bool = True) -> Relief:
        """Slope, and horizons of some directions; of a window in which nothing is seen, no horizon is read."""
        folder = self._job.store.relief(self._job.tile)
        slope, aspect, view = (
            read_bands(self._dataset(folder / f"{name}.tif"), window, [1])[0] for name in ("slope", "aspect", "sky_view")
        )
        if seen:
            codes = read_bands(self._dataset(horizon_path(folder)), window, [d + 1 for d in directions])
        else:
            codes = np.zeros((len(directions), window.rows, window.cols), np.uint8)
        return Relief(slope, aspect, view, codes)


def day_light(job: TileJob) -> chain.Light:
    """Sun, sky and longwave of the tile's day.

    Raises
    ------
    InputProblem : weather that cannot be read, or that has changed since the plan was made.
    """
    settings, lattice = job.workflow.insolation, lattice_positions(job.grid)
    times = tuple(scene.datetime.timestamp() for scene in job.scenes)
    weather = day_weather(job.workflow, job.day, *lattice)
    if (weather.sky_key, weather.air_key) != job.weather_keys:
        raise InputProblem(
            str(job.workflow.file), f"weather of {job.day}", "changed while it was read", "files that are complete",
            "run the night again",
        )  # fmt: skip
    heights = None
    if job.on_slopes:
        table = read_relief_table(job.store.relief(job.tile))
        heights = table.low_m, table.high_m
    sky = sky_lattice(
        job.day, times, *lattice, settings, weather.sky, heights, carried=job.workflow.albedo.day == "sun path"
    )
    light = chain.Light(sky, (settings.relative_uncertainty, settings.local_uncertainty), cells=weather.cells)
    longwave = job.workflow.longwave
    if longwave is None or weather.air is None:
        return light
    emissivity, places = emissivities(longwave, job.workflow.surface.class_names)
    return replace(
        light, night=longwave_lattice(weather.air, lattice[0], longwave), emissivity=emissivity, places=places,
        night_errors=(longwave.uncertainty_wm2, longwave.local_uncertainty_wm2),
    )  # fmt: skip


def surroundings(job: TileJob) -> chain.Around:
    """An empty gatherer of the albedo around each cell."""
    return chain.Around(job.grid.rows, job.grid.cols, around_step(cell_size_m(job.grid)))


def any_seen(blocks: chain.Blocks) -> bool:
    return bool((blocks["albedo"] != stored_fill()).any())
