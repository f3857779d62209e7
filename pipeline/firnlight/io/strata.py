"""Which region, land cover and elevation band does each cell of a tile belong to, and which does it own?"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
import shapely
from numpy.typing import NDArray
from rasterio.windows import Window as RasterWindow

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid, Window
from firnlight.core.settings import ElevationBands
from firnlight.io.atomic import replacing, scratch_path, write_text
from firnlight.io.ground import areas, cell_areas_cm2, centre_lonlat
from firnlight.io.ownership import owned
from firnlight.io.rasters import dataset_grid, open_raster, read_window
from firnlight.io.regions import REST, CellSet, Membership, Region, Regions, on_plane, polygons

NOBODY = -1
BLOCK = 512
WINDOW_ROWS, WINDOW_COLS = BLOCK, 4 * BLOCK
NEGLIGIBLE = 1e-6  # share of a region outside the tiles that is rounding of outlines, not ground
_LIMB_BITS = 26  # halves of an area whose sums over a window stay whole in float64

Edges = tuple[float | None, float | None]


@dataclass(frozen=True)
class Stratum:
    """Ground that shares its regions (sorted ids), land cover and band; None is an open or unknown edge."""

    regions: tuple[str, ...]
    land_cover: str
    band_low_m: float | None
    band_high_m: float | None
    area_cm2: int = 0
    cells: int = 0

    @property
    def order(self) -> tuple[object, ...]:
        """Sorts by content: regions, cover, then bands upwards, the unknown one after the open lower one."""
        low = -np.inf if self.band_low_m is None else self.band_low_m
        high = np.inf if self.band_high_m is None else self.band_high_m
        return self.regions, self.land_cover, low, high


@dataclass(frozen=True)
class StrataTable:
    """What the numbers of a strata raster mean, the key of its inputs, and what to tell the user."""

    key: str
    strata: tuple[Stratum, ...]
    region_names: dict[str, str]
    warnings: tuple[str, ...] = ()


def _table_path(raster: Path) -> Path:
    return raster.with_suffix(".json")


def read_strata_table(raster: Path) -> StrataTable:
    """The table beside a strata raster.

    Raises
    ------
    InputProblem : damaged or gone.
    """
    try:
        body = json.loads(_table_path(raster).read_text(encoding="utf-8"))
        strata = tuple(Stratum(**{**one, "regions": tuple(one["regions"])}) for one in body["strata"])
        return StrataTable(body["key"], strata, body["region_names"], tuple(body["warnings"]))
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise InputProblem(
            str(_table_path(raster)),
            "strata",
            str(error),
            "the table of a strata raster",
            "run `firnlight night`: it makes them again",
        ) from error


def band_edges(bands: ElevationBands | None) -> list[Edges]:
    """(low, high) of every band: below all, the bands from low to high, above all, unknown."""
    if bands is None:
        return [(None, None)]
    count = round((bands.to_m - bands.from_m) / bands.step_m)
    edges = [bands.from_m + n * bands.step_m for n in range(count)] + [bands.to_m]
    inner: list[Edges] = list(pairwise(edges))
    return [(None, edges[0]), *inner, (edges[-1], None), (None, None)]


class _Layers:
    """Elevation band and land cover of the cells of a tile, as one number per cell."""

    def __init__(
        self, grid: Grid, elevation: str | Path | None, land_cover: str | Path | None,
        classes: Mapping[int, str], bands: ElevationBands | None,
    ) -> None:  # fmt: skip
        bands = bands if elevation else None
        self.edges = band_edges(bands)
        self._steps = np.array([low for low, _ in self.edges[1:-1]], np.float64)
        self._classes = sorted(classes.items())
        self.covers = [*dict.fromkeys(name for _, name in self._classes), "other"] if land_cover else ["all"]
        self._elevation, self._cover = _open(elevation, grid) if bands else None, None
        try:
            self._cover = _open(land_cover, grid)
        except InputProblem:
            self.close()
            raise

    def number(self, window: Window) -> NDArray[np.int32]:
        """cover x len(edges) + band: (rows, cols). A cell on a band's edge belongs to the upper band."""
        out = np.zeros((window.rows, window.cols), np.int32)
        if self._cover is not None:
            codes = read_window(self._cover, window)
            out[:] = (len(self.covers) - 1) * len(self.edges)
            for code, name in self._classes:
                out[codes == code] = self.covers.index(name) * len(self.edges)
            out[_no_data(self._cover, codes)] = (len(self.covers) - 1) * len(self.edges)
        if self._elevation is not None:
            height = read_window(self._elevation, window)
            band = self._band(height)
            band[_no_data(self._elevation, height)] = len(self.edges) - 1
            out += band
        return out

    def _band(self, height: NDArray[Any]) -> NDArray[np.int32]:
        """How many band edges lie at or below each height."""
        low, high = (float(v) for v in (np.nanmin(height), np.nanmax(height))) if _any_number(height) else (0.0, 0.0)
        first, last = np.searchsorted(self._steps, (low, high), side="right")
        band = np.full(height.shape, first, np.int32)
        if last - first <= 40:  # a few comparisons are cheaper than a search per cell
            for step in self._steps[first:last]:
                band += height >= step
            return band
        return np.searchsorted(self._steps, height, side="right").astype(np.int32)

    def close(self) -> None:
        for dataset in (self._elevation, self._cover):
            if dataset is not None:
                dataset.close()


