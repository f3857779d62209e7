"""Which units may a supplied quantity have, and how do its numbers become ours?"""

from __future__ import annotations

import difflib
import re
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.errors import InputProblem

Floats = NDArray[np.float64]
Linear = tuple[float, float]
# ozone: the thickness of 1 kg m-2 as a gas at 273.15 K and 101325 Pa, from its molar mass 47.9982 g mol-1 (IUPAC), the
# Avogadro constant 6.02214076e23 mol-1 and the Loschmidt constant 2.686780111e25 m-3 (CODATA 2018)
_OZONE_CM_PER_KG_M2 = 100 * 1000 / 47.9982 * 6.02214076e23 / 2.686780111e25


@dataclass(frozen=True)
class Quantity:
    """A kind of supplied number.

    Attributes
    ----------
    unit : ours.
    rates : known unit to (factor, offset) that gives ours.
    amounts : known unit of energy per area to the factor that gives J m-2; divided by time later.
    limits : least and largest believable value, in our unit: beyond it the units are wrong.
    """

    unit: str
    rates: dict[str, Linear]
    limits: Linear
    amounts: dict[str, float] = field(default_factory=dict)


_KELVIN = {"K": (1.0, 0.0), "kelvin": (1.0, 0.0), "degC": (1.0, 273.15), "celsius": (1.0, 273.15), "C": (1.0, 273.15),
           "degree_Celsius": (1.0, 273.15), "degrees_Celsius": (1.0, 273.15), "deg_C": (1.0, 273.15),
           "°C": (1.0, 273.15)}  # fmt: skip
_SHARE = {"1": (1.0, 0.0), "%": (0.01, 0.0), "percent": (0.01, 0.0)}
_PA = {"Pa": 1.0, "hPa": 100.0, "mbar": 100.0, "kPa": 1000.0}
QUANTITIES = {
    "flux": Quantity(
        "W m-2",
        {"W m-2": (1.0, 0.0), "kW m-2": (1e3, 0.0), "J m-2 s-1": (1.0, 0.0), "J m-2 d-1": (1 / 86_400, 0.0),
         "kJ m-2 h-1": (1e3 / 3600, 0.0), "MJ m-2 h-1": (1e6 / 3600, 0.0), "MJ m-2 d-1": (1e6 / 86_400, 0.0),
         "kWh m-2 d-1": (3.6e6 / 86_400, 0.0)},
        (-100.0, 2000.0),
        {"J m-2": 1.0, "kJ m-2": 1e3, "MJ m-2": 1e6, "Wh m-2": 3600.0, "kWh m-2": 3.6e6},
    ),
    "air_temperature": Quantity("K", _KELVIN, (150.0, 350.0)),
    "dew_point": Quantity("K", _KELVIN, (100.0, 330.0)),
    "vapour_pressure": Quantity("hPa", {unit: (f / 100, 0.0) for unit, f in _PA.items()}, (-0.1, 100.0)),
    "air_pressure": Quantity("Pa", {unit: (f, 0.0) for unit, f in _PA.items()}, (2e4, 1.1e5)),
    "relative_humidity": Quantity("1", _SHARE, (-0.05, 1.5)),
    "cloud_fraction": Quantity("1", _SHARE | {"okta": (0.125, 0.0), "oktas": (0.125, 0.0)}, (-0.02, 1.02)),
    "specific_humidity": Quantity("kg kg-1", {"kg kg-1": (1.0, 0.0), "1": (1.0, 0.0), "g kg-1": (1e-3, 0.0)}, (-1e-3, 0.06)),
    "wind_speed": Quantity("m s-1", {"m s-1": (1.0, 0.0), "km h-1": (1 / 3.6, 0.0), "knot": (1852 / 3600, 0.0),
                                     "kt": (1852 / 3600, 0.0)}, (-0.1, 150.0)),
    "aerosol_optical_depth": Quantity("1", {"1": (1.0, 0.0)}, (-0.1, 10.0)),
    "water_vapour": Quantity("cm", {"cm": (1.0, 0.0), "mm": (0.1, 0.0), "kg m-2": (0.1, 0.0)}, (-0.01, 15.0)),
    "ozone": Quantity("cm", {"cm": (1.0, 0.0), "atm-cm": (1.0, 0.0), "DU": (1e-3, 0.0),
                             "kg m-2": (_OZONE_CM_PER_KG_M2, 0.0)}, (0.03, 1.0)),
    "surface_altitude": Quantity("m", {"m": (1.0, 0.0), "km": (1e3, 0.0)}, (-500.0, 9000.0)),
}  # fmt: skip


def _plain(units: str) -> str:
    """One spelling of a unit: "W/m^2", "W m**-2" and "W.m⁻²" become "W m-2"."""
    text = units.strip().replace("⁻²", "-2").replace("⁻¹", "-1").replace("²", "2").replace("**", "").replace("^", "")
    text = re.sub(r"/\s*([A-Za-z]+)(\d?)", lambda m: f" {m[1]}-{m[2] or 1}", text)
    text = re.sub(r"[\s.·*]+", " ", text).strip()
    text = re.sub(r"\bwatts?\b", "W", text, flags=re.IGNORECASE)
    text = re.sub(r"^([kM]?(?:Wh|W|J))m-2", r"\1 m-2", text)
    text = re.sub(r"\b(?:metres?|meters?)\b", "m", text)
    return re.sub(r"\b(?:day|hour|hr)(?=-1\b)", lambda m: m[0][0], text)


def quantity_of(name: str) -> Quantity:
    """The kind called `name`.

    Raises
    ------
    KeyError : there is none; the name is the program's, not the user's.
    """
    return QUANTITIES[name]


@dataclass(frozen=True)
class Conversion:
    """From the units of a file to ours; amounts become J m-2, and fluxes when they are divided by time."""

    quantity: str
    unit: str
    factor: float
    offset: float
    amounts: bool

    def check(self, values: Floats, where: str, what: str, units: str) -> None:
        """Refuse values, in our unit, that no such quantity has; NaN is left alone.

        Raises
        ------
        InputProblem : some lie outside the believable range.
        """
        low, high = quantity_of(self.quantity).limits
        known = values[np.isfinite(values)]
        if known.size and (known.min() < low or known.max() > high):
            found = f"values from {known.min():.6g} to {known.max():.6g} {self.unit} by its units, {units!r}"
            wanted = f"{self.quantity} within {low:g} .. {high:g} {self.unit}"
            raise InputProblem(
                where, what, found, wanted, "correct the units, or the fill value, of the file (or set units)"
            )


def conversion(quantity: str, units: Any, where: str, what: str) -> Conversion:
    """How numbers of these units become ours.

    Raises
    ------
    InputProblem : the units are not known, with the list of those that are.
    """
    about = quantity_of(quantity)
    text = _plain(str(units)) if units is not None else ""
    if text in about.amounts:
        return Conversion(quantity, about.unit, about.amounts[text], 0.0, True)
    if text in about.rates:
        return Conversion(quantity, about.unit, *about.rates[text], False)
    known = [*about.rates, *about.amounts]
    near = difflib.get_close_matches(text, known, n=1) if text else []
    found = f"units {str(units)!r}" if units is not None and str(units) else "no units"
    fix = f"write units {near[0]!r} into the file, or set units" if near else "write the units into the file, or set units"
    raise InputProblem(where, what, found, f"{quantity} in one of: " + ", ".join(known), fix)
