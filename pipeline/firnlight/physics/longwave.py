"""How much longwave comes down from the sky and the terrain, and how much does the surface keep?

Fluxes are in W m-2, downward (a gain of the surface) above 0; vapour pressure is in hPa, temperature in K. Air outside
180..340 K, and vapour below 0, are not air: they give NaN.
"""

from __future__ import annotations

import difflib
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firnlight.core.errors import SettingsProblem
from firnlight.core.tables import load_table
from firnlight.physics.cloud import believable_fraction
from firnlight.physics.humidity import precipitable_water_cm

Floats = NDArray[np.float64]
AIR_RANGE_K = (180.0, 340.0)
MELTING_K = 273.15
DAY_S = 86_400.0
_SETTING = {"clear": "longwave.method", "cloud": "longwave.cloud"}


def methods(kind: str) -> tuple[str, ...]:
    """Names of the forms of a kind, "clear" or "cloud", in tables/longwave.toml."""
    return tuple(name for name, row in load_table("longwave").rows.items() if row["kind"] == kind)


def method(kind: str, name: str) -> dict[str, Any]:
    """The row of a form: title, formula, validity, error and source.

    Raises
    ------
    SettingsProblem : no form of that kind has that name.
    """
    known = methods(kind)
    if name not in known:
        near = difflib.get_close_matches(name, known, n=1)
        raise SettingsProblem(
            "workflow",
            _SETTING.get(kind, "longwave"),
            name,
            "one of " + ", ".join(known),
            f"write {near[0]!r}" if near else "see `firnlight methods` for what each is",
        )
    return load_table("longwave").row(name)


def _floats(values: ArrayLike) -> Floats:
    return np.asarray(values, np.float64)


def _air(air_k: ArrayLike) -> Floats:
    air = _floats(air_k)
    return np.where((air >= AIR_RANGE_K[0]) & (air <= AIR_RANGE_K[1]), air, np.nan)


def _vapour(vapour_hpa: ArrayLike) -> Floats:
    vapour = _floats(vapour_hpa)
    return np.where(vapour >= 0, vapour, np.nan)


def black_body(temperature_k: ArrayLike) -> Floats:
    """Flux from a black surface, sigma T^4, any shape; NaN in, or below 0 K, gives NaN. [W m-2]"""
    t = _floats(temperature_k)
    return np.asarray(load_table("constants").row("stefan_boltzmann")["value"] * np.where(t >= 0, t, np.nan) ** 4)


def clear_emissivity(name: str, air_k: ArrayLike, vapour_hpa: ArrayLike) -> Floats:
    """Emissivity of a cloudless sky against a black body at air temperature.

    Parameters
    ----------
    name : a clear-sky form, one of methods("clear").
    air_k, vapour_hpa : any shape   Near the ground. [K], [hPa]

    Returns
    -------
    broadcast shape, at most 1   NaN where an input is NaN (also vapour that the form does not use), air is outside
    180..340 K, or vapour is below 0. [1]

    Raises
    ------
    SettingsProblem : no such form.

    References
    ----------
    tables/longwave.toml, each row its own.
    """
    n = method("clear", name)["numbers"]
    t, e = np.broadcast_arrays(_air(air_k), _vapour(vapour_hpa))
    if name == "brunt1932":
        value = n[0] + n[1] * np.sqrt(e)
    elif name == "swinbank1963":
        value = n[0] * t**2
    elif name == "idso_jackson1969":
        value = 1 - n[0] * np.exp(-n[1] * (n[2] - t) ** 2)
    elif name == "brutsaert1975":
        value = n[0] * (e / t) ** (1 / n[1])
    elif name == "idso1981":
        value = n[0] + n[1] * e * np.exp(n[2] / t)
    elif name == "konzelmann1994":
        value = n[0] + n[1] * (100 * e / t) ** (1 / n[2])
    elif name == "prata1996":
        water_cm = precipitable_water_cm(e, t)
        value = 1 - (1 + water_cm) * np.exp(-np.sqrt(n[0] + n[1] * water_cm))
    else:
        water_kg = n[5] * (e / 10) / t
        value = (n[0] + n[1] * (t / n[2]) ** n[3] + n[4] * np.sqrt(water_kg / n[6])) / black_body(t)
    return np.where(np.isnan(t + e), np.nan, np.minimum(value, 1.0))


def downward_clear(name: str, air_k: ArrayLike, vapour_hpa: ArrayLike) -> Floats:
    """Longwave from a cloudless sky: clear_emissivity x sigma T^4, broadcast shape; NaN and errors as there. [W m-2]"""
    return np.asarray(clear_emissivity(name, air_k, vapour_hpa) * black_body(air_k))


