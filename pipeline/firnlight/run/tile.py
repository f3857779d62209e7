"""One tile-day: read its scenes, run the chain block by block, write what is stale, and say what was written."""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from functools import partial
from typing import Any

import numpy as np

from firnlight.core.correlation import block_cells
from firnlight.core.errors import InputProblem
from firnlight.core.grid import Window
from firnlight.core.lattice import Lattice
from firnlight.core.layers import flag_bit, layer
from firnlight.core.totals import CM2_PER_M2, BlockGrid
from firnlight.io import sheets
from firnlight.io.cog import CogWriter, Written
from firnlight.io.fingerprints import content_id
from firnlight.io.ground import areas, cell_areas_cm2, cell_size_m
from firnlight.io.items import Asset, product_item
from firnlight.io.scene_files import forget_trail
from firnlight.io.scenes import Scene
from firnlight.io.strata import read_strata_table
from firnlight.run.engine import run_blocks
from firnlight.run.ledger import Product
from firnlight.run.levelling import LevelledScene
from firnlight.run.store import BUDGET, ITEM
from firnlight.run.tile_sources import (
    FROM_SCENES,
    Sources,
    TileJob,
    any_seen,
    day_light,
    lattice_positions,
    surroundings,
)
from firnlight.stages import chain
from firnlight.stages.insolation import CellMeans, SkyLattice
from firnlight.stages.summarise import Errors, Summary


@dataclass(frozen=True)
class Made:
    """What a tile-day came to: its products, or the scene that spoiled it and why."""

    products: tuple[Product, ...] = ()
    scene: str = ""
    problem: InputProblem | None = None
    seconds: float = 0.0


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
    maps = [name for name in job.layers if name in job.stale]
    table = read_strata_table(job.store.strata(job.tile))
    summary = Summary(len(table.strata), _errors(job), chain.FLAG_BITS) if BUDGET in job.stale else None
    writers = {
        name: CogWriter(
            job.store.product(job.tile, job.day, name), layer(name), job.grid,
            {"FIRNLIGHT_KEY": job.keys[name], "TILE": job.tile, "DAY": job.day.isoformat()},
        )
        for name in maps
    }  # fmt: skip
    try:
        written = _run(job, writers, summary, threads)
        _unchanged(job)
        return _publish(job, table, summary, writers, written)
    finally:
        for writer in writers.values():
            writer.discard()


def _errors(job: TileJob) -> Errors:
    settings, longwave = job.workflow.insolation, job.workflow.longwave
    cell_m, length_m = cell_size_m(job.grid), job.workflow.uncertainty.correlation_length_m
    side = block_cells(length_m, cell_m)
    return Errors(
        (settings.relative_uncertainty, settings.local_uncertainty),
        (longwave.uncertainty_wm2, longwave.local_uncertainty_wm2) if longwave else (0.0, 0.0),
        " and ".join(sorted({numbers.sensor for numbers in job.numbers})),
        BlockGrid(job.tile, side * cell_m, length_m),
        side,
    )


def _run(job: TileJob, writers: dict[str, CogWriter], summary: Summary | None, threads: int) -> dict[str, Written]:
    """Fill the writers and the totals: from the scenes, or from maps that are kept.

    On slopes the albedo of the surroundings lights a cell, so albedo comes first, for the whole tile, and the fluxes in
    a second pass over it; on flat ground one pass makes all.
    """
    sources = Sources(job, {name: writers[name] for name in FROM_SCENES if name in writers})
    light = day_light(job) if writers else None
    area = areas(job.grid)
    anew = any(name in writers for name in FROM_SCENES)
    scenes = _SceneBlocks(job, sources, light.sky, threads) if anew and light is not None else None
    two_passes = light is not None and job.on_slopes

    def write(window: Window, blocks: chain.Blocks, names: Iterable[str]) -> None:
        for name in names:
            if name in writers:
                writers[name].write(window, blocks[name])

    if two_passes and light is not None:
        around = surroundings(job)

        def first(window: Window) -> None:
            blocks = scenes.read(window) if scenes is not None else sources.stored(window, ("albedo",))
            around.add(blocks["albedo"], window)
            if scenes is not None:
                write(window, blocks, FROM_SCENES)

        ends = {name: writers[name].complete for name in FROM_SCENES if name in writers}
        run_blocks(first, job.grid.windows(*job.block), ends or {"": lambda: None}, threads)
        light = replace(light, around=around.mean(), step=around.step)
        if light.cells is not None:
            light = replace(light, factors=_cell_factors(job, sources, light, area, threads))

    def work(window: Window) -> None:
        if light is None:
            blocks = sources.stored(window, job.layers)
        else:
            fresh = scenes is not None and not two_passes
            blocks = scenes.read(window) if fresh and scenes is not None else sources.stored(window, FROM_SCENES)
            relief = sources.relief(window, light.sky.directions, any_seen(blocks)) if two_passes else None
            cover = sources.cover(window) if light.places else None
            surface_k = sources.surface_k(window) if light.night is not None else None
            ground = chain.Ground(sources.elevation(window), relief, cover, surface_k)
            chain.flux_layers(blocks, ground, window, light)
            write(window, blocks, [name for name in writers if not (two_passes and name in FROM_SCENES)])
        if summary is not None:
            summary.add(sources.strata(window), cell_areas_cm2(area, window), blocks, window)

    finishers: dict[str, Any] = {name: writer.finish for name, writer in writers.items()}
    written = run_blocks(work, job.grid.windows(*job.block), finishers or {"": lambda: None}, threads)
    if scenes is not None:
        scenes.check()
    return written


