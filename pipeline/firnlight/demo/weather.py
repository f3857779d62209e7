"""What weather does the demo area have between its overpasses, on a coarse grid and at its station?"""

from __future__ import annotations

import csv
import datetime as dt
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5netcdf
import numpy as np
from numpy.typing import NDArray

from firnlight.core.tables import load_table
from firnlight.demo import sky, terrain
from firnlight.demo.layout import Extent
from firnlight.demo.noise import chance, value_noise
from firnlight.demo.plane import from_plane, to_plane
from firnlight.demo.truth import air
from firnlight.physics import sun
from firnlight.physics.clearsky import bird, global_horizontal, pressure_pa

Doubles = NDArray[np.float64]
STATION = "high_camp"
STATION_PLANE_M = (-450.0, 750.0)
SPACINGS_DEG = (0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0)  # of the grid: the finest with at most MOST_NODES a side
MOST_NODES = 12
WEATHER_STEP_S, INSOLATION_STEP_S, STATION_STEP_S = 10_800, 3_600, 1_800
SUBSTEPS = 4
COARSE_ALBEDO = 0.5  # of the ground under the coarse grid, invented
SPELL_S, CLOUD_SPELL_S = 4.5 * 86_400, 1.3 * 86_400
STATION_COLUMNS = (
    "time_utc",
    "sw_down_wm2",
    "sw_up_wm2",
    "lw_down_wm2",
    "air_temperature_c",
    "relative_humidity_percent",
)
STATION_NOISE = {"sw": 0.01, "lw": 2.0, "air": 0.1, "humidity": 1.0}  # relative; W m-2; K; percent


def _row(name: str) -> dict[str, Any]:
    return load_table("demo_spectra").row(name)


@dataclass(frozen=True)
class Climate:
    """The weather of all days; the cloud at an overpass is the one its scenes show."""

    seed: int
    days: tuple[sky.Day, ...]
    covers: tuple[float, ...]

    @classmethod
    def of(cls, seed: int, days: list[sky.Day], around: Extent) -> Climate:
        x, y = np.meshgrid(np.linspace(around.left, around.right, 60), np.linspace(around.bottom, around.top, 60))
        limit = _row("sky")["cloud_limit"]
        covers = [float((sky.opacity(x.astype(np.float32), y.astype(np.float32), day) > limit).mean()) for day in days]
        return cls(seed, tuple(days), tuple(covers))

    def cloud_fraction(self, unix_s: Doubles) -> Doubles:
        """Share of the sky under cloud at these times: (n,). [1]"""
        cover = 0.45 + 0.75 * _in_time(unix_s, CLOUD_SPELL_S, self.seed, "cloudy")
        for day, seen in zip(self.days, self.covers, strict=True):
            near = np.clip(1.5 - np.abs(unix_s - day.time.timestamp()) / 21_600, 0, 1)
            cover = cover + near * (seen - cover)
        return np.clip(cover, 0, 1)

    def temperature_k(self, unix_s: Doubles, elevation_m: Doubles) -> Doubles:
        """Air temperature: (n, places). [K]"""
        numbers = _row("weather")
        days = [dt.datetime.fromtimestamp(float(t), dt.UTC).date() for t in unix_s]
        low, high = numbers["sea_level_k"]
        season = low + (high - low) * np.array([sky.season_progress(day) for day in days])
        hour = np.mod(unix_s / 3600 - 2.4, 24)  # by the sun at 36 W
        season += numbers["daily_k"] * np.cos((hour - 14) * np.pi / 12) * (1 - 0.6 * self.cloud_fraction(unix_s))
        season += numbers["spell_k"] * _in_time(unix_s, SPELL_S, self.seed, "warmth")
        return np.asarray(season[:, np.newaxis] - numbers["lapse_k_per_m"] * elevation_m)

    def vapour_pressure_pa(self, unix_s: Doubles, temperature_k: Doubles) -> Doubles:
        """Vapour pressure over air of this temperature: (n, places). [Pa]"""
        dry, wet = _row("weather")["humidity"]
        humidity = dry + (wet - dry) * self.cloud_fraction(unix_s)
        return np.asarray(humidity[:, np.newaxis] * saturation_pa(temperature_k))

    def insolation_wm2(self, starts_s: Doubles, step_s: float, lon: Doubles, lat: Doubles, elevation_m: Doubles) -> Doubles:
        """Mean over each step of what arrives under the clouds: (n, places). [W m-2]"""
        total = np.zeros((starts_s.size, lon.size))
        for part in range(SUBSTEPS):
            times = starts_s + (part + 0.5) * step_s / SUBSTEPS
            zenith, _, distance = sun.position(times[:, np.newaxis], lat, lon)
            clear = bird(zenith, sun.solar_constant_wm2() / distance**2, pressure_pa(elevation_m), air())
            row = _row("kasten_czeplak_1980")
            through = 1 - row["factor"] * self.cloud_fraction(times) ** row["power"]
            total += global_horizontal(clear.black_ground_wm2, clear.sky_albedo, COARSE_ALBEDO) * through[:, np.newaxis]
        return total / SUBSTEPS


