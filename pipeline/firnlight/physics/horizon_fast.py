"""Horizons of a whole grid in one direction, and their share in the sky-view factor. (fast twin of horizon.py)

All that a kernel here calls stands in this file, and every table is an argument. Several lines are followed side by
side, so that neighbouring cells are read and written together; the scratch memory is that of those lines.
"""

# mypy: ignore-errors
from firnlight.physics.kernel_cache import prepare

prepare()

import numba  # noqa: E402
import numpy as np  # noqa: E402

from firnlight.physics.horizon import CODES, MISSING, SHARE, code_angles, code_edges, frame, line_places  # noqa: E402

_ACROSS_ROWS, _ALONG_ROWS = 64, 16  # lines side by side: 256 bytes of a row, or one cache line of each of 16 rows
_BUCKETS = 1024  # less than half as wide as the narrowest code


@numba.njit(nogil=True, cache=True)
def _walk(
    grid, rows, cols, start, row_step, col_step, places, shares, spacing, radius, side,
    edges, lowest, missing, codes, angles,
):  # fmt: skip
    """Horizons towards row 0 of a turned grid; see horizon.horizon_tangent.

    Cell (s, c) of the turned grid is element start + s row_step + c col_step of the flat arrays. `codes` or `angles` is
    filled, the other is empty.
    """
    as_codes = codes.size > 0
    per_spacing = 1.0 / spacing
    buckets = lowest.size - 1
    stack = np.empty((side + 1, rows + 1, 3))
    stack[:, 0, 0] = -np.inf
    stack[:, 0, 1] = -1.0
    stack[:, 0, 2] = -np.inf
    height = np.empty(side + 2)
    seen = np.empty(side + 1)
    top = np.empty(side + 1, np.int64)
    w_first = min(places[0] // shares, places[rows - 1] // shares)
    w_last = max(places[0] // shares, places[rows - 1] // shares)
    for begin in range(-w_last, cols - w_first, side):
        top[:] = 0
        for s in range(rows):
            w = places[s] // shares
            f = (places[s] - w * shares) / shares
            base = w + begin - 1  # column left of line 0 of this batch
            j_first, j_last = max(0, -1 - base), min(side, cols - 1 - base)
            if j_first > j_last:
                continue
            at = start + s * row_step + base * col_step
            for j in range(j_first, j_last + 2):
                height[j] = grid[at + j * col_step] if 0 <= base + j < cols else np.nan
            away = s * spacing
            drop = away * away / (2.0 * radius)
            lift = away / radius
            place = float(s)
            for j in range(j_first, j_last + 1):
                left, right = height[j], height[j + 1]
                z = left + f * (right - left)
                if z != z:
                    z = left if left == left else (right if f > 0.0 else left)
                    if z != z:
                        continue
                z = (z - drop) * per_spacing
                k = top[j]
                while stack[j, k, 0] - z < stack[j, k, 2] * (place - stack[j, k, 1]):
                    k -= 1
                slope = (stack[j, k, 0] - z) / (place - stack[j, k, 1])
                k += 1
                stack[j, k, 0] = z
                stack[j, k, 1] = place
                stack[j, k, 2] = slope
                top[j] = k
                slope -= lift
                seen[j] = slope if slope > 0.0 else 0.0
            for j in range(max(1, -base), j_last + 1):
                known = height[j] == height[j]
                tangent = seen[j]
                if f > 0.0:
                    tangent += f * (seen[j - 1] - tangent)
                if as_codes:
                    if known:
                        code = lowest[int(tangent / (1.0 + tangent) * buckets)]
                        codes[at + j * col_step] = code + (tangent >= edges[code])
                    else:
                        codes[at + j * col_step] = missing
                else:
                    angles[at + j * col_step] = np.float32(np.arctan(tangent)) if known else np.float32(np.nan)


def _tables():
    """Edges between codes (a last one that nothing reaches), and the code at the foot of each bucket of t / (1 + t)."""
    edges = code_edges()
    foot = np.arange(_BUCKETS) / _BUCKETS
    # a hair lower: a tangent at the foot may be put in either bucket
    lowest = np.searchsorted(edges, foot / (1 - foot) * (1 - 1e-9), side="right")
    return np.append(edges, np.inf), np.append(lowest, edges.size)


def _run(elevation, azimuth_deg, cell_m, earth_radius_m, codes, angles):
    quarters, sideways = frame(azimuth_deg)
    rows, cols = elevation.shape
    if elevation.size == 0:
        return
    # numpy.rot90 by steps over the flat array: one kernel for all four quarters, and no copy
    start, row_step, col_step = (
        (0, cols, 1),
        (cols - 1, -1, cols),
        (rows * cols - 1, -cols, -1),
        ((rows - 1) * cols, 1, -cols),
    )[quarters]
    if quarters % 2:
        rows, cols = cols, rows
    edges, lowest = _tables()
    _walk(
        np.ascontiguousarray(elevation, np.float32).reshape(-1),
        rows,
        cols,
        start,
        row_step,
        col_step,
        line_places(rows, sideways),
        SHARE,
        float(cell_m) * float(np.sqrt(1.0 + sideways * sideways)),
        float(earth_radius_m),
        _ALONG_ROWS if quarters % 2 else _ACROSS_ROWS,
        edges,
        lowest,
        MISSING,
        codes,
        angles,
    )


def horizon_codes(elevation_m, azimuth_deg, cell_m, earth_radius_m, codes_out):
    """Same contract as horizon.horizon_codes; elevations are taken as float32, codes_out is C-contiguous uint8."""
    elevation = np.asarray(elevation_m)
    if codes_out.shape != elevation.shape or codes_out.dtype != np.uint8 or not codes_out.flags.c_contiguous:
        raise ValueError(f"codes_out must be C-contiguous uint8 of shape {elevation.shape}")
    _run(elevation, azimuth_deg, cell_m, earth_radius_m, codes_out.reshape(-1), np.empty(0, np.float32))


def horizon_angle(elevation_m, azimuth_deg, cell_m, earth_radius_m=np.inf):
    """Same contract as horizon.horizon_angle; elevations are taken as float32."""
    angles = np.empty(np.shape(elevation_m), np.float32)
    _run(np.asarray(elevation_m), azimuth_deg, cell_m, earth_radius_m, np.empty(0, np.uint8), angles.reshape(-1))
    return angles


@numba.njit(nogil=True, cache=True)
def _add(codes, sin_az, cos_az, east, north, weight, tangents, sin2, arcs, out):
    one, right = np.float32(1.0), np.float32(0.5 * np.pi)
    last = tangents.size - 1
    for n in range(codes.size):
        code = codes[n]
        zx, zy = east[n], north[n]
        plane = zx * sin_az + zy * cos_az  # tangent of the elevation angle of the cell's own plane
        cos_slope = weight / np.sqrt(one + zx * zx + zy * zy)
        if code > last:
            out[n] = np.float32(np.nan)
        elif plane > tangents[code]:
            # above its own plane: cos^2 e (1 + tan^2 e) = 1
            out[n] += cos_slope * (one - plane * (right - np.arctan(plane)))
        else:
            out[n] += cos_slope * (sin2[code] - plane * arcs[code])


def sky_view_add(codes, azimuth_deg, east, north, weight, out):
    """Add one azimuth's share of the sky-view factor; all azimuths added to zeros give terrain.sky_view.

    Parameters
    ----------
    codes : (rows, cols) uint8              From horizon_codes, looking towards azimuth_deg.
    azimuth_deg : clockwise from the grid's north. [deg]
    east, north : (rows, cols) float32      From terrain.gradient. [1]
    weight : width of the azimuth's sector over the whole turn, 1/n for n of them.
    out : (rows, cols) float32              Added to in place; NaN from a missing horizon or a NaN gradient on.

    All C-contiguous. With T = dz/dx sin phi + dz/dy cos phi, the slope of the cell's plane towards phi, the integrand of
    Dozier & Frew (1990, equation 7b) is cos S [sin^2 H - T (H - sin H cos H)], as sin S cos(phi - A) = -T cos S; no
    aspect is needed, so flat ground is not a case apart.
    """
    for array in (codes, east, north, out):
        if array.shape != codes.shape or not array.flags.c_contiguous:
            raise ValueError(f"arrays must be C-contiguous and of one shape, got {array.shape} beside {codes.shape}")
    angle = code_angles()[:CODES]
    h = 0.5 * np.pi - angle
    azimuth = np.radians(float(azimuth_deg))
    _add(
        codes.reshape(-1),
        np.float32(np.sin(azimuth)),
        np.float32(np.cos(azimuth)),
        east.reshape(-1),
        north.reshape(-1),
        np.float32(weight),
        np.tan(angle).astype(np.float32),
        (np.sin(h) ** 2).astype(np.float32),
        (h - np.sin(h) * np.cos(h)).astype(np.float32),
        out.reshape(-1),
    )
