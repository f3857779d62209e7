"""What never changes from night to night: each tile's place, cell areas, elevation and strata."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

from firnlight.core.errors import InputProblem, SettingsProblem
from firnlight.core.grid import Grid
from firnlight.core.settings import Workflow
from firnlight.io import ground as places
from firnlight.io.atomic import write_text
from firnlight.io.elevation import reaches, square_cell_m
from firnlight.io.fingerprints import text_id
from firnlight.io.ownership import neighbours
from firnlight.io.rasters import grid_of
from firnlight.io.regions import Regions, read_regions, whole_area
from firnlight.io.sheets import stratum_regions
from firnlight.io.strata import build_strata, outside_area_cm2, read_strata_table
from firnlight.run.contents import Contents
from firnlight.run.relief import REACH_M, RELIEF_VERSION, build_relief, is_made, margin_cells
from firnlight.run.store import Store
from firnlight.stages.insolation import DIRECTIONS

STRATA_VERSION = 2


@dataclass(frozen=True)
class TileGround:
    """The ground of one tile."""

    centre_deg: tuple[float, float]  # longitude, latitude
    elevation: str | None
    elevation_id: str
    key: str  # of the strata: region, cover, band and ownership of every cell
    land_cover: str | None = None
    land_cover_id: str = ""
    relief_key: str = ""  # of slope, aspect, horizon and sky view; "" where they are not asked for
    around: tuple[str, ...] = ()  # elevation files that may cover the ground beside the tile, the best last


class Ground:
    """The ground of all tiles, worked out when first asked for."""

    def __init__(self, workflow: Workflow, store: Store, grids: dict[str, Grid], contents: Contents) -> None:
        self.workflow, self.store, self.grids, self.contents = workflow, store, grids, contents
        self._tiles: dict[str, TileGround] = {}
        self.warnings: list[str] = []

    def _path(self, written: str | None, tile: str, key: str) -> Path | None:
        if written is None:
            return None
        path = self.workflow.tile_path(written, tile)
        if not path.is_file():
            raise InputProblem(str(self.workflow.file), key, f"no file {path}", "a raster for every tile", f"correct {key}")
        return path

    def of(self, tile: str) -> TileGround:
        """The ground of a tile; files are named and fingerprinted, not read.

        Raises
        ------
        InputProblem : a file named in the workflow is not there, or lies on another grid.
        """
        if tile not in self._tiles:
            grid = self.grids[tile]
            elevation = self._path(self.workflow.surface.elevation, tile, "surface.elevation")
            land_cover = self._path(self.workflow.surface.land_cover, tile, "surface.land_cover")
            for path in (elevation, land_cover):
                difference = grid.difference(grid_of(str(path))) if path else None
                if difference:
                    raise InputProblem(
                        str(path),
                        "grid",
                        difference,
                        f"the grid of tile {tile}",
                        "warp the raster to the tile's grid",
                    )
            elevation_id = self.contents.of(elevation) if elevation else ""
            near = {tile, *neighbours(self.grids, tile)}
            facts = [
                STRATA_VERSION, self._regions_facts, elevation_id, self.contents.of(land_cover) if land_cover else "",
                sorted(self.workflow.surface.class_names.items()),
                [[name, _place(self.grids[name])] for name in self.grids if name in near], tile,
            ]  # fmt: skip
            cover_id = self.contents.of(land_cover) if land_cover else ""
            around, relief_key = self._relief(tile, elevation_id) if self.workflow.needs_relief else ((), "")
            self._tiles[tile] = TileGround(
                places.centre_lonlat(grid), str(elevation) if elevation else None, elevation_id, text_id(json.dumps(facts)),
                str(land_cover) if land_cover else None, cover_id, relief_key, around,
            )  # fmt: skip
        return self._tiles[tile]

    def _relief(self, tile: str, elevation_id: str) -> tuple[tuple[str, ...], str]:
        """Elevation files around a tile, and the key of its relief."""
        grid, around = self.grids[tile], []
        surface = self.workflow.surface
        cell_m = square_cell_m(grid, str(surface.elevation))
        margin = margin_cells(cell_m) * grid.dx  # in the grid's own units
        if surface.wider_elevation is not None:
            wider = self._path(surface.wider_elevation, tile, "surface.wider_elevation")
            around.append(str(wider))
        for name, other in sorted(self.grids.items()):
            path = self.workflow.tile_path(str(surface.elevation), name)
            if name != tile and path.is_file() and reaches(other, grid, margin):
                around.append(str(path))
        facts = [RELIEF_VERSION, DIRECTIONS, REACH_M, _place(grid), elevation_id, [self.contents.of(p) for p in around]]
        return tuple(around), text_id(json.dumps(facts))

    def files(self, tile: str) -> list[str]:
        """Elevation, of the tile and around it, and land cover that are there."""
        surface = self.workflow.surface
        written = (surface.elevation, surface.land_cover, surface.wider_elevation if self.workflow.needs_relief else None)
        paths = [self.workflow.tile_path(one, tile) for one in written if one is not None]
        return [str(path) for path in paths if path.is_file()]

    @cached_property
    def _regions_facts(self) -> list[object]:
        settings = self.workflow.regions
        bands = settings.elevation_bands
        ident = self.contents.of(self._regions_path(settings.file)) if settings.file else self.workflow.area.name
        return [
            ident, settings.layer, settings.id_field, settings.name_field, settings.parent_field,
            [bands.from_m, bands.to_m, bands.step_m] if bands else None,
        ]  # fmt: skip

    def _regions_path(self, written: str) -> Path:
        path = self.workflow.path(written)
        if not path.is_file():
            raise SettingsProblem(
                str(self.workflow.file),
                "regions.file",
                f"no file {path}",
                "a vector file with polygons",
                "correct regions.file",
            )
        return path

    @cached_property
    def regions(self) -> Regions:
        settings = self.workflow.regions
        if settings.file is None:
            return whole_area(self.workflow.area.name)
        return read_regions(
            self._regions_path(settings.file),
            settings.layer,
            settings.id_field,
            settings.name_field,
            settings.parent_field,
        )

    def prepare(self, tile: str) -> None:
        """Build the strata of a tile where the store does not hold them yet."""
        path, ground = self.store.strata(tile), self.of(tile)
        if path.is_file():
            try:
                if read_strata_table(path).key == ground.key:
                    return
            except InputProblem:
                pass  # damaged: build again
        surface = self.workflow.surface
        table = build_strata(
            self.grids, tile, self.regions, ground.elevation,
            str(self.workflow.tile_path(surface.land_cover, tile)) if surface.land_cover else None,
            surface.class_names, self.workflow.regions.elevation_bands, path, ground.key,
        )  # fmt: skip
        self.warnings += [f"{tile}: {warning}" for warning in table.warnings]

    def prepare_relief(self, tile: str, workers: int) -> None:
        """Work out slope, horizon and sky view of a tile where they are asked for and not in the store."""
        ground, folder = self.of(tile), self.store.relief(tile)
        if ground.relief_key and not is_made(folder, ground.relief_key):
            assert ground.elevation is not None
            table = build_relief(self.grids[tile], ground.elevation, ground.around, folder, ground.relief_key, workers)
            self.warnings += [f"{tile}: {one} cannot be read: its ground casts no shadow here" for one in table.unread]

    def note_outside(self) -> None:
        """Write down each region's ground outside every tile, unless the same is written already."""
        path = outside_file(self.store)
        facts = text_id(json.dumps([self._regions_facts, [[name, _place(grid)] for name, grid in self.grids.items()]]))
        try:
            if _outside(self.store)["key"] == facts:
                return
        except InputProblem:
            pass  # gone or damaged: written again
        body = {
            "key": facts, "cm2": outside_area_cm2(self.regions, self.grids),
            "names": self.regions.names, "parents": self.regions.parents,
        }  # fmt: skip
        path.parent.mkdir(parents=True, exist_ok=True)
        write_text(path, json.dumps(body, indent=1, ensure_ascii=False) + "\n")