def with_cloud(name: str, clear_wm2: ArrayLike, air_k: ArrayLike, cloud_fraction: ArrayLike) -> Floats:
    """Longwave from a sky with cloud.

    Parameters
    ----------
    name : a cloud form, one of methods("cloud").
    clear_wm2 : any shape        From downward_clear; over sigma T^4 it is the cloudless sky's emissivity. [W m-2]
    air_k : any shape            Near the ground. [K]
    cloud_fraction : any shape   0..1, of the kind that the form takes (its `valid`). [1]

    Returns
    -------
    broadcast shape   Not more than a black body at air temperature. NaN where an input is NaN, air is outside 180..340 K,
    or the fraction misses 0..1 by more than 0.02; "none" does not look at the fraction. [W m-2]

    Raises
    ------
    SettingsProblem : no such form.

    References
    ----------
    tables/longwave.toml, each row its own.
    """
    n = method("cloud", name)["numbers"]
    clear, black, c = np.broadcast_arrays(_floats(clear_wm2), black_body(_air(air_k)), believable_fraction(cloud_fraction))
    if name == "none":
        value = clear
    elif name == "unsworth_monteith1975":
        value = (1 - n[0] * c) * clear + n[0] * c * black
    elif name == "crawford_duchon1999":
        value = c * black + (1 - c) * clear
    elif name == "konzelmann_cloud1994":
        value = clear * (1 - c ** n[0]) + n[1] * c ** n[0] * black
    else:  # sugita_brutsaert1993, kustas1994
        value = clear * (1 + n[0] * c ** n[1])
    return np.asarray(np.minimum(value, black))


def downward(clear_name: str, cloud_name: str, air_k: ArrayLike, vapour_hpa: ArrayLike, cloud_fraction: ArrayLike) -> Floats:
    """Longwave from the sky, cloudless part and cloud: downward_clear, then with_cloud. [W m-2]"""
    return with_cloud(cloud_name, downward_clear(clear_name, air_k, vapour_hpa), air_k, cloud_fraction)


def surface_temperature(air_k: ArrayLike, snow: ArrayLike) -> Floats:
    """Temperature of the surface, taken to be that of the air, over snow not above melting.

    Parameters
    ----------
    air_k : any shape   Near the ground. [K]
    snow : any shape    True where snow or ice lies.

    Returns
    -------
    broadcast shape   NaN where air is NaN or outside 180..340 K. [K]

    Notes
    -----
    Common practice, no source. In sun dry ground is warmer than the air, by clear nights snow is colder: with 5 K the
    upward flux errs by about 25 W m-2.
    """
    air = _air(air_k)
    return np.where(np.asarray(snow, bool), np.minimum(air, MELTING_K), air)


def upward(emissivity: ArrayLike, surface_k: ArrayLike, downward_wm2: ArrayLike) -> Floats:
    """Longwave that leaves the surface, given off and reflected: eps sigma T^4 + (1 - eps) down.

    Any shapes that broadcast; NaN in gives NaN, and emissivity outside 0..1. [W m-2]
    """
    eps = _share(emissivity)
    return np.asarray(eps * black_body(surface_k) + (1 - eps) * _floats(downward_wm2))


def net(emissivity: ArrayLike, surface_k: ArrayLike, downward_wm2: ArrayLike) -> Floats:
    """Longwave that the surface gains: down - up = eps (down - sigma T^4).

    Any shapes that broadcast; NaN in gives NaN, and emissivity outside 0..1. [W m-2]
    """
    return np.asarray(_share(emissivity) * (_floats(downward_wm2) - black_body(surface_k)))


def _share(values: ArrayLike) -> Floats:
    share = _floats(values)
    return np.where((share >= 0) & (share <= 1), share, np.nan)


def downward_in_terrain(
    downward_sky_wm2: ArrayLike,
    sky_view: ArrayLike,
    terrain_view: ArrayLike,
    surroundings_emissivity: ArrayLike,
    surroundings_k: ArrayLike,
) -> Floats:
    """Longwave that falls on a cell among mountains, per unit area of its slope.

    (V L + C eps_s sigma T_s^4) / (1 - C (1 - eps_s)): sky, terrain, and what the terrain reflects, for which it is taken
    to receive as much as the cell does.

    Parameters
    ----------
    downward_sky_wm2 : any shape   From an open sky on flat ground; taken to be the same from all directions. [W m-2]
    sky_view : any shape           V, the share of the slope's own hemisphere that is sky, by cosine to its normal. [1]
    terrain_view : any shape       C, the share that is terrain. All that is not sky is terrain, 1 - V; terrain.terrain_view
        leaves out the (1 - cos S) / 2 that lies below the level of the cell, and so loses its longwave. [1]
    surroundings_emissivity, surroundings_k : any shape   Of that terrain. [1], [K]

    Returns
    -------
    broadcast shape   NaN where an input is NaN, a share is outside 0..1, or V + C is above 1. [W m-2]

    References
    ----------
    V and C as in Dozier & Frew (1990), IEEE Trans. Geosci. Remote Sens. 28:963-969; the balance is worked out here.
    """
    v, c, eps = _share(sky_view), _share(terrain_view), _share(surroundings_emissivity)
    c = np.where(v + c <= 1 + 1e-6, c, np.nan)
    given = v * _floats(downward_sky_wm2) + c * eps * black_body(surroundings_k)
    return np.asarray(given / (1 - c * (1 - eps)))


