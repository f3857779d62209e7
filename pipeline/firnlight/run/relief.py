"""Slope, aspect, horizon and sky view of a tile: worked out once per elevation model, kept under terrain/<tile>/."""

from __future__ import annotations

import json
import math
from collections import deque
from collections.abc import Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.windows import Window as RasterWindow

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid, Window
from firnlight.core.layers import layer
from firnlight.core.tables import load_table
from firnlight.io.atomic import replacing, write_text
from firnlight.io.cog import CogWriter
from firnlight.io.elevation import own_heights, square_cell_m, with_margin
from firnlight.io.rasters import open_raster
from firnlight.physics.horizon_fast import horizon_codes, sky_view_add
from firnlight.physics.terrain import gradient, slope_aspect_deg
from firnlight.stages.insolation import DIRECTIONS

RELIEF_VERSION = 2
REACH_M, MOST_MARGIN = 15_000.0, 1024  # ground looked at around a tile; a mountain beyond it casts no shadow here
CORE = 3072  # cells of a side worked on at once
STRIP = 256  # rows of slopes worked on at once
NAMES = ("slope", "aspect", "sky_view")


@dataclass(frozen=True)
class ReliefTable:
    """What is known of a tile's relief: key of its inputs, lowest and highest ground. [m]"""

    key: str
    low_m: float
    high_m: float
    unread: tuple[str, ...] = ()  # elevation files of the ground around that could not be read
    sizes: tuple[int, ...] = ()  # of the rasters, in bytes


def table_path(folder: Path) -> Path:
    return folder / "relief.json"


def horizon_path(folder: Path) -> Path:
    return folder / "horizon.tif"


def read_relief_table(folder: Path) -> ReliefTable:
    """The table beside the relief rasters of a tile.

    Raises
    ------
    InputProblem : damaged or gone.
    """
    try:
        body = json.loads(table_path(folder).read_text(encoding="utf-8"))
        return ReliefTable(body["key"], body["low_m"], body["high_m"], tuple(body["unread"]), tuple(body["sizes"]))
    except (OSError, ValueError, TypeError, KeyError) as error:
        raise InputProblem(
            str(table_path(folder)), "relief", str(error), "the table of a tile's relief",
            "run `firnlight night`: it makes it again",
        ) from error  # fmt: skip


def is_made(folder: Path, key: str) -> bool:
    """Whether the relief of these inputs lies there whole."""
    try:
        table = read_relief_table(folder)
        return table.key == key and table.sizes == _sizes(folder)
    except (InputProblem, OSError):
        return False


def _sizes(folder: Path) -> tuple[int, ...]:
    return tuple(path.stat().st_size for path in (*(folder / f"{name}.tif" for name in NAMES), horizon_path(folder)))


def margin_cells(cell_m: float) -> int:
    return min(math.ceil(REACH_M / cell_m), MOST_MARGIN)


def _cores(grid: Grid) -> list[Window]:
    """The tile in as few equal pieces as CORE allows, on whole blocks of the files."""
    pieces = []
    for size in (grid.rows, grid.cols):
        count = math.ceil(size / CORE)
        step = math.ceil(size / count / 512) * 512
        pieces.append([(at, min(step, size - at)) for at in range(0, size, step)])
    return [Window(row, col, rows, cols) for row, rows in pieces[0] for col, cols in pieces[1]]


def build_relief(grid: Grid, own: str, around: Sequence[str], folder: Path, key: str, workers: int) -> ReliefTable:
    """Work out the relief of a tile and put it in place.

    Parameters
    ----------
    own : elevation on the tile's grid; `around` : files for the ground beside it, the best last.
    workers : threads.

    Raises
    ------
    InputProblem : cells that are not square metres, a damaged file, or a tile without any elevation.
    """
    cell_m = square_cell_m(grid, own)
    margin = margin_cells(cell_m)
    table_path(folder).unlink(missing_ok=True)  # a table beside other rasters would be believed
    folder.mkdir(parents=True, exist_ok=True)
    low, high, unread = math.inf, -math.inf, set[str]()
    tags = {"FIRNLIGHT_KEY": key}
    writers = {name: CogWriter(folder / f"{name}.tif", layer(name), grid, tags) for name in NAMES}
    try:
        with replacing(horizon_path(folder)) as scratch:
            with ExitStack() as stack:
                horizon = stack.enter_context(rasterio.open(scratch, "w", **_horizon_profile(grid)))
                pool = stack.enter_context(ThreadPoolExecutor(workers))
                tile = stack.enter_context(open_raster(own))
                for core in _cores(grid):
                    height = with_margin(grid, core, margin, own, around, unread)
                    inside = own_heights(tile, core)
                    if not np.isnan(inside).all():
                        low, high = min(low, float(np.nanmin(inside))), max(high, float(np.nanmax(inside)))
                    _piece(height, core, margin, cell_m, horizon, writers, pool, min(workers + 1, DIRECTIONS))
            if not low <= high:
                raise InputProblem(own, "elevation", "no cell with a height", "heights", "deliver the elevation again")
        for writer in writers.values():
            writer.finish(workers)
        for writer in writers.values():
            writer.publish()
    finally:
        for writer in writers.values():
            writer.discard()
    table = ReliefTable(key, low, high, tuple(sorted(unread)), _sizes(folder))
    write_text(table_path(folder), json.dumps(vars(table)) + "\n")
    return table


