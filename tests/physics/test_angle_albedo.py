"""Is a day's albedo what its light reflects, and does carrying an albedo to another light keep what must be kept?"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.errors import InputProblem
from firnlight.physics import angle_albedo, anisotropy

SNOW, GROUND = "gardner_sharp", "ross_li"
methods = st.sampled_from(angle_albedo.METHODS)
changing = st.sampled_from([SNOW, GROUND])
albedos = st.floats(0, 1)
zeniths = st.floats(0, 89)
shares = st.floats(0, 1)
angle_albedo.shape(0.0, GROUND)  # integrates the kernels, once, outside of the property tests' time limit


def sun_path(noon_deg=40.0, steps=49, clear=True):
    """A made-up day: zenith [deg], direct and diffuse [W m-2], the night at both ends."""
    hours = np.linspace(-12, 12, steps)
    up = np.cos(np.radians(noon_deg)) * np.cos(np.pi * hours / 14)
    light = np.maximum(up, 0.0) * 1000
    beam = 0.8 if clear else 0.0
    return np.degrees(np.arccos(up)), light * beam, light * (1 - beam)


days = st.builds(sun_path, st.floats(0, 80), st.just(49), st.booleans())


@given(albedos, zeniths, shares, days, methods)
def test_the_day_lies_in_0_to_1(albedo, zenith, share, day, method):
    assert 0 <= angle_albedo.day_albedo(albedo, zenith, share, *day, method) <= 1


@given(albedos, zeniths, shares, days)
def test_no_dependence_gives_the_overpass_back(albedo, zenith, share, day):
    assert angle_albedo.day_albedo(albedo, zenith, share, *day, "constant") == albedo


@given(albedos, st.floats(0, 79), changing)
def test_a_sun_that_stands_still_gives_the_overpass_back(albedo, zenith, method):
    """Whatever the method: the day's light is that of the overpass. 1e-12 for the root and its inverse."""
    got = angle_albedo.day_albedo(albedo, zenith, 0.3, np.full(5, zenith), np.full(5, 70.0), np.full(5, 30.0), method)
    assert got == pytest.approx(albedo, abs=1e-12)


@given(albedos, zeniths, shares, days, methods)
def test_morning_and_evening_are_alike(albedo, zenith, share, day, method):
    forth = angle_albedo.day_albedo(albedo, zenith, share, *day, method)
    back = angle_albedo.day_albedo(albedo, zenith, share, *(one[::-1] for one in day), method)
    assert back == pytest.approx(forth, abs=1e-12)


@given(albedos, zeniths, shares, days)
def test_the_day_reflects_what_its_moments_reflect(albedo, zenith, share, day):
    """From the definition: sum of reflected over sum of incoming, moment by moment."""
    zenith_t, direct, diffuse = day
    lit = direct + diffuse > 0
    at = angle_albedo.direct_albedo(albedo, zenith, zenith_t[lit], SNOW, share)
    white = angle_albedo.diffuse_albedo(albedo, zenith, SNOW, share)
    reflected = np.sum(direct[lit] * at + diffuse[lit] * white)
    got = angle_albedo.day_albedo(albedo, zenith, share, *day, SNOW)
    assert got == pytest.approx(reflected / np.sum(direct + diffuse), abs=1e-12)


@given(albedos, zeniths, st.floats(0, 79), changing)
def test_there_and_back(albedo, one, other, method):
    away = angle_albedo.direct_albedo(albedo * 0.4, min(one, 79.0), other, method)
    back = angle_albedo.direct_albedo(away, other, min(one, 79.0), method)
    assert back == pytest.approx(albedo * 0.4, abs=1e-12)


@given(st.floats(1, 1000), zeniths, zeniths)
def test_clean_snow_is_carried_as_the_paper_has_it(surface, one, other):
    """Pure snow of Gardner & Sharp (2010) under a clear sky: exact."""
    seen = angle_albedo.gardner_sharp(surface, 0.0, one)
    wanted = angle_albedo.gardner_sharp(surface, 0.0, other)
    assert angle_albedo.direct_albedo(seen, one, other, SNOW) == pytest.approx(wanted, abs=1e-12)


