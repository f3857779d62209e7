"""The main job, start to end: every due scene to maps and totals, once."""

from __future__ import annotations

import datetime as dt
import errno
import math
import time
import traceback
from collections.abc import Iterable
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from firnlight.core.errors import InputProblem, NoRoom, SettingsProblem
from firnlight.core.grid import Grid
from firnlight.core.layers import layer
from firnlight.core.settings import Workflow, load_workflow
from firnlight.io.atomic import sweep
from firnlight.io.cog import TILE
from firnlight.io.fingerprints import content_id
from firnlight.io.items import Asset, read_product_item
from firnlight.run.engine import engine, worker_count
from firnlight.run.ledger import Ledger, Product, Refusal
from firnlight.run.plan import Decision, Planner, Span
from firnlight.run.progress import Listener, Step, silent
from firnlight.run.store import ITEM, Store
from firnlight.run.tile import Made, job_call
from firnlight.run.tile_sources import TileJob

FINISHED_BYTES_PER_CELL = 8  # 4.8 measured on a demo tile
RELIEF_BYTES_PER_CELL = 40  # horizons, slope, aspect and sky view of a tile, and their scratch
CELLS_PER_MINUTE = 5e8  # order of size on two cores, for the estimate only


@dataclass
class Outcome:
    """What a night came to. found = made + already + refused + failed, in tile-days; refusals count inputs."""

    store: Path
    made: list[str] = field(default_factory=list)
    already: list[str] = field(default_factory=list)
    refusals: list[Refusal] = field(default_factory=list)
    failed: dict[str, str] = field(default_factory=dict)
    warnings: list[str] = field(default_factory=list)
    seconds: float = 0.0

    @property
    def exit_code(self) -> int:
        return 3 if self.refusals or self.failed else 0

    def sentence(self) -> str:
        """The night in one sentence."""
        if not self.made and not self.failed and not self.refusals:
            return f"Nothing to do: {len(self.already)} tile-days are up to date."
        parts = [f"{len(self.made)} tile-days made", f"{len(self.already)} already up to date"]
        if self.refusals:
            parts.append(f"{len(self.refusals)} inputs refused")
        if self.failed:
            parts.append(f"{len(self.failed)} tile-days failed")
        return ", ".join(parts) + f", in {self.seconds:.1f} s."

    def data(self) -> dict[str, object]:
        return {
            "version": 1, "store": str(self.store), "made": self.made, "already": self.already,
            "refused": [{"input": one.subject, "reason": one.reason} for one in self.refusals],
            "failed": self.failed, "warnings": self.warnings, "seconds": round(self.seconds, 3), "exit_code": self.exit_code,
        }  # fmt: skip


def _now() -> str:
    return dt.datetime.now(dt.UTC).isoformat(timespec="seconds")


def plan_night(workflow: Workflow, span: Span, look_only: bool = False) -> tuple[list[Decision], list[Refusal]]:
    """What a night would do; reads inputs, writes nothing. `look_only` lists what is due and reads no raster."""
    store = Store(workflow.path(workflow.store.path))
    ledger = Ledger(store.ledger, read_only=True)
    try:
        if not store.ledger.exists():
            rebuild_ledger(store, ledger)  # in memory: what a night would find again
        planner = Planner(workflow, store, ledger, worker_count(workflow.engine.workers))
        due = planner.due(span)
        _ = planner.ground.regions if look_only else None
        decisions = [] if look_only else [planner.decide(tile, day) for tile, day in due]
        return decisions, planner.refusals
    finally:
        ledger.close()


def run_night(
    workflow: Workflow | Path | str, span: Span = Span(), cluster: str | None = None, wait: bool = False,  # noqa: B008
    tell: Listener = silent, block: tuple[int, int] | None = None,
) -> Outcome:  # fmt: skip
    """Make every product that is due; a second run does nothing.

    Parameters
    ----------
    workflow : settings, or the path of a workflow file.
    span : acquisition dates and tiles asked for; all by default.
    cluster : address of a dask scheduler, instead of the workflow's engine.
    wait : wait for another run to end instead of refusing.
    tell : hears of each finished tile-day.
    block : rows and columns of a block of work; the results do not depend on it.

    Raises
    ------
    SettingsProblem : the workflow cannot be used.
    StoreBusy : another run holds the store.
    NoRoom : the disk is too full to start, or was filled.
    """
    settings = workflow if isinstance(workflow, Workflow) else load_workflow(Path(workflow))
    store = Store(settings.path(settings.store.path))
    if not store.root.exists():
        plan_night(settings, span, look_only=True)  # settings that cannot be used leave no empty store behind
    store.make()
    with store.held(wait):
        fresh = not store.ledger.exists()
        ledger = Ledger(store.ledger)
        try:
            if fresh:
                rebuild_ledger(store, ledger)
            return _run(settings, store, ledger, span, cluster, tell, block)
        finally:
            ledger.close()


