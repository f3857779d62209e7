"""Regional statistics from the totals in the store: any span of days, any of the keys."""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from itertools import groupby

from firnlight.core.dates import periods
from firnlight.core.errors import SettingsProblem
from firnlight.core.settings import Workflow
from firnlight.core.totals import CM2_PER_KM2, Totals
from firnlight.io.fingerprints import text_id
from firnlight.io.regions import ALL
from firnlight.io.sheets import DayTotals, read_totals
from firnlight.physics.longwave import melt_potential_mm_day
from firnlight.run.ground import StaticRow, other_strata, static_rows
from firnlight.run.store import Store

KEYS = ("region", "elevation_band", "land_cover", "snow")
UNITS = {
    "row_id": "", "period_start": "", "period_end": "", "region": "", "region_name": "", "land_cover": "", "snow": "",
    "band_low_m": "m", "band_high_m": "m", "state": "", "area_km2": "km2", "seen_km2": "km2", "coverage": "1",
    "cloud_share": "1", "shadow_share": "1", "missing_share": "1", "scene_count": "1", "cell_count": "1", "albedo": "1",
    "albedo_area_mean": "1", "albedo_p10": "1", "albedo_p50": "1", "albedo_p90": "1", "albedo_u": "1",
    "snow_fraction": "1", "insolation_wm2": "W m-2", "terrain_light_wm2": "W m-2", "reflected_wm2": "W m-2",
    "absorbed_wm2": "W m-2", "absorbed_u": "W m-2", "absorbed_u_independent": "W m-2", "absorbed_u_local": "W m-2",
    "absorbed_u_shared": "W m-2", "net_longwave_wm2": "W m-2", "net_radiation_wm2": "W m-2", "net_radiation_u": "W m-2",
    "absorbed_gj": "GJ", "melt_potential_mm_day": "mm", "limited_share": "1", "result": "",
}  # fmt: skip
CAUTIONS = (
    "Maps may be days old: their dates are in the table.",
    "Radiative melt potential is not runoff: no cold content, rain on snow, turbulent heat, refreezing or routing.",
    "Not for flood warning or avalanche judgement by itself: use the warnings of the responsible national and local "
    "services, follow local codes, and have results that people's safety rests on reviewed by licensed practitioners.",
)
CLOUDLESS = "Insolation is that of a cloudless sky: it overstates the energy of cloudy days."
_EMPTY = Totals()
_Group = tuple[str, str, float | None, float | None]  # region, land cover, band


@dataclass(frozen=True)
class Answer:
    """Rows of a budget table with what is needed to read them."""

    rows: list[dict[str, object]]
    since: dt.date
    until: dt.date
    as_of: dt.date
    area: str
    cautions: tuple[str, ...] = CAUTIONS

    def about(self) -> dict[str, object]:
        return {
            "version": 1, "area": self.area, "since": self.since.isoformat(), "until": self.until.isoformat(),
            "as_of": self.as_of.isoformat(), "fluxes": "24-hour means of UTC days per unit of horizontal area",
            "cautions": list(self.cautions),
        }  # fmt: skip


@dataclass
class _Ground:
    """Totals of one group in one period, by state and of all states ("all"), and what they came from."""

    states: dict[str, Totals] = field(default_factory=dict)
    scenes: set[str] = field(default_factory=set)
    today: dict[str, Totals] = field(default_factory=dict)

    def add(self, state: str, totals: Totals) -> None:
        """Add ground of the day that is being gathered."""
        for name in (state, "all"):
            self.today[name] = self.today[name] + totals if name in self.today else totals

    def end_day(self) -> None:
        """All ground of a day is there: only now are the day's local errors known."""
        for name, totals in self.today.items():
            ended = totals.end_of_day()
            self.states[name] = self.states[name] + ended if name in self.states else ended
        self.today = {}


def key_names(by: str) -> tuple[str, ...]:
    """Check a list of keys such as "region,snow".

    Raises
    ------
    SettingsProblem : an unknown key.
    """
    names = tuple(name.strip() for name in by.split(",") if name.strip())
    for name in names:
        if name not in KEYS:
            raise SettingsProblem("--by", "key", name, "keys of " + ", ".join(KEYS), "correct the key")
    return names


