"""What do the weather files say of a tile's day? Read at the tile's lattice nodes, with a key of what was read."""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import xxhash
from numpy.typing import NDArray

from firnlight.core.errors import InputProblem, SettingsProblem
from firnlight.core.lattice import Lattice
from firnlight.core.settings import GridField, GridFile, Station, StationSource, SuppliedGrid, WeatherGrid, Workflow
from firnlight.io.grid_time import DayMissing
from firnlight.io.grids import DayField, cell_edges, field_at, on_grid, read_day, read_static_field
from firnlight.io.station_series import read_series
from firnlight.physics import humidity
from firnlight.physics.clearsky import Atmosphere
from firnlight.physics.day_sky import ClearIndex, Cloud, index_of_intervals
from firnlight.stages.insolation import SkyInputs, SourceCells, atmosphere
from firnlight.stages.longwave import Air

Floats = NDArray[np.float64]
AROUND_DEG = 0.5  # read beside the tile
BRIGHTEST_INDEX = 2.0  # of a mean over an interval: snow and cloud between them can double a clear sky over black ground
_AIR = {
    "aerosol_500nm": "aerosol_optical_depth", "aerosol_380nm": "aerosol_optical_depth",
    "water_vapour_cm": "water_vapour", "ozone_cm": "ozone",
}  # fmt: skip
_WHOLE_DAY = np.array([[0.0, 24.0]])


@dataclass(frozen=True, eq=False)
class Weather:
    """A day's weather at the lattice nodes of a tile.

    Attributes
    ----------
    sky, air : for insolation and for longwave; `sky_key` and `air_key` tell their numbers.
    gaps : what the files lack.
    cells : of a supplied grid that is to be spread over slopes.
    """

    sky: SkyInputs
    air: Air | None
    sky_key: str
    air_key: str
    gaps: tuple[str, ...] = ()
    cells: SourceCells | None = None


class _Reader:
    """Reads fields of one day at the nodes of one tile and remembers what was missing."""

    def __init__(self, workflow: Workflow, day: dt.date, lon: Lattice, lat: Lattice) -> None:
        self.workflow, self.day = workflow, day
        self.lon, self.lat = lon.values.ravel(), lat.values.ravel()
        west, east = float(self.lon.min()), float(self.lon.max())
        south, north = float(self.lat.min()), float(self.lat.max())
        self.box = west - AROUND_DEG, south - AROUND_DEG, east + AROUND_DEG, north + AROUND_DEG
        self.gaps: list[str] = []

    def path(self, written: str) -> Path | None:
        """The day's file; None where a file of one day is not there yet.

        Raises
        ------
        SettingsProblem : the one file of all days is not there.
        """
        named = written.replace("{date}", self.day.isoformat()).replace("{year}", str(self.day.year))
        path = self.workflow.path(named)
        if path.exists():
            return path
        if named != written:
            self.gaps.append(f"no file {path.name}; what needs it stays empty")
            return None
        raise SettingsProblem(
            str(self.workflow.file), "weather file", f"no file {path}", "a file of grids", "correct the path"
        )

    def field(self, file: GridFile, variable: str | None, quantity: str) -> DayField | None:
        """One variable of the day; None where the file has nothing of it."""
        path = self.path(file.grid)
        if path is None:
            return None
        try:
            return _read_day(path, _stamp(path), variable, self.day, quantity, self.box, _told(file, quantity))
        except DayMissing as problem:
            self.gaps.append(f"{path.name}: {problem.found}; what needs it stays empty")
            return None

    def at_nodes(self, field: DayField | None) -> tuple[Floats, Floats]:
        """Edges (k, 2) and values (k, n); one NaN step where there is no field."""
        if field is None:
            return _WHOLE_DAY, np.full((1, self.lon.size), np.nan)
        values = field_at(field, self.lon, self.lat)
        return field.edges_h, values

    def told(self, name: str, values: Floats) -> Floats:
        """The same values, with a word where they have gaps."""
        if np.isnan(values).any():
            self.gaps.append(f"{name} has gaps; what needs it stays empty")
        return values

    def sunlit(self, name: str, index: ClearIndex) -> ClearIndex:
        """A clear-sky index without what no sky gives: there it is a gap, and told."""
        too_bright = index.index > BRIGHTEST_INDEX
        if too_bright.any():
            self.gaps.append(
                f"{name} is up to {np.nanmax(index.index):.1f} times the clear sky: check its place, clock and units; "
                "those hours are left out, and what needs them stays empty"
            )
            return replace(index, index=np.where(too_bright, np.nan, index.index))
        self.told(name, index.index)
        return index

    def static(self, file: GridFile, variable: str | None, quantity: str) -> Floats:
        path = self.path(file.grid)
        if path is None:
            return np.full(self.lon.size, np.nan)
        field = _read_static(path, _stamp(path), variable, self.day, quantity, self.box, _told(file, quantity))
        return self.told(field.name, np.asarray(field_at(field, self.lon, self.lat)[0]))

    def height(self, file: GridFile, elevation: str | GridField | None) -> Floats | None:
        """Height of the weather's own ground; None where it is not told. [m]"""
        if elevation is None:
            return None
        if isinstance(elevation, GridField):
            return self.static(elevation, elevation.variable, "surface_altitude")
        return self.static(GridField(grid=file.grid, crs=file.crs), elevation, "surface_altitude")


