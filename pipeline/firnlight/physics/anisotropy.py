"""How does reflectance hang on the directions of sun and view, and what albedo do several looks give? (the reference)

Linear kernel models: reflectance = sum over k of f_k K_k, K_0 = 1. The relative azimuth is between the directions from the
ground to the sensor and to the sun: 0 where the sensor stands on the sun's side (backscatter). Angles in degrees, any
shapes that broadcast; a zenith angle outside 0..90 (90 excluded) or NaN gives NaN. The kernels hold up to about 75 deg.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from itertools import product

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firnlight.core.errors import InputProblem
from firnlight.core.tables import load_table
from firnlight.physics import broadband

Floats = NDArray[np.float64]
GROUND = ("ross_thick", "li_sparse_reciprocal")
NODES, SUN_NODES = 100, 32  # black-sky integrals within 3e-6, white-sky within 1e-6 of finer ones
UNSEEN, FITTED, HELD_AT_ZERO, SCALED_PRIOR = range(4)
HOW = ("unseen", "fitted", "held at zero", "scaled prior")
SINGULAR = 1e-14  # pivot of a matrix with a diagonal of ones


def _radians(*angles: ArrayLike) -> tuple[Floats, Floats, Floats]:
    sun, view, azimuth = np.broadcast_arrays(*(np.asarray(angle, np.float64) for angle in angles))
    sun, view = (np.where((zenith >= 0) & (zenith < 90), zenith, np.nan) for zenith in (sun, view))
    return np.radians(sun), np.radians(view), np.radians(azimuth)


def _phase_cosine(sun: Floats, view: Floats, azimuth: Floats) -> Floats:
    return np.clip(np.cos(sun) * np.cos(view) + np.sin(sun) * np.sin(view) * np.cos(azimuth), -1.0, 1.0)


def ross_thick(sun_zenith_deg: ArrayLike, view_zenith_deg: ArrayLike, relative_azimuth_deg: ArrayLike) -> Floats:
    """Volume scattering of a dense canopy. [1]   Roujean et al. (1992), tables/anisotropy.toml."""
    sun, view, azimuth = _radians(sun_zenith_deg, view_zenith_deg, relative_azimuth_deg)
    cosine = _phase_cosine(sun, view, azimuth)
    phase = np.arccos(cosine)
    return ((np.pi / 2 - phase) * cosine + np.sin(phase)) / (np.cos(sun) + np.cos(view)) - np.pi / 4


def li_sparse_reciprocal(sun_zenith_deg: ArrayLike, view_zenith_deg: ArrayLike, relative_azimuth_deg: ArrayLike) -> Floats:
    """Shadows of sparse crowns, reciprocal form. [1]   Wanner et al. (1995), Lucht et al. (2000), tables/anisotropy.toml."""
    row = load_table("anisotropy").row("li_sparse_reciprocal")
    sun, view, azimuth = _radians(sun_zenith_deg, view_zenith_deg, relative_azimuth_deg)
    sun, view = (np.arctan(row["width_over_radius"] * np.tan(zenith)) for zenith in (sun, view))
    cosine = _phase_cosine(sun, view, azimuth)
    tan_sun, tan_view = np.tan(sun), np.tan(view)
    # tan^2 + tan^2 - 2 tan tan cos, written so that it is never below 0
    distance2 = (tan_sun - tan_view) ** 2 + 4 * tan_sun * tan_view * np.sin(azimuth / 2) ** 2
    secants = 1 / np.cos(sun) + 1 / np.cos(view)
    across = tan_sun * tan_view * np.sin(azimuth)
    cos_t = np.clip(row["height_over_width"] * np.sqrt(distance2 + across**2) / secants, -1.0, 1.0)
    t = np.arccos(cos_t)
    overlap = (t - np.sin(t) * cos_t) * secants / np.pi
    return overlap - secants + (1 + cosine) / (2 * np.cos(sun) * np.cos(view))


def snow(sun_zenith_deg: ArrayLike, view_zenith_deg: ArrayLike, relative_azimuth_deg: ArrayLike) -> Floats:
    """Snow's forward scattering; about 0 with sun and view overhead. [1]   Jiao et al. (2019), tables/anisotropy.toml."""
    row = load_table("anisotropy").row("snow")
    sun, view, azimuth = _radians(sun_zenith_deg, view_zenith_deg, relative_azimuth_deg)
    cosine = _phase_cosine(sun, view, azimuth)
    scattering_deg = 180 - np.degrees(np.arccos(cosine))
    (k1, k2, k3), (p1, p2, p3, p4) = row["reflectance"], row["phase"]
    phase = p1 * np.exp(-p2 * scattering_deg) + p3 * np.exp(-p4 * scattering_deg)
    mu_sun, mu_view = np.cos(sun), np.cos(view)
    r0 = (k1 + k2 * (mu_sun + mu_view) + k3 * mu_sun * mu_view + phase) / (4 * (mu_sun + mu_view))
    alpha, (slope, constant) = row["alpha"], row["offset"]
    return r0 * (1 - alpha * cosine * np.exp(-cosine)) + slope * alpha + constant


