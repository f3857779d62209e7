"""The per-cell chain in one pass: digital numbers to stored integers. (fast twin of chain.py)

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


@numba.njit(nogil=True, cache=True)
def albedo_block(
    dn, scale, offset, nodata, flags_in, row0, col0, zenith, row_step, col_step, zenith_limit,
    intercept, weights, quadratic, has_quadratic, local_u, noise, calibration,
    snow_bands, snow_limits, fraction_form, fraction_numbers, range_limits, bits, fill,
    albedo, albedo_u, snow_fraction, quality,
):  # fmt: skip
    """Albedo, its uncertainty, snow and quality of one block of one scene; see chain.albedo_block for the contract."""
    bands, rows, cols = dn.shape
    missing, cloud, shadow, snow_bit, saturated, low_sun, outside, limited = bits
    kept = np.uint8(missing | cloud | shadow | saturated)
    rho = np.empty((bands, cols))
    lost = np.empty(cols, dtype=np.uint8)
    value = np.empty((2, cols))
    quad = np.empty((2, cols))
    noise_u = np.zeros((2, cols))
    i_green, i_nir, i_swir = snow_bands
    for k in range(2):
        if not has_quadratic[k]:
            total = 0.0
            for b in range(bands):
                total += (weights[k, b] * noise[b]) ** 2
            noise_u[k, :] = np.sqrt(total)
    for r in range(rows):
        lost[:] = 0
        for b in range(bands):
            s, o, nd = scale[b], offset[b], nodata[b]
            for c in range(cols):
                v = np.float64(dn[b, r, c])
                rho[b, c] = v * s + o
                if v == nd or v != v:
                    lost[c] = 1
        for k in range(2):
            for c in range(cols):
                value[k, c] = intercept[k]
                quad[k, c] = 0.0
            for b in range(bands):
                w = weights[k, b]
                for c in range(cols):
                    value[k, c] += w * rho[b, c]
            if has_quadratic[k]:
                for c in range(cols):
                    noise2 = 0.0
                    total = 0.0
                    for b in range(bands):
                        half = 0.0
                        for d in range(bands):
                            half += quadratic[k, b, d] * rho[d, c]
                        total += half * rho[b, c]
                        noise2 += ((weights[k, b] + 2.0 * half) * noise[b]) ** 2
                    quad[k, c] = total
                    value[k, c] += total
                    noise_u[k, c] = np.sqrt(noise2)
        i = (row0 + r) // row_step
        fr = ((row0 + r) - i * row_step) / row_step
        for c in range(cols):
            j = (col0 + c) // col_step
            fc = ((col0 + c) - j * col_step) / col_step
            top = zenith[i, j] + (zenith[i, j + 1] - zenith[i, j]) * fc
            bottom = zenith[i + 1, j] + (zenith[i + 1, j + 1] - zenith[i + 1, j]) * fc
            q = flags_in[r, c] & kept
            if lost[c]:
                q |= missing
            if not (top + (bottom - top) * fr <= zenith_limit):
                q |= low_sun
            snow = False
            ndsi = green = nir = -1.0
            if i_swir >= 0:
                green, nir, swir = rho[i_green, c], rho[i_nir, c], rho[i_swir, c]
                if green + swir > 0.0:
                    ndsi = (green - swir) / (green + swir)
                snow = ndsi >= snow_limits[0] and nir > snow_limits[1] and green > snow_limits[2]
            k = 1 if snow else 0
            a = value[k, c]
            if q == 0 and not (range_limits[0] <= a <= range_limits[1]):
                q |= outside
            if q != 0:
                albedo[r, c] = fill
                for p in range(4):
                    albedo_u[p, r, c] = fill
                snow_fraction[r, c] = fill
                quality[r, c] = q
                continue
            response = abs((a - intercept[k]) + quad[k, c])
            if a < 0.0 or a > 1.0:
                q |= limited
                a = 0.0 if a < 0.0 else 1.0
            if snow:
                q |= snow_bit
            quality[r, c] = q
            albedo[r, c] = np.int16(_step_int(a, 10000.0, 10000.0))
            u_noise = noise_u[k, c]
            u_local = local_u[k]
            u_shared = calibration * response
            u = np.sqrt(u_noise * u_noise + u_local * u_local + u_shared * u_shared)
            albedo_u[0, r, c] = np.int16(_step_int(u, 10000.0, 10000.0))
            albedo_u[1, r, c] = np.int16(_step_int(u_noise, 10000.0, 10000.0))
            albedo_u[2, r, c] = np.int16(_step_int(u_local, 10000.0, 10000.0))
            albedo_u[3, r, c] = np.int16(_step_int(u_shared, 10000.0, 10000.0))
            if i_swir < 0:
                snow_fraction[r, c] = fill
            else:
                share = 0.0
                if ndsi > 0.0 and nir > snow_limits[1] and green > snow_limits[2]:
                    if fraction_form == 0:
                        share = fraction_numbers[0] + fraction_numbers[1] * ndsi
                    else:
                        share = fraction_numbers[0] * np.tanh(fraction_numbers[1] * ndsi + fraction_numbers[2])
                        share += fraction_numbers[3]
                    share = min(max(share, 0.0), 1.0)
                snow_fraction[r, c] = np.int16(_step_int(share, 10000.0, 10000.0))


@numba.njit(nogil=True, cache=True)
def carry_block(albedo, albedo_u, quality, snow_bit, shapes, row_step, col_step, row0, col0, relative_u, fill):
    """Albedo of the overpass to that of the day, in place; see chain.carry_block for the contract."""
    rows, cols = albedo.shape
    for r in range(rows):
        i = (row0 + r) // row_step
        fr = ((row0 + r) - i * row_step) / row_step
        for c in range(cols):
            if albedo[r, c] == fill:
                continue
            j = (col0 + c) // col_step
            fc = ((col0 + c) - j * col_step) / col_step
            first = 0 if quality[r, c] & snow_bit else 2
            seen = 0.0
            whole = 0.0
            for n in range(2):
                k = first + n
                top = shapes[i, j, k] + (shapes[i, j + 1, k] - shapes[i, j, k]) * fc
                bottom = shapes[i + 1, j, k] + (shapes[i + 1, j + 1, k] - shapes[i + 1, j, k]) * fc
                value = top + (bottom - top) * fr
                if n == 0:
                    seen = value
                else:
                    whole = value
            a = albedo[r, c] / 10000.0
            if first == 0:
                overhead = 2 * a / (1 + seen + np.sqrt((1 + seen) * (1 + seen) - 4 * seen * a))
                there = overhead + whole * overhead * (1 - overhead)
            else:
                there = a * (whole / seen)
            there = min(max(there, 0.0), 1.0)
            albedo[r, c] = np.int16(_step_int(there, 10000.0, 10000.0))
            added = relative_u * abs(there - a)
            local = albedo_u[2, r, c] / 10000.0
            local = np.sqrt(local * local + added * added)
            noise = albedo_u[1, r, c] / 10000.0
            shared = albedo_u[3, r, c] / 10000.0
            albedo_u[2, r, c] = np.int16(_step_int(local, 10000.0, 10000.0))
            albedo_u[0, r, c] = np.int16(
                _step_int(np.sqrt(noise * noise + local * local + shared * shared), 10000.0, 10000.0)
            )


@numba.njit(nogil=True, cache=True)
def absorbed_block(
    albedo, albedo_u, insolation, shared_u, local_u, fill, highest, absorbed, absorbed_u,
):  # fmt: skip
    """Absorbed shortwave of one block; see chain.absorbed_block for the contract."""
    rows, cols = albedo.shape
    for r in range(rows):
        for c in range(cols):
            stored = albedo[r, c]
            s = np.int64(insolation[r, c])
            if stored == fill or s == fill:
                absorbed[r, c] = fill
                absorbed_u[r, c] = fill
                continue
            dark = 10000 - np.int64(stored)
            absorbed[r, c] = np.int16((s * dark + 5000) // 10000)
            u_noise = s * albedo_u[1, r, c] / 100000.0
            u_local = s * albedo_u[2, r, c] / 100000.0
            u_calibration = s * albedo_u[3, r, c] / 100000.0
            u_sky = s * dark / 100000.0
            u = u_noise * u_noise + u_local * u_local + u_calibration * u_calibration
            u = np.sqrt(u + u_sky * u_sky * (shared_u * shared_u + local_u * local_u))
            absorbed_u[r, c] = np.int16(_step_int(u, 10.0, highest))


@numba.njit(nogil=True, cache=True)
def net_block(
    absorbed, absorbed_u, quality, snow_bit, elevation, covers, emissivity, slope, sky_view, cos_slope,
    surface, sigma, melting, row0, col0, longwave, row_step, col_step, level0_m, level_step_m, shared_u, local_u, fill,
    longest, highest, net_longwave, net, net_u,
):  # fmt: skip
    """Net longwave and net radiation of one block; see chain.net_block for the contract."""
    rows, cols = absorbed.shape
    _, _, levels, _ = longwave.shape
    on_slopes = slope.shape[0] > 0
    measured = surface.shape[0] > 0
    for r in range(rows):
        i = (row0 + r) // row_step
        fr = ((row0 + r) - i * row_step) / row_step
        for c in range(cols):
            net_longwave[r, c] = fill
            net[r, c] = fill
            net_u[r, c] = fill
            level = (np.float64(elevation[r, c]) - level0_m) / level_step_m
            if absorbed[r, c] == fill or not (0.0 <= level <= levels - 1.0):
                continue
            j = (col0 + c) // col_step
            fc = ((col0 + c) - j * col_step) / col_step
            z = min(int(level), levels - 2)
            fz = level - z
            snowy = (quality[r, c] & snow_bit) != 0
            up = 1 if snowy else 2
            balance = 0.0
            for side in range(2):
                n = 0 if side == 0 else up
                top_low = longwave[i, j, z, n] + (longwave[i, j + 1, z, n] - longwave[i, j, z, n]) * fc
                top_high = longwave[i, j, z + 1, n] + (longwave[i, j + 1, z + 1, n] - longwave[i, j, z + 1, n]) * fc
                low = longwave[i + 1, j, z, n] + (longwave[i + 1, j + 1, z, n] - longwave[i + 1, j, z, n]) * fc
                high = longwave[i + 1, j, z + 1, n]
                high += (longwave[i + 1, j + 1, z + 1, n] - longwave[i + 1, j, z + 1, n]) * fc
                top = top_low + (top_high - top_low) * fz
                bottom = low + (high - low) * fz
                value = top + (bottom - top) * fr
                if side == 1 and measured and surface[r, c] == surface[r, c]:
                    kelvin = np.float64(surface[r, c])
                    if snowy and kelvin > melting:
                        kelvin = melting
                    value = sigma * kelvin**4
                balance = value if side == 0 else balance - value
            balance *= emissivity[0] if snowy else emissivity[covers[r, c]]
            if on_slopes:
                balance *= sky_view[r, c] / 10000.0 / cos_slope[slope[r, c]]
            if balance != balance:
                continue
            steps = np.floor(balance * 10.0 + 0.5)
            steps = min(max(steps, -longest), longest)
            net_longwave[r, c] = np.int16(steps)
            net[r, c] = np.int16(np.int64(absorbed[r, c]) + np.int64(steps))
            u = absorbed_u[r, c] / 10.0
            u = np.sqrt(u * u + shared_u * shared_u + local_u * local_u)
            net_u[r, c] = np.int16(_step_int(u, 10.0, highest))
