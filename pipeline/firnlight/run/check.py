"""Are the settings and every input good? Everything is opened and read once; nothing is written."""

from __future__ import annotations

import time
from dataclasses import dataclass, replace

import numpy as np

from firnlight.core.errors import InputProblem
from firnlight.core.settings import Workflow
from firnlight.io.bands import SceneReader
from firnlight.io.rasters import open_raster, read_window
from firnlight.run.engine import worker_count
from firnlight.run.ledger import Ledger
from firnlight.run.plan import Planner, Span
from firnlight.run.progress import Listener, Step
from firnlight.run.store import Store
from firnlight.run.tile_sources import BLOCK_COLS, BLOCK_ROWS


@dataclass(frozen=True)
class Checked:
    """What was looked at and what is wrong with it."""

    tiles: int
    scenes: int
    problems: list[str]
    gaps: list[str]  # what the weather files lack

    def sentence(self) -> str:
        state = "all good" if not self.problems else f"{len(self.problems)} problems"
        return f"Checked {self.scenes} scenes of {self.tiles} tiles: {state}. Nothing was written."

    def data(self) -> dict[str, object]:
        return {"version": 1, "tiles": self.tiles, "scenes": self.scenes, "problems": self.problems, "gaps": self.gaps}


def check_inputs(workflow: Workflow, tell: Listener) -> Checked:
    """Open everything that the workflow names and read every block of it once."""
    store = Store(workflow.path(workflow.store.path))
    # an empty ledger: every tile-day is looked at as if it were new
    ledger = Ledger(store.root / "no such ledger", read_only=True)
    try:
        return _check(Planner(workflow, store, ledger, worker_count(workflow.engine.workers)), tell)
    finally:
        ledger.close()


def _check(planner: Planner, tell: Listener) -> Checked:
    problems: list[str] = []
    count, begun = 0, time.monotonic()
    due = planner.due(Span())
    _ = planner.ground.regions
    for number, (tile, day) in enumerate(due, 1):
        before = len(planner.refusals)
        decision = planner.decide(tile, day)
        for scene, numbers in zip(decision.job.scenes, decision.job.numbers, strict=True) if decision.job else ():
            count += 1
            try:
                reader = SceneReader(scene, numbers.bands)
                seen = False
                for window in scene.grid.windows(BLOCK_ROWS, BLOCK_COLS):
                    values, nodata, _flags = reader.read(window)
                    empty = (values == nodata[:, None, None]) | ~np.isfinite(values.astype(np.float32))
                    seen = seen or not empty.any(axis=0).all()
                if not seen:
                    problems.append(f"{scene.item_path}: scene {scene.id}: no cell with data in all bands.")
            except InputProblem as problem:
                problems.append(str(problem))
        bad = len(planner.refusals) > before
        tell(Step(f"{tile} {day}", number, len(due), "refused" if bad else "read", time.monotonic() - begun))
    for tile, grid in planner.ground.grids.items():
        for path in planner.ground.files(tile):
            try:
                with open_raster(path) as dataset:
                    size = replace(grid, rows=dataset.height, cols=dataset.width)  # the wider elevation has its own
                    for window in size.windows(BLOCK_ROWS, BLOCK_COLS):
                        read_window(dataset, window)
            except InputProblem as problem:
                problems.append(str(problem))
    problems += [refusal.reason for refusal in planner.refusals]
    problems = list(dict.fromkeys(problems))
    return Checked(len(planner.ground.grids), count, problems, planner.gaps)
