"""How much water vapour does the air hold?

Vapour pressure is in hPa throughout the project (the longwave formulas were fitted in it); 1 hPa = 0.1 kPa = 1 mbar.
Temperatures are in K, with 0 degC = 273.15 K.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]
ICE_POINT_K = 273.15
# e = a exp(b t / (c + t)), t in degC: a [hPa], b [1], c [degC]; lowest and highest t that are answered [degC]
SATURATION = {
    "fao56": (6.108, 17.27, 237.3, -95.0, 70.0),
    "sonntag1990": (6.112, 17.62, 243.12, -95.0, 70.0),
    "sonntag1990_ice": (6.112, 22.46, 272.62, -95.0, 0.01),
}
WATER_TO_DRY_AIR = 0.622  # ratio of molar masses
HUMIDITY_RANGE = (-0.05, 1.5)  # beyond it a relative humidity is in the wrong unit; within, it is set to 0..1
PRATA_CM_K_PER_HPA = 46.5


def _floats(values: ArrayLike) -> Floats:
    return np.asarray(values, np.float64)


def _kept(values: Floats, good: NDArray[np.bool_]) -> Floats:
    return np.where(good, values, np.nan)


def _numbers(form: str) -> tuple[float, float, float, float, float]:
    if form not in SATURATION:
        raise ValueError(f"saturation form {form!r}: wanted one of {', '.join(SATURATION)}")
    return SATURATION[form]


def saturation_vapour_pressure(temperature_k: ArrayLike, form: str = "sonntag1990") -> Floats:
    """Saturation vapour pressure.

    Parameters
    ----------
    temperature_k : any shape. [K]
    form : "fao56" (Tetens' form as in FAO-56 equation 11, over water), "sonntag1990" (over water, also below freezing:
        the meteorological convention for relative humidity) or "sonntag1990_ice" (over ice, up to 0.01 degC).

    Returns
    -------
    that shape   NaN in gives NaN; NaN below -95 degC and above 70 degC, and above 0.01 degC over ice. [hPa]

    Raises
    ------
    ValueError : no such form.

    References
    ----------
    Allen R. G., Pereira L. S., Raes D., Smith M. (1998). FAO Irrigation and Drainage Paper 56, equation 11.
    Sonntag D. (1990). Important new values of the physical constants of 1986, vapour pressure formulations based on the
    ITS-90, and psychrometer formulae. Z. Meteorol. 70:340-344 (reference from memory); water -45..60 degC, ice -65..0 degC.
    """
    a, b, c, low, high = _numbers(form)
    t = _floats(temperature_k) - ICE_POINT_K
    t = _kept(t, (t >= low) & (t <= high))
    return np.asarray(a * np.exp(b * t / (c + t)))


def saturation_slope(temperature_k: ArrayLike, form: str = "fao56") -> Floats:
    """Slope of the saturation curve, any shape; NaN as saturation_vapour_pressure. [hPa K-1]

    References
    ----------
    b c e / (c + t)^2; with the numbers of FAO-56 this is its equation 13 (which rounds b c to 4098).
    """
    _, b, c, _, _ = _numbers(form)
    t = _floats(temperature_k) - ICE_POINT_K
    return np.asarray(b * c * saturation_vapour_pressure(temperature_k, form) / (c + t) ** 2)


def psychrometric_constant(pressure_pa: ArrayLike) -> Floats:
    """Psychrometric constant, any shape; NaN in gives NaN, NaN for pressure not above 0. [hPa K-1]

    References
    ----------
    FAO-56 equation 8: 0.665e-3 times the air pressure.
    """
    pressure = _floats(pressure_pa)
    return np.asarray(0.665e-3 * _kept(pressure, pressure > 0) / 100)


def vapour_from_relative_humidity(humidity: ArrayLike, air_k: ArrayLike, form: str = "sonntag1990") -> Floats:
    """Vapour pressure from relative humidity over water.

    Parameters
    ----------
    humidity : any shape   Share of saturation, 0..1 (not percent). [1]
    air_k : any shape. [K]

    Returns
    -------
    broadcast shape   Humidity just outside 0..1, as sensors give in fog, is set to the end of the range; beyond
    -0.05..1.5 it is NaN, as where an input is NaN. [hPa]
    """
    share = _floats(humidity)
    low, high = HUMIDITY_RANGE
    share = np.clip(_kept(share, (share >= low) & (share <= high)), 0.0, 1.0)
    return np.asarray(share * saturation_vapour_pressure(air_k, form))


def vapour_from_dew_point(dew_point_k: ArrayLike, form: str = "sonntag1990") -> Floats:
    """Vapour pressure from the dew point, any shape; NaN as saturation_vapour_pressure. [hPa]"""
    return saturation_vapour_pressure(dew_point_k, form)


def vapour_from_specific_humidity(humidity_kg_kg: ArrayLike, pressure_pa: ArrayLike) -> Floats:
    """Vapour pressure from the mass of vapour per mass of moist air: q p / (0.622 + 0.378 q).

    Parameters
    ----------
    humidity_kg_kg : any shape   Below 0, as packed files give by rounding, down to -0.001 counts as 0. [kg kg-1]
    pressure_pa : any shape. [Pa]

    Returns
    -------
    broadcast shape   NaN where an input is NaN, humidity is outside -0.001..1 or pressure is not above 0. [hPa]
    """
    q, pressure = _floats(humidity_kg_kg), _floats(pressure_pa)
    q = np.maximum(_kept(q, (q >= -1e-3) & (q <= 1)), 0.0)
    pressure = _kept(pressure, pressure > 0)
    return np.asarray(q * pressure / (WATER_TO_DRY_AIR + (1 - WATER_TO_DRY_AIR) * q) / 100)


def precipitable_water_cm(vapour_hpa: ArrayLike, air_k: ArrayLike) -> Floats:
    """Water vapour of the whole column, guessed from that near the ground: 46.5 e / T.

    Parameters
    ----------
    vapour_hpa, air_k : any shape   Near the ground. [hPa], [K]

    Returns
    -------
    broadcast shape   NaN where an input is NaN, vapour below 0 or temperature not above 0. [cm = 10 kg m-2]

    References
    ----------
    Prata A. J. (1996), tables/longwave.toml.
    """
    vapour, air = _floats(vapour_hpa), _floats(air_k)
    return np.asarray(PRATA_CM_K_PER_HPA * _kept(vapour, vapour >= 0) / _kept(air, air > 0))


def air_at_height(air_k: ArrayLike, from_m: ArrayLike, to_m: ArrayLike, lapse_k_per_m: ArrayLike) -> Floats:
    """Air temperature taken from one height to another: T - lapse (to - from).

    Parameters
    ----------
    air_k, from_m, to_m : any shape. [K], [m], [m]
    lapse_k_per_m : any shape   Fall of temperature with height, above 0 where it is colder higher up; 0.0065 is that of the
        standard atmosphere. [K m-1]

    Returns
    -------
    broadcast shape   NaN in gives NaN. [K]
    """
    return np.asarray(_floats(air_k) - _floats(lapse_k_per_m) * (_floats(to_m) - _floats(from_m)))


def vapour_pressure_at(there_k: ArrayLike, here_k: ArrayLike, vapour_hpa: ArrayLike, form: str = "sonntag1990") -> Floats:
    """Vapour pressure taken to another height, where the air has another temperature, at the same relative humidity.

    Parameters
    ----------
    there_k : any shape              Air temperature at the other height, as from air_at_height. [K]
    here_k, vapour_hpa : any shape   Air temperature and vapour pressure where both are known. [K], [hPa]

    Returns
    -------
    broadcast shape   NaN where an input is NaN, vapour is below 0 or a temperature has no saturation pressure. [hPa]

    Notes
    -----
    With 0.0065 K m-1 near 0 degC vapour falls by a factor e over 2.1 km. That relative humidity is kept with height is
    common practice, no source: in a valley inversion, or above the cloud, it fails.
    """
    vapour = _floats(vapour_hpa)
    ratio = saturation_vapour_pressure(there_k, form) / saturation_vapour_pressure(here_k, form)
    return np.asarray(_kept(vapour, vapour >= 0) * ratio)
