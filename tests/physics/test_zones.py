"""Are totals per stratum exact, whatever the cutting, and equal to the plain reference?"""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from firnlight.physics import zones, zones_fast

BITS = tuple(1 << n for n in range(8))
SNOW, LIMITED = 1 << 3, 1 << 7
FILL = -32768
SKY_U, LONGWAVE_U = (0.05, 0.03), (1000, 500)
OPTIONAL = ("terrain_light", "net_longwave", "net_radiation")
NONE = np.empty((0, 0), np.int16)


@st.composite
def blocks(draw):
    """A block of cells with extreme areas and values, unseen cells, gaps in the longwave, and every flag."""
    shape = draw(st.integers(1, 5)), draw(st.integers(1, 90))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    strata = rng.integers(-1, draw(st.integers(1, 4)), shape).astype(np.int32)
    if draw(st.booleans()):
        strata[:] = np.sort(strata, axis=1)  # long runs
    largest = draw(st.sampled_from([9_000_000, 450_000_000_000]))
    area = rng.integers(1, largest, shape, endpoint=True)
    albedo = rng.integers(0, 10000, shape, endpoint=True).astype(np.int16)
    insolation = rng.choice([0, 1, 4321, 8000, 30000], shape).astype(np.int16)
    quality = rng.integers(0, 256, shape).astype(np.uint8)
    unseen = rng.random(shape) < 0.3
    albedo[unseen] = insolation[unseen] = FILL
    layers = {
        "albedo": albedo,
        "albedo_u": rng.integers(0, 10000, (4, *shape), endpoint=True).astype(np.int16),
        "insolation": insolation,
        "absorbed_shortwave": rng.integers(0, 8000, shape, endpoint=True).astype(np.int16),
        "snow_fraction": rng.choice([FILL, 0, 5000, 10000], shape).astype(np.int16),
        "quality": quality,
    }
    if draw(st.booleans()):
        layers["terrain_light"] = rng.choice([FILL, 0, 1234, 30000], shape).astype(np.int16)
    if draw(st.booleans()):
        gap = rng.random(shape) < draw(st.sampled_from([0.0, 0.3]))
        for name, lowest, highest in (("net_longwave", -10000, 10000), ("net_radiation", -10000, 32000)):
            values = rng.integers(lowest, highest, shape, endpoint=True).astype(np.int16)
            layers[name] = np.where(gap, np.int16(FILL), values)
    return strata, area, layers


