"""Do totals add, close, and give the means that one works out by hand?"""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.totals import CM2_PER_KM2, Totals

COUNTS = st.integers(0, 10**30)


@st.composite
def totals(draw):
    sums = {name: draw(COUNTS) for name in ("area", "albedo", "insolation", "absorbed", "u_noise2", "cloud")}
    return Totals(**sums, bins=tuple(draw(st.lists(st.integers(0, 10**15), min_size=101, max_size=101))))


@given(totals(), totals(), totals())
def test_adding_is_exact_in_any_order(a, b, c):
    assert (a + b) + c == a + (b + c)
    assert a + b == b + a
    assert a + Totals() == a
    assert (a + b).reflected == a.reflected + b.reflected


def by_hand():
    # two cells of 900 m2: albedo 0.5 and 0.9, insolation 200 and 100 W m-2
    area = 9_000_000
    return Totals(
        cells=2, area=2 * area, albedo=area * (5000 + 9000), insolation=area * (2000 + 1000), absorbed=area * (1000 + 100),
        u_noise2=area**2 * (30**2 + 40**2), u_local=area * (100 + 200), u_calibration=area * 300, u_sky=area * 400,
        bins=tuple(area if n in (50, 90) else 0 for n in range(101)),
    )  # fmt: skip


def test_means_are_those_of_two_cells_worked_by_hand():
    one = by_hand()
    assert one.albedo_area_mean == pytest.approx(0.7)
    assert one.albedo_ratio == pytest.approx(190 / 300)
    assert one.insolation_wm2 == pytest.approx(150)
    assert one.absorbed_wm2 == pytest.approx(55)
    assert one.reflected_wm2 == pytest.approx(95)
    assert one.absorbed_u_independent == pytest.approx(0.25)  # sqrt(0.3^2 + 0.4^2) / 2
    assert one.absorbed_u_local == pytest.approx(1.5)
    assert one.absorbed_u_shared == pytest.approx(2.5)  # hypot(1.5, 2.0)
    assert one.absorbed_u == pytest.approx(math.hypot(0.25, 1.5, 2.5))
    assert one.albedo_u == pytest.approx(math.hypot(0.25, 1.5, 1.5) / 150)
    assert one.absorbed_gj == pytest.approx(55 * 1800 * 86400 / 1e9)


def test_percentiles_lie_in_their_bins():
    assert by_hand().albedo_percentile(0.25) == pytest.approx(0.505)
    assert by_hand().albedo_percentile(0.9) == pytest.approx(0.908)


def test_nothing_seen_is_nan_and_not_zero():
    nothing = Totals(unseen_cells=3, unseen_area=CM2_PER_KM2)
    values = (
        nothing.albedo_ratio,
        nothing.albedo_u,
        nothing.absorbed_wm2,
        nothing.absorbed_u,
        nothing.albedo_percentile(0.5),
    )
    assert all(math.isnan(value) for value in values)
