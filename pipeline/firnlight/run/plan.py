"""What is due, and why? Decided by content: the key of every product against what the ledger says is there."""

from __future__ import annotations

import datetime as dt
import json
import os
from collections.abc import Iterable
from dataclasses import dataclass, replace
from pathlib import Path

from firnlight.core.errors import InputProblem, SettingsProblem
from firnlight.core.grid import Grid
from firnlight.core.layers import day_layers
from firnlight.core.settings import Workflow
from firnlight.io.fingerprints import content_id, text_id
from firnlight.io.scenes import Scene, find_scenes, open_scene
from firnlight.physics import sun
from firnlight.run.contents import Contents
from firnlight.run.ground import Ground
from firnlight.run.ledger import Ledger, Product, Refusal
from firnlight.run.store import BUDGET, ITEM, Store
from firnlight.run.tile_sources import TileJob, lattice_positions, surface_temperature_file
from firnlight.run.weather import Weather, day_weather
from firnlight.stages import chain
from firnlight.stages.albedo import AlbedoNumbers, albedo_numbers, carried_share, seen_from_above
from firnlight.stages.insolation import insolation_facts
from firnlight.stages.longwave import emissivities, longwave_facts


@dataclass(frozen=True)
class Span:
    """Which acquisition dates and tiles are asked for; None = all."""

    since: dt.date | None = None
    until: dt.date | None = None
    tiles: tuple[str, ...] = ()

    def holds(self, tile: str, day: dt.date) -> bool:
        return (
            (self.since is None or day >= self.since)
            and (self.until is None or day <= self.until)
            and (not self.tiles or tile in self.tiles)
        )


@dataclass(frozen=True)
class Decision:
    """What will be done for one tile-day, and the reason."""

    tile: str
    day: dt.date
    what: str  # "make", "done", "nothing left"
    reason: str
    job: TileJob | None = None
    touched: tuple[Product, ...] = ()  # products whose bytes are right though their time has changed


def digest(facts: object) -> str:
    """A short text of plain data, the same for the same data."""
    return text_id(json.dumps(facts, sort_keys=True, ensure_ascii=True, default=_as_plain))


def _as_plain(value: object) -> object:
    if isinstance(value, tuple):
        return list(value)
    raise TypeError(f"{type(value).__name__} cannot be part of a key")


