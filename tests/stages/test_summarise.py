"""Are the uncertainties stated for regions those of the errors that were stated for cells?

A synthetic tile goes through the summary and the totals. Its errors are then drawn thousands of times as they are stated:
of each cell alone, alike nearby (exp(-d / L)), and one for all. The spread of the drawn regional means is the reference.
"""

import itertools
import threading
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
import scipy.fft
import scipy.stats

from firnlight.core.correlation import block_cells
from firnlight.core.grid import Window
from firnlight.core.totals import BlockGrid, Totals
from firnlight.physics import zones
from firnlight.stages.summarise import Errors, Summary

SIZE, CELL_M, LENGTH_M = 64, 150.0, 2000.0
STRATA, DRAWS = 4, 8000
SKY, LONGWAVE = (0.05, 0.06), (8.0, 9.0)  # shared, local
BITS = tuple(1 << n for n in range(8))
SNOW, CLOUD, FILL = 1 << 3, 1 << 1, -32768
SIDE = block_cells(LENGTH_M, CELL_M)
ERRORS = Errors(SKY, LONGWAVE, "oli", BlockGrid("T", SIDE * CELL_M, LENGTH_M), SIDE)


def smooth(rng, length_m, count):
    """Fields with mean 0, deviation 1 and the correlation exp(-d / length), two from each transform on a torus.

    The torus is twice the tile, so that no two cells are nearer around it than across the tile.
    """
    lag = np.minimum(np.arange(2 * SIZE), 2 * SIZE - np.arange(2 * SIZE)) * CELL_M
    wanted = np.exp(-np.hypot(lag[:, np.newaxis], lag) / length_m)
    power = np.maximum(scipy.fft.fft2(wanted).real, 0)  # wrapped, it is all but a correlation
    assert abs(scipy.fft.ifft2(power).real - wanted).max() < 0.002
    scale = np.sqrt(power).astype(np.float32) / np.float32(2 * SIZE)
    for _ in range((count + 1) // 2):
        noise = rng.standard_normal((2, 2 * SIZE, 2 * SIZE), dtype=np.float32)
        drawn = scipy.fft.fft2(scale * (noise[0] + 1j * noise[1]))[:SIZE, :SIZE]
        yield drawn.real
        yield drawn.imag


def between(rng, low, high):
    """A field in whole steps that changes over the tile and from cell to cell."""
    field = 0.7 * next(smooth(rng, 3000.0, 1)) + 0.3 * rng.standard_normal((SIZE, SIZE))
    return np.round(low + (high - low) / (1 + np.exp(-2 * field))).astype(np.int16)


def made_day(seed):
    """Strata, areas and maps of a day: two states, cloud over a tenth, three large strata and one of seven cells."""
    ground, rng = np.random.default_rng(1), np.random.default_rng(seed)
    strata = (between(ground, 0, 300) // 101).astype(np.int32)
    for row, col in ((40, 26), (40, 27), (41, 27), (42, 27), (42, 28), (43, 28), (45, 30)):
        strata[row, col] = 3
    area = ground.integers(200_000_000, 250_000_000, (SIZE, SIZE))
    snow = between(rng, 0, 100) > 50
    cloud = (between(rng, 0, 100) > 85) & (strata != 3)
    albedo = np.where(snow, between(rng, 5000, 8800), between(rng, 1000, 3000))
    insolation = between(rng, 500, 3300)
    layers = {
        "albedo": albedo,
        # independent, local, shared: of the size that the conversions state
        "albedo_u": np.stack([np.zeros_like(albedo), between(rng, 500, 2000), between(rng, 100, 300), albedo // 25]),
        "insolation": insolation,
        "absorbed_shortwave": ((insolation * (10000 - albedo.astype(np.int64)) + 5000) // 10000).astype(np.int16),
        "net_longwave": between(rng, -900, -300),
        "snow_fraction": np.where(snow, 9000, 0).astype(np.int16),
        "quality": np.where(snow, SNOW, 0).astype(np.uint8),
    }
    layers["net_radiation"] = layers["absorbed_shortwave"] + layers["net_longwave"]
    for name, values in layers.items():
        values[..., cloud] = CLOUD if name == "quality" else FILL
    return SimpleNamespace(strata=strata, area=area, layers=layers, seen=~cloud, snow=snow & ~cloud)


def windows(*edges):
    cuts = [0, *edges, SIZE]
    spans = list(itertools.pairwise(cuts))
    return [Window(a, c, b - a, d - c) for a, b in spans for c, d in spans]


def summarised(day, errors=ERRORS, parts=(32,)):
    summary = Summary(STRATA, errors, BITS)
    for window in windows(*parts):
        add(summary, day, window)
    return summary.totals()


def add(summary, day, window):
    layers = {name: np.ascontiguousarray(values[(..., *window.slices)]) for name, values in day.layers.items()}
    strata, area = (np.ascontiguousarray(field[window.slices]) for field in (day.strata, day.area))
    summary.add(strata, area, layers, window)


# rows of a table: which totals they join, and which cells that is
REGIONS = {
    "the tile": (range(STRATA), (0, 1)),
    "one stratum": ((1,), (0, 1)),
    "snow of one stratum": ((2,), (1,)),
    "snow-free ground": (range(STRATA), (0,)),
    "seven cells": ((3,), (0, 1)),
    "two rows": ((0, 2), (1,)),
}


def cells_of(day, region):
    strata, states = REGIONS[region]
    return np.isin(day.strata, list(strata)) & day.seen & np.isin(day.snow, list(states))


def totals_of(totals, region):
    strata, states = REGIONS[region]
    return sum((totals[3 * stratum + state] for stratum in strata for state in states), Totals()).end_of_day()


def sensitivities(day):
    """What a region's sum of absorbed or net radiation gains per unit of each error, cell by cell. [W m-2 x cm2]"""
    s, dark = day.layers["insolation"] * 0.1, 1 - day.layers["albedo"] * 1e-4
    noise, local, calibration = (-s * day.layers["albedo_u"][part] * 1e-4 for part in (1, 2, 3))
    even = np.ones_like(s)
    found = {
        "noise": noise, "albedo": local, "calibration": calibration, "all sky": s * dark * SKY[0],
        "sky": s * dark * SKY[1], "all longwave": even * LONGWAVE[0], "longwave": even * LONGWAVE[1],
    }  # fmt: skip
    masks = np.stack([cells_of(day, region) for region in REGIONS])
    return {name: masks * (field * day.area) for name, field in found.items()}


@pytest.fixture(scope="module")
def drawn():
    """Stated totals and drawn errors of the regional means: on the first day, and of two days together."""
    days = [made_day(2), made_day(3)]
    rng = np.random.default_rng(20310501)
    areas = [np.array([day.area[cells_of(day, region)].sum() for region in REGIONS]) for day in days]
    shape = len(REGIONS), SIZE * SIZE
    weights = [{name: w.reshape(shape).astype(np.float32).T for name, w in sensitivities(day).items()} for day in days]

    def nearby(*w):
        """Errors alike nearby, one for all the maps of weights that are given."""
        found = np.stack([field.ravel() @ np.hstack(w) for field in smooth(rng, LENGTH_M, DRAWS)])
        return np.split(found.astype(float), len(w), axis=1)

    def alone(w):
        chunks = (rng.standard_normal((DRAWS // 8, SIZE * SIZE), dtype=np.float32) @ w for _ in range(8))
        return np.concatenate(list(chunks)).astype(float)

    def of_all():
        """One error for all cells, its draws spread evenly over the normal distribution."""
        return rng.permutation(scipy.stats.norm.ppf((np.arange(DRAWS) + 0.5) / DRAWS))[:, np.newaxis]

    # those of albedo, and what all cells share, are one error through both days
    albedo = nearby(*(w["albedo"] for w in weights))
    calibration, all_sky, all_longwave = (of_all() for _ in range(3))
    errors = []
    for n, w in enumerate(weights):
        noise, local = alone(w["noise"]), albedo[n] + nearby(w["sky"])[0]
        absorbed = noise + local + calibration * w["calibration"].sum(axis=0) + all_sky * w["all sky"].sum(axis=0)
        net = absorbed + nearby(w["longwave"])[0] + all_longwave * w["all longwave"].sum(axis=0)
        errors.append(dict(zip(STATED, (noise, local, absorbed, net), strict=True)))
    stated = [{region: totals_of(summarised(day), region) for region in REGIONS} for day in days]
    both = {region: stated[0][region] + stated[1][region] for region in REGIONS}
    return {
        "a day": (stated[0], {name: errors[0][name] / areas[0] for name in STATED}),
        "two days": (both, {name: (errors[0][name] + errors[1][name]) / sum(areas) for name in STATED}),
    }


STATED = ("absorbed_u_independent", "absorbed_u_local", "absorbed_u", "net_radiation_u")


@pytest.mark.parametrize("span", ["a day", "two days"])
@pytest.mark.parametrize("name", STATED)
@pytest.mark.parametrize("region", REGIONS)
def test_a_stated_uncertainty_is_the_spread_of_the_drawn_errors(drawn, span, name, region):
    stated, errors = drawn[span]
    u = getattr(stated[region], name)
    error = errors[name][:, list(REGIONS).index(region)]
    assert len(error) == DRAWS
    inside, within_two = (abs(error) <= u).mean(), (abs(error) <= 2 * u).mean()
    # the deviation of 8,000 draws is itself known to 0.8 %, a share of 68 % of them to 0.5 %, one of 95 % to 0.25 %
    assert u / error.std() == pytest.approx(1, abs=0.03)
    assert 0.66 <= inside <= 0.70
    assert 0.94 <= within_two <= 0.96


@pytest.mark.parametrize("region", ["the tile", "one stratum", "snow of one stratum", "two rows"])
def test_errors_alike_nearby_are_neither_independent_nor_one(region):
    # the reference tells: taken as either, the local part would be out by far more than 5 %
    day = made_day(2)
    local = totals_of(summarised(day), region).absorbed_u_local
    each = [sensitivities(day)[name][list(REGIONS).index(region)] for name in ("albedo", "sky")]
    area = day.area[cells_of(day, region)].sum()
    independent = np.hypot(*(np.sqrt((one**2).sum()) for one in each)) / area
    added = np.hypot(*(abs(one.sum()) for one in each)) / area
    assert 5 * independent < local < 0.9 * added


def test_means_are_those_of_the_maps():
    day = made_day(2)
    found = totals_of(summarised(day), "two rows")
    inside = cells_of(day, "two rows")
    w = day.area[inside]
    for value, name, step in (
        (found.absorbed_wm2, "absorbed_shortwave", 0.1), (found.insolation_wm2, "insolation", 0.1),
        (found.net_longwave_wm2, "net_longwave", 0.1), (found.net_radiation_wm2, "net_radiation", 0.1),
        (found.albedo_area_mean, "albedo", 1e-4), (found.snow_fraction_mean, "snow_fraction", 1e-4),
    ):  # fmt: skip
        assert value == pytest.approx((day.layers[name][inside] * w).sum() / w.sum() * step, rel=1e-12)
    above = np.maximum(day.layers["net_radiation"][inside], 0)
    assert found.melt_wm2 == pytest.approx((above * w).sum() / w.sum() * 0.1, rel=1e-12)


def test_neither_windows_nor_threads_change_the_totals():
    day = made_day(2)
    whole = summarised(day, parts=())
    assert summarised(day, parts=(1, 13, 20, 55)) == whole
    summary = Summary(STRATA, ERRORS, BITS)
    parts = windows(10, 33, 50)
    threads = [threading.Thread(target=lambda n=n: [add(summary, day, w) for w in parts[n::3]]) for n in range(3)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert summary.totals() == whole


def test_seen_and_unseen_ground_stand_in_the_row_of_their_state():
    day = made_day(2)
    totals = summarised(day)
    for stratum in range(STRATA):
        free, snow, unseen = totals[3 * stratum : 3 * stratum + 3]
        inside = day.strata == stratum
        assert free.cells == (inside & day.seen & ~day.snow).sum()
        assert snow.cells == (inside & day.snow).sum()
        assert (unseen.cells, unseen.unseen_cells, unseen.cloud) == (0, (~day.seen & inside).sum(), unseen.unseen_area)
    nobodys = SimpleNamespace(**{**vars(day), "strata": np.full((SIZE, SIZE), -1, np.int32)})
    for nothing in (summarised(nobodys), Summary(STRATA, ERRORS, BITS).totals()):
        assert nothing == [Totals()] * 12


def test_the_errors_a_day_has_are_named_and_only_those():
    day = made_day(2)
    both = summarised(day, replace(ERRORS, calibration="etm and oli"))
    assert set(both[0].shared) == {"calibration etm and oli", "insolation", "net longwave"}
    exact_sky = summarised(day, replace(ERRORS, sky=(0.0, 0.0), longwave_wm2=(0.0, 0.0)))
    assert set(exact_sky[0].shared) == {"calibration oli"}
    assert exact_sky[0].end_of_day().past == (0.0, 0.0)
    assert all(near[1:3] == (0, 0) for near in exact_sky[0].local[ERRORS.grid].values())


def test_a_block_keeps_where_its_cells_lie():
    day = made_day(2)
    row, col = np.argwhere(day.strata == 3).T
    near = sum(summarised(day)[9:11], Totals()).local[ERRORS.grid]
    assert set(near) == {(r // SIDE, c // SIDE) for r, c in zip(row, col, strict=True)}
    for (i, j), one in near.items():
        here = (row // SIDE == i) & (col // SIDE == j)
        w = day.area[row[here], col[here]] / 1e4
        down, across = ((at[here] % SIDE + 0.5) / SIDE for at in (row, col))
        # rounded once in each state
        assert one.area == pytest.approx(w.sum(), abs=1)
        assert one.down == pytest.approx((w * down).sum() * 1024, abs=1)
        assert one.across == pytest.approx((w * across).sum() * 1024, abs=1)
        assert one.square == pytest.approx((w * (down**2 + across**2)).sum() * 1024**2, abs=1)
        assert one._fields == zones.LOCAL
