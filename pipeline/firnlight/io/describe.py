"""How do plain folders of band rasters become scenes? By items made from names, tags and metadata texts."""

from __future__ import annotations

import datetime as dt
import hashlib
import json
import math
import os
from collections import Counter
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from rasterio.warp import transform

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid
from firnlight.core.tables import load_table
from firnlight.io.atomic import write_text
from firnlight.io.file_names import QUALITY, SceneFiles, find_files
from firnlight.io.metadata_text import SceneText, joined, read_group_text, read_xml_text
from firnlight.io.rasters import dataset_grid, open_raster
from firnlight.io.scene_files import grid_ratio
from firnlight.io.scene_items import place_name

KINDS = ("surface", "top of atmosphere")
_EXTENSIONS = (
    "classification/v2.0.0",
    "eo/v2.0.0",
    "file/v2.1.0",
    "processing/v1.2.0",
    "projection/v2.0.0",
    "raster/v2.0.0",
    "version/v1.2.0",
    "view/v1.0.0",
)
_MEDIA = {
    "GTiff": "image/tiff; application=geotiff",
    "JP2OpenJPEG": "image/jp2",
    "HFA": "application/octet-stream",
}


@dataclass(frozen=True)
class _Given:
    """What the user says beside the files."""

    sensor: str
    reflectance: str
    scale: float | None
    offset: float | None
    nodata: float | None
    clock: dt.time | None


@dataclass(frozen=True)
class _Raster:
    """What a raster file itself tells."""

    path: Path
    grid: Grid
    driver: str
    dtype: str
    nodata: float | None
    tags: tuple[float, float] | None  # scale and offset


def describe(
    folder: Path,
    sensor: str,
    pattern: str,
    out: Path | None = None,
    reflectance: str = "surface",
    scale: float | None = None,
    offset: float | None = None,
    nodata: float | None = None,
    time: str | None = None,
) -> list[Path]:
    """Write a STAC item for every scene of a folder; rasters are read, never written.

    Parameters
    ----------
    folder : searched with all below it, also for the provider's metadata texts.
    sensor : row of tables/sensors.toml.
    pattern : see `file_names.find_files`.
    out : folder of the items; beside the rasters where None.
    reflectance : "surface" or "top of atmosphere": what the numbers are once scaled.
    scale, offset, nodata, time : for what neither metadata nor file tags tell; time of day HH:MM:SS, UTC.
        What contradicts them is refused.

    Returns
    -------
    The items' paths, by tile and date. An item that would not change is not written again.

    Raises
    ------
    InputProblem : nothing fits the pattern, scale, offset or time is told nowhere or in two ways, the
        kind of reflectance is not that of the metadata, or a file cannot be used.
    """
    load_table("sensors").row(sensor)
    if reflectance not in KINDS:
        raise InputProblem("--reflectance", "kind", reflectance, " or ".join(KINDS), "choose one of the two")
    given = _Given(sensor, reflectance, scale, offset, nodata, _clock(time))
    written: dict[Path, str] = {}
    for files in find_files(Path(folder), sensor, pattern):
        name, body = _item(Path(folder), files, given)
        path = (Path(out) if out else files.folder) / f"{name}.json"
        for asset in body["assets"].values():
            asset["href"] = Path(os.path.relpath(asset["href"], path.parent.absolute())).as_posix()
        written[path] = json.dumps(body, indent=1, ensure_ascii=False) + "\n"
    for path, text in written.items():  # only now: a problem in one scene leaves no half set of items
        if not path.is_file() or path.read_text(encoding="utf-8") != text:
            write_text(path, text)
    return list(written)


def _clock(text: str | None) -> dt.time | None:
    try:
        return dt.time.fromisoformat(text) if text else None
    except ValueError:
        raise InputProblem("--time", "time of day", text, "HH:MM:SS in UTC", "correct --time") from None


def _text_of(folder: Path, files: SceneFiles) -> SceneText | None:
    """The metadata texts in the rasters' folders, or above them up to the described folder."""
    places: list[Path] = []
    for start in dict.fromkeys(path.parent for path in files.all):
        at = start
        while True:
            places += [] if at in places else [at]
            if at == folder or at == at.parent:
                break
            at = at.parent
    groups = [path for place in places for path in sorted(place.glob("*_MTL.txt"))]
    # beside several scenes each text is named as its rasters are
    own = [path for path in groups if any(one.name.startswith(path.name[: -len("MTL.txt")]) for one in files.all)]
    chosen = own or groups
    if len(chosen) > 1:
        dated = [path for path in chosen if (time := read_group_text(path).time) and time.date() == files.day]
        if len(dated) != 1:
            raise InputProblem(
                str(chosen[0].parent),
                f"metadata of {files.tile} {files.day}",
                f"{len(chosen)} texts",
                "one a scene",
                "put each scene with its metadata into a folder of its own",
            )
        chosen = dated
    texts = [read_group_text(path) for path in chosen]
    for pattern in ("MTD_MSI*.xml", "MTD_TL.xml", "MTD_DS.xml"):
        found = [path for place in places for path in sorted(place.glob(pattern))]
        texts += [read_xml_text(path) for path in found[:1]]
    return joined(texts)