def _run(
    settings: Workflow, store: Store, ledger: Ledger, span: Span, cluster: str | None, tell: Listener,
    block: tuple[int, int] | None,
) -> Outcome:  # fmt: skip
    begun, started = time.monotonic(), _now()
    outcome = Outcome(store.root)
    planner = Planner(settings, store, ledger, worker_count(settings.engine.workers))
    due = planner.due(span)
    jobs: dict[str, TileJob] = {}
    for tile, day in due:
        _take(planner.decide(tile, day), jobs, outcome, ledger, block)
    planner.contents.keep()
    ledger.record_refusals(planner.refusals, started, due)
    if jobs or ledger.was_cut_short():
        sweep(store.root)
    if jobs:
        _ = planner.ground.regions  # polygons that cannot be used stop the night before anything is written
        store.need_room(_room_needed(jobs.values()))
    _prepare_ground(planner, jobs, outcome)
    outcome.warnings = [*planner.ground.warnings, *planner.gaps]
    if not jobs:
        lost = [_failure(name, trace) for name, trace in outcome.failed.items()]
        ledger.record_refusals([*planner.refusals, *lost], started, due)
        outcome.refusals = planner.refusals
        outcome.seconds = time.monotonic() - begun
        return outcome
    run = ledger.start_run("night", started)
    total, done = len(jobs), 0
    with engine(settings.engine, cluster) as where:
        while jobs:
            again: dict[str, TileJob] = {}
            for name, result in where.run({name: job_call(job) for name, job in jobs.items()}):
                spoiled = _record(name, jobs[name], result, planner, ledger, outcome)
                if spoiled is not None:
                    left = planner.decide(spoiled.tile, spoiled.day)
                    _take(left, again, outcome, ledger, block)
                    if left.job is not None:
                        continue
                done += 1
                last = "made" if name in outcome.made else "failed" if name in outcome.failed else "refused"
                detail = outcome.failed.get(name, "").strip().splitlines()
                seconds = time.monotonic() - begun
                tell(Step(name, done, total, last, seconds, detail[-1] if detail else ""))
            jobs = again
    planner.contents.keep()
    failures = [_failure(name, trace) for name, trace in outcome.failed.items()]
    ledger.record_refusals([*planner.refusals, *failures], started, due)
    outcome.refusals = planner.refusals
    outcome.seconds = time.monotonic() - begun
    ledger.end_run(
        run,
        _now(),
        len(outcome.made),
        len(outcome.already),
        len(outcome.refusals),
        len(outcome.failed),
        outcome.exit_code,
    )
    return outcome


def _cells_on_disk(grid: Grid) -> int:
    """Cells of a tile's maps with their last blocks filled up."""
    return math.ceil(grid.rows / TILE) * math.ceil(grid.cols / TILE) * TILE * TILE


def _room_needed(jobs: Iterable[TileJob]) -> int:
    """Scratch and maps of the largest tile-day, the finished maps of the others, and the relief of each tile."""
    jobs = list(jobs)
    largest = max(jobs, key=lambda job: _cells_on_disk(job.grid))
    others = sum(_cells_on_disk(job.grid) for job in jobs) - _cells_on_disk(largest.grid)
    tiles = {job.tile: _cells_on_disk(job.grid) for job in jobs if job.ground.relief_key}
    scratch = 2 * _cells_on_disk(largest.grid) * _bytes_per_cell(largest)
    return scratch + others * FINISHED_BYTES_PER_CELL + sum(tiles.values()) * RELIEF_BYTES_PER_CELL


def _bytes_per_cell(job: TileJob) -> int:
    """Of all layers of a tile-day, uncompressed."""
    return sum(np.dtype(layer(name).dtype).itemsize * len(layer(name).parts) for name in job.layers)


def _no_room(error: OSError, planner: Planner) -> NoRoom | None:
    """What a failed write means where the disk, not the file, was the reason."""
    if error.errno not in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG):
        return None
    return NoRoom(
        error.filename or str(planner.store.root), "free disk space", error.strerror or "none left", "room for the maps",
        "make room, then run the same command: it goes on where it stopped",
    )  # fmt: skip


def _prepare_ground(planner: Planner, jobs: dict[str, TileJob], outcome: Outcome) -> None:
    """Bring the static ground of every tile that has or will have totals up to date; a bad tile loses its jobs."""
    tiles = {job.tile for job in jobs.values()} | {tile for tile, _, _ in planner.products}
    for tile in sorted(tiles & set(planner.ground.grids)):
        try:
            planner.ground.prepare(tile)
            if any(job.tile == tile for job in jobs.values()):
                planner.ground.prepare_relief(tile, planner.workers)
        except SettingsProblem:
            raise
        except InputProblem as problem:
            for name in [name for name, job in jobs.items() if job.tile == tile]:
                planner.refusals.append(Refusal(name, str(problem), jobs.pop(name).day, tile))
        except OSError as error:
            full = _no_room(error, planner)
            if full is not None:
                raise full from error
            for name in [name for name, job in jobs.items() if job.tile == tile]:
                del jobs[name]
                outcome.failed[name] = "".join(traceback.format_exception(error))
    if tiles:
        planner.ground.note_outside()