def _cell_factors(job: TileJob, sources: Sources, light: chain.Light, area: Lattice, threads: int) -> Any:
    """What keeps the means of a supplied grid's cells when their light is spread over slopes."""
    assert light.cells is not None
    means = CellMeans(light.cells)

    def gather(window: Window) -> None:
        relief = sources.relief(window, light.sky.directions)
        flat, slopes = chain.light_of_all_ground(sources.elevation(window), relief, window, light)
        means.add(flat, slopes, cell_areas_cm2(area, window) // CM2_PER_M2, window)

    run_blocks(gather, job.grid.windows(*job.block), {"": lambda: None}, threads)
    return means.factors()


class _SceneBlocks:
    """Albedo and what belongs to it, from the scenes of the day."""

    def __init__(self, job: TileJob, sources: Sources, sky: SkyLattice, threads: int) -> None:
        self._job, self._sources, self._sky = job, sources, sky
        self._scales = [
            (np.array([s.bands[b].scale for b in n.bands]), np.array([s.bands[b].offset for b in n.bands]))
            for s, n in zip(job.scenes, job.numbers, strict=True)
        ]
        self._with_data = [threading.Event() for _ in job.scenes]
        self._level: list[LevelledScene] = []
        if job.workflow.albedo.illumination != "none":
            self._level = [LevelledScene(job, sources, n, scale) for n, scale in enumerate(self._scales)]
            for n, level in enumerate(self._level):
                self._of(n, level.fit, threads)

    def _of(self, number: int, work: Callable[..., Any], *arguments: Any) -> Any:
        """Call `work`; what is wrong with its input is the scene's fault."""
        try:
            return work(*arguments)
        except InputProblem as problem:
            raise _SceneProblem(self._job.scenes[number].id, problem) from problem

    def read(self, window: Window) -> chain.Blocks:
        """The layers of FROM_SCENES in a window, one value per cell."""
        parts = []
        for n, numbers in enumerate(self._job.numbers):
            reader: chain.BlockReader = self._level[n] if self._level else self._sources.readers[n]
            ones, zeros = np.ones(len(numbers.bands)), np.zeros(len(numbers.bands))
            scale = (ones, zeros) if self._level else self._scales[n]  # a levelled scene is reflectance already
            part = self._of(n, chain.scene_block, reader, window, numbers, *scale, self._sky, n)
            if not self._with_data[n].is_set() and (part["quality"] & flag_bit("missing") == 0).any():
                self._with_data[n].set()
            parts.append(part)
        return chain.merge(parts)

    def check(self) -> None:
        """Refuse a scene that holds nothing."""
        for scene, seen in zip(self._job.scenes, self._with_data, strict=True):
            if not seen.is_set():
                raise _SceneProblem(scene.id, _all_nodata(scene))


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
        for name in (*job.layers, BUDGET)
        if name in known
    ]
    rows, cols = job.grid.shape
    corners = [(rows - 1, 0), (rows - 1, cols - 1), (0, cols - 1), (0, 0)]
    outline = []
    for r, c in corners:
        lon, lat = (float(lattice.at(Window(r, c, 1, 1))[0, 0]) for lattice in lattice_positions(job.grid))
        outline.append((round(lon, 6), round(lat, 6)))
    product_item(
        job.store.product(job.tile, job.day, ITEM), job.tile, job.day, job.grid, outline, job.keys[ITEM], assets,
        {scene.id: scene.item_path for scene in job.scenes},
        {stage.name: stage.version for stage in chain.STAGES if set(stage.makes) & {*job.layers, BUDGET}},
    )  # fmt: skip


def job_call(job: TileJob) -> Any:
    """The job as a function of the number of threads, ready to travel."""
    return partial(run_tile_day, job)
