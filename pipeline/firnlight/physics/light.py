"""Insolation of a day on flat ground and on slopes, per unit of map area. (reference twin of light_fast.py)

A cell's light is the sum of three streams, each per unit of horizontal area, so that a region's sum is its energy:

    beam      mean over the day of  DNI lit max(0, s_up - s_east dz/dx - s_north dz/dy)
    sky       (G - B) V / cos S
    terrain   (1 - V) / cos S  x  a G V / (1 - a (1 - V))

s is the unit vector to the sun in the grid's directions, `lit` 1 where the sun stands above the cell's horizon, S the
slope, V its sky view (Dozier & Frew 1990), G the insolation of flat ground among surroundings of albedo a, with the
light that goes to and fro between ground and sky, B its direct part. What a tilted cell sees that is not sky is
terrain, 1 - V: so nothing is lost between cells. The ground around is taken to see as much sky as the cell and to light
itself, as in a hollow: the deeper, the darker.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import Window
from firnlight.core.lattice import Lattice
from firnlight.physics.clearsky import day_mean_insolation

Floats = NDArray[np.float64]
CODE_DEG = 0.36  # of a horizon code
SLOPE_STEP_DEG, ASPECT_STEP_DEG = 0.01, 0.02
STEEPEST_DEG = 80.0  # beyond it a cell of a map no longer stands for the ground: unseen


@dataclass(frozen=True, eq=False)
class SunPaths:
    """The sun's way through a day over each lattice cell, at time nodes; what slope_block needs beside the moments.

    Attributes
    ----------
    beam : (ni, nj, t, 3)          Direct normal irradiance as b0 + b1 h + b2 h^2 of the scaled height h. [W m-2]
    flat_beam : (ni, nj, 3)        The same for the day's sum over flat, open ground.
    sun : (ni, nj, t, 3)           Unit vector to the sun: grid east, grid north, up.
    sun_code : (ni, nj, t)         Its elevation in horizon codes of 0.36 deg.
    bin0, bin1, bin_share          (ni, nj, t) The two horizon directions beside it and its place between them.
    follows : (t,)                 Whether a step leads from the node before to this one.
    height0_m, height_span_m       h = (elevation - height0) / span.
    """

    beam: NDArray[np.float32]
    flat_beam: Floats
    sun: NDArray[np.float32]
    sun_code: NDArray[np.float32]
    bin0: NDArray[np.int32]
    bin1: NDArray[np.int32]
    bin_share: NDArray[np.float32]
    follows: NDArray[np.bool_]
    height0_m: float
    height_span_m: float


def slope_tables() -> tuple[NDArray[np.float32], NDArray[np.float32], NDArray[np.float32]]:
    """Tangent of every stored slope, sine and cosine of every stored aspect."""
    steep = np.tan(np.radians(np.arange(round(STEEPEST_DEG / SLOPE_STEP_DEG) + 1) * SLOPE_STEP_DEG))
    turn = np.radians(np.arange(round(360 / ASPECT_STEP_DEG) + 1) * ASPECT_STEP_DEG)
    return steep.astype(np.float32), np.sin(turn).astype(np.float32), np.cos(turn).astype(np.float32)


def _heights(moments: Lattice, window: Window, elevation_m: NDArray[Any], level0_m: float, level_step_m: float) -> Any:
    """Moments at each cell's place and height, NaN outside the levels: (y, x, count).

    As in the kernel between node rows first, which gives one line of nodes for each row of cells; then along it.
    """
    v = moments.values
    level = (elevation_m.astype(np.float64) - level0_m) / level_step_m
    inside = (level >= 0) & (level <= v.shape[2] - 1)
    level = np.where(inside, level, 0.0)
    low = np.minimum(level.astype(np.int64), v.shape[2] - 2)
    r, c = np.arange(window.row, window.row + window.rows), np.arange(window.col, window.col + window.cols)
    i, j = r // moments.row_step, c // moments.col_step
    fr = ((r - i * moments.row_step) / moments.row_step)[:, np.newaxis, np.newaxis, np.newaxis]
    fc = ((c - j * moments.col_step) / moments.col_step)[:, np.newaxis]
    line = v[i] + (v[i + 1] - v[i]) * fr
    rows = np.arange(r.size)[:, np.newaxis]

    def along(at: Any) -> Any:
        left = line[rows, j, at]
        return left + (line[rows, j + 1, at] - left) * fc

    under = along(low)
    here = under + (along(low + 1) - under) * (level - low)[..., np.newaxis]
    return np.where(inside[..., np.newaxis], here, np.nan)


def _stored(values: Floats, seen: NDArray[np.bool_], fill: int, highest: int) -> NDArray[np.int16]:
    known = seen & ~np.isnan(values)
    steps = np.minimum(np.floor(np.where(known, values, 0.0) * 10.0 + 0.5), highest)
    return np.where(known, steps, fill).astype(np.int16)


def flat_block(
    albedo_stored: NDArray[np.int16], elevation_m: NDArray[np.float32], window: Window, moments: Lattice,
    level0_m: float, level_step_m: float, fill: int, highest: int,
) -> NDArray[np.int16]:  # fmt: skip
    """Insolation of flat ground among surroundings of the cell's own albedo.

    Parameters
    ----------
    albedo_stored : (y, x) in steps of 0.0001, `fill` where unseen.
    elevation_m : (y, x); NaN or outside the levels gives an unseen cell. [m]
    moments : lattice of (levels, orders + 1): moments of the day (clearsky.day_moments) and the direct part. [W m-2]

    Returns
    -------
    (y, x) int16 in steps of 0.1 W m-2; `fill` where unseen or where a moment is NaN (a gap in the weather).
    """
    here = _heights(moments, window, elevation_m, level0_m, level_step_m)
    seen = albedo_stored != fill
    light = day_mean_insolation(here[..., :-1], np.where(seen, albedo_stored, 0) / 10000.0)
    return _stored(light, seen, fill, highest)


def beam_sums(codes: Any, east: Any, north: Any, height: Any, paths: SunPaths, i: int, j: int) -> NDArray[np.float32]:
    """Day sums of direct light per map area for cells under the path of lattice cell (i, j); single precision.

    Steps are trapezoids in time; where the sun passes a cell's horizon inside a step, the lit share of the step is
    taken by straight lines.
    """
    f = np.float32
    total, before = np.zeros(east.shape, f), None
    for t in range(paths.sun_code.shape[2]):
        near, far = (codes[b[i, j, t]].astype(f) for b in (paths.bin0, paths.bin1))
        d = paths.sun_code[i, j, t] - (near + (far - near) * paths.bin_share[i, j, t])
        se, sn, up = paths.sun[i, j, t]
        g = np.maximum(up - se * east - sn * north, f(0))
        b0, b1, b2 = paths.beam[i, j, t]
        e = (b0 + height * (b1 + height * b2)) * g
        if before is not None and paths.follows[t]:
            p, e0 = before
            pp, qp, span = np.maximum(p, f(0)), np.maximum(d, f(0)), np.abs(p) + np.abs(d)
            lit = (pp + qp) / np.where(span > 0, span, f(1))
            one_end = np.where(pp > 0, f(1) - f(0.5) * lit, f(0.5) * lit)
            w = np.where((pp > 0) & (qp > 0), f(0.5), one_end)
            total = total + lit * (w * e0 + (f(1) - w) * e)
        before = d, e
    return total


def slope_block(
    seen: NDArray[np.bool_], elevation_m: NDArray[np.float32], slope: NDArray[np.int16], aspect: NDArray[np.int16],
    sky_view: NDArray[np.int16], codes: NDArray[np.uint8], around: Floats, around_step: int, window: Window,
    moments: Lattice, level0_m: float, level_step_m: float, paths: SunPaths, fill: int, highest: int,
) -> tuple[NDArray[np.int16], NDArray[np.int16]]:  # fmt: skip
    """Insolation on slopes and the part of it that comes from terrain; see the head of this file.

    Parameters
    ----------
    seen : (y, x) cells that are wanted.
    slope, aspect, sky_view : (y, x) stored integers (0.01 deg, 0.02 deg, 0.0001); aspect below 0: level ground.
    codes : (directions, y, x) horizon of each direction in steps of 0.36 deg.
    around : (m, n) albedo of the surroundings on coarse cells of `around_step` cells, read bilinearly. [1]
    moments : as in flat_block.

    Returns
    -------
    insolation, terrain_light : (y, x) int16 in steps of 0.1 W m-2 per unit of map area; `fill` where not wanted,
    without elevation, steeper than 80 deg, or where a moment is NaN.

    References
    ----------
    Dozier J., Frew J. (1990). Rapid calculation of terrain parameters for radiation modeling from digital elevation
    data. IEEE Trans. Geosci. Remote Sens. 28:963-969, doi:10.1109/36.58986.
    """
    tan_slope, sin_aspect, cos_aspect = slope_tables()
    steepest = len(tan_slope) - 1
    level = (slope <= 0) | (aspect < 0)
    tangent = np.where(level, np.float32(0), tan_slope[np.clip(slope, 0, steepest)])
    turn = np.where(level, 0, aspect)
    east, north = -tangent * sin_aspect[turn], -tangent * cos_aspect[turn]
    height = ((elevation_m.astype(np.float64) - paths.height0_m) / paths.height_span_m).astype(np.float32)
    rows = np.arange(window.row, window.row + window.rows)
    cols = np.arange(window.col, window.col + window.cols)
    i_of, j_of = rows // moments.row_step, cols // moments.col_step
    total, reference = np.zeros(seen.shape, np.float32), np.zeros(seen.shape)
    for i in np.unique(i_of):
        for j in np.unique(j_of):
            at = np.ix_(i_of == i, j_of == j)
            every = (slice(None), *at)
            total[at] = beam_sums(codes[every], east[at], north[at], height[at], paths, i, j)
            b0, b1, b2 = paths.flat_beam[i, j]
            z = height[at].astype(np.float64)
            reference[at] = b0 + z * (b1 + z * b2)
    here = _heights(moments, window, elevation_m, level0_m, level_step_m)

    def between(index: Any, count: int) -> tuple[Any, Any, Any]:
        at = np.clip((index + 0.5) / around_step - 0.5, 0, count - 1)
        low = np.minimum(at.astype(int), max(count - 2, 0))
        return low, np.minimum(low + 1, count - 1), at - low

    (ia, ib, fy), (ja, jb, fx) = between(rows, around.shape[0]), between(cols, around.shape[1])
    upper = around[np.ix_(ia, ja)] + (around[np.ix_(ia, jb)] - around[np.ix_(ia, ja)]) * fx
    lower = around[np.ix_(ib, ja)] + (around[np.ix_(ib, jb)] - around[np.ix_(ib, ja)]) * fx
    a = upper + (lower - upper) * fy[:, np.newaxis]
    lit, direct = day_mean_insolation(here[..., :-1], a), here[..., -1]
    beam = np.divide(direct * total, reference, out=np.zeros_like(reference), where=reference > 0)
    widen = np.sqrt(1.0 + east.astype(np.float64) ** 2 + north.astype(np.float64) ** 2)
    v = sky_view / 10000.0
    rest = 1.0 - a * (1.0 - v)  # 0 in a closed box of white walls, which no light of the sky reaches
    ground = np.divide((1.0 - v) * widen * a * lit * v, rest, out=0.0 * lit, where=rest > 0)
    whole = np.maximum(beam + (lit - direct) * v * widen + ground, 0.0)
    wanted = seen & (sky_view >= 0) & (slope >= 0) & (slope <= steepest) & ~np.isnan(elevation_m)
    return _stored(whole, wanted, fill, highest), _stored(np.where(np.isnan(whole), np.nan, ground), wanted, fill, highest)
