"""Do totals add, close, keep what they know, and give the means that one works out by hand?"""

import datetime as dt
import math
from types import SimpleNamespace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from firnlight.core.totals import CM2_PER_KM2, PLACES, SKY, SUM_NAMES, BlockGrid, Near, Totals
from firnlight.io.sheets import STATES, prepare_totals, read_totals

COUNTS = st.integers(0, 10**30)
SMALL = st.integers(0, 10**9)
GRIDS = [BlockGrid(tile, 2500.0, 5000.0) for tile in ("A", "B")]
SOURCES = [SKY, "net longwave", "calibration oli", "calibration oli and modis"]
AREA = 9_000_000  # a cell of 900 m2
BINS = tuple(AREA if n == 50 else 0 for n in range(101))


@st.composite
def nears(draw):
    places = st.tuples(st.integers(0, 3), st.integers(0, 3))
    blocks = st.dictionaries(places, st.builds(Near, *[SMALL] * 3, st.integers(1, 10**9), *[SMALL] * 3), max_size=4)
    return draw(st.dictionaries(st.sampled_from(GRIDS), blocks, max_size=2))


@st.composite
def totals(draw):
    names = ("area", "albedo", "insolation", "absorbed", "terrain_light", "net_longwave", "net_area", "melt", "u_noise2")
    sums = {name: draw(COUNTS) for name in (*names, "cloud")}
    past = st.integers(0, 2**40).map(float)  # whole, so that the order of additions is of no account
    return Totals(
        **sums,
        bins=tuple(draw(st.lists(st.integers(0, 10**15), min_size=101, max_size=101))),
        shared=draw(st.dictionaries(st.sampled_from(SOURCES), st.integers(-(10**30), 10**30))),
        local=draw(nears()),
        past=(draw(past), draw(past)),
    )


@given(totals(), totals(), totals())
@settings(deadline=None, max_examples=50)
def test_adding_is_exact_in_any_order(a, b, c):
    assert (a + b) + c == a + (b + c)
    assert a + b == b + a
    assert a + Totals() == a
    assert (a + b).reflected == a.reflected + b.reflected


def cell(place=(0, 0), *, at=(0.5, 0.5), tile="A", albedo=0, sky=0, longwave=0, noise=0, shared=None, **sums):
    """One cell of 900 m2, half of 100 W m-2 absorbed: local and independent uncertainties in 0.01 W m-2, and where."""
    m2 = AREA // 10**4
    down, across = (round(one * PLACES) for one in at)
    near = Near(albedo * m2, sky * m2, longwave * m2, m2, down * m2, across * m2, (down**2 + across**2) * m2)
    return Totals(
        cells=1, area=AREA, albedo=AREA * 5000, insolation=AREA * 1000, absorbed=AREA * 500, bins=BINS,
        u_noise2=(AREA * noise) ** 2, shared={name: AREA * u for name, u in (shared or {}).items()},
        local={BlockGrid(tile, 2500.0, 5000.0): {place: near}}, **sums,
    )  # fmt: skip


def test_means_are_those_of_two_cells_worked_by_hand():
    # albedo 0.5 and 0.9, insolation 200 and 100 W m-2; both in the middle of one block, so that their local errors are
    # one: of albedo 1 and 2 W m-2, of the sky 3 and 1
    one = Totals(
        cells=2, area=2 * AREA, albedo=AREA * (5000 + 9000), insolation=AREA * (2000 + 1000), absorbed=AREA * (1000 + 100),
        terrain_light=AREA * (0 + 50), net_longwave=-AREA * 900, net_area=2 * AREA, melt=AREA * 700,
        u_noise2=AREA**2 * (30**2 + 40**2),
        shared={"calibration oli": AREA * 300, SKY: AREA * 400, "net longwave": AREA * 480},
        local={GRIDS[0]: {(0, 0): Near(900 * 300, 900 * 400, 900 * 360, 1800, 1800 * 512, 1800 * 512, 1800 * 2 * 512**2)}},
        bins=tuple(AREA if n in (50, 90) else 0 for n in range(101)),
    )  # fmt: skip
    assert one.albedo_area_mean == pytest.approx(0.7)
    assert one.albedo_ratio == pytest.approx(190 / 300)
    assert one.insolation_wm2 == pytest.approx(150)
    assert one.absorbed_wm2 == pytest.approx(55)
    assert one.reflected_wm2 == pytest.approx(95)
    assert one.terrain_light_wm2 == pytest.approx(2.5)
    assert one.absorbed_u_independent == pytest.approx(0.25)  # sqrt(0.3^2 + 0.4^2) / 2
    assert one.absorbed_u_local == pytest.approx(2.5)  # hypot(1.5, 2.0)
    assert one.absorbed_u_shared == pytest.approx(2.5)  # hypot(1.5, 2.0)
    assert one.absorbed_u == pytest.approx(math.hypot(0.25, 2.5, 2.5))
    assert one.albedo_u == pytest.approx(math.hypot(0.25, 1.5, 1.5) / 150)
    assert one.net_longwave_wm2 == pytest.approx(-45)
    assert one.net_radiation_wm2 == pytest.approx(10)
    assert one.net_radiation_u == pytest.approx(math.hypot(0.25, 2.5, 1.8, 2.5, 2.4))
    assert one.melt_wm2 == pytest.approx(35)
    assert one.absorbed_gj == pytest.approx(55 * 1800 * 86400 / 1e9)


