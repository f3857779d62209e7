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
    anisotropy: Literal["none"] = "none"


class AtmosphereSettings(_Section):
    aerosol_500nm: Annotated[float, Field(ge=0, le=3)] = 0.1
    aerosol_380nm: Annotated[float, Field(ge=0, le=5)] | None = None
    water_vapour_cm: Annotated[float, Field(ge=0, le=10)] = 1.0
    ozone_cm: Annotated[float, Field(ge=0, le=1)] = 0.3


class Insolation(_Section):
    source: Literal["clear-sky"] = "clear-sky"
    atmosphere: AtmosphereSettings = AtmosphereSettings()
    terrain: Literal[False] = False
    relative_uncertainty: Annotated[float, Field(ge=0, le=1)] = 0.05


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
    store: StoreSettings
    engine: Engine = Engine()

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
    model: Any = Workflow
    for key in keys[:-1]:
        field = next((f for n, f in model.model_fields.items() if key in (n, f.alias)), None)
        kinds = getattr(field.annotation, "__args__", (field.annotation,)) if field else ()
        model = next((k for k in kinds if isinstance(k, type) and issubclass(k, BaseModel)), None)
        if model is None:
            return []
    return [f.alias or n for n, f in model.model_fields.items() if n != "file"]


def _problem(path: Path, text: str, error: ValidationError) -> SettingsProblem:
    # an unknown key is likelier a misspelt one than the missing key beside it
    first = min(error.errors(), key=lambda one: one["type"] != "extra_forbidden")
    # names of union members and model wrappers in `loc` are not keys of the file
    keys = tuple(str(part) for part in first["loc"] if not str(part).startswith(("literal", "constrained", "int", "str")))
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
