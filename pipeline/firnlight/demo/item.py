"""How does an item tell what a demo scene is and how its numbers become reflectance?"""

from __future__ import annotations

import datetime as dt
import hashlib
import json
from pathlib import Path
from typing import Any

from firnlight.core.tables import load_table
from firnlight.demo.layout import Tile, corners
from firnlight.demo.spectra import BANDS, SENSOR
from firnlight.io.ground import centre_lonlat, to_lonlat
from firnlight.physics import sun

QUALITY_BITS = (
    ("fill", "no data"),
    ("cloud", "cloud"),
    ("cloud_shadow", "shadow of a cloud"),
    ("snow", "snow"),
    ("water", "open water"),
    ("saturated", "a band is saturated"),
)


def _checksum(path: Path) -> str:
    with path.open("rb") as stream:
        return "1220" + hashlib.file_digest(stream, "sha256").hexdigest()  # multihash of sha2-256


def _asset(path: Path, title: str) -> dict[str, Any]:
    return {
        "href": f"./{path.name}",
        "type": "image/tiff; application=geotiff",
        "title": title,
        "roles": ["data"],
        "file:size": path.stat().st_size,
        "file:checksum": _checksum(path),
    }


def write_item(folder: Path, tile: Tile, scene: str, time: dt.datetime) -> Path:
    """Write the STAC item of a scene whose rasters lie in `folder`."""
    numbers = load_table("demo_spectra").row("sensor")
    lon, lat = to_lonlat(tile.grid.crs).transform(*corners(tile.grid))
    ring = [[round(float(x), 6), round(float(y), 6)] for x, y in zip(lon, lat, strict=True)]
    assets = {}
    for band in BANDS:
        about = {
            "name": band,
            "eo:common_name": band,
            "data_type": "uint16",
            "nodata": 0,
            "unit": "1",
            "raster:scale": numbers["scale"],
            "raster:offset": numbers["offset"],
        }
        assets[band] = {**_asset(folder / f"{band}.tif", f"surface reflectance, {band}"), "bands": [about]}
    fields = [
        {
            "name": name,
            "offset": bit,
            "length": 1,
            "description": meaning,
            "classes": [
                {"value": 0, "name": f"not_{name}"},
                {"value": 1, "name": name, "description": meaning},
            ],
        }
        for bit, (name, meaning) in enumerate(QUALITY_BITS)
    ]
    quality = _asset(folder / "quality.tif", "quality mask") | {"bands": [{"name": "quality", "data_type": "uint8"}]}
    assets["quality"] = quality | {
        "roles": ["cloud", "cloud-shadow", "snow-ice"],
        "classification:bitfields": fields,
    }
    versions = (
        "projection/v2.0.0",
        "raster/v2.0.0",
        "eo/v2.0.0",
        "view/v1.0.0",
        "grid/v1.1.0",
        "file/v2.1.0",
        "classification/v2.0.0",
        "version/v1.2.0",
    )
    middle_lon, middle_lat = centre_lonlat(tile.grid)
    zenith, azimuth, _ = sun.position(time.timestamp(), middle_lat, middle_lon)
    properties = {
        "datetime": f"{time:%Y-%m-%dT%H:%M:%SZ}",
        "created": f"{time + dt.timedelta(days=1):%Y-%m-%dT%H:%M:%SZ}",
        "version": "1",
        "platform": "morrowfell-demo",
        "instruments": [SENSOR],
        "gsd": tile.grid.dx,
        "license": "CC0-1.0",
        "description": "invented reflectance of an invented place",
        "grid:code": tile.name,
        "proj:code": tile.grid.crs,
        "proj:transform": list(tile.grid.transform),
        "proj:shape": list(tile.grid.shape),
        "view:sun_elevation": round(90 - float(zenith), 4),
        "view:sun_azimuth": round(float(azimuth), 4),
    }
    item = {
        "type": "Feature",
        "stac_version": "1.1.0",
        "stac_extensions": [f"https://stac-extensions.github.io/{v}/schema.json" for v in versions],
        "id": scene,
        "geometry": {"type": "Polygon", "coordinates": [[*ring, ring[0]]]},
        "bbox": [
            min(p[0] for p in ring),
            min(p[1] for p in ring),
            max(p[0] for p in ring),
            max(p[1] for p in ring),
        ],
        "properties": properties,
        "links": [],
        "assets": assets,
    }
    path = folder / f"{scene}.json"
    path.write_text(json.dumps(item, indent=1) + "\n", encoding="utf-8")
    return path