def test_percentiles_lie_in_their_bins():
    one = Totals(bins=tuple(AREA if n in (50, 90) else 0 for n in range(101)))
    assert one.albedo_percentile(0.25) == pytest.approx(0.505)
    assert one.albedo_percentile(0.9) == pytest.approx(0.908)


def test_nothing_seen_is_nan_and_not_zero():
    nothing = Totals(unseen_cells=3, unseen_area=CM2_PER_KM2).end_of_day()
    values = (
        nothing.albedo_ratio,
        nothing.albedo_u,
        nothing.absorbed_wm2,
        nothing.absorbed_u,
        nothing.net_radiation_u,
        nothing.albedo_percentile(0.5),
    )
    assert all(math.isnan(value) for value in values)


def test_net_radiation_is_unknown_where_longwave_is_known_of_some_ground_only():
    both = cell(net_area=AREA, net_longwave=-AREA * 100) + cell()
    assert math.isnan(both.net_radiation_wm2)
    assert math.isnan(both.net_radiation_u)
    assert math.isnan(both.melt_wm2)
    assert both.absorbed_u == 0


def test_one_source_adds_fully_and_different_sources_in_quadrature():
    one, same = (cell(shared={"calibration oli": u}) for u in (300, 100))
    other = cell(shared={"calibration modis": 400})
    assert (one + same).absorbed_u_shared == pytest.approx(2.0)  # (3 + 1) / 2
    assert (one + other).absorbed_u_shared == pytest.approx(2.5)  # hypot(3, 4) / 2
    # a mean over many days keeps a shared error whole
    assert sum([one.end_of_day()] * 100, Totals()).absorbed_u_shared == pytest.approx(3.0)


def test_shared_sums_keep_their_sign():
    up, down = cell(shared={"calibration oli": 300}), cell(shared={"calibration oli": -300})
    assert (up + down).absorbed_u_shared == 0
    assert (up + cell(shared={SKY: -400})).absorbed_u_shared == pytest.approx(2.5)


def test_shared_longwave_is_of_net_radiation_alone():
    one = cell(shared={SKY: 300, "net longwave": 400}, net_area=AREA)
    assert one.absorbed_u == pytest.approx(3.0)
    assert one.net_radiation_u == pytest.approx(5.0)
    assert one.albedo_u == 0


def test_independent_errors_fall_with_cells_and_days():
    assert sum([cell(noise=300)] * 9, Totals()).absorbed_u == pytest.approx(1.0)


def test_local_errors_add_nearby_and_not_far_off():
    one = cell((0, 0), albedo=300)
    beside, far = cell((0, 0), at=(0.5, 0.51), albedo=300), cell((0, 90), albedo=300)
    assert (one + beside).absorbed_u_local == pytest.approx(3.0, rel=0.003)  # 25 m of 5 km
    assert (one + far).absorbed_u_local == pytest.approx(3.0 / math.sqrt(2), rel=1e-6)
    # 2 km apart, in one block and over an edge: sqrt((1 + exp(-0.4)) / 2)
    expected = 3.0 * math.sqrt((1 + math.exp(-0.4)) / 2)
    over_edge = cell((0, 0), at=(0.5, 0.6), albedo=300) + cell((0, 1), at=(0.5, 0.4), albedo=300)
    assert over_edge.absorbed_u_local == pytest.approx(expected, rel=1e-3)
    within = cell((0, 0), at=(0.5, 0.1), albedo=300) + cell((0, 0), at=(0.5, 0.9), albedo=300)
    assert within.absorbed_u_local == pytest.approx(expected, rel=0.05)  # two cells of one block: its shape is lost


