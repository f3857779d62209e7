"""How much light reaches the ground under a cloudless sky? (Bird & Hulstrom 1981; the reference)"""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firnlight.core.tables import load_table
from firnlight.physics import sun

Floats = NDArray[np.float64]
DAY_S = 86_400
STEP_S = 600.0  # day mean within 0.01 W m-2 of a 10 s step (tests/physics/test_clearsky.py)
ORDERS = 8  # day mean within 1e-4 W m-2 of the direct mean (same test)


@dataclass(frozen=True)
class Atmosphere:
    """A cloudless atmosphere.

    Attributes
    ----------
    aerosol_500nm, aerosol_380nm : aerosol optical depth at two wavelengths. [1]
    water_vapour_cm, ozone_cm : precipitable water and ozone column. [cm]
    forward_scatter : share of aerosol scattering that goes forward. [1]
    """

    aerosol_500nm: float
    aerosol_380nm: float
    water_vapour_cm: float
    ozone_cm: float
    forward_scatter: float

    @classmethod
    def of(
        cls,
        aerosol_500nm: float,
        water_vapour_cm: float,
        ozone_cm: float,
        aerosol_380nm: float | None = None,
        forward_scatter: float | None = None,
    ) -> Atmosphere:
        """Depth at 380 nm from an Angstrom exponent, forward scatter from the table, where not given."""
        if aerosol_380nm is None:
            row = load_table("clearsky").row("angstrom")
            short, long = row["wavelengths_nm"]
            aerosol_380nm = aerosol_500nm * (short / long) ** -row["exponent"]
        if forward_scatter is None:
            forward_scatter = load_table("clearsky").row("bird_1981")["forward_scatter"]
        return cls(aerosol_500nm, aerosol_380nm, water_vapour_cm, ozone_cm, forward_scatter)

    def numbers(self) -> tuple[float, ...]:
        """The five numbers in the order of the fields."""
        return (
            self.aerosol_500nm,
            self.aerosol_380nm,
            self.water_vapour_cm,
            self.ozone_cm,
            self.forward_scatter,
        )


@dataclass(frozen=True)
class ClearSky:
    """What a cloudless sky sends down, and the transmittances on the way.

    `black_ground_wm2` is the global horizontal irradiance over ground that reflects nothing; `sky_albedo` is
    the share of light from the ground that the sky sends back.
    """

    direct_normal_wm2: Floats
    direct_horizontal_wm2: Floats
    black_ground_wm2: Floats
    sky_albedo: Floats
    t_rayleigh: Floats
    t_ozone: Floats
    t_gases: Floats
    t_water: Floats
    t_aerosol: Floats
    t_absorption: Floats


@cache
def bird_numbers() -> tuple[float, ...]:
    """The model's numbers in the order that the fast kernel takes them."""
    row = load_table("clearsky").row("bird_1981")
    return (
        *row["rayleigh"],
        *row["ozone"],
        *row["mixed_gases"],
        *row["water_vapour"],
        *row["aerosol"],
        *row["absorption"],
        row["direct"],
        *row["scattered"],
        row["sky_albedo"],
        row["reference_pressure_pa"],
        *load_table("clearsky").row("kasten_1966")["airmass"],
    )


def pressure_pa(elevation_m: ArrayLike) -> Floats:
    """Air pressure at a height, any shape; NaN in gives NaN. [Pa]

    References
    ----------
    FAO-56 equation 7, tables/clearsky.toml.
    """
    row = load_table("clearsky").row("pressure_fao56")
    surface_k, lapse_k_per_m = row["sea_level_k"], row["lapse_k_per_m"]
    ratio = (surface_k - lapse_k_per_m * np.asarray(elevation_m, np.float64)) / surface_k
    return np.asarray(row["sea_level_pa"] * ratio ** row["power"])


