"""Where is the sun, how far, and how much light does it send to the top of the atmosphere?"""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firnlight.core.tables import load_table

Floats = NDArray[np.float64]
_J2000_UNIX_S = 946_728_000.0  # 2000-01-01 12:00 UT
_DAY_S = 86_400.0
_CENTURY_DAYS = 36_525.0


@cache
def solar_constant_wm2() -> float:
    """Total solar irradiance at 1 au. [W m-2]"""
    return float(load_table("constants").row("solar_constant")["value"])


@cache
def _michalsky() -> dict[str, Any]:
    return load_table("sun").row("michalsky_1988")


@cache
def parallax_rad() -> float:
    """Horizontal parallax of the sun at 1 au. [rad]"""
    constants = load_table("constants")
    return float(constants.row("earth_radius")["value"] / constants.row("astronomical_unit")["value"])


def _perturbations_deg(days: Floats) -> Floats:
    """What the planets and the moon add to the sun's longitude; `days` from 2000-01-01 12:00. [deg]"""
    row, centuries = load_table("sun").row("perturbations"), days / _CENTURY_DAYS + 1
    total = np.zeros_like(days)
    for amplitude, phase, rate in row["cosines_deg"]:
        total = total + amplitude * np.cos(np.radians(phase + rate * centuries))
    for amplitude, phase, rate in row["sines_deg"]:
        total = total + amplitude * np.sin(np.radians(phase + rate * centuries))
    return total


def ecliptic(unix_s: ArrayLike) -> tuple[Floats, Floats, Floats, Floats]:
    """Right ascension, declination, Greenwich sidereal time and distance of the sun.

    Parameters
    ----------
    unix_s : any shape      Seconds since 1970-01-01 UTC; UT1 is taken as UTC (error below 0.004 deg). [s]

    Returns
    -------
    right ascension [rad], declination [rad], Greenwich mean sidereal time [rad], distance [au], each of
    that shape. NaN in gives NaN.

    References
    ----------
    Michalsky (1988) with the perturbations of Meeus (1979), tables/sun.toml; 0.008 deg from 1950 to 2050.
    """
    row = _michalsky()
    days = (np.asarray(unix_s, np.float64) - _J2000_UNIX_S) / _DAY_S
    hours = np.mod(days * 24.0 + 12.0, 24.0)
    longitude = np.radians(np.mod(row["mean_longitude_deg"][0] + row["mean_longitude_deg"][1] * days, 360.0))
    anomaly = np.radians(np.mod(row["mean_anomaly_deg"][0] + row["mean_anomaly_deg"][1] * days, 360.0))
    c1, c2 = row["equation_of_centre_deg"]
    true = longitude + np.radians(c1 * np.sin(anomaly) + c2 * np.sin(2 * anomaly) + _perturbations_deg(days))
    tilt = np.radians(row["obliquity_deg"][0] + row["obliquity_deg"][1] * days)
    ascension = np.arctan2(np.cos(tilt) * np.sin(true), np.cos(true))
    declination = np.arcsin(np.sin(tilt) * np.sin(true))
    s0, s1 = row["sidereal_time_h"]
    sidereal = np.mod(s0 + s1 * days + hours, 24.0) * (np.pi / 12)
    d0, d1, d2 = row["distance_au"]
    return ascension, declination, sidereal, d0 + d1 * np.cos(anomaly) + d2 * np.cos(2 * anomaly)


def position(unix_s: ArrayLike, latitude_deg: ArrayLike, longitude_deg: ArrayLike) -> tuple[Floats, Floats, Floats]:
    """Place of the sun in the sky.

    Parameters
    ----------
    unix_s : any shape                         Seconds since 1970-01-01 UTC. [s]
    latitude_deg, longitude_deg : any shape    Geodetic latitude; longitude, east positive. [deg]

    Returns
    -------
    zenith angle from the place on the ground, without refraction [deg]; azimuth clockwise from north,
    0..360 [deg]; Earth-sun distance [au]; each in the broadcast shape. NaN in gives NaN.

    Notes
    -----
    The zenith angle holds the parallax (up to 0.0024 deg). Against Reda & Andreas (2004) at 60,000 times from
    1950 to 2050 the place of the sun on the sphere is off by 0.0071 deg at most.

    References
    ----------
    Michalsky (1988), tables/sun.toml.
    """
    ascension, declination, sidereal, distance = ecliptic(unix_s)
    latitude = np.radians(np.asarray(latitude_deg, np.float64))
    hour = sidereal + np.radians(np.asarray(longitude_deg, np.float64)) - ascension
    up = np.sin(declination) * np.sin(latitude) + np.cos(declination) * np.cos(latitude) * np.cos(hour)
    east = -np.cos(declination) * np.sin(hour)
    north = np.cos(latitude) * np.sin(declination) - np.sin(latitude) * np.cos(declination) * np.cos(hour)
    zenith = np.arctan2(np.hypot(east, north), up)
    zenith = zenith + parallax_rad() / distance * np.sin(zenith)
    azimuth = np.mod(np.degrees(np.arctan2(east, north)), 360.0)
    return np.degrees(zenith), azimuth, np.broadcast_to(distance, zenith.shape)


