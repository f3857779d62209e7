"""Tiny scenes for tests: rasters and the item that tells of them, as plain dicts that a test may spoil."""

import json
from pathlib import Path

import numpy as np
import rasterio

CRS, LEFT, TOP, CELL, ROWS, COLS = "EPSG:32624", 600000.0, 5160000.0, 30.0, 12, 18
BANDS = ("green", "red", "nir")


def write_raster(path, values, crs=CRS, cell=CELL, left=LEFT, top=TOP, **profile):
    """Write (rows, cols) or (bands, rows, cols) to a GeoTIFF; scale and offset tags where given."""
    values = np.asarray(values)
    values = values if values.ndim == 3 else values[None]
    scale, offset = profile.pop("scale", None), profile.pop("offset", None)
    path.parent.mkdir(parents=True, exist_ok=True)
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        height=values.shape[1],
        width=values.shape[2],
        count=values.shape[0],
        dtype=values.dtype,
        crs=crs,
        transform=rasterio.Affine(cell, 0, left, 0, -cell, top),
        **profile,
    ) as dataset:
        dataset.write(values)
        if scale is not None:
            dataset.scales, dataset.offsets = [scale] * values.shape[0], [offset] * values.shape[0]
    return path


def numbers(rows=ROWS, cols=COLS, dtype="uint16", seed=1):
    """Digital numbers from 1 to 200, so that they fit any type; 0 is empty."""
    return np.random.default_rng(seed).integers(1, 200, (rows, cols)).astype(dtype)


def band_asset(href, name, **changes):
    band = {
        "eo:common_name": name,
        "data_type": "uint16",
        "nodata": 0,
        "raster:scale": 0.005,
        "raster:offset": -0.1,
    }
    band = {key: value for key, value in (band | changes).items() if value is not None}
    return {"href": href, "bands": [band]}


def item_body(**properties):
    told = {
        "datetime": "2031-03-10T14:20:00Z",
        "instruments": ["oli"],
        "proj:code": CRS,
        "proj:transform": [CELL, 0, LEFT, 0, -CELL, TOP],
        "proj:shape": [ROWS, COLS],
        "grid:code": "FELL-A",
    }
    told = {key: value for key, value in (told | properties).items() if value is not None}
    return {
        "type": "Feature",
        "stac_version": "1.1.0",
        "id": "fell-a-0310",
        "properties": told,
        "links": [],
        "geometry": None,
        "assets": {name: band_asset(f"{name}.tif", name) for name in BANDS},
    }


def write_item(path: Path, body) -> Path:
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(json.dumps(body), encoding="utf-8")
    return path


def make_scene(folder: Path, body=None, **rasters):
    """Write an item and its rasters (band name -> values; random where not given); the item's path."""
    for seed, name in enumerate(BANDS):
        write_raster(folder / f"{name}.tif", rasters.get(name, numbers(seed=seed)))
    return write_item(folder / "item.json", body or item_body())


def bit(name, offset):
    classes = [{"value": 0, "name": f"not_{name}"}, {"value": 1, "name": name}]
    return {"name": name, "offset": offset, "length": 1, "classes": classes}


CONFIDENCE = [{"value": n, "name": word} for n, word in enumerate(("not_set", "low", "medium", "high"))]
CLOUD_BITS = {
    "href": "quality.tif",
    "bands": [{"data_type": "uint8"}],
    "classification:bitfields": [
        bit("fill", 0),
        bit("Cloud-Shadow", 1),
        bit("snow", 2),
        bit("saturated", 3),
        {"name": "cloud_confidence", "offset": 4, "length": 2, "classes": CONFIDENCE},
    ],
}
CLASS_NAMES = (
    "no_data",
    "saturated_or_defective",
    "dark_area",
    "cloud_shadow",
    "vegetation",
    "not_vegetated",
    "water",
    "unclassified",
    "cloud_medium_probability",
    "cloud_high_probability",
    "thin_cirrus",
    "Snow / Ice",
)
SCENE_CLASSES = {
    "href": "classes.tif",
    "bands": [{"classification:classes": [{"value": n, "name": word} for n, word in enumerate(CLASS_NAMES)]}],
}


def product_xml(baseline="05.10", offsets=True, level="2A"):
    word = "BOA" if level == "2A" else "RADIO"
    listed = "".join(f'<{word}_ADD_OFFSET band_id="{n}">{-1000 - n}</{word}_ADD_OFFSET>' for n in range(13))
    name = "BOA_QUANTIFICATION_VALUE" if level == "2A" else "QUANTIFICATION_VALUE"
    return f"""<?xml version="1.0" encoding="UTF-8"?>
<n1:Level-{level}_User_Product xmlns:n1="https://example.com/user_product.xsd"><n1:General_Info>
<SPACECRAFT_NAME>Sentinel-2B</SPACECRAFT_NAME>
<PRODUCT_START_TIME>2031-03-10T14:20:31.024Z</PRODUCT_START_TIME>
<PROCESSING_BASELINE>{baseline}</PROCESSING_BASELINE><{name} unit="none">10000</{name}>
<Special_Values><SPECIAL_VALUE_TEXT>NODATA</SPECIAL_VALUE_TEXT>
<SPECIAL_VALUE_INDEX>0</SPECIAL_VALUE_INDEX></Special_Values>
<Special_Values><SPECIAL_VALUE_TEXT>SATURATED</SPECIAL_VALUE_TEXT>
<SPECIAL_VALUE_INDEX>65535</SPECIAL_VALUE_INDEX></Special_Values>
{listed if offsets else ""}</n1:General_Info></n1:Level-{level}_User_Product>"""