def relative_airmass(zenith_deg: ArrayLike) -> Floats:
    """Path through the air relative to the vertical, any shape; NaN at and below the horizon. [1]

    References
    ----------
    Kasten (1966), tables/clearsky.toml.
    """
    a, b, c = load_table("clearsky").row("kasten_1966")["airmass"]
    zenith = np.asarray(zenith_deg, np.float64)
    up = np.where(zenith < 90, zenith, np.nan)
    return np.asarray(1 / (np.cos(np.radians(up)) + a * (b - up) ** -c))


def bird(zenith_deg: ArrayLike, extraterrestrial_wm2: ArrayLike, pressure_pa: ArrayLike, atmosphere: Atmosphere) -> ClearSky:
    """Clear-sky irradiance on horizontal ground.

    Parameters
    ----------
    zenith_deg : any shape              True zenith angle of the sun. [deg]
    extraterrestrial_wm2 : any shape    Normal irradiance above the air. [W m-2]
    pressure_pa : any shape             Air pressure at the ground. [Pa]
    atmosphere : the column's contents.

    Returns
    -------
    ClearSky in the broadcast shape [W m-2]; fluxes and sky albedo are 0 where the sun is at or below the
    horizon, and NaN where an input array is NaN, by night too. Transmittances are NaN without sun.

    References
    ----------
    Bird & Hulstrom (1981), tables/clearsky.toml.
    """
    row = load_table("clearsky").row("bird_1981")
    zenith, space, pressure = np.broadcast_arrays(
        np.asarray(zenith_deg, np.float64),
        np.asarray(extraterrestrial_wm2, np.float64),
        np.asarray(pressure_pa, np.float64),
    )
    night = zenith >= 90
    m = relative_airmass(zenith)
    mp = m * pressure / row["reference_pressure_pa"]
    r1, r2, r3 = row["rayleigh"]
    t_rayleigh = np.exp(-r1 * mp**r2 * (1 + mp - mp**r3))
    o1, o2, o3, o4, o5, o6 = row["ozone"]
    xo = atmosphere.ozone_cm * m
    t_ozone = 1 - o1 * xo * (1 + o2 * xo) ** -o3 - o4 * xo / (1 + o5 * xo + o6 * xo**2)
    g1, g2 = row["mixed_gases"]
    t_gases = np.exp(-g1 * mp**g2)
    w1, w2, w3, w4 = row["water_vapour"]
    xw = atmosphere.water_vapour_cm * m
    t_water = 1 - w1 * xw / ((1 + w2 * xw) ** w3 + w4 * xw)
    a1, a2, a3, a4, a5 = row["aerosol"]
    tau = a1 * atmosphere.aerosol_380nm + a2 * atmosphere.aerosol_500nm
    t_aerosol = np.exp(-(tau**a3) * (1 + tau - tau**a4) * m**a5)
    k1, k2 = row["absorption"]
    t_absorption = 1 - k1 * (1 - m + m**k2) * (1 - t_aerosol)
    scatter = t_aerosol / t_absorption
    sky_albedo = row["sky_albedo"] + (1 - atmosphere.forward_scatter) * (1 - scatter)
    s1, s2, s3 = row["scattered"]
    horizontal = space * np.cos(np.radians(zenith))
    clean = t_ozone * t_water * t_gases
    direct_normal = space * row["direct"] * t_rayleigh * clean * t_aerosol
    direct = horizontal * row["direct"] * t_rayleigh * clean * t_aerosol
    diffuse = horizontal * s1 * clean * t_absorption
    diffuse = diffuse * (s2 * (1 - t_rayleigh) + atmosphere.forward_scatter * (1 - scatter)) / (1 - m + m**s3)
    dark = 0.0 * (zenith + space + pressure)  # 0, or NaN where an input is NaN
    return ClearSky(
        direct_normal_wm2=np.where(night, dark, direct_normal),
        direct_horizontal_wm2=np.where(night, dark, direct),
        black_ground_wm2=np.where(night, dark, direct + diffuse),
        sky_albedo=np.where(night, dark, sky_albedo),
        t_rayleigh=t_rayleigh,
        t_ozone=t_ozone,
        t_gases=t_gases,
        t_water=t_water,
        t_aerosol=t_aerosol,
        t_absorption=t_absorption,
    )