def test_tiles_are_taken_as_independent():
    both = cell(tile="A", albedo=300, sky=400) + cell(tile="B", albedo=300, sky=400)
    assert both.absorbed_u_local == pytest.approx(5.0 / math.sqrt(2))


def test_local_errors_of_albedo_go_on_from_day_to_day_and_those_of_weather_do_not():
    day = cell(albedo=300) + cell((0, 1), albedo=200)
    two = day.end_of_day() + day.end_of_day()
    assert two.absorbed_u_local == pytest.approx(day.absorbed_u_local)
    for part in ("sky", "longwave"):
        day = cell(net_area=AREA, **{part: 300}) + cell((0, 1), net_area=AREA, **{part: 200})
        two = day.end_of_day() + day.end_of_day()
        assert day.net_radiation_u > 2
        assert two.net_radiation_u == pytest.approx(day.net_radiation_u / math.sqrt(2))
        assert two.absorbed_u_local == (0 if part == "longwave" else pytest.approx(day.absorbed_u_local / math.sqrt(2)))


def test_ending_a_day_changes_no_uncertainty_and_can_be_done_again():
    day = cell(albedo=300, sky=200, longwave=100, net_area=AREA) + cell((1, 0), albedo=0, sky=250, net_area=AREA)
    ended = day.end_of_day()
    assert ended.end_of_day() == ended
    for name in ("absorbed_u", "absorbed_u_local", "albedo_u", "net_radiation_u"):
        assert getattr(ended, name) == pytest.approx(getattr(day, name), rel=1e-12)
    assert [len(blocks) for blocks in ended.local.values()] == [1]


def test_ground_of_one_day_shares_its_weather_only_until_the_day_is_ended():
    left, right = cell((0, 0), sky=300), cell((0, 0), sky=300)
    assert (left + right).end_of_day().absorbed_u_local == pytest.approx(3.0)
    assert (left.end_of_day() + right.end_of_day()).absorbed_u_local == pytest.approx(3.0 / math.sqrt(2))


DAY_SUMS = st.fixed_dictionaries({name: SMALL for name in SUM_NAMES if name not in ("cells", "unseen_cells")})


@st.composite
def of_a_day(draw, *, seen=True):
    """Totals as a night leaves them: of one tile, no day over."""
    sums = draw(DAY_SUMS) | {"net_longwave": draw(st.integers(-(10**20), 10**20)), "u_noise2": draw(st.integers(0, 10**37))}
    if not seen:
        return Totals(**sums, unseen_cells=draw(st.integers(1, 10**9)))
    return Totals(
        **sums, cells=draw(st.integers(1, 10**9)), bins=tuple(draw(st.lists(SMALL, min_size=101, max_size=101))),
        shared=draw(st.dictionaries(st.sampled_from(SOURCES), st.integers(-(10**37), 10**37))),
        local={GRIDS[0]: blocks} if (blocks := draw(nears()).get(GRIDS[0])) else {},
    )  # fmt: skip


@given(st.lists(st.tuples(of_a_day(), of_a_day(), of_a_day(seen=False)), min_size=1, max_size=2))
@settings(deadline=None, max_examples=30)
def test_a_totals_file_keeps_all(tmp_path_factory, strata):
    table = SimpleNamespace(
        key="k", region_names={f"r{n}": f"Region {n}" for n in range(2)},
        strata=[SimpleNamespace(regions=(f"r{n}",), land_cover="all", band_low_m=None, band_high_m=2.5) for n in range(2)],
    )  # fmt: skip
    table.strata = table.strata[: len(strata)]
    path = tmp_path_factory.mktemp("totals") / "A.parquet"
    flat = [one for states in strata for one in states]
    prepare_totals(path, table, flat, "A", dt.date(2031, 5, 1), "key", ("scene",)).publish()
    held = read_totals(path)
    assert (held.tile, held.day, held.key, held.strata, held.scenes) == ("A", dt.date(2031, 5, 1), "key", "k", ("scene",))
    found = {(row.region, row.snow): row.totals for row in held.rows}
    for number, states in enumerate(strata):
        for state, one in zip(STATES, states, strict=True):
            assert found[f"r{number}", state] == one
