"""Exact sums per stratum and snow class, in one pass. (fast twin of zones.py)

Sums are integers in (hi, lo) pairs, so neither the order of cells nor the cutting of the tile changes a bit and
nothing overflows. Runs of cells of one stratum are gathered in registers and added at their end.
"""

from firnlight.physics.kernel_cache import prepare

prepare()

import numba  # noqa: E402
import numpy as np  # noqa: E402


@numba.njit(nogil=True, cache=True, inline="always")
def _add(sums, zone, column, amount):
    """Add to a (hi, lo) pair; lo stays within +-2^60."""
    limb = 1 << 60
    lo = sums[zone, column, 1] + amount
    if lo >= limb or lo <= -limb:
        carry = lo // limb
        sums[zone, column, 0] += carry
        lo -= carry * limb
    sums[zone, column, 1] = lo


@numba.njit(nogil=True, cache=True)
def zone_sums(
    strata, area, albedo, albedo_u, insolation, absorbed, snow_fraction, quality, bits, fill, relative_u,
    bin_steps, seen, unseen, histogram,
):  # fmt: skip
    """Add one block's cells to the totals, in place; see zones.zone_sums for the contract."""
    rows, cols = strata.shape
    missing, cloud, shadow, snow_bit, saturated, low_sun, outside, limited = bits
    columns = seen.shape[1]
    run = np.zeros(columns, dtype=np.int64)
    half = np.int64(1) << 28
    mask = half - 1
    for r in range(rows):
        zone = np.int64(-1)
        length = 0
        for c in range(cols):
            stratum = np.int64(strata[r, c])
            if stratum < 0:
                continue
            w = area[r, c]
            q = quality[r, c]
            s = np.int64(insolation[r, c])
            if s == fill:
                if q & missing:
                    kind = 2
                elif q & cloud:
                    kind = 3
                elif q & shadow:
                    kind = 4
                elif q & saturated:
                    kind = 5
                elif q & low_sun:
                    kind = 6
                elif q & outside:
                    kind = 7
                else:
                    kind = 2
                _add(unseen, stratum, 0, np.int64(1))
                _add(unseen, stratum, 1, w)
                _add(unseen, stratum, kind, w)
                continue
            here = stratum * 2 + (1 if q & snow_bit else 0)
            # 64 cells of the largest products still fit into int64
            if here != zone or length == 64:
                if length:
                    for k in range(columns):
                        _add(seen, zone, k, run[k])
                        run[k] = 0
                zone = here
                length = 0
            length += 1
            a = np.int64(albedo[r, c])
            # hundredths of W m-2
            u_noise = np.int64(np.floor(s * albedo_u[1, r, c] / 1000.0 + 0.5))
            u_local = np.int64(np.floor(s * albedo_u[2, r, c] / 1000.0 + 0.5))
            u_calibration = np.int64(np.floor(s * albedo_u[3, r, c] / 1000.0 + 0.5))
            u_sky = np.int64(np.floor(s * (10000 - a) / 1000.0 * relative_u + 0.5))
            p = w * u_noise
            ph = p >> 28
            pl = p & mask
            run[0] += 1
            run[1] += w
            run[2] += w * a
            run[3] += w * s
            run[4] += w * np.int64(absorbed[r, c])
            run[5] += w * max(np.int64(snow_fraction[r, c]), 0)
            run[6] += w * u_local
            run[7] += w * u_calibration
            run[8] += w * u_sky
            run[9] += ph * ph
            run[10] += ph * pl
            run[11] += pl * pl
            if q & limited:
                run[12] += w
            histogram[here, a // bin_steps] += w
        if length:
            for k in range(columns):
                _add(seen, zone, k, run[k])
                run[k] = 0
