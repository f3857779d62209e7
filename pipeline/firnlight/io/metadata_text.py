"""What does the provider's metadata text of a scene say: scaling per band, sun, time, level, version?"""

from __future__ import annotations

import datetime as dt
import math
import re
import xml.etree.ElementTree as ET
from dataclasses import dataclass, field, replace
from pathlib import Path

from firnlight.core.errors import InputProblem

LARGEST_TEXT_BYTES = 20_000_000
# bands in the order of band_id in the XML texts of MSI (from memory)
MSI_ORDER = ("01", "02", "03", "04", "05", "06", "07", "08", "8A", "09", "10", "11", "12")
MSI_OFFSETS_SINCE = (4, 0)  # processing baseline from which offsets are stated (provider's notice)


@dataclass(frozen=True)
class SceneText:
    """What a metadata text tells; None or empty where it does not.

    Attributes
    ----------
    path : the text's file.
    level : 1 = top of atmosphere, 2 = surface reflectance.
    scale, offset : by band number as in tables/sensors.toml: reflectance = number x scale + offset.
    divide_by_sine : whether that reflectance still lacks the division by the sine of the sun's elevation.
    time : middle of the acquisition, UTC.
    """

    path: Path
    level: int | None = None
    scale: dict[str, float] = field(default_factory=dict)
    offset: dict[str, float] = field(default_factory=dict)
    divide_by_sine: bool = False
    nodata: float | None = None
    time: dt.datetime | None = None
    sun_elevation_deg: float | None = None
    sun_azimuth_deg: float | None = None
    spacecraft: str = ""
    instruments: tuple[str, ...] = ()
    version: str = ""
    created: str = ""

    def scaling(self, number: str) -> tuple[float, float] | None:
        """Scale and offset of a band to reflectance; None where the text does not tell both.

        Notes
        -----
        Top-of-atmosphere reflectance of TM, ETM+ and OLI is (M x DN + A) / sin(sun elevation), with the
        elevation at the scene's centre for all cells, as the product guides give it (from memory).

        Raises
        ------
        InputProblem : the division is due and no sun elevation above the horizon is told.
        """
        key = number.lstrip("0")
        if key not in self.scale or key not in self.offset:
            return None
        sine = 1.0
        if self.divide_by_sine:
            elevation = self.sun_elevation_deg
            if elevation is None or elevation <= 0:
                raise InputProblem(
                    str(self.path),
                    "SUN_ELEVATION",
                    "none" if elevation is None else elevation,
                    "the sun above the horizon",
                    "deliver the metadata text again, or leave the scene out",
                )
            sine = math.sin(math.radians(elevation))
        return self.scale[key] / sine, self.offset[key] / sine


def read_text(path: Path) -> str:
    """A metadata file as text.

    Raises
    ------
    InputProblem : no plain file, too large, or not text.
    """
    wanted = "a metadata text"
    try:
        if not path.is_file():
            raise InputProblem(str(path), "metadata", "no plain file", wanted, "deliver the file again")
        size = path.stat().st_size
        if size > LARGEST_TEXT_BYTES:
            raise InputProblem(str(path), "metadata", f"{size} bytes", "under 20 MB", "deliver the right file")
        text = path.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        fix = "deliver the file again"
        raise InputProblem(str(path), "metadata", f"no text ({error.reason})", wanted, fix) from None
    except OSError as error:
        raise InputProblem(str(path), "metadata", str(error), wanted, "make the file readable") from None
    if "\0" in text:
        raise InputProblem(str(path), "metadata", "text with empty bytes", wanted, "deliver the file again")
    return text