def _stamp(path: Path) -> tuple[int, int]:
    found = path.stat()
    return found.st_size, found.st_mtime_ns


def _told(file: GridFile, quantity: str) -> tuple[tuple[str, Any], ...]:
    """What the settings tell of a file that it does not tell itself, for one quantity."""
    if isinstance(file, WeatherGrid):  # units by quantity, since the file holds several
        of_each: dict[Any, str] = dict(file.units)
        units = of_each.get(quantity)
    else:
        units = file.units if isinstance(file, GridField) else None
    return (
        ("units", units), ("label", file.label), ("step_hours", file.step_hours), ("accumulated", file.accumulated),
        ("starts_hours", file.starts_hours), ("crs", file.crs),
    )  # fmt: skip


@lru_cache(maxsize=64)
def _read_day(
    path: Path, stamp: tuple[int, int], variable: str | None, day: dt.date, quantity: str, box: Any,
    told: tuple[tuple[str, Any], ...],
) -> DayField:  # fmt: skip
    return read_day(path, variable, day, quantity, around=box, **dict(told))


@lru_cache(maxsize=64)
def _read_static(
    path: Path, stamp: tuple[int, int], variable: str | None, day: dt.date, quantity: str, box: Any,
    told: tuple[tuple[str, Any], ...],
) -> DayField:  # fmt: skip
    own = dict(told)
    return read_static_field(path, variable, day, quantity, around=box, units=own["units"], crs=own["crs"])


@lru_cache(maxsize=8)
def _station_series(path: Path, stamp: tuple[int, int], station: Station) -> Any:
    return read_series(
        path, station.sw_down, "flux", units=station.units, label=station.label, time_column=station.time,
        utc_offset_hours=station.utc_offset_h,
    )  # fmt: skip


def needs_weather(workflow: Workflow) -> bool:
    """Whether any file of weather is named in the settings."""
    settings = workflow.insolation
    gridded = any(isinstance(value, GridField) for _, value in settings.atmosphere)
    return gridded or settings.source != "clear-sky" or settings.cloud is not None or workflow.longwave is not None


def day_weather(workflow: Workflow, day: dt.date, longitude_deg: Lattice, latitude_deg: Lattice) -> Weather:
    """Read a tile's day.

    Parameters
    ----------
    longitude_deg, latitude_deg : the tile's lattice nodes. [deg]

    Returns
    -------
    Weather   A day, an hour or a place that the files lack is NaN there and named in `gaps`.

    Raises
    ------
    InputProblem : a file cannot be read or understood. SettingsProblem : a file is not there.
    """
    if not needs_weather(workflow):
        return Weather(SkyInputs(), None, "", "")
    reader = _Reader(workflow, day, longitude_deg, latitude_deg)
    air, numbers = _atmosphere(reader)
    settings = workflow.insolation
    cloud, supplied, cells = None, None, None
    if settings.cloud is not None:
        one = settings.cloud
        edges, values = reader.at_nodes(reader.field(one, one.variable, "cloud_fraction"))
        cloud = Cloud(edges.mean(axis=1), np.clip(reader.told("cloud fraction", values), 0, 1))
    elif isinstance(settings.source, StationSource):
        supplied = _from_station(reader, settings.source.station, air)
    elif isinstance(settings.source, SuppliedGrid):
        grid = settings.source
        field = reader.field(grid, grid.variable, "flux")
        edges, values = reader.at_nodes(field)
        if field is not None and settings.terrain:
            cells = _cells(field, longitude_deg, latitude_deg)
        height = reader.height(grid, grid.elevation)
        place = Atmosphere(*(one[:, np.newaxis] for one in numbers)) if numbers else air  # type: ignore[arg-type]
        at_m = np.zeros(reader.lon.size) if height is None else height
        supplied = index_of_intervals(day, edges, np.maximum(values, 0), reader.lat, reader.lon, at_m, place)
        supplied = replace(reader.sunlit("the supplied insolation", supplied), by_height=height is not None)
    sky = SkyInputs(numbers, cloud, supplied)
    night = _air(reader, workflow.longwave.source) if workflow.longwave is not None else None
    gaps = tuple(dict.fromkeys(reader.gaps))
    return Weather(sky, night, _sky_key(sky, cells), "" if night is None else _digest(vars(night).values()), gaps, cells)


