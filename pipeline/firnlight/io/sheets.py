"""Tables in and out: totals of a tile-day as Parquet, and answers as CSV, Parquet or JSON."""

from __future__ import annotations

import csv
import datetime as dt
import io
import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from decimal import Decimal
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from firnlight.core.errors import InputProblem, SettingsProblem
from firnlight.core.totals import SUM_NAMES, BlockGrid, Near, Totals
from firnlight.io.atomic import move_into_place, replacing, scratch_path
from firnlight.io.regions import ALL

STATES = ("snow-free", "snow", "unseen")
_WIDE = pa.decimal128(38, 0)  # pyarrow's int64 sum wraps silently
_KEYS = ("region", "region_name", "land_cover", "snow", "band_low_m", "band_high_m")
_COUNTS = ("cells", "unseen_cells")
_UNITS = {
    "albedo": "cm2 x 0.0001", "snow_fraction": "cm2 x 0.0001", "insolation": "cm2 x 0.1 W m-2",
    "terrain_light": "cm2 x 0.1 W m-2", "absorbed": "cm2 x 0.1 W m-2", "net_longwave": "cm2 x 0.1 W m-2",
    "melt": "cm2 x 0.1 W m-2", "u_noise2": "(cm2 x 0.01 W m-2)^2", "cells": "1", "unseen_cells": "1",
}  # fmt: skip
# of each row: sources of shared errors with their sums, and blocks of ground with the sums of local errors and the
# places of its cells
_LISTS = {
    "shared_source": (pa.string(), ""), "shared_sum": (_WIDE, "cm2 x 0.01 W m-2"),
    "block_row": (pa.int32(), "1"), "block_col": (pa.int32(), "1"), "local_albedo": (pa.int64(), "m2 x 0.01 W m-2"),
    "local_sky": (pa.int64(), "m2 x 0.01 W m-2"), "local_longwave": (pa.int64(), "m2 x 0.01 W m-2"),
    "local_area": (pa.int64(), "m2"), "local_down": (pa.int64(), "m2 x 1/1024 of the block"),
    "local_across": (pa.int64(), "m2 x 1/1024 of the block"), "local_square": (pa.int64(), "m2 x (1/1024 of the block)^2"),
}  # fmt: skip


@dataclass(frozen=True)
class Row:
    """One row of totals: whose ground, in which state, and how much of everything."""

    region: str
    region_name: str
    land_cover: str
    snow: str
    band_low_m: float | None
    band_high_m: float | None
    totals: Totals

    @property
    def order(self) -> tuple[str, str, str, float, float]:
        low = -math.inf if self.band_low_m is None else self.band_low_m
        high = math.inf if self.band_high_m is None else self.band_high_m
        return self.region, self.land_cover, self.snow, low, high


def _schema(metadata: Mapping[str, str]) -> pa.Schema:
    columns = [pa.field(name, pa.float64() if name.endswith("_m") else pa.string()) for name in _KEYS]
    for name in SUM_NAMES:
        kind = pa.int64() if name in _COUNTS else _WIDE
        columns.append(pa.field(name, kind, metadata={"unit": _UNITS.get(name, "cm2")}))
    columns.append(pa.field("bins", pa.list_(pa.int64()), metadata={"unit": "cm2", "bins": "0.01 of albedo"}))
    columns += [pa.field(name, pa.list_(kind), metadata={"unit": unit}) for name, (kind, unit) in _LISTS.items()]
    return pa.schema(columns, metadata=dict(metadata))


def stratum_regions(stratum: Any) -> tuple[str, ...]:
    """Regions that a stratum counts for, and ALL: the ground of all regions together, each cell once."""
    return stratum.regions if ALL in stratum.regions else (*stratum.regions, ALL)


