"""What does a STAC item say of a scene? Only what we use is read, and that strictly."""

from __future__ import annotations

import datetime as dt
import math
import os
import re
from functools import cache, lru_cache
from typing import Annotated, Any, Literal

from pydantic import AliasChoices, BaseModel, ConfigDict, Field, ValidationError
from rasterio.crs import CRS
from rasterio.errors import CRSError

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid
from firnlight.core.tables import load_table
from firnlight.io.fingerprints import text_id
from firnlight.io.quality import flags_of_bitfields, flags_of_classes, with_nodata
from firnlight.io.rasters import crs_text
from firnlight.io.sources import BandSource, QualitySource, Scene

TILE_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,99}")
_FOR_PEOPLE = {"thumbnail", "overview", "visual"}  # roles of pictures: their bands are no measurements
_Finite = Annotated[float, Field(allow_inf_nan=False)]
_Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]


class _Part(BaseModel):
    model_config = ConfigDict(frozen=True, strict=True, extra="ignore")


class _Class(_Part):
    value: int
    name: str | None = None
    description: str | None = None

    @property
    def word(self) -> str:
        return self.name or self.description or ""


class _Bits(_Part):
    offset: Annotated[int, Field(ge=0, le=63)]
    length: Annotated[int, Field(ge=1, le=16)]
    name: str = ""
    classes: list[_Class] = []


class _Facts(_Part):
    """What a band says; an asset may say it for all its bands."""

    common_name: str | None = Field(None, validation_alias=AliasChoices("eo:common_name", "common_name"))
    data_type: str | None = None
    nodata: _Finite | Literal["nan", "inf", "-inf"] | None = None
    scale: _Positive | None = Field(None, validation_alias=AliasChoices("raster:scale", "scale"))
    offset: _Finite | None = Field(None, validation_alias=AliasChoices("raster:offset", "offset"))
    bitfields: list[_Bits] | None = Field(None, validation_alias="classification:bitfields")
    classes: list[_Class] | None = Field(None, validation_alias="classification:classes")


class _Asset(_Facts):
    href: str
    roles: list[str] = []
    bands: list[_Facts] = []
    eo_bands: list[_Facts] = Field([], validation_alias="eo:bands")  # before STAC 1.1
    raster_bands: list[_Facts] = Field([], validation_alias="raster:bands")
    checksum: str | None = Field(None, validation_alias="file:checksum")


class _Properties(_Part):
    datetime: str | None
    platform: str = ""
    instruments: list[str]
    code: str | None = Field(None, validation_alias="proj:code")
    epsg: int | None = Field(None, validation_alias="proj:epsg")
    wkt2: str | None = Field(None, validation_alias="proj:wkt2")
    transform: Annotated[list[_Finite], Field(min_length=6, max_length=9)] = Field(validation_alias="proj:transform")
    shape: Annotated[list[Annotated[int, Field(ge=1, le=1_000_000)]], Field(min_length=2, max_length=2)] = Field(
        validation_alias="proj:shape"
    )
    sun_elevation: Annotated[float, Field(ge=-90, le=90)] | None = Field(None, validation_alias="view:sun_elevation")
    off_nadir: Annotated[float, Field(ge=0, le=90)] | None = Field(None, validation_alias="view:off_nadir")
    view_azimuth: Annotated[float, Field(ge=0, le=360)] | None = Field(None, validation_alias="view:azimuth")
    version: str = ""
    created: str = ""
    grid_code: str | None = Field(None, validation_alias="grid:code")
    tile: str | None = Field(None, validation_alias="firnlight:tile")
    level: str | None = Field(None, validation_alias="processing:level")
    reflectance: Literal["surface", "top of atmosphere"] | None = Field(None, validation_alias="firnlight:reflectance")


class _Item(_Part):
    type: Literal["Feature"]
    stac_version: Annotated[str, Field(pattern=r"^1\.[01]\.")]
    id: Annotated[str, Field(min_length=1, max_length=500, pattern=r"^[^\x00-\x1f]+$")]
    properties: _Properties
    assets: dict[str, _Asset]


def scene_of(body: object, item_path: str) -> Scene:
    """Turn an item, as read from JSON, into a scene. No raster is opened.

    Raises
    ------
    InputProblem : the item lacks something, or says something that cannot be used.
    """
    try:
        return _scene(_Item.model_validate(body), item_path)
    except ValidationError as error:
        raise _as_problem(error, item_path) from None
    except InputProblem as problem:
        problem.where = item_path
        raise


