"""What does the relief do to a cell's light: its slope, the beam on it, the sky it sees, its reflectance?

Directions are those of the grid: east along the columns, north against the rows. Angles of the sun must be turned into
the grid's frame before (grid convergence).
"""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.floating[Any]]

LEAST_COS_INCIDENCE = 0.15  # below it a corrected reflectance is mostly noise; common practice is 0.1..0.2, no source
LEAST_CELLS = 100  # for the line of fit_c; a choice made here, no source


def _floats(values: ArrayLike) -> Floats:
    """float32 stays float32, all else becomes float64."""
    array = np.asarray(values)
    return array if array.dtype == np.float32 else array.astype(np.float64)


def gradient(elevation_m: ArrayLike, cell_m: float) -> tuple[Floats, Floats]:
    """Slope towards the grid's east and north.

    Parameters
    ----------
    elevation_m : (rows + 2, cols + 2)   Row 0 in the north, with a margin of one cell all around, NaN where unknown. [m]
    cell_m : side of a cell. [m]

    Returns
    -------
    east, north : (rows, cols)   dz/dx and dz/dy, in the elevation's precision (float64 unless float32). A missing
    neighbour is its opposite mirrored through the centre cell (the straight line goes on), or the centre where that is
    missing too. NaN where the centre is NaN. [1]

    References
    ----------
    Horn (1981), Hill shading and the reflectance map, Proceedings of the IEEE 69:14-47: weights 1, 2, 1.
    """
    z = _floats(elevation_m)
    rows, cols = z.shape[0] - 2, z.shape[1] - 2
    if rows < 0 or cols < 0:
        raise ValueError(f"elevation_m must have a margin of one cell on each side, got shape {z.shape}")
    centre = z[1 : rows + 1, 1 : cols + 1]

    def rise(row: int, col: int) -> tuple[Floats, Floats]:
        """How much the neighbour stands above the centre, and its opposite; NaNs filled."""
        one = z[row : rows + row, col : cols + col] - centre
        other = z[2 - row : rows + 2 - row, 2 - col : cols + 2 - col] - centre
        one, other = np.where(np.isnan(one), -other, one), np.where(np.isnan(other), -one, other)
        both = np.isnan(one)
        return np.where(both, 0, one), np.where(both, 0, other)

    north_west, south_east = rise(0, 0)
    north, south = rise(0, 1)
    north_east, south_west = rise(0, 2)
    west, east = rise(1, 0)
    per_m = z.dtype.type(1 / (8 * cell_m))
    known = np.where(np.isnan(centre), centre, z.dtype.type(0))
    to_east = (north_east - north_west + 2 * (east - west) + south_east - south_west) * per_m + known
    to_north = (north_west - south_west + 2 * (north - south) + north_east - south_east) * per_m + known
    return to_east, to_north


def slope_aspect_deg(east: ArrayLike, north: ArrayLike) -> tuple[Floats, Floats]:
    """Steepness, and the direction downslope.

    Parameters
    ----------
    east, north : any shape   From gradient. [1]

    Returns
    -------
    slope, aspect   0..90, and clockwise from the grid's north, 0 <= aspect < 360, NaN where the ground is flat. NaN in
    gives NaN. [deg]
    """
    zx, zy = _floats(east), _floats(north)
    slope = np.degrees(np.arctan(np.hypot(zx, zy)))
    aspect = np.degrees(np.arctan2(-zx, -zy)) % 360
    aspect = np.where(aspect >= 360, 0, aspect)  # a remainder just below the turn rounds up to it
    return slope, np.where(np.hypot(zx, zy) > 0, aspect, np.nan).astype(slope.dtype)