def _horizon_profile(grid: Grid) -> dict[str, Any]:
    return {
        "driver": "GTiff", "width": grid.cols, "height": grid.rows, "count": DIRECTIONS, "dtype": "uint8",
        "crs": grid.crs, "transform": rasterio.Affine(*grid.transform), "nodata": 255, "tiled": True, "blockxsize": 512,
        "blockysize": 512, "interleave": "band", "compress": "zstd", "zstd_level": 1, "predictor": 2,
        "bigtiff": "IF_SAFER", "num_threads": "2",
    }  # fmt: skip


def _known_part(height: NDArray[np.float32], core: Window, margin: int) -> tuple[NDArray[np.float32], tuple[int, int]]:
    """The part of the heights with the core, a cell around it and all known ground, and where the core begins in it."""
    known = ~np.isnan(height)
    cuts, begin = [], []
    for axis, size in ((0, core.rows), (1, core.cols)):
        at = np.flatnonzero(known.any(axis=1 - axis))
        first = min(int(at[0]) if at.size else margin, margin - 1)
        last = max(int(at[-1]) + 1 if at.size else 0, margin + size + 1)
        cuts.append(slice(first, last))
        begin.append(margin - first)
    return np.ascontiguousarray(height[cuts[0], cuts[1]]), (begin[0], begin[1])


def _piece(
    height: NDArray[np.float32], core: Window, margin: int, cell_m: float, horizon: Any,
    writers: dict[str, CogWriter], pool: ThreadPoolExecutor, ahead: int,
) -> None:  # fmt: skip
    height, (down, across) = _known_part(height, core, margin)
    inner = (slice(down, down + core.rows), slice(across, across + core.cols))
    east, north = (np.empty((core.rows, core.cols), np.float32) for _ in range(2))
    for row in range(0, core.rows, STRIP):
        rows = min(STRIP, core.rows - row)
        edge = height[down + row - 1 : down + row + rows + 1, across - 1 : across + core.cols + 1]
        mine = slice(row, row + rows)
        east[mine], north[mine] = gradient(edge, cell_m)
        slope, aspect = slope_aspect_deg(east[mine], north[mine])
        strip = Window(core.row + row, core.col, rows, core.cols)
        writers["slope"].write(strip, _stored(slope, "slope"))
        writers["aspect"].write(strip, _stored(aspect, "aspect"))
    earth_m = float(load_table("constants").row("earth_radius")["value"]) * 1000  # km in the table
    where = RasterWindow(core.col, core.row, core.cols, core.rows)

    def look(k: int) -> NDArray[np.uint8]:
        codes = np.empty(height.shape, np.uint8)
        horizon_codes(height, k * 360.0 / DIRECTIONS, cell_m, earth_m, codes)
        return np.ascontiguousarray(codes[inner])

    view = np.zeros((core.rows, core.cols), np.float32)
    looks: deque[Future[NDArray[np.uint8]]] = deque(pool.submit(look, k) for k in range(ahead))
    for k in range(DIRECTIONS):  # summed in one order, so that threads change no bit
        codes = looks.popleft().result()
        if k + ahead < DIRECTIONS:
            looks.append(pool.submit(look, k + ahead))
        sky_view_add(codes, k * 360.0 / DIRECTIONS, east, north, 1.0 / DIRECTIONS, view)
        horizon.write(codes, k + 1, window=where)
    np.clip(view, 0, 1, out=view)
    for row in range(0, core.rows, STRIP):
        part = view[row : row + STRIP]
        writers["sky_view"].write(Window(core.row + row, core.col, *part.shape), _stored(part, "sky_view"))


def _stored(values: NDArray[Any], name: str) -> NDArray[np.int16]:
    one = layer(name)
    assert one.nodata is not None
    steps = np.floor(values.astype(np.float64) / one.step + 0.5)
    return np.where(np.isnan(steps), one.nodata, steps).astype(np.int16)