def _check_text(text: SceneText, files: SceneFiles, given: _Given) -> None:
    where = str(text.path)
    if text.time is not None and text.time.date() != files.day:
        raise InputProblem(
            where,
            "date",
            text.time.date().isoformat(),
            f"{files.day} as in the files' names",
            "put the right metadata there",
        )
    known = load_table("sensors").row(given.sensor)["instruments"]
    if text.instruments and not set(text.instruments) & set(known):
        raise InputProblem(
            where,
            "sensor",
            "_".join(text.instruments),
            f"one of {', '.join(known)} for --sensor {given.sensor}",
            "name the sensor of these files with --sensor",
        )
    kind = {1: "top of atmosphere", 2: "surface"}.get(text.level or 0, given.reflectance)
    if kind != given.reflectance:
        fix = (
            'deliver Level-2 surface reflectance; or say --reflectance "top of atmosphere" knowing that the '
            "atmosphere is then not corrected for"
            if text.level == 1
            else 'leave out --reflectance, or say --reflectance "surface"'
        )
        raise InputProblem(where, "kind of reflectance", f"Level-{text.level}, {kind}", given.reflectance, fix)


def _raster(path: Path) -> _Raster:
    with open_raster(path) as dataset:
        tags = (float(dataset.scales[0]), float(dataset.offsets[0]))
        return _Raster(
            path,
            dataset_grid(dataset),
            dataset.driver,
            dataset.dtypes[0],
            dataset.nodatavals[0],
            None if tags == (1.0, 0.0) else tags,
        )


def _agreed(where: str, what: str, told: float | None, said: float | None) -> float | None:
    """What the files tell, else what the user says; both only where they are the same."""
    if told is not None and said is not None and not math.isclose(told, said, rel_tol=1e-9, abs_tol=1e-15):
        raise InputProblem(
            where,
            what,
            f"{told} in the files' metadata",
            f"{said} as given",
            f"leave out --{what.rsplit(' ', 1)[-1]}, or correct it",
        )
    return told if told is not None else said


def _band_entry(name: str, raster: _Raster, text: SceneText | None, given: _Given) -> dict[str, Any]:
    about = load_table("sensors").row(given.sensor)["bands"][name]
    told = (text.scaling(about["number"]) if text else None) or raster.tags
    where = str(raster.path)
    numbers = {
        word: _agreed(where, f"band {name}, {word}", told[n] if told else None, said)
        for n, (word, said) in enumerate((("scale", given.scale), ("offset", given.offset)))
    }
    for word, number in numbers.items():
        if number is None:
            raise InputProblem(
                where,
                f"band {name}, {word}",
                "no metadata text and no tag in the file that tells it",
                f"the {word} that turns stored numbers into reflectance",
                f"give --{word}, or put the metadata text beside the rasters",
            )
    middle, width = (about["low_um"] + about["high_um"]) / 2, about["high_um"] - about["low_um"]
    entry: dict[str, Any] = {
        "name": about["number"],
        "eo:common_name": name,
        "eo:center_wavelength": round(middle, 4),
        "eo:full_width_half_max": round(width, 4),
        "data_type": raster.dtype,
        "raster:scale": numbers["scale"],
        "raster:offset": numbers["offset"],
    }
    empty = text.nodata if text and text.nodata is not None else raster.nodata
    nodata = _agreed(where, f"band {name}, nodata", empty, given.nodata)
    if nodata is not None:
        entry["nodata"] = "nan" if math.isnan(nodata) else int(nodata) if nodata.is_integer() else nodata
    return entry


def _quality_entry(tag: str, raster: _Raster, given: _Given) -> dict[str, Any]:
    rows = [row for row in load_table("quality_layouts").rows.values() if given.sensor in row["sensors"]]
    fitting = [row for row in rows if tag in (one.lower() for one in row["files"])]
    if not fitting and len(rows) == 1:
        fitting = rows
    if len(fitting) != 1:
        names = ", ".join(one for row in rows for one in row["files"])
        raise InputProblem(
            str(raster.path),
            "coding of the quality file",
            tag,
            f"a name that tells it: {names or 'none is known'}",
            "name the file so, or leave it out of the pattern and add it to the item with its classes",
        )
    row = fitting[0]
    entry: dict[str, Any] = {"name": tag, "data_type": raster.dtype}
    if "classes" in row:
        return entry | {"classification:classes": [{"value": n, "name": word} for n, word in enumerate(row["classes"])]}
    fields = [
        {
            "name": name,
            "offset": first,
            "length": (len(words) - 1).bit_length(),
            "classes": [{"value": n, "name": word} for n, word in enumerate(words)],
        }
        for name, first, words in row["fields"]
    ]
    return entry | {"classification:bitfields": fields}