def _any_number(values: NDArray[Any]) -> bool:
    return values.dtype.kind != "f" or not np.isnan(values).all()


def _no_data(dataset: Any, values: NDArray[Any]) -> NDArray[np.bool_]:
    """Cells of the file's nodata value, or without a number."""
    none = ~np.isfinite(values) if values.dtype.kind == "f" else np.zeros(values.shape, bool)
    if dataset.nodata is not None and not np.isnan(dataset.nodata):
        none |= values == dataset.nodata
    return none


def _open(path: str | Path | None, grid: Grid) -> Any:
    if path is None:
        return None
    dataset = open_raster(path)
    difference = grid.difference(dataset_grid(dataset))
    if difference:
        dataset.close()
        raise InputProblem(str(path), "grid", difference, "the tile's grid", "warp the raster to the tile's grid")
    return dataset


class _Sums:
    """Strata met so far, under provisional numbers in the order met."""

    def __init__(self, layers: _Layers, regions: Regions) -> None:
        self._layers, self._regions = layers, regions
        self._numbers: dict[Stratum, int] = {}
        self.totals: list[list[int]] = []
        self.contested: dict[str, int] = {}

    def add(self, code: NDArray[np.int32], area_cm2: NDArray[np.int64], sets: list[CellSet]) -> NDArray[np.int32]:
        """Count a window; returns the provisional number of each code (1 + set, cover, band; 0 nobody)."""
        per_set = len(self._layers.covers) * len(self._layers.edges)
        flat, area = code.ravel().astype(np.intp), area_cm2.ravel()
        size = len(sets) * per_set + 1
        cells = np.bincount(flat, minlength=size)
        # two limbs, each a whole number below 2^53 when summed over a window: exact in float64
        low = np.bincount(flat, area & ((1 << _LIMB_BITS) - 1), minlength=size)
        high = np.bincount(flat, area >> _LIMB_BITS, minlength=size) if (area >> _LIMB_BITS).any() else np.zeros(size)
        provisional = np.full(size, NOBODY, np.int32)
        for number in (np.flatnonzero(cells[1:]) + 1).tolist():
            which, rest = divmod(number - 1, per_set)
            cover, band = divmod(rest, len(self._layers.edges))
            stratum = Stratum(sets[which].ids, self._layers.covers[cover], *self._layers.edges[band])
            provisional[number] = self._numbers.setdefault(stratum, len(self._numbers))
            if len(self.totals) < len(self._numbers):
                self.totals.append([0, 0])
            entry = self.totals[provisional[number]]
            entry[0] += int(cells[number])
            entry[1] += (int(high[number]) << _LIMB_BITS) + int(low[number])
            for parent in sets[which].contested:
                self.contested[parent] = self.contested.get(parent, 0) + int(cells[number])
        return provisional

    def table(self, key: str) -> tuple[StrataTable, NDArray[np.int32]]:
        """The table in its final order, and the final number of each provisional one (the last: nobody)."""
        names = self._regions.names
        order = sorted(self._numbers, key=lambda stratum: stratum.order)
        final = np.full(len(order) + 1, NOBODY, np.int32)
        strata = []
        for number, stratum in enumerate(order):
            cells, area = self.totals[self._numbers[stratum]]
            final[self._numbers[stratum]] = number
            strata.append(replace(stratum, area_cm2=area, cells=cells))
        used = sorted({ident for stratum in strata for ident in stratum.regions})
        warnings = [f"region {ident}: rings that cross or touch were mended" for ident in self._regions.repaired]
        warnings += [
            f"region {parent}: {cells} cells lie in several of its parts; the first in the file has them"
            for parent, cells in sorted(self.contested.items())
        ]
        return StrataTable(key, tuple(strata), {ident: names[ident] for ident in used}, tuple(warnings)), final