def sky_view(horizon_rad: ArrayLike, azimuths_deg: ArrayLike, slope_deg: ArrayLike, aspect_deg: ArrayLike) -> Floats:
    """Share of an even sky's light that reaches a cell's own surface, per unit of the surface.

    V = 1/(2 pi) integral of [cos S sin^2 H + sin S cos(phi - A) (H - sin H cos H)] over the azimuth phi, where H is the
    angle from the zenith to the horizon. The horizon is nowhere lower than the cell's own inclined plane.

    Parameters
    ----------
    horizon_rad : (n, rows, cols) or (n, ...)   Elevation angle of the horizon above the horizontal. [rad]
    azimuths_deg : (n,)                         Equally spaced over the turn, each standing for the sector around it. [deg]
    slope_deg, aspect_deg : (rows, cols)        From slope_aspect_deg; the aspect of flat ground is NaN or anything. [deg]

    Returns
    -------
    (rows, cols)   0..1; NaN where a horizon or the slope is NaN, or the aspect of ground that is not flat. [1]

    References
    ----------
    Dozier & Frew (1990), Rapid calculation of terrain parameters for radiation modeling from digital elevation data,
    IEEE TGRS 28:963-969, doi:10.1109/36.58986, equation 7b.
    """
    elevation = np.asarray(horizon_rad, np.float64)
    azimuths = np.asarray(azimuths_deg, np.float64)
    if azimuths.ndim != 1 or azimuths.size != elevation.shape[0]:
        raise ValueError(f"{elevation.shape[0]} horizons but azimuths of shape {azimuths.shape}")
    slope = np.radians(np.asarray(slope_deg, np.float64))
    aspect = np.radians(np.asarray(aspect_deg, np.float64))
    aspect = np.where(slope == 0, 0.0, aspect)
    total = np.zeros(np.broadcast_shapes(elevation.shape[1:], slope.shape, aspect.shape))
    for horizon, azimuth in zip(elevation, np.radians(azimuths), strict=True):
        facing = np.cos(azimuth - aspect)
        plane = np.arctan(-np.tan(slope) * facing)
        h = np.pi / 2 - np.maximum(horizon, plane)
        total += np.cos(slope) * np.sin(h) ** 2 + np.sin(slope) * facing * (h - np.sin(h) * np.cos(h))
    return np.asarray(total / azimuths.size)


def terrain_view(sky_view: ArrayLike, slope_deg: ArrayLike) -> Floats:
    """Share of a cell's hemisphere taken by ground above its horizon's plane, any shape: (1 + cos S)/2 - V, at least 0. [1]

    NaN in gives NaN.

    References
    ----------
    Dozier & Frew (1990), as sky_view.
    """
    view, slope = _floats(sky_view), _floats(slope_deg)
    return np.asarray(np.maximum((1 + np.cos(np.radians(slope))) / 2 - view, 0))


def beam_factor(east: ArrayLike, north: ArrayLike, sun_east: ArrayLike, sun_north: ArrayLike, sun_up: ArrayLike) -> Floats:
    """Direct irradiance per unit of MAP area over direct normal irradiance: max(0, s_up - s_east dz/dx - s_north dz/dy).

    The surface z(x, y) above a map area dx dy is the parallelogram of (dx, 0, dz/dx dx) and (0, dy, dz/dy dy); their
    cross product (-dz/dx, -dz/dy, 1) dx dy is its area vector, of length dx dy / cos S. The beam through it is the sun's
    unit vector times the area vector, which is cos i / cos S for each unit of map area. So sums over the map are sums of
    power, and a hill takes from a level beam just what its shadow lacks.

    Parameters
    ----------
    east, north : any shape                  From gradient. [1]
    sun_east, sun_north, sun_up : any shape  Unit vector towards the sun in the grid's frame. [1]

    Returns
    -------
    The broadcast shape   0 where the surface faces away; NaN in gives NaN. Whether the sun stands above the horizon is
    not asked: a steep slope can face a sun below the horizontal. [1]
    """
    zx, zy = _floats(east), _floats(north)
    return np.asarray(np.maximum(_floats(sun_up) - _floats(sun_east) * zx - _floats(sun_north) * zy, 0))


