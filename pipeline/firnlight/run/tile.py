"""One tile-day: read its scenes, run the chain block by block, write what is stale, and say what was written."""

from __future__ import annotations

import datetime as dt
import os
import threading
import time
from dataclasses import dataclass, replace
from functools import partial
from typing import Any

import numpy as np

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid, Window
from firnlight.core.lattice import Lattice
from firnlight.core.layers import flag_bit, layer, layer_names
from firnlight.core.settings import Insolation
from firnlight.io import sheets
from firnlight.io.bands import SceneReader
from firnlight.io.cog import CogWriter, Written, read_block
from firnlight.io.fingerprints import content_id
from firnlight.io.ground import areas, cell_areas_cm2, cell_size_m, positions
from firnlight.io.items import Asset, product_item
from firnlight.io.rasters import open_raster, read_window
from firnlight.io.scene_files import forget_trail
from firnlight.io.scenes import Scene
from firnlight.io.strata import read_strata_table
from firnlight.run.engine import run_blocks
from firnlight.run.ledger import Product
from firnlight.run.store import BUDGET, ITEM, Store
from firnlight.stages import chain
from firnlight.stages.albedo import AlbedoNumbers
from firnlight.stages.insolation import lattice_step, sky_lattice
from firnlight.stages.summarise import Summary

BLOCK_ROWS, BLOCK_COLS = 512, 2048  # whole tiles of the usual inputs and of our own maps


@dataclass(frozen=True)
class TileJob:
    """All that a worker must know of one tile-day; plain data, so it travels.

    Attributes
    ----------
    scenes : opened scenes, the preferred one first, and the albedo numbers of each.
    keys : key of every product; `stale` are those to be made.
    inputs : (path, size, mtime_ns) of every input when the plan was made.
    """

    store: Store
    tile: str
    day: dt.date
    grid: Grid
    scenes: tuple[Scene, ...]
    numbers: tuple[AlbedoNumbers, ...]
    elevation: str | None
    insolation: Insolation
    keys: dict[str, str]
    stale: tuple[str, ...]
    kept: tuple[Product, ...]
    inputs: tuple[tuple[str, int, int], ...]
    block: tuple[int, int] = (BLOCK_ROWS, BLOCK_COLS)

    def with_block(self, block: tuple[int, int]) -> TileJob:
        """The same job cut into other blocks."""
        return replace(self, block=block)


@dataclass(frozen=True)
class Made:
    """What a tile-day came to: its products, or the scene that spoiled it and why."""

    products: tuple[Product, ...] = ()
    scene: str = ""
    problem: InputProblem | None = None
    seconds: float = 0.0


class _Sources(threading.local):
    """Handles of one thread: GDAL datasets must not be shared."""

    def __init__(self, job: TileJob) -> None:
        self.readers = [SceneReader(s, n.bands) for s, n in zip(job.scenes, job.numbers, strict=True)]
        self.elevation = open_raster(job.elevation) if job.elevation else None
        self.strata = open_raster(str(job.store.strata(job.tile)))
        self.maps: dict[str, Any] = {}

    def map(self, job: TileJob, name: str) -> Any:
        if name not in self.maps:
            self.maps[name] = open_raster(str(job.store.product(job.tile, job.day, name)))
        return self.maps[name]


class _SceneProblem(Exception):
    def __init__(self, scene: str, problem: InputProblem) -> None:
        super().__init__(scene, problem)
        self.scene, self.problem = scene, problem


def run_tile_day(job: TileJob, threads: int) -> Made:
    """Make the stale products of a tile-day and put them in place, all or none.

    Notes
    -----
    When only the totals are stale they are rebuilt from the maps; else the chain runs from the scenes. Both ways
    give the same integers, since totals are sums of what is stored.
    """
    begun = time.monotonic()
    try:
        return Made(products=tuple(_make(job, threads)), seconds=time.monotonic() - begun)
    except _SceneProblem as spoiled:
        forget_trail(spoiled.problem)
        return Made(scene=spoiled.scene, problem=spoiled.problem)
    except InputProblem as problem:
        found = problem
    forget_trail(found)
    raise found


