"""What is each layer called, in which unit, and how does its stored integer become a value?"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.tables import load_table


@dataclass(frozen=True, slots=True)
class Layer:
    """One published layer. A stored integer n means the value n x step; `nodata` means unseen.

    Attributes
    ----------
    name, long_name, standard_name (CF, may be empty), unit
    dtype : "int16" or "uint8"
    step : value of one stored integer. [unit]
    nodata : the integer of an unseen cell, None where each integer has a meaning.
    low, high : smallest and largest stored integer that may occur.
    parts : names of the bands of the file, in order.
    flags : bit -> meaning, for flag layers.
    wanted_with : what the workflow must ask for to get it ("terrain", "longwave" ...; "" = always), or "once" for what
        lies under terrain/ and belongs to no day.
    """

    name: str
    long_name: str
    standard_name: str
    unit: str
    dtype: str
    step: float
    nodata: int | None
    low: int
    high: int
    parts: tuple[str, ...]
    flags: tuple[str, ...]
    overviews: str
    wanted_with: str

    def values(self, stored: NDArray[Any]) -> NDArray[np.float64]:
        """Stored integers to values [unit]; NaN where unseen."""
        values = stored.astype(np.float64) * self.step
        if self.nodata is not None:
            values[stored == self.nodata] = np.nan
        return values


@cache
def layer(name: str) -> Layer:
    """The layer `name` of tables/layers.toml."""
    row = load_table("layers").row(name)
    return Layer(
        name=name,
        long_name=row["long_name"],
        standard_name=row.get("standard_name", ""),
        unit=row["unit"],
        dtype=row["dtype"],
        step=row["step"],
        nodata=row.get("nodata"),
        low=row["low"],
        high=row["high"],
        parts=tuple(row.get("parts", (name,))),
        flags=tuple(row.get("flags", ())),
        overviews=row.get("overviews", "average"),
        wanted_with=row.get("wanted_with", ""),
    )


@cache
def day_layers(*wanted: str) -> tuple[str, ...]:
    """Names of the layers of a tile-day, in the order they are written, for a workflow that asks for `wanted`."""
    return tuple(name for name in load_table("layers").rows if layer(name).wanted_with in ("", *wanted))


@cache
def layer_names() -> tuple[str, ...]:
    """Names of all layers that a tile-day can have, in the order they are written."""
    return day_layers("terrain", "slope_parallel", "longwave")


@cache
def flag_bit(meaning: str) -> int:
    """The bit value of a `quality` flag."""
    return 1 << layer("quality").flags.index(meaning)
