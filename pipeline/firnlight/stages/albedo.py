"""Reflectance to albedo: which numbers does the kernel need for one sensor and one choice of conversions?"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.errors import SettingsProblem
from firnlight.core.layers import layer
from firnlight.core.settings import Albedo
from firnlight.core.tables import load_table
from firnlight.physics.anisotropy import nadir_factor
from firnlight.physics.broadband import Conversion, conversion
from firnlight.physics.snow import fraction_numbers, snow_limits
from firnlight.stages.stage import Stage

ALBEDO = Stage(
    "albedo", 2, ("reflectance", "sun"), ("albedo", "quality"), ("conversion", "snow_test", "limits", "carried", "level")
)
ALBEDO_U = Stage(
    "albedo uncertainty", 1, ("reflectance", "albedo"), ("albedo_u",), ("conversion", "errors", "carried", "level")
)
SNOW = Stage("snow fraction", 1, ("reflectance", "albedo"), ("snow_fraction",), ("snow_test", "snow_fraction", "level"))

SNOW_BANDS = ("green", "nir", "swir16")


@dataclass(frozen=True)
class AlbedoNumbers:
    """All that the albedo kernel needs beside the cells; plain numbers, ready to travel to a worker.

    `bands` are the common names in the order of the kernel's band axis; index 0 of pairs is ground, 1 is snow.
    """

    sensor: str
    bands: tuple[str, ...]
    ground: Conversion
    snow: Conversion
    noise: tuple[float, ...]
    calibration: float
    zenith_limit_deg: float
    has_snow_test: bool
    snow_limits: tuple[float, float, float]
    fraction_form: int
    fraction_numbers: tuple[float, ...]
    range_limits: tuple[float, float]
    to_nadir: tuple[float, ...] = ()  # factor of each band over ground without snow; () = as seen

    def facts(self) -> dict[str, Any]:
        """What the numbers of each settings group are, for the keys."""

        def form(one: Conversion) -> list[object]:
            return [one.bands, one.intercept, one.weights, one.quadratic]

        return {
            "conversion": [form(self.ground), form(self.snow), *([self.to_nadir] if self.to_nadir else [])],
            "snow_test": [self.has_snow_test, self.snow_limits],
            "limits": [self.range_limits, self.zenith_limit_deg],
            "errors": [
                dict(zip(self.bands, self.noise, strict=True)),
                self.calibration,
                [[one.fit_error, one.substitution_error] for one in (self.ground, self.snow)],
            ],
            "snow_fraction": [self.fraction_form, self.fraction_numbers],
        }

    def kernel_arguments(self) -> dict[str, Any]:
        """Arrays in the shapes that chain_fast.albedo_block takes."""
        pair = (self.ground, self.snow)
        count = len(self.bands)
        weights = np.zeros((2, count))
        quadratic = np.zeros((2, count, count))
        for k, one in enumerate(pair):
            at = [self.bands.index(name) for name in one.bands]
            weights[k, at] = one.weights
            if one.quadratic is not None:
                quadratic[k][np.ix_(at, at)] = one.quadratic
        if self.to_nadir:
            # ground's albedo from bands as seen from above: its weights take the factors, so nothing else changes
            factor = np.array(self.to_nadir)
            weights[0] *= factor
            quadratic[0] *= np.outer(factor, factor)
        snow_bands = tuple(self.bands.index(name) if self.has_snow_test else -1 for name in SNOW_BANDS)
        return {
            "zenith_limit": self.zenith_limit_deg,
            "intercept": np.array([one.intercept for one in pair]),
            "weights": weights,
            "quadratic": quadratic,
            "has_quadratic": np.array([one.quadratic is not None for one in pair]),
            "local_u": np.array([np.hypot(one.fit_error, one.substitution_error) for one in pair]),
            "noise": np.array(self.noise),
            "calibration": self.calibration,
            "snow_bands": snow_bands,
            "snow_limits": self.snow_limits,
            "fraction_form": self.fraction_form,
            "fraction_numbers": np.array((*self.fraction_numbers, 0.0, 0.0, 0.0, 0.0)[:4]),
            "range_limits": self.range_limits,
        }


def albedo_numbers(settings: Albedo, sensor: str, reflectance: str = "surface") -> AlbedoNumbers:
    """Resolve the workflow's choices for one sensor.

    Raises
    ------
    SettingsProblem : no such conversion, no form of it for this sensor, or it is made for another kind of reflectance.
    """
    row = load_table("sensors").row(sensor)
    forms = []
    for surface in ("ground", "snow"):
        one = conversion(getattr(settings.conversion, surface), sensor, "shortwave")
        if one.reflectance != reflectance:
            raise SettingsProblem(
                "workflow", f"albedo.conversion.{surface}", one.name, f"a conversion of {reflectance} reflectance",
                "see `firnlight methods` for what each conversion is made for",
            )  # fmt: skip
        forms.append(one)
    ground, snow = forms
    has_snow_test = all(name in row["bands"] for name in SNOW_BANDS)
    if not has_snow_test and ground != snow:
        raise SettingsProblem(
            "workflow", "albedo.conversion.snow", snow.name, f"the same conversion for snow and ground with {sensor}",
            f"{sensor} has no bands for the snow test: give snow and ground one conversion",
        )  # fmt: skip
    wanted = {*ground.bands, *snow.bands, *(SNOW_BANDS if has_snow_test else ())}
    bands = tuple(name for name in row["bands"] if name in wanted)
    form, numbers = fraction_numbers(settings.snow_fraction)
    limits = load_table("snow").row("albedo_range")
    return AlbedoNumbers(
        sensor=sensor,
        bands=bands,
        ground=ground,
        snow=snow,
        noise=tuple(row["bands"][name]["noise"] for name in bands),
        calibration=row["calibration"],
        zenith_limit_deg=row["largest_sun_zenith_deg"],
        has_snow_test=has_snow_test,
        snow_limits=snow_limits(),
        fraction_form=form,
        fraction_numbers=numbers,
        range_limits=(limits["low"], limits["high"]),
    )


def stored_fill(name: str = "albedo") -> int:
    """The stored integer of an unseen cell."""
    fill = layer(name).nodata
    assert fill is not None
    return fill


def seen_from_above(
    numbers: AlbedoNumbers, sun_zenith_deg: float, sun_azimuth_deg: float, view_deg: tuple[float, float]
) -> AlbedoNumbers:
    """Numbers whose snow-free ground is brought to a view from above; snow is left, its shape is another.

    view_deg : off-nadir angle, and bearing from the point below the sensor to the scene (STAC view:azimuth).

    Raises
    ------
    InputProblem : a band without parameters.
    """
    to_sensor = view_deg[1] + 180.0
    factors = (nadir_factor(b, sun_zenith_deg, view_deg[0], sun_azimuth_deg - to_sensor) for b in numbers.bands)
    return replace(numbers, to_nadir=tuple(float(one) for one in factors))


def carried_share() -> float:
    """Share of a change of albedo with the sun's angle that is its standard uncertainty. [1]"""
    return float(load_table("anisotropy").row("carried_albedo")["relative_u"])


def empty_layers(shape: tuple[int, int]) -> dict[str, NDArray[Any]]:
    """Arrays for the layers that a scene gives."""
    return {
        "albedo": np.empty(shape, np.int16),
        "albedo_u": np.empty((4, *shape), np.int16),
        "snow_fraction": np.empty(shape, np.int16),
        "quality": np.empty(shape, np.uint8),
    }
