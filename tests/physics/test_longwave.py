"""Does the sky warm with air, vapour and cloud, below a black body; does a surface like its surroundings trade nothing?"""

import re

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.errors import SettingsProblem
from firnlight.core.tables import load_table
from firnlight.physics import longwave

CLEAR, CLOUD = longwave.methods("clear"), longwave.methods("cloud")
airs = st.floats(230, 315)
vapours = st.floats(0.1, 40)
fractions = st.floats(0, 1)
shares = st.floats(0.05, 1)
nearly_black = st.floats(0.9, 1)


@given(st.sampled_from(CLEAR), st.sampled_from(CLOUD), airs, vapours, fractions)
def test_sky_is_never_above_a_black_body_nor_below_a_third(clear, over, air, vapour, fraction):
    black, sky = longwave.black_body(air), longwave.downward(clear, over, air, vapour, fraction)
    assert black / 3 < sky <= black  # Brutsaert in hot air without vapour: 0.39


@given(st.sampled_from(CLEAR), vapours)
def test_warmer_air_sends_more(clear, vapour):
    sky = longwave.downward_clear(clear, np.linspace(230, 315, 100), vapour)
    assert (np.diff(sky) > 0).all()


@given(st.sampled_from(CLEAR), airs)
def test_moister_air_never_sends_less(clear, air):
    sky = longwave.downward_clear(clear, air, np.linspace(0.0, 40, 200))
    assert (np.diff(sky) >= -1e-12).all()
    if clear not in ("swinbank1963", "idso_jackson1969"):
        assert sky[-1] > sky[0]


@given(st.sampled_from(CLOUD), airs, st.floats(0.5, 0.95))
def test_more_cloud_never_sends_less(over, air, emissivity):
    clear = emissivity * longwave.black_body(air)
    sky = longwave.with_cloud(over, clear, air, np.linspace(0, 1, 100))
    assert (np.diff(sky) >= -1e-9).all()
    assert sky[0] == pytest.approx(clear)  # no cloud: the clear sky
    if over != "none":
        assert sky[-1] > sky[0]


@given(airs, vapours)
def test_an_overcast_is_black_by_crawford_and_duchon(air, vapour):
    assert longwave.downward("prata1996", "crawford_duchon1999", air, vapour, 1.0) == pytest.approx(longwave.black_body(air))


@given(airs, st.floats(230, 330), nearly_black, st.floats(50, 500))
def test_net_is_down_less_up(air, surface, emissivity, down):
    net = longwave.net(emissivity, surface, down)
    assert net == pytest.approx(down - longwave.upward(emissivity, surface, down), abs=1e-9)
    assert longwave.net(1.0, surface, down) == pytest.approx(down - longwave.black_body(surface), abs=1e-9)
    assert longwave.upward(1.0, surface, down) == pytest.approx(longwave.black_body(surface))
    assert longwave.upward(0.0, surface, down) == down


@given(st.floats(200, 330), nearly_black)
def test_a_surface_under_a_black_sky_as_warm_trades_nothing(surface, emissivity):
    assert longwave.net(emissivity, surface, longwave.black_body(surface)) == pytest.approx(0, abs=1e-9)


def test_emissivity_error_as_published_by_hand():
    """0.01 of emissivity at 273.15 K under 221 W m-2: 0.01 (315.66 - 221.02) = 0.95 W m-2."""
    change = longwave.net(0.98, 273.15, 221.02) - longwave.net(0.99, 273.15, 221.02)
    assert change == pytest.approx(0.946, abs=0.001)


def test_snow_is_never_warmer_than_melting():
    got = longwave.surface_temperature([260.0, 280.0, 280.0, np.nan, 400.0], [True, True, False, True, False])
    np.testing.assert_array_equal(got, [260, 273.15, 280, np.nan, np.nan])


def test_melting():
    """26.197 W m-2 held for one hour melt 26.197 x 3600 / 3.34e5 = 0.282 mm: 24 of them in a day."""
    assert longwave.melt_potential_mm_day(26.197) / 24 == pytest.approx(0.2824, abs=5e-5)
    np.testing.assert_array_equal(longwave.melt_potential_mm_day([-50.0, 0.0, np.nan]), [0, 0, np.nan])


@given(shares, st.floats(230, 310), nearly_black)
def test_a_warm_box_trades_nothing_in_terrain(view, surface, emissivity):
    """Sky and terrain as warm as the surface and the sky black: second law, at any sky view, slope and emissivity."""
    black = longwave.black_body(surface)
    down = longwave.downward_in_terrain(black, view, 1 - view, emissivity, surface)
    assert down == pytest.approx(black, rel=1e-12)
    assert longwave.net_in_terrain(black, view, 30.0, emissivity, surface) == pytest.approx(0, abs=1e-9)


@given(shares, st.floats(230, 310), nearly_black, st.floats(100, 400), st.floats(0, 70))
def test_terrain_like_the_cell_only_hides_sky(view, surface, emissivity, sky, slope):
    """Net = view x (open net) / cos S, but for what the terrain reflects: 1 / (1 - (1 - V)(1 - eps))."""
    there = longwave.net_in_terrain(sky, view, slope, emissivity, surface)
    open_net = longwave.net(emissivity, surface, sky)
    mirror = 1 - (1 - view) * (1 - emissivity)
    assert there == pytest.approx(view * open_net / np.cos(np.radians(slope)) / mirror, rel=1e-9, abs=1e-9)