KERNELS = {"ross_thick": ross_thick, "li_sparse_reciprocal": li_sparse_reciprocal, "snow": snow}


def design(
    sun_zenith_deg: ArrayLike,
    view_zenith_deg: ArrayLike,
    relative_azimuth_deg: ArrayLike,
    names: tuple[str, ...] = GROUND,
) -> Floats:
    """One and the kernels `names`, along a new last axis: (..., 1 + kernels). [1]"""
    values = [KERNELS[name](sun_zenith_deg, view_zenith_deg, relative_azimuth_deg) for name in names]
    return np.stack([np.ones_like(values[0]), *values], axis=-1)


def black_sky(sun_zenith_deg: ArrayLike, name: str, method: str = "polynomial") -> Floats:
    """Share that a kernel adds to the albedo for a beam from one direction, any shape. [1]

    Parameters
    ----------
    sun_zenith_deg : any shape. [deg]
    name : a kernel.
    method : "polynomial" (published; NaN above 75 deg, where it departs from the kernel, and none for "snow") or "exact"
        (Gauss integral over all views; 10 000 kernel values per angle, so tabulate it for maps).

    Raises
    ------
    InputProblem : no polynomial for that kernel, or no such method.

    References
    ----------
    Lucht, Schaaf & Strahler (2000), tables/anisotropy.toml.
    """
    zenith = np.asarray(sun_zenith_deg, np.float64)
    row = load_table("anisotropy").row(name)
    if method == "polynomial" and "black_sky" in row:
        limit = load_table("anisotropy").row("polynomials")["largest_zenith_deg"]
        theta = np.radians(np.where((zenith >= 0) & (zenith <= limit), zenith, np.nan))
        g0, g1, g2 = row["black_sky"]
        return np.asarray(g0 + g1 * theta**2 + g2 * theta**3)
    if method != "exact":
        raise InputProblem("black sky", "method", method, "exact, or polynomial for " + " and ".join(GROUND), "use exact")
    points, weights = np.polynomial.legendre.leggauss(NODES)
    view, azimuth = np.pi / 4 * (points + 1), np.pi / 2 * (points + 1)
    # dv = pi/4, df = pi/2 over half of the circle, both halves alike, divided by pi
    share = np.outer(weights * np.sin(view) * np.cos(view), weights) * np.pi / 4
    kernel, view_deg, azimuth_deg = KERNELS[name], np.degrees(view)[:, np.newaxis], np.degrees(azimuth)
    out = [np.sum(kernel(angle, view_deg, azimuth_deg) * share) for angle in zenith.ravel()]
    return np.array(out).reshape(zenith.shape)


@cache
def white_sky(name: str, method: str = "published") -> float:
    """Share that a kernel adds to the albedo for light from all sides alike. [1]

    "published" (Lucht et al. 2000; "snow" has none, and is integrated) or "exact" (Gauss integral of the kernel).
    """
    row = load_table("anisotropy").row(name)
    if method == "published" and "white_sky" in row:
        return float(row["white_sky"])
    points, weights = np.polynomial.legendre.leggauss(SUN_NODES)
    sun = np.pi / 4 * (points + 1)
    return float(np.sum(weights * np.pi / 4 * 2 * np.sin(sun) * np.cos(sun) * black_sky(np.degrees(sun), name, "exact")))