def other_strata(store: Store, tile: str) -> InputProblem:
    """Totals and ground of a tile that do not belong together must never be shown as one table."""
    return InputProblem(
        str(store.strata(tile)), f"ground of tile {tile}", "other regions, bands or covers than its totals were summed over",
        "totals and ground of one setting", "run `firnlight night` without dates or --tile: it brings all days up to date",
    )  # fmt: skip


def _place(grid: Grid) -> list[object]:
    return [grid.crs, list(grid.transform), list(grid.shape)]


def outside_file(store: Store) -> Path:
    return store.root / "terrain" / "regions.json"


def _outside(store: Store) -> dict[str, Any]:
    path = outside_file(store)
    try:
        body = json.loads(path.read_text(encoding="utf-8"))
        return {name: body[name] for name in ("key", "cm2", "names", "parents")}
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise InputProblem(
            str(path), "regions", str(error), "the regions of this store", "run `firnlight night`: it writes them again"
        ) from error


@dataclass(frozen=True)
class StaticRow:
    """Ground of a region with one land cover in one elevation band, whatever was seen of it."""

    region: str
    region_name: str
    land_cover: str
    band_low_m: float | None
    band_high_m: float | None
    area_cm2: int


def static_rows(store: Store, strata_keys: Mapping[str, str | None]) -> list[StaticRow]:
    """All ground of some tiles by region, cover and band, with what lies outside every tile.

    Parameters
    ----------
    strata_keys : tile -> key of the strata that its totals were summed over; None: no totals are shown.

    Raises
    ------
    InputProblem : the strata of a tile are gone, or others than its totals were summed over.
    """
    rows = []
    outside = _outside(store)
    for tile, key in sorted(strata_keys.items()):
        table = read_strata_table(store.strata(tile))
        if key not in (None, table.key) or not store.strata(tile).is_file():
            raise other_strata(store, tile)
        for stratum in table.strata:
            for region in stratum_regions(stratum):
                name = table.region_names.get(region, "")
                edges = stratum.band_low_m, stratum.band_high_m
                rows.append(StaticRow(region, name, stratum.land_cover, *edges, stratum.area_cm2))
    rows += [
        StaticRow(region, outside["names"][region], "outside the tiles", None, None, area)
        for region, area in outside["cm2"].items()
        if area
    ]
    return rows