def region_rows(table: Any, totals: Sequence[Totals]) -> list[Row]:
    """Totals per stratum and state to rows per region, land cover, state and elevation band, sorted.

    A stratum counts for every region that its cells lie in, so nested regions each get the whole of it.
    """
    sums: dict[tuple[object, ...], Totals] = {}
    for number, stratum in enumerate(table.strata):
        for state, name in enumerate(STATES):
            one = totals[number * 3 + state]
            if not (one.cells or one.unseen_cells):
                continue
            for region in stratum_regions(stratum):
                key = (region, stratum.land_cover, name, stratum.band_low_m, stratum.band_high_m)
                sums[key] = sums[key] + one if key in sums else one
    names = {ALL: "", **table.region_names}
    rows = [Row(k[0], names[k[0]], k[1], k[2], k[3], k[4], total) for k, total in sums.items()]  # type: ignore[arg-type]
    return sorted(rows, key=lambda row: row.order)


class Sheet:
    """A finished Parquet file beside its final place."""

    def __init__(self, path: Path, table: pa.Table) -> None:
        self.path = path
        path.parent.mkdir(parents=True, exist_ok=True)
        self._scratch = scratch_path(path)
        pq.write_table(table, self._scratch, compression="zstd", write_statistics=True)

    def publish(self) -> None:
        move_into_place(self._scratch, self.path)

    def discard(self) -> None:
        self._scratch.unlink(missing_ok=True)


def prepare_totals(
    path: Path,
    table: Any,
    totals: Sequence[Totals],
    tile: str,
    day: dt.date,
    key: str,
    scenes: tuple[str, ...],
) -> Sheet:
    """Write the totals of a tile-day beside their final place; nothing is seen before `publish`."""
    rows = region_rows(table, totals)
    metadata = {
        "firnlight:key": key,
        "firnlight:strata": table.key,
        "tile": tile,
        "day": day.isoformat(),
        "scenes": json.dumps(scenes),
    }
    columns: dict[str, list[object]] = {name: [getattr(row, name) for row in rows] for name in _KEYS}
    for name in SUM_NAMES:
        values = [getattr(row.totals, name) for row in rows]
        columns[name] = list(values) if name in _COUNTS else [Decimal(value) for value in values]
    columns["bins"] = [list(row.totals.bins) or None for row in rows]
    columns.update(_list_columns([row.totals for row in rows]))
    grids = {grid for row in rows for grid in row.totals.local}
    metadata["firnlight:blocks"] = json.dumps([[grid.block_m, grid.length_m] for grid in sorted(grids)])
    return Sheet(path, pa.table(columns, schema=_schema(metadata)))


def _list_columns(totals: Sequence[Totals]) -> dict[str, list[object]]:
    columns: dict[str, list[object]] = {name: [] for name in _LISTS}
    for one in totals:
        sources = sorted(one.shared.items())
        blocks = sorted((at, near) for grid in one.local.values() for at, near in grid.items())
        lists = (
            [name for name, _ in sources],
            [Decimal(value) for _, value in sources],
            *([at[n] for at, _ in blocks] for n in range(2)),
            *([near[n] for _, near in blocks] for n in range(len(Near._fields))),
        )
        for name, values in zip(_LISTS, lists, strict=True):
            columns[name].append(values)
    return columns


def _from_lists(data: Mapping[str, Sequence[Any]], n: int, grid: BlockGrid | None) -> dict[str, Any]:
    shared = {name: int(value) for name, value in zip(data["shared_source"][n], data["shared_sum"][n], strict=True)}
    parts = (data[name][n] for name in list(_LISTS)[2:])
    blocks = {(i, j): Near(*near) for i, j, *near in zip(*parts, strict=True)}
    return {"shared": shared, "local": {grid: blocks} if grid is not None and blocks else {}}


@dataclass(frozen=True)
class DayTotals:
    """The totals file of one tile-day."""

    tile: str
    day: dt.date
    key: str
    strata: str  # key of the strata that they are summed over
    scenes: tuple[str, ...]
    rows: tuple[Row, ...]


