"""Moments of a day's clear-sky insolation at many places and heights. (fast twin of clearsky.day_moments)"""

from firnlight.physics.kernel_cache import prepare

prepare()

import numba  # noqa: E402
import numpy as np  # noqa: E402

from firnlight.physics import sun  # noqa: E402
from firnlight.physics.clearsky import (  # noqa: E402
    ORDERS,
    STEP_S,
    bird_numbers,
    day_times_unix_s,
    pressure_pa,
)


@numba.njit(nogil=True, cache=True)
def _moments(declination, hour_at_zero, distance, parallax, latitude, longitude, pressure, air, numbers, scale, out):
    (r1, r2, r3, o1, o2, o3, o4, o5, o6, g1, g2, w1, w2, w3, w4, a1, a2, a3, a4, a5, k1, k2,
     direct_share, s1, s2, s3, sky0, p0, m1, m2, m3) = numbers  # fmt: skip
    aod500, aod380, water, ozone, forward = air
    tau = a1 * aod380 + a2 * aod500
    tau_power = tau**a3 * (1 + tau - tau**a4)
    places, levels, orders = out.shape
    orders -= 1
    for z in range(levels):
        out[:, z, :] = 0.0 * pressure[z]  # NaN stays NaN in polar night too
    for n in range(places):
        sin_lat, cos_lat = np.sin(latitude[n]), np.cos(latitude[n])
        for t in range(declination.size):
            sin_d, cos_d = np.sin(declination[t]), np.cos(declination[t])
            h = hour_at_zero[t] + longitude[n]
            up = sin_d * sin_lat + cos_d * cos_lat * np.cos(h)
            east = -cos_d * np.sin(h)
            north = cos_lat * sin_d - sin_lat * cos_d * np.cos(h)
            zenith = np.arctan2(np.hypot(east, north), up)
            zenith = zenith + parallax / distance[t] * np.sin(zenith)
            degrees = np.degrees(zenith)
            if degrees >= 90.0:  # a NaN place goes on and gives NaN
                continue
            cosine = np.cos(zenith)
            space = scale / distance[t] ** 2
            m = 1 / (cosine + m1 * (m2 - degrees) ** -m3)
            xo, xw = ozone * m, water * m
            t_ozone = 1 - o1 * xo * (1 + o2 * xo) ** -o3 - o4 * xo / (1 + o5 * xo + o6 * xo**2)
            t_water = 1 - w1 * xw / ((1 + w2 * xw) ** w3 + w4 * xw)
            t_aerosol = np.exp(-tau_power * m**a5)
            t_absorption = 1 - k1 * (1 - m + m**k2) * (1 - t_aerosol)
            scatter = t_aerosol / t_absorption
            sky = sky0 + (1 - forward) * (1 - scatter)
            spread = 1 - m + m**s3
            horizontal = space * cosine
            for z in range(levels):
                mp = m * pressure[z] / p0
                t_rayleigh = np.exp(-r1 * mp**r2 * (1 + mp - mp**r3))
                t_gases = np.exp(-g1 * mp**g2)
                clean = t_ozone * t_water * t_gases
                direct = horizontal * direct_share * t_rayleigh * clean * t_aerosol
                diffuse = horizontal * s1 * clean * t_absorption
                diffuse = diffuse * (s2 * (1 - t_rayleigh) + forward * (1 - scatter)) / spread
                power = direct + diffuse
                for k in range(orders):
                    out[n, z, k] += power
                    power *= sky
                out[n, z, orders] += direct
    out /= declination.size


def day_moments(day, latitude_deg, longitude_deg, elevation_m, atmosphere, orders=ORDERS, step_s=STEP_S):
    """Same contract as clearsky.day_moments."""
    return day_light(day, latitude_deg, longitude_deg, elevation_m, atmosphere, orders, step_s)[..., :-1]


def day_light(day, latitude_deg, longitude_deg, elevation_m, atmosphere, orders=ORDERS, step_s=STEP_S):
    """Moments as clearsky.day_moments and, last, the day's mean direct light on flat ground: (n, m, orders + 1)."""
    ascension, declination, sidereal, distance = sun.ecliptic(day_times_unix_s(day, step_s))
    out = np.empty((np.size(latitude_deg), np.size(elevation_m), orders + 1))
    _moments(
        declination,
        sidereal - ascension,
        distance,
        sun.parallax_rad(),
        np.radians(np.asarray(latitude_deg, np.float64)),
        np.radians(np.asarray(longitude_deg, np.float64)),
        pressure_pa(elevation_m),
        tuple(float(number) for number in atmosphere.numbers()),  # an int would compile a second kernel
        bird_numbers(),
        sun.solar_constant_wm2(),
        out,
    )
    return out
