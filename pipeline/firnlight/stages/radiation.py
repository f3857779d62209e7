"""Insolation and albedo to absorbed shortwave and its uncertainty."""

from __future__ import annotations

from firnlight.stages.stage import Stage

RADIATION = Stage("absorbed shortwave", 1, ("albedo", "insolation"), ("absorbed_shortwave",), ())
RADIATION_U = Stage(
    "absorbed shortwave uncertainty",
    1,
    ("albedo", "albedo_u", "insolation"),
    ("absorbed_shortwave_u",),
    ("sky_error",),
)
