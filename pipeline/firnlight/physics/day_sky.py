"""How much direct and diffuse light does each hour of a day bring, from a cloudless sky, cloud, a grid or a station?"""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from firnlight.core.tables import load_table
from firnlight.physics import sun
from firnlight.physics.clearsky import STEP_S, Atmosphere, ClearSky, bird, day_times_unix_s, pressure_pa
from firnlight.physics.cloud import clouded_sky_albedo, transmission
from firnlight.physics.day_steps import intervals, overlap_h
from firnlight.physics.diffuse import erbs
from firnlight.physics.light import CODE_DEG, SunPaths

Floats = NDArray[np.float64]
NODE_S = 1800.0  # between the time nodes of a sun path
_HOUR_S = 3600.0
LEAST_CLEAR_WM2 = 20.0  # the sun at about 4 degrees; a cloudless mean below it measures no cloud; a choice made here


@dataclass(frozen=True, eq=False)
class ClearIndex:
    """A supplied or measured series as a share of cloudless light over black ground.

    Attributes
    ----------
    edges_h : (k, 2)      Intervals, hours from 00 UTC.
    index : (k, n)        Their clear-sky index at each place, see index_of_intervals; NaN where unknown.
    by_height : whether it goes to other heights with cloudless light; else it is of sea level and kept everywhere.
    """

    edges_h: Floats
    index: Floats
    by_height: bool = True


@dataclass(frozen=True, eq=False)
class Cloud:
    """Share of the sky under cloud: (k,) hours from 00 UTC, (k, n) values; straight lines between, held at the ends."""

    hours: Floats
    fraction: Floats

    def at(self, hour: float) -> Floats:
        """(n,); NaN where a neighbour in time is NaN."""
        after = int(np.searchsorted(self.hours, hour))
        if after == 0 or after == self.hours.size:
            return self.fraction[min(after, self.hours.size - 1)]
        share = (hour - self.hours[after - 1]) / (self.hours[after] - self.hours[after - 1])
        return np.asarray(self.fraction[after - 1] * (1 - share) + self.fraction[after] * share)


@dataclass(frozen=True, eq=False)
class Places:
    """Where and under which air: latitude, longitude (n,) [deg]; heights (m,) [m]; air scalar or (n, 1) numbers."""

    latitude_deg: Floats
    longitude_deg: Floats
    elevation_m: Floats
    air: Atmosphere
    cloud: Cloud | None = None
    supplied: ClearIndex | None = None


@dataclass(frozen=True, eq=False)
class Light:
    """Light at one moment: (n, m) each; direct on a plane facing the sun, direct and diffuse on flat black ground."""

    direct_normal_wm2: Floats
    direct_wm2: Floats
    diffuse_wm2: Floats
    sky_albedo: Floats


def _clear(time: float, places: Places) -> tuple[ClearSky, Floats, Floats]:
    zenith, _, distance = sun.position(time, places.latitude_deg, places.longitude_deg)
    space = sun.solar_constant_wm2() / distance**2
    as_it_is = places.supplied is not None and not places.supplied.by_height
    pressure = pressure_pa(np.zeros_like(places.elevation_m) if as_it_is else places.elevation_m)
    sky = bird(zenith[:, np.newaxis], space[:, np.newaxis], pressure[np.newaxis, :], places.air)
    return sky, np.asarray(zenith), np.asarray(space)


def _clouded(clear: ClearSky, fraction: Floats) -> Light:
    """Cloudless light dimmed and spread by cloud, over black ground: what cloud threw back to grass is taken out again."""
    row = load_table("clearsky").row("kasten_czeplak_1980")
    c = np.where(clear.black_ground_wm2 > 0, fraction[:, np.newaxis], 0.0 * clear.black_ground_wm2)  # none is asked by night
    sky_albedo = np.where(clear.black_ground_wm2 > 0, clouded_sky_albedo(clear.sky_albedo, c), 0.0 * c)
    grass = row["ground_albedo"]
    whole = clear.black_ground_wm2 * transmission(c) * (1 - grass * sky_albedo) / (1 - grass * clear.sky_albedo)
    direct_share = np.divide(
        clear.direct_horizontal_wm2, clear.black_ground_wm2, out=np.zeros_like(whole), where=clear.black_ground_wm2 > 0
    ) * (1 - c ** row["spread_power"])
    direct = whole * direct_share
    cosine = np.divide(
        clear.direct_horizontal_wm2, clear.direct_normal_wm2, out=np.ones_like(whole), where=clear.direct_normal_wm2 > 0
    )
    return Light(direct / cosine, direct, whole - direct, sky_albedo)


