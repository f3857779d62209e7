"""Satellite reflectance tiles to albedo, absorbed sunlight and regional radiation budgets of snowfields."""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from firnlight import physics as physics
    from firnlight.core.errors import InputProblem as InputProblem
    from firnlight.core.settings import load_workflow as load_workflow
    from firnlight.run.night import run_night as run_night

__version__ = "0.1.0"

# public name -> module that holds it; imported when first asked for, so `import firnlight` is quick
_HOMES = {
    "InputProblem": "firnlight.core.errors",
    "load_workflow": "firnlight.core.settings",
    "run_night": "firnlight.run.night",
}

__all__ = ["InputProblem", "__version__", "load_workflow", "physics", "run_night"]


def __getattr__(name: str) -> Any:
    if name == "physics":
        return import_module("firnlight.physics")
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'firnlight' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