def regional_budget(
    workflow: Workflow, store: Store, since: dt.date | None, until: dt.date | None, by: tuple[str, ...], every: str | None,
    as_of: dt.date,
) -> Answer:  # fmt: skip
    """Regional statistics of a span of days.

    Raises
    ------
    SettingsProblem : the store has no totals, or none in the span.
    """
    days = [read_totals(path) for path in store.budget_files()]
    if workflow.area.tiles is not None:
        days = [one for one in days if one.tile in workflow.area.tiles]
    inside = [one for one in days if (since is None or one.day >= since) and (until is None or one.day <= until)]
    if not inside:
        held = f"{min(d.day for d in days)} to {max(d.day for d in days)}" if days else "nothing"
        raise SettingsProblem(
            str(store.root), "days with totals", f"none in the span (the store holds {held})", "at least one day",
            "run `firnlight night` first, or correct --since and --until",
        )  # fmt: skip
    since = since or min(one.day for one in inside)
    until = until or max(one.day for one in inside)
    ground = static_rows(store, {**dict.fromkeys(one.tile for one in days), **_strata_keys(store, inside)})
    rows: list[dict[str, object]] = []
    starts = workflow.area.hydrological_year_starts
    for first, last in periods(since, until, every, starts):
        part = [one for one in inside if first <= one.day <= last]
        rows += _period_rows(workflow, first, last, part, ground, by, as_of)
    return Answer(rows, since, until, as_of, workflow.area.name, cautions(workflow))


def cautions(workflow: Workflow) -> tuple[str, ...]:
    """What a reader of this workflow's numbers must be told."""
    cloudless = workflow.insolation.source == "clear-sky" and workflow.insolation.cloud is None
    return (*CAUTIONS, CLOUDLESS) if cloudless else CAUTIONS


def _strata_keys(store: Store, days: Iterable[DayTotals]) -> dict[str, str]:
    """Tile -> key of the strata below its totals; days of one tile must agree."""
    keys: dict[str, str] = {}
    for one in days:
        if keys.setdefault(one.tile, one.strata) != one.strata:
            raise other_strata(store, one.tile)
    return keys


def _grouping(by: tuple[str, ...]) -> Callable[[str, str, float | None, float | None], _Group]:
    def group(region: str, cover: str, low: float | None, high: float | None) -> _Group:
        band = (low, high) if "elevation_band" in by else (None, None)
        return region, cover if "land_cover" in by else "all", *band

    return group


def _period_rows(
    workflow: Workflow, first: dt.date, last: dt.date, days: Iterable[DayTotals], ground: list[StaticRow],
    by: tuple[str, ...], as_of: dt.date,
) -> list[dict[str, object]]:  # fmt: skip
    group = _grouping(by)
    count = (last - first).days + 1
    area: dict[_Group, int] = {}
    names: dict[str, str] = {ALL: workflow.area.name}
    only_all = all(place.region == ALL for place in ground)

    def wanted(region: str) -> bool:
        """Regions may overlap, so without the key the rows of ALL are taken, where every cell counts once."""
        return (region == ALL) == ("region" not in by or only_all)

    for place in ground:
        if not wanted(place.region):
            continue
        names.setdefault(place.region, place.region_name)
        key = group(place.region, place.land_cover, place.band_low_m, place.band_high_m)
        area[key] = area.get(key, 0) + place.area_cm2
    found: dict[_Group, _Ground] = {key: _Ground() for key in area}
    keys = set()
    for _, of_date in groupby(sorted(days, key=lambda one: (one.day, one.tile)), key=lambda one: one.day):
        for day in of_date:
            keys.add(day.key)
            for row in day.rows:
                if not wanted(row.region):
                    continue
                key = group(row.region, row.land_cover, row.band_low_m, row.band_high_m)
                here = found.setdefault(key, _Ground())
                here.add(row.snow, row.totals)
                if row.snow != "unseen":
                    here.scenes.update(day.scenes)
        for here in found.values():
            here.end_day()
    result = text_id(" ".join(sorted(keys)))[:16]
    state = "final" if (as_of - last).days >= workflow.store.final_after_days else "provisional"
    rows = []
    for key in sorted(found, key=_order):
        region, cover, low, high = key
        common: dict[str, object] = {
            "period_start": first, "period_end": last, "region": region, "region_name": names.get(region, region),
            "land_cover": cover, "band_low_m": low, "band_high_m": high, "state": state, "result": result,
        }  # fmt: skip
        for snow, numbers in _group_rows(found[key], area.get(key, 0), count, "snow" in by, workflow.regions.least_coverage):
            band = f"{_edge(low)}..{_edge(high)}" if low is not None or high is not None else "all"
            where = f"{first.isoformat()}..{last.isoformat()}/{region}/{cover}/{snow}/{band}@{result}"
            rows.append({**common, **numbers, "snow": snow, "row_id": where})
    return rows