def _interval(edges_h: Floats, hour: float) -> int | None:
    inside = np.nonzero((edges_h[:, 0] <= hour) & (hour < edges_h[:, 1]))[0]
    return int(inside[0]) if inside.size else None


def _start_unix_s(day: dt.date) -> float:
    return dt.datetime(day.year, day.month, day.day, tzinfo=dt.UTC).timestamp()


def index_of_intervals(
    day: dt.date, edges_h: Floats, wm2: Floats, latitude_deg: Floats, longitude_deg: Floats, height_m: Floats,
    air: Atmosphere,
) -> ClearIndex:  # fmt: skip
    """What share of cloudless light over black ground each interval of a series holds.

    Parameters
    ----------
    edges_h : (k, 2) hours from 00 UTC; wm2 : (k, n) means over them on flat ground, NaN where unknown. [W m-2]
    latitude_deg, longitude_deg, height_m : (n,) place and height that each column stands for.
    air : one for all places, or (n, 1) numbers.

    Returns
    -------
    ClearIndex   0 where the sun is down for the whole interval, whatever the series says of it; NaN where the height or
    the air is unknown. Where intervals cut a time step of the day, one value per step. The day's sum at each place and
    height is that of the intervals with sun.

    Notes
    -----
    An interval with hardly any sun shares the index of the nearest that has some: alone it would be twilight over next
    to nothing, far above 1, and light up the places that the sun reaches first.
    """
    if np.ndim(air.ozone_cm):
        air = Atmosphere(*(np.ravel(number) for number in air.numbers()))  # type: ignore[arg-type]
    times = day_times_unix_s(day)
    steps = intervals(np.linspace(0.0, 24.0, times.size + 1))
    shared = overlap_h(edges_h, steps)
    clear = np.zeros(wm2.shape)
    for time, hours in zip(times, shared, strict=True):
        zenith, _, distance = sun.position(time, latitude_deg, longitude_deg)
        sky = bird(zenith, sun.solar_constant_wm2() / distance**2, pressure_pa(height_m), air)
        for k in np.flatnonzero(hours):
            clear[k] += sky.black_ground_wm2 * hours[k]
    index = _index(wm2, clear, shared.sum(axis=0))
    full = (1 - 1e-6) * 24.0 / times.size
    if not ((shared > 0) & (shared < full)).any():
        return ClearIndex(edges_h, index)
    per_step = np.full((times.size, wm2.shape[1]), np.nan)
    for s in np.flatnonzero(shared.sum(axis=1) >= full):
        used = np.flatnonzero(shared[s])
        per_step[s] = (index[used] * shared[s, used, np.newaxis]).sum(axis=0) / shared[s].sum()
    return ClearIndex(steps, per_step)


def _index(wm2: Floats, clear: Floats, hours: Floats) -> Floats:
    """Energy over cloudless energy in each interval, (k, n), those of weak sun taken together with a stronger one.

    wm2 : (k, n) means; clear : (k, n) [W h m-2]; hours : (k,) of each interval.
    """
    index = np.where(np.isnan(clear), np.nan, 0.0)
    for n in range(wm2.shape[1]):
        lit = np.flatnonzero(clear[:, n] > 0)
        if not lit.size:
            continue
        mean = clear[lit, n] / hours[lit]
        strong = lit[mean >= min(LEAST_CLEAR_WM2, mean.max())]
        group = strong[np.abs(lit[:, np.newaxis] - strong).argmin(axis=1)]
        total = np.zeros((2, len(wm2)))
        np.add.at(total[0], group, wm2[lit, n] * hours[lit])
        np.add.at(total[1], group, clear[lit, n])
        index[lit, n] = total[0, group] / total[1, group]
    return index


