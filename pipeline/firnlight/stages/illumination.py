"""Reflectance of slopes as if the ground lay level: fitted per band and land cover over a whole scene, then applied."""

from __future__ import annotations

import threading
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import Window
from firnlight.core.lattice import Lattice
from firnlight.core.layers import flag_bit
from firnlight.physics import sun
from firnlight.physics.light import CODE_DEG, slope_tables
from firnlight.physics.snow import is_snow
from firnlight.physics.terrain import LEAST_CELLS, LEAST_COS_INCIDENCE, illumination_correction
from firnlight.stages.insolation import DIRECTIONS, Relief, grid_north_deg

STEPS = 10_000  # of cosine and of reflectance: whole numbers, so that no order of blocks changes a sum
ANY_COVER = -1
Method = Literal["c", "scs+c"]
Fit = dict[tuple[int, int], float | None]  # band number, cover code -> C


@dataclass(frozen=True, eq=False)
class SceneSun:
    """The sun of a scene at the tile's lattice nodes, in the grid's directions: unit vectors (nr, nc, 3)."""

    nodes: Lattice

    @classmethod
    def at(cls, unix_s: float, longitude_deg: Lattice, latitude_deg: Lattice) -> SceneSun:
        lon, lat = longitude_deg.values, latitude_deg.values
        zenith, bearing, _ = sun.position(unix_s, lat, lon)
        turn = grid_north_deg(lat, lon).reshape(lat.shape[0] - 1, lat.shape[1] - 1)
        north = np.pad(turn, ((0, 1), (0, 1)), mode="edge")  # of the lattice cell: it turns by under 0.1 deg over one
        z, a = np.radians(zenith), np.radians(bearing - north)
        vector = np.stack([np.sin(z) * np.sin(a), np.sin(z) * np.cos(a), np.cos(z)], axis=-1)
        return cls(Lattice(longitude_deg.row_step, longitude_deg.col_step, vector))

    def directions(self) -> tuple[int, ...]:
        """Horizon directions that the scene's sun lies between."""
        v = self.nodes.values
        place = np.degrees(np.arctan2(v[..., 0], v[..., 1])) % 360 / (360 / DIRECTIONS)
        low = np.floor(place).astype(int) % DIRECTIONS
        return tuple(int(one) for one in np.unique([low, (low + 1) % DIRECTIONS]))


@dataclass(frozen=True, eq=False)
class Incidence:
    """Of the cells of a window: cosines of the sun's angle to the surface and to the zenith, slope [deg], lit or not."""

    cos_i: NDArray[np.float64]
    cos_zenith: NDArray[np.float64]
    slope_deg: NDArray[np.float64]
    lit: NDArray[np.bool_]


def incidence(relief: Relief, directions: tuple[int, ...], window: Window, scene_sun: SceneSun) -> Incidence:
    """How the sun of a scene meets the ground; not lit: steeper than grazing, turned away, or in the shadow of a ridge."""
    vector = scene_sun.nodes.at(window)
    tan_slope, sin_aspect, cos_aspect = slope_tables()
    flat = (relief.slope <= 0) | (relief.aspect < 0)
    tangent = np.where(flat, 0.0, tan_slope[np.clip(relief.slope, 0, len(tan_slope) - 1)])
    turn = np.where(flat, 0, relief.aspect)
    east, north = -tangent * sin_aspect[turn], -tangent * cos_aspect[turn]
    cos_slope = 1 / np.sqrt(1 + tangent * tangent)
    cos_i = (vector[..., 2] - vector[..., 0] * east - vector[..., 1] * north) * cos_slope
    place = np.degrees(np.arctan2(vector[..., 0], vector[..., 1])) % 360 / (360 / DIRECTIONS)
    low = np.floor(place).astype(int) % DIRECTIONS
    position = np.zeros(DIRECTIONS, int)
    position[list(directions)] = np.arange(len(directions))
    rows, cols = np.indices(low.shape)
    near = relief.codes[position[low], rows, cols].astype(float)
    far = relief.codes[position[(low + 1) % DIRECTIONS], rows, cols].astype(float)
    horizon = near + (far - near) * (place - np.floor(place))
    height = np.degrees(np.arcsin(np.clip(vector[..., 2], -1, 1))) / CODE_DEG
    lit = (cos_i >= LEAST_COS_INCIDENCE) & (height > horizon)
    return Incidence(cos_i, vector[..., 2], np.degrees(np.arctan(tangent)), lit)


