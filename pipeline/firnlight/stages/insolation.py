"""Sun and sky on a coarse lattice of the tile, from which the kernels take each cell's insolation."""

from __future__ import annotations

import datetime as dt
import threading
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import HIGHEST_M, LOWEST_M, Window
from firnlight.core.lattice import Lattice
from firnlight.core.layers import layer
from firnlight.core.settings import AtmosphereSettings, Insolation
from firnlight.physics import sun
from firnlight.physics.angle_albedo import mixed_shape, path_shape
from firnlight.physics.clearsky import Atmosphere, day_times_unix_s
from firnlight.physics.clearsky_fast import day_light
from firnlight.physics.day_sky import ClearIndex, Cloud, DaySky, Places, sun_paths
from firnlight.physics.light import SunPaths, slope_tables
from firnlight.physics.light_fast import flat_block, slope_block
from firnlight.stages.albedo import stored_fill
from firnlight.stages.stage import Stage

INSOLATION = Stage(
    "insolation", 3, ("albedo", "elevation", "ground", "terrain", "weather"), ("insolation", "terrain_light"),
    ("insolation",),
)  # fmt: skip

SLOPE_PARALLEL = Stage("slope-parallel insolation", 1, ("insolation", "terrain"), ("insolation_slope",), ())

# heights of the levels between which the kernel interpolates; the curvature of insolation with height over one
# step stays under 0.01 W m-2 (tests/stages/test_insolation.py)
LEVEL_STEP_M = 250.0  # from LOWEST_M to HIGHEST_M
ORDERS = 4  # powers of albedo in the ground-sky series; the rest is summed as a geometric tail
LATTICE_SPACING_M = 12_000.0
DIRECTIONS = 32  # of the horizon
AROUND_M = 500.0  # side of the coarse cells whose albedo stands for the surroundings
PATH_HEIGHTS = 5
LEAST_CELL_M2 = 4_000_000  # of a supplied grid: smaller ones do not hold the slopes that give and take from each other
SHAPE_HEIGHT_M = 1500.0  # where direct and diffuse light are weighed for the albedo of a day; they hardly change with it


@dataclass(frozen=True, eq=False)
class SkyInputs:
    """What is known of a day's air at the lattice nodes, beside the settings; None = not asked for."""

    air: tuple[NDArray[np.float64], ...] | None = None  # the five numbers of an Atmosphere, (n,) each
    cloud: Cloud | None = None
    supplied: ClearIndex | None = None

    @property
    def plain(self) -> bool:
        """A cloudless sky of one air: the fast kernel knows it."""
        return self.air is None and self.cloud is None and self.supplied is None

    def at_centres(self, shape: tuple[int, int]) -> SkyInputs:
        """The same at the centres of the lattice cells: means of their four nodes."""

        def centre(values: NDArray[np.float64]) -> NDArray[np.float64]:
            v = values.reshape(*values.shape[:-1], *shape)
            mean = (v[..., 1:, 1:] + v[..., 1:, :-1] + v[..., :-1, 1:] + v[..., :-1, :-1]) / 4
            return np.asarray(mean.reshape(*values.shape[:-1], -1))

        return SkyInputs(
            None if self.air is None else tuple(centre(one) for one in self.air),
            None if self.cloud is None else Cloud(self.cloud.hours, centre(self.cloud.fraction)),
            None if self.supplied is None else replace(self.supplied, index=centre(self.supplied.index)),
        )


def atmosphere(settings: AtmosphereSettings) -> Atmosphere:
    """The workflow's atmosphere as the model takes it, where it is one for all places."""
    one = {name: value for name, value in settings if isinstance(value, (int, float))}
    return Atmosphere.of(
        aerosol_500nm=one.get("aerosol_500nm", 0.1),
        aerosol_380nm=one.get("aerosol_380nm"),
        water_vapour_cm=one.get("water_vapour_cm", 1.0),
        ozone_cm=one.get("ozone_cm", 0.3),
    )


def lattice_step(cell_m: float) -> int:
    """Cells between nodes: the largest power of two that keeps nodes within 12 km."""
    step = 1
    while step * 2 * cell_m <= LATTICE_SPACING_M and step < 4096:
        step *= 2
    return step


def around_step(cell_m: float) -> int:
    """Cells along a coarse cell of the surroundings."""
    return max(1, round(AROUND_M / cell_m))


