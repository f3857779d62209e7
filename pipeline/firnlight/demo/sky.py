"""What does the demo's sensor see of the ground on a day, and what is the truth behind it?"""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.tables import load_table
from firnlight.demo.noise import Floats, chance, row_noise, smoothstep, value_noise
from firnlight.demo.plane import LATITUDE_DEG, LONGITUDE_DEG, TilePlane
from firnlight.demo.spectra import BANDS, SENSOR, SURFACES, endmembers
from firnlight.demo.terrain import BROAD_CELLS, FOREST, GLACIER, LAKE, OPEN_GROUND, ROCK, Ground
from firnlight.physics import sun

# bits of the provider's quality mask, and of the truth about cloud
FILL, CLOUD, CLOUD_SHADOW, SNOW, WATER, SATURATED = 1, 2, 4, 8, 16, 32
TRUE_CLOUD, TRUE_SHADOW, CALLED_CLOUD, MISSED_CLOUD = 1, 2, 4, 8
CLOUD_HILLS = ((3000.0, 0.55), (1300.0, 0.30), (520.0, 0.15))  # wavelength [m] and weight, invented
_ONE = np.float32(1)


def _row(name: str) -> dict[str, Any]:
    return load_table("demo_spectra").row(name)


@dataclass(frozen=True)
class Day:
    """One overpass: when, where the sun stands, how the season stands. Made by `overpass`.

    Attributes
    ----------
    seed, time : of all that is random; of the acquisition, UTC.
    zenith_deg, azimuth_deg : of the sun at the plane's origin.
    snowline_m : height of half cover on level ground. [m]
    snow_age_days : since the last snowfall, with what melt adds.
    lake_snow : share of the lakes under snow. [1]
    cloud_from : value of the cloud field from which on there is cloud.
    """

    seed: int
    time: dt.datetime
    zenith_deg: float
    azimuth_deg: float
    snowline_m: float
    snow_age_days: float
    lake_snow: float
    cloud_from: float


def season_progress(day: dt.date) -> float:
    """0 at the end of winter, 1 in high summer. [1]"""
    first, last = _row("snow")["season_days"]
    t = min(max((day.timetuple().tm_yday - first) / (last - first), 0.0), 1.0)
    return t * t * (3 - 2 * t)


def overpass(time: dt.datetime, seed: int) -> Day:
    """What the sensor meets on a day; the same for every tile."""
    snow, day = _row("snow"), time.date()
    progress = season_progress(day)
    low, high = snow["snowline_m"]
    shift = (2 * chance(seed, "year", day.year).random() - 1) * snow["year_shift_m"]
    gone_from, gone = snow["ice_out_day"]
    lake = min(max((gone - day.timetuple().tm_yday) / (gone - gone_from), 0.0), 1.0)
    zenith, azimuth, _ = sun.position(time.timestamp(), LATITUDE_DEG, LONGITUDE_DEG)
    cloud_from = -0.02 + 0.22 * chance(seed, "cover", day).random()
    age = days_since_snowfall(day, seed) + 20.0 * progress * progress
    return Day(
        seed,
        time,
        float(zenith),
        float(azimuth),
        low + (high - low) * progress + shift,
        age,
        lake,
        cloud_from,
    )


def days_since_snowfall(day: dt.date, seed: int) -> float:
    """Days since it last snowed."""
    shortest, longest = _row("snow")["snowfall_every_days"]
    draws, fell = chance(seed, "snowfall", day.year), 0
    while (next_fall := fell + int(draws.integers(shortest, longest + 1))) <= day.timetuple().tm_yday:
        fell = next_fall
    return float(day.timetuple().tm_yday - fell)


@cache
def calibration(seed: int) -> tuple[float, ...]:
    """Relative error of each band's calibration: one draw for the sensor, the same for all its bands."""
    error = float(chance(seed, "calibration of the sensor", SENSOR).standard_normal()) * float(_row("sensor")["calibration"])
    return (error,) * len(BANDS)


