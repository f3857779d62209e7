"""STAC items of our own maps: what lies in a tile-day, made from what, and the keys to rebuild the ledger."""

from __future__ import annotations

import datetime as dt
import json
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid
from firnlight.core.layers import layer, layer_names
from firnlight.io.atomic import write_text

_EXTENSIONS = (
    "https://stac-extensions.github.io/projection/v2.0.0/schema.json",
    "https://stac-extensions.github.io/file/v2.1.0/schema.json",
    "https://stac-extensions.github.io/processing/v1.2.0/schema.json",
)
_XXH3_128 = "e4e70210"  # multihash code of xxh3-128 and its length


@dataclass(frozen=True)
class Asset:
    """One file of a tile-day."""

    name: str
    path: Path
    key: str
    size: int
    digest: str


def _asset(one: Asset, folder: Path) -> dict[str, Any]:
    # the item itself is small and made from the rest: it has no digest of itself
    entry: dict[str, Any] = {
        "href": os.path.relpath(one.path, folder),
        "file:size": one.size,
        "file:checksum": _XXH3_128 + one.digest.removeprefix("xxh3:"),
        "firnlight:key": one.key,
    }
    if one.name not in layer_names():
        return {
            **entry,
            "type": "application/vnd.apache.parquet",
            "roles": ["metadata"],
            "title": "totals of the tile-day",
        }
    about = layer(one.name)
    bands = []
    for part in about.parts:
        band: dict[str, Any] = {"name": part, "data_type": about.dtype, "unit": about.unit}
        band |= {"raster:scale": about.step, "raster:offset": 0.0}
        if about.nodata is not None:
            band["nodata"] = about.nodata
        bands.append(band)
    return {
        **entry, "type": "image/tiff; application=geotiff; profile=cloud-optimized", "roles": ["data"],
        "title": about.long_name, "bands": bands,
    }  # fmt: skip


def product_item(
    path: Path, tile: str, day: dt.date, grid: Grid, outline: Sequence[tuple[float, float]], key: str,
    assets: Sequence[Asset], sources: Mapping[str, str], chain: Mapping[str, int],
) -> bool:  # fmt: skip
    """Write the item of a tile-day unless the same bytes are there already; True when written.

    Parameters
    ----------
    outline : corners (longitude, latitude), counter-clockwise from the lower left. [deg]
    sources : scene id -> path of the scene's item.
    chain : stage name -> version.
    """
    lon, lat = [x for x, _ in outline], [y for _, y in outline]
    start = dt.datetime(day.year, day.month, day.day)
    item = {
        "type": "Feature",
        "stac_version": "1.1.0",
        "stac_extensions": list(_EXTENSIONS),
        "id": f"{tile}_{day.isoformat()}",
        "geometry": {"type": "Polygon", "coordinates": [[list(corner) for corner in (*outline, outline[0])]]},
        "bbox": [min(lon), min(lat), max(lon), max(lat)],
        "properties": {
            "datetime": None,
            "start_datetime": start.isoformat() + "Z",
            "end_datetime": (start + dt.timedelta(days=1, seconds=-1)).isoformat() + "Z",
            "proj:code": grid.crs if ":" in grid.crs and len(grid.crs) < 20 else None,
            "proj:shape": [grid.rows, grid.cols],
            "proj:transform": list(grid.transform),
            "processing:software": {"firnlight": "0.1.0"},
            "firnlight:tile": tile,
            "firnlight:key": key,
            "firnlight:stages": dict(chain),
        },
        "links": [
            {
                "rel": "derived_from",
                "href": os.path.relpath(source, path.parent),
                "type": "application/geo+json",
                "title": scene,
            }
            for scene, source in sorted(sources.items())
        ],
        "assets": {one.name: _asset(one, path.parent) for one in assets},
    }
    text = json.dumps(item, indent=1, ensure_ascii=False) + "\n"
    if path.is_file() and path.read_text(encoding="utf-8") == text:
        return False
    write_text(path, text)
    return True


@dataclass(frozen=True)
class StoredItem:
    """What an item of the store says of its tile-day."""

    tile: str
    day: dt.date
    key: str
    scenes: tuple[str, ...]
    assets: tuple[Asset, ...]


def read_product_item(path: Path) -> StoredItem:
    """Read an item of the store, for rebuilding the ledger.

    Raises
    ------
    InputProblem : not one of ours, or damaged.
    """
    try:
        item = json.loads(path.read_text(encoding="utf-8"))
        assets = tuple(
            Asset(
                name, path.parent / entry["href"], entry["firnlight:key"], entry["file:size"],
                "xxh3:" + entry["file:checksum"].removeprefix(_XXH3_128),
            )
            for name, entry in item["assets"].items()
        )  # fmt: skip
        properties = item["properties"]
        return StoredItem(
            properties["firnlight:tile"], dt.date.fromisoformat(properties["start_datetime"][:10]),
            properties["firnlight:key"],
            tuple(link["title"] for link in item["links"] if link["rel"] == "derived_from"), assets,
        )  # fmt: skip
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise InputProblem(
            str(path),
            "item",
            str(error),
            "an item of this store",
            "delete the file: the next night makes it again",
        ) from error
