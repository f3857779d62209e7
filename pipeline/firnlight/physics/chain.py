"""The per-cell chain in plain numpy: digital numbers to stored integers. (reference twin of chain_fast.py)"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import Window
from firnlight.core.lattice import Lattice
from firnlight.physics.angle_albedo import carried_u, carry
from firnlight.physics.broadband import Conversion, albedo, uncertainty_parts
from firnlight.physics.longwave import MELTING_K, black_body
from firnlight.physics.snow import is_snow, ndsi, snow_fraction, snow_limits

Arrays = dict[str, NDArray[Any]]


def _steps(values: NDArray[np.float64], per_unit: float, highest: int) -> NDArray[np.int16]:
    return np.minimum(np.floor(values * per_unit + 0.5), highest).astype(np.int16)


def albedo_block(
    reflectance: dict[str, NDArray[np.float64]],
    flags: NDArray[np.uint8],
    sun_zenith_deg: NDArray[np.float64],
    *,
    zenith_limit_deg: float,
    ground: Conversion,
    snow: Conversion,
    noise: dict[str, float],
    calibration: float,
    fraction_name: str,
    range_limits: tuple[float, float],
    bits: dict[str, int],
    fill: int,
) -> Arrays:
    """Albedo, its uncertainty, snow fraction and quality of a block.

    Parameters
    ----------
    reflectance : common name -> (y, x); NaN where there is no data. [1]
    flags : (y, x) quality bits from the provider: missing, cloud, shadow, saturated count, others are dropped.
    sun_zenith_deg : (y, x) at the time of the scene. [deg]
    ground, snow : the conversion of each kind of cell.
    noise : independent standard uncertainty of each band. [1]
    calibration : relative standard uncertainty shared by all bands.
    range_limits : albedo outside is flagged and not used; inside but beyond 0..1 it is set to the limit and flagged.
    bits : bit values of the quality flags.
    fill : stored integer of an unseen cell.

    Returns
    -------
    albedo, snow_fraction (y, x) int16, the latter 0 on ground too dark for snow;
    albedo_u (4, y, x) int16: total, independent, local, shared; quality (y, x)
    uint8. Stored integers in steps of 0.0001; a cell that is missing, cloud, shadow, saturated, under a low sun or
    out of range is `fill` in all but quality.
    """
    kept = bits["missing"] | bits["cloud"] | bits["shadow"] | bits["saturated"]
    quality = flags & np.uint8(kept)
    lost = np.isnan(np.stack(list(reflectance.values()))).any(axis=0)
    quality = np.where(lost, quality | bits["missing"], quality)
    quality = np.where(sun_zenith_deg <= zenith_limit_deg, quality, quality | bits["low_sun"])
    green, nir, swir = (reflectance[name] for name in ("green", "nir", "swir16"))
    snowy = is_snow(green, nir, swir)
    values, parts = [], []
    for form in (ground, snow):
        bands = np.stack([reflectance[name] for name in form.bands])
        values.append(albedo(bands, form))
        parts.append(uncertainty_parts(bands, form, np.array([noise[name] for name in form.bands]), calibration))
    value = np.where(snowy, values[1], values[0])
    usable = quality == 0
    outside = usable & ~((value >= range_limits[0]) & (value <= range_limits[1]))
    quality = np.where(outside, quality | bits["outside_range"], quality)
    seen = quality == 0
    quality = np.where(seen & ((value < 0) | (value > 1)), quality | bits["set_to_limit"], quality)
    quality = np.where(seen & snowy, quality | bits["snow"], quality)
    safe = np.where(seen, np.clip(value, 0.0, 1.0), 0.0)
    split = [np.where(seen, np.where(snowy, parts[1][k], parts[0][k]), 0.0) for k in range(3)]
    total = np.sqrt(split[0] ** 2 + split[1] ** 2 + split[2] ** 2)
    # dark water has the index of snow; the limits of the snow test tell them apart
    _, nir_limit, green_limit = snow_limits()
    bright = (nir > nir_limit) & (green > green_limit)
    share = np.where(seen & bright, snow_fraction(ndsi(green, swir), fraction_name), 0.0)

    def stored(field: NDArray[np.float64]) -> NDArray[np.int16]:
        return np.where(seen, _steps(field, 10000.0, 10000), np.int16(fill)).astype(np.int16)

    return {
        "albedo": stored(safe),
        "albedo_u": np.stack([stored(one) for one in (total, *split)]),
        "snow_fraction": stored(np.nan_to_num(share)),
        "quality": quality.astype(np.uint8),
    }


def carry_block(
    albedo_stored: NDArray[np.int16],
    albedo_u_stored: NDArray[np.int16],
    snowy: NDArray[np.bool_],
    shapes: Lattice,
    window: Window,
    fill: int,
) -> Arrays:
    """Albedo seen at the overpass to the day's reflected over incoming light.

    Parameters
    ----------
    albedo_stored : (y, x); albedo_u_stored : (4, y, x); snowy : (y, x).
    shapes : lattice of 4 numbers of angle_albedo: of snow at the overpass, of snow through the day, the same of ground.

    Returns
    -------
    albedo, albedo_u : as given, for the whole day; what carrying adds is counted as locally correlated.
    """
    here = shapes.at(window)
    seen = albedo_stored != fill
    a = np.where(seen, albedo_stored, 0) / 10000.0
    of_snow = carry(a, here[..., 0], here[..., 1], "gardner_sharp")
    of_ground = carry(a, here[..., 2], here[..., 3], "ross_li")
    there = np.where(snowy, of_snow, of_ground)
    noise, local, shared = (np.where(seen, albedo_u_stored[k], 0) / 10000.0 for k in (1, 2, 3))
    local = np.sqrt(local**2 + carried_u(a, there) ** 2)
    total = np.sqrt(noise**2 + local**2 + shared**2)

    def stored(field: NDArray[np.float64]) -> NDArray[np.int16]:
        return np.where(seen, _steps(field, 10000.0, 10000), np.int16(fill)).astype(np.int16)

    return {"albedo": stored(there), "albedo_u": np.stack([stored(one) for one in (total, noise, local, shared)])}


def absorbed_block(
    albedo_stored: NDArray[np.int16],
    albedo_u_stored: NDArray[np.int16],
    insolation_stored: NDArray[np.int16],
    shared_u: float,
    local_u: float,
    fill: int,
    highest: int,
) -> Arrays:
    """Absorbed shortwave and its uncertainty of a block, from stored albedo and insolation.

    Parameters
    ----------
    albedo_stored, insolation_stored : (y, x); albedo_u_stored : (4, y, x).
    shared_u, local_u : relative standard uncertainty of insolation: shared by all cells, and correlated nearby.
    highest : largest stored integer of an uncertainty.

    Returns
    -------
    absorbed_shortwave, absorbed_shortwave_u : (y, x) int16 in steps of 0.1 W m-2.
        absorbed = insolation x (1 - albedo) of the stored integers, rounded once, so that reflected = insolation -
        absorbed closes exactly.
    """
    seen = (albedo_stored != fill) & (insolation_stored != fill)
    s = np.where(seen, insolation_stored, 0).astype(np.int64)
    dark = 10000 - np.where(seen, albedo_stored, 0).astype(np.int64)
    absorbed = (s * dark + 5000) // 10000
    noise, local, calibration = (s * np.where(seen, albedo_u_stored[k], 0) / 100000.0 for k in (1, 2, 3))
    sky = s * dark / 100000.0
    total = noise * noise + local * local + calibration * calibration
    total = np.sqrt(total + sky * sky * (shared_u * shared_u + local_u * local_u))

    def stored(field: NDArray[Any]) -> NDArray[np.int16]:
        return np.where(seen, field, fill).astype(np.int16)

    return {
        "absorbed_shortwave": stored(absorbed),
        "absorbed_shortwave_u": stored(_steps(np.asarray(total), 10.0, highest)),
    }


def net_block(
    absorbed_stored: NDArray[np.int16],
    absorbed_u_stored: NDArray[np.int16],
    snowy: NDArray[np.bool_],
    elevation_m: NDArray[np.float32],
    emissivity: NDArray[np.float64],
    view: NDArray[np.float64],
    window: Window,
    longwave: Lattice,
    level0_m: float,
    level_step_m: float,
    shared_u: float,
    local_u: float,
    fill: int,
    longest: int,
    highest: int,
    surface_k: NDArray[np.float64] | None = None,
) -> Arrays:
    """Net longwave and net radiation of a block.

    Parameters
    ----------
    snowy : (y, x) cells of snow, whose surface is never warmer than melting.
    emissivity : (y, x) of the surface. [1]
    view : (y, x) sky view over the cosine of the slope: a tilted cell trades longwave with the sky over its true area
        and the part of it that sees sky; with terrain, taken to be as warm as the cell, it trades nothing. [1]
    longwave : lattice of (levels, 3), day means: from the sky, sigma T^4 of snow, of other ground; NaN is a gap. [W m-2]
    shared_u, local_u : standard uncertainty of net longwave. [W m-2]
    longest, highest : largest stored integer of net longwave (either sign) and of an uncertainty.
    surface_k : (y, x) measured temperature of the surface, NaN where only the air's is known. [K]

    Returns
    -------
    net_longwave = emissivity view (down - sigma T^4), net_radiation = absorbed + net_longwave of the stored integers,
    net_radiation_u : (y, x) int16 in steps of 0.1 W m-2, `fill` where absorbed is, without height, or in a gap.
    """
    nodes = longwave.at(window)
    level = (elevation_m.astype(np.float64) - level0_m) / level_step_m
    inside = (level >= 0) & (level <= nodes.shape[2] - 1)
    level = np.where(inside, level, 0.0)
    low = np.minimum(level.astype(np.int64), nodes.shape[2] - 2)
    share = (level - low)[..., np.newaxis]
    rows, cols = np.indices(low.shape)
    here = nodes[rows, cols, low] + (nodes[rows, cols, low + 1] - nodes[rows, cols, low]) * share
    up = np.where(snowy, here[..., 1], here[..., 2])
    if surface_k is not None:
        kelvin = np.where(snowy, np.minimum(surface_k, MELTING_K), surface_k)
        up = np.where(np.isnan(surface_k), up, black_body(kelvin))
    balance = (here[..., 0] - up) * emissivity * view
    seen = (absorbed_stored != fill) & inside & ~np.isnan(balance)
    steps = np.clip(np.floor(np.where(seen, balance, 0.0) * 10.0 + 0.5), -longest, longest).astype(np.int64)
    u = np.where(seen, absorbed_u_stored, 0) / 10.0
    total = np.sqrt(u * u + shared_u * shared_u + local_u * local_u)

    def stored(field: NDArray[Any]) -> NDArray[np.int16]:
        return np.where(seen, field, fill).astype(np.int16)

    return {
        "net_longwave": stored(steps),
        "net_radiation": stored(absorbed_stored.astype(np.int64) + steps),
        "net_radiation_u": stored(_steps(total, 10.0, highest)),
    }