def _make(job: TileJob, threads: int) -> list[Product]:
    maps = [name for name in layer_names() if name in job.stale]
    from_maps = not maps
    relative_u = job.insolation.relative_uncertainty
    table = read_strata_table(job.store.strata(job.tile))
    summary = Summary(len(table.strata), relative_u, chain.FLAG_BITS) if BUDGET in job.stale else None
    sources = _Sources(job)
    times = tuple(scene.datetime.timestamp() for scene in job.scenes)
    sky = None if from_maps else sky_lattice(job.day, times, *_positions(job.grid), job.insolation)
    area = areas(job.grid)
    scales = [
        (np.array([s.bands[b].scale for b in n.bands]), np.array([s.bands[b].offset for b in n.bands]))
        for s, n in zip(job.scenes, job.numbers, strict=True)
    ]
    with_data = [threading.Event() for _ in job.scenes]
    writers = {
        name: CogWriter(
            job.store.product(job.tile, job.day, name), layer(name), job.grid,
            {"FIRNLIGHT_KEY": job.keys[name], "TILE": job.tile, "DAY": job.day.isoformat()},
        )
        for name in maps
    }  # fmt: skip

    def from_scenes(window: Window) -> chain.Blocks:
        assert sky is not None
        parts = []
        for n, (scene, numbers) in enumerate(zip(job.scenes, job.numbers, strict=True)):
            try:
                part = chain.scene_block(sources.readers[n], window, numbers, *scales[n], sky.zenith_deg[n], sky)
            except InputProblem as problem:
                raise _SceneProblem(scene.id, problem) from problem
            if not with_data[n].is_set() and (part["quality"] & flag_bit("missing") == 0).any():
                with_data[n].set()
            parts.append(part)
        blocks = chain.merge(parts)
        if sources.elevation is None:
            elevation = np.zeros((window.rows, window.cols), np.float32)
        else:
            elevation = _elevation(sources.elevation, window)
        chain.flux_layers(blocks, elevation, window, sky, relative_u)
        return blocks

    def from_stored(window: Window) -> chain.Blocks:
        stored = {}
        for name in layer_names():
            bands = read_block(sources.map(job, name), window)
            stored[name] = bands if len(layer(name).parts) > 1 else bands[0]
        return stored

    def work(window: Window) -> None:
        blocks = from_stored(window) if from_maps else from_scenes(window)
        for name, writer in writers.items():
            writer.write(window, blocks[name])
        if summary is not None:
            strata = read_window(sources.strata, window)
            summary.add(strata, cell_areas_cm2(area, window), blocks)

    try:
        finishers: dict[str, Any] = {name: writer.finish for name, writer in writers.items()}
        written = run_blocks(work, job.grid.windows(*job.block), finishers or {"": lambda: None}, threads)
        if not from_maps:
            for scene, seen in zip(job.scenes, with_data, strict=True):
                if not seen.is_set():
                    raise _SceneProblem(scene.id, _all_nodata(scene))
        _unchanged(job)
        return _publish(job, table, summary, writers, written)
    finally:
        for writer in writers.values():
            writer.discard()


def _positions(grid: Grid) -> tuple[Lattice, Lattice]:
    return positions(grid, lattice_step(cell_size_m(grid)))


def _elevation(dataset: Any, window: Window) -> Any:
    values = read_window(dataset, window).astype(np.float32)
    if dataset.nodata is not None:
        values[values == np.float32(dataset.nodata)] = np.nan
    return values


def _all_nodata(scene: Scene) -> InputProblem:
    return InputProblem(
        scene.item_path, f"scene {scene.id}", "no cell with data in any band", "at least one cell with data",
        "check nodata in the item against the files, or withdraw the scene",
    )  # fmt: skip


def _unchanged(job: TileJob) -> None:
    for path, size, mtime_ns in job.inputs:
        now = os.stat(path)
        if (now.st_size, now.st_mtime_ns) != (size, mtime_ns):
            raise InputProblem(path, "file", "changed while it was read", "a file that is complete", "run the night again")


def _product(job: TileJob, name: str, digest: str) -> Product:
    path = job.store.product(job.tile, job.day, name)
    stat = path.stat()
    relative = path.relative_to(job.store.root).as_posix()
    return Product(job.tile, job.day, name, relative, job.keys[name], stat.st_size, stat.st_mtime_ns, digest)


def _publish(
    job: TileJob,
    table: Any,
    summary: Summary | None,
    writers: dict[str, CogWriter],
    written: dict[str, Written],
) -> list[Product]:
    products = []
    sheet = None
    if summary is not None:
        sheet = sheets.prepare_totals(
            job.store.product(job.tile, job.day, BUDGET), table, summary.totals(), job.tile, job.day,
            job.keys[BUDGET], tuple(sorted(scene.id for scene in job.scenes)),
        )  # fmt: skip
    try:
        for name, writer in writers.items():
            writer.publish()
            products.append(_product(job, name, written[name].digest))
        if sheet is not None:
            sheet.publish()
            products.append(_product(job, BUDGET, content_id(job.store.product(job.tile, job.day, BUDGET))))
    finally:
        if sheet is not None:
            sheet.discard()
    write_item(job, products)
    products.append(_product(job, ITEM, content_id(job.store.product(job.tile, job.day, ITEM))))
    return products


def write_item(job: TileJob, products: list[Product]) -> None:
    """Describe the tile-day as it now stands: the products just made and those kept."""
    known = {one.name: one for one in (*job.kept, *products)}
    assets = [
        Asset(name, job.store.root / known[name].path, known[name].key, known[name].size, known[name].digest)
        for name in (*layer_names(), BUDGET)
        if name in known
    ]
    rows, cols = job.grid.shape
    corners = [(rows - 1, 0), (rows - 1, cols - 1), (0, cols - 1), (0, 0)]
    outline = []
    for r, c in corners:
        lon, lat = (float(lattice.at(Window(r, c, 1, 1))[0, 0]) for lattice in _positions(job.grid))
        outline.append((round(lon, 6), round(lat, 6)))
    product_item(
        job.store.product(job.tile, job.day, ITEM), job.tile, job.day, job.grid, outline, job.keys[ITEM], assets,
        {scene.id: scene.item_path for scene in job.scenes}, {stage.name: stage.version for stage in chain.STAGES},
    )  # fmt: skip


def job_call(job: TileJob) -> Any:
    """The job as a function of the number of threads, ready to travel."""
    return partial(run_tile_day, job)
