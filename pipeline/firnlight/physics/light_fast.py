"""Insolation of a day on flat ground and on slopes, per unit of map area. (fast twin of light.py)

All that a kernel here calls stands in this file, and every coefficient is an argument: the disk cache of compiled
kernels does not see a change in another file. No fastmath: a fused or reordered sum changes bits between processors.
"""

from firnlight.physics.kernel_cache import prepare

prepare()

import numba  # noqa: E402
import numpy as np  # noqa: E402


@numba.njit(nogil=True, cache=True, inline="always")
def _step_int(value, per_unit, highest):
    """Round half up to stored steps, at most `highest`."""
    n = np.floor(value * per_unit + 0.5)
    return n if n < highest else highest


@numba.njit(nogil=True, cache=True, inline="always")
def _series(m, a, orders):
    """Light over ground of albedo a: sum of a^k m_k, the tail as a geometric series."""
    total = 0.0
    power = 1.0
    for n in range(orders - 1):
        total += power * m[n]
        power *= a
    if m[orders - 2] > 0.0:
        total += power * m[orders - 1] / (1.0 - a * m[orders - 1] / m[orders - 2])
    return total


@numba.njit(nogil=True, cache=True, inline="always")
def _node_line(moments, i, fr, j_first, j_last, line):
    _, _, levels, count = moments.shape
    for j in range(j_first, j_last + 1):
        for z in range(levels):
            for n in range(count):
                line[j, z, n] = moments[i, j, z, n] + (moments[i + 1, j, z, n] - moments[i, j, z, n]) * fr


@numba.njit(nogil=True, cache=True, inline="always")
def _at_height(line, j, fc, level, levels, count, m):
    z = min(int(level), levels - 2)
    fz = level - z
    for n in range(count):
        low = line[j, z, n] + (line[j + 1, z, n] - line[j, z, n]) * fc
        high = line[j, z + 1, n] + (line[j + 1, z + 1, n] - line[j, z + 1, n]) * fc
        m[n] = low + (high - low) * fz


@numba.njit(nogil=True, cache=True)
def flat_block(
    albedo, elevation, row0, col0, moments, row_step, col_step, level0_m, level_step_m, fill, highest, insolation,
):  # fmt: skip
    """Insolation of one block of flat ground; see light.flat_block for the contract."""
    rows, cols = albedo.shape
    _, node_cols, levels, count = moments.shape
    line = np.empty((node_cols, levels, count))
    m = np.empty(count)
    j_first = col0 // col_step
    j_last = (col0 + cols - 1) // col_step + 1
    for r in range(rows):
        i = (row0 + r) // row_step
        _node_line(moments, i, ((row0 + r) - i * row_step) / row_step, j_first, j_last, line)
        for c in range(cols):
            stored = albedo[r, c]
            level = (np.float64(elevation[r, c]) - level0_m) / level_step_m
            insolation[r, c] = fill
            if stored == fill or not (0.0 <= level <= levels - 1.0):
                continue
            j = (col0 + c) // col_step
            _at_height(line, j, ((col0 + c) - j * col_step) / col_step, level, levels, count, m)
            total = _series(m, stored / 10000.0, count - 1)
            if total == total:
                insolation[r, c] = np.int16(_step_int(total, 10.0, highest))


@numba.njit(nogil=True, cache=True)
def beam_row(
    codes, east, north, height, beam, sun_east, sun_north, sun_up, sun_code, bin0, bin1, bin_share, follows, d0, e0, total,
):  # fmt: skip
    """Sum of direct light per map area over a day's time steps, for one row of cells under one sun path.

    Steps are trapezoids in time; where the sun passes a cell's horizon inside a step, the lit share of the step is
    taken by straight lines. Single precision: `total` is compared with the same sum over flat ground.
    """
    half, one, zero = np.float32(0.5), np.float32(1.0), np.float32(0.0)
    cells = east.size
    for c in range(cells):
        total[c] = zero
    for t in range(sun_code.size):
        near, far, share = codes[bin0[t]], codes[bin1[t]], bin_share[t]
        b0, b1, b2 = beam[t, 0], beam[t, 1], beam[t, 2]
        up, se, sn, code = sun_up[t], sun_east[t], sun_north[t], sun_code[t]
        linked = follows[t]
        for c in range(cells):
            h0 = np.float32(near[c])
            d = code - (h0 + (np.float32(far[c]) - h0) * share)
            g = up - se * east[c] - sn * north[c]
            g = g if g > zero else zero
            e = (b0 + height[c] * (b1 + height[c] * b2)) * g
            if linked:
                p, q = d0[c], d
                pp = p if p > zero else zero
                qp = q if q > zero else zero
                span = abs(p) + abs(q)
                lit = (pp + qp) / (span if span > zero else one)
                # weight of the first node over the lit part of the step: middle of it, seen from the lit end
                w = half if pp > zero and qp > zero else (one - half * lit if pp > zero else half * lit)
                total[c] += lit * (w * e0[c] + (one - w) * e)
            d0[c] = d
            e0[c] = e


