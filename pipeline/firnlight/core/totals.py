"""What is known of a piece of ground over some days, in numbers that can be added; means only on request."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields
from typing import Any

from firnlight.core.layers import layer

CM2_PER_KM2 = 10**10
SECONDS_PER_DAY = 86_400
U_STEP_WM2 = 0.01  # step of the uncertainty sums


@dataclass(frozen=True)
class Totals:
    """Integer sums over cells (and days). Areas in cm2; products in cm2 x stored steps.

    Attributes
    ----------
    cells, area : seen cells and their ground area.
    albedo, insolation, absorbed, snow_fraction : sum of stored value x area.
    u_local, u_calibration, u_sky : sum of standard uncertainty of absorbed shortwave x area. [0.01 W m-2 x cm2]
    u_noise2 : sum of the squares of (independent standard uncertainty x area).
    limited_area : area where a small excess over 0 or 1 was set to the limit.
    unseen_cells, unseen_area, missing, cloud, shadow, saturated, low_sun, outside_range : what was not seen, and why.
    bins : seen area per albedo bin of 0.01.
    """

    cells: int = 0
    area: int = 0
    albedo: int = 0
    insolation: int = 0
    absorbed: int = 0
    snow_fraction: int = 0
    u_local: int = 0
    u_calibration: int = 0
    u_sky: int = 0
    u_noise2: int = 0
    limited_area: int = 0
    unseen_cells: int = 0
    unseen_area: int = 0
    missing: int = 0
    cloud: int = 0
    shadow: int = 0
    saturated: int = 0
    low_sun: int = 0
    outside_range: int = 0
    bins: tuple[int, ...] = ()

    @classmethod
    def seen(cls, sums: dict[str, int], bins: tuple[int, ...]) -> Totals:
        """From the columns of the zone kernel for seen cells."""
        if not sums:
            return cls()
        rest: dict[str, Any] = {k: v for k, v in sums.items() if not k.startswith("u_noise")}
        squares = (sums["u_noise_hh"] << 56) + (sums["u_noise_hl"] << 29) + sums["u_noise_ll"]
        return cls(bins=bins, u_noise2=squares, **rest)

    @classmethod
    def unseen(cls, sums: dict[str, int]) -> Totals:
        """From the columns of the zone kernel for unseen cells."""
        if not sums:
            return cls()
        names = {"cells": "unseen_cells", "area": "unseen_area"}
        renamed: dict[str, Any] = {names.get(k, k): v for k, v in sums.items()}
        return cls(**renamed)

    def __add__(self, other: Totals) -> Totals:
        sums = {f.name: getattr(self, f.name) + getattr(other, f.name) for f in fields(self) if f.name != "bins"}
        if self.bins and other.bins:
            bins = tuple(a + b for a, b in zip(self.bins, other.bins, strict=True))
        else:
            bins = self.bins or other.bins
        return Totals(**sums, bins=bins)

    @property
    def reflected(self) -> int:
        """incoming - absorbed: closure is integer arithmetic."""
        return self.insolation - self.absorbed

    def _mean(self, total: int, step: float) -> float:
        return total / self.area * step if self.area else math.nan

    @property
    def insolation_wm2(self) -> float:
        return self._mean(self.insolation, layer("insolation").step)

    @property
    def absorbed_wm2(self) -> float:
        return self._mean(self.absorbed, layer("absorbed_shortwave").step)

    @property
    def reflected_wm2(self) -> float:
        return self._mean(self.reflected, layer("insolation").step)

    @property
    def albedo_ratio(self) -> float:
        """Reflected over incoming; NaN where nothing came in."""
        return self.reflected / self.insolation if self.insolation else math.nan

    @property
    def albedo_area_mean(self) -> float:
        return self._mean(self.albedo, layer("albedo").step)

    @property
    def snow_fraction_mean(self) -> float:
        return self._mean(self.snow_fraction, layer("snow_fraction").step)

    @property
    def absorbed_u_independent(self) -> float:
        """Independent part of the mean's standard uncertainty. [W m-2]"""
        return math.sqrt(self.u_noise2) / self.area * U_STEP_WM2 if self.area else math.nan

    @property
    def absorbed_u_local(self) -> float:
        """Locally correlated part, taken as fully correlated over the whole: an upper bound. [W m-2]"""
        return self._mean(self.u_local, U_STEP_WM2)

    @property
    def absorbed_u_shared(self) -> float:
        """Shared part: sensor calibration and clear-sky model, independent of each other. [W m-2]"""
        return math.hypot(self._mean(self.u_calibration, U_STEP_WM2), self._mean(self.u_sky, U_STEP_WM2))

    @property
    def absorbed_u(self) -> float:
        return math.hypot(self.absorbed_u_independent, self.absorbed_u_local, self.absorbed_u_shared)

    @property
    def albedo_u(self) -> float:
        """Standard uncertainty of reflected / incoming: the parts that come from albedo, over the insolation."""
        if not self.insolation:
            return math.nan
        from_albedo = (
            self.absorbed_u_independent,
            self.absorbed_u_local,
            self._mean(self.u_calibration, U_STEP_WM2),
        )
        return math.hypot(*from_albedo) / self.insolation_wm2

    @property
    def absorbed_gj(self) -> float:
        """Energy absorbed by the seen cell-days. [GJ]"""
        return self.absorbed * layer("absorbed_shortwave").step * 1e-4 * SECONDS_PER_DAY / 1e9

    def albedo_percentile(self, share: float) -> float:
        """Albedo below which `share` of the seen area lies; within one bin of 0.01 (linear inside the bin)."""
        total = sum(self.bins)
        if not total:
            return math.nan
        goal, below = share * total, 0
        for number, weight in enumerate(self.bins):
            if weight and below + weight >= goal:
                width = 0.01 if number < len(self.bins) - 1 else 0.0
                return number * 0.01 + width * (goal - below) / weight
            below += weight
        return 1.0
