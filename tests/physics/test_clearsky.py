"""Does the clear sky stay within what light can do, and do the moments give a day's mean for any ground?"""

import datetime as dt

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from firnlight.physics import clearsky, sun

FIELDS = ("direct_normal_wm2", "direct_horizontal_wm2", "black_ground_wm2", "sky_albedo")
CLEAN = clearsky.Atmosphere.of(aerosol_500nm=0.1, water_vapour_cm=1.0, ozone_cm=0.3)
SPACE_WM2, SEA_LEVEL_PA = 1361.0, 101_325.0

atmospheres = st.builds(
    clearsky.Atmosphere.of,
    aerosol_500nm=st.floats(0, 3),
    water_vapour_cm=st.floats(0, 10),
    ozone_cm=st.floats(0, 1),
)
days = st.dates(dt.date(1985, 1, 1), dt.date(2049, 12, 31))
latitudes = st.one_of(st.floats(-90, 90), st.sampled_from([-90.0, 0.0, 66.56, 90.0]))
longitudes = st.floats(-180, 180)
elevations = st.floats(-100, 6000)


def direct_mean(day, latitude, longitude, elevation, air, albedo, step_s):
    """The day's mean from the definition, without moments."""
    zenith, _, distance = sun.position(clearsky.day_times_unix_s(day, step_s), latitude, longitude)
    space = sun.solar_constant_wm2() / distance**2
    sky = clearsky.bird(zenith, space, clearsky.pressure_pa(elevation), air)
    return clearsky.global_horizontal(sky.black_ground_wm2, sky.sky_albedo, albedo).mean()


def moments(day, latitude, longitude, elevation, air, **more):
    return clearsky.day_moments(day, [latitude], [longitude], [elevation], air, **more)[0, 0]


@given(st.floats(0, 180), st.floats(40_000, 108_000), atmospheres)
def test_light_is_never_negative_nor_more_than_what_arrives(zenith, pressure, air):
    sky = clearsky.bird(zenith, SPACE_WM2, pressure, air)
    above = SPACE_WM2 * max(np.cos(np.radians(zenith)), 0.0)
    assert 0 <= sky.direct_normal_wm2 <= SPACE_WM2
    assert 0 <= sky.direct_horizontal_wm2 <= sky.black_ground_wm2 <= above
    assert 0 <= sky.sky_albedo < 0.3
    if zenith < 90:
        for name in ("t_rayleigh", "t_ozone", "t_gases", "t_water", "t_aerosol", "t_absorption"):
            assert 0 <= getattr(sky, name) <= 1, name


@pytest.mark.parametrize("zenith", [90.0, 90.0001, 120.0, 180.0])
def test_no_sun_no_light(zenith):
    sky = clearsky.bird(zenith, SPACE_WM2, SEA_LEVEL_PA, CLEAN)
    assert [getattr(sky, name) for name in FIELDS] == [0, 0, 0, 0]


def test_the_last_ray_is_finite():
    sky = clearsky.bird(np.nextafter(90, 0), SPACE_WM2, SEA_LEVEL_PA, CLEAN)
    assert 0 < sky.black_ground_wm2 < 1e-10


@pytest.mark.parametrize("zenith", [30.0, 120.0])
@pytest.mark.parametrize("place", [0, 1, 2])
def test_nan_in_gives_nan_by_day_and_by_night(zenith, place):
    inputs = [zenith, SPACE_WM2, SEA_LEVEL_PA]
    inputs[place] = np.nan
    sky = clearsky.bird(*inputs, CLEAN)
    assert np.isnan(sky.black_ground_wm2)
    assert np.isnan(sky.direct_horizontal_wm2)


def test_shapes_broadcast():
    sky = clearsky.bird(np.zeros((4, 1)), SPACE_WM2, np.full(3, SEA_LEVEL_PA), CLEAN)
    assert {getattr(sky, name).shape for name in FIELDS} == {(4, 3)}


@given(st.floats(0, 85), st.floats(0, 1), st.floats(0.01, 1))
def test_more_aerosol_less_beam_and_a_brighter_sky(zenith, aerosol, more):
    thin, thick = (
        clearsky.bird(zenith, SPACE_WM2, SEA_LEVEL_PA, clearsky.Atmosphere.of(depth, 1.0, 0.3))
        for depth in (aerosol, aerosol + more)
    )
    assert thick.direct_normal_wm2 < thin.direct_normal_wm2
    assert thick.sky_albedo > thin.sky_albedo


@given(st.floats(0, 85), st.floats(-100, 5000), st.floats(1, 1000))
def test_higher_ground_gets_more_beam(zenith, elevation, climb):
    low, high = (
        clearsky.bird(zenith, SPACE_WM2, clearsky.pressure_pa(height), CLEAN) for height in (elevation, elevation + climb)
    )
    assert high.direct_normal_wm2 > low.direct_normal_wm2


@given(st.floats(0, 89), st.floats(0, 0.99), st.floats(0.001, 0.01))
def test_brighter_ground_gets_more_light(zenith, albedo, more):
    sky = clearsky.bird(zenith, SPACE_WM2, SEA_LEVEL_PA, CLEAN)
    dark, bright = (
        clearsky.global_horizontal(sky.black_ground_wm2, sky.sky_albedo, ground) for ground in (albedo, albedo + more)
    )
    assert sky.black_ground_wm2 <= dark < bright