def test_flat_open_ground_is_as_without_terrain():
    assert longwave.net_in_terrain(250.0, 1.0, 0.0, 0.98, 273.15) == longwave.net(0.98, 273.15, 250.0)
    assert longwave.downward_in_terrain(250.0, 1.0, 0.0, 0.98, 290.0) == 250.0


def test_warmer_walls_warm_the_floor():
    cool, warm = (longwave.net_in_terrain(230.0, 0.7, 0.0, 0.99, 265.0, there, 0.97) for there in (265.0, 285.0))
    # by hand: 0.99 x 0.3 x 0.97 x sigma (285^4 - 265^4) / (1 - 0.3 x 0.03) = 27.4 W m-2
    sigma = load_table("constants").row("stefan_boltzmann")["value"]
    assert warm - cool == pytest.approx(0.99 * 0.3 * 0.97 * sigma * (285.0**4 - 265.0**4) / 0.991)


def test_terrain_refuses_views_that_are_none():
    assert np.isnan(longwave.downward_in_terrain(250.0, 0.8, 0.3, 0.98, 280.0))
    assert np.isnan(longwave.downward_in_terrain(250.0, 1.2, 0.0, 0.98, 280.0))
    assert np.isnan(longwave.map_area_factor([90.0, -1.0, np.nan])).all()
    np.testing.assert_allclose(longwave.map_area_factor([0.0, 60.0]), [1, 2])


def test_a_mirror_around_changes_nothing_of_the_sky():
    """Terrain that gives off nothing and reflects all: every ray ends in the sky."""
    assert longwave.downward_in_terrain(250.0, 0.6, 0.4, 0.0, 280.0) == pytest.approx(250.0)


@pytest.mark.parametrize("clear", CLEAR)
def test_what_is_not_air_is_missing(clear):
    sky = longwave.downward_clear(clear, [np.nan, 280.0, 15.0, 400.0, 280.0], [5.0, np.nan, 5.0, 5.0, -0.1])
    assert np.isnan(sky).all()
    assert np.isfinite(longwave.downward_clear(clear, [180.0, 340.0], [0.0, 5.0])).all()


@pytest.mark.parametrize("over", CLOUD)
def test_missing_cloud_is_missing(over):
    got = longwave.with_cloud(
        over, [np.nan, 220.0, 220.0, 220.0, 220.0], [280.0, np.nan, 50.0, 280.0, 280.0], [0.5] * 4 + [40.0]
    )
    assert np.isnan(got).tolist() == [True, True, True, False, over != "none"]
    assert np.isnan(longwave.with_cloud(over, 220.0, 280.0, np.nan)) == (over != "none")


def test_nan_in_gives_nan():
    for make, numbers in (
        (longwave.net, [0.98, 280.0, 250.0]),
        (longwave.upward, [0.98, 280.0, 250.0]),
        (longwave.downward_in_terrain, [250.0, 0.8, 0.2, 0.98, 280.0]),
        (longwave.net_in_terrain, [250.0, 0.8, 20.0, 0.98, 280.0, 281.0, 0.97]),
        (longwave.net_fao56, [290.0, 280.0, 10.0, 0.8]),
    ):
        assert np.isfinite(make(*numbers))
        for place in range(len(numbers)):
            holed = [np.nan if k == place else number for k, number in enumerate(numbers)]
            assert np.isnan(make(*holed)), (make, place)
    assert np.isnan(longwave.net([1.1, -0.1], 280.0, 250.0)).all()
    assert np.isnan(longwave.black_body([np.nan, -1.0])).all()
    assert np.isnan(longwave.net_fao56([290.0, 290.0, 20.0], [280.0, 280.0, 10.0], [-1.0, 10, 10], [0.8, -0.1, 0.8])).all()


def test_fao56_takes_a_ratio_above_one_as_one():
    assert longwave.net_fao56(290.0, 280.0, 10.0, 1.3) == longwave.net_fao56(290.0, 280.0, 10.0, 1.0)
    assert longwave.net_fao56(290.0, 280.0, 10.0, 1.0) < longwave.net_fao56(290.0, 280.0, 10.0, 0.5) < 0
    assert longwave.net_fao56(290.0, 280.0, 10.0, 0.25) > 0  # as its docstring says


def test_shapes_broadcast():
    assert longwave.downward("prata1996", "kustas1994", np.full((3, 1), 280.0), np.full(4, 8.0), 0.5).shape == (3, 4)
    assert longwave.with_cloud("none", np.full(4, 220.0), 280.0, np.zeros((3, 1))).shape == (3, 4)


def test_unknown_names_are_refused_with_the_nearest():
    with pytest.raises(SettingsProblem, match="write 'prata1996'"):
        longwave.downward_clear("prata1995", 280.0, 5.0)
    with pytest.raises(SettingsProblem, match=r"longwave\.cloud"):
        longwave.with_cloud("prata1996", 220.0, 280.0, 0.5)
    with pytest.raises(SettingsProblem, match=r"longwave\.method"):
        longwave.downward_clear("kustas1994", 280.0, 5.0)


def test_every_row_says_what_it_is_and_prints_its_own_numbers():
    table = load_table("longwave")
    for name, row in table.rows.items():
        assert {"kind", "title", "numbers", "formula", "valid", "error_wm2", "error_basis", "source", "status"} <= set(
            row
        ), name
        assert 0 < row["error_wm2"][0] < row["error_wm2"][1]
        printed = [float(text) for text in re.findall(r"(?<![A-Za-z])\d+(?:\.\d+)?(?:e-\d+)?", row["formula"])]
        for number in row["numbers"]:
            assert any(number == text for text in printed), (name, number)