@given(st.floats(50, 600), st.floats(0, 0.5), st.floats(0, 76), st.floats(0, 76))
def test_dirty_snow_is_carried_within_the_uncertainty(surface, carbon, one, other):
    """The carbon is not known, and clean snow's shape is used: the error stays below what carried_u owns up to."""
    seen = angle_albedo.gardner_sharp(surface, carbon, one)
    wanted = angle_albedo.gardner_sharp(surface, carbon, other)
    got = angle_albedo.direct_albedo(seen, one, other, SNOW)
    assert abs(got - wanted) <= angle_albedo.carried_u(seen, got) + 1e-12


def test_diffuse_light_is_a_sun_at_50_deg_for_snow_and_thick_cloud():
    """Cosine 0.64 is 50.21 deg; ground's diffuse light is white sky, 1 by definition."""
    assert angle_albedo.diffuse_albedo(0.8, 30.0, SNOW) == pytest.approx(
        float(angle_albedo.direct_albedo(0.8, 30.0, np.degrees(np.arccos(0.64)), SNOW))
    )
    assert angle_albedo.diffuse_shape(GROUND) == 1.0


@given(st.floats(0.05, 0.95), st.floats(0, 75), st.floats(1, 14), changing)
def test_albedo_is_higher_under_a_lower_sun(albedo, zenith, lower, method):
    assert angle_albedo.direct_albedo(albedo * 0.5, zenith, zenith + lower, method) > albedo * 0.5


@given(albedos, albedos, zeniths, shares, days, methods)
def test_brighter_stays_brighter(one, other, zenith, share, day, method):
    low, high = sorted((one, other))
    assert angle_albedo.day_albedo(low, zenith, share, *day, method) <= (
        angle_albedo.day_albedo(high, zenith, share, *day, method) + 1e-12
    )


def test_a_noon_overpass_sees_snow_darker_than_its_day():
    """By hand for 0.8 at 40 deg, D 0: g0 = 0.53 (1 - 0.76604)^1.2 = 0.092733, a = 0.784313; the day's g from its light."""
    zenith_t, direct, diffuse = sun_path(40.0)
    lit = direct > 0
    g = 0.53 * (1 - np.cos(np.radians(zenith_t[lit]))) ** 1.2
    path = (np.sum(direct[lit] * g) + np.sum(diffuse) * 0.53 * 0.36**1.2) / np.sum(direct + diffuse)
    got = angle_albedo.day_albedo(0.8, 40.0, 0.0, zenith_t, direct, diffuse, SNOW)
    assert got == pytest.approx(0.784313 + path * 0.784313 * 0.215687, abs=1e-6)
    assert 0.805 < got < 0.83


def test_black_and_white_stay_what_they_are():
    day = sun_path()
    for method in (SNOW, "constant"):
        np.testing.assert_array_equal(angle_albedo.day_albedo([0.0, 1.0], 60.0, 0.1, *day, method), [0.0, 1.0])
    assert angle_albedo.day_albedo(0.0, 60.0, 0.1, *day, GROUND) == 0.0


def test_the_table_gives_what_each_albedo_gives():
    noons = np.array([20.0, 40.0, 70.0])
    zenith_t, direct, diffuse = (np.stack(part) for part in zip(*(sun_path(noon) for noon in noons), strict=True))
    nodes = np.linspace(0, 1, 65)
    for method in angle_albedo.METHODS:
        table = angle_albedo.day_albedo_table(nodes, noons, 0.15, zenith_t, direct, diffuse, method)
        assert table.shape == (3, 65)
        for albedo, column in zip(nodes, table.T, strict=True):
            row = angle_albedo.day_albedo(albedo, noons, 0.15, zenith_t, direct, diffuse, method)
            np.testing.assert_allclose(row, column, atol=1e-15)
    between = np.linspace(0, 1, 1001)
    table = angle_albedo.day_albedo_table(nodes, 76.0, 0.0, *sun_path(20.0), SNOW)
    straight = np.interp(between, nodes, table)
    exact = angle_albedo.day_albedo(between, 76.0, 0.0, *sun_path(20.0), SNOW)
    np.testing.assert_allclose(straight, exact, atol=1e-4)