def fast(strata, area, layers, n_strata, side, first=(0, 0), into=None, sky_u=SKY_U, longwave_u=LONGWAVE_U):
    """Sums of the kernel, and those per block of ground by their row and column in the tile."""
    sums, near = into or (
        (
            np.zeros((n_strata * 2, len(zones.SEEN), 2), np.int64),
            np.zeros((n_strata, len(zones.UNSEEN), 2), np.int64),
            np.zeros((n_strata * 2, zones.ALBEDO_BINS), np.int64),
        ),
        {},
    )
    edge = [(start + n - 1) // side - start // side + 1 for start, n in zip(first, strata.shape, strict=True)]
    local = np.zeros((n_strata * 2, *edge, len(zones.LOCAL), 2), np.int64)
    zones_fast.zone_sums(
        strata, area, layers["albedo"], layers["albedo_u"], layers["insolation"], layers.get("terrain_light", NONE),
        layers["absorbed_shortwave"], layers.get("net_longwave", NONE), layers.get("net_radiation", NONE),
        layers["snow_fraction"], layers["quality"], tuple(map(np.uint8, BITS)), np.int64(FILL), sky_u,
        tuple(map(np.int64, longwave_u)), zones.BIN_STEPS, side, *first, *sums, local,
    )  # fmt: skip
    for zone, i, j in np.argwhere(local.any(axis=(3, 4))).tolist():
        here = near.setdefault((zone, first[0] // side + i, first[1] // side + j), [0] * len(zones.LOCAL))
        for k, pair in enumerate(local[zone, i, j]):
            here[k] += whole(pair)
    return sums, near


def whole(pair):
    """A (hi, lo) pair as a Python integer."""
    return (int(pair[0]) << zones.LIMB_BITS) + int(pair[1])


def exact(found):
    (seen, unseen, histogram), near = found
    return *([[whole(pair) for pair in row] for row in pairs] for pairs in (seen, unseen)), histogram.tolist(), near


SIDES = st.sampled_from([1, 2, 7, 40, 1000])
PLACES = st.tuples(st.integers(0, 3000), st.integers(0, 3000))


@given(blocks(), SIDES, PLACES)
@settings(deadline=None)
def test_fast_kernel_equals_the_reference(block, side, first):
    reference = zones.zone_sums(*block, BITS, FILL, SKY_U, LONGWAVE_U, 4, side, first)
    assert exact(fast(*block, 4, side, first)) == reference


@given(blocks(), SIDES, PLACES, st.data())
@settings(deadline=None)
def test_cutting_a_block_never_changes_the_totals(block, side, first, data):
    strata, area, layers = block
    rows, cols = (data.draw(st.integers(0, n)) for n in strata.shape)
    found = None
    for down in (slice(rows, None), slice(0, rows)):
        for across in (slice(0, cols), slice(cols, None)):
            cut = strata[down, across]
            if cut.size:
                cells = {name: np.ascontiguousarray(values[..., down, across]) for name, values in layers.items()}
                at = first[0] + (down.start or 0), first[1] + (across.start or 0)
                inside = np.ascontiguousarray(cut), np.ascontiguousarray(area[down, across])
                found = fast(*inside, cells, 4, side, at, found)
    assert exact(found) == exact(fast(*block, 4, side, first))


@given(blocks(), SIDES)
@settings(deadline=None)
def test_every_cell_of_a_stratum_is_counted_once(block, side):
    strata, area, _layers = block
    seen, unseen, histogram, near = exact(fast(*block, 4, side))
    for stratum in range(4):
        inside = strata == stratum
        rows = seen[2 * stratum], seen[2 * stratum + 1]
        assert sum(row[0] for row in rows) + unseen[stratum][0] == inside.sum()
        assert sum(row[1] for row in rows) + unseen[stratum][1] == area[inside].sum()
        assert unseen[stratum][1] == sum(unseen[stratum][2:])
        assert [sum(histogram[2 * stratum + k]) for k in range(2)] == [row[1] for row in rows]
        for k, row in enumerate(rows):
            assert sum(sums[3] for at, sums in near.items() if at[0] == 2 * stratum + k) == row[1]


def one_cell(**changed):
    """A seen snow cell: albedo 0.6, insolation 200 W m-2; stored integers may be changed."""
    stored = {
        "albedo": 6000, "insolation": 2000, "terrain_light": 100, "absorbed_shortwave": 800, "snow_fraction": 9000,
        "net_longwave": -500, "net_radiation": 300, "quality": SNOW, **changed,
    }  # fmt: skip
    layers = {name: np.full((1, 1), value, np.uint8 if name == "quality" else np.int16) for name, value in stored.items()}
    layers["albedo_u"] = np.array([0, 100, 200, 300], np.int16).reshape(4, 1, 1)
    return layers


def sums_of(layers, first=(0, 0), side=10):
    seen, _, _, near = exact(fast(np.zeros((1, 1), np.int32), np.full((1, 1), 10), layers, 1, side, first))
    return [dict(zip(zones.SEEN, row, strict=True)) for row in seen], near


def test_one_cell_worked_by_hand():
    (_, snow), near = sums_of(one_cell(), (23, 8))
    # 10 cm2: sky 5 % of 80 W m-2 is 4, longwave 10 W m-2; of albedo .03 x 200 is shared and .01 x 200 independent
    assert snow["terrain_light"] == 1000
    assert (snow["net_longwave"], snow["net_area"], snow["melt"]) == (-5000, 10, 3000)
    assert (snow["u_calibration"], snow["u_sky"], snow["u_longwave"]) == (10 * 600, 10 * 400, 10 * 1000)
    assert (snow["u_noise_hh"] << 56) + (snow["u_noise_hl"] << 29) + snow["u_noise_ll"] == (10 * 200) ** 2
    # in blocks of 10 cells row 23 is the fourth of block 2, its middle 7 half cells from the edge; column 8: 17
    assert near == {(1, 2, 0): [10 * 400, 10 * 240, 10 * 500, 10, 10 * 7, 10 * 17, 10 * (7**2 + 17**2)]}


@pytest.mark.parametrize("absent", ["fill", "no layer"])
def test_a_cell_without_longwave_or_terrain_light_counts_in_all_else(absent):
    layers = one_cell(**dict.fromkeys(OPTIONAL, FILL))
    if absent == "no layer":
        layers = {name: values for name, values in layers.items() if name not in OPTIONAL}
    (_, snow), near = sums_of(layers)
    (_, whole_one), _ = sums_of(one_cell())
    gone = {"terrain_light", "net_longwave", "net_area", "melt", "u_longwave"}
    assert {name for name in snow if snow[name] != whole_one[name]} == gone
    assert all(snow[name] == 0 for name in gone)
    assert near[1, 0, 0][:3] == [4000, 2400, 0]


def test_only_snow_melts_and_only_above_zero():
    assert sums_of(one_cell(net_radiation=-1))[0][1]["melt"] == 0
    assert sums_of(one_cell(quality=0))[0][0]["melt"] == 0
    assert sums_of(one_cell(quality=SNOW | LIMITED))[0][1]["limited_area"] == 10


def test_a_whole_tile_of_the_largest_values_does_not_overflow():
    # more than 10980 x 10980 cells of 6.7 km, each with the largest stored numbers, as 147 additions of the same rows of
    # blocks; these are of half the longest correlation length, 1000 km
    cols, times, area_cm2, side = 10980, 147, 450_000_000_000, 75
    shape = (side, cols)
    layers = {
        "albedo": np.zeros(shape, np.int16), "albedo_u": np.full((4, *shape), 10000, np.int16),
        "insolation": np.full(shape, 30000, np.int16), "terrain_light": np.full(shape, 30000, np.int16),
        "absorbed_shortwave": np.full(shape, 30000, np.int16), "net_longwave": np.full(shape, -10000, np.int16),
        "net_radiation": np.full(shape, 32000, np.int16), "snow_fraction": np.full(shape, 10000, np.int16),
        "quality": np.full(shape, SNOW, np.uint8),
    }  # fmt: skip
    strata, area, found = np.zeros(shape, np.int32), np.full(shape, area_cm2), None
    for _ in range(times):
        found = fast(strata, area, layers, 1, side, (side, 0), found, (1.0, 1.0), (20000, 20000))
        # the histogram holds areas, and no tile is larger than the Earth: 5.1e18 cm2
        found[0][2][:] = 0
    seen, _, _, near = exact(found)
    row = dict(zip(zones.SEEN, seen[1], strict=True))
    cells = side * cols * times
    all_area = cells * area_cm2
    assert row["insolation"] == row["terrain_light"] == row["absorbed"] == all_area * 30000
    assert (row["net_longwave"], row["melt"]) == (-all_area * 10000, all_area * 32000)
    # albedo_u 1 and sky 100 % of 3000 W m-2, in 0.01 W m-2; longwave 200 W m-2
    assert (row["u_calibration"], row["u_sky"], row["u_longwave"]) == (*[all_area * 300_000] * 2, all_area * 20_000)
    squares = (row["u_noise_hh"] << 56) + (row["u_noise_hl"] << 29) + row["u_noise_ll"]
    assert squares == cells * (area_cm2 * 300_000) ** 2
    assert len(near) == -(-cols // side)
    places = [2 * n + 1 for n in range(side)]
    block, along = side * side * times * area_cm2, side * times * area_cm2 * sum(places)
    squared = times * area_cm2 * 2 * side * sum(n * n for n in places)
    assert near[1, 1, 5] == [block * 300_000, block * 300_000, block * 20_000, block, along, along, squared]
