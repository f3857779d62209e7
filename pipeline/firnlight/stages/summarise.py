"""Maps of a tile-day to totals per stratum, exact and additive."""

from __future__ import annotations

import threading
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.totals import Totals
from firnlight.physics import zones
from firnlight.physics.zones_fast import zone_sums
from firnlight.stages.albedo import stored_fill
from firnlight.stages.stage import Stage

SUMMARISE = Stage(
    "summarise", 1,
    ("albedo", "albedo_u", "insolation", "absorbed_shortwave", "snow_fraction", "quality", "strata"),
    ("budget",), ("sky_error",),
)  # fmt: skip


class Summary:
    """Gathers the totals of a tile-day block by block, from any number of threads.

    Each thread adds into a set of sums of its own; sums are integers, so the order of blocks and threads is of no
    account.
    """

    def __init__(self, n_strata: int, relative_u: float, bits: tuple[int, ...]) -> None:
        self._n, self._relative_u = n_strata, relative_u
        self._bits = tuple(np.uint8(bit) for bit in bits)
        self._free: list[tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]] = []
        self._all: list[tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]] = []
        self._lock = threading.Lock()

    def add(self, strata: NDArray[np.int32], area_cm2: NDArray[np.int64], layers: dict[str, NDArray[Any]]) -> None:
        """Add the cells of one block."""
        with self._lock:
            sums = self._free.pop() if self._free else self._new()
        zone_sums(
            strata, area_cm2, layers["albedo"], layers["albedo_u"], layers["insolation"], layers["absorbed_shortwave"],
            layers["snow_fraction"], layers["quality"], self._bits, np.int64(stored_fill()), self._relative_u,
            zones.BIN_STEPS, *sums,
        )  # fmt: skip
        with self._lock:
            self._free.append(sums)

    def _new(self) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
        sums = (
            np.zeros((self._n * 2, len(zones.SEEN), 2), np.int64),
            np.zeros((self._n, len(zones.UNSEEN), 2), np.int64),
            np.zeros((self._n * 2, zones.ALBEDO_BINS), np.int64),
        )
        self._all.append(sums)
        return sums

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
                out.append(Totals.seen(sums, tuple(bins)))
            sums = dict(zip(zones.UNSEEN, whole(unseen, stratum), strict=True)) if unseen else {}
            out.append(Totals.unseen(sums))
        return out