class DaySky:
    """The light of one UTC day at some places.

    A cloudless sky is Bird & Hulstrom's; under cloud its light is dimmed and spread (Kasten & Czeplak 1980) and the
    cloud throws light of the ground back; a supplied series is taken as it is: inside an interval it follows the
    cloudless course, from its own ground to other heights it goes with the ratio of cloudless light, its direct part is
    what Erbs, Klein & Duffie (1982) leave, and no light is added between ground and sky, since it is in the series.
    """

    def __init__(self, day: dt.date, places: Places) -> None:
        self.day, self.places = day, places
        self._start = _start_unix_s(day)

    def at(self, unix_s: float) -> Light:
        """The light at one moment: (n, m); NaN where the sun is up and the cloud or the supplied series is unknown."""
        clear, zenith, space = _clear(unix_s, self.places)
        hour = (unix_s - self._start) / _HOUR_S
        if self.places.supplied is not None:
            return self._from_supplied(clear, zenith, space, hour)
        if self.places.cloud is not None:
            return _clouded(clear, self.places.cloud.at(hour))
        direct = clear.direct_horizontal_wm2
        return Light(clear.direct_normal_wm2, direct, clear.black_ground_wm2 - direct, clear.sky_albedo)

    def _from_supplied(self, clear: ClearSky, zenith: Floats, space: Floats, hour: float) -> Light:
        given = self.places.supplied
        assert given is not None
        k = _interval(given.edges_h, hour)
        shape = clear.black_ground_wm2.shape
        index = given.index[k] if k is not None else np.full(shape[0], np.nan)
        black = clear.black_ground_wm2
        whole = black * np.where(black > 0, index[:, np.newaxis], 1.0)  # by night none is asked
        cosine = np.maximum(np.cos(np.radians(zenith)), 0.0)[:, np.newaxis]
        space_flat = np.broadcast_to(space[:, np.newaxis] * cosine, shape)
        clearness = np.divide(whole, space_flat, out=0.0 * whole, where=space_flat > 0)
        direct = whole * (1 - erbs(np.clip(clearness, 0, 1)))
        # within a degree of the horizon the direct beam of a mean over an hour means nothing
        normal = np.divide(direct, cosine, out=0.0 * direct, where=np.broadcast_to(cosine, shape) > 0.0175)
        normal = np.minimum(normal, space[:, np.newaxis])
        return Light(normal, normal * cosine, whole - normal * cosine, 0.0 * whole)

    def moments(self, orders: int, step_s: float = STEP_S) -> Floats:
        """Day means of G0 r^k for k < orders, and of the direct light: (n, m, orders + 1). [W m-2]

        NaN where any step of the day with the sun up is unknown: a gap, never a guess.
        """
        n, m = self.places.latitude_deg.size, self.places.elevation_m.size
        total = np.zeros((n, m, orders + 1))
        times = day_times_unix_s(self.day, step_s)
        for time in times:
            light = self.at(float(time))
            power = light.direct_wm2 + light.diffuse_wm2
            for order in range(orders):
                total[:, :, order] += power
                power = power * light.sky_albedo
            total[:, :, orders] += light.direct_wm2
        return total / times.size

    def nodes_unix_s(self) -> Floats:
        """Times of the nodes of sun paths: the day in half hours, both ends."""
        return np.asarray(self._start + np.arange(0, 86_400 + 1, NODE_S))

    def direct_normal(self) -> Iterator[Floats]:
        """Direct normal irradiance at each node of the sun paths: (n, m), the mean of five minutes on both sides."""
        for time in self.nodes_unix_s():
            sides = [t for t in (time - 300, time + 300) if self._start <= t < self._start + 86_400]
            yield np.mean([self.at(float(t)).direct_normal_wm2 for t in sides], axis=0)