def read_totals(path: Path) -> DayTotals:
    """Read the totals of a tile-day.

    Raises
    ------
    InputProblem : the file is not one of ours, or damaged.
    """
    try:
        table = pq.read_table(path, partitioning=None)
        meta = {k.decode(): v.decode() for k, v in (table.schema.metadata or {}).items()}
        data = table.to_pydict()
        blocks = json.loads(meta["firnlight:blocks"])
        grid = BlockGrid(meta["tile"], *blocks[0]) if blocks else None
        rows = []
        for n in range(table.num_rows):
            sums: dict[str, Any] = {name: int(data[name][n]) for name in SUM_NAMES}
            keys = {name: data[name][n] for name in _KEYS}
            totals = Totals(**sums, bins=tuple(data["bins"][n] or ()), **_from_lists(data, n, grid))
            rows.append(Row(**keys, totals=totals))
        return DayTotals(
            meta["tile"], dt.date.fromisoformat(meta["day"]), meta["firnlight:key"], meta["firnlight:strata"],
            tuple(json.loads(meta["scenes"])), tuple(rows),
        )  # fmt: skip
    except (pa.ArrowException, OSError, KeyError, ValueError, TypeError) as error:
        raise InputProblem(
            str(path), "totals", str(error) or type(error).__name__, "a totals file of this store",
            "delete the file: the next night makes it again from the maps",
        ) from error  # fmt: skip


def _plain(value: object) -> object:
    """NaN is an empty place, never 0."""
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value.isoformat() if isinstance(value, dt.date) else value


def _guarded(value: object) -> object:
    """Text that a spreadsheet would run as a formula gets a leading apostrophe."""
    return f"'{value}" if isinstance(value, str) and value[:1] in ("=", "+", "-", "@", "\t", "\r") else value


def answer_bytes(
    rows: Sequence[Mapping[str, object]], units: Mapping[str, str], about: Mapping[str, object], ending: str
) -> bytes:
    """A table as the bytes of a .csv, .json or .parquet file; empty where unknown.

    Raises
    ------
    SettingsProblem : another ending.
    """
    names = list(units)
    if ending == ".csv":
        text = io.StringIO()
        writer = csv.writer(text, lineterminator="\n")
        writer.writerow(names)
        writer.writerows([_guarded(_plain(row[name])) for name in names] for row in rows)
        return text.getvalue().encode("utf-8")
    if ending == ".json":
        body = {**about, "units": dict(units), "rows": [{n: _plain(row[n]) for n in names} for row in rows]}
        return (json.dumps(body, indent=1, ensure_ascii=False, allow_nan=False) + "\n").encode("utf-8")
    if ending == ".parquet":
        columns = {name: [_plain(row[name]) for row in rows] for name in names}
        table = pa.table({name: pa.array(values) for name, values in columns.items()})
        schema = pa.schema(
            [field.with_metadata({"unit": units[field.name]}) for field in table.schema],
            metadata={key: json.dumps(value) for key, value in about.items()},
        )
        sink = pa.BufferOutputStream()
        pq.write_table(table.cast(schema), sink, compression="zstd")
        return sink.getvalue().to_pybytes()
    raise SettingsProblem(
        "--out",
        "file ending",
        ending or "none",
        ".csv, .parquet or .json",
        "end the file name in one of them",
    )


def write_answer(
    path: Path, rows: Sequence[Mapping[str, object]], units: Mapping[str, str], about: Mapping[str, object]
) -> None:
    """Write a table; a CSV gets its units and description in a .json beside it."""
    data = answer_bytes(rows, units, about, path.suffix.lower())
    with replacing(path) as scratch:
        scratch.write_bytes(data)
    if path.suffix.lower() == ".csv":
        with replacing(path.with_suffix(".json")) as scratch:
            scratch.write_text(
                json.dumps({**about, "units": dict(units)}, indent=1, ensure_ascii=False) + "\n",
                encoding="utf-8",
            )
