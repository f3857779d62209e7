"""Polygons and their names: which regions are there, which lie in which, and which cells lie in them?"""

from __future__ import annotations

import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property, partial
from pathlib import Path
from typing import Any

import numpy as np
import pyogrio
import pyogrio.errors
import pyogrio.raw
import shapely
from numpy.typing import NDArray
from pyproj import CRS
from pyproj.exceptions import CRSError

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid, Window
from firnlight.io.ground import between

ALL = "all"  # the one region where no polygons are given
REST = "/rest"
EDGE_M = 500.0  # edges, straight in the CRS of the file, are cut to this length before they are projected
_DEGREE_M = 111_320.0  # at most
_OTHER_SOURCES = ("OGR_VRT", "GDALG")  # drivers that read other files than the one named
_STEERING = frozenset("\u2028\u2029\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069")
ID_NAMES, NAME_NAMES, PARENT_NAMES = ("id", "region_id", "code"), ("name", "title"), ("parent", "parent_id")


@dataclass(frozen=True)
class Region:
    """A polygon with its name; `parent` is the id of the region it is part of; no geometry = everywhere."""

    id: str
    name: str
    parent: str | None
    geometry: Any


@dataclass(frozen=True)
class Regions:
    """All regions of a file, in file order; `repaired` are the ids whose rings had to be mended."""

    crs: str
    all: tuple[Region, ...]
    repaired: tuple[str, ...] = ()

    @cached_property
    def children(self) -> dict[str | None, list[Region]]:
        """Regions by the id of their parent, in file order; None: those without."""
        found: dict[str | None, list[Region]] = {}
        for region in self.all:
            found.setdefault(region.parent, []).append(region)
        return found

    @property
    def roots(self) -> list[str]:
        """Ids of the regions without a parent; they may overlap."""
        return [region.id for region in self.children[None]]

    @cached_property
    def names(self) -> dict[str, str]:
        """Name of every id that a cell may carry, with the rests of parents."""
        rests = {f"{r.id}{REST}": f"rest of {r.name}" for r in self.all if r.id in self.children}
        return {**{r.id: r.name for r in self.all}, **rests}

    @cached_property
    def parents(self) -> dict[str, str]:
        """Parent of every id that has one, rests among them."""
        own = {r.id: r.parent for r in self.all if r.parent is not None}
        return {**own, **{f"{r.id}{REST}": r.id for r in self.all if r.id in self.children}}


def whole_area(name: str) -> Regions:
    """No polygons: all tiles are one region."""
    return Regions("EPSG:4326", (Region(ALL, name, None, None),))


def _text(value: object) -> str:
    """Text of a file as it stands, without control characters and white space around it; "" for nothing."""
    if value is None or (isinstance(value, float) and np.isnan(value)):
        return ""
    if isinstance(value, float) and value.is_integer():
        value = int(value)  # whole numbers come as floats from columns with gaps
    return "".join(c for c in str(value) if unicodedata.category(c) not in ("Cc", "Cs") and c not in _STEERING).strip()


def polygons(geometry: Any) -> Any:
    """The polygons of a geometry, mended where rings cross; lines and points are left out."""
    if not geometry.is_valid:
        geometry = shapely.make_valid(geometry)
    if geometry.geom_type in ("Polygon", "MultiPolygon"):
        return geometry
    parts = [part for part in shapely.get_parts(geometry, return_index=False) if shapely.get_dimensions(part) == 2]
    return shapely.union_all(parts) if parts else shapely.Polygon()


def on_plane(geometry: Any, source: str, target: str) -> Any:
    """A polygon carried to another CRS. Edges are straight in the source, and cut to EDGE_M first."""
    crs = CRS.from_user_input(source)
    unit = float(crs.axis_info[0].unit_conversion_factor)
    edge = EDGE_M / (_DEGREE_M * np.degrees(unit) if crs.is_geographic else unit)
    move = between(source, target)
    dense = shapely.segmentize(geometry, edge)
    return shapely.transform(dense, lambda xy: np.column_stack(move.transform(xy[:, 0], xy[:, 1])))