def _failure(name: str, trace: str) -> Refusal:
    """A failed tile-day as `status` shows it, until it is made."""
    tile, day = name.rsplit(" ", 1)
    return Refusal(name, f"{name} failed: {trace.strip().splitlines()[-1]}", dt.date.fromisoformat(day), tile)


def _take(
    decision: Decision,
    jobs: dict[str, TileJob],
    outcome: Outcome,
    ledger: Ledger,
    block: tuple[int, int] | None,
) -> None:
    name = f"{decision.tile} {decision.day.isoformat()}"
    if decision.job is not None:
        jobs[name] = decision.job if block is None else decision.job.with_block(block)
    elif decision.what == "done":
        outcome.already.append(name)
        if decision.touched:
            ledger.record_products(decision.touched)


def _record(name: str, job: TileJob, result: object, planner: Planner, ledger: Ledger, outcome: Outcome) -> TileJob | None:
    """Write down how a job ended; the job again, where it must be planned without a spoiled scene."""
    if isinstance(result, Made) and result.problem is None:
        scenes = " ".join(scene.id for scene in job.scenes)
        ledger.record(job.tile, job.day, result.products, scenes, _now(), result.seconds)
        outcome.made.append(name)
        return None
    if isinstance(result, Made):
        assert result.problem is not None
        scene = next(scene for scene in planner.scenes[job.tile, job.day] if scene.id == result.scene)
        planner.refuse(scene, result.problem)
        return job
    full = _no_room(result, planner) if isinstance(result, OSError) else None
    if full is not None and isinstance(result, OSError):
        raise full from result
    if isinstance(result, InputProblem):
        planner.refusals.append(Refusal(name, str(result), job.day, job.tile))
        return None
    if isinstance(result, MemoryError):
        raise NoRoom(
            name, "memory", str(result) or "none left", "room for a block of the tile",
            "close other programs or set engine.workers lower, then run the same command",
        ) from result  # fmt: skip
    assert isinstance(result, Exception)
    outcome.failed[name] = "".join(traceback.format_exception(result))
    return None


def rebuild_ledger(store: Store, ledger: Ledger) -> int:
    """Fill an empty ledger from the items in the store; returns the number of products found whole.

    A product whose size or bytes are not what its item says is left out, and so made again.
    """
    count = 0
    for tile, day in store.tile_days():
        path = store.product(tile, day, ITEM)
        try:
            item = read_product_item(path)
        except InputProblem:
            continue
        whole = [one for one in item.assets if _is_whole(one)]
        found = [_product(store, tile, day, one.name, one.path.resolve(), one.key, one.digest) for one in whole]
        found.append(_product(store, tile, day, ITEM, path.resolve(), item.key, content_id(path)))
        ledger.record(tile, day, found, " ".join(item.scenes), "rebuilt", 0.0)
        count += len(found)
    return count


def _is_whole(asset: Asset) -> bool:
    path = asset.path
    return path.is_file() and path.stat().st_size == asset.size and content_id(path) == asset.digest


def _product(store: Store, tile: str, day: dt.date, name: str, path: Path, key: str, digest: str) -> Product:
    stat = path.stat()
    relative = path.relative_to(store.root.resolve()).as_posix()
    return Product(tile, day, name, relative, key, stat.st_size, stat.st_mtime_ns, digest)


def plan_text(decisions: list[Decision], refusals: list[Refusal]) -> str:
    """The plan as lines: what, why, and an estimate."""
    lines = []
    for one in decisions:
        what = "make" if one.job is not None else one.what
        lines.append(f"{one.day} {one.tile}: {what} ({one.reason})")
    lines += [f"refuse: {one.reason}" for one in refusals]
    estimate = plan_data(decisions, refusals)["estimate"]
    assert isinstance(estimate, dict)
    lines.append(
        f"{estimate['tile_days']} tile-days with {estimate['scenes']} scenes to make: {estimate['read_gb']:.2f} GB to read, "
        f"at most {estimate['write_gb']:.2f} GB to write, about {estimate['minutes']:.1f} minutes. Nothing was written."
    )
    return "\n".join(lines)


def plan_data(decisions: list[Decision], refusals: list[Refusal]) -> dict[str, object]:
    """The plan as data."""
    jobs = [one.job for one in decisions if one.job is not None]
    read = sum(size for job in jobs for _, size, _ in job.inputs)
    cells = sum(job.grid.rows * job.grid.cols for job in jobs)
    written = sum(job.grid.rows * job.grid.cols * _bytes_per_cell(job) for job in jobs)
    return {
        "version": 1,
        "decisions": [
            {"tile": one.tile, "day": one.day.isoformat(), "what": one.what, "reason": one.reason} for one in decisions
        ],
        "refused": [{"input": one.subject, "reason": one.reason} for one in refusals],
        "estimate": {
            "tile_days": len(jobs), "scenes": sum(len(job.scenes) for job in jobs), "read_gb": read / 1e9,
            "write_gb": written / 1e9, "minutes": cells / CELLS_PER_MINUTE,
        },
    }  # fmt: skip
