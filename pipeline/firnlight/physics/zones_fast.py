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
    strata, area, albedo, albedo_u, insolation, terrain_light, absorbed, net_longwave, net, snow_fraction, quality, bits,
    fill, sky_u, longwave_u, bin_steps, block_cells, row0, col0, seen, unseen, histogram, local,
):  # fmt: skip
    """Add one block's cells to the totals, in place; see zones.zone_sums for the contract.

    terrain_light, net_longwave and net have no rows where they are not made. local : (zones, block rows, block
    columns, LOCAL, 2) of this window's blocks of ground. Nothing overflows as long as a block is smaller than 1000 km.
    """
    rows, cols = strata.shape
    missing, cloud, shadow, snow_bit, saturated, low_sun, outside, limited = bits
    columns = seen.shape[1]
    run = np.zeros(columns, dtype=np.int64)
    places = local.shape[3]
    near = np.zeros(places, dtype=np.int64)
    half = np.int64(1) << 28
    mask = half - 1
    on_slopes = terrain_light.shape[0] > 0
    with_longwave = net_longwave.shape[0] > 0
    first_i = row0 // block_cells
    first_j = col0 // block_cells
    for r in range(rows):
        zone = np.int64(-1)
        length = 0
        i = (row0 + r) // block_cells - first_i
        down = 2 * ((row0 + r) % block_cells) + 1  # middle of the cell, in half cells
        j = 0
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
            column = (col0 + c) // block_cells - first_j
            # 16 cells of the largest products still fit into int64
            if here != zone or column != j or length == 16:
                if length:
                    for k in range(columns):
                        _add(seen, zone, k, run[k])
                        run[k] = 0
                    for k in range(places):
                        _add(local[zone, i], j, k, near[k])
                        near[k] = 0
                zone = here
                j = column
                length = 0
            length += 1
            a = np.int64(albedo[r, c])
            # hundredths of W m-2
            dark = s * (10000 - a) / 1000.0
            p = w * np.int64(np.floor(s * albedo_u[1, r, c] / 1000.0 + 0.5))
            ph = p >> 28
            pl = p & mask
            run[0] += 1
            run[1] += w
            run[2] += w * a
            run[3] += w * s
            if on_slopes and terrain_light[r, c] != fill:
                run[4] += w * np.int64(terrain_light[r, c])
            run[5] += w * np.int64(absorbed[r, c])
            run[6] += w * max(np.int64(snow_fraction[r, c]), 0)
            if with_longwave and net_longwave[r, c] != fill:
                run[7] += w * np.int64(net_longwave[r, c])
                run[8] += w
                if q & snow_bit:
                    run[9] += w * max(np.int64(net[r, c]), 0)
                run[12] += w * longwave_u[0]
                near[2] += w * longwave_u[1]
            run[10] += w * np.int64(np.floor(s * albedo_u[3, r, c] / 1000.0 + 0.5))
            run[11] += w * np.int64(np.floor(dark * sky_u[0] + 0.5))
            run[13] += ph * ph
            run[14] += ph * pl
            run[15] += pl * pl
            if q & limited:
                run[16] += w
            near[0] += w * np.int64(np.floor(s * albedo_u[2, r, c] / 1000.0 + 0.5))
            near[1] += w * np.int64(np.floor(dark * sky_u[1] + 0.5))
            across = 2 * ((col0 + c) % block_cells) + 1
            near[3] += w
            near[4] += w * down
            near[5] += w * across
            near[6] += w * (down * down + across * across)
            histogram[here, a // bin_steps] += w
        if length:
            for k in range(columns):
                _add(seen, zone, k, run[k])
                run[k] = 0
            for k in range(places):
                _add(local[zone, i], j, k, near[k])
                near[k] = 0
