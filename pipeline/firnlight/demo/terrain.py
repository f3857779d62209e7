"""What does the invented Morrowfell ground look like at any place: height, slope and cover?"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.demo.noise import Floats, value_noise
from firnlight.demo.plane import TilePlane

CELL_M = 30.0
OPEN_GROUND, FOREST, ROCK, GLACIER, LAKE = 1, 2, 3, 4, 5
CLASSES = {
    OPEN_GROUND: "open ground",
    FOREST: "conifer forest",
    ROCK: "bare rock",
    GLACIER: "glacier",
    LAKE: "lake",
}

# the shape of the land, invented: every height and length in m
MIDDLE_M, HALF_RANGE_M = 1780.0, 1700.0
LAKE_LEVEL_M = 760.0
BROAD = ((11_000.0, 420.0), (4_300.0, 380.0), (1_900.0, 240.0), (850.0, 110.0))  # wavelength, height
RIDGES = ((5_200.0, 620.0), (2_100.0, 420.0))
FINE = ((340.0, 38.0), (150.0, 10.0))
# x, y, radius, height, and how much shorter the bump is across than along
BUMPS = (
    (-3900.0, 900.0, 1900.0, 2300.0, 1.5),
    (2600.0, -1900.0, 2300.0, -2300.0, 2.2),
    (6300.0, 2300.0, 1500.0, 1300.0, 1.2),
)
TREELINE_M = 1750.0
BROAD_CELLS = 4  # between the nodes at which the broad shape is worked out
STEEP = 0.9  # rise over run from which ground is bare


def broad_shape(x_m: Floats, y_m: Floats) -> Floats:
    """The land without its fine relief: height over MIDDLE_M before it is bent into range; any shape. [m]"""
    height = np.zeros_like(x_m)
    for wavelength, size in BROAD:
        height += np.float32(size) * value_noise(x_m, y_m, wavelength, "land")
    for wavelength, size in RIDGES:
        ridge = value_noise(x_m, y_m, wavelength, "ridge")
        height += np.float32(size) * (np.float32(0.4) - np.sqrt(ridge * ridge + np.float32(0.02)))
    for x, y, radius, size, squeeze in BUMPS:
        along, across = (
            (x_m - np.float32(x)) * np.float32(1 / radius),
            (y_m - np.float32(y)) * np.float32(squeeze / radius),
        )
        height += np.float32(size) / (1 + along * along + across * across)
    return height


def fine_relief(x_m: Floats, y_m: Floats) -> Floats:
    """Small relief; any shape. [m]"""
    relief = np.zeros_like(x_m)
    for wavelength, size in FINE:
        relief += np.float32(size) * value_noise(x_m, y_m, wavelength, "land")
    return relief


def _bend(height: Floats) -> Floats:
    """Heights into MIDDLE_M +- HALF_RANGE_M without an edge. [m]"""
    t = height * np.float32(1 / HALF_RANGE_M)
    return np.asarray(np.float32(MIDDLE_M) + np.float32(HALF_RANGE_M) * t / np.sqrt(1 + t * t), np.float32)


@dataclass(frozen=True)
class Ground:
    """What a piece of ground is, whatever the season: (rows, cols) each.

    Attributes
    ----------
    x_m, y_m : plane coordinates. [m]
    elevation_m : height. [m]
    east, north : rise per run towards grid east and grid north. [1]
    cover : code of CLASSES.
    texture : -1..1, how much brighter the snow-free ground is than most.
    patches : -1..1, where snow lies longer (below 0) or goes sooner.
    """

    x_m: Floats
    y_m: Floats
    elevation_m: Floats
    east: Floats
    north: Floats
    cover: NDArray[np.uint8]
    texture: Floats
    patches: Floats


def elevation_m(x_m: Floats, y_m: Floats) -> Floats:
    """Height of the ground or the lake; any shape. [m]"""
    raw = _bend(broad_shape(x_m, y_m) + fine_relief(x_m, y_m))
    return np.maximum(raw, np.float32(LAKE_LEVEL_M))


def _tongues(x_m: Floats, y_m: Floats) -> Floats:
    return np.abs(value_noise(x_m, y_m, 3600.0, "ice"))


def _woods(x_m: Floats, y_m: Floats) -> Floats:
    return value_noise(x_m, y_m, 900.0, "woods")


def _cover(
    raw_m: Floats, smooth_m: Floats, slope: Floats, tongues: Floats, woods: Floats, patches: Floats
) -> NDArray[np.uint8]:
    cover = np.full(raw_m.shape, OPEN_GROUND, np.uint8)
    wooded = (raw_m < np.float32(TREELINE_M) + np.float32(150) * woods) & (woods > np.float32(-0.42))
    cover[wooded] = FOREST
    bare = (slope > np.float32(STEEP)) | (raw_m > np.float32(2350) + np.float32(250) * patches)
    cover[bare] = ROCK
    ice = smooth_m > np.float32(1900) + np.float32(4200) * np.minimum(tongues, np.float32(0.24))
    cover[ice & (slope < np.float32(STEEP))] = GLACIER
    cover[raw_m <= np.float32(LAKE_LEVEL_M)] = LAKE
    return cover


def _slopes(height_m: Floats, dx_m: float, dy_m: float) -> tuple[Floats, Floats]:
    """Rise per run to the east and to the north, one cell less on each side (Horn 1981)."""
    h = height_m
    side = h[:-2] + 2 * h[1:-1] + h[2:]
    east = (side[:, 2:] - side[:, :-2]) * np.float32(1 / (8 * dx_m))
    along = h[:, :-2] + 2 * h[:, 1:-1] + h[:, 2:]
    north = (along[:-2] - along[2:]) * np.float32(1 / (8 * dy_m))
    return east, north


def ground_rows(plane: TilePlane, first: int, last: int) -> Ground:
    """The ground of rows `first` to `last` - 1 of a tile.

    References
    ----------
    Slope: Horn B. K. P. (1981), Hill shading and the reflectance map, Proc. IEEE 69:14-47.
    """
    rows, cols = np.arange(first - 1, last + 1), np.arange(-1, plane.grid.cols + 1)
    x, y = plane.at(rows, cols)
    broad = plane.smooth(broad_shape, rows, cols, BROAD_CELLS)
    raw = _bend(broad + fine_relief(x, y))
    height = np.maximum(raw, np.float32(LAKE_LEVEL_M))
    east, north = _slopes(height, plane.grid.dx, plane.grid.dy)
    inner = (slice(1, -1), slice(1, -1))
    coarse: dict[Any, Floats] = {f: plane.smooth(f, rows[1:-1], cols[1:-1], BROAD_CELLS) for f in (_tongues, _woods)}
    x, y = np.ascontiguousarray(x[inner]), np.ascontiguousarray(y[inner])
    return _ground(x, y, height[inner], raw[inner], broad[inner], east, north, coarse[_tongues], coarse[_woods])


def ground_at(x_m: Floats, y_m: Floats) -> Ground:
    """The ground at single places, slopes over one cell to each side; (n, m). [m]"""
    d = np.float32(CELL_M)
    raw = _bend(broad_shape(x_m, y_m) + fine_relief(x_m, y_m))
    east = (elevation_m(x_m + d, y_m) - elevation_m(x_m - d, y_m)) / (2 * d)
    north = (elevation_m(x_m, y_m + d) - elevation_m(x_m, y_m - d)) / (2 * d)
    height = np.maximum(raw, np.float32(LAKE_LEVEL_M))
    return _ground(x_m, y_m, height, raw, broad_shape(x_m, y_m), east, north, _tongues(x_m, y_m), _woods(x_m, y_m))


def _ground(
    x: Floats,
    y: Floats,
    height: Floats,
    raw: Floats,
    broad: Floats,
    east: Floats,
    north: Floats,
    tongues: Floats,
    woods: Floats,
) -> Ground:
    spots = value_noise(x, y, 120.0, "spots")
    patches = np.float32(0.7) * value_noise(x, y, 420.0, "drifts") + np.float32(0.3) * spots
    slope = np.sqrt(east * east + north * north)
    cover = _cover(raw, _bend(broad), slope, tongues, woods, patches)
    return Ground(x, y, height, east, north, cover, spots, patches)


def stored_elevation(ground: Ground) -> Floats:
    """Heights as the elevation file holds them, in eighths of a metre. [m]"""
    return np.asarray(np.round(ground.elevation_m * np.float32(8)) * np.float32(0.125), np.float32)
