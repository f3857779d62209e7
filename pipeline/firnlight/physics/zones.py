"""Exact sums per stratum and snow class. (reference)"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

# columns of the sums of seen cells, per stratum and snow class
SEEN = (
    "cells",
    "area",
    "albedo",
    "insolation",
    "terrain_light",
    "absorbed",
    "snow_fraction",
    "net_longwave",
    "net_area",
    "melt",
    "u_calibration",
    "u_sky",
    "u_longwave",
    "u_noise_hh",
    "u_noise_hl",
    "u_noise_ll",
    "limited_area",
)
# of each block of ground: its locally correlated errors, and where in it the cells lie
LOCAL = ("albedo", "sky", "longwave", "area", "down", "across", "square")
# columns of the sums of unseen cells, per stratum
UNSEEN = ("cells", "area", "missing", "cloud", "shadow", "saturated", "low_sun", "outside_range")
ALBEDO_BINS = 101  # bins of 0.01; the last holds albedo 1 alone
BIN_STEPS = 100
LIMB_BITS = 60
SPLIT_BITS = 28


def zone_sums(
    strata: NDArray[np.int32],
    area: NDArray[np.int64],
    layers: dict[str, NDArray[Any]],
    bits: tuple[int, ...],
    fill: int,
    sky_u: tuple[float, float],
    longwave_u: tuple[int, int],
    n_strata: int,
    block_cells: int,
    first: tuple[int, int],
) -> tuple[list[list[int]], list[list[int]], list[list[int]], dict[tuple[int, int, int], list[int]]]:
    """Sum stored integers times integer cell areas.

    Parameters
    ----------
    strata : (y, x) int32      Index of the stratum; below 0 = the cell belongs to nobody here.
    area : (y, x) int64        Ground area of each cell. [cm2]
    layers : albedo, insolation, absorbed_shortwave, snow_fraction (y, x) int16, albedo_u (4, y, x) int16, quality uint8;
        terrain_light, net_longwave and net_radiation where the workflow asks for them.
    bits : bit values of the quality flags in the order of layers.toml.
    fill : stored integer of an unseen cell.
    sky_u : relative standard uncertainty of insolation: shared by all cells, and locally correlated.
    longwave_u : standard uncertainty of net longwave, shared and local. [0.01 W m-2]
    block_cells, first : side of the blocks of locally correlated errors; row and column of the first cell in the tile.

    Returns
    -------
    seen : n_strata * 2 rows (even: snow-free, odd: snow) of the SEEN columns; area in cm2, products in cm2 x steps;
        net_area is the area with net longwave, melt sums net radiation above 0 over snow; the u_ columns are standard
        uncertainties in steps of 0.01 W m-2 times area. u_noise is the sum of squares, split so that it stays exact:
        (hh << 56) + (hl << 29) + ll.
    unseen : n_strata rows of the UNSEEN columns. [cm2]
    histogram : n_strata * 2 rows of seen area per albedo bin. [cm2]
    local : (row of seen, block row, block column) -> sums of the LOCAL standard uncertainties x area, of area, of the
        position of the cell's middle in the block x area [half cells], and of the squares of both positions x area.
    """
    missing, cloud, shadow, snow_bit, saturated, low_sun, outside, limited = bits
    seen = [[0] * len(SEEN) for _ in range(n_strata * 2)]
    unseen = [[0] * len(UNSEEN) for _ in range(n_strata)]
    histogram = [[0] * ALBEDO_BINS for _ in range(n_strata * 2)]
    local: dict[tuple[int, int, int], list[int]] = {}
    reasons = ((missing, 2), (cloud, 3), (shadow, 4), (saturated, 5), (low_sun, 6), (outside, 7))

    def cell(name: str, r: int, c: int) -> int:
        return int(layers[name][r, c]) if name in layers else fill

    def steps(value: float) -> int:
        return int(np.floor(value + 0.5))

    for r, c in np.argwhere(strata >= 0).tolist():
        stratum, w, q = int(strata[r, c]), int(area[r, c]), int(layers["quality"][r, c])
        s, a = int(layers["insolation"][r, c]), int(layers["albedo"][r, c])
        if s == fill:
            kind = next((column for bit, column in reasons if q & bit), 2)
            for column, amount in ((0, 1), (1, w), (kind, w)):
                unseen[stratum][column] += amount
            continue
        number = stratum * 2 + bool(q & snow_bit)
        noise, albedo_u, calibration = (int(layers["albedo_u"][part, r, c]) for part in (1, 2, 3))
        squares = w * steps(s * noise / 1000.0)
        high, low = squares >> SPLIT_BITS, squares & ((1 << SPLIT_BITS) - 1)
        light, lost = cell("terrain_light", r, c), cell("net_longwave", r, c)
        known = lost != fill
        dark = s * (10000 - a) / 1000.0
        amounts = (
            1,
            w,
            w * a,
            w * s,
            w * light if light != fill else 0,
            w * int(layers["absorbed_shortwave"][r, c]),
            w * max(int(layers["snow_fraction"][r, c]), 0),
            w * lost if known else 0,
            w if known else 0,
            w * max(cell("net_radiation", r, c), 0) if known and q & snow_bit else 0,
            w * steps(s * calibration / 1000.0),
            w * steps(dark * sky_u[0]),
            w * longwave_u[0] if known else 0,
            high * high,
            high * low,
            low * low,
            w if q & limited else 0,
        )
        for column, amount in enumerate(amounts):
            seen[number][column] += amount
        here = local.setdefault((number, (first[0] + r) // block_cells, (first[1] + c) // block_cells), [0] * len(LOCAL))
        i, j = (2 * ((start + n) % block_cells) + 1 for start, n in zip(first, (r, c), strict=True))
        errors = steps(s * albedo_u / 1000.0), steps(dark * sky_u[1]), longwave_u[1] if known else 0
        parts = (*errors, 1, i, j, i * i + j * j)
        for column, part in enumerate(parts):
            here[column] += w * part
        histogram[number][a // BIN_STEPS] += w
    return seen, unseen, histogram, local