@cache
def _snow_free() -> Floats:
    """Band reflectance and albedo of ground without snow, in forest of the floor: (codes, bands + 1)."""
    mix, parts = _row("ground"), dict(zip(SURFACES, endmembers(), strict=True))
    table = np.zeros((LAKE + 1, len(BANDS) + 1), np.float32)

    def blend(one: str, share: float, other: str) -> Floats:
        return np.asarray(np.float32(share) * parts[one] + np.float32(1 - share) * parts[other], np.float32)

    table[OPEN_GROUND] = table[FOREST] = blend("rock", mix["rock_in_grass"], "grass")
    table[ROCK] = blend("grass", mix["grass_in_rock"], "rock")
    table[GLACIER] = blend("rock", mix["debris_share"], "glacier_ice")
    table[LAKE] = parts["water"]
    return table


@dataclass(frozen=True)
class Surface:
    """The ground's state on a day; all (rows, cols).

    snow : share of the ground under snow. fresh : share of fresh in that snow.
    canopy : share hidden by trees. brightness : factor of the snow-free ground.
    """

    ground: Ground
    snow: Floats
    fresh: Floats
    canopy: Floats
    brightness: Floats

    def seen(self, column: int) -> Floats:
        """Reflectance in the band number `column` of BANDS; the true albedo for one more. [1]"""
        fresh, old, conifer = (endmembers()[SURFACES.index(n), column] for n in ("fresh_snow", "old_snow", "conifer"))
        value = _snow_free()[:, column].take(self.ground.cover)
        value *= self.brightness
        snow = self.fresh * (fresh - old)
        snow += old
        snow -= value
        snow *= self.snow
        value += snow
        value += self.canopy * (conifer - value)
        return value

    @property
    def albedo(self) -> Floats:
        """True broadband albedo. [1]"""
        return self.seen(len(BANDS))


def surface(ground: Ground, day: Day) -> Surface:
    """Snow on the ground on a day, how old it is, and what hides it."""
    snow, mix = _row("snow"), _row("ground")
    line = np.float32(snow["patch_m"]) * ground.patches
    line += np.float32(snow["sunny_side_m"]) * np.clip(ground.north, -_ONE, _ONE)
    line += np.float32(day.snowline_m)
    above = ground.elevation_m - line
    cover = smoothstep(above, -snow["edge_m"] / 2, snow["edge_m"] / 2)
    lake = ground.cover == LAKE
    cover[lake] = np.float32(day.lake_snow)
    soon, late = snow["ageing_days"]
    half = np.float32(soon) + np.float32(late - soon) * smoothstep(above, 0.0, snow["ageing_span_m"])
    age = np.float32(day.snow_age_days)
    fresh = _ONE - np.float32(snow["never_older"]) * age / (age + half)
    canopy = np.where(ground.cover == FOREST, np.float32(mix["canopy_share"]), np.float32(0))
    brightness = _ONE + np.float32(mix["texture"]) * ground.texture
    brightness[lake] = _ONE
    return Surface(ground, cover, fresh, canopy, brightness)


def opacity(x_m: Floats, y_m: Floats, day: Day) -> Floats:
    """How much of the view a cloud over a place takes, 0..1; any shape. [1]"""
    field = np.zeros_like(x_m)
    for wavelength, weight in CLOUD_HILLS:
        field += np.float32(weight) * value_noise(x_m, y_m, wavelength, day.seed, "cloud", day.time.date())
    return smoothstep(field, day.cloud_from, day.cloud_from + 0.25)


def shadow_offset_m(day: Day) -> tuple[float, float]:
    """From a place to the one under the cloud that shades it, east and north. [m]"""
    reach = _row("sky")["cloud_height_m"] * np.tan(np.radians(day.zenith_deg))
    return float(reach * np.sin(np.radians(day.azimuth_deg))), float(reach * np.cos(np.radians(day.azimuth_deg)))


@dataclass(frozen=True)
class Sky:
    """Clouds over some rows: opacity above and in the sun's way; two fields for the mask's mistakes."""

    above: Floats
    sunward: Floats
    mistaken: Floats
    thin: Floats


def sky_rows(plane: TilePlane, first: int, last: int, day: Day) -> Sky:
    """The sky over rows `first` to `last` - 1 of a tile."""
    rows, cols = np.arange(first, last), np.arange(plane.grid.cols)
    east, north = (np.float32(d) for d in shadow_offset_m(day))
    tags = day.seed, day.time.date()
    fields = (
        lambda x, y: opacity(x, y, day),
        lambda x, y: opacity(x + east, y + north, day),
        lambda x, y: value_noise(x, y, 500.0, "mistaken", *tags),
        lambda x, y: value_noise(x, y, 600.0, "thin", *tags),
    )
    above, sunward, mistaken, thin = (plane.smooth(field, rows, cols, BROAD_CELLS) for field in fields)
    return Sky(np.clip(above, 0, _ONE), np.clip(sunward, 0, _ONE), mistaken, thin)