@dataclass(frozen=True, eq=False)
class SourceCells:
    """The cells of a supplied grid under a tile, whose energy must be kept when their light is spread over terrain.

    Attributes
    ----------
    x, y : positions of the tile's nodes in the grid's CRS, (nr, nc) each.
    edges_x, edges_y : (nx + 1,), (ny + 1,) borders of the grid's cells, ascending.
    """

    x: Lattice
    y: Lattice
    edges_x: NDArray[np.float64]
    edges_y: NDArray[np.float64]

    @property
    def count(self) -> int:
        return (self.edges_x.size - 1) * (self.edges_y.size - 1)

    def numbers(self, window: Window) -> NDArray[np.intp]:
        """Which cell of the grid holds the centre of each cell of a window: row x nx + column; outside, the nearest."""
        col = np.searchsorted(self.edges_x, self.x.at(window), side="right") - 1
        row = np.searchsorted(self.edges_y, self.y.at(window), side="right") - 1
        rows, cols = self.edges_y.size - 1, self.edges_x.size - 1
        return np.asarray(np.clip(row, 0, rows - 1) * cols + np.clip(col, 0, cols - 1))


class CellMeans:
    """Gathers the insolation of all ground in each cell of a supplied grid, flat and on slopes; sums are whole numbers."""

    def __init__(self, cells: SourceCells) -> None:
        self._cells = cells
        self._sums = np.zeros((3, cells.count), np.int64)
        self._lock = threading.Lock()

    def add(self, flat: NDArray[np.int16], on_slopes: NDArray[np.int16], area_m2: NDArray[np.int64], window: Window) -> None:
        """Add the cells of a window that have both."""
        fill = stored_fill("insolation")
        known = (flat != fill) & (on_slopes != fill)
        number, area = self._cells.numbers(window)[known], area_m2[known]
        sums = np.zeros_like(self._sums)
        np.add.at(sums[0], number, flat[known] * area)
        np.add.at(sums[1], number, on_slopes[known] * area)
        np.add.at(sums[2], number, area)
        with self._lock:
            self._sums += sums

    def factors(self) -> NDArray[np.float64]:
        """What each grid cell's light on slopes must be multiplied by to hold the energy of its flat ground.

        A cell that the tile cuts, or one so small that a single slope fills it, tells nothing of that: it takes the
        factor of all ground of the tile.
        """
        flat, on_slopes, area = self._sums
        whole = flat.sum() / on_slopes.sum() if on_slopes.sum() > 0 else 1.0
        enough = (area >= LEAST_CELL_M2) & (2 * area >= area.max()) & (on_slopes > 0)
        return np.where(enough, flat / np.where(enough, on_slopes, 1), whole)


def rescaled(values: NDArray[np.int16], factors: NDArray[np.float64], numbers: NDArray[np.intp]) -> NDArray[np.int16]:
    """Stored fluxes of a window times the factor of their grid cell."""
    one = layer("insolation")
    assert one.nodata is not None
    light = values * factors[numbers]
    known = values != one.nodata
    steps = np.minimum(np.floor(np.where(known, light, 0.0) + 0.5), one.high)
    return np.where(known, steps, one.nodata).astype(np.int16)


@dataclass(frozen=True, eq=False)
class SkyLattice:
    """A day's light at nodes x levels, the sun's zenith angle at each scene's time and, on slopes, the sun's paths."""

    moments: Lattice
    zenith_deg: tuple[NDArray[np.float64], ...]
    paths: SunPaths | None = None
    directions: tuple[int, ...] = ()  # horizon directions that the paths need
    shapes: tuple[Lattice, ...] = ()  # how albedo goes with the sun, per scene: see angle_shapes; () = not asked for

    @property
    def row_step(self) -> int:
        return self.moments.row_step

    @property
    def col_step(self) -> int:
        return self.moments.col_step


def levels_m() -> NDArray[np.float64]:
    return np.arange(LOWEST_M, HIGHEST_M + LEVEL_STEP_M / 2, LEVEL_STEP_M)


