"""Which tiles, dates and regions does the demo area have?"""

from __future__ import annotations

import datetime as dt
import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyogrio
import pyogrio.raw
import shapely
from numpy.typing import NDArray

from firnlight.core.grid import Grid
from firnlight.demo.noise import chance
from firnlight.demo.plane import from_plane, to_plane
from firnlight.demo.terrain import CELL_M

ZONES = ("EPSG:32624", "EPSG:32625")  # west and east of 36 W
PITCH = 0.8  # tile to tile, as a share of a tile: neighbours share a fifth
LAST_YEAR = 2031
FIRST_DAY, LAST_DAY = (3, 10), (7, 18)  # of the season, month and day
OVERPASS = dt.time(12, 55)  # UTC, about 10:30 by the sun at 36 W
MADE_ON = "2031-08-01T00:00:00.000Z"  # written into files that want a date


@dataclass(frozen=True)
class Tile:
    """A tile of the demo: its name and its grid."""

    name: str
    grid: Grid


@dataclass(frozen=True)
class Extent:
    """Rectangle of the plane around all tiles. [m]"""

    left: float
    right: float
    bottom: float
    top: float


def _letters(number: int) -> str:
    text = ""
    while number >= 0:
        text = chr(ord("A") + number % 26) + text
        number = number // 26 - 1
    return text


def tiles(count: int, size: int) -> list[Tile]:
    """`count` tiles of size x size cells: the first half west of 36 W, the rest east of it, in rows."""
    west = (count + 1) // 2
    high = math.ceil(math.sqrt(west))
    pitch_cells = max(1, round(size * PITCH))
    made: list[Tile] = []
    for zone, number in ((0, west), (1, count - west)):
        side = -0.5 if zone == 0 else 0.5
        x, y = from_plane(np.array([side * pitch_cells * CELL_M if count > 1 else 0.0]), np.array([0.0]), ZONES[zone])
        col0, row0 = round(x[0] / CELL_M) - size // 2, round(y[0] / CELL_M) + size // 2
        for n in range(number):
            row, col = n % high, n // high
            left = col0 + (col if zone else -col) * pitch_cells
            top = row0 - row * pitch_cells + (high - 1) * pitch_cells // 2
            grid = Grid(ZONES[zone], left * CELL_M, top * CELL_M, CELL_M, CELL_M, size, size)
            made.append(Tile(f"FELL-{_letters(len(made))}", grid))
    return made


def corners(grid: Grid) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """x and y of the corners of a tile, counter-clockwise from the lower left. [CRS units]"""
    x = np.array([grid.left, grid.right, grid.right, grid.left])
    return x, np.array([grid.bottom, grid.bottom, grid.top, grid.top])


def extent(area: list[Tile]) -> Extent:
    """The plane under all tiles."""
    points = [to_plane(*corners(tile.grid), tile.grid.crs) for tile in area]
    x, y = np.concatenate([p[0] for p in points]), np.concatenate([p[1] for p in points])
    return Extent(float(x.min()), float(x.max()), float(y.min()), float(y.max()))


def overpasses(scenes: int, years: int) -> list[dt.datetime]:
    """Acquisition times, evenly through the season of each year; one scene a year falls in its middle."""
    times = []
    for year in range(LAST_YEAR - years + 1, LAST_YEAR + 1):
        first, last = dt.date(year, *FIRST_DAY), dt.date(year, *LAST_DAY)
        shares = [0.5] if scenes == 1 else [n / (scenes - 1) for n in range(scenes)]
        days = sorted({first + dt.timedelta(days=round(share * (last - first).days)) for share in shares})
        times += [
            dt.datetime.combine(day, OVERPASS, dt.UTC) + dt.timedelta(seconds=day.toordinal() * 37 % 240) for day in days
        ]
    return times


def outside_swath(x_m: NDArray[np.float32], y_m: NDArray[np.float32], around: Extent, number: int) -> NDArray[np.bool_]:
    """Cells that an overpass did not reach: every third one leaves out a strip in the west; any shape."""
    if number % 3 != 1:
        return np.zeros(x_m.shape, bool)
    edge = around.left + 0.06 * (around.right - around.left)
    return np.asarray(x_m + np.float32(0.12) * y_m < np.float32(edge))


