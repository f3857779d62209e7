"""How does albedo change with the height of the sun, and what is a day's albedo when one overpass was seen?

Each method gives the sun's direction a number, its `shape`, so that albedo is carried from one light to another by the two
numbers alone (`carry`). The shape of mixed light is the flux-weighted mean of shapes, because every method is linear in it:

- "constant": no dependence.
- "gardner_sharp", for snow: albedo = a + g a (1 - a), g = 0.53 (1 - cos zenith)^1.2, a the albedo under a sun overhead:
  the zenith term of Gardner & Sharp (2010) with pure snow's albedo put equal to the snow's own. Diffuse light counts as a
  sun at cosine 0.64, as in the paper.
- "ross_li", for snow-free ground: albedo proportional to the black-sky albedo of anisotropy.ground_prior(), relative to
  white sky, which is diffuse light; held below a sun at 80 deg.

Zenith angles in degrees, from the normal of the ground where the fluxes are those on it.
"""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firnlight.core.errors import InputProblem
from firnlight.core.tables import load_table
from firnlight.physics import anisotropy

Floats = NDArray[np.float64]
METHODS = ("constant", "gardner_sharp", "ross_li")


def gardner_sharp(
    surface_cm2_per_g: ArrayLike, carbon_ppmw: ArrayLike, zenith_deg: ArrayLike, cloud_depth: ArrayLike = 0.0
) -> Floats:
    """Broadband albedo of deep snow from what it is made of, any shapes; NaN in, or a sun at the horizon, gives NaN. [1]

    Parameters
    ----------
    surface_cm2_per_g : specific surface area of the grains. [cm2 g-1]
    carbon_ppmw : black carbon. [ppmw]
    zenith_deg : of the sun, below 90. [deg]
    cloud_depth : optical thickness of cloud. [1]

    References
    ----------
    Gardner & Sharp (2010), tables/anisotropy.toml.
    """
    row = load_table("anisotropy").row("gardner_sharp_2010")
    s, c, depth = (np.asarray(one, np.float64) for one in (surface_cm2_per_g, carbon_ppmw, cloud_depth))
    p1, p2 = row["pure"]
    pure = p1 - s**-p2
    c1, c2, c3, c4, c5, c6, c7 = row["carbon"]
    dirt = np.maximum(c1 - pure, -(c**c2) / (c3 + c4 * np.sqrt(s) + c5 * c**c6 * s**-c7))
    albedo = pure + dirt
    cosine = _cosine(zenith_deg)
    mixed = np.minimum(np.sqrt(depth / (3 * np.where(cosine > 0, cosine, np.nan))), 1.0)
    z1, z2 = row["zenith"]
    direction = z1 * pure * (1 - albedo) * (1 - (row["diffuse_cosine"] * mixed + (1 - mixed) * cosine)) ** z2
    t1, t2, t3 = row["cloud"]
    return np.asarray(albedo + direction + t1 * depth * albedo**t2 / (1 + t3 * depth) ** pure)


def shape(zenith_deg: ArrayLike, method: str) -> Floats:
    """The number of a beam from one direction, any shape; NaN for a zenith outside 0..90. [1]

    Raises
    ------
    InputProblem : no such method (everywhere in this module).
    """
    cosine = _cosine(zenith_deg)
    if _known(method) == "constant":
        return np.zeros_like(cosine)
    if method == "gardner_sharp":
        z1, z2 = load_table("anisotropy").row("gardner_sharp_2010")["zenith"]
        return np.asarray(z1 * (1 - cosine) ** z2)
    zenith, value = _ground_shape()
    known = np.interp(np.asarray(zenith_deg, np.float64), zenith, value)  # the last value is held beyond
    return np.where(np.isnan(cosine), np.nan, known)


def diffuse_shape(method: str) -> float:
    """The number of light from all sides. [1]"""
    if _known(method) == "gardner_sharp":
        row = load_table("anisotropy").row("gardner_sharp_2010")
        z1, z2 = row["zenith"]
        return float(z1 * (1 - row["diffuse_cosine"]) ** z2)
    return 0.0 if method == "constant" else 1.0


def mixed_shape(zenith_deg: ArrayLike, diffuse_fraction: ArrayLike, method: str) -> Floats:
    """The number of a beam and diffuse light together, any shapes; NaN in gives NaN. [1]"""
    share = np.asarray(diffuse_fraction, np.float64)
    return np.asarray((1 - share) * shape(zenith_deg, method) + share * diffuse_shape(method))


def path_shape(zenith_t: ArrayLike, direct_t: ArrayLike, diffuse_t: ArrayLike, method: str) -> Floats:
    """The number of all light of a day: (..., times) to (...). [1]

    Parameters
    ----------
    zenith_t : (..., times)              Sun; without a direct beam it is not looked at. [deg]
    direct_t, diffuse_t : (..., times)   Irradiance on the ground at equal steps, or energy of unequal ones. [W m-2]

    Returns
    -------
    (...)   That of diffuse light on a day without light, so that every day has one; NaN where a flux is NaN, or the zenith
        of a beam.
    """
    direct, diffuse = np.asarray(direct_t, np.float64), np.asarray(diffuse_t, np.float64)
    scattered = diffuse_shape(method)
    beam = np.where(direct == 0, 0.0, direct * shape(zenith_t, method))
    total = np.asarray(np.sum(direct + diffuse, axis=-1))
    weighted = np.sum(beam + diffuse * scattered, axis=-1)
    return np.divide(weighted, total, out=np.full(np.shape(weighted), scattered), where=total != 0)