def sky_lattice(
    day: dt.date,
    times_unix_s: tuple[float, ...],
    longitude_deg: Lattice,
    latitude_deg: Lattice,
    settings: Insolation,
    inputs: SkyInputs = SkyInputs(),
    heights_m: tuple[float, float] | None = None,
    carried: bool = False,
) -> SkyLattice:
    """Work out sun and sky at the nodes of a tile.

    Parameters
    ----------
    day : the UTC day whose 24-hour mean is wanted.
    times_unix_s : acquisition time of each scene. [s]
    longitude_deg, latitude_deg : (nr, nc) nodes of the tile. [deg]
    inputs : of the day, at the same nodes.
    heights_m : lowest and highest ground of the tile; None: flat ground, no sun paths. [m]
    carried : whether albedo is to be carried from the overpass through the day.
    """
    lon, lat = longitude_deg.values, latitude_deg.values
    air = atmosphere(settings.atmosphere)
    if inputs.plain:
        light = day_light(day, lat.ravel(), lon.ravel(), levels_m(), air, orders=ORDERS)
    else:
        light = DaySky(day, _places(lat.ravel(), lon.ravel(), levels_m(), air, inputs)).moments(ORDERS)
    zenith = tuple(np.asarray(sun.position(time, lat, lon)[0]) for time in times_unix_s)
    moments = Lattice(longitude_deg.row_step, longitude_deg.col_step, light.reshape(*lon.shape, len(levels_m()), ORDERS + 1))
    shapes = tuple(_angle_shapes(day, times_unix_s, longitude_deg, latitude_deg, air, inputs)) if carried else ()
    if heights_m is None:
        return SkyLattice(moments, zenith, shapes=shapes)
    shape = lon.shape[0] - 1, lon.shape[1] - 1
    centre_lat, centre_lon = (_centres(v) for v in (lat, lon))
    heights = np.linspace(*heights_m, PATH_HEIGHTS) if heights_m[1] > heights_m[0] else heights_m[0] + np.arange(5.0)
    sky = DaySky(day, _places(centre_lat, centre_lon, heights, air, inputs.at_centres(lon.shape)))
    paths, directions = sun_paths(sky, shape, grid_north_deg(lat, lon), DIRECTIONS)
    return SkyLattice(moments, zenith, paths, directions, shapes)


def _angle_shapes(
    day: dt.date, times_unix_s: tuple[float, ...], longitude_deg: Lattice, latitude_deg: Lattice, air: Atmosphere,
    inputs: SkyInputs,
) -> Iterator[Lattice]:  # fmt: skip
    """How albedo goes with the sun at the nodes, for each scene: snow then and through the day, ground then and so.

    Where the weather of the day has a gap, a cloudless day stands for it: the albedo was seen all the same.
    """
    lon, lat = longitude_deg.values.ravel(), latitude_deg.values.ravel()
    height = np.array([SHAPE_HEIGHT_M])
    actual = DaySky(day, _places(lat, lon, height, air, inputs))
    cloudless = DaySky(day, _places(lat, lon, height, air, SkyInputs(inputs.air)))
    times = day_times_unix_s(day)

    def course(sky: DaySky, method: str) -> NDArray[np.float64]:
        light = [sky.at(float(time)) for time in times]
        zenith = np.stack([np.minimum(sun.position(float(t), lat, lon)[0], 90.0) for t in times], axis=1)
        direct, diffuse = (
            np.stack([getattr(one, name)[:, 0] for one in light], 1) for name in ("direct_wm2", "diffuse_wm2")
        )
        return path_shape(zenith, direct, diffuse, method)

    whole = {method: _known_or(course(actual, method), course(cloudless, method)) for method in ("gardner_sharp", "ross_li")}
    for time in times_unix_s:
        zenith = np.minimum(sun.position(time, lat, lon)[0], 90.0)
        shares = []
        for sky in (actual, cloudless):
            light = sky.at(time)
            total = (light.direct_wm2 + light.diffuse_wm2)[:, 0]
            shares.append(np.divide(light.diffuse_wm2[:, 0], total, out=np.ones_like(total), where=total != 0))
        share = _known_or(*shares)
        columns = []
        for method in ("gardner_sharp", "ross_li"):
            columns += [mixed_shape(zenith, share, method), whole[method]]
        yield Lattice(
            longitude_deg.row_step, longitude_deg.col_step, np.stack(columns, 1).reshape(*longitude_deg.values.shape, 4)
        )