def black_sky_weights(sun_zenith_deg: ArrayLike, names: tuple[str, ...] = GROUND, method: str = "polynomial") -> Floats:
    """What the parameters are multiplied by to give black-sky albedo: (..., parameters); see black_sky. [1]"""
    values = [black_sky(sun_zenith_deg, name, method) for name in names]
    return np.stack([np.ones_like(values[0]), *values], axis=-1)


def white_sky_weights(names: tuple[str, ...] = GROUND) -> Floats:
    """What the parameters are multiplied by to give white-sky albedo: (parameters,). [1]"""
    return np.array([1.0, *(white_sky(name) for name in names)])


def blue_sky(black: ArrayLike, white: ArrayLike, diffuse_fraction: ArrayLike) -> Floats:
    """Albedo under a sky of which a share is diffuse, any shapes; NaN in gives NaN. [1]

    (1 - D) black + D white: light that goes to and fro between ground and sky is left out.
    Lewis & Barnsley (1994); Lucht, Schaaf & Strahler (2000), tables/anisotropy.toml.
    """
    share = np.asarray(diffuse_fraction, np.float64)
    return np.asarray((1 - share) * np.asarray(black, np.float64) + share * np.asarray(white, np.float64))


def albedo_uncertainty(albedo_weights: ArrayLike, covariance: ArrayLike) -> Floats:
    """Standard uncertainty of an albedo, sqrt(U C U): (..., p) and (..., p, p) give (...); NaN in gives NaN. [1]"""
    u, c = np.asarray(albedo_weights, np.float64), np.asarray(covariance, np.float64)
    return np.sqrt(np.maximum(np.einsum("...i,...ij,...j->...", u, c, u), 0.0))


@dataclass(frozen=True)
class Prior:
    """A shape to scale where looks are few: parameters, and relative standard uncertainty of an albedo made from it."""

    parameters: tuple[float, ...]
    relative_u: float


@dataclass(frozen=True)
class Limits:
    """When a fit is believed.

    Attributes
    ----------
    largest_u : standard uncertainty of white-sky albedo. [1]
    largest_condition : condition (1-norm) of A'WA scaled to a diagonal of ones; below 1e9.
    spare_looks : looks beyond the number of parameters, so that a misfit shows.
    """

    largest_u: float
    largest_condition: float
    spare_looks: int


@dataclass(frozen=True)
class Inversion:
    """Parameters (..., p), covariance (..., p, p), scatter s2 (...), how (...) uint8 into HOW, looks used (...) uint16.

    Unseen cells hold NaN in the first three.
    """

    parameters: Floats
    covariance: Floats
    scatter: Floats
    how: NDArray[np.uint8]
    looks: NDArray[np.uint16]


def default_limits() -> Limits:
    """The limits of tables/anisotropy.toml (judgement)."""
    row = load_table("anisotropy").row("acceptance")
    return Limits(row["largest_u"], row["largest_condition"], row["spare_looks"])


def ground_prior() -> Prior:
    """Shortwave shape of snow-free ground: Roy et al. (2016) weighted by Liang (2001), tables/anisotropy.toml."""
    row = load_table("anisotropy").row("ground_prior")
    form = broadband.conversion(row["family"], row["sensor"])
    fixed = load_table("anisotropy").row("fixed_parameters")
    total = np.array([form.intercept, 0.0, 0.0])
    for band, weight in zip(form.bands, form.weights, strict=True):
        total = total + weight * np.array(fixed[band])
    return Prior(tuple(map(float, total)), row["relative_u"])


def aligned(reflectance: ArrayLike, weights: ArrayLike, design: ArrayLike, names: tuple[str, ...]) -> list[Floats]:
    """The three as (looks, ...), axes of length 1 where given per look alone; InputProblem where they do not fit."""
    rho, w, a = (np.asarray(one, np.float64) for one in (reflectance, weights, design))
    if w.ndim == 1:
        w = w.reshape(-1, *(1,) * (rho.ndim - 1))
    if a.ndim == 2:
        a = a.reshape(a.shape[0], *(1,) * (rho.ndim - 1), a.shape[1])
    wanted = (rho.shape[0], rho.shape[0], 1 + len(names))
    found = (w.shape[0], a.shape[0], a.shape[-1])
    if found != wanted:
        what = "looks of weights, looks of design, parameters"
        raise InputProblem("inversion", what, found, str(wanted), "make design with the same looks and kernels")
    return [rho, w, a]