def sun_paths(sky: DaySky, shape: tuple[int, int], north_deg: Floats, directions: int) -> tuple[SunPaths, tuple[int, ...]]:
    """Sun paths over the lattice cells of a tile.

    Parameters
    ----------
    sky : of the day, at the centres of the lattice cells (n = ni x nj) and at least 3 heights that span the tile.
    shape : (ni, nj).
    north_deg : (n,) bearing of grid north, clockwise from true north. [deg]
    directions : number of horizon directions, evenly spaced from grid north clockwise.

    Returns
    -------
    The paths, and the horizon directions that they need, in the order that bin0 and bin1 count them.
    """
    lat, lon, heights = sky.places.latitude_deg, sky.places.longitude_deg, sky.places.elevation_m
    times = sky.nodes_unix_s()
    span = max(float(heights[-1] - heights[0]), 1.0)
    scaled = (heights - heights[0]) / span
    basis = np.linalg.pinv(scaled[:, np.newaxis] ** np.arange(3))
    beam = np.empty((lat.size, times.size, 3))
    vector = np.empty((lat.size, times.size, 3))
    elevation = np.empty((lat.size, times.size))
    azimuth = np.empty((lat.size, times.size))
    for t, (time, normal) in enumerate(zip(times, sky.direct_normal(), strict=True)):
        zenith, bearing, _ = sun.position(float(time), lat, lon)
        z, a = np.radians(zenith), np.radians(bearing - north_deg)
        vector[:, t] = np.stack([np.sin(z) * np.sin(a), np.sin(z) * np.cos(a), np.cos(z)], axis=1)
        elevation[:, t], azimuth[:, t] = 90.0 - zenith, np.mod(bearing - north_deg, 360.0)
        beam[:, t] = normal @ basis.T
    kept = _daylight(elevation)
    place = azimuth[:, kept] / (360.0 / directions)
    low = np.floor(place).astype(int)
    share = place - low
    low %= directions
    used = tuple(int(one) for one in np.unique([low, (low + 1) % directions])) or (0,)
    position = np.zeros(directions, np.int32)
    position[list(used)] = np.arange(len(used))
    code = elevation[:, kept] / CODE_DEG
    follows = np.zeros(kept.size, bool)
    follows[1:] = np.diff(kept) == 1
    flat = _flat_sums(beam[:, kept], vector[:, kept, 2], code, follows)
    grid = (*shape, kept.size)
    return (
        SunPaths(
            beam[:, kept].reshape(*grid, 3).astype(np.float32), flat.reshape(*shape, 3),
            vector[:, kept].reshape(*grid, 3).astype(np.float32), code.reshape(grid).astype(np.float32),
            position[low].reshape(grid), position[(low + 1) % directions].reshape(grid),
            share.reshape(grid).astype(np.float32), follows, float(heights[0]), span,
        ),
        used,
    )  # fmt: skip


def _daylight(elevation_deg: Floats) -> NDArray[np.intp]:
    """Nodes with the sun up somewhere, and those beside them."""
    up: NDArray[np.bool_] = np.asarray((elevation_deg > 0).any(axis=0))
    near = up.copy()
    near[1:] |= up[:-1]
    near[:-1] |= up[1:]
    return np.nonzero(near)[0]


def _flat_sums(beam: Floats, up: Floats, code: Floats, follows: NDArray[np.bool_]) -> Floats:
    """The sums of light.beam_sums over flat ground with an open horizon, as polynomials of height: (n, 3)."""
    total = np.zeros((beam.shape[0], 3))
    for t in np.nonzero(follows)[0]:
        p, q = code[:, t - 1], code[:, t]
        pp, qp, span = np.maximum(p, 0), np.maximum(q, 0), np.abs(p) + np.abs(q)
        lit = (pp + qp) / np.where(span > 0, span, 1)
        w = np.where((pp > 0) & (qp > 0), 0.5, np.where(pp > 0, 1 - 0.5 * lit, 0.5 * lit))
        first = beam[:, t - 1] * np.maximum(up[:, t - 1], 0)[:, np.newaxis]
        second = beam[:, t] * np.maximum(up[:, t], 0)[:, np.newaxis]
        total += lit[:, np.newaxis] * (w[:, np.newaxis] * first + (1 - w)[:, np.newaxis] * second)
    return total