def _known_or(one: NDArray[np.float64], other: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.where(np.isnan(one), other, one)


def _places(
    lat: NDArray[np.float64], lon: NDArray[np.float64], heights: NDArray[np.float64], air: Atmosphere, inputs: SkyInputs
) -> Places:
    if inputs.air is not None:
        air = Atmosphere(*(one[:, np.newaxis] for one in inputs.air))  # type: ignore[arg-type]
    return Places(lat, lon, heights, air, inputs.cloud, inputs.supplied)


def _centres(v: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray((v[1:, 1:] + v[1:, :-1] + v[:-1, 1:] + v[:-1, :-1]).ravel() / 4)


def grid_north_deg(latitude_deg: NDArray[np.float64], longitude_deg: NDArray[np.float64]) -> NDArray[np.float64]:
    """Bearing of grid north at the centre of each lattice cell, clockwise from true north: (cells,). [deg]"""
    lat, lon = latitude_deg, longitude_deg
    north = (lat[:-1, :-1] + lat[:-1, 1:] - lat[1:, :-1] - lat[1:, 1:]) / 2
    east = (lon[:-1, :-1] + lon[:-1, 1:] - lon[1:, :-1] - lon[1:, 1:]) / 2
    east = east * np.cos(np.radians(_centres(lat))).reshape(east.shape)
    return np.asarray(np.degrees(np.arctan2(east, north)).ravel())


def flat_insolation(
    albedo: NDArray[np.int16], elevation_m: NDArray[np.float32], window: Window, sky: SkyLattice
) -> NDArray[np.int16]:
    """Insolation of a window of flat ground."""
    out = np.empty(albedo.shape, np.int16)
    flat_block(
        albedo, elevation_m, window.row, window.col, sky.moments.values, sky.row_step, sky.col_step, LOWEST_M,
        LEVEL_STEP_M, np.int16(stored_fill("insolation")), float(layer("insolation").high), out,
    )  # fmt: skip
    return out


@dataclass(frozen=True, eq=False)
class Relief:
    """Static terrain of a window: stored slope, aspect, sky view (y, x), horizon codes (directions, y, x)."""

    slope: NDArray[np.int16]
    aspect: NDArray[np.int16]
    sky_view: NDArray[np.int16]
    codes: NDArray[np.uint8]


def slope_insolation(
    seen: NDArray[np.bool_], elevation_m: NDArray[np.float32], relief: Relief, around: NDArray[np.float64],
    step: int, window: Window, sky: SkyLattice,
) -> dict[str, NDArray[np.int16]]:  # fmt: skip
    """Insolation of a window with slopes, and the light from terrain in it."""
    assert sky.paths is not None
    p = sky.paths
    out: dict[str, Any] = {name: np.empty(seen.shape, np.int16) for name in ("insolation", "terrain_light")}
    tangent, sine, cosine = slope_tables()
    slope_block(
        seen, elevation_m, relief.slope, relief.aspect, relief.sky_view, relief.codes, around, step,
        window.row, window.col, sky.moments.values, sky.row_step, sky.col_step, LOWEST_M, LEVEL_STEP_M,
        p.beam, p.flat_beam, p.sun, p.sun_code, p.bin0, p.bin1, p.bin_share, p.follows, p.height0_m, p.height_span_m,
        tangent, sine, cosine, np.int16(stored_fill("insolation")), float(layer("insolation").high), len(tangent) - 1,
        out["insolation"], out["terrain_light"],
    )  # fmt: skip
    return out


def without_files(settings: object) -> object:
    """Settings as plain data without the paths of files: what is in those counts, not their names."""
    if isinstance(settings, dict):
        return {name: without_files(value) for name, value in settings.items() if name != "grid"}
    return settings


def slope_parallel(insolation: NDArray[np.int16], slope: NDArray[np.int16]) -> NDArray[np.int16]:
    """Stored insolation per unit of map area to that per unit of the inclined surface: times the cosine of the slope."""
    fill = stored_fill("insolation")
    tangent, _, _ = slope_tables()
    cosine = 1.0 / np.sqrt(1.0 + tangent.astype(np.float64) ** 2)
    along = np.floor(insolation * cosine[np.clip(slope, 0, len(tangent) - 1)] + 0.5)
    return np.where(insolation == fill, fill, along).astype(np.int16)


def insolation_facts(settings: Insolation) -> list[object]:
    """What the insolation numbers depend on beside the albedo, the elevation, the weather and the place."""
    return [
        without_files(
            settings.model_dump(mode="json", exclude={"relative_uncertainty", "local_uncertainty", "slope_parallel"})
        ),
        list(map(float, atmosphere(settings.atmosphere).numbers())),
        sun.solar_constant_wm2(),
        [LOWEST_M, HIGHEST_M, LEVEL_STEP_M, ORDERS, LATTICE_SPACING_M, DIRECTIONS, AROUND_M, PATH_HEIGHTS],
    ]