def carry(albedo: ArrayLike, shape_from: ArrayLike, shape_to: ArrayLike, method: str) -> Floats:
    """Albedo known under one light, under another: any shapes. [1]

    `shape_from` and `shape_to` are numbers of the same method. An albedo outside 0..1 is set to the limit first. In 0..1;
    rises with albedo; NaN in gives NaN. "constant" gives the albedo back as it is, whatever the two numbers are.
    """
    if _known(method) == "constant":
        return np.broadcast_arrays(np.asarray(albedo, np.float64), shape_from, shape_to)[0].copy()
    known = np.clip(np.asarray(albedo, np.float64), 0.0, 1.0)
    g, to = np.asarray(shape_from, np.float64), np.asarray(shape_to, np.float64)
    if method == "ross_li":
        return np.asarray(np.clip(known * (to / g), 0.0, 1.0))
    # root of a + g a (1 - a) = albedo, in the form that holds for g = 0
    overhead = 2 * known / (1 + g + np.sqrt((1 + g) ** 2 - 4 * g * known))
    return np.asarray(np.clip(overhead + to * overhead * (1 - overhead), 0.0, 1.0))


def direct_albedo(
    albedo_at: ArrayLike, zenith_at: ArrayLike, zenith: ArrayLike, method: str, diffuse_at: ArrayLike = 0.0
) -> Floats:
    """Albedo for a beam at `zenith`, from that seen with the sun at `zenith_at`, any shapes. [1]

    `diffuse_at` is the diffuse share of the light when it was seen. See carry and mixed_shape for NaN.
    """
    return carry(albedo_at, mixed_shape(zenith_at, diffuse_at, method), shape(zenith, method), method)


def diffuse_albedo(albedo_at: ArrayLike, zenith_at: ArrayLike, method: str, diffuse_at: ArrayLike = 0.0) -> Floats:
    """Albedo for light from all sides, from that seen with the sun at `zenith_at`; as direct_albedo. [1]"""
    return carry(albedo_at, mixed_shape(zenith_at, diffuse_at, method), diffuse_shape(method), method)


def day_albedo(
    albedo_overpass: ArrayLike,
    zenith_overpass: ArrayLike,
    diffuse_overpass: ArrayLike,
    zenith_t: ArrayLike,
    direct_t: ArrayLike,
    diffuse_t: ArrayLike,
    method: str,
) -> Floats:
    """A day's reflected over its incoming light, from the albedo seen at one overpass.

    Parameters
    ----------
    albedo_overpass : (...)                        [1]
    zenith_overpass, diffuse_overpass : (...)      Sun, and diffuse share of the light, then. [deg], [1]
    zenith_t, direct_t, diffuse_t : (..., times)   See path_shape.
    method : one of METHODS.

    Returns
    -------
    (...)   In 0..1 (but "constant", which gives albedo_overpass back); on a day without light, the albedo of diffuse
        light. NaN as in carry, mixed_shape and path_shape. [1]
    """
    seen = mixed_shape(zenith_overpass, diffuse_overpass, method)
    return carry(albedo_overpass, seen, path_shape(zenith_t, direct_t, diffuse_t, method), method)


def day_albedo_table(
    albedo_nodes: ArrayLike,
    zenith_overpass: ArrayLike,
    diffuse_overpass: ArrayLike,
    zenith_t: ArrayLike,
    direct_t: ArrayLike,
    diffuse_t: ArrayLike,
    method: str,
) -> Floats:
    """day_albedo at nodes of overpass albedo: nodes (n,), places (...) and (..., times) give (..., n). [1]

    Smooth in the albedo: with 65 equal nodes a straight line between them is within 1e-4 for "gardner_sharp" and a sun
    above 14 deg at the overpass. `carry` with the two numbers of a place gives the same without a table.
    """
    seen = mixed_shape(zenith_overpass, diffuse_overpass, method)
    path = path_shape(zenith_t, direct_t, diffuse_t, method)
    seen, path = np.broadcast_arrays(seen, path)
    nodes = np.broadcast_to(np.asarray(albedo_nodes, np.float64), (*seen.shape, np.size(albedo_nodes)))
    return carry(nodes, seen[..., np.newaxis], path[..., np.newaxis], method)


def carried_u(albedo_at: ArrayLike, albedo_carried: ArrayLike) -> Floats:
    """Standard uncertainty that carrying adds: a share of the change (judgement, tables/anisotropy.toml), any shapes. [1]"""
    share = load_table("anisotropy").row("carried_albedo")["relative_u"]
    return np.asarray(share * np.abs(np.asarray(albedo_carried, np.float64) - np.asarray(albedo_at, np.float64)))


def _cosine(zenith_deg: ArrayLike) -> Floats:
    zenith = np.asarray(zenith_deg, np.float64)
    return np.cos(np.radians(np.where((zenith >= 0) & (zenith <= 90), zenith, np.nan)))


def _known(method: str) -> str:
    if method not in METHODS:
        raise InputProblem(
            "albedo and the sun's angle", "method", method, "one of " + ", ".join(METHODS), "write one of them"
        )
    return method


@cache
def _ground_shape() -> tuple[Floats, Floats]:
    """Zenith angles [deg] and black-sky over white-sky albedo of the ground prior, kernels integrated."""
    limit = load_table("anisotropy").row("lowest_sun")["largest_zenith_deg"]
    zenith = np.linspace(0.0, limit, round(limit) + 1)
    parameters = np.array(anisotropy.ground_prior().parameters)
    black = anisotropy.black_sky_weights(zenith, method="exact") @ parameters
    white = np.array([1.0, *(anisotropy.white_sky(name, "exact") for name in anisotropy.GROUND)]) @ parameters
    return zenith, black / white