def slope_parallel(flux_map: ArrayLike, slope_deg: ArrayLike) -> Floats:
    """A flux per unit of map area as one per unit of the inclined surface, any shape: times cos S. NaN in gives NaN."""
    return np.asarray(_floats(flux_map) * np.cos(np.radians(_floats(slope_deg))))


def fit_c(reflectance: ArrayLike, cos_i: ArrayLike) -> float | None:
    """C of the C correction: intercept over slope of the straight line of reflectance against cos i.

    Parameters
    ----------
    reflectance, cos_i : any one shape   Cells of one band and one kind of ground, sunlit. [1]

    Returns
    -------
    C, not below 0, from least squares over the cells that are finite with cos i of LEAST_COS_INCIDENCE or more. None where
    they are fewer than LEAST_CELLS, all of one cos i, or where the line does not rise: then nothing says that the relief
    darkens this ground, and it is not to be corrected.

    References
    ----------
    Teillet, Guindon & Goodenough (1982), On the slope-aspect correction of multispectral scanner data, Canadian Journal
    of Remote Sensing 8:84-106. C held at 0 (the cosine correction) where the intercept is negative: a choice made here,
    as C is the share of light that does not depend on the slope.
    """
    rho, x = np.asarray(reflectance, np.float64).ravel(), np.asarray(cos_i, np.float64).ravel()
    used = np.isfinite(rho) & (x >= LEAST_COS_INCIDENCE)
    if used.sum() < LEAST_CELLS:
        return None
    rho, x = rho[used], x[used]
    away = x - x.mean()
    spread, common = float(away @ away), float(away @ (rho - rho.mean()))
    if not spread > 1e-12 * x.size or not common > 1e-9 * spread:  # beyond the rounding of equal numbers
        return None
    slope = common / spread
    return max(float(rho.mean() - slope * x.mean()) / slope, 0.0)


def illumination_correction(
    reflectance: ArrayLike,
    cos_i: ArrayLike,
    cos_zenith: ArrayLike,
    slope_deg: ArrayLike,
    c: float | None,
    method: Literal["c", "scs+c"] = "c",
) -> Floats:
    """Reflectance as if the cell lay level ("c"), or its trees or grains stood upright on it ("scs+c").

    rho (f cos z + C) / (cos i + C), with f = 1 for "c" and f = cos S for "scs+c".

    Parameters
    ----------
    reflectance : any shape   [1]
    cos_i, cos_zenith : any shape   Cosines of the sun's angle from the surface's normal and from the zenith. [1]
    slope_deg : any shape   Used by "scs+c". [deg]
    c : from fit_c, per band and kind of ground; None leaves the reflectance as it is.

    Returns
    -------
    The broadcast shape   In the reflectance's precision; NaN where cos i < LEAST_COS_INCIDENCE, also with c None, and where
    an input is NaN. [1]

    References
    ----------
    "c": Teillet, Guindon & Goodenough (1982), Canadian Journal of Remote Sensing 8:84-106.
    "scs+c": Soenen, Peddle & Coburn (2005), SCS+C: a modified sun-canopy-sensor topographic correction in forested
    terrain, IEEE TGRS 43:2148-2159, doi:10.1109/TGRS.2005.852480.
    """
    if method not in ("c", "scs+c"):
        raise ValueError(f'method must be "c" or "scs+c", not {method!r}')
    rho, incidence, up, slope = np.broadcast_arrays(
        _floats(reflectance), _floats(cos_i), _floats(cos_zenith), np.radians(_floats(slope_deg))
    )
    lit = incidence >= LEAST_COS_INCIDENCE
    if c is None:
        return np.asarray(np.where(lit, rho, np.nan).astype(rho.dtype))
    level = up * np.cos(slope) if method == "scs+c" else up
    factor = np.divide(level + c, incidence + c, out=np.full(rho.shape, np.nan), where=lit)
    return np.asarray((rho * factor).astype(rho.dtype))