def read_groups(path: Path) -> dict[str, dict[str, str]]:
    """A text of GROUP = name / key = value / END_GROUP lines: innermost group -> key -> value without quotes.

    Raises
    ------
    InputProblem : a line that is none of these, with its number; groups that do not close.
    """
    groups: dict[str, dict[str, str]] = {}
    inside: list[str] = []

    def wrong(number: int, found: str) -> InputProblem:
        return InputProblem(
            f"{path}, line {number}",
            "metadata",
            repr(found[:80]),
            "lines of `key = value` inside groups",
            "deliver the metadata text again",
        )

    lines = read_text(path).splitlines()
    for number, line in enumerate(lines, 1):
        text = line.strip()
        if not text:
            continue
        if text == "END":
            break
        key, mark, value = (part.strip() for part in text.partition("="))
        if not mark or not key:
            raise wrong(number, line)
        if key == "GROUP":
            inside.append(value)
        elif key == "END_GROUP":
            if not inside or inside.pop() != value:
                raise wrong(number, line)
        elif not inside:
            raise wrong(number, line)
        else:
            groups.setdefault(inside[-1], {})[key] = value.strip('"')
    if inside or not groups:
        raise wrong(len(lines), "the end of the text inside a group" if inside else "no groups")
    return groups


def _float(path: Path, key: str, text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise InputProblem(str(path), key, text[:80], "a number", "deliver the metadata text again")
    return value


def _utc(path: Path, key: str, text: str) -> dt.datetime:
    try:
        time = dt.datetime.fromisoformat(text)
    except ValueError:
        raise InputProblem(str(path), key, text[:80], "a time", "deliver the metadata text again") from None
    return time.replace(tzinfo=dt.UTC) if time.tzinfo is None else time.astimezone(dt.UTC)


def read_group_text(path: Path) -> SceneText:
    """The metadata text that comes with TM, ETM+ and OLI scenes, of level 1 or 2, collection 1 or 2.

    Raises
    ------
    InputProblem : a damaged text.
    """
    groups = read_groups(path)
    flat: dict[str, str] = {}
    for group in groups.values():  # the first counts: records of earlier processing levels follow
        flat = group | flat
    product = groups.get("PRODUCT_CONTENTS", {}) | groups.get("PRODUCT_METADATA", {})
    kind = product.get("PROCESSING_LEVEL") or product.get("DATA_TYPE", "")
    level = int(kind[1]) if re.match(r"L[12]", kind) else None
    # a level 2 text repeats the numbers of level 1 in another group
    names = (
        ("LEVEL2_SURFACE_REFLECTANCE_PARAMETERS",)
        if level == 2
        else ("RADIOMETRIC_RESCALING", "LEVEL1_RADIOMETRIC_RESCALING")
    )
    scaling: dict[str, str] = {}
    for name in names:
        scaling |= groups.get(name, {})
    scale, offset = (
        {
            key.rsplit("_", 1)[1]: _float(path, key, value)
            for key, value in scaling.items()
            if re.fullmatch(rf"REFLECTANCE_{word}_BAND_\d+", key)
        }
        for word in ("MULT", "ADD")
    )
    day, clock = flat.get("DATE_ACQUIRED"), flat.get("SCENE_CENTER_TIME")
    known = {
        name: _float(path, key, flat[key])
        for name, key in (("sun_elevation_deg", "SUN_ELEVATION"), ("sun_azimuth_deg", "SUN_AZIMUTH"))
        if key in flat
    }
    return SceneText(
        path=path,
        level=level,
        scale=scale,
        offset=offset,
        divide_by_sine=level == 1,
        time=_utc(path, "SCENE_CENTER_TIME", f"{day}T{clock}") if day and clock else None,
        spacecraft=flat.get("SPACECRAFT_ID", "").lower().replace("_", "-"),
        instruments=tuple(flat.get("SENSOR_ID", "").lower().split("_")) if flat.get("SENSOR_ID") else (),
        version=flat.get("PROCESSING_SOFTWARE_VERSION", "").removeprefix("LPGS_"),
        created=flat.get("DATE_PRODUCT_GENERATED") or flat.get("FILE_DATE", ""),
        **known,
    )


def read_xml_text(path: Path) -> SceneText:
    """The product's or the tile's XML text that comes with MSI scenes, of level 1C or 2A.

    Raises
    ------
    InputProblem : not XML, XML with a document type or entities, or offsets that should be there and are not.
    """
    text = read_text(path)
    if re.search(r"<!\s*(DOCTYPE|ENTITY)", text, re.IGNORECASE):
        raise InputProblem(
            str(path),
            "metadata",
            "a document type or entities",
            "plain XML",
            "deliver the metadata again: the provider's has none",
        )
    try:
        root = ET.fromstring(text)
    except (ET.ParseError, ValueError, RecursionError) as error:
        raise InputProblem(str(path), "metadata", str(error), "an XML text", "deliver the file again") from None
    found: dict[str, str] = {}
    offsets: dict[str, str] = {}
    specials: list[str] = []
    sun = None
    for node in root.iter():
        name, value = node.tag.rsplit("}", 1)[-1], (node.text or "").strip()
        if name in ("RADIO_ADD_OFFSET", "BOA_ADD_OFFSET"):
            offsets[node.get("band_id", "")] = value
        elif name.startswith("SPECIAL_VALUE_"):
            specials.append(value)
        elif name == "Mean_Sun_Angle":
            sun = {one.tag.rsplit("}", 1)[-1]: (one.text or "") for one in node}
        elif value:
            found.setdefault(name, value)
    top = root.tag.rsplit("}", 1)[-1]
    level = 1 if "Level-1C" in top else 2 if "Level-2A" in top else None
    told = SceneText(
        path=path,
        level=level,
        spacecraft=found.get("SPACECRAFT_NAME", "").lower(),
        instruments=("msi",),
        version=found.get("PROCESSING_BASELINE", ""),
        created=found.get("GENERATION_TIME", ""),
    )
    if sun and {"ZENITH_ANGLE", "AZIMUTH_ANGLE"} <= set(sun):
        zenith, azimuth = (_float(path, key, sun[key]) for key in ("ZENITH_ANGLE", "AZIMUTH_ANGLE"))
        told = replace(told, sun_elevation_deg=90.0 - zenith, sun_azimuth_deg=azimuth)
    time = found.get("SENSING_TIME") or found.get("DATATAKE_SENSING_START") or found.get("PRODUCT_START_TIME")
    if time:
        told = replace(told, time=_utc(path, "time of the acquisition", time))
    for word, value in zip(specials[::2], specials[1::2], strict=False):
        if word == "NODATA":
            told = replace(told, nodata=_float(path, "SPECIAL_VALUE_INDEX", value))
    per_one = found.get("BOA_QUANTIFICATION_VALUE") or found.get("QUANTIFICATION_VALUE")
    if per_one is None:
        return told
    one = _float(path, "QUANTIFICATION_VALUE", per_one)
    if one <= 0:
        raise InputProblem(str(path), "QUANTIFICATION_VALUE", one, "above 0", "deliver the metadata again")
    keys = [number.lstrip("0") for number in MSI_ORDER]
    if not offsets:
        parts = re.findall(r"\d+", told.version)[:2]
        if len(parts) < 2 or tuple(map(int, parts)) >= MSI_OFFSETS_SINCE:
            raise InputProblem(
                str(path),
                "offsets of the bands",
                f"none, in processing baseline {told.version or 'unknown'}",
                "RADIO_ADD_OFFSET or BOA_ADD_OFFSET of every band",
                "deliver the whole metadata text",
            )
        return replace(told, scale=dict.fromkeys(keys, 1 / one), offset=dict.fromkeys(keys, 0.0))
    stated = {
        keys[int(band)]: _float(path, f"offset of band_id {band}", value) / one
        for band, value in offsets.items()
        if band.isdigit() and int(band) < len(keys)
    }
    return replace(told, scale=dict.fromkeys(stated, 1 / one), offset=stated)


def joined(texts: list[SceneText]) -> SceneText | None:
    """One text of several of the same scene (product and tile); the first that tells something counts."""
    if not texts:
        return None
    whole = texts[0]
    for other in texts[1:]:
        changes = {
            name: getattr(other, name)
            for name in SceneText.__dataclass_fields__
            if name not in ("path", "divide_by_sine") and getattr(whole, name) in (None, "", (), {})
        }
        whole = replace(whole, **changes)
    return whole