def invert(
    reflectance: ArrayLike,
    weights: ArrayLike,
    design: ArrayLike,
    names: tuple[str, ...] = GROUND,
    prior: Prior | None = None,
    limits: Limits | None = None,
    least_scatter: float = 1.0,
) -> Inversion:
    """Kernel parameters of each cell from a window of looks, by weighted least squares.

    Parameters
    ----------
    reflectance : (looks, ...). [1]
    weights : (looks,) or (looks, ...)        1 / u2 of each look's reflectance.
    design : (looks, p) or (looks, ..., p)    From design().
    names : the kernels of design.
    prior : shape to scale where the fit is not believed; None leaves such cells unseen.
    limits : when it is believed; default_limits() where None.
    least_scatter : lower bound of s2: 1 where the weights are 1 / u2, so that scatter above what they say widens the
        covariance and scatter below does not narrow it; 0 where the weights are relative only.

    Returns
    -------
    Inversion
        A look with NaN in reflectance, weight or design, or a weight not above 0, is left out of that cell.
        fitted: covariance s2 (A'WA)^-1, s2 = sum w r2 / (looks - p).
        held at zero: some were below 0, so the best set not below 0 is given, with the wider covariance of the free fit.
        scaled prior: f = a f_prior, a = sum w rho rho_prior / sum w rho_prior2, not below 0; the covariance
        (a2 u_shape2 + s2 / sum w rho_prior2) f_prior f_prior' makes every albedo at least as uncertain, relatively, as
        the prior's shape.
        unseen: no look, or (one look and least_scatter 0), or no prior.

    Raises InputProblem where shapes do not fit together. Lucht, Schaaf & Strahler (2000), tables/anisotropy.toml.
    """
    rho, w, a = aligned(reflectance, weights, design, names)
    limit, p = limits or default_limits(), a.shape[-1]
    used = np.isfinite(rho) & np.isfinite(w) & (w > 0) & np.isfinite(a).all(axis=-1)
    rho, w = np.where(used, rho, 0.0), np.where(used, w, 0.0)
    a = np.where(used[..., np.newaxis], a, 0.0)
    looks = used.sum(axis=0)
    normal = np.einsum("l...i,l...,l...j->...ij", a, w, a)
    scale = np.sqrt(np.einsum("...ii->...i", normal))
    scale = np.where(scale > 0, scale, 1.0)
    right = np.einsum("l...i,l...,l...->...i", a, w, rho) / scale
    unit = normal / (scale[..., :, np.newaxis] * scale[..., np.newaxis, :])
    regular = np.linalg.eigvalsh(unit)[..., 0] > SINGULAR
    unit = np.where(regular[..., np.newaxis, np.newaxis], unit, np.eye(p))
    inverse = np.linalg.inv(unit)
    condition = np.abs(unit).sum(axis=-1).max(axis=-1) * np.abs(inverse).sum(axis=-1).max(axis=-1)
    free = np.einsum("...ij,...j->...i", inverse, right)
    held = regular & (free < 0).any(axis=-1)
    free[held] = _not_below_zero(unit[held], right[held])
    spread = inverse / (scale[..., :, np.newaxis] * scale[..., np.newaxis, :])
    fitted = free / scale

    def scatter_of(parameters: Floats, spare: NDArray[np.int64]) -> Floats:
        misfit = np.sum(w * (rho - np.einsum("l...i,...i->l...", a, parameters)) ** 2, axis=0)
        least = least_scatter if least_scatter > 0 else np.nan
        return np.where(spare > 0, np.maximum(misfit / np.maximum(spare, 1), least_scatter), least)

    scatter = scatter_of(fitted, looks - p)
    u = np.sqrt(scatter) * albedo_uncertainty(white_sky_weights(names), spread)
    good = regular & (looks >= p + limit.spare_looks) & (condition <= limit.largest_condition) & (u <= limit.largest_u)
    how = np.where(good, np.where(held, HELD_AT_ZERO, FITTED), UNSEEN)
    covariance = scatter[..., np.newaxis, np.newaxis] * spread
    if prior is not None:
        shape = np.array(prior.parameters)
        expected = np.einsum("l...i,i->l...", a, shape)
        known = np.sum(w * expected**2, axis=0)
        safe = np.where(known > 0, known, 1.0)
        factor = np.maximum(np.sum(w * rho * expected, axis=0) / safe, 0.0)
        scatter_prior = scatter_of(factor[..., np.newaxis] * shape, looks - 1)
        scaled = ~good & (known > 0) & np.isfinite(scatter_prior)
        how = np.where(scaled, SCALED_PRIOR, how)
        wide = (factor * prior.relative_u) ** 2 + scatter_prior / safe
        fitted = np.where(scaled[..., np.newaxis], factor[..., np.newaxis] * shape, fitted)
        scatter = np.where(scaled, scatter_prior, scatter)
        pick = scaled[..., np.newaxis, np.newaxis]
        covariance = np.where(pick, wide[..., np.newaxis, np.newaxis] * np.outer(shape, shape), covariance)
    seen = how != UNSEEN
    return Inversion(
        np.where(seen[..., np.newaxis], fitted, np.nan),
        np.where(seen[..., np.newaxis, np.newaxis], covariance, np.nan),
        np.where(seen, scatter, np.nan),
        how.astype(np.uint8),
        looks.astype(np.uint16),
    )