def test_depth_at_380_nm_follows_the_angstrom_exponent():
    """0.1 (380 / 500)^-1.3 = 0.14287; a given depth is kept."""
    assert clearsky.Atmosphere.of(0.1, 1.0, 0.3).aerosol_380nm == pytest.approx(0.14287, abs=5e-6)
    assert clearsky.Atmosphere.of(0.1, 1.0, 0.3, aerosol_380nm=0.15).aerosol_380nm == 0.15


def test_airmass_is_one_overhead_grows_down_to_the_horizon_and_ends_there():
    zenith = np.linspace(0, 89.99, 1000)
    m = clearsky.relative_airmass(zenith)
    assert m[0] == pytest.approx(1, abs=1e-3)
    assert np.all(np.diff(m) > 0)
    assert m[-1] == pytest.approx(36.4, abs=0.5)  # 1 / (0.15 * 3.885^-1.253)
    assert np.isnan(clearsky.relative_airmass([90.0, 91.0, np.nan])).all()


def test_a_day_has_144_midpoints():
    times = clearsky.day_times_unix_s(dt.date(1970, 1, 2))
    assert times.shape == (144,)
    assert times[0] == 86_400 + 300
    assert times[-1] == 2 * 86_400 - 300


@given(days, latitudes, longitudes, elevations, atmospheres, st.floats(0, 1))
@settings(max_examples=60, deadline=None)
def test_moments_give_the_direct_time_mean(day, latitude, longitude, elevation, air, albedo):
    """Over any ground, place, day and air; asked for 1e-3, held to 1e-4 W m-2."""
    series = clearsky.day_mean_insolation(moments(day, latitude, longitude, elevation, air), albedo)
    direct = direct_mean(day, latitude, longitude, elevation, air, albedo, clearsky.STEP_S)
    assert series == pytest.approx(direct, abs=1e-4)


def test_moments_are_good_where_the_series_converges_worst():
    """White ground under the aerosol that spreads the sky's albedo most over the day."""
    for aerosol in (0.1, 0.3, 0.5, 0.8, 1.2, 2.0):
        air = clearsky.Atmosphere.of(aerosol, 1.0, 0.3)
        for month in (3, 6, 12):
            for latitude in (-80.0, -46.5, 0.0, 25.0, 46.5, 70.0):
                where = dt.date(2024, month, 20), latitude, -36.0, 1000.0, air
                series = clearsky.day_mean_insolation(moments(*where), 1.0)
                assert series == pytest.approx(direct_mean(*where, 1.0, clearsky.STEP_S), abs=1e-4)


@given(days, latitudes, longitudes, elevations, st.floats(0, 1))
@settings(max_examples=60, deadline=None)
def test_ten_minutes_are_as_good_as_ten_seconds(day, latitude, longitude, elevation, albedo):
    """Asked for 0.05 W m-2, held to 0.01 (0.004 seen)."""
    where = day, latitude, longitude, elevation, CLEAN, albedo
    assert direct_mean(*where, clearsky.STEP_S) == pytest.approx(direct_mean(*where, 10.0), abs=0.01)


def test_polar_night_is_dark_and_polar_day_has_no_night():
    midwinter, midsummer = dt.date(2024, 12, 21), dt.date(2024, 6, 20)
    dark = moments(midwinter, 85.0, 0.0, 0.0, CLEAN)
    np.testing.assert_array_equal(dark, 0.0)
    assert clearsky.day_mean_insolation(dark, 0.8) == 0.0
    assert clearsky.day_mean_insolation(moments(midsummer, 85.0, 0.0, 0.0, CLEAN), 0.0) > 250


def test_the_solar_distance_counts():
    """The equator at opposite declinations: perihelion brings (1.0167 / 0.9833)^2 = 1.069 times the light."""
    near = moments(dt.date(2025, 1, 4), 0.0, 0.0, 0.0, CLEAN)[0]
    far = moments(dt.date(2025, 7, 6), 0.0, 0.0, 0.0, CLEAN)[0]
    assert near / far == pytest.approx(1.069, abs=0.01)


def test_shape_and_nan_of_the_moments():
    got = clearsky.day_moments(
        dt.date(2024, 12, 21), [46.5, np.nan, 85.0], [-36.0, 0.0, 0.0], [0.0, np.nan], CLEAN, orders=3
    )
    assert got.shape == (3, 2, 3)
    nan = np.isnan(got).all(axis=2)
    np.testing.assert_array_equal(nan, [[False, True], [True, True], [False, True]])
    np.testing.assert_array_equal(np.isnan(got).any(axis=2), nan)


@given(st.integers(2, 6), st.booleans())
def test_unknown_albedo_gives_unknown_insolation(orders, lit):
    series = np.full(orders, 1.0 if lit else 0.0) * 0.07 ** np.arange(orders)
    assert np.isnan(clearsky.day_mean_insolation(series, np.nan))
    assert np.isnan(clearsky.day_mean_insolation(np.full(orders, np.nan), 0.5))


def test_a_constant_sky_is_summed_exactly():
    """M_k = G0 r^k gives G0 / (1 - a r) whatever the number of orders; maps broadcast."""
    for orders in (2, 3, 8):
        series = 200.0 * 0.09 ** np.arange(orders)
        albedo = np.linspace(0, 1, 7).reshape(7, 1)
        expected = 200.0 / (1 - albedo * 0.09)
        np.testing.assert_allclose(clearsky.day_mean_insolation(series, albedo), expected, rtol=1e-14)