def _column(fields: dict[str, Any], wanted: str | None, guesses: Sequence[str], where: str, key: str) -> Any:
    if wanted is not None:
        if wanted not in fields:
            listed = "a field of the file: " + (", ".join(fields) or "it has none")
            raise InputProblem(where, key, wanted, listed, f"correct regions.{key}")
        return fields[wanted]
    by_lower = {name.lower(): name for name in reversed(fields)}
    return next((fields[by_lower[guess]] for guess in guesses if guess in by_lower), None)


def _read(path: Path, layer: str | None) -> tuple[dict[str, Any], Any, Any, Any]:
    problem = partial(InputProblem, str(path))
    if not path.is_file():
        raise problem("file", "no such file", "a vector file with polygons", "correct regions.file")
    try:
        spatial = [str(name) for name, kind in pyogrio.list_layers(path) if kind is not None]
        if layer is None and len(spatial) > 1:
            raise problem("layers", ", ".join(spatial), "the name of one", 'add layer = "..." to [regions]')
        layer = layer or (spatial[0] if spatial else None)
        driver = pyogrio.read_info(path, layer=layer)["driver"]
        if driver in _OTHER_SOURCES:
            found = f"a list of other sources ({driver})"
            raise problem("file", found, "the vector file itself", "name it in regions.file")
        meta, fids, wkb, columns = pyogrio.raw.read(path, layer=layer, return_fids=True)
    except (pyogrio.errors.DataSourceError, pyogrio.errors.DataLayerError, ValueError, RuntimeError) as error:
        what, fix = f"layer {layer}" if layer else "file", "correct regions.file or regions.layer"
        raise problem(what, str(error), "a readable vector file", fix) from None
    return meta, fids, wkb, columns


def read_regions(
    path: Path, layer: str | None = None, id_field: str | None = None, name_field: str | None = None,
    parent_field: str | None = None,
) -> Regions:  # fmt: skip
    """Read polygons from a vector file.

    Fields not named are looked for: id, region_id or code (else the file's own feature number); name or title
    (else the id); parent or parent_id.

    Raises
    ------
    InputProblem : no such file, layer or field, several layers and none named, no CRS, no or doubled ids, a
        feature without area, an unknown parent, parents in a ring.
    """
    where = str(path)
    problem = partial(InputProblem, where)
    meta, fids, wkb, columns = _read(path, layer)
    try:
        crs = CRS.from_user_input(meta["crs"]).to_wkt() if meta["crs"] else ""
    except CRSError:
        crs = ""
    if not crs:
        raise problem("CRS", "none", "a coordinate reference system", "write the CRS into the file")
    fields = dict(zip(meta["fields"], columns, strict=True))
    idents = _column(fields, id_field, ID_NAMES, where, "id_field")
    names = _column(fields, name_field, NAME_NAMES, where, "name_field")
    parents = _column(fields, parent_field, PARENT_NAMES, where, "parent_field")
    regions, repaired = [], []
    own = f"a text of its own, not {ALL!r} or ending in {REST!r}"
    shapes = shapely.from_wkb(wkb, on_invalid="ignore") if wkb is not None else [None] * len(fids)
    for n, shape in enumerate(shapes):
        ident = _text(fids[n] if idents is None else idents[n])
        if not ident or ident == ALL or ident.endswith(REST):
            raise problem(f"id of feature {n + 1}", ident or "nothing", own, "give every region an id")
        usable = shape is not None and not shape.is_empty and np.isfinite(shape.bounds).all()
        geometry = polygons(shapely.force_2d(shape)) if usable else None
        if geometry is None or not geometry.area > 0:
            fix = "draw it, or remove the feature"
            raise problem(f"region {ident}", "no polygon", "a polygon with an area", fix)
        if not shape.is_valid:
            repaired.append(ident)
        name = _text(names[n]) if names is not None else ""
        parent = _text(parents[n]) if parents is not None else ""
        regions.append(Region(ident, name or ident, parent or None, geometry))
    _check(regions, where)
    return Regions(crs, tuple(regions), tuple(repaired))