@numba.njit(nogil=True, cache=True)
def slope_block(
    seen, elevation, slope, aspect, sky_view, codes, around, around_step, row0, col0,
    moments, row_step, col_step, level0_m, level_step_m,
    beam, flat_beam, sun, sun_code, bin0, bin1, bin_share, follows, height0_m, height_span_m,
    tan_slope, sin_aspect, cos_aspect, fill, highest, steepest, insolation, terrain_light,
):  # fmt: skip
    """Insolation and the light from terrain in it, of one block; see light.slope_block for the contract."""
    rows, cols = seen.shape
    _, node_cols, levels, count = moments.shape
    line = np.empty((node_cols, levels, count))
    m = np.empty(count)
    east = np.empty(cols, np.float32)
    north = np.empty(cols, np.float32)
    height = np.empty(cols, np.float32)
    d0 = np.empty(cols, np.float32)
    e0 = np.empty(cols, np.float32)
    total = np.empty(cols, np.float32)
    around_rows, around_cols = around.shape
    j_first = col0 // col_step
    j_last = (col0 + cols - 1) // col_step + 1
    for r in range(rows):
        i = (row0 + r) // row_step
        _node_line(moments, i, ((row0 + r) - i * row_step) / row_step, j_first, j_last, line)
        for c in range(cols):
            tangent = np.float32(0.0)
            turn = 0
            if slope[r, c] > 0 and aspect[r, c] >= 0:
                tangent = tan_slope[min(slope[r, c], steepest)]
                turn = aspect[r, c]
            east[c] = -tangent * sin_aspect[turn]
            north[c] = -tangent * cos_aspect[turn]
            height[c] = np.float32((np.float64(elevation[r, c]) - height0_m) / height_span_m)
        for j in range(j_first, j_last):
            first = max(j * col_step - col0, 0)
            last = min((j + 1) * col_step - col0, cols)
            beam_row(
                codes[:, r, first:last], east[first:last], north[first:last], height[first:last], beam[i, j],
                sun[i, j, :, 0], sun[i, j, :, 1], sun[i, j, :, 2], sun_code[i, j], bin0[i, j], bin1[i, j],
                bin_share[i, j], follows, d0[first:last], e0[first:last], total[first:last],
            )  # fmt: skip
        y = (row0 + r + 0.5) / around_step - 0.5
        y = min(max(y, 0.0), around_rows - 1.0)
        ia = min(int(y), max(around_rows - 2, 0))
        ib = min(ia + 1, around_rows - 1)
        fy = y - ia
        for c in range(cols):
            level = (np.float64(elevation[r, c]) - level0_m) / level_step_m
            insolation[r, c] = fill
            terrain_light[r, c] = fill
            view = sky_view[r, c]
            steep = slope[r, c] < 0 or slope[r, c] > steepest
            if not seen[r, c] or steep or view < 0 or not (0.0 <= level <= levels - 1.0):
                continue
            j = (col0 + c) // col_step
            _at_height(line, j, ((col0 + c) - j * col_step) / col_step, level, levels, count, m)
            x = (col0 + c + 0.5) / around_step - 0.5
            x = min(max(x, 0.0), around_cols - 1.0)
            ja = min(int(x), max(around_cols - 2, 0))
            jb = min(ja + 1, around_cols - 1)
            fx = x - ja
            upper = around[ia, ja] + (around[ia, jb] - around[ia, ja]) * fx
            lower = around[ib, ja] + (around[ib, jb] - around[ib, ja]) * fx
            a = upper + (lower - upper) * fy
            lit = _series(m, a, count - 1)
            direct = m[count - 1]
            z = np.float64(height[c])
            reference = flat_beam[i, j, 0] + z * (flat_beam[i, j, 1] + z * flat_beam[i, j, 2])
            here = direct * np.float64(total[c]) / reference if reference > 0.0 else 0.0
            widen = np.sqrt(1.0 + np.float64(east[c]) ** 2 + np.float64(north[c]) ** 2)
            v = view / 10000.0
            rest = 1.0 - a * (1.0 - v)
            ground = (1.0 - v) * widen * a * lit * v / rest if rest > 0.0 else 0.0 * lit
            whole = here + (lit - direct) * v * widen + ground
            if whole == whole:
                whole = max(whole, 0.0)
                insolation[r, c] = np.int16(_step_int(whole, 10.0, highest))
                terrain_light[r, c] = np.int16(_step_int(ground, 10.0, highest))