def _edge(height: float | None) -> str:
    return "" if height is None else f"{height:g}"


def _order(key: _Group) -> tuple[str, str, float, float]:
    region, cover, low, high = key
    return region, cover, -math.inf if low is None else low, math.inf if high is None else high


def _group_rows(
    ground: _Ground, area: int, days: int, by_snow: bool, least_coverage: float
) -> list[tuple[str, Mapping[str, object]]]:
    whole = ground.states.get("all", _EMPTY)
    all_days = max(area * days, whole.area + whole.unseen_area)
    never = all_days - whole.area - whole.unseen_area  # days without a scene, ground outside every tile
    other = never + whole.unseen_area - whole.cloud - whole.shadow
    shares: dict[str, object] = {
        "coverage": whole.area / all_days if all_days else math.nan,
        "cloud_share": whole.cloud / all_days if all_days else math.nan,
        "shadow_share": whole.shadow / all_days if all_days else math.nan,
        "missing_share": other / all_days if all_days else math.nan,
        "scene_count": len(ground.scenes),
    }
    enough = bool(whole.area) and whole.area / all_days >= least_coverage
    if not by_snow:
        numbers = _numbers(whole, enough)
        return [
            (
                "all",
                {
                    **shares,
                    **numbers,
                    "area_km2": all_days / days / CM2_PER_KM2,
                    "seen_km2": whole.area / days / CM2_PER_KM2,
                },
            )
        ]
    rows: list[tuple[str, Mapping[str, object]]] = []
    for state in ("snow", "snow-free"):
        one = ground.states.get(state, _EMPTY)
        if one.area:
            km2 = one.area / days / CM2_PER_KM2
            numbers = _numbers(one, enough)
            if state == "snow" and enough:
                numbers["melt_potential_mm_day"] = float(melt_potential_mm_day(one.melt_wm2))
            rows.append((state, {**shares, **numbers, "area_km2": km2, "seen_km2": km2}))
    unseen = all_days - whole.area
    if unseen:
        rows.append(
            (
                "unseen",
                {
                    **shares,
                    **_numbers(_EMPTY, False),
                    "area_km2": unseen / days / CM2_PER_KM2,
                    "seen_km2": 0.0,
                },
            )
        )
    return rows


def _numbers(one: Totals, enough: bool) -> dict[str, object]:
    """Columns of seen ground; a mean of too little is empty, an energy never is."""
    means = {
        "albedo": one.albedo_ratio, "albedo_area_mean": one.albedo_area_mean, "albedo_p10": one.albedo_percentile(0.1),
        "albedo_p50": one.albedo_percentile(0.5), "albedo_p90": one.albedo_percentile(0.9), "albedo_u": one.albedo_u,
        "snow_fraction": one.snow_fraction_mean, "insolation_wm2": one.insolation_wm2, "reflected_wm2": one.reflected_wm2,
        "absorbed_wm2": one.absorbed_wm2, "absorbed_u": one.absorbed_u, "absorbed_u_independent": one.absorbed_u_independent,
        "absorbed_u_local": one.absorbed_u_local, "absorbed_u_shared": one.absorbed_u_shared,
        "terrain_light_wm2": one.terrain_light_wm2, "net_longwave_wm2": one.net_longwave_wm2,
        "net_radiation_wm2": one.net_radiation_wm2, "net_radiation_u": one.net_radiation_u,
    }  # fmt: skip
    means["melt_potential_mm_day"] = math.nan
    numbers: dict[str, object] = {name: value if enough else math.nan for name, value in means.items()}
    numbers["cell_count"] = one.cells
    numbers["absorbed_gj"] = one.absorbed_gj if one.area else math.nan
    numbers["limited_share"] = one.limited_area / one.area if one.area else math.nan
    return numbers