def _cells(field: DayField, lon: Lattice, lat: Lattice) -> SourceCells:
    x, y = on_grid(field, lon.values, lat.values)
    return SourceCells(
        Lattice(lon.row_step, lon.col_step, x), Lattice(lat.row_step, lat.col_step, y), *cell_edges(field)
    )  # fmt: skip


def _atmosphere(reader: _Reader) -> tuple[Atmosphere, tuple[Floats, ...] | None]:
    settings = reader.workflow.insolation.atmosphere
    air = atmosphere(settings)
    fields = {name: value for name, value in settings if isinstance(value, GridField)}
    if not fields:
        return air, None
    found = {name: reader.static(one, one.variable, _AIR[name]) for name, one in fields.items()}
    if "aerosol_500nm" in found and settings.aerosol_380nm is None:
        ratio = Atmosphere.of(1.0, 1.0, 0.3).aerosol_380nm
        found["aerosol_380nm"] = found["aerosol_500nm"] * ratio
    names = ("aerosol_500nm", "aerosol_380nm", "water_vapour_cm", "ozone_cm", "forward_scatter")
    ones = np.ones(reader.lon.size)
    return air, tuple(found.get(name, number * ones) for name, number in zip(names, air.numbers(), strict=True))


def _from_station(reader: _Reader, name: str, air: Atmosphere) -> ClearIndex:
    station = reader.workflow.stations[name]
    path = reader.path(station.file)
    if path is None:
        return index_of_intervals(
            reader.day, _WHOLE_DAY, np.full((1, reader.lon.size), np.nan), reader.lat, reader.lon,
            np.zeros(reader.lon.size), air,
        )  # fmt: skip
    series = _station_series(path, _stamp(path), station)
    one = series.day(reader.day)
    lat, lon, height = (np.array([v]) for v in (station.latitude, station.longitude, station.elevation_m))
    found = index_of_intervals(reader.day, one.edges_h, np.maximum(one.values, 0)[:, np.newaxis], lat, lon, height, air)
    found = reader.sunlit(f"station {name}", found)
    return replace(found, index=np.repeat(found.index, reader.lon.size, axis=1))


def _air(reader: _Reader, grid: WeatherGrid) -> Air:
    def read(variable: str, quantity: str) -> tuple[Floats, Floats]:
        edges, values = reader.at_nodes(reader.field(grid, variable, quantity))
        return edges, reader.told(variable, values)

    edges, temperature = read(grid.air_temperature, "air_temperature")
    turn: dict[str, Callable[[Floats], Floats]] = {
        "vapour_pressure": lambda values: values,
        "dew_point": humidity.vapour_from_dew_point,
        "relative_humidity": lambda values: humidity.vapour_from_relative_humidity(values, temperature),
    }
    quantity, change = next((q, f) for q, f in turn.items() if getattr(grid, q) is not None)
    others = {quantity: getattr(grid, quantity)}
    if grid.cloud_fraction is not None:
        others["cloud_fraction"] = grid.cloud_fraction
    found = {}
    for name, variable in others.items():
        their_edges, values = read(variable, name)
        if their_edges.shape != edges.shape or not np.allclose(their_edges, edges):
            if np.isnan(values).all() or np.isnan(temperature).all():
                values = np.full(temperature.shape, np.nan)
            else:
                raise InputProblem(
                    grid.grid, variable, "other times than air temperature", "the times of air temperature",
                    "deliver all weather on the same times",
                )  # fmt: skip
        found[name] = values
    cloud = found.get("cloud_fraction")
    height = reader.height(grid, grid.elevation)
    return Air(
        np.diff(edges, axis=1)[:, 0], temperature, np.maximum(change(found[quantity]), 0),
        None if cloud is None else np.clip(cloud, 0, 1), height,
    )  # fmt: skip


def _sky_key(sky: SkyInputs, cells: SourceCells | None) -> str:
    parts: list[Any] = [*(sky.air or ())]
    if sky.cloud is not None:
        parts += [sky.cloud.hours, sky.cloud.fraction]
    if sky.supplied is not None:
        parts += [sky.supplied.edges_h, sky.supplied.index, np.array(sky.supplied.by_height)]
    if cells is not None:
        parts += [cells.x.values, cells.y.values, cells.edges_x, cells.edges_y]
    return _digest(parts) if parts else ""


def _digest(arrays: Iterable[Any]) -> str:
    """A digest of all numbers."""
    digest = xxhash.xxh3_128()
    for one in arrays:
        if one is not None:
            digest.update(str(one.shape).encode())
            digest.update(np.ascontiguousarray(one).tobytes())
    return digest.hexdigest()