def _check(regions: list[Region], where: str) -> None:
    problem = partial(InputProblem, where)
    if not regions:
        raise problem("features", "none", "at least one polygon", "draw regions, or leave regions.file out")
    up: dict[str, str | None] = {}
    for region in regions:
        if region.id in up:
            raise problem("id", region.id, "ids that differ", "give every region an id of its own")
        up[region.id] = region.parent
    for region in regions:
        seen, at, what = {region.id}, region.parent, f"parent of {region.id}"
        while at is not None:
            if at not in up:
                raise problem(what, at, "the id of a region of the file", "correct the parent")
            if at in seen:
                raise problem(what, at, "parents that lead upwards", "break the ring of parents")
            seen.add(at)
            at = up[at]


@dataclass(frozen=True)
class CellSet:
    """Ids that a cell carries, sorted, and parents of which several parts claimed it: the first has it."""

    ids: tuple[str, ...]
    contested: tuple[str, ...]


class Membership:
    """Which regions each cell of a tile belongs to.

    A cell lies in a polygon when its centre does (a centre on an edge: in the polygon to its right or, on a
    level edge, below it, so that neighbours share no cell and leave none). It then lies in all regions that
    the polygon is part of. Of overlapping parts of one region the first in the file has the cell; what no
    part holds is the region's rest. So parts and rest add up to the whole.
    """

    def __init__(self, regions: Regions, grid: Grid) -> None:
        self._regions = regions
        self._everywhere = frozenset(n for n, region in enumerate(regions.all) if region.geometry is None)
        self._words = max(1, -(-len(regions.all) // 64))
        self._known: dict[bytes, CellSet] = {}
        edges = [np.empty((0, 5))]
        near = _around(grid, regions.crs)
        for n, region in enumerate(regions.all):
            if region.geometry is None or not near.intersects(region.geometry):
                continue
            # far corners may have no place in the tile's projection
            part = polygons(shapely.intersection(region.geometry, near))
            moved = on_plane(part, regions.crs, grid.crs)
            if not np.isfinite(shapely.get_coordinates(moved)).all():
                what, fix = f"region {region.id}", "correct the CRS of the regions"
                wanted = f"polygons inside the area of {grid.crs[:60]}"
                raise InputProblem(what, "place", "corners without a place there", wanted, fix)
            edges.append(_edges(polygons(moved), grid, n))
        found = np.concatenate(edges)
        self._region = found[:, 4].astype(np.int64)
        self._first = np.ceil(found[:, 1] - 0.5)  # rows whose centre the edge crosses: first .. end - 1
        self._end = np.ceil(found[:, 3] - 0.5)
        self._edges = found[:, :4]

    def runs(self, window: Window) -> tuple[NDArray[np.int64], NDArray[np.int64], list[CellSet]]:
        """The cells of a window in row order as runs of equal membership.

        Returns
        -------
        lengths, (n,) numbers into the list, and the list of the sets met.
        """
        size = window.rows * window.cols
        first, end = np.maximum(self._first, window.row), np.minimum(self._end, window.row + window.rows)
        chosen = np.flatnonzero(first < end)
        first, count = first[chosen].astype(np.int64), (end - first)[chosen].astype(np.int64)
        which = np.repeat(chosen, count)
        rows = np.arange(which.size) - np.repeat(np.cumsum(count) - count, count) + np.repeat(first, count)
        c0, r0, c1, r1 = self._edges[which].T
        crossing = c0 + (rows + 0.5 - r0) * ((c1 - c0) / (r1 - r0))
        cols = np.clip(np.ceil(crossing - 0.5) - window.col, 0, window.cols).astype(np.int64)
        # a crossing flips its polygon from there on; those right of the window flip at its next row's start,
        # and since every row holds an even number of crossings, nothing is left over there
        at = (rows - window.row) * window.cols + cols
        order = np.argsort(at, kind="stable")
        at, region = at[order], self._region[which][order]
        flips = np.zeros((at.size + 1, self._words), np.uint64)
        flips[np.arange(at.size) + 1, region // 64] = np.uint64(1) << (region % 64).astype(np.uint64)
        inside = np.bitwise_xor.accumulate(flips, axis=0)
        starts = np.concatenate([[0], at])
        last = np.append(starts[1:] != starts[:-1], True) & (starts < size)
        starts, inside = starts[last], inside[last]
        rows_met, numbers = np.unique(inside, axis=0, return_inverse=True)
        return np.diff(np.append(starts, size)), numbers.reshape(-1), [self._set(row) for row in rows_met]

    def _set(self, row: NDArray[np.uint64]) -> CellSet:
        key = row.tobytes()
        if key not in self._known:
            bits = int.from_bytes(row.astype("<u8").tobytes(), "little")
            raw = {r.id for n, r in enumerate(self._regions.all) if bits >> n & 1 or n in self._everywhere}
            ids: list[str] = []
            contested: list[str] = []
            for root in self._regions.children[None]:
                self._assign(root, raw, ids, contested)
            self._known[key] = CellSet(tuple(sorted(ids)), tuple(sorted(contested)))
        return self._known[key]

    def _reached(self, region: Region, raw: set[str]) -> bool:
        return region.id in raw or any(self._reached(part, raw) for part in self._regions.children.get(region.id, ()))

    def _assign(self, region: Region, raw: set[str], ids: list[str], contested: list[str]) -> None:
        if not self._reached(region, raw):
            return
        ids.append(region.id)
        parts = self._regions.children.get(region.id)
        if parts is None:
            return
        claims = [part for part in parts if self._reached(part, raw)]
        if claims:
            self._assign(claims[0], raw, ids, contested)
        else:
            ids.append(f"{region.id}{REST}")
        if len(claims) > 1:
            contested.append(region.id)


def _around(grid: Grid, crs: str) -> Any:
    """Box around a tile in another CRS with a margin of a tenth, empty where it has no place there.

    Longitudes may be counted to 180 or to 360: the box is met in both.
    """
    x, y = np.meshgrid(np.linspace(grid.left, grid.right, 22), np.linspace(grid.bottom, grid.top, 22))
    u, v = (np.asarray(values) for values in between(grid.crs, crs).transform(x, y))
    finite = np.isfinite(u) & np.isfinite(v)
    if not finite.any():
        return shapely.Polygon()
    wide, high = 0.1 * np.ptp(u[finite]), 0.1 * np.ptp(v[finite])
    west, south, east, north = (
        u[finite].min() - wide,
        v[finite].min() - high,
        u[finite].max() + wide,
        v[finite].max() + high,
    )
    known = CRS.from_user_input(crs)
    turn = 2 * np.pi / known.axis_info[0].unit_conversion_factor if known.is_geographic else 0.0
    return shapely.union_all([shapely.box(west + n * turn, south, east + n * turn, north) for n in (-1, 0, 1)])


def _edges(geometry: Any, grid: Grid, number: int) -> NDArray[np.float64]:
    """Edges of a polygon in cells from the tile's corner, downwards: (n, 5) col, row, col, row, number."""
    rings = [ring for part in shapely.get_parts(geometry) for ring in (part.exterior, *part.interiors)]
    out = []
    for ring in rings:
        xy = shapely.get_coordinates(ring)
        col, row = (xy[:, 0] - grid.left) / grid.dx, (grid.top - xy[:, 1]) / grid.dy
        edge = np.column_stack([col[:-1], row[:-1], col[1:], row[1:]])
        upwards = edge[:, 1] > edge[:, 3]  # one direction, so that neighbours compute the same crossing
        edge[upwards] = edge[upwards][:, [2, 3, 0, 1]]
        out.append(edge[edge[:, 1] != edge[:, 3]])
    edges = np.concatenate(out) if out else np.empty((0, 4))
    return np.column_stack([edges, np.full(len(edges), number)])
