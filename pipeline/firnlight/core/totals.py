"""What is known of a piece of ground over some days, in numbers that can be added; means only on request."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, fields, replace
from functools import cached_property
from operator import add
from typing import Any, NamedTuple

import numpy as np

from firnlight.core.correlation import sum_variance
from firnlight.core.layers import layer

CM2_PER_KM2 = 10**10
CM2_PER_M2 = 10**4
SECONDS_PER_DAY = 86_400
U_STEP_WM2 = 0.01  # step of the uncertainty sums
SKY, LONGWAVE = "insolation", "net longwave"  # sources of shared errors, beside each sensor's calibration


@dataclass(frozen=True, order=True)
class BlockGrid:
    """The blocks of ground over which locally correlated errors of one tile are summed.

    Attributes
    ----------
    tile : name; blocks of two tiles are taken as independent.
    block_m, length_m : side of a block, correlation length of the errors. [m]
    """

    tile: str
    block_m: float
    length_m: float


Block = tuple[int, int]  # row and column of a block in its tile
PLACES = 1024  # steps of a position along the side of a block


class Near(NamedTuple):
    """Locally correlated errors of the cells in one block of ground, and where in it they lie.

    Attributes
    ----------
    albedo, sky, longwave : sum of local standard uncertainty x area. [0.01 W m-2 x m2]
    area : [m2]
    down, across : sum of position x area. [m2 x 1/1024 of the side]
    square : sum of the squares of both x area. [m2 x (1/1024 of the side)^2]
    """

    albedo: int
    sky: int
    longwave: int
    area: int
    down: int
    across: int
    square: int


@dataclass(frozen=True)
class Totals:
    """Integer sums over cells (and days). Areas in cm2; products in cm2 x stored steps.

    Attributes
    ----------
    cells, area : seen cells and their ground area.
    albedo, insolation, terrain_light, absorbed, snow_fraction : sum of stored value x area.
    net_longwave, net_area : the same of net longwave, and the area where it is known.
    melt : sum over snow of net radiation above 0 x area.
    u_noise2 : sum of the squares of (independent standard uncertainty of absorbed x area).
    limited_area : area where a small excess over 0 or 1 was set to the limit.
    unseen_cells, unseen_area, missing, cloud, shadow, saturated, low_sun, outside_range : what was not seen, and why.
    bins : seen area per albedo bin of 0.01.
    shared : source of a shared error -> sum of its standard uncertainty x area, so that sums of rows, tiles and days
        that share a source keep their covariance. [0.01 W m-2 x cm2]
    local : locally correlated errors of one day per block of ground; those of albedo go on from day to day.
    past : variance of the local errors of sky and of longwave of days that are over. [(0.01 W m-2 x m2)^2]
    """

    cells: int = 0
    area: int = 0
    albedo: int = 0
    insolation: int = 0
    terrain_light: int = 0
    absorbed: int = 0
    snow_fraction: int = 0
    net_longwave: int = 0
    net_area: int = 0
    melt: int = 0
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
    shared: Mapping[str, int] = field(default_factory=dict)
    local: Mapping[BlockGrid, Mapping[Block, Near]] = field(default_factory=dict)
    past: tuple[float, float] = (0.0, 0.0)

    @classmethod
    def seen(
        cls, sums: dict[str, int], bins: tuple[int, ...], calibration: str, grid: BlockGrid, near: Mapping[Block, Near]
    ) -> Totals:
        """From the columns of the zone kernel for seen cells; `calibration` names the sensors whose error they share."""
        if not sums:
            return cls()
        rest: dict[str, Any] = {k: v for k, v in sums.items() if not k.startswith("u_")}
        squares = (sums["u_noise_hh"] << 56) + (sums["u_noise_hl"] << 29) + sums["u_noise_ll"]
        shared = {f"calibration {calibration}": sums["u_calibration"], SKY: sums["u_sky"], LONGWAVE: sums["u_longwave"]}
        kept = {name: value for name, value in shared.items() if value}
        return cls(bins=bins, u_noise2=squares, shared=kept, local={grid: dict(near)} if near else {}, **rest)

    @classmethod
    def unseen(cls, sums: dict[str, int]) -> Totals:
        """From the columns of the zone kernel for unseen cells."""
        if not sums:
            return cls()
        names = {"cells": "unseen_cells", "area": "unseen_area"}
        renamed: dict[str, Any] = {names.get(k, k): v for k, v in sums.items()}
        return cls(**renamed)

    def __add__(self, other: Totals) -> Totals:
        sums = {name: getattr(self, name) + getattr(other, name) for name in SUM_NAMES}
        if self.bins and other.bins:
            bins = tuple(a + b for a, b in zip(self.bins, other.bins, strict=True))
        else:
            bins = self.bins or other.bins
        shared = dict(self.shared)
        for name, value in other.shared.items():
            shared[name] = shared.get(name, 0) + value
        past = self.past[0] + other.past[0], self.past[1] + other.past[1]
        return Totals(**sums, bins=bins, shared=shared, local=_joined(self.local, other.local), past=past)

    def end_of_day(self) -> Totals:
        """The same totals once no more ground of their day will be added: weather's local errors are those of one day."""
        sky, longwave = self._near_variances(1, 2)
        local = {
            grid: {at: near._replace(sky=0, longwave=0) for at, near in blocks.items() if near.albedo}
            for grid, blocks in self.local.items()
        }
        return replace(self, local=local, past=(self.past[0] + sky, self.past[1] + longwave))

    def _near_variances(self, *parts: int) -> list[float]:
        """Variances of the local errors that are still per block, by their place in Near."""
        total = np.zeros(len(parts))
        for grid in sorted(self.local):
            rows = [(*at, *near) for at, near in sorted(self.local[grid].items()) if any(near[n] for n in parts)]
            table = np.array(rows, dtype=np.float64).reshape(-1, 2 + len(Near._fields))
            area, square = np.maximum(table[:, 5], 1.0), table[:, 8]
            centres = table[:, 6:8] / area[:, np.newaxis] / PLACES
            spread = np.maximum(square / area / PLACES**2 - (centres**2).sum(axis=1), 0.0)
            sums = table[:, [2 + n for n in parts]]
            total += sum_variance(table[:, :2].astype(np.int64), sums, centres, spread, grid.block_m, grid.length_m)
        return total.tolist()

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

    def _from_near(self, variance: float) -> float:
        return math.sqrt(variance) * 1e4 / self.area * U_STEP_WM2 if self.area else math.nan

    @cached_property
    def _u_local(self) -> tuple[float, float, float]:
        """Locally correlated parts: of albedo, one error through all days; of sky and longwave, another each day."""
        albedo, sky, longwave = self._near_variances(0, 1, 2)
        return (
            self._from_near(albedo),
            self._from_near(self.past[0] + sky),
            self._from_near(self.past[1] + longwave),
        )

    @property
    def absorbed_u_local(self) -> float:
        """Locally correlated part of the mean's standard uncertainty: of albedo and of the sky. [W m-2]"""
        return math.hypot(*self._u_local[:2])

    def _shared(self, *, longwave: bool) -> float:
        """Shared parts: one error per source, sources independent of each other. [W m-2]"""
        parts = [(name, value) for name, value in self.shared.items() if longwave or name != LONGWAVE]
        return math.hypot(*(self._mean(value, U_STEP_WM2) for value in _by_source(parts))) if self.area else math.nan

    @property
    def absorbed_u_shared(self) -> float:
        return self._shared(longwave=False)

    @property
    def absorbed_u(self) -> float:
        return math.hypot(self.absorbed_u_independent, self.absorbed_u_local, self.absorbed_u_shared)

    @property
    def albedo_u(self) -> float:
        """Standard uncertainty of reflected / incoming: the parts that come from albedo, over the insolation."""
        if not self.insolation:
            return math.nan
        own = [(name, value) for name, value in self.shared.items() if name not in (SKY, LONGWAVE)]
        calibration = [self._mean(value, U_STEP_WM2) for value in _by_source(own)]
        return math.hypot(self.absorbed_u_independent, self._u_local[0], *calibration) / self.insolation_wm2

    @property
    def net_is_known(self) -> bool:
        """Whether net longwave is known of all that was seen: a mean over other ground would not close."""
        return bool(self.area) and self.net_area == self.area

    @property
    def net_longwave_wm2(self) -> float:
        return self._mean(self.net_longwave, layer("net_longwave").step) if self.net_is_known else math.nan

    @property
    def net_radiation_wm2(self) -> float:
        whole = self.absorbed + self.net_longwave
        return self._mean(whole, layer("net_radiation").step) if self.net_is_known else math.nan

    @property
    def net_radiation_u(self) -> float:
        if not self.net_is_known:
            return math.nan
        return math.hypot(self.absorbed_u_independent, *self._u_local, self._shared(longwave=True))

    @property
    def terrain_light_wm2(self) -> float:
        return self._mean(self.terrain_light, layer("terrain_light").step)

    @property
    def melt_wm2(self) -> float:
        """Mean over snow of the net radiation that can melt: that above 0, cell by cell. For totals of snow. [W m-2]"""
        return self._mean(self.melt, layer("net_radiation").step) if self.net_is_known else math.nan

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


SUM_NAMES = tuple(f.name for f in fields(Totals) if f.type == "int")


def _joined(
    one: Mapping[BlockGrid, Mapping[Block, Near]], other: Mapping[BlockGrid, Mapping[Block, Near]]
) -> dict[BlockGrid, Mapping[Block, Near]]:
    """Sums per block of both."""
    out = dict(one)
    for grid, blocks in other.items():
        if grid not in out:
            out[grid] = blocks
            continue
        merged = dict(out[grid])
        for at, near in blocks.items():
            merged[at] = Near._make(map(add, merged[at], near)) if at in merged else near
        out[grid] = merged
    return out


def _by_source(parts: list[tuple[str, int]]) -> list[int]:
    """Sums of independent sources. A day of several sensors is named by all of them ("calibration a and b") and does not
    tell whose error a cell has: sums that share a sensor are added in full, which is never too little."""
    groups: list[tuple[set[str], int]] = []
    for name, value in parts:
        sensors, total = set(name.removeprefix("calibration ").split(" and ")), value
        apart = []
        for known, sum_ in groups:
            if known & sensors:
                sensors, total = sensors | known, total + sum_
            else:
                apart.append((known, sum_))
        groups = [*apart, (sensors, total)]
    return [total for _, total in groups]