def _wavy(start: tuple[float, float], stop: tuple[float, float], sway: float, name: str) -> Any:
    """A line from start to stop that sways aside by a share of its length."""
    t = np.linspace(0, 1, 41)
    phase = chance("outline", name).random(2) * 2 * np.pi
    aside = sway * (np.sin(2 * np.pi * t + phase[0]) + 0.5 * np.sin(6 * np.pi * t + phase[1])) * np.sin(np.pi * t)
    dx, dy = stop[0] - start[0], stop[1] - start[1]
    return np.column_stack([start[0] + t * dx - aside * dy, start[1] + t * dy + aside * dx])


def _region_shapes(around: Extent) -> list[tuple[str, str, str, Any]]:
    """id, name, parent and plane polygon of each region; the parts of the basin share their borders."""
    width, height = around.right - around.left, around.top - around.bottom
    cx, cy = (around.left + around.right) / 2, (around.bottom + around.top) / 2
    angle = np.linspace(0, 2 * np.pi, 121)[:-1]
    squareness = 1 / (np.abs(np.cos(angle)) ** 4 + np.abs(np.sin(angle)) ** 4) ** 0.25
    reach = squareness * (0.45 + 0.02 * np.sin(3 * angle + 1) + 0.012 * np.sin(7 * angle))
    basin = shapely.Polygon(np.column_stack([cx + width * reach * np.cos(angle), cy + height * reach * np.sin(angle)]))
    far = max(width, height)
    water = _wavy((cx - far, cy + 0.03 * height), (cx + far, cy - 0.02 * height), 0.02, "watershed")
    cross = _wavy((cx + 0.04 * width, cy - far), (cx - 0.05 * width, cy + far), 0.02, "divide")
    north = shapely.Polygon([*water, (cx + far, cy + 2 * far), (cx - far, cy + 2 * far)])
    west = shapely.Polygon([*cross, (cx - 2 * far, cy + far), (cx - 2 * far, cy - far)])
    upper, lower = shapely.intersection(basin, north), shapely.difference(basin, north)
    parts = [
        ("upper_fell", "Upper Fell", shapely.intersection(upper, west)),
        ("ravel_horn", "Ravel Horn", shapely.difference(upper, west)),
        ("ashen_wood", "Ashen Wood", shapely.intersection(lower, west)),
        ("tarn_hollow", "Tarn Hollow", shapely.difference(lower, west)),
    ]
    line = shapely.LineString(
        _wavy((cx - 0.4 * width, cy - 0.1 * height), (cx + 0.4 * width, cy + 0.15 * height), 0.05, "traverse")
    )
    traverse = line.buffer(0.06 * height, quad_segs=4)
    return [
        # made of its parts, so that their borders meet the basin's in the same points
        ("morrowfell", "Morrowfell", "", shapely.union_all([shape for *_, shape in parts])),
        *((ident, name, "morrowfell", shape) for ident, name, shape in parts),
        ("high_traverse", "High Traverse", "", traverse),
    ]


def write_regions(path: Path, around: Extent) -> None:
    """Write the basin, its parts and a strip across all tiles, in longitude and latitude."""
    rows = _region_shapes(around)
    moved = [
        shapely.transform(shape, lambda xy: np.column_stack(from_plane(xy[:, 0], xy[:, 1], "EPSG:4326")))
        for *_, shape in rows
    ]
    columns = [np.array([row[n] for row in rows], object) for n in range(3)]
    columns[2][columns[2] == ""] = None
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": MADE_ON})
    try:
        pyogrio.raw.write(
            path,
            np.array(shapely.to_wkb(moved), object),
            columns,
            ["id", "name", "parent"],
            layer="regions",
            driver="GPKG",
            geometry_type="MultiPolygon",
            crs="EPSG:4326",
            promote_to_multi=True,
        )
    finally:
        pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": None})
