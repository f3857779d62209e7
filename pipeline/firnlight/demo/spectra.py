"""How bright is each invented surface in each band, and what is its true albedo?"""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import NDArray

from firnlight.core.tables import load_table

BANDS = ("blue", "green", "red", "nir", "swir16", "swir22")
SENSOR = "oli"
SURFACES = ("fresh_snow", "old_snow", "glacier_ice", "rock", "grass", "conifer", "water", "cloud")
STEP_UM = 0.001  # of the integration; the spectra run straight over 50 times that


@cache
def fine_wavelengths_um() -> NDArray[np.float64]:
    """Wavelengths of the integration: (n,). [um]"""
    nodes = load_table("demo_spectra").row("wavelengths")["um"]
    return np.arange(round(nodes[0] / STEP_UM), round(nodes[-1] / STEP_UM) + 1) * STEP_UM


def spectrum(name: str) -> NDArray[np.float64]:
    """Reflectance of a surface at fine_wavelengths_um: (n,).

    Raises
    ------
    InputProblem : no surface of that name in tables/demo_spectra.toml.
    """
    table = load_table("demo_spectra")
    row = table.row(name)
    return np.interp(fine_wavelengths_um(), table.row("wavelengths")["um"], row["reflectance"])


def sunlight() -> NDArray[np.float64]:
    """Solar irradiance at the ground at fine_wavelengths_um, in relative units: (n,)."""
    table = load_table("demo_spectra")
    return np.interp(fine_wavelengths_um(), table.row("wavelengths")["um"], table.row("sun")["irradiance"])


def band_reflectance(values: NDArray[np.float64], band: str) -> float:
    """Plain mean of a spectrum over a band of the demo's sensor. [1]"""
    limits = load_table("sensors").row(SENSOR)["bands"][band]
    um = fine_wavelengths_um()
    inside = (um >= limits["low_um"] - STEP_UM / 2) & (um <= limits["high_um"] + STEP_UM / 2)
    return float(values[inside].mean())


def true_albedo(values: NDArray[np.float64]) -> float:
    """Share of the sunlight that a surface with this spectrum reflects. [1]"""
    sun = sunlight()
    return float((values * sun).sum() / sun.sum())


@cache
def endmembers() -> NDArray[np.float32]:
    """Band reflectance in the order of BANDS, then true albedo, of SURFACES: (surfaces, bands + 1)."""
    rows = [[*(band_reflectance(spectrum(s), b) for b in BANDS), true_albedo(spectrum(s))] for s in SURFACES]
    table = np.array(rows, np.float32)
    table.setflags(write=False)
    return table
