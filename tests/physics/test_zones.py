"""Are totals per stratum exact, whatever the cutting, and equal to the plain reference?"""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from firnlight.physics import zones, zones_fast

BITS = tuple(1 << n for n in range(8))
FILL = -32768
RELATIVE_U = 0.05


@st.composite
def blocks(draw):
    """A block of cells with extreme areas and values, unseen cells and every flag."""
    shape = draw(st.integers(1, 5)), draw(st.integers(1, 90))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    strata = rng.integers(-1, draw(st.integers(1, 4)), shape).astype(np.int32)
    if draw(st.booleans()):
        strata[:] = np.sort(strata, axis=1)  # long runs
    largest = draw(st.sampled_from([9_000_000, 450_000_000_000]))
    area = rng.integers(1, largest, shape, endpoint=True)
    albedo = rng.integers(0, 10000, shape, endpoint=True).astype(np.int16)
    insolation = rng.choice([0, 1, 4321, 8000], shape).astype(np.int16)
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
    return strata, area, layers


def fast(strata, area, layers, n_strata, into=None):
    sums = into or (
        np.zeros((n_strata * 2, len(zones.SEEN), 2), np.int64),
        np.zeros((n_strata, len(zones.UNSEEN), 2), np.int64),
        np.zeros((n_strata * 2, zones.ALBEDO_BINS), np.int64),
    )
    zones_fast.zone_sums(
        strata, area, layers["albedo"], layers["albedo_u"], layers["insolation"], layers["absorbed_shortwave"],
        layers["snow_fraction"], layers["quality"], tuple(map(np.uint8, BITS)), np.int64(FILL), RELATIVE_U,
        zones.BIN_STEPS, *sums,
    )  # fmt: skip
    return sums


def exact(sums):
    """(hi, lo) pairs as Python integers."""
    seen, unseen, histogram = sums
    return *(
        [[(int(hi) << zones.LIMB_BITS) + int(lo) for hi, lo in row] for row in pairs] for pairs in (seen, unseen)
    ), histogram.tolist()


@given(blocks())
@settings(deadline=None)
def test_fast_kernel_equals_the_reference(block):
    assert exact(fast(*block, 4)) == zones.zone_sums(*block, BITS, FILL, RELATIVE_U, 4)


@given(blocks(), st.data())
@settings(deadline=None)
def test_cutting_a_block_never_changes_the_totals(block, data):
    strata, area, layers = block
    cut = data.draw(st.integers(0, strata.shape[1]))
    sums = None
    for part in (slice(0, cut), slice(cut, None)):
        cells = {name: np.ascontiguousarray(values[..., part]) for name, values in layers.items()}
        sums = fast(np.ascontiguousarray(strata[:, part]), np.ascontiguousarray(area[:, part]), cells, 4, sums)
    assert exact(sums) == exact(fast(*block, 4))


@given(blocks())
@settings(deadline=None)
def test_every_cell_of_a_stratum_is_counted_once(block):
    strata, area, _layers = block
    seen, unseen, histogram = exact(fast(*block, 4))
    for stratum in range(4):
        inside = strata == stratum
        rows = seen[2 * stratum], seen[2 * stratum + 1]
        assert sum(row[0] for row in rows) + unseen[stratum][0] == inside.sum()
        assert sum(row[1] for row in rows) + unseen[stratum][1] == area[inside].sum()
        assert unseen[stratum][1] == sum(unseen[stratum][2:])
        assert [sum(histogram[2 * stratum + k]) for k in range(2)] == [row[1] for row in rows]


def test_a_whole_tile_of_the_largest_values_does_not_overflow():
    # 10980 x 10980 cells of 6.7 km, each with the largest stored numbers, as 10980 additions of one row
    cols, area_cm2 = 10980, 450_000_000_000
    shape = (1, cols)
    layers = {
        "albedo": np.zeros(shape, np.int16), "albedo_u": np.full((4, *shape), 10000, np.int16),
        "insolation": np.full(shape, 8000, np.int16), "absorbed_shortwave": np.full(shape, 8000, np.int16),
        "snow_fraction": np.full(shape, 10000, np.int16), "quality": np.zeros(shape, np.uint8),
    }  # fmt: skip
    strata, area, sums = np.zeros(shape, np.int32), np.full(shape, area_cm2), None
    for _ in range(cols):
        sums = fast(strata, area, layers, 1, sums)
        # the histogram holds areas, and no tile is larger than the Earth: 5.1e18 cm2
        sums[2][:] = 0
    row = dict(zip(zones.SEEN, exact(sums)[0][0], strict=True))
    cells = cols * cols
    assert row["insolation"] == cells * area_cm2 * 8000
    squares = (row["u_noise_hh"] << 56) + (row["u_noise_hl"] << 29) + row["u_noise_ll"]
    assert squares == cells * (area_cm2 * 80000) ** 2