def spencer_angle_rad(day_of_year: ArrayLike) -> Floats:
    """Day angle of the Fourier series: 2 pi (J - 1) / 365. [rad]"""
    return 2 * np.pi * (np.asarray(day_of_year, np.float64) - 1) / 365


def spencer_distance_factor(day_of_year: ArrayLike) -> Floats:
    """(mean distance / distance)^2 by Spencer (1971); any shape. Within 1e-3 of position(). [1]"""
    g, c = spencer_angle_rad(day_of_year), load_table("sun").row("spencer_1971")["distance_factor"]
    return c[0] + c[1] * np.cos(g) + c[2] * np.sin(g) + c[3] * np.cos(2 * g) + c[4] * np.sin(2 * g)


def spencer_declination_rad(day_of_year: ArrayLike) -> Floats:
    """Declination of the sun by Spencer (1971); any shape. [rad]

    Error below 0.0006 rad at 0 h of 1950; 0.009 rad at noon of 2025, since leap days are not followed.
    """
    g, c = spencer_angle_rad(day_of_year), load_table("sun").row("spencer_1971")["declination_rad"]
    total = c[0] + np.zeros_like(g)
    for order in (1, 2, 3):
        total = total + c[2 * order - 1] * np.cos(order * g) + c[2 * order] * np.sin(order * g)
    return total


def spencer_equation_of_time_min(day_of_year: ArrayLike) -> Floats:
    """Equation of time by Spencer (1971); any shape. Error about 35 s. [min]"""
    row = load_table("sun").row("spencer_1971")
    g, c = spencer_angle_rad(day_of_year), row["equation_of_time"]
    series = c[0] + c[1] * np.cos(g) + c[2] * np.sin(g) + c[3] * np.cos(2 * g) + c[4] * np.sin(2 * g)
    return row["minutes_per_unit"] * series


def fao56_distance_factor(day_of_year: ArrayLike) -> Floats:
    """Inverse relative distance by FAO-56 equation 23; any shape. [1]"""
    amplitude = load_table("sun").row("fao56")["distance_amplitude"]
    return 1 + amplitude * np.cos(2 * np.pi * np.asarray(day_of_year, np.float64) / 365)


def fao56_declination_rad(day_of_year: ArrayLike) -> Floats:
    """Declination of the sun by FAO-56 equation 24; any shape. [rad]"""
    row = load_table("sun").row("fao56")
    angle = 2 * np.pi * np.asarray(day_of_year, np.float64) / 365 - row["declination_phase_rad"]
    return row["declination_rad"] * np.sin(angle)


def sunset_angle_rad(latitude_rad: ArrayLike, declination_rad: ArrayLike) -> Floats:
    """Hour angle of sunset: 0 in polar night, pi in polar day; broadcast shape. [rad]"""
    edge = -np.tan(np.asarray(latitude_rad, np.float64)) * np.tan(np.asarray(declination_rad, np.float64))
    return np.arccos(np.clip(edge, -1.0, 1.0))


def day_length_h(latitude_rad: ArrayLike, declination_rad: ArrayLike) -> Floats:
    """Hours between geometric sunrise and sunset; broadcast shape. [h]"""
    return sunset_angle_rad(latitude_rad, declination_rad) * 24 / np.pi


def daily_extraterrestrial_wm2(
    latitude_rad: ArrayLike,
    declination_rad: ArrayLike,
    distance_factor: ArrayLike,
    solar_constant: float | None = None,
) -> Floats:
    """24-hour mean of what arrives on a horizontal plane at the top of the atmosphere.

    Parameters
    ----------
    latitude_rad, declination_rad : any shape. [rad]
    distance_factor : (mean distance / distance)^2. [1]
    solar_constant : at 1 au; that of tables/constants.toml by default. [W m-2]

    Returns
    -------
    broadcast shape; 0 in polar night; NaN in gives NaN. [W m-2]

    References
    ----------
    Closed form as in Berger A. (1978), J. Atmos. Sci. 35:2362-2367 (from memory).
    """
    phi, delta = np.asarray(latitude_rad, np.float64), np.asarray(declination_rad, np.float64)
    half = sunset_angle_rad(phi, delta)
    geometry = half * np.sin(phi) * np.sin(delta) + np.cos(phi) * np.cos(delta) * np.sin(half)
    scale = solar_constant_wm2() if solar_constant is None else solar_constant
    return np.asarray(scale / np.pi * np.asarray(distance_factor) * geometry)