def true_cloud(state: Surface, sky: Sky) -> NDArray[np.uint8]:
    """What is cloud and shadow in truth, and where the provider's mask is wrong: bits TRUE_CLOUD ..."""
    limits = _row("sky")
    cloud = sky.above > np.float32(limits["cloud_limit"])
    shadow = (sky.sunward > np.float32(limits["shadow_limit"])) & ~cloud
    edge = (state.snow > np.float32(0.1)) & (state.snow < np.float32(0.9)) & (state.ground.cover != LAKE)
    called = edge & ~cloud & (sky.mistaken > np.float32(limits["called_cloud_above"]))
    thin = cloud & (sky.above < np.float32(limits["provider_limit"]))
    missed = thin & (sky.thin < np.float32(limits["missed_below"]))
    bits = zip((cloud, shadow, called, missed), (TRUE_CLOUD, TRUE_SHADOW, CALLED_CLOUD, MISSED_CLOUD), strict=True)
    return np.asarray(sum(mask * np.uint8(bit) for mask, bit in bits), np.uint8)


def light(ground: Ground, sky: Sky, day: Day) -> Floats:
    """Product's over surface's reflectance: the residue of slope and of cloud shadow. [1]"""
    limits = _row("sky")
    zenith, azimuth = np.radians(day.zenith_deg), np.radians(day.azimuth_deg)
    tangent = np.tan(zenith)
    # cos(incidence) / cos(zenith) = (1 - tan z (east sin A + north cos A)) / sqrt(1 + east^2 + north^2)
    facing = (
        _ONE - np.float32(tangent * np.sin(azimuth)) * ground.east - np.float32(tangent * np.cos(azimuth)) * ground.north
    )
    facing /= np.sqrt(_ONE + ground.east * ground.east + ground.north * ground.north)
    facing = np.maximum(facing, np.float32(0))
    slope = _ONE + np.float32(limits["topographic_residual"]) * (facing - _ONE)
    return np.asarray(slope * (_ONE - np.float32(limits["shadow_strength"]) * sky.sunward), np.float32)


def product(
    state: Surface, sky: Sky, lit: Floats, band: int, day: Day, tile: str, first: int
) -> tuple[NDArray[np.uint16], Any]:
    """The numbers of one band of the reflectance product, from row `first` of the tile on.

    Returns
    -------
    (rows, cols) uint16, at least 1 (0 is an empty cell); (rows, cols) bool, where the sensor was saturated.
    """
    sensor, name = _row("sensor"), BANDS[band]
    value = state.seen(band)
    value *= lit
    value += sky.above * (endmembers()[SURFACES.index("cloud"), band] - value)
    value *= np.float32(1 + calibration(day.seed)[band])
    size = np.float32(sensor["noise"][name])
    for n in range(value.shape[0]):
        value[n] += size * row_noise(first + n, value.shape[1], day.seed, tile, day.time.date(), name)
    top = np.float32(_row("sky")["saturates_at"])
    saturated = value >= top
    np.minimum(value, top, out=value)
    value -= np.float32(sensor["offset"])
    value *= np.float32(1 / sensor["scale"])
    return np.maximum(np.rint(value), _ONE).astype(np.uint16), saturated


def provider_mask(state: Surface, truth: NDArray[np.uint8], saturated: Any) -> NDArray[np.uint8]:
    """The provider's quality mask, with its mistakes; fill is not in it. Bits CLOUD and so on."""
    cloud = ((truth & TRUE_CLOUD) != 0) & ((truth & MISSED_CLOUD) == 0) | ((truth & CALLED_CLOUD) != 0)
    shadow = (truth & TRUE_SHADOW) != 0
    snow = state.snow * (_ONE - state.canopy) > np.float32(0.4)
    water = (state.ground.cover == LAKE) & ~snow
    bits = zip((cloud, shadow, snow, water, saturated), (CLOUD, CLOUD_SHADOW, SNOW, WATER, SATURATED), strict=True)
    return np.asarray(sum(mask * np.uint8(bit) for mask, bit in bits), np.uint8)
