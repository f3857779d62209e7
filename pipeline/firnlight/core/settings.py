"""What did the user ask for? One TOML file, checked, as frozen models."""

from __future__ import annotations

import difflib
import re
import tomllib
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, field_validator, model_validator

from firnlight.core.errors import SettingsProblem

LARGEST_WORKFLOW_BYTES = 1_000_000  # a workflow is written by hand; anything larger is another file


class _Section(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


class Area(_Section):
    name: str = "all"
    hydrological_year_starts: str = "10-01"
    tiles: tuple[str, ...] | None = Field(default=None, strict=False)

    @field_validator("hydrological_year_starts")
    @classmethod
    def _a_day(cls, value: str) -> str:
        if not re.fullmatch(r"(0[1-9]|1[0-2])-(0[1-9]|1\d|2[0-8])", value):
            raise ValueError('wanted month and day such as "10-01", day 01 to 28')
        return value


class Scenes(_Section):
    items: str
    look_back_days: Annotated[int, Field(ge=0, le=36600)] = 30
    reflectance: Literal["surface", "top of atmosphere"] = "surface"


class Surface(_Section):
    elevation: str | None = None
    wider_elevation: str | None = None
    land_cover: str | None = None
    classes: dict[str, str] = {}

    @field_validator("classes")
    @classmethod
    def _codes(cls, value: dict[str, str]) -> dict[str, str]:
        for code in value:
            if not re.fullmatch(r"-?\d{1,9}", code):
                raise ValueError(f"class code {code!r} is not a whole number")
        return value

    @property
    def class_names(self) -> dict[int, str]:
        return {int(code): name for code, name in self.classes.items()}


class ElevationBands(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, populate_by_name=True)
    from_m: Annotated[float, Field(alias="from")]
    to_m: Annotated[float, Field(alias="to")]
    step_m: Annotated[float, Field(alias="step", gt=0)]

    @model_validator(mode="after")
    def _edges(self) -> ElevationBands:
        if self.to_m <= self.from_m:
            raise ValueError("`to` must lie above `from`")
        count = (self.to_m - self.from_m) / self.step_m
        if abs(count - round(count)) > 1e-9 or count > 1000:
            raise ValueError("from .. to must be a whole number of steps, at most 1000")
        return self


class Regions(_Section):
    file: str | None = None
    layer: str | None = None
    id_field: str | None = None
    name_field: str | None = None
    parent_field: str | None = None
    elevation_bands: ElevationBands | None = None
    least_coverage: Annotated[float, Field(ge=0, le=1)] = 0.1


class Conversions(_Section):
    ground: str = "liang2001"
    snow: str = "liang2001"


class Albedo(_Section):
    conversion: Conversions = Conversions()
    snow_fraction: str = "gascoin_2020"
    anisotropy: Literal["none", "nadir"] = "none"
    day: Literal["overpass", "sun path"] = "overpass"
    illumination: Literal["none", "c", "scs+c"] = "none"
    illumination_over_snow: bool = False


class GridFile(_Section):
    """A file of grids (NetCDF, Zarr, GeoTIFF); {date} and {year} in its path become the day's.

    The rest says what the file itself does not: what a time stands for, units, lengths and starts of accumulation.
    """

    grid: str
    label: Literal["start", "end", "middle", "instant"] | None = None
    step_hours: Annotated[float, Field(gt=0, le=24)] | None = None
    accumulated: Literal["interval", "since start"] | None = None
    starts_hours: tuple[float, ...] | None = Field(default=None, strict=False)
    crs: str | None = None


class GridField(GridFile):
    variable: str | None = None
    units: str | None = None


class StationSource(_Section):
    station: str


class SuppliedGrid(GridField):
    elevation: str | GridField | None = None  # height of the grid's own ground: a variable beside it, or another file


class AtmosphereSettings(_Section):
    aerosol_500nm: Annotated[float, Field(ge=0, le=3)] | GridField = 0.1
    aerosol_380nm: Annotated[float, Field(ge=0, le=5)] | GridField | None = None
    water_vapour_cm: Annotated[float, Field(ge=0, le=10)] | GridField = 1.0
    ozone_cm: Annotated[float, Field(ge=0, le=1)] | GridField = 0.3


class Insolation(_Section):
    source: Literal["clear-sky"] | SuppliedGrid | StationSource = "clear-sky"
    cloud: GridField | None = None
    atmosphere: AtmosphereSettings = AtmosphereSettings()
    terrain: bool = False
    slope_parallel: bool = False
    relative_uncertainty: Annotated[float, Field(ge=0, le=1)] = 0.05
    local_uncertainty: Annotated[float, Field(ge=0, le=1)] = 0.0

    @model_validator(mode="after")
    def _cloud_once(self) -> Insolation:
        if self.cloud is not None and self.source != "clear-sky":
            raise ValueError('`cloud` goes with source = "clear-sky" only: a supplied series holds its cloud already')
        if self.slope_parallel and not self.terrain:
            raise ValueError("slope_parallel needs terrain = true")
        return self


class WeatherGrid(GridFile):
    air_temperature: str
    vapour_pressure: str | None = None
    dew_point: str | None = None
    relative_humidity: str | None = None
    cloud_fraction: str | None = None
    elevation: str | GridField | None = None
    units: dict[Literal["air_temperature", "vapour_pressure", "dew_point", "relative_humidity", "cloud_fraction"], str] = {}

    @model_validator(mode="after")
    def _one_humidity(self) -> WeatherGrid:
        if sum(one is not None for one in (self.vapour_pressure, self.dew_point, self.relative_humidity)) != 1:
            raise ValueError("name exactly one of vapour_pressure, dew_point, relative_humidity")
        return self


class Longwave(_Section):
    source: WeatherGrid
    method: str = "prata1996"
    cloud: str = "unsworth_monteith1975"
    surface_temperature: str | None = None  # raster on the tile's grid in K; {tile} and {date} in its path
    lapse_k_per_m: Annotated[float, Field(ge=-0.02, le=0.02)] = 0.0065
    emissivity: dict[str, Annotated[float, Field(ge=0.5, le=1)]] = {}
    uncertainty_wm2: Annotated[float, Field(ge=0, le=200)] = 10.0
    local_uncertainty_wm2: Annotated[float, Field(ge=0, le=200)] = 5.0


class Uncertainty(_Section):
    correlation_length_m: Annotated[float, Field(ge=1000, le=1e6)] = 5000.0


class Station(_Section):
    file: str
    longitude: Annotated[float, Field(ge=-360, le=360)]
    latitude: Annotated[float, Field(ge=-90, le=90)]
    elevation_m: Annotated[float, Field(ge=-500, le=9000)]
    sensor_height_m: Annotated[float, Field(ge=0, le=100)] = 2.0
    time: str = "time_utc"
    sw_down: str = "sw_down_wm2"
    units: str | None = None  # of sw_down, where its name does not tell them
    label: Literal["start", "end", "middle"] = "start"
    utc_offset_h: Annotated[float, Field(ge=-14, le=14)] = 0.0


class StoreSettings(_Section):
    path: str
    final_after_days: Annotated[int, Field(ge=0, le=36600)] = 14


class Engine(_Section):
    run_on: str = "threads"
    workers: Literal["all"] | int = "all"
    memory_per_worker: str = "2 GiB"

    @field_validator("workers", mode="before")
    @classmethod
    def _count(cls, value: object) -> object:
        if value == "all" or (isinstance(value, int) and not isinstance(value, bool) and 1 <= value <= 4096):
            return value
        raise ValueError('"all" or a whole number from 1 to 4096')

    @field_validator("run_on")
    @classmethod
    def _known(cls, value: str) -> str:
        if value in ("threads", "processes") or re.fullmatch(r"(tcp|tls)://[^\s/]+:\d+", value):
            return value
        raise ValueError('wanted "threads", "processes" or a scheduler address such as "tcp://host:8786"')

    @field_validator("memory_per_worker")
    @classmethod
    def _size(cls, value: str) -> str:
        if not re.fullmatch(r"\d+(\.\d+)? ?(MiB|GiB|MB|GB)", value):
            raise ValueError('wanted a size such as "2 GiB"')
        return value


class Workflow(_Section):
    """A whole workflow. `file` is where it was read from; paths in it are relative to that folder."""

    file: Path
    area: Area = Area()
    scenes: Scenes
    surface: Surface = Surface()
    regions: Regions = Regions()
    albedo: Albedo = Albedo()
    insolation: Insolation = Insolation()
    longwave: Longwave | None = None
    uncertainty: Uncertainty = Uncertainty()
    stations: dict[str, Station] = {}
    store: StoreSettings
    engine: Engine = Engine()

    @model_validator(mode="after")
    def _known_station(self) -> Workflow:
        source = self.insolation.source
        if isinstance(source, StationSource) and source.station not in self.stations:
            known = ", ".join(self.stations) or "none"
            raise ValueError(f"insolation.source names station {source.station!r}; there is [stations.*]: {known}")
        if self.longwave is not None:
            covers = {"snow", "ground", *self.surface.classes.values()}
            for name in self.longwave.emissivity:
                if name not in covers:
                    raise ValueError(f"longwave.emissivity names {name!r}; there are: {', '.join(sorted(covers))}")
        if self.needs_relief and self.surface.elevation is None:
            raise ValueError("insolation.terrain and albedo.illumination need surface.elevation")
        return self

    @property
    def needs_relief(self) -> bool:
        """Whether slope, horizon and sky view of the ground are used."""
        return self.insolation.terrain or self.albedo.illumination != "none"

    @property
    def wanted(self) -> tuple[str, ...]:
        """What is asked for beside the layers that every night makes."""
        asked = {
            "terrain": self.insolation.terrain,
            "slope_parallel": self.insolation.slope_parallel,
            "longwave": self.longwave is not None,
        }
        return tuple(name for name, wanted in asked.items() if wanted)

    def path(self, written: str) -> Path:
        """A path of the file as an absolute one."""
        return (self.file.parent / written).resolve()

    def remarks(self) -> list[str]:
        """What the settings leave out, in sentences for the screen."""
        said = []
        if self.surface.elevation is None:
            said.append("No elevation: sea-level pressure everywhere and one elevation band.")
        if self.surface.land_cover is None:
            said.append("No land cover: one class, all.")
        if self.regions.file is None:
            said.append("No regions: the tiles are one region.")
        return said

    def tile_path(self, written: str, tile: str) -> Path:
        """A path with {tile} filled in."""
        return self.path(written.replace("{tile}", tile))


def _line_of(text: str, keys: tuple[str, ...]) -> int | None:
    """Line of a key in TOML text, by section header and key name; None where it cannot be told."""
    section: list[str] = []
    for number, line in enumerate(text.splitlines(), 1):
        header = re.match(r"\s*\[\[?\s*([^\]]+?)\s*\]\]?", line)
        if header:
            section = [part.strip().strip("\"'") for part in header.group(1).split(".")]
            if tuple(section) == keys:
                return number
            continue
        written = re.match(r"\s*([A-Za-z0-9_.\"'-]+)\s*=", line)
        if written:
            here = (*section, *[part.strip("\"'") for part in written.group(1).split(".")])
            inline = keys[: len(here)] == here and all(re.search(rf"\b{re.escape(k)}\b", line) for k in keys[len(here) :])
            if here == keys or inline:
                return number
    return None


def _known_names(keys: tuple[str, ...]) -> list[str]:
    """Names allowed beside the last of `keys`."""
    models: list[Any] = [Workflow]
    for key in keys[:-1]:
        fields = [f for model in models for n, f in model.model_fields.items() if key in (n, f.alias)]
        kinds = [kind for f in fields for kind in (f.annotation, *getattr(f.annotation, "__args__", ()))]
        models = [k for k in kinds if isinstance(k, type) and issubclass(k, BaseModel)]
    return list(dict.fromkeys(f.alias or n for model in models for n, f in model.model_fields.items() if n != "file"))


def _is_kind(part: str) -> bool:
    """Whether a part of an error's place names a type, not a key of the file."""
    return bool(re.fullmatch(r"literal\[.*|(constrained|function)-.*|int|str|float|bool|none|dict\[.*|[A-Z]\w*", part))


def _problem(path: Path, text: str, error: ValidationError) -> SettingsProblem:
    # an unknown key is likelier a misspelt one than the missing key beside it
    first = min(error.errors(), key=lambda one: one["type"] != "extra_forbidden")
    keys = tuple(str(part) for part in first["loc"] if not _is_kind(str(part)))
    line = _line_of(text, keys)
    where = f"{path}, line {line}" if line else str(path)
    name = ".".join(keys)
    if first["type"] == "extra_forbidden":
        known = _known_names(keys)
        near = difflib.get_close_matches(keys[-1], known, n=1)
        fix = f"write {near[0]!r}" if near else f"remove it, or use one of: {', '.join(known)}"
        return SettingsProblem(where, name, "an unknown key", "a known key", fix)
    if first["type"] == "missing":
        return SettingsProblem(where, name, "nothing", "a value", f"add {keys[-1]} to [{'.'.join(keys[:-1]) or keys[-1]}]")
    message = first["msg"].removeprefix("Value error, ").removeprefix("Input should be ")
    if not keys:  # two sections that do not go together
        return SettingsProblem(where, "settings", message, "settings that go together", "correct one of them")
    return SettingsProblem(where, name, repr(first["input"]), message, f"correct {name} in the workflow file")


def load_workflow(path: Path) -> Workflow:
    """Read and check a workflow file.

    Raises
    ------
    SettingsProblem : no such file, not TOML, an unknown key (with the nearest known one and its line), or a bad value.
    """
    path = Path(path).absolute()
    wanted = "a workflow file (TOML)"
    try:
        if not path.is_file():
            raise SettingsProblem(str(path), "workflow", "no such file" if not path.exists() else "not a plain file",
                                  wanted, "give the path of a workflow, for example workflows/nightly.toml")  # fmt: skip
        if path.stat().st_size > LARGEST_WORKFLOW_BYTES:
            raise SettingsProblem(str(path), "size", path.stat().st_size, "under 1 MB", "give a workflow file")
        text = path.read_text(encoding="utf-8")
        raw = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, UnicodeDecodeError, RecursionError) as error:
        raise SettingsProblem(str(path), "text", str(error), wanted, "correct the file at that place") from None
    except OSError as error:
        raise SettingsProblem(str(path), "file", str(error), wanted, "make the file readable") from None
    if "file" in raw:
        raise SettingsProblem(str(path), "file", "an unknown key", "a known key", "remove it")
    try:
        return Workflow.model_validate({**raw, "file": path})
    except ValidationError as error:
        raise _problem(path, text, error) from None