def map_area_factor(slope_deg: ArrayLike) -> Floats:
    """True area of a slope over its area on the map, 1 / cos S, any shape; NaN in, below 0, or from 90 deg on. [1]"""
    slope = _floats(slope_deg)
    slope = np.where((slope >= 0) & (slope < 90), slope, np.nan)
    return np.asarray(1 / np.cos(np.radians(slope)))


def net_in_terrain(
    downward_sky_wm2: ArrayLike,
    sky_view: ArrayLike,
    slope_deg: ArrayLike,
    emissivity: ArrayLike,
    surface_k: ArrayLike,
    surroundings_k: ArrayLike | None = None,
    surroundings_emissivity: ArrayLike | None = None,
) -> Floats:
    """Longwave that a tilted cell gains among mountains, per unit area of the map.

    A slope of S has 1 / cos S of true area for each of the map, and over it
    eps (down - sigma T^4) / cos S with down from downward_in_terrain and C = 1 - V.

    Parameters
    ----------
    downward_sky_wm2, sky_view : any shape   As in downward_in_terrain. [W m-2], [1]
    slope_deg : any shape                    Of the cell. [deg]
    emissivity, surface_k : any shape        Of the cell. [1], [K]
    surroundings_k, surroundings_emissivity : any shape   Of the terrain in view; the cell's own where not given: then
        terrain and cell, alike, trade nothing, and the net is eps V (L - sigma T^4) / cos S over 1 - (1 - V)(1 - eps),
        which is within 1 % of 1 for V from 0.5 and eps from 0.98 on. [K], [1]

    Returns
    -------
    broadcast shape   NaN where an input is NaN, a share is outside 0..1, or the slope outside 0..90. [W m-2]
    """
    there_k = surface_k if surroundings_k is None else surroundings_k
    there_eps = emissivity if surroundings_emissivity is None else surroundings_emissivity
    view = _share(sky_view)
    down = downward_in_terrain(downward_sky_wm2, view, 1 - view, there_eps, there_k)
    return np.asarray(net(emissivity, surface_k, down) * map_area_factor(slope_deg))


def net_fao56(tmax_k: ArrayLike, tmin_k: ArrayLike, ea_hpa: ArrayLike, rs_over_rso: ArrayLike) -> Floats:
    """A day's net longwave of well watered grass, from temperature, vapour and sunshine.

    Parameters
    ----------
    tmax_k, tmin_k : any shape   Highest and lowest air temperature of the day. [K]
    ea_hpa : any shape           Mean vapour pressure. [hPa]
    rs_over_rso : any shape      Insolation over that of a cloudless day; above 1 counts as 1. [1]

    Returns
    -------
    broadcast shape   A loss is below 0: the paper's R_nl is this with the other sign. NaN where an input is NaN, air is
    outside 180..340 K, vapour or the ratio below 0. [W m-2]

    Notes
    -----
    Below a ratio of 0.26 the published form turns into a gain. Not for snow: see surface_temperature and net. The paper's
    kelvin are degC + 273.16; 0.01 K are 0.015 % of the flux.

    References
    ----------
    FAO-56 equation 39, tables/longwave.toml.
    """
    n = load_table("longwave").row("fao56")["numbers"]
    power = (_air(tmax_k) ** 4 + _air(tmin_k) ** 4) / 2
    ratio = _floats(rs_over_rso)
    ratio = np.minimum(np.where(ratio >= 0, ratio, np.nan), 1.0)
    mj = n[0] * power * (n[1] - n[2] * np.sqrt(_vapour(ea_hpa) / 10)) * (n[3] * ratio - n[4])
    return np.asarray(-mj * 1e6 / DAY_S)


def melt_potential_mm_day(net_radiation_wm2: ArrayLike) -> Floats:
    """Water that a day's mean net radiation would melt from snow at melting point, any shape; NaN in gives NaN. [mm d-1]

    max(net, 0) x 86400 s over the latent heat of fusion (tables/constants.toml); 1 kg m-2 of water is 1 mm. Heat that
    warms the pack first, and what the air brings, are not in it.
    """
    latent = load_table("constants").row("latent_heat_of_fusion")["value"]
    return np.asarray(np.maximum(_floats(net_radiation_wm2), 0.0) * DAY_S / latent)