def _in_time(unix_s: Doubles, length_s: float, *facts: object) -> Doubles:
    """A smooth random course in about -1..1. (n,)"""
    hours = np.asarray((unix_s - 1.9e9) / 3600, np.float32)  # small enough for single precision
    course = value_noise(hours, np.zeros_like(hours), length_s / 3600, *facts)
    return np.asarray(course + 0.4 * value_noise(hours, np.zeros_like(hours), length_s / 3600 / 3.3, *facts), np.float64)


def saturation_pa(temperature_k: Doubles) -> Doubles:
    """Saturation vapour pressure over water, any shape. [Pa]"""
    row = _row("saturation_fao56")
    celsius = temperature_k - 273.15
    return np.asarray(row["pa"] * np.exp(row["a"] * celsius / (celsius + row["b"])))


def longwave_down_wm2(temperature_k: Doubles, vapour_pa: Doubles, cloud: Doubles) -> Doubles:
    """Longwave from the sky; one shape. [W m-2]"""
    row = _row("brutsaert_1975")
    clear = row["factor"] * (vapour_pa / 100 / temperature_k) ** row["power"]
    emissivity = np.minimum(clear * (1 + row["cloud"] * cloud**2), 1.0)
    return np.asarray(emissivity * row["stefan_boltzmann"] * temperature_k**4)


def _spans(days: list[sky.Day]) -> list[tuple[dt.date, dt.date]]:
    """First and last day of each season, one day wider on both sides."""
    spans: dict[int, tuple[dt.date, dt.date]] = {}
    for one in days:
        date = one.time.date()
        first, _ = spans.get(date.year, (date, date))
        spans[date.year] = (first, date)
    return [(first - dt.timedelta(days=1), last + dt.timedelta(days=1)) for first, last in spans.values()]