def reflectance(
    dn: NDArray[Any], scale: NDArray[np.float64], offset: NDArray[np.float64], nodata: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Band numbers to reflectance, NaN where there is no data: (bands, y, x). [1]"""
    values = dn * scale[:, None, None] + offset[:, None, None]
    return np.where((dn == nodata[:, None, None]) | np.isnan(values), np.nan, values)


def level_cells(rho: Any, bands: tuple[str, ...], flags: NDArray[np.uint8], over_snow: bool) -> NDArray[np.bool_]:
    """Cells whose reflectance may be corrected: seen, and free of snow unless that is asked for."""
    spoiled = sum(flag_bit(name) for name in ("missing", "cloud", "shadow", "saturated"))
    use = ((flags & np.uint8(spoiled)) == 0) & ~np.isnan(rho).any(axis=0)
    if not over_snow and {"green", "nir", "swir16"} <= set(bands):
        green, nir, swir = (rho[bands.index(name)] for name in ("green", "nir", "swir16"))
        use &= ~is_snow(green, nir, swir)
    return np.asarray(use)


class FitSums:
    """Gathers the line of reflectance against cos i per band and cover, block by block, from any number of threads."""

    def __init__(self) -> None:
        self._sums: dict[tuple[int, int], list[int]] = {}
        self._lock = threading.Lock()

    def add(self, rho: Any, use: NDArray[np.bool_], cover: NDArray[Any] | None, light: Incidence) -> None:
        """Add the cells of a window: `use` from level_cells, `cover` codes or None."""
        use = use & light.lit
        codes = np.full(use.shape, ANY_COVER) if cover is None else cover
        x_all = np.floor(light.cos_i * STEPS + 0.5).astype(np.int64)
        for code in np.unique(codes[use]).tolist():
            at = use & (codes == code)
            x = x_all[at]
            for band in range(rho.shape[0]):
                y = np.floor(rho[band][at] * STEPS + 0.5).astype(np.int64)
                sums = [x.size, int(x.sum()), int(y.sum()), int((x * x).sum()), int((x * y).sum())]
                with self._lock:
                    have = self._sums.setdefault((band, code), [0] * 5)
                    for n, one in enumerate(sums):
                        have[n] += one

    def fit(self) -> Fit:
        """C per band and cover; None where the relief does not darken the ground, or too few cells tell."""
        found: Fit = {}
        for key, (n, sx, sy, sxx, sxy) in sorted(self._sums.items()):
            spread, common = n * sxx - sx * sx, n * sxy - sx * sy
            if n < LEAST_CELLS or spread <= 0 or common <= 0:
                found[key] = None
                continue
            slope = common / spread
            found[key] = max((sy - slope * sx) / n / STEPS / slope, 0.0)
        return found


def levelled(
    rho: Any, use: NDArray[np.bool_], cover: NDArray[Any] | None, light: Incidence, fit: Fit, method: Method
) -> NDArray[np.float32]:
    """Reflectance with the cells of `use` corrected: (bands, y, x) float32; the others as they are."""
    codes = np.full(use.shape, ANY_COVER) if cover is None else cover
    out = rho.astype(np.float32)
    for (band, code), c in fit.items():
        if c is None:
            continue
        at = use & light.lit & (codes == code)
        out[band][at] = illumination_correction(
            rho[band][at], light.cos_i[at], light.cos_zenith[at], light.slope_deg[at], c, method
        )
    return out