class Planner:
    """Turns settings and inputs into decisions; reads, never writes."""

    def __init__(self, workflow: Workflow, store: Store, ledger: Ledger, workers: int) -> None:
        self.workflow, self.store, self.workers = workflow, store, workers
        self.products = ledger.products()
        self.contents = Contents(ledger)
        self.names = (*day_layers(*workflow.wanted), BUDGET, ITEM)
        self.gaps: list[str] = []  # what the weather files lack
        self.refusals: list[Refusal] = []
        self._numbers: dict[str, AlbedoNumbers] = {}
        self.scenes = self._find()
        self.ground = Ground(workflow, store, self._grids(), self.contents)

    def _find(self) -> dict[tuple[str, dt.date], list[Scene]]:
        scenes, problems = find_scenes(self.workflow.scenes.items, self.workflow.file.parent)
        self.refusals += [Refusal(problem.where, str(problem)) for problem in problems]
        if not scenes and not problems:
            raise SettingsProblem(
                str(self.workflow.file), "scenes.items", self.workflow.scenes.items, "a folder or file with STAC items",
                "correct the path, or write items for plain rasters with `firnlight describe`",
            )  # fmt: skip
        found: dict[tuple[str, dt.date], list[Scene]] = {}
        for scene in newest_versions(scenes):
            found.setdefault((scene.tile, scene.datetime.astimezone(dt.UTC).date()), []).append(scene)
        return found

    def _grids(self) -> dict[str, Grid]:
        """The grid of every tile, in the fixed order: that of the workflow, else by name."""
        first: dict[str, Grid] = {}
        for (tile, _day), scenes in sorted(self.scenes.items(), key=lambda entry: entry[0]):
            first.setdefault(tile, min(scenes, key=lambda s: s.id).grid)
        order = self.workflow.area.tiles
        if order is None:
            return dict(sorted(first.items()))
        unknown = [tile for tile in order if tile not in first]
        if unknown:
            raise SettingsProblem(
                str(self.workflow.file), "area.tiles", unknown[0], "tiles that have scenes: " + ", ".join(sorted(first)),
                "correct the tile's name, or leave it out until its scenes arrive",
            )  # fmt: skip
        return {tile: first[tile] for tile in order}

    def due(self, span: Span) -> list[tuple[str, dt.date]]:
        """Tile-days that are asked for, by date and tile.

        Raises
        ------
        SettingsProblem : a tile that does not exist.
        """
        for tile in span.tiles:
            if tile not in self.ground.grids:
                known = ", ".join(self.ground.grids)
                raise SettingsProblem("--tile", "tile", tile, f"one of {known}", "correct the tile's name")
        wanted = [(tile, day) for tile, day in self.scenes if tile in self.ground.grids and span.holds(tile, day)]
        return sorted(wanted, key=lambda entry: (entry[1], entry[0]))

    def numbers(self, sensor: str) -> AlbedoNumbers:
        if sensor not in self._numbers:
            self._numbers[sensor] = albedo_numbers(self.workflow.albedo, sensor, self.workflow.scenes.reflectance)
        return self._numbers[sensor]

    def numbers_of(self, scene: Scene) -> AlbedoNumbers:
        """Numbers of a scene's sensor, brought to a view from above where that is asked for.

        Raises
        ------
        InputProblem : the item does not tell the view.
        """
        numbers = self.numbers(scene.sensor)
        if self.workflow.albedo.anisotropy == "none":
            return numbers
        if scene.view_deg is None:
            raise InputProblem(
                scene.item_path, "view", "no view:off_nadir and view:azimuth", 'the view, for albedo.anisotropy = "nadir"',
                'add them to the item, or set albedo.anisotropy = "none"',
            )  # fmt: skip
        lon, lat = self.ground.of(scene.tile).centre_deg
        zenith, azimuth, _ = sun.position(scene.datetime.timestamp(), lat, lon)
        return seen_from_above(numbers, float(zenith), float(azimuth), scene.view_deg)

    def refuse(self, scene: Scene, problem: InputProblem) -> None:
        """Leave a scene out of its tile-day and remember why."""
        day = scene.datetime.astimezone(dt.UTC).date()
        self.refusals.append(Refusal(scene.item_path, str(problem), day, scene.tile))
        self.scenes[scene.tile, day] = [one for one in self.scenes[scene.tile, day] if one is not scene]

    def decide(self, tile: str, day: dt.date) -> Decision:
        """What is to be done for one tile-day; where the tile's ground cannot be used, that is a refusal.

        Raises
        ------
        SettingsProblem : the workflow cannot be used at all.
        """
        try:
            return self._decide(tile, day)
        except SettingsProblem:
            raise
        except InputProblem as problem:
            self.refusals.append(Refusal(f"{tile} {day}", str(problem), day, tile))
            return Decision(tile, day, "nothing left", "the ground of the tile cannot be used")

    def _decide(self, tile: str, day: dt.date) -> Decision:
        self._take_contents(tile, day)
        contents = self._usable(tile, day)
        decision = self._compare(tile, day, contents)
        if decision.what != "make":
            return decision
        opened = []
        for scene in list(self.scenes[tile, day]):
            try:
                opened.append(open_scene(scene, self.numbers(scene.sensor).bands))
            except InputProblem as problem:
                self.refuse(scene, problem)
        if len(opened) < len(contents):
            decision = self._compare(tile, day, {s.id: contents[s.id] for s in opened})
        if decision.job is None:
            return decision
        by_id = {scene.id: scene for scene in opened}
        scenes = tuple(by_id[scene.id] for scene in decision.job.scenes)
        return replace(decision, job=replace(decision.job, scenes=scenes))

    def _take_contents(self, tile: str, day: dt.date) -> None:
        pairs = [pair for scene in self.scenes[tile, day] for pair in self._files(scene)]
        self.contents.take(pairs, self.workers)

    def _files(self, scene: Scene) -> list[tuple[str, str]]:
        bands = self.numbers(scene.sensor).bands
        paths = [scene.bands[band].path for band in bands if band in scene.bands]
        paths += [quality.path for quality in scene.quality]
        return [(path, scene.checksums.get(path, "")) for path in dict.fromkeys(paths)]

    def _usable(self, tile: str, day: dt.date) -> dict[str, str]:
        """Content ids of the scenes that can be used, by scene id."""
        grid, good = self.ground.grids[tile], {}
        for scene in list(self.scenes[tile, day]):
            try:
                if scene.reflectance != self.workflow.scenes.reflectance:
                    raise InputProblem(
                        scene.item_path, "kind of reflectance", scene.reflectance, self.workflow.scenes.reflectance,
                        'deliver surface reflectance, or set scenes.reflectance = "top of atmosphere" knowing that the '
                        "atmosphere is then not corrected for",
                    )  # fmt: skip
                difference = grid.difference(scene.grid)
                if difference:
                    raise InputProblem(
                        scene.item_path, "grid", difference, f"the grid of tile {tile}",
                        "deliver the scene on the tile's grid, or give it another tile name",
                    )  # fmt: skip
                self.numbers_of(scene)
                good[scene.id] = self._content(scene)
            except SettingsProblem:
                raise
            except InputProblem as problem:
                self.refuse(scene, problem)
        return good

    def _content(self, scene: Scene) -> str:
        """Everything of a scene that decides its numbers."""
        numbers = self.numbers(scene.sensor)
        bands = []
        for name in numbers.bands:
            if name not in scene.bands:
                raise InputProblem(
                    scene.item_path, f"band {name}", "no asset for it; there are " + ", ".join(scene.bands),
                    f"the bands {', '.join(numbers.bands)} of the chosen conversions",
                    "add the band to the item, or choose another conversion",
                )  # fmt: skip
            source = scene.bands[name]
            ident = self.contents.of(source.path, scene.checksums.get(source.path, ""))
            bands.append([name, ident, source.band, source.scale, source.offset, source.nodata])
        quality = [
            [self.contents.of(q.path, scene.checksums.get(q.path, "")), q.band, text_id(q.flags.hex())]
            for q in scene.quality
        ]
        return digest(
            [
                scene.sensor,
                scene.datetime.isoformat(),
                list(scene.grid.transform),
                scene.grid.crs,
                bands,
                quality,
            ]
        )

    def _compare(self, tile: str, day: dt.date, contents: dict[str, str]) -> Decision:
        if not contents:
            return Decision(tile, day, "nothing left", "no scene of this day can be used")
        ground = self.ground.of(tile)
        scenes = self._preferred(tile, day, contents)
        numbers = tuple(self.numbers_of(scene) for scene in scenes)
        weather = day_weather(self.workflow, day, *lattice_positions(self.ground.grids[tile]))
        keys = self._keys(tile, day, ground.key, [contents[scene.id] for scene in scenes], numbers, weather)
        stale, reasons, touched = self._stale(tile, day, keys)
        if not stale:
            return Decision(tile, day, "done", "nothing has changed", touched=tuple(touched))
        self.gaps += [f"{tile} {day}: {gap}" for gap in weather.gaps]
        kept = tuple(
            self.products[tile, day, name] for name in self.names if name not in stale and (tile, day, name) in self.products
        )
        paths = {path for scene in scenes for path, _ in self._files(scene)}
        surface = surface_temperature_file(self.workflow, tile, day)
        paths |= {path for path in (ground.elevation, ground.land_cover, surface) if path}
        stats = {path: os.stat(path) for path in sorted(paths)}
        job = TileJob(
            store=self.store, tile=tile, day=day, grid=self.ground.grids[tile], scenes=scenes, numbers=numbers,
            ground=ground, workflow=self.workflow, weather_keys=(weather.sky_key, weather.air_key), keys=keys,
            stale=tuple(stale), kept=kept,
            inputs=tuple((path, s.st_size, s.st_mtime_ns) for path, s in stats.items()),
        )  # fmt: skip
        return Decision(tile, day, "make", "; ".join(reasons), job, tuple(touched))

    def _preferred(self, tile: str, day: dt.date, contents: dict[str, str]) -> tuple[Scene, ...]:
        """Higher sun first, then newer, then by content: the order does not depend on names or folders."""
        ground = self.ground.of(tile)
        lon, lat = ground.centre_deg

        def order(scene: Scene) -> tuple[float, str, str]:
            zenith = float(sun.position(scene.datetime.timestamp(), lat, lon)[0])
            return round(zenith, 6), contents[scene.id], scene.id

        return tuple(sorted((s for s in self.scenes[tile, day] if s.id in contents), key=order))

    def _keys(
        self,
        tile: str,
        day: dt.date,
        strata_key: str,
        contents: list[str],
        numbers: tuple[AlbedoNumbers, ...],
        weather: Weather,
    ) -> dict[str, str]:
        workflow, grid, ground = self.workflow, self.ground.grids[tile], self.ground.of(tile)
        classes, longwave = workflow.surface.class_names, workflow.longwave
        facts: dict[str, object] = {name: [one.facts()[name] for one in numbers] for name in numbers[0].facts()}
        # an albedo of the day goes with its light
        of_the_day = workflow.albedo.day == "sun path"
        facts["carried"] = [insolation_facts(workflow.insolation), weather.sky_key, carried_share()] if of_the_day else []
        level = workflow.albedo.illumination != "none"
        facts["level"] = [workflow.albedo.illumination, workflow.albedo.illumination_over_snow, ground.relief_key,
                          ground.land_cover_id] if level else []  # fmt: skip
        facts["insolation"] = insolation_facts(workflow.insolation)
        facts["sky_error"] = [workflow.insolation.relative_uncertainty, workflow.insolation.local_uncertainty]
        facts["longwave"] = longwave_facts(longwave, classes)
        facts["longwave_error"] = [longwave.uncertainty_wm2, longwave.local_uncertainty_wm2] if longwave else []
        facts["correlation"] = workflow.uncertainty.correlation_length_m
        place = [grid.crs, list(grid.transform), list(grid.shape)]
        by_cover = longwave is not None and bool(emissivities(longwave, classes)[1])
        inputs: dict[str, object] = {
            "reflectance": contents, "sun": place, "ground": place, "strata": strata_key,
            "elevation": ground.elevation_id, "weather": weather.sky_key,
            "air": [weather.air_key, self._surface_id(tile, day)],
            "terrain": ground.relief_key if workflow.insolation.terrain else "",
            "covers": ground.land_cover_id if by_cover else "",
        }  # fmt: skip
        keys = chain.product_keys(inputs, facts, digest)
        keys[ITEM] = digest([[name, keys[name]] for name in self.names if name != ITEM])
        return keys

    def _surface_id(self, tile: str, day: dt.date) -> str:
        path = surface_temperature_file(self.workflow, tile, day)
        return self.contents.of(path) if path else ""

    def _stale(self, tile: str, day: dt.date, keys: dict[str, str]) -> tuple[list[str], list[str], list[Product]]:
        stale: list[str] = []
        reasons: dict[str, list[str]] = {}
        touched: list[Product] = []
        for name in self.names:
            known = self.products.get((tile, day, name))
            reason, seen = self._state(known, keys[name], self.store.product(tile, day, name))
            if reason:
                stale.append(name)
                reasons.setdefault(reason, []).append(name)
            elif seen is not None:
                touched.append(seen)
        if len(stale) == len(self.names) and set(reasons) == {"new"}:
            return stale, ["new"], touched
        return stale, [f"{reason}: {', '.join(names)}" for reason, names in reasons.items()], touched

    def _state(self, known: Product | None, key: str, path: Path) -> tuple[str, Product | None]:
        """Why a product is stale ("" where it is not), and its record where only the file's time has changed."""
        if known is None:
            return "new", None
        try:
            found = os.stat(path)
        except FileNotFoundError:
            return "file gone", None
        if known.key != key:
            return "inputs or settings changed", None
        if found.st_size != known.size:
            return "file edited", None
        if found.st_mtime_ns != known.mtime_ns:
            if content_id(path) != known.digest:
                return "file edited", None
            return "", replace(known, mtime_ns=found.st_mtime_ns)
        return "", None


def newest_versions(scenes: Iterable[Scene]) -> list[Scene]:
    """One scene per id: the highest version, then the newest `created`, then the last path."""

    def rank(scene: Scene) -> tuple[tuple[int, ...], str, str, str]:
        parts = tuple(int(part) for part in scene.version.split(".") if part.isdigit())
        return parts, scene.version, scene.created, scene.item_path

    best: dict[str, Scene] = {}
    for scene in scenes:
        if scene.id not in best or rank(scene) > rank(best[scene.id]):
            best[scene.id] = scene
    return [best[name] for name in sorted(best)]
