"""How much sunlight does the demo's ground truly get and keep on a cloudless day?"""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import Grid
from firnlight.core.layers import layer
from firnlight.demo.noise import Floats
from firnlight.demo.plane import from_plane, to_plane
from firnlight.physics.clearsky import Atmosphere, day_mean_insolation, day_moments

# what the demo's workflow says of the air; invented, mountain air
AEROSOL_500NM, WATER_VAPOUR_CM, OZONE_CM = 0.1, 1.0, 0.3
LEVELS_M = np.arange(600.0, 3601.0, 200.0)
ALBEDOS = np.linspace(0.0, 1.0, 7)
POSITIONS = 5  # along each side of a tile
ORDERS = 8
HEIGHT_POWERS, ALBEDO_POWERS = 4, 4
WORST_WM2 = 0.03  # largest error of the fit at its nodes


def air() -> Atmosphere:
    """The demo's cloudless atmosphere."""
    return Atmosphere.of(AEROSOL_500NM, WATER_VAPOUR_CM, OZONE_CM)


@dataclass(frozen=True)
class DayInsolation:
    """A day's mean clear-sky insolation as a polynomial of place, height and albedo.

    Attributes
    ----------
    x0_m, y0_m, reach_m : place is ((x - x0) / reach, (y - y0) / reach).
    factors : (6, HEIGHT_POWERS, ALBEDO_POWERS) for 1, x, y, x^2, y^2, x y.
    """

    x0_m: float
    y0_m: float
    reach_m: float
    factors: NDArray[np.float32]

    def at(self, x_m: Floats, y_m: Floats, elevation_m: Floats, albedo: Floats) -> Floats:
        """24-hour mean on flat ground, with the light between ground and sky; all of one shape. [W m-2]"""
        scale = np.float32(1 / self.reach_m)
        x, y = (x_m - np.float32(self.x0_m)) * scale, (y_m - np.float32(self.y0_m)) * scale
        places, z = (x, y, x * x, y * y, x * y), _height(elevation_m)
        total = np.zeros_like(z)
        for k in range(ALBEDO_POWERS - 1, -1, -1):
            part = np.zeros_like(z)
            for h in range(HEIGHT_POWERS - 1, -1, -1):
                part *= z
                part += self.factors[0, h, k]
                for factor, place in zip(self.factors[1:, h, k], places, strict=True):
                    part += factor * place
            total *= albedo
            total += part
        return total


def _height(elevation_m: Floats) -> Floats:
    return np.asarray((elevation_m - np.float32(2000)) * np.float32(1 / 1400), np.float32)


def day_insolation(grid: Grid, day: dt.date) -> DayInsolation:
    """Fit a day over a tile: the clear-sky model at 5 x 5 places, every 200 m of height and 7 albedos."""
    x, y = np.meshgrid(np.linspace(grid.left, grid.right, POSITIONS), np.linspace(grid.bottom, grid.top, POSITIONS))
    px, py = to_plane(x.ravel(), y.ravel(), grid.crs)
    lon, lat = from_plane(px, py, "EPSG:4326")
    moments = day_moments(day, lat, lon, LEVELS_M, air(), ORDERS)
    wanted = day_mean_insolation(moments[:, :, np.newaxis, :], ALBEDOS)
    x0, y0 = float(px.mean()), float(py.mean())
    reach = float(max(np.abs(px - x0).max(), np.abs(py - y0).max()))
    u, v = (px - x0) / reach, (py - y0) / reach
    place = np.stack([np.ones_like(u), u, v, u * u, v * v, u * v])
    height = _height(LEVELS_M.astype(np.float32)).astype(np.float64)[:, np.newaxis] ** np.arange(HEIGHT_POWERS)
    white = ALBEDOS[:, np.newaxis] ** np.arange(ALBEDO_POWERS)
    basis = np.einsum("pn,zh,ak->nzaphk", place, height, white).reshape(wanted.size, -1)
    factors, *_ = np.linalg.lstsq(basis, wanted.ravel(), rcond=None)
    worst = float(np.abs(basis @ factors - wanted.ravel()).max())
    assert worst < WORST_WM2, f"the fit of {day} is off by {worst:.3f} W m-2"
    return DayInsolation(x0, y0, reach, factors.reshape(len(place), HEIGHT_POWERS, ALBEDO_POWERS).astype(np.float32))


def stored(name: str, values: Floats) -> NDArray[np.int16]:
    """Values as the integers of a layer of tables/layers.toml."""
    return np.rint(values * np.float32(1 / layer(name).step)).astype(np.int16)


def absorbed(albedo: NDArray[np.int16], insolation: NDArray[np.int16]) -> NDArray[np.int16]:
    """(1 - albedo) x insolation from the stored integers, rounded half up."""
    one = round(1 / layer("albedo").step)
    return ((insolation.astype(np.int32) * (one - albedo.astype(np.int32)) + one // 2) // one).astype(np.int16)
