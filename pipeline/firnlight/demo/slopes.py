"""How much light and longwave do the slopes of a demo tile truly get and keep on a day?

The answer that the product is held against, so worked out on other ways than the product's: horizons by marching through
the true ground, every few minutes of sun, weather at each cell's own height, and errors of the sky drawn as stated.
"""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import Grid
from firnlight.core.tables import load_table
from firnlight.demo import terrain
from firnlight.demo.noise import Floats, chance, value_noise
from firnlight.demo.plane import TilePlane, from_plane, to_plane
from firnlight.demo.truth import LEVELS_M, air
from firnlight.demo.weather import Climate, longwave_down_wm2
from firnlight.physics import sun
from firnlight.physics.clearsky import bird, global_horizontal, pressure_pa

Doubles = NDArray[np.float64]
LARGEST_CELLS = 512  # rows or columns of a tile whose slopes are followed; larger ones have the truth of albedo alone
AROUND_M = 10_000.0  # ground outside the tile that can cast a shadow into it
AZIMUTHS = 96
STEP_S = 300.0
GROWTH = 1.05  # of the distance from one sample of a march to the next
NEAR_M, WIDE_M = 500.0, 2000.0  # half sides of the ground that lights a slope, and that lights the sky above
MELTING_K = 273.15


def _row(name: str) -> dict[str, Any]:
    return load_table("demo_spectra").row(name)


def true_albedo(x_m: Floats, y_m: Floats, spectral: Floats, seed: int, day: dt.date) -> Floats:
    """Albedo of the ground with what six bands cannot tell of its spectrum: any shape. [1]"""
    row = _row("spectral_rest")
    wave = row["wavelength_m"]
    rest = value_noise(x_m, y_m, wave, "spectral rest", seed, day) * np.float32(row["size"] / _spread(wave))
    return np.asarray(np.clip(spectral + rest, np.float32(0.01), np.float32(0.98)), np.float32)


@cache
def _spread(wavelength_m: float) -> float:
    """Standard deviation of a noise field, so that errors can be given the size that is stated."""
    x, y = (v.astype(np.float32) for v in np.meshgrid(np.linspace(0, 2e5, 500), np.linspace(0, 2e5, 500)))
    return float(value_noise(x, y, wavelength_m, "spread").std())


def _box_mean(values: Doubles, reach: int) -> Doubles:
    """Mean over the square of cells within `reach`, of what lies inside the tile."""
    for axis in (0, 1):
        size = values.shape[axis]
        total = np.concatenate([np.zeros_like(values.take([0], axis)), np.cumsum(values, axis)], axis)
        last, first = np.minimum(np.arange(size) + reach + 1, size), np.maximum(np.arange(size) - reach, 0)
        count = (last - first).reshape((-1, 1) if axis == 0 else (1, -1))
        values = (total.take(last, axis) - total.take(first, axis)) / count
    return values


@dataclass(frozen=True, eq=False)
class Slopes:
    """The relief of a tile: (rows, cols), horizons (AZIMUTHS, rows, cols) in rad from grid north clockwise.

    `east` and `north` are rises per run, `view` the share of the sky that reaches the tilted cell.
    """

    grid: Grid
    x_m: Floats
    y_m: Floats
    elevation_m: Doubles
    east: Doubles
    north: Doubles
    horizon: Floats
    view: Doubles


def slopes_of(plane: TilePlane) -> Slopes:
    """March through the ground of a tile and around it."""
    grid, margin = plane.grid, int(np.ceil(AROUND_M / plane.grid.dx))
    ground = terrain.ground_rows(plane, 0, grid.rows)
    x, y = plane.at(np.arange(-margin, grid.rows + margin), np.arange(-margin, grid.cols + margin))
    height = terrain.elevation_m(x, y)
    inside = height[margin:-margin, margin:-margin]
    distances = [1.0]
    while (farther := distances[-1] + max(0.5, (GROWTH - 1) * distances[-1])) < margin - 1:
        distances.append(farther)
    horizon = np.empty((AZIMUTHS, grid.rows, grid.cols), np.float32)
    for k in range(AZIMUTHS):
        a = 2 * np.pi * k / AZIMUTHS
        steepest = np.zeros_like(inside)
        for d in distances:
            down, across = -d * np.cos(a), d * np.sin(a)
            i, j = int(np.floor(down)), int(np.floor(across))
            fi, fj = np.float32(down - i), np.float32(across - j)
            r, c = margin + i, margin + j
            at = [height[r + u : r + u + grid.rows, c + v : c + v + grid.cols] for u in (0, 1) for v in (0, 1)]
            top, bottom = at[0] + (at[1] - at[0]) * fj, at[2] + (at[3] - at[2]) * fj
            rise = top + (bottom - top) * fi - inside
            np.maximum(steepest, rise * np.float32(1 / (d * grid.dx)), out=steepest)
        horizon[k] = np.arctan(steepest)
    east, north = ground.east.astype(np.float64), ground.north.astype(np.float64)
    return Slopes(
        grid, ground.x_m, ground.y_m, ground.elevation_m.astype(np.float64), east, north, horizon,
        _view(horizon, east, north),
    )  # fmt: skip


def _view(horizon: Floats, east: Doubles, north: Doubles) -> Doubles:
    """Integral of cos(incidence) over the sky above the horizon and above the cell's own plane, over pi."""
    up = 1 / np.sqrt(1 + east**2 + north**2)
    total = np.zeros(east.shape)
    for k, angle in enumerate(horizon):
        a = 2 * np.pi * k / AZIMUTHS
        lean = -(east * np.sin(a) + north * np.cos(a)) * up
        low = np.maximum(angle, np.arctan2(-lean, up))
        total += up * np.cos(low) ** 2 / 2 + lean * ((np.pi / 2 - low) / 2 - np.sin(2 * low) / 4)
    return np.asarray(total * 2 * np.pi / AZIMUTHS / np.pi)


