"""Where on the Earth are the cells of a tile, and how much ground does each cover?"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from pyproj import CRS, Proj, Transformer
from pyproj.exceptions import CRSError, ProjError

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid, Window
from firnlight.core.lattice import Lattice, node_positions

# The areal scale of a conformal map curves by about 2 / R^2, so bilinear nodes L apart are off by (L / 2R)^2:
# 400 m keeps that below 1e-9, and 2 km (four cells of 500 m) below 1e-7.
AREA_SPACING_M = 400.0
LEAST_AREA_STEP = 4  # cells
LARGEST_CELL_CM2 = 450_000_000_000  # above it the exact sums of the zone kernel could overflow


def _crs_problem(crs: object, found: str) -> InputProblem:
    wanted = "a map projection or plain longitude and latitude"
    fix = "correct the CRS, or warp the tile to a map projection"
    return InputProblem("grid", "CRS", f"{found} ({str(crs)[:60]})", wanted, fix)


@lru_cache(maxsize=64)
def _crs(text: str) -> CRS:
    try:
        return CRS.from_user_input(text)
    except CRSError:
        raise _crs_problem(text, "an unknown CRS") from None


def _equator_m(crs: str) -> float:
    """Equatorial radius of the ellipsoid of a CRS. [m]"""
    ellipsoid = _crs(crs).ellipsoid
    if ellipsoid is None:
        raise _crs_problem(crs, "no ellipsoid")
    return float(ellipsoid.semi_major_metre)


@lru_cache(maxsize=256)
def between(source: str, target: str) -> Transformer:
    """From one CRS to another, x or longitude first.

    Raises
    ------
    InputProblem : a CRS is not known, or there is no way from one to the other (local coordinates).
    """
    try:
        return Transformer.from_crs(_crs(source), _crs(target), always_xy=True)
    except ProjError as error:
        raise _crs_problem(source, f"no way to {target[:60]}: {error}") from None


def to_lonlat(crs: str) -> Transformer:
    """From a CRS to longitude and latitude (WGS 84)."""
    return between(crs, "EPSG:4326")


def unit_of(crs: str) -> float:
    """Metres (geographic: radians) per unit of a CRS.

    Raises
    ------
    InputProblem : neither projected nor geographic, or a rotated pole: its degrees are not the ellipsoid's.
    """
    known = _crs(crs)
    if not (known.is_projected or (known.is_geographic and not known.is_derived)):
        raise _crs_problem(crs, known.type_name)
    return float(known.axis_info[0].unit_conversion_factor)


def is_geographic(crs: str) -> bool:
    """Whether coordinates are angles."""
    return bool(_crs(crs).is_geographic)


@lru_cache(maxsize=256)
def cell_size_m(grid: Grid) -> float:
    """Side of a cell, the larger of the two, near enough for choosing a spacing. [m]"""
    size = max(grid.dx, grid.dy) * unit_of(grid.crs)
    return size * _equator_m(grid.crs) if is_geographic(grid.crs) else size


def _outside(grid: Grid) -> InputProblem:
    found = f"left {grid.left}, top {grid.top}, {grid.rows} x {grid.cols} cells"
    wanted = f"a place inside the area of {grid.crs[:60]}"
    return InputProblem("grid", "place", found, wanted, "correct the CRS or the geotransform")


def centre_lonlat(grid: Grid) -> tuple[float, float]:
    """Longitude and latitude of the tile's centre. [deg]

    Raises
    ------
    InputProblem : it lies outside the area of the CRS.
    """
    lon, lat = to_lonlat(grid.crs).transform((grid.left + grid.right) / 2, (grid.top + grid.bottom) / 2)
    if not (math.isfinite(lon) and math.isfinite(lat)):
        raise _outside(grid)
    return float(lon), float(lat)


@lru_cache(maxsize=16)
def positions(grid: Grid, step: int) -> tuple[Lattice, Lattice]:
    """Longitude and latitude of the cells, on nodes `step` cells apart; longitudes do not jump at 180. [deg]

    Notes
    -----
    On a conformal projection with nodes L apart, latitude is off by at most L^2 tan|lat| / (4 R^2),
    longitude by that over cos(lat): below 1e-5 deg for L = 4 km up to 45 degrees, for L = 1 km up to 78.
    Longitudes may leave -180..180.

    Raises
    ------
    InputProblem : the grid leaves the area of its CRS, or a pole, where longitude is undefined, lies in it.
    """
    x, y = node_positions(grid, step, step)
    plain = is_geographic(grid.crs)
    inside = y
    if plain:  # the last node row may lie beyond the pole: its latitude runs on
        quarter = math.pi / 2 / unit_of(grid.crs)
        inside = np.clip(y, -quarter, quarter)
    lon, lat = to_lonlat(grid.crs).transform(*np.meshgrid(x, inside))
    if not (np.isfinite(lon).all() and np.isfinite(lat).all()):
        raise _outside(grid)
    lon = np.unwrap(np.unwrap(lon, axis=1, period=360), axis=0, period=360)
    if plain:
        lat = lat + np.degrees((y - inside) * unit_of(grid.crs))[:, np.newaxis]
    elif (np.abs(np.diff(lon, axis=1)) > 180).any():
        fix = "cut the tile so that the pole lies on its edge or outside"
        raise InputProblem("grid", "place", "a pole inside the tile", "tiles that hold no pole", fix)
    return Lattice(step, step, lon), Lattice(step, step, lat)


def _band_areas_m2(grid: Grid, unit: float) -> NDArray[np.float64]:
    """Area of one cell of each row, and of the row below the last: (rows + 1,). [m2]

    Differences of q = (1 - e^2) (s / (1 - e^2 s^2) + atanh(e s) / e), s the sine of latitude, written so
    that thin bands lose no digits.

    References
    ----------
    Snyder J. P. (1987). Map projections: a working manual. USGS Professional Paper 1395, equation 3-12.
    """
    radius, inverse = _equator_m(grid.crs), getattr(_crs(grid.crs).ellipsoid, "inverse_flattening", 0.0)
    flattening = 1 / inverse if inverse else 0.0
    e2 = flattening * (2 - flattening)
    e = math.sqrt(e2)
    middle = (grid.top - (np.arange(grid.rows + 1) + 0.5) * grid.dy) * unit
    half = grid.dy * unit / 2
    north, south = np.sin(middle + half), np.sin(middle - half)
    rise = 2 * np.cos(middle) * math.sin(half)  # north - south
    first = rise * (1 + e2 * north * south) / ((1 - e2 * north**2) * (1 - e2 * south**2))
    second = np.arctanh(e * rise / (1 - e2 * north * south)) / e if e else rise
    q = (1 - e2) * (first + second)
    return np.asarray(radius**2 / 2 * (grid.dx * unit) * q)


@lru_cache(maxsize=8)
def areas(grid: Grid) -> Lattice:
    """True ground area of a cell on the ellipsoid of the CRS. [cm2]

    Geographic cells: exact, by the area between two parallels, a node in every row. Projected cells: dx x dy
    in metres over the areal scale at the cell's centre, on nodes at most 400 m (at least 4 cells) apart;
    interpolation is off by less than 1e-9 for cells up to 100 m, 1e-7 for 500 m.

    Raises
    ------
    InputProblem : a CRS without areas, a grid outside its area, or cells so large that sums could overflow.
    """
    unit = unit_of(grid.crs)
    if is_geographic(grid.crs):
        quarter = math.pi / 2 * (1 + 1e-12)
        if max(abs(grid.top), abs(grid.bottom)) * unit > quarter:
            raise _outside(grid)
        rows = np.maximum(_band_areas_m2(grid, unit), 0.0)  # the row below the last may lie beyond the pole
        lattice = Lattice(1, grid.cols, np.repeat(rows[:, np.newaxis] * 1e4, 2, axis=1))
    else:
        step = max(LEAST_AREA_STEP, 2 ** int(math.log2(max(1.0, AREA_SPACING_M / cell_size_m(grid)))))
        x, y = np.meshgrid(*node_positions(grid, step, step))
        projection = Proj(_crs(grid.crs))
        lon, lat = projection(x, y, inverse=True)
        scale = np.asarray(projection.get_factors(lon, lat).areal_scale).reshape(x.shape)
        if not (np.isfinite(scale).all() and (scale > 0).all()):
            raise _outside(grid)
        lattice = Lattice(step, step, grid.dx * grid.dy * unit**2 * 1e4 / scale)
    if lattice.values.max() > LARGEST_CELL_CM2:
        found, wanted = (f"{v / 1e10:.3g} km2" for v in (lattice.values.max(), LARGEST_CELL_CM2))
        raise InputProblem("grid", "cell area", found, f"at most {wanted}", "use finer cells, or correct the CRS")
    return lattice


def cell_areas_cm2(lattice: Lattice, window: Window) -> NDArray[np.int64]:
    """Whole square centimetres of each cell of a window: (rows, cols)."""
    return np.floor(lattice.at(window) + 0.5).astype(np.int64)