def build_strata(
    grids: dict[str, Grid], tile: str, regions: Regions, elevation: str | Path | None,
    land_cover: str | Path | None, classes: Mapping[int, str], bands: ElevationBands | None, out: Path,
    key: str = "",
) -> StrataTable:  # fmt: skip
    """Write the strata raster of a tile and its table.

    Parameters
    ----------
    grids : all tiles in the fixed order, for ownership.
    elevation, land_cover : rasters on the tile's grid, or None (bands need an elevation). [m, class code]
    classes : land-cover code -> name; other codes and nodata are "other".
    out : the raster, int32, NOBODY where another tile owns the cell or no region holds it; its table is
    beside.
    key : kept in the table: what the raster was made from.

    Returns
    -------
    The table: only strata that the tile owns cells of. Numbering and sums depend on the content alone.

    Raises
    ------
    InputProblem : a layer on another grid, or damaged; a CRS without areas.
    """
    grid = grids[tile]
    owner, membership, area = owned(grids, tile), Membership(regions, grid), areas(grid)
    layers = _Layers(grid, elevation, land_cover, classes, bands)
    per_set = len(layers.covers) * len(layers.edges)
    profile = {
        "driver": "GTiff", "width": grid.cols, "height": grid.rows, "count": 1, "dtype": "int32",
        "crs": grid.crs, "transform": rasterio.Affine(*grid.transform), "nodata": NOBODY, "tiled": True,
        "blockxsize": BLOCK, "blockysize": BLOCK, "compress": "ZSTD", "zstd_level": 1, "bigtiff": "IF_SAFER",
    }  # fmt: skip
    sums = _Sums(layers, regions)
    draft = scratch_path(out)
    try:
        with replacing(out) as scratch:
            with rasterio.open(draft, "w", **profile) as dataset:
                for window in grid.windows(WINDOW_ROWS, WINDOW_COLS):
                    lengths, numbers, sets = membership.runs(window)
                    first = np.array([n * per_set + 1 if one.ids else 0 for n, one in enumerate(sets)], np.int32)
                    code = np.repeat(first[numbers], lengths).reshape(window.rows, window.cols)
                    mine = owner.mask(window) & (code > 0)
                    if not mine.any():
                        _write(dataset, np.full(mine.shape, NOBODY, np.int32), window)
                        continue
                    code += layers.number(window)
                    code *= mine
                    _write(dataset, sums.add(code, cell_areas_cm2(area, window), sets)[code], window)
            table, final = sums.table(key)
            with rasterio.open(draft) as source, rasterio.open(scratch, "w", **profile) as dataset:
                for window in grid.windows(WINDOW_ROWS, WINDOW_COLS):
                    _write(dataset, final[read_window(source, window)], window)
            # a table beside another raster would be believed: none while the raster changes
            _table_path(out).unlink(missing_ok=True)
    finally:
        layers.close()
        draft.unlink(missing_ok=True)
    body = {**vars(table), "strata": [vars(stratum) for stratum in table.strata]}
    write_text(_table_path(out), json.dumps(body, indent=1, ensure_ascii=False) + "\n")
    return table


def _write(dataset: Any, values: NDArray[Any], window: Window) -> None:
    dataset.write(values, 1, window=RasterWindow(window.col, window.row, window.cols, window.rows))


def _middle_plane(grids: Mapping[str, Grid]) -> str:
    """An equal-area projection around the tiles."""
    lon, lat = (np.radians(v) for v in zip(*(centre_lonlat(grid) for grid in grids.values()), strict=True))
    x, y, z = (np.cos(lat) * np.cos(lon)).sum(), (np.cos(lat) * np.sin(lon)).sum(), np.sin(lat).sum()
    lon_0, lat_0 = np.degrees(np.arctan2(y, x)), np.degrees(np.arctan2(z, np.hypot(x, y)))
    return f"+proj=laea +lat_0={lat_0:.3f} +lon_0={lon_0:.3f} +datum=WGS84 +units=m +type=crs"


def outside_area_cm2(regions: Regions, grids: Mapping[str, Grid]) -> dict[str, int]:
    """Ground of each region outside every tile, by id, rests too; 0 below a millionth of the region. [cm2]

    Measured on an equal-area projection of the ellipsoid (WGS 84). Parts and rests add up to their whole as
    inside the tiles: a region reaches as far as its parts, and of overlapping parts the first in the file
    counts.
    """
    with_shape = [region for region in regions.all if region.geometry is not None]
    found = dict.fromkeys(regions.names, 0)
    if not with_shape:
        return found
    plane = _middle_plane(grids)
    by_crs: dict[str, list[Any]] = {}
    for grid in grids.values():
        by_crs.setdefault(grid.crs, []).append(shapely.box(grid.left, grid.bottom, grid.right, grid.top))
    # tiles of one CRS are joined before they are moved, so that no slit opens between neighbours
    covered = shapely.union_all([polygons(on_plane(shapely.union_all(boxes), crs, plane)) for crs, boxes in by_crs.items()])
    outside, whole = {}, {}
    for region in with_shape:
        moved = polygons(on_plane(region.geometry, regions.crs, plane))
        outside[region.id], whole[region.id] = polygons(shapely.difference(moved, covered)), moved.area

    def reach(region: Region) -> Any:
        return shapely.union_all([outside[region.id], *(reach(part) for part in regions.children.get(region.id, ()))])

    def assign(region: Region, allowed: Any) -> int:
        parts = regions.children.get(region.id, [])
        mine = reach(region) if allowed is None else polygons(shapely.intersection(reach(region), allowed))
        left, below = mine, 0
        for part in parts:
            below += assign(part, left)
            left = polygons(shapely.difference(left, reach(part)))
        rounding = NEGLIGIBLE * whole[region.id] * 1e4
        own = round(mine.area * 1e4) if mine.area * 1e4 > rounding else 0
        found[region.id] = own if own - below > rounding or not parts else below
        if parts:
            found[f"{region.id}{REST}"] = found[region.id] - below
        return found[region.id]

    for root in regions.children[None]:
        assign(root, None)
    return found
