"""Maps of a tile-day to totals per stratum, exact and additive."""

from __future__ import annotations

import threading
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import Window
from firnlight.core.totals import CM2_PER_M2, PLACES, U_STEP_WM2, Block, BlockGrid, Near, Totals
from firnlight.physics import zones
from firnlight.physics.zones_fast import zone_sums
from firnlight.stages.albedo import stored_fill
from firnlight.stages.stage import Stage

SUMMARISE = Stage(
    "summarise", 2,
    ("albedo", "albedo_u", "insolation", "terrain_light", "absorbed_shortwave", "net_longwave", "net_radiation",
     "snow_fraction", "quality", "strata"),
    ("budget",), ("sky_error", "longwave_error", "correlation"),
)  # fmt: skip
_NONE = np.empty((0, 0), np.int16)
_Sums = tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]


@dataclass(frozen=True)
class Errors:
    """Standard uncertainties that the totals need beside the maps.

    Attributes
    ----------
    sky : of insolation, relative: shared, local.
    longwave_wm2 : of net longwave: shared, local.
    calibration : names the sensors of the day.
    grid : blocks of ground for the local parts.
    block_cells : side of a block.
    """

    sky: tuple[float, float]
    longwave_wm2: tuple[float, float]
    calibration: str
    grid: BlockGrid
    block_cells: int


class Summary:
    """Gathers the totals of a tile-day block by block, from any number of threads.

    Each thread adds into a set of sums of its own; sums are integers, so the order of blocks and threads is of no
    account.
    """

    def __init__(self, n_strata: int, errors: Errors, bits: tuple[int, ...]) -> None:
        self._n, self._errors = n_strata, errors
        self._bits = tuple(np.uint8(bit) for bit in bits)
        self._longwave_u = tuple(np.int64(round(u / U_STEP_WM2)) for u in errors.longwave_wm2)
        self._free: list[_Sums] = []
        self._all: list[_Sums] = []
        self._near: dict[int, dict[Block, list[int]]] = {}
        self._lock = threading.Lock()

    def add(
        self, strata: NDArray[np.int32], area_cm2: NDArray[np.int64], layers: dict[str, NDArray[Any]], window: Window
    ) -> None:
        """Add the cells of one window."""
        with self._lock:
            sums = self._free.pop() if self._free else self._new()
        side = self._errors.block_cells
        first = window.row // side, window.col // side
        last = (window.row + window.rows - 1) // side, (window.col + window.cols - 1) // side
        local = np.zeros((self._n * 2, last[0] - first[0] + 1, last[1] - first[1] + 1, len(zones.LOCAL), 2), np.int64)
        zone_sums(
            strata, area_cm2, layers["albedo"], layers["albedo_u"], layers["insolation"],
            layers.get("terrain_light", _NONE), layers["absorbed_shortwave"], layers.get("net_longwave", _NONE),
            layers.get("net_radiation", _NONE), layers["snow_fraction"], layers["quality"], self._bits,
            np.int64(stored_fill()), self._errors.sky, self._longwave_u, zones.BIN_STEPS, side, window.row, window.col,
            *sums, local,
        )  # fmt: skip
        with self._lock:
            self._free.append(sums)
            self._keep(local, first)

    def _keep(self, local: NDArray[np.int64], first: Block) -> None:
        """Add a window's blocks of ground to those of the tile."""
        for zone, i, j in np.argwhere(local.any(axis=(3, 4))).tolist():
            here = self._near.setdefault(zone, {}).setdefault((first[0] + i, first[1] + j), [0] * len(zones.LOCAL))
            for k, (high, low) in enumerate(local[zone, i, j].tolist()):
                here[k] += (high << zones.LIMB_BITS) + low

    def _new(self) -> _Sums:
        sums = (
            np.zeros((self._n * 2, len(zones.SEEN), 2), np.int64),
            np.zeros((self._n, len(zones.UNSEEN), 2), np.int64),
            np.zeros((self._n * 2, zones.ALBEDO_BINS), np.int64),
        )
        self._all.append(sums)
        return sums

    def _blocks(self, zone: int) -> dict[Block, Near]:
        """Local sums in whole square metres and steps of position, rounded once, now that the tile is complete."""
        side = 2 * self._errors.block_cells  # half cells
        steps, units = (1, 1, 1, 1, PLACES, PLACES, PLACES**2), (1, 1, 1, 1, side, side, side**2)
        return {
            at: Near(*((n * up + CM2_PER_M2 * down // 2) // (CM2_PER_M2 * down)
                       for n, up, down in zip(near, steps, units, strict=True)))
            for at, near in sorted(self._near.get(zone, {}).items())
        }  # fmt: skip

    def totals(self) -> list[Totals]:
        """Totals per stratum and state (snow-free, snow, unseen): 3 x n_strata, in that order."""

        def whole(pairs: list[NDArray[np.int64]], row: int) -> list[int]:
            return [
                sum((int(s[row, k, 0]) << zones.LIMB_BITS) + int(s[row, k, 1]) for s in pairs)
                for k in range(pairs[0].shape[1])
            ]

        seen, unseen, histograms = ([s[n] for s in self._all] for n in range(3))
        out = []
        for stratum in range(self._n):
            for snow in range(2):
                row = stratum * 2 + snow
                sums = dict(zip(zones.SEEN, whole(seen, row), strict=True)) if seen else {}
                bins = (
                    [int(sum(h[row, b] for h in histograms)) for b in range(zones.ALBEDO_BINS)] if sums.get("cells") else []
                )
                near = self._blocks(row) if bins else {}
                out.append(Totals.seen(sums, tuple(bins), self._errors.calibration, self._errors.grid, near))
            sums = dict(zip(zones.UNSEEN, whole(unseen, stratum), strict=True)) if unseen else {}
            out.append(Totals.unseen(sums))
        return out