def _scene(item: _Item, item_path: str) -> Scene:
    told = item.properties
    grid, sensor = _grid(told), _sensor(tuple(told.instruments))
    bands, quality, checksums = _sources(item, sensor, os.path.dirname(item_path))
    level = (told.level or "").upper().replace("LEVEL-", "L")
    top = told.reflectance == "top of atmosphere" or (told.reflectance is None and level.startswith("L1"))
    return Scene(
        id=item.id,
        tile=_tile(told, grid),
        datetime=_time(told.datetime),
        sensor=sensor,
        platform=told.platform,
        grid=grid,
        bands=bands,
        quality=quality,
        sun_elevation_deg=told.sun_elevation,
        view_deg=None if told.off_nadir is None or told.view_azimuth is None else (told.off_nadir, told.view_azimuth),
        version=told.version,
        created=told.created,
        item_path=item_path,
        checksums=checksums,
        reflectance="top of atmosphere" if top else "surface",
    )


def _as_problem(error: ValidationError, where: str) -> InputProblem:
    first = error.errors()[0]
    name = ".".join(str(part) for part in first["loc"] if not str(part).startswith(("constrained", "literal[")))
    if first["type"] == "missing":
        return InputProblem(where, f"item, {name}", "nothing", "a value", f"add {name} to the item")
    found = repr(first["input"])
    wanted = first["msg"].removeprefix("Input should be ").removeprefix("Value error, ")
    return InputProblem(
        where,
        f"item, {name}",
        found if len(found) < 80 else found[:77] + "...",
        wanted,
        "correct it in the item",
    )


def _time(text: str | None) -> dt.datetime:
    try:
        time = dt.datetime.fromisoformat(text or "")
        if time.tzinfo is not None:
            return time.astimezone(dt.UTC)
    except (ValueError, OverflowError):
        pass
    raise InputProblem(
        "",
        "item, properties.datetime",
        text or "nothing",
        "the time of the acquisition in UTC",
        'add it in the form "2026-03-14T10:17:42Z"',
    )


@cache
def _instruments() -> dict[str, str]:
    return {name: key for key, row in load_table("sensors").rows.items() for name in row["instruments"]}


@lru_cache(maxsize=256)
def _sensor(instruments: tuple[str, ...]) -> str:
    known = _instruments()
    found = {known[name.lower()] for name in instruments if name.lower() in known}
    if len(found) != 1:
        raise InputProblem(
            "",
            "item, properties.instruments",
            list(instruments),
            "one of " + ", ".join(sorted(known)),
            "name the one instrument that measured the bands, or add a sensor to the sensors table",
        )
    return found.pop()


@lru_cache(maxsize=1024)
def _crs(code: str | None, epsg: int | None, wkt2: str | None) -> str:
    if code is None and epsg is not None:
        code = f"EPSG:{epsg}"
    text = code or wkt2
    if not text or not (code is None or re.fullmatch(r"[A-Za-z]{2,10}:\d{1,9}", code)):
        raise InputProblem(
            "",
            "item, properties.proj:code",
            text or "nothing",
            'a code such as "EPSG:32624"',
            "add proj:code to the item's properties (or proj:wkt2 where the CRS has no code)",
        )
    try:
        crs = CRS.from_user_input(text)
    except CRSError:
        crs = None
    if crs is None:  # raised out here, since PROJ's error cannot travel between worker processes
        raise InputProblem("", "item, CRS", text[:60], "a known CRS", "correct proj:code in the item")
    return crs_text(crs, "")


def _grid(told: _Properties) -> Grid:
    a, b, left, d, e, top = told.transform[:6]
    if b or d or a <= 0 or e >= 0:
        raise InputProblem(
            "",
            "item, properties.proj:transform",
            told.transform[:6],
            "north-up cells without rotation",
            "warp the rasters north-up and write the item again",
        )
    return Grid(_crs(told.code, told.epsg, told.wkt2), left, top, a, -e, *told.shape)


def _tile(told: _Properties, grid: Grid) -> str:
    name = told.tile if told.grid_code is None else told.grid_code
    if name is None:
        return place_name(grid)
    if not TILE_NAME.fullmatch(name) or ".." in name:
        raise InputProblem(
            "",
            "item, tile name (grid:code or firnlight:tile)",
            repr(name[:100]),
            "letters, digits, '.', '_' and '-', as it becomes a folder's name",
            "give the tile a plain name",
        )
    return name