@dataclass(frozen=True, eq=False)
class Fluxes:
    """The truth of a day, 24-hour means per unit of map area: (rows, cols). [W m-2]"""

    insolation: Doubles
    net_longwave: Doubles


def day_fluxes(slopes: Slopes, day: dt.date, seed: int, albedo: Floats, snow: NDArray[np.bool_], climate: Climate) -> Fluxes:
    """Light and longwave of a day over a tile.

    Parameters
    ----------
    albedo, snow : (rows, cols) of the true ground; where snow covers most of a cell.
    """
    grid = slopes.grid
    cx, cy = to_plane(np.array([(grid.left + grid.right) / 2]), np.array([(grid.top + grid.bottom) / 2]), grid.crs)
    lon, lat = from_plane(cx, cy, "EPSG:4326")
    turn = _grid_north(grid)
    start = dt.datetime(day.year, day.month, day.day, tzinfo=dt.UTC).timestamp()
    level = np.interp(slopes.elevation_m, LEVELS_M, np.arange(LEVELS_M.size))
    low = np.minimum(level.astype(int), LEVELS_M.size - 2)
    part = level - low

    def at_height(values: Doubles) -> Doubles:
        return np.asarray(values[low] + (values[low + 1] - values[low]) * part)

    white = albedo.astype(np.float64)
    near, wide = (_box_mean(white, round(reach / grid.dx)) for reach in (NEAR_M, WIDE_M))
    beam, spread, whole = (np.zeros(white.shape) for _ in range(3))
    steps = int(86_400 / STEP_S)
    for step in range(steps):
        time = start + (step + 0.5) * STEP_S
        zenith, bearing, distance = (float(v[0]) for v in sun.position(time, lat, lon))
        if zenith >= 90:
            continue
        sky = bird(np.full(LEVELS_M.size, zenith), sun.solar_constant_wm2() / distance**2, pressure_pa(LEVELS_M), air())
        z, a = np.radians(zenith), np.radians(bearing - turn)
        facing = np.maximum(np.cos(z) - np.sin(z) * (np.sin(a) * slopes.east + np.cos(a) * slopes.north), 0)
        place = (a / (2 * np.pi) % 1) * AZIMUTHS
        first = int(place) % AZIMUTHS
        ridge = slopes.horizon[first] + (slopes.horizon[(first + 1) % AZIMUTHS] - slopes.horizon[first]) * (place % 1)
        beam += at_height(sky.direct_normal_wm2) * facing * (np.pi / 2 - z > ridge)
        black, direct = at_height(sky.black_ground_wm2), at_height(sky.direct_horizontal_wm2)
        lit = global_horizontal(black, at_height(sky.sky_albedo), wide)
        spread += lit - direct
        whole += lit
    beam, spread, whole = beam / steps, spread / steps, whole / steps
    widen = np.sqrt(1 + slopes.east**2 + slopes.north**2)
    seen_ground = 1 - slopes.view
    from_ground = seen_ground * widen * near * whole * slopes.view / (1 - near * seen_ground)
    error = 1 + _error(slopes, seed, day, "sky", _row("sky_error"))
    return Fluxes(
        (beam + spread * slopes.view * widen + from_ground) * error,
        _net_longwave(slopes, start, snow, climate) + _error(slopes, seed, day, "net longwave", _row("longwave_error")),
    )  # fmt: skip


def _net_longwave(slopes: Slopes, start: float, snow: NDArray[np.bool_], climate: Climate) -> Doubles:
    row = _row("longwave_error")
    height = slopes.elevation_m.ravel()
    total = np.zeros(height.size)
    hours: Doubles = start + (np.arange(24, dtype=np.float64) + 0.5) * 3600
    sigma = _row("brutsaert_1975")["stefan_boltzmann"]
    cover = climate.cloud_fraction(hours)
    for n in range(24):
        air_k = climate.temperature_k(hours[n : n + 1], height)
        vapour = climate.vapour_pressure_pa(hours[n : n + 1], air_k)
        down = longwave_down_wm2(air_k, vapour, cover[n : n + 1, np.newaxis])[0]
        surface = np.where(snow.ravel(), np.minimum(air_k[0], MELTING_K), air_k[0])
        total += down - sigma * surface**4
    emissivity = np.where(snow, row["emissivity_snow"], row["emissivity_ground"])
    widen = np.sqrt(1 + slopes.east**2 + slopes.north**2)
    return np.asarray(total.reshape(snow.shape) / 24 * emissivity * slopes.view * widen)


def _error(slopes: Slopes, seed: int, day: dt.date, name: str, row: dict[str, Any]) -> Doubles:
    """An error of the stated size: one draw for the day, and a field that changes over some kilometres."""
    wave = row["wavelength_m"]
    field = value_noise(slopes.x_m, slopes.y_m, wave, "error", name, seed, day).astype(np.float64) / _spread(wave)
    return np.asarray(row["local"] * field + row["shared"] * chance("error", name, seed, day).standard_normal())


def _grid_north(grid: Grid) -> float:
    """Bearing of grid north at the tile's centre, clockwise from true north. [deg]"""
    x, y = (grid.left + grid.right) / 2, (grid.top + grid.bottom) / 2
    px, py = to_plane(np.array([x, x]), np.array([y - 500, y + 500]), grid.crs)
    lon, lat = from_plane(px, py, "EPSG:4326")
    east = (lon[1] - lon[0]) * np.cos(np.radians(lat.mean()))
    return float(np.degrees(np.arctan2(east, lat[1] - lat[0])))