def _not_below_zero(unit: Floats, right: Floats) -> Floats:
    """Least squares with no parameter below 0: the best of all sets of free parameters, the others 0."""
    best, least = np.zeros_like(right), np.zeros(right.shape[0])
    for free in product((True, False), repeat=right.shape[-1]):
        chosen = np.flatnonzero(free)
        if chosen.size in (0, right.shape[-1]):
            continue
        part = np.linalg.solve(unit[:, chosen[:, np.newaxis], chosen], right[:, chosen, np.newaxis])[..., 0]
        cost = -np.sum(part * right[:, chosen], axis=-1)
        better = (part >= 0).all(axis=-1) & (cost < least)
        best[np.ix_(better, np.arange(right.shape[-1]))] = 0.0
        best[np.ix_(better, chosen)] = part[better]
        least[better] = cost[better]
    return best


def mean_sun_zenith(latitude_deg: ArrayLike) -> Floats:
    """Yearly mean zenith angle of the sun at a mid-morning overpass, any shape. [deg]

    NaN beyond the poles and for NaN; above 90 (no use to nadir_factor) close to them.
    Zhang, Roy & Kovalskyy (2016), tables/anisotropy.toml.
    """
    latitude = np.asarray(latitude_deg, np.float64)
    terms = load_table("anisotropy").row("mean_sun_zenith")["polynomial"]
    return np.asarray(np.polynomial.polynomial.polyval(np.where(np.abs(latitude) <= 90, latitude, np.nan), terms))


def nadir_factor(
    band: str,
    sun_zenith_deg: ArrayLike,
    view_zenith_deg: ArrayLike,
    relative_azimuth_deg: ArrayLike,
    to_zenith_deg: ArrayLike | None = None,
    snow: ArrayLike | None = None,
) -> Floats:
    """What a reflectance is multiplied by to be as if seen from above, with fixed parameters.

    Parameters
    ----------
    band : common name.
    sun_zenith_deg, view_zenith_deg, relative_azimuth_deg : any shapes. [deg]
    to_zenith_deg : sun to which it is brought; None keeps the sun. mean_sun_zenith gives one. [deg]
    snow : mask of snow and ice, where the factor is 1: the parameters are means over snow-free land and wrong there.

    Returns
    -------
    broadcast shape   NaN where an angle is NaN or beyond the horizon and there is no snow. [1]

    Raises
    ------
    InputProblem : no parameters for that band.

    References
    ----------
    Roy et al. (2016), tables/anisotropy.toml.
    """
    row = load_table("anisotropy").row("fixed_parameters")
    if not isinstance(row.get(band), list):
        bands = ", ".join(key for key, value in row.items() if isinstance(value, list))
        raise InputProblem("view normalisation", "band", band, "one of " + bands, "leave that band as it is")
    parameters = np.array(row[band])
    target = sun_zenith_deg if to_zenith_deg is None else to_zenith_deg
    seen = design(sun_zenith_deg, view_zenith_deg, relative_azimuth_deg) @ parameters
    factor = (design(target, 0.0, 0.0) @ parameters) / seen
    return np.asarray(factor if snow is None else np.where(np.asarray(snow, bool), 1.0, factor))
