"""Which files of a folder belong to one scene? A pattern with {tile}, {date} and {band} tells."""

from __future__ import annotations

import datetime as dt
import os
import re
from dataclasses import dataclass, field
from pathlib import Path

from firnlight.core.errors import InputProblem
from firnlight.core.tables import load_table

_PLACES = ("tile", "date", "band")
_TILE = r"[A-Za-z0-9](?:[A-Za-z0-9.-]|_(?!_))*?"
_TILE_BESIDE_STAR = r"[A-Za-z0-9][A-Za-z0-9.-]*?"  # with "_" in it, nobody could say where the star ends
_DATE = r"\d{4}-\d\d-\d\dT\d\d:?\d\d:?\d\d|\d{8}T\d{6}|\d{4}-\d\d-\d\d|\d{8}|\d{7}"
QUALITY = "quality"


@dataclass
class SceneFiles:
    """The files of one scene, by common name; quality files by what stands in the place of {band}."""

    tile: str
    day: dt.date
    clock: dt.time | None = None
    bands: dict[str, Path] = field(default_factory=dict)
    quality: dict[str, Path] = field(default_factory=dict)

    @property
    def all(self) -> list[Path]:
        return [*self.bands.values(), *self.quality.values()]

    @property
    def folder(self) -> Path:
        """The folder that holds them all."""
        return Path(os.path.commonpath([path.parent for path in self.all]))


def band_tags(sensor: str) -> dict[str, str]:
    """What may stand for {band} in a file's name, in lower case -> common name, or `quality`."""
    tags: dict[str, str] = {}
    for name, band in load_table("sensors").row(sensor)["bands"].items():
        short = band["number"].lstrip("0")
        padded = short.zfill(2)
        for one in (name, short, padded, f"B{short}", f"B{padded}", f"band{short}", f"SR_B{short}"):
            tags[one.lower()] = name
    for row in load_table("quality_layouts").rows.values():
        if sensor in row["sensors"]:
            tags.update(dict.fromkeys((one.lower() for one in row["files"]), QUALITY))
    return tags | {QUALITY: QUALITY}


def _expression(pattern: str, tags: dict[str, str]) -> re.Pattern[str]:
    known = ", ".join(f"{{{name}}}" for name in _PLACES)
    band = "|".join(re.escape(tag) for tag in sorted(tags, key=lambda tag: (-len(tag), tag)))
    forms = {"tile": _TILE_BESIDE_STAR if "*" in pattern else _TILE, "date": _DATE, "band": f"(?i:{band})"}
    parts, seen = [], set()
    for piece in re.split(r"(\{[^{}]*\}|\*)", pattern):
        name = piece[1:-1]
        if piece == "*":
            parts.append(r"[^/]*?")
        elif not piece.startswith("{"):
            parts.append(re.escape(piece))
        elif name not in forms:
            raise InputProblem("--pattern", "pattern", piece, f"one of {known}", f"write {known} or * in the pattern")
        else:
            parts.append(f"(?P={name})" if name in seen else f"(?P<{name}>{forms[name]})")
            seen.add(name)
    for name in ("date", "band"):
        if name not in seen:
            raise InputProblem(
                "--pattern",
                "pattern",
                pattern,
                f"a pattern with {{{name}}}",
                f"write {{{name}}} where it stands in the names",
            )
    return re.compile("".join(parts))


def _when(text: str) -> tuple[dt.date, dt.time | None] | None:
    """A date as YYYYMMDD, YYYYDDD or ISO, with a time of day or without; None where there is no such day."""
    try:
        if re.fullmatch(r"\d{7}", text):
            return dt.datetime.strptime(text, "%Y%j").date(), None
        if "T" in text:
            moment = dt.datetime.fromisoformat(text)
            return moment.date(), moment.time()
        return dt.date.fromisoformat(text), None
    except ValueError:
        return None


def find_files(folder: Path, sensor: str, pattern: str) -> list[SceneFiles]:
    """Group the files below a folder into scenes, by tile and date; files that do not fit are left out.

    Parameters
    ----------
    pattern : file name, or path below the folder where it holds "/", with {date} and {band}; "*" is anything;
        beside a "*", {tile} holds no "_". {band} is a common name, the sensor's band number or its file tag
        ("red", "4", "04", "B4", "B04"), or what names the quality file; upper or lower case.

    Raises
    ------
    InputProblem : nothing fits, a date that does not exist, or two files for one band of a scene.
    """
    tags = band_tags(sensor)
    expression = _expression(pattern, tags)
    scenes: dict[tuple[str, dt.date], SceneFiles] = {}
    names: list[str] = []
    if not folder.is_dir():
        raise InputProblem(str(folder), "folder", "no such folder", "a folder with rasters", "correct the path")
    for at, folders, files in os.walk(folder):
        folders.sort()
        for name in sorted(files):
            path = Path(at) / name
            names.append(name)
            fits = expression.fullmatch(path.relative_to(folder).as_posix() if "/" in pattern else name)
            if fits is None or name.startswith("."):
                continue
            when = _when(fits["date"])
            if when is None:
                raise InputProblem(str(path), "date in the name", fits["date"], "a day", "correct the file's name")
            tile = fits.groupdict().get("tile") or ""
            scene = scenes.setdefault((tile, when[0]), SceneFiles(tile, *when))
            tag = fits["band"].lower()
            kind = tags[tag]
            group, key = (scene.quality, tag) if kind == QUALITY else (scene.bands, kind)
            if key in group:
                raise InputProblem(
                    str(path),
                    f"band {kind} of {tile} {when[0]}",
                    f"a second file beside {group[key]}",
                    "one file a band",
                    'make the pattern narrower, for example with the folder: "R20m/{tile}_{date}_{band}.jp2"',
                )
            group[key] = path
    found = [scene for _, scene in sorted(scenes.items(), key=lambda entry: entry[0]) if scene.bands]
    if not found:
        raise InputProblem(
            str(folder),
            f"files that fit {pattern!r}",
            "none; there are " + (", ".join(sorted(names)[:5]) or "no files"),
            f"bands of {sensor}: " + ", ".join(sorted(tags)),
            "correct the pattern or the sensor",
        )
    return found