def test_maps_and_days_broadcast():
    zenith_t, direct, diffuse = sun_path()
    got = angle_albedo.day_albedo(np.full((4, 5), 0.7), 50.0, 0.2, zenith_t, np.tile(direct, (4, 5, 1)), diffuse, SNOW)
    assert got.shape == (4, 5)
    assert np.ptp(got) == 0
    assert angle_albedo.day_albedo(0.7, np.full(3, 50.0), 0.2, zenith_t, direct, diffuse, "constant").shape == (3,)


def test_a_day_without_light_has_the_albedo_of_diffuse_light():
    dark = angle_albedo.day_albedo(0.7, 60.0, 0.2, np.full(4, 100.0), np.zeros(4), np.zeros(4), SNOW)
    assert dark == angle_albedo.diffuse_albedo(0.7, 60.0, SNOW, 0.2)


@pytest.mark.parametrize("method", [SNOW, GROUND])
@pytest.mark.parametrize("place", range(6))
def test_nan_in_gives_nan(method, place):
    zenith_t, direct, diffuse = sun_path()
    call = [np.array(0.7), np.array(50.0), np.array(0.2), zenith_t, direct, diffuse]
    assert np.isfinite(angle_albedo.day_albedo(*call, method))
    call[place] = call[place].copy()
    call[place].flat[call[place].size // 2] = np.nan
    assert np.isnan(angle_albedo.day_albedo(*call, method))


def test_angles_beyond_the_horizon():
    """A beam from there cannot be; the zenith of a moment without a beam is not looked at."""
    for method in (SNOW, GROUND):
        assert np.isnan(angle_albedo.shape([90.1, -0.1, 180.0], method)).all()
        assert np.isfinite(angle_albedo.shape([0.0, 90.0], method)).all()
        assert np.isnan(angle_albedo.path_shape([100.0], [5.0], [1.0], method))
        assert angle_albedo.path_shape([100.0], [0.0], [1.0], method) == angle_albedo.diffuse_shape(method)
        assert angle_albedo.path_shape([np.nan], [0.0], [1.0], method) == angle_albedo.diffuse_shape(method)


def test_an_albedo_outside_is_set_to_the_limit_first():
    np.testing.assert_array_equal(angle_albedo.direct_albedo([-0.01, 5.0], 50.0, 70.0, SNOW), [0.0, 1.0])
    whole = angle_albedo.direct_albedo(1.0, 70.0, 20.0, GROUND)
    assert whole < 0.95
    assert angle_albedo.direct_albedo(1.01, 70.0, 20.0, GROUND) == whole
    assert angle_albedo.direct_albedo(0.95, 20.0, 75.0, GROUND) == 1.0
    np.testing.assert_array_equal(angle_albedo.direct_albedo([-0.01, 1.01], 50.0, 70.0, "constant"), [-0.01, 1.01])


def test_ground_has_the_shape_of_its_prior():
    """The kernels' own integral at 70 over that at 20 deg; the last value is held below a sun at 80 deg."""
    parameters = np.array(anisotropy.ground_prior().parameters)
    high, low = anisotropy.black_sky_weights([20.0, 70.0], method="exact") @ parameters
    assert angle_albedo.direct_albedo(0.2, 20.0, 70.0, GROUND) == pytest.approx(0.2 * low / high, rel=1e-9)
    assert angle_albedo.shape(88.0, GROUND) == angle_albedo.shape(80.0, GROUND)
    white = anisotropy.white_sky_weights() @ parameters
    assert angle_albedo.diffuse_albedo(0.2, 20.0, GROUND) == pytest.approx(0.2 * white / high, rel=1e-5)


def test_what_carrying_adds_to_the_uncertainty():
    assert angle_albedo.carried_u(0.80, 0.82) == pytest.approx(0.01)
    assert angle_albedo.carried_u(0.82, 0.80) == pytest.approx(0.01)
    assert angle_albedo.carried_u(0.8, 0.8) == 0


@pytest.mark.parametrize("call", [angle_albedo.shape, lambda zenith, method: angle_albedo.carry(0.5, 0.1, 0.2, method)])
def test_an_unknown_method_is_refused(call):
    with pytest.raises(InputProblem, match="one of constant"):
        call(30.0, "lambert")
    with pytest.raises(InputProblem, match="one of constant"):
        angle_albedo.diffuse_shape("lambert")