def place_name(grid: Grid) -> str:
    """A tile name made from CRS and corner, for scenes that give none."""
    crs = grid.crs.replace(":", "") if len(grid.crs) < 20 else f"crs{text_id(grid.crs)[:8]}"
    return f"{crs}_{grid.left:.10g}_{grid.top:.10g}".replace("+", "")


def local_path(href: str, folder: str) -> str:
    """The local file an href means; relative ones start at the item's folder.

    Raises
    ------
    InputProblem : an address of another machine, a GDAL virtual file, or no file name at all.
    """
    path = os.path.normpath(os.path.join(folder, href)) if href else ""
    path = "/" + path.lstrip("/") if path.startswith("//") else path
    scheme = re.match(r"[A-Za-z][A-Za-z0-9+.-]+:", href)
    if not href or "\0" in href or len(href) > 4000 or scheme or path.lower().startswith("/vsi"):
        raise InputProblem(
            "",
            "item, href",
            repr(href[:200]),
            "the path of a local file, relative to the item or absolute",
            "copy the file to this machine first and write its path" if scheme else "correct the href in the item",
        )
    return path


def _number(told: float | str | None) -> float | None:
    return None if told is None else float(told)


def _merged(asset: _Asset) -> list[_Facts]:
    """What is told of each band of an asset: by its `bands`, by the lists of STAC 1.0, else by the asset."""
    lists = [told for told in (asset.bands, asset.raster_bands, asset.eo_bands) if told]
    common = _told(asset)
    if not lists:
        return [asset]
    if len(lists) == 1 and not common:  # the usual item: nothing to merge, and there are many items
        return lists[0]
    facts: list[_Facts] = []
    for n in range(max(len(told) for told in lists)):
        values = dict(common)
        for told in reversed(lists):
            values |= _told(told[n]) if n < len(told) else {}
        facts.append(_Facts.model_construct(**values))
    return facts


def _told(facts: _Facts) -> dict[str, Any]:
    """What is told of a band, without what is null."""
    names = facts.model_fields_set & _Facts.model_fields.keys()
    return {name: value for name in names if (value := getattr(facts, name)) is not None}


def _flags(facts: _Facts) -> bytes:
    kind = facts.data_type or ""
    if facts.bitfields:
        fields = tuple(
            (one.name, one.offset, one.length, tuple((c.value, c.word) for c in one.classes)) for one in facts.bitfields
        )
        flags = flags_of_bitfields(fields, kind)
    else:
        flags = flags_of_classes(tuple((c.value, c.word) for c in facts.classes or ()), kind)
    return with_nodata(flags, _number(facts.nodata))


def _sources(
    item: _Item, sensor: str, folder: str
) -> tuple[dict[str, BandSource], tuple[QualitySource, ...], dict[str, str]]:
    wanted = load_table("sensors").row(sensor)["bands"]
    bands: dict[str, BandSource] = {}
    owner: dict[str, str] = {}
    quality: list[QualitySource] = []
    checksums: dict[str, str] = {}
    for key, asset in item.assets.items():
        if _FOR_PEOPLE.intersection(asset.roles):
            continue
        for number, facts in enumerate(_merged(asset), 1):
            is_band, is_quality = facts.common_name in wanted, bool(facts.bitfields or facts.classes)
            if not is_band and not is_quality:
                continue
            path = local_path(asset.href, folder)
            if asset.checksum:
                checksums[path] = asset.checksum
            if is_quality:
                try:
                    quality.append(QualitySource(path, number, _flags(facts)))
                except InputProblem as problem:
                    problem.what = f"item, asset {key}, {problem.what}"
                    raise
                continue
            name = facts.common_name or ""
            if name in bands:
                raise InputProblem(
                    "",
                    f"item, band {name}",
                    f"two of it, in assets {owner[name]} and {key}",
                    "one of each band",
                    "take one of the assets out of the item",
                )
            owner[name] = key
            bands[name] = BandSource(
                path,
                number,
                facts.scale,
                facts.offset,
                _number(facts.nodata),
                data_type=facts.data_type or "",
            )
    if any(math.isinf(one.nodata) for one in bands.values() if one.nodata is not None):
        raise InputProblem("", "item, nodata", "an infinite number", "a number or nan", "correct nodata in the item")
    return bands, tuple(quality), checksums
