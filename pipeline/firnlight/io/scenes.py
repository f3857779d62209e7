"""Which scenes are there? STAC items in a folder, by a glob, or in one file; no raster is opened."""

from __future__ import annotations

import glob
import json
import os
import stat
from collections.abc import Iterator
from pathlib import Path

from firnlight.core.errors import InputProblem
from firnlight.io.scene_files import open_scene
from firnlight.io.scene_items import scene_of
from firnlight.io.sources import BandSource, QualitySource, Scene

__all__ = ["BandSource", "QualitySource", "Scene", "find_scenes", "open_scene"]

LARGEST_FILE_BYTES = 1_000_000_000  # a collection of 100,000 items stays below


def find_scenes(items: str, base: Path) -> tuple[list[Scene], list[InputProblem]]:
    """Find the scenes that a workflow names.

    Parameters
    ----------
    items : a folder (searched with all below it), a glob, or a file with one item or an item collection.
    base : folder that a relative `items` starts at.

    Returns
    -------
    scenes in the order of their paths, and one problem for each item that cannot be used; both empty where
    nothing is there. JSON files of a folder that are no items (catalogs, other data) are passed over.
    """
    scenes: list[Scene] = []
    problems: list[InputProblem] = []
    root = os.path.normpath(os.path.join(os.path.abspath(base), items))
    named = "\0" not in root and not os.path.isdir(root) and os.path.lexists(root)
    for path in _paths(root):
        try:
            bodies = _bodies(path, strict=named)
        except InputProblem as problem:
            problems.append(problem)
            continue
        for body in bodies:
            try:
                scenes.append(scene_of(body, path))
            except InputProblem as problem:
                problems.append(problem)
    return scenes, problems


def _paths(root: str) -> list[str]:
    if "\0" in root:
        return []
    if os.path.isdir(root):
        return sorted(_json_files(root))
    if os.path.lexists(root):
        return [root]
    found: set[str] = set()
    for path in glob.iglob(root, recursive=True):
        found.update(_json_files(path) if os.path.isdir(path) else [path])
    return sorted(path for path in found if path.endswith((".json", ".geojson")))


def _json_files(folder: str) -> Iterator[str]:
    for at, folders, files in os.walk(folder):
        folders[:] = [name for name in folders if not name.startswith(".")]
        for name in files:
            if name.endswith((".json", ".geojson")) and not name.startswith("."):
                yield os.path.join(at, name)


def _read(path: str) -> object:
    wanted = "a STAC item (JSON)"
    try:
        found = os.stat(path)
        if not stat.S_ISREG(found.st_mode):  # never opened: the other end of a pipe may never come
            raise InputProblem(path, "item", "a pipe, folder or device", wanted, "replace it by a plain file")
        if found.st_size > LARGEST_FILE_BYTES:
            raise InputProblem(path, "item", f"{found.st_size} bytes", "under 1 GB", "split the item collection")
        with open(path, "rb") as stream:
            return json.loads(stream.read())
    except OSError as error:
        raise InputProblem(
            path, "item", error.strerror or str(error), wanted, "make the file readable, or deliver it again"
        ) from None
    except (ValueError, RecursionError) as error:
        why = str(error) if isinstance(error, ValueError) else "lists inside lists without end"
        fix = "deliver the item again, or write it with `firnlight describe`"
        raise InputProblem(path, "item", f"text that is no JSON ({why})", wanted, fix) from None


def _bodies(path: str, strict: bool) -> list[object]:
    """The items in a file; of a file that the user named itself, anything else is a problem."""
    body = _read(path)
    if isinstance(body, dict):
        if body.get("type") == "FeatureCollection" and isinstance(body.get("features"), list):
            features: list[object] = body["features"]
            if strict:
                return features
            return [one for one in features if isinstance(one, dict) and ("stac_version" in one or "assets" in one)]
        if body.get("type") not in ("Catalog", "Collection") and ("stac_version" in body or "assets" in body):
            return [body]
    if strict:
        raise InputProblem(
            path,
            "item",
            "other JSON",
            "a STAC item or an item collection",
            "name a folder, glob or file with STAC items",
        )
    return []