def global_horizontal(black_ground_wm2: ArrayLike, sky_albedo: ArrayLike, ground_albedo: ArrayLike) -> Floats:
    """Irradiance with the light that goes to and fro between ground and sky, any shape. [W m-2]

    G0 / (1 - r_g r_s); NaN in gives NaN.

    References
    ----------
    Bird & Hulstrom (1981), tables/clearsky.toml.
    """
    trapped = np.asarray(ground_albedo, np.float64) * np.asarray(sky_albedo, np.float64)
    return np.asarray(np.asarray(black_ground_wm2, np.float64) / (1 - trapped))


def day_times_unix_s(day: dt.date, step_s: float = STEP_S) -> Floats:
    """Midpoints of equal steps through the 24 hours of a UTC day: (n,). [s]"""
    start = dt.datetime(day.year, day.month, day.day, tzinfo=dt.UTC).timestamp()
    count = round(DAY_S / step_s)
    return np.asarray(start + (np.arange(count) + 0.5) * (DAY_S / count))


def day_moments(
    day: dt.date,
    latitude_deg: ArrayLike,
    longitude_deg: ArrayLike,
    elevation_m: ArrayLike,
    atmosphere: Atmosphere,
    orders: int = ORDERS,
    step_s: float = STEP_S,
) -> Floats:
    """What is needed to know a day's mean insolation over ground of any albedo.

    The day's mean over ground of albedo a is the mean of G0 / (1 - a r) = sum over k of a^k M_k with
    M_k = mean over the day of G0 r^k; see day_mean_insolation.

    Parameters
    ----------
    day : the UTC day.
    latitude_deg, longitude_deg : (n,) places. [deg]
    elevation_m : (m,) heights. [m]
    atmosphere : the column above.
    orders : number of moments, at least 2.
    step_s : time step. [s]

    Returns
    -------
    (n, m, orders)   0 in polar night; NaN where the place or the height is NaN. [W m-2]
    """
    times = day_times_unix_s(day, step_s)
    lat, lon = np.asarray(latitude_deg, np.float64), np.asarray(longitude_deg, np.float64)
    pressure = pressure_pa(elevation_m)
    total = np.zeros((lat.size, pressure.size, orders))
    for time in times:
        zenith, _, distance = sun.position(time, lat, lon)
        space = sun.solar_constant_wm2() / distance**2
        sky = bird(zenith[:, np.newaxis], space[:, np.newaxis], pressure[np.newaxis, :], atmosphere)
        power = sky.black_ground_wm2
        for order in range(orders):
            total[:, :, order] += power
            power = power * sky.sky_albedo
    return total / times.size


def day_mean_insolation(moments: Floats, albedo: ArrayLike) -> Floats:
    """A day's mean insolation over ground of a given albedo.

    Parameters
    ----------
    moments : (..., orders)   From day_moments. [W m-2]
    albedo : (...)            Of the ground. [1]

    Returns
    -------
    (...)   The series, its tail summed as a geometric one. NaN in gives NaN. [W m-2]
    """
    a = np.asarray(albedo, np.float64)
    total, power = np.zeros(np.broadcast_shapes(a.shape, moments.shape[:-1])), np.ones_like(a)
    for order in range(moments.shape[-1] - 1):
        total = total + power * moments[..., order]
        power = power * a
    before, last = moments[..., -2], moments[..., -1]
    # the same operations in the same order as the kernel's, so that both round alike
    shrink = np.divide(a * last, before, out=np.zeros_like(total), where=before > 0)
    return np.asarray(total + power * last / (1 - shrink))
