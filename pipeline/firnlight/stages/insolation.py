"""Sun and sky on a coarse lattice of the tile, from which the kernel takes each cell's insolation."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.lattice import Lattice
from firnlight.core.settings import AtmosphereSettings, Insolation
from firnlight.physics import sun
from firnlight.physics.clearsky import Atmosphere
from firnlight.physics.clearsky_fast import day_moments
from firnlight.stages.stage import Stage

INSOLATION = Stage("insolation", 2, ("albedo", "elevation", "ground"), ("insolation",), ("insolation",))

# heights of the levels between which the kernel interpolates; the curvature of insolation with height over one
# step stays under 0.01 W m-2 (tests/stages/test_insolation.py)
LOWEST_M, HIGHEST_M, LEVEL_STEP_M = -500.0, 9000.0, 250.0
ORDERS = 4  # powers of albedo in the ground-sky series; the rest is summed as a geometric tail
LATTICE_SPACING_M = 12_000.0


def atmosphere(settings: AtmosphereSettings) -> Atmosphere:
    """The workflow's atmosphere as the model takes it."""
    return Atmosphere.of(
        aerosol_500nm=settings.aerosol_500nm,
        aerosol_380nm=settings.aerosol_380nm,
        water_vapour_cm=settings.water_vapour_cm,
        ozone_cm=settings.ozone_cm,
    )


def lattice_step(cell_m: float) -> int:
    """Cells between nodes: the largest power of two that keeps nodes within 12 km."""
    step = 1
    while step * 2 * cell_m <= LATTICE_SPACING_M and step < 4096:
        step *= 2
    return step


@dataclass(frozen=True)
class SkyLattice:
    """Moments of a day's clear-sky insolation at nodes x levels, and the sun's zenith angle at each scene's time."""

    row_step: int
    col_step: int
    moments: NDArray[np.float64]
    zenith_deg: tuple[NDArray[np.float64], ...]

    def flux_arguments(self) -> dict[str, Any]:
        return {
            "moments": self.moments,
            "row_step": self.row_step,
            "col_step": self.col_step,
            "level0_m": LOWEST_M,
            "level_step_m": LEVEL_STEP_M,
        }


def levels_m() -> NDArray[np.float64]:
    return np.arange(LOWEST_M, HIGHEST_M + LEVEL_STEP_M / 2, LEVEL_STEP_M)


def sky_lattice(
    day: dt.date,
    times_unix_s: tuple[float, ...],
    longitude_deg: Lattice,
    latitude_deg: Lattice,
    settings: Insolation,
) -> SkyLattice:
    """Work out sun and sky at the nodes of a tile.

    Parameters
    ----------
    day : the UTC day whose 24-hour mean is wanted.
    times_unix_s : acquisition time of each scene. [s]
    longitude_deg, latitude_deg : (nr, nc) nodes of the tile. [deg]
    """
    lon, lat = longitude_deg.values, latitude_deg.values
    moments = day_moments(day, lat.ravel(), lon.ravel(), levels_m(), atmosphere(settings.atmosphere), orders=ORDERS)
    zenith = tuple(np.asarray(sun.position(time, lat, lon)[0]) for time in times_unix_s)
    return SkyLattice(
        longitude_deg.row_step,
        longitude_deg.col_step,
        moments.reshape(*lon.shape, len(levels_m()), ORDERS),
        zenith,
    )


def insolation_facts(settings: Insolation) -> list[object]:
    """What the insolation numbers depend on beside the albedo, the elevation and the place."""
    return [
        settings.source,
        list(map(float, atmosphere(settings.atmosphere).numbers())),
        sun.solar_constant_wm2(),
        [LOWEST_M, HIGHEST_M, LEVEL_STEP_M, ORDERS, LATTICE_SPACING_M],
    ]
