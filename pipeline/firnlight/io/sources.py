"""What is known of one scene: when, where, by which sensor, and in which files its bands lie?"""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass, field

from firnlight.core.grid import Grid


@dataclass(frozen=True)
class BandSource:
    """One reflectance band of a scene: reflectance = stored number x scale + offset.

    Attributes
    ----------
    path, band : the file and its band, from 1.
    scale, offset : None where the item does not tell; never None in an opened scene.
    nodata : stored number of an empty cell; None: not told, or (opened) no cell is marked so. May be NaN.
    ratio : 1: on the scene's grid; n: its cells are n times finer and are averaged; -n: n times coarser and
        are repeated. Known once opened.
    data_type : of the stored numbers, "" where not told.
    """

    path: str
    band: int
    scale: float | None
    offset: float | None
    nodata: float | None
    ratio: int = 1
    data_type: str = ""


@dataclass(frozen=True)
class QualitySource:
    """One quality band of a scene.

    Attributes
    ----------
    flags : stored number (its bits read as unsigned) -> our quality bits; 256 or 65536 entries.
    ratio : as for a reflectance band; flags of finer cells are joined.
    """

    path: str
    band: int
    flags: bytes = field(repr=False)
    ratio: int = 1


@dataclass(frozen=True)
class Scene:
    """One acquisition of one tile, as its item tells it.

    Attributes
    ----------
    datetime : aware, UTC.
    sensor : row of tables/sensors.toml.
    bands : by common name.
    sun_elevation_deg : None where the item does not tell.
    view_deg : off-nadir angle, and bearing from the point below the sensor to the scene; None where not told.
    version, created : as written in the item, "" where absent.
    checksums : path -> file:checksum of the item.
    reflectance : "surface" or "top of atmosphere".
    """

    id: str
    tile: str
    datetime: dt.datetime
    sensor: str
    platform: str
    grid: Grid
    bands: dict[str, BandSource]
    quality: tuple[QualitySource, ...]
    sun_elevation_deg: float | None
    version: str
    created: str
    item_path: str
    checksums: dict[str, str]
    reflectance: str = "surface"
    view_deg: tuple[float, float] | None = None
