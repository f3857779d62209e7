"""How is the whole demo area written, from its scenes to a ready workflow?"""

from __future__ import annotations

import json
import time
from collections.abc import Callable
from pathlib import Path

from firnlight.core.tables import load_table
from firnlight.demo import layout, sky, terrain, weather
from firnlight.demo.scenes import Overpass, write_tile
from firnlight.demo.slopes import LARGEST_CELLS
from firnlight.demo.truth import AEROSOL_500NM, OZONE_CM, WATER_VAPOUR_CM
from firnlight.io.atomic import write_text
from firnlight.run.progress import Listener, Step, silent

AREA_NAME = "Morrowfell snowfields"


def workflow_text(data: str, store: str) -> str:
    """A workflow for a demo area.

    Parameters
    ----------
    data : path from the workflow's folder to the area, "" for the same folder.
    store : path from there to the store.
    """
    at = f"{data}/" if data else ""
    classes = ", ".join(f'{code} = "{name}"' for code, name in terrain.CLASSES.items())
    air = f"aerosol_500nm = {AEROSOL_500NM}, water_vapour_cm = {WATER_VAPOUR_CM}, ozone_cm = {OZONE_CM}"
    weather = (
        f'grid = "{at}weather.nc", air_temperature = "air_temperature", vapour_pressure = "vapour_pressure", '
        'cloud_fraction = "cloud_fraction", elevation = "surface_altitude"'
    )
    return f"""\
# The {AREA_NAME}, an invented place: a workflow to run and to copy.
[area]
name = "{AREA_NAME}"
hydrological_year_starts = "10-01"     # month-day

[scenes]
items = "{at}scenes"
look_back_days = 30

[surface]
elevation = "{at}static/{{tile}}/elevation.tif"
land_cover = "{at}static/{{tile}}/land_cover.tif"
classes = {{ {classes} }}

[regions]
file = "{at}regions.gpkg"
id_field = "id"
name_field = "name"
parent_field = "parent"
elevation_bands = {{ from = 800, to = 3200, step = 200 }}     # m

[albedo]
conversion = {{ ground = "liang2001", snow = "liang2001" }}
snow_fraction = "gascoin_2020"

[insolation]
source = "clear-sky"
atmosphere = {{ {air} }}
terrain = true
relative_uncertainty = 0.01            # what this invented sky errs by on a day, shared by all cells
local_uncertainty = 0.03               # and what it errs by here and there

[longwave]
source = {{ {weather} }}
method = "brutsaert1975"
cloud = "kustas1994"
lapse_k_per_m = 0.0062
emissivity = {{ snow = 0.99, ground = 0.97 }}
uncertainty_wm2 = 2.0
local_uncertainty_wm2 = 6.0

[uncertainty]
correlation_length_m = 1500.0

[store]
path = "{store}"
final_after_days = 14

[engine]
run_on = "threads"
workers = "all"
memory_per_worker = "2 GiB"
"""


def _about(seed: int, overpasses: list[Overpass], climate: weather.Climate) -> str:
    table = load_table("demo_spectra")
    facts = {
        "what": "the truth behind an invented area; every number of it is made up",
        "fluxes": f"insolation and net longwave on slopes, of tiles up to {LARGEST_CELLS} cells a side; absorbed "
        "shortwave is (1 - albedo) x insolation, net radiation is that plus net longwave",
        "seed": seed,
        "relative_calibration_error": round(sky.calibration(seed)[0], 6),
        "noise": table.row("sensor")["noise"],
        "sky": {name: value for name, value in table.row("sky").items() if name != "source"},
        "stations": {weather.STATION: weather.station_place()},
        "overpasses": [
            {
                "time": one.day.time.isoformat(),
                "sun_zenith_deg": round(one.day.zenith_deg, 4),
                "sun_azimuth_deg": round(one.day.azimuth_deg, 4),
                "snowline_m": round(one.day.snowline_m, 1),
                "snow_age_days": round(one.day.snow_age_days, 2),
                "lake_snow_share": round(one.day.lake_snow, 3),
                "cloud_share": round(cover, 3),
            }
            for one, cover in zip(overpasses, climate.covers, strict=True)
        ],
    }
    return json.dumps(facts, indent=1) + "\n"


def write_demo(
    folder: Path,
    tiles: int = 2,
    size: int = 256,
    scenes: int = 3,
    years: int = 1,
    seed: int = 7,
    on_step: Callable[[Step], None] | None = None,
) -> list[Path]:
    """Write the invented Morrowfell area with its truth and a ready workflow.

    Parameters
    ----------
    folder : made if it is not there; files of these names in it are replaced.
    tiles : number of tiles; the first half lies in UTM zone 24, the rest in zone 25.
    size : rows and columns of a tile, cells of 30 m; at least 16.
    scenes : overpasses a year, each seen by all tiles.
    years : hydrological years, the last one ends in 2031.
    seed : of weather, clouds and noise; the ground is the same for every seed.
    on_step : told of each scene when it is written.

    Returns
    -------
    All files written. The same arguments give the same bytes on the same libraries.
    """
    if min(tiles, scenes, years) < 1 or size < 16:
        raise ValueError(f"tiles={tiles}, size={size}, scenes={scenes}, years={years}: at least 1 each, and 16 cells")
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    area = layout.tiles(tiles, size)
    around = layout.extent(area)
    days = [sky.overpass(when, seed) for when in layout.overpasses(scenes, years)]
    overpasses = [Overpass(number, day, around) for number, day in enumerate(days)]
    climate = weather.Climate.of(seed, days, around)
    tell: Listener = on_step or silent
    done, total, last = 0, len(area) * len(overpasses), time.perf_counter()

    def written_one(scene: str) -> None:
        nonlocal done, last
        done, before, last = done + 1, last, time.perf_counter()
        tell(Step(scene, done, total, "made", last - before))

    written: list[Path] = []
    for tile in area:
        written += write_tile(folder, tile, overpasses, climate, on_scene=written_one)
    layout.write_regions(folder / "regions.gpkg", around)
    written += [folder / "regions.gpkg", *weather.write_weather(folder, climate, around)]
    written.append(weather.write_station(folder / "stations" / f"{weather.STATION}.csv", climate))
    for name, text in (
        ("truth/about.json", _about(seed, overpasses, climate)),
        ("workflow.toml", workflow_text("", "store")),
    ):
        write_text(folder / name, text)
        written.append(folder / name)
    return written