def _asset(raster: _Raster, title: str, role: list[str], band: dict[str, Any]) -> dict[str, Any]:
    with raster.path.open("rb") as stream:
        digest = hashlib.file_digest(stream, "sha256").hexdigest()
    return {
        "href": str(raster.path.absolute()),
        "type": _MEDIA[raster.driver],
        "title": title,
        "roles": role,
        "file:size": raster.path.stat().st_size,
        "file:checksum": "1220" + digest,  # multihash of sha2-256
        "proj:shape": [raster.grid.rows, raster.grid.cols],
        "proj:transform": list(raster.grid.transform),
        "bands": [band],
    }


def _outline(grid: Grid) -> list[list[float]]:
    """The tile's edge in longitude and latitude, counter-clockwise from the lower left, closed. [deg]"""
    steps = np.linspace(0.0, 1.0, 9)[:-1]
    x = np.concatenate([steps, np.ones(8), 1 - steps, np.zeros(8)]) * (grid.right - grid.left) + grid.left
    y = np.concatenate([np.zeros(8), steps, np.ones(8), 1 - steps]) * (grid.top - grid.bottom) + grid.bottom
    lon, lat = transform(grid.crs, "EPSG:4326", x.tolist(), y.tolist())
    ring = [[round(float(a), 6), round(float(b), 6)] for a, b in zip(lon, lat, strict=True)]
    return [*ring, ring[0]]


def _moment(files: SceneFiles, text: SceneText | None, given: _Given) -> dt.datetime:
    clock = files.clock or given.clock
    if text is not None and text.time is not None:
        return text.time
    if clock is None:
        raise InputProblem(
            str(files.all[0]),
            "time of the acquisition",
            "no metadata text that tells it",
            "the time of day in UTC",
            "give --time HH:MM:SS, or put the metadata text beside the rasters",
        )
    return dt.datetime.combine(files.day, clock.replace(tzinfo=dt.UTC))


def _common_grid(rasters: list[_Raster]) -> Grid:
    """The grid that most bands have; among equals the coarsest, since averaging invents no detail."""
    votes = Counter(one.grid for one in rasters)
    grid = max(votes, key=lambda one: (votes[one], one.dx))
    for one in rasters:
        grid_ratio(grid, one.grid, str(one.path), "raster")
    return grid


def _item(folder: Path, files: SceneFiles, given: _Given) -> tuple[str, dict[str, Any]]:
    text = _text_of(folder, files)
    if text is not None:
        _check_text(text, files, given)
    row = load_table("sensors").row(given.sensor)
    rasters = {name: _raster(files.bands[name]) for name in row["bands"] if name in files.bands}
    quality = {tag: _raster(path) for tag, path in sorted(files.quality.items())}
    grid = _common_grid(list(rasters.values()))
    for one in quality.values():
        grid_ratio(grid, one.grid, str(one.path), QUALITY)
    kind = f"{given.reflectance} reflectance"
    assets = {
        name: _asset(one, f"{kind}, {name}", ["data", "reflectance"], _band_entry(name, one, text, given))
        for name, one in rasters.items()
    }
    for tag, one in quality.items():
        key = QUALITY if len(quality) == 1 else tag
        assets[key] = _asset(one, "quality of the cells", ["data", "quality"], _quality_entry(tag, one, given))
    moment = _moment(files, text, given)
    tile = files.tile or place_name(grid)
    name = f"{tile}_{files.day:%Y%m%d}_{given.sensor}"
    text = text or SceneText(Path())
    ring = _outline(grid)
    properties: dict[str, Any] = {
        "datetime": moment.isoformat(timespec="milliseconds").replace("+00:00", "Z"),
        "created": text.created,
        "version": text.version,
        "platform": text.spacecraft,
        "instruments": [row["instruments"][0]],
        "processing:level": {1: "L1", 2: "L2"}.get(text.level or 0, ""),
        "firnlight:tile": tile,
        "firnlight:reflectance": given.reflectance,
        "proj:code": grid.crs if grid.crs.startswith("EPSG:") else None,
        "proj:wkt2": "" if grid.crs.startswith("EPSG:") else grid.crs,
        "proj:shape": [grid.rows, grid.cols],
        "proj:transform": list(grid.transform),
        "view:sun_elevation": text.sun_elevation_deg,
        "view:sun_azimuth": text.sun_azimuth_deg,
    }
    lon, lat = [corner[0] for corner in ring], [corner[1] for corner in ring]
    return name, {
        "type": "Feature",
        "stac_version": "1.1.0",
        "stac_extensions": [f"https://stac-extensions.github.io/{one}/schema.json" for one in _EXTENSIONS],
        "id": name,
        "geometry": {"type": "Polygon", "coordinates": [ring]},
        "bbox": [min(lon), min(lat), max(lon), max(lat)],
        "properties": {key: value for key, value in properties.items() if value not in (None, "")},
        "links": [],
        "assets": assets,
    }