def _times(days: list[sky.Day], step_s: int) -> Doubles:
    """Start of each step through all seasons. [s]"""
    parts = []
    for first, last in _spans(days):
        start = dt.datetime.combine(first, dt.time(), dt.UTC).timestamp()
        steps = np.arange(((last - first).days + 1) * 86_400 // step_s, dtype=np.float64)
        parts.append(start + steps * step_s)
    return np.concatenate(parts)


def _grid(around: Extent) -> tuple[Doubles, Doubles]:
    """Longitudes and latitudes of the coarse grid, which holds all tiles. [deg]"""
    x = np.array([around.left, around.right, around.right, around.left])
    lon, lat = from_plane(x, np.array([around.bottom, around.bottom, around.top, around.top]), "EPSG:4326")
    for step in SPACINGS_DEG:
        axes = [np.arange(np.floor(v.min() / step) - 1, np.ceil(v.max() / step) + 2) * step for v in (lon, lat)]
        if max(axes[0].size, axes[1].size) <= MOST_NODES:
            break
    return np.round(axes[0], 6), np.round(axes[1], 6)


def _coarse_elevation(lon: Doubles, lat: Doubles) -> Doubles:
    """Height of the coarse grid's ground: half way from the true one to the mean. (places,) [m]"""
    x, y = to_plane(lon, lat, "EPSG:4326")
    height = terrain.elevation_m(x.astype(np.float32), y.astype(np.float32)).astype(np.float64)
    return np.round(0.5 * height + 0.5 * _row("weather")["forecast_height_m"])


def _write_grid(
    path: Path,
    times: Doubles,
    step_s: int,
    lon: Doubles,
    lat: Doubles,
    fields: dict[str, tuple[Doubles, dict[str, str]]],
) -> None:
    epoch = dt.datetime.fromtimestamp(float(times[0]), dt.UTC)
    hours = (times - times[0]) / 3600
    with h5netcdf.File(path, "w") as file:
        file.attrs["Conventions"] = "CF-1.11"
        file.attrs["title"] = "invented weather of the invented Morrowfell snowfields"
        file.attrs["source"] = "forward model of the firnlight demo"
        file.dimensions = {"time": times.size, "latitude": lat.size, "longitude": lon.size, "bounds": 2}
        axes = {
            "time": (
                hours,
                {
                    "standard_name": "time",
                    "units": f"hours since {epoch:%Y-%m-%d %H:%M:%S}",
                    "calendar": "standard",
                    "axis": "T",
                },
            ),
            "latitude": (lat, {"standard_name": "latitude", "units": "degrees_north", "axis": "Y"}),
            "longitude": (lon, {"standard_name": "longitude", "units": "degrees_east", "axis": "X"}),
        }
        for name, (values, attributes) in axes.items():
            variable = file.create_variable(name, (name,), np.float64, data=values)
            variable.attrs.update(attributes)
        if any("time: mean" in attributes.get("cell_methods", "") for _, attributes in fields.values()):
            file.variables["time"].attrs["bounds"] = "time_bounds"
            bounds = np.stack([hours, hours + step_s / 3600], axis=1)
            file.create_variable("time_bounds", ("time", "bounds"), np.float64, data=bounds)
        for name, (values, attributes) in fields.items():
            axes_of = ("time", "latitude", "longitude")[3 - values.ndim :]
            variable = file.create_variable(
                name, axes_of, np.float32, data=values.astype(np.float32), compression="gzip", shuffle=True
            )
            variable.attrs.update(attributes)


def write_weather(folder: Path, climate: Climate, around: Extent) -> list[Path]:
    """Write weather.nc (every three hours) and insolation.nc (hourly means from their `time` on)."""
    lon, lat = _grid(around)
    all_lon, all_lat = (a.ravel() for a in np.meshgrid(lon, lat))
    height = _coarse_elevation(all_lon, all_lat)
    days = list(climate.days)

    def shaped(values: Doubles, step: float) -> Doubles:
        return (np.round(values / step) * step).reshape(-1, lat.size, lon.size)

    times = _times(days, WEATHER_STEP_S)
    temperature = climate.temperature_k(times, height)
    vapour = climate.vapour_pressure_pa(times, temperature)
    cloud = np.repeat(climate.cloud_fraction(times)[:, np.newaxis], height.size, axis=1)
    altitude = (height.reshape(lat.size, lon.size), {"standard_name": "surface_altitude", "units": "m"})
    point = {"cell_methods": "time: point"}
    _write_grid(
        folder / "weather.nc",
        times,
        WEATHER_STEP_S,
        lon,
        lat,
        {
            "air_temperature": (
                shaped(temperature, 0.05),
                {"standard_name": "air_temperature", "units": "K", **point},
            ),
            "vapour_pressure": (
                shaped(vapour, 1.0),
                {"standard_name": "water_vapor_partial_pressure_in_air", "units": "Pa", **point},
            ),
            "cloud_fraction": (
                shaped(cloud, 0.01),
                {"standard_name": "cloud_area_fraction", "units": "1", **point},
            ),
            "surface_altitude": altitude,
        },
    )
    hours = _times(days, INSOLATION_STEP_S)
    arriving = climate.insolation_wm2(hours, INSOLATION_STEP_S, all_lon, all_lat, height)
    name = "surface_downwelling_shortwave_flux_in_air"
    about = {"standard_name": name, "units": "W m-2", "cell_methods": "time: mean"}
    _write_grid(folder / "insolation.nc", hours, INSOLATION_STEP_S, lon, lat, {name: (shaped(arriving, 0.5), about)})
    return [folder / "weather.nc", folder / "insolation.nc"]


def station_place() -> dict[str, float]:
    """Where the station stands: longitude, latitude [deg]; elevation, height of its sensors [m]."""
    x, y = (np.array([[v]], np.float32) for v in STATION_PLANE_M)
    lon, lat = from_plane(np.array([STATION_PLANE_M[0]]), np.array([STATION_PLANE_M[1]]), "EPSG:4326")
    return {
        "longitude": round(float(lon[0]), 6),
        "latitude": round(float(lat[0]), 6),
        "elevation_m": round(float(terrain.elevation_m(x, y)[0, 0]), 1),
        "sensor_height_m": 2.0,
    }


def write_station(path: Path, climate: Climate) -> Path:
    """Write half-hourly means (time is the start) of the scenes' days and the days before and after."""
    place = station_place()
    lon, lat, height = (np.array([place[n]]) for n in ("longitude", "latitude", "elevation_m"))
    x, y = (np.array([[v]], np.float32) for v in STATION_PLANE_M)
    ground = terrain.ground_at(x, y)
    wanted = sorted({one.time.date() + dt.timedelta(days=n) for one in climate.days for n in (-1, 0, 1)})
    path.parent.mkdir(parents=True, exist_ok=True)
    with path.open("w", newline="", encoding="utf-8") as stream:
        out = csv.writer(stream, lineterminator="\n")
        out.writerow(STATION_COLUMNS)
        for date in wanted:
            noon = dt.datetime.combine(date, dt.time(15), dt.UTC)
            albedo = float(sky.surface(ground, sky.overpass(noon, climate.seed)).albedo[0, 0])
            start = dt.datetime.combine(date, dt.time(), dt.UTC).timestamp()
            times: Doubles = start + np.arange(86_400 // STATION_STEP_S, dtype=np.float64) * STATION_STEP_S
            middle = times + STATION_STEP_S / 2
            error = chance(climate.seed, STATION, date).standard_normal((5, times.size))
            down = climate.insolation_wm2(times, STATION_STEP_S, lon, lat, height)[:, 0]
            up = down * albedo * (1 + STATION_NOISE["sw"] * error[1])
            air_k = climate.temperature_k(middle, height)[:, 0] + STATION_NOISE["air"] * error[2]
            vapour = climate.vapour_pressure_pa(middle, air_k[:, np.newaxis])[:, 0]
            longwave = longwave_down_wm2(air_k, vapour, climate.cloud_fraction(middle)) + STATION_NOISE["lw"] * error[3]
            humidity = np.clip(100 * vapour / saturation_pa(air_k) + STATION_NOISE["humidity"] * error[4], 1, 100)
            down = down * (1 + STATION_NOISE["sw"] * error[0])
            for n, time in enumerate(times):
                stamp = f"{dt.datetime.fromtimestamp(float(time), dt.UTC):%Y-%m-%dT%H:%M:%SZ}"
                values = (down[n], up[n], longwave[n], air_k[n] - 273.15, humidity[n])
                out.writerow([stamp, *(f"{v:.1f}" for v in values)])
    return path
