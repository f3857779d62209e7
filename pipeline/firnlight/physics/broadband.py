"""Which formula gives broadband albedo from these bands, and how sure is it?"""

from __future__ import annotations

import difflib
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firnlight.core.errors import SettingsProblem
from firnlight.core.tables import load_table

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Conversion:
    """intercept + sum w_b rho_b + sum q_bc rho_b rho_c, for one sensor and quantity.

    Attributes
    ----------
    name : row of tables/broadband.toml.
    bands : common names, in the order of the weights.
    weights : one per band; quadratic : symmetric matrix, None where the form is linear.
    fit_error : standard uncertainty of the published fit. [1]
    substitution_error : added where the sensor's bands are not those of the fit. [1]
    reflectance : "surface" or "top of atmosphere": what the bands must hold.
    surfaces : what the form holds for, in words; source : citation.
    """

    name: str
    bands: tuple[str, ...]
    intercept: float
    weights: tuple[float, ...]
    quadratic: tuple[tuple[float, ...], ...] | None
    fit_error: float
    substitution_error: float
    reflectance: str
    surfaces: str
    source: str


def conversion(family: str, sensor: str, quantity: str = "shortwave") -> Conversion:
    """The form of a family for a sensor.

    Parameters
    ----------
    family : as in a workflow, for example "liang2001".
    sensor : row of tables/sensors.toml, or a sensor that only conversions know.
    quantity : "shortwave", "visible", "near_infrared", or these two with "diffuse_" or "direct_" before them.

    Raises
    ------
    SettingsProblem : no such family, or no form of it for that sensor and quantity.

    References
    ----------
    tables/broadband.toml, each row its own.
    """
    rows = load_table("broadband").rows
    kin = {name: row for name, row in rows.items() if row["family"] == family}
    fitting = [name for name, row in kin.items() if sensor in row["sensors"] and row["quantity"] == quantity]
    if not fitting:
        raise _no_form(family, sensor, quantity)
    name = fitting[0]
    row = kin[name]
    squares, products = row.get("squares", {}), row.get("products", [])
    bands = tuple(dict.fromkeys([*row["weights"], *squares, *(band for one in products for band in one["bands"])]))
    share = 1 / row.get("divisor", 1.0)
    matrix = [[0.0] * len(bands) for _ in bands]
    for band, weight in squares.items():
        matrix[bands.index(band)][bands.index(band)] += weight * share
    for one in products:
        i, j = (bands.index(band) for band in one["bands"])
        matrix[i][j] += one["weight"] / 2 * share
        matrix[j][i] += one["weight"] / 2 * share
    return Conversion(
        name=name,
        bands=bands,
        intercept=row["intercept"] * share,
        weights=tuple(row["weights"].get(band, 0.0) * share for band in bands),
        quadratic=tuple(map(tuple, matrix)) if squares or products else None,
        fit_error=row["fit_error"],
        substitution_error=row["sensors"][sensor],
        reflectance=row.get("reflectance", "surface"),
        surfaces=row["surfaces"],
        source=row["source"],
    )


def _no_form(family: str, sensor: str, quantity: str) -> SettingsProblem:
    """What there is instead, in the family and for the sensor."""
    rows = load_table("broadband").rows.values()
    forms: dict[str, set[str]] = {}
    usable = set()
    for row in rows:
        if row["family"] == family:
            forms.setdefault(row["quantity"], set()).update(row["sensors"])
        wrong_kind = row.get("reflectance", "surface") != "surface"
        if sensor in row["sensors"] and row["quantity"] == quantity and not wrong_kind:
            usable.add(row["family"])
    if forms:
        found = f"{family}, which has no {quantity} form for {sensor}"
        has = "; ".join(f"{one} for {', '.join(sorted(sensors))}" for one, sensors in forms.items())
        wanted = f"a form that it has: {has}"
    else:
        found = family
        wanted = "one of " + ", ".join(sorted({row["family"] for row in rows}))
    near = difflib.get_close_matches(family, usable, n=1)
    if near:
        fix = f"write {near[0]!r}"
    elif usable:
        fix = f"for {sensor} choose from: {', '.join(sorted(usable))}"
    else:
        fix = f"no conversion gives {quantity} from {sensor}; `firnlight methods` lists those there are"
    return SettingsProblem("workflow", "albedo.conversion", found, wanted, fix)


def albedo(reflectance: ArrayLike, form: Conversion) -> Floats:
    """Broadband albedo.

    Parameters
    ----------
    reflectance : (bands, ...)   In the order of form.bands. [1]
    form : the conversion.

    Returns
    -------
    (...)   Not clipped; NaN where a band is NaN. [1]

    References
    ----------
    form.source; tables/broadband.toml.
    """
    rho = np.asarray(reflectance, np.float64)
    value = np.full(rho.shape[1:], form.intercept)
    for weight, band in zip(form.weights, rho, strict=True):
        value = value + weight * band
    if form.quadratic is not None:
        matrix = np.array(form.quadratic)
        value = value + np.einsum("i...,ij,j...->...", rho, matrix, rho)
    return np.asarray(value)


def sensitivity(reflectance: ArrayLike, form: Conversion) -> Floats:
    """Change of albedo per change of each band's reflectance.

    Parameters
    ----------
    reflectance : (bands, ...)   In the order of form.bands. [1]
    form : the conversion.

    Returns
    -------
    (bands, ...)   The weights; a quadratic form adds its slope, NaN where a band of it is NaN. [1]
    """
    rho = np.asarray(reflectance, np.float64)
    linear = np.array(form.weights).reshape(-1, *(1,) * (rho.ndim - 1))
    slope = np.broadcast_to(linear, rho.shape).copy()
    if form.quadratic is not None:
        slope += 2 * np.einsum("ij,j...->i...", np.array(form.quadratic), rho)
    return slope


def uncertainty_parts(
    reflectance: ArrayLike, form: Conversion, noise: ArrayLike, calibration: float
) -> tuple[Floats, Floats, Floats]:
    """Standard uncertainty of albedo, by how the errors of neighbouring cells hang together.

    Parameters
    ----------
    reflectance : (bands, ...)   In the order of form.bands. [1]
    form : the conversion.
    noise : (bands,)             Independent standard uncertainty of each band. [1]
    calibration : relative standard uncertainty that all bands and cells share. [1]

    Returns
    -------
    independent : noise of the bands through the sensitivities.
    local : error of the fit and of other bands than those of the fit; it follows the kind of surface.
    shared : calibration, the same sign everywhere.
        Each (...). NaN where a band is NaN. [1]

    References
    ----------
    JCGM 100:2008 (GUM), 5.1.2 and 5.2.2.
    """
    rho = np.asarray(reflectance, np.float64)
    slope = sensitivity(rho, form)
    u = np.asarray(noise, np.float64).reshape(-1, *(1,) * (rho.ndim - 1))
    independent = np.sqrt(np.sum((slope * u) ** 2, axis=0))
    shared = calibration * np.abs(np.sum(slope * rho, axis=0))
    fit = np.full(rho.shape[1:], np.hypot(form.fit_error, form.substitution_error))
    lost = np.isnan(rho).any(axis=0)
    return np.where(lost, np.nan, independent), np.where(lost, np.nan, fit), shared
