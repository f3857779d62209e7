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
    "absorbed",
    "snow_fraction",
    "u_local",
    "u_calibration",
    "u_sky",
    "u_noise_hh",
    "u_noise_hl",
    "u_noise_ll",
    "limited_area",
)
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
    relative_u: float,
    n_strata: int,
) -> tuple[list[list[int]], list[list[int]], list[list[int]]]:
    """Sum stored integers times integer cell areas.

    Parameters
    ----------
    strata : (y, x) int32      Index of the stratum; below 0 = the cell belongs to nobody here.
    area : (y, x) int64        Ground area of each cell. [cm2]
    layers : albedo, insolation, absorbed_shortwave, snow_fraction (y, x) int16, albedo_u (4, y, x) int16, quality uint8.
    bits : bit values of the quality flags in the order of layers.toml.
    fill : stored integer of an unseen cell.
    relative_u : shared relative standard uncertainty of insolation.

    Returns
    -------
    seen : n_strata * 2 rows (even: snow-free, odd: snow) of the SEEN columns; area in cm2, products in cm2 x steps;
        the u_ columns are standard uncertainties of absorbed shortwave in steps of 0.01 W m-2 times area. u_noise is
        the sum of squares, split so that it stays exact: (hh << 56) + (hl << 29) + ll.
    unseen : n_strata rows of the UNSEEN columns. [cm2]
    histogram : n_strata * 2 rows of seen area per albedo bin. [cm2]
    """
    missing, cloud, shadow, snow_bit, saturated, low_sun, outside, limited = bits
    seen = [[0] * len(SEEN) for _ in range(n_strata * 2)]
    unseen = [[0] * len(UNSEEN) for _ in range(n_strata)]
    histogram = [[0] * ALBEDO_BINS for _ in range(n_strata * 2)]
    reasons = ((missing, 2), (cloud, 3), (shadow, 4), (saturated, 5), (low_sun, 6), (outside, 7))
    for r, c in np.argwhere(strata >= 0).tolist():
        stratum, w, q = int(strata[r, c]), int(area[r, c]), int(layers["quality"][r, c])
        s, a = int(layers["insolation"][r, c]), int(layers["albedo"][r, c])
        if s == fill:
            kind = next((column for bit, column in reasons if q & bit), 2)
            for column, amount in ((0, 1), (1, w), (kind, w)):
                unseen[stratum][column] += amount
            continue
        row = seen[stratum * 2 + bool(q & snow_bit)]
        noise, local, calibration = (int(layers["albedo_u"][part, r, c]) for part in (1, 2, 3))
        squares = w * int(np.floor(s * noise / 1000.0 + 0.5))
        high, low = squares >> SPLIT_BITS, squares & ((1 << SPLIT_BITS) - 1)
        amounts = (
            1,
            w,
            w * a,
            w * s,
            w * int(layers["absorbed_shortwave"][r, c]),
            w * max(int(layers["snow_fraction"][r, c]), 0),
            w * int(np.floor(s * local / 1000.0 + 0.5)),
            w * int(np.floor(s * calibration / 1000.0 + 0.5)),
            w * int(np.floor(s * (10000 - a) / 1000.0 * relative_u + 0.5)),
            high * high,
            high * low,
            low * low,
            w if q & limited else 0,
        )
        for column, amount in enumerate(amounts):
            row[column] += amount
        histogram[stratum * 2 + bool(q & snow_bit)][a // BIN_STEPS] += w
    return seen, unseen, histogram
