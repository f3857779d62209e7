"""Is the sun where geometry says it must be?"""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from firnlight.physics import sun

times = st.floats(-6.3e8, 2.55e9)  # 1950 to 2050
latitudes = st.floats(-90, 90)
longitudes = st.floats(-180, 180)
NOON_2024_06_20 = 1_718_884_800.0


@given(times, latitudes, longitudes)
def test_angles_and_distance_stay_in_range(unix_s, latitude, longitude):
    zenith, azimuth, distance = sun.position(unix_s, latitude, longitude)
    assert 0 <= zenith <= 180.0
    assert 0 <= azimuth < 360.0
    assert 0.983 < distance < 1.0172  # perihelion and aphelion


@given(times, latitudes, longitudes)
def test_a_full_turn_of_longitude_is_the_same_place(unix_s, latitude, longitude):
    here, there = sun.position(unix_s, latitude, longitude), sun.position(unix_s, latitude, longitude + 360)
    assert here[0] == pytest.approx(there[0], abs=1e-6)


@given(times, longitudes)
def test_at_the_poles_the_zenith_angle_is_that_of_the_declination(unix_s, longitude):
    _, declination, _, _ = sun.ecliptic(unix_s)
    north, _, distance = sun.position(unix_s, 90.0, longitude)
    south, _, _ = sun.position(unix_s, -90.0, longitude)
    parallax = np.degrees(sun.parallax_rad() / distance * np.cos(declination))
    assert north == pytest.approx(90 - np.degrees(declination) + parallax, abs=1e-9)
    assert south == pytest.approx(90 + np.degrees(declination) + parallax, abs=1e-9)


@given(times, st.floats(-89, 89), longitudes)
def test_east_in_the_morning_west_in_the_afternoon(unix_s, latitude, longitude):
    zenith, azimuth, _ = sun.position(unix_s, latitude, longitude)
    later, _, _ = sun.position(unix_s + 60, latitude, longitude)
    if abs(np.sin(np.radians(azimuth))) > 0.05 and 1 < zenith < 179:
        assert (later < zenith) == (azimuth < 180)


def test_the_midday_sun_stands_in_the_south_of_the_north_and_in_the_north_of_the_south():
    azimuth = sun.position(NOON_2024_06_20, [60.0, -60.0], 0.0)[1]
    assert azimuth[0] == pytest.approx(180, abs=1)
    assert min(azimuth[1], 360 - azimuth[1]) < 1


def test_solstice_sun_is_overhead_at_the_tropic():
    longitude = np.linspace(-5, 5, 2001)
    zenith = sun.position(NOON_2024_06_20, 23.437, longitude)[0]
    assert zenith.min() < 0.02


def test_parallax_lowers_the_sun_by_nine_seconds_of_arc_at_the_horizon():
    """8.794 seconds of arc at 1 au for the equator's radius; the mean radius gives 0.1 % less."""
    assert np.degrees(sun.parallax_rad()) * 3600 == pytest.approx(8.794, rel=2e-3)


def test_shapes_broadcast_and_nan_stays_nan():
    zenith, azimuth, distance = sun.position(
        np.array([[0.0], [1e9], [np.nan]]), np.array([10.0, np.nan]), np.array([20.0, 30.0])
    )
    assert zenith.shape == azimuth.shape == distance.shape == (3, 2)
    expected = np.array([[False, True], [False, True], [True, True]])
    np.testing.assert_array_equal(np.isnan(zenith), expected)
    np.testing.assert_array_equal(np.isnan(azimuth), expected)


@given(st.floats(-np.pi / 2, np.pi / 2), st.floats(-0.4093, 0.4093), st.floats(0.96, 1.04))
@settings(max_examples=50)
def test_daily_mean_is_the_time_mean_of_the_cosine(latitude, declination, factor):
    hour = (np.arange(20_000) + 0.5) / 20_000 * 2 * np.pi
    cosine = np.sin(latitude) * np.sin(declination) + np.cos(latitude) * np.cos(declination) * np.cos(hour)
    mean = 1361.0 * factor * np.maximum(cosine, 0).mean()
    closed = sun.daily_extraterrestrial_wm2(latitude, declination, factor, 1361.0)
    assert closed == pytest.approx(mean, abs=1e-4)


def test_polar_day_and_night():
    summer, winter = np.radians(23.0), np.radians(-23.0)
    latitude = np.radians([70.0, 90.0])
    np.testing.assert_array_equal(sun.day_length_h(latitude, summer), 24.0)
    np.testing.assert_array_equal(sun.day_length_h(latitude, winter), 0.0)
    np.testing.assert_array_equal(sun.daily_extraterrestrial_wm2(latitude, winter, 1.0), 0.0)
    assert np.isnan(sun.daily_extraterrestrial_wm2(np.nan, summer, 1.0))


DAYS = np.arange(1, 366)
MIDNIGHTS_1950 = np.datetime64("1950-01-01", "s").astype(float) + (DAYS - 1) * 86_400


def test_the_short_series_agree_with_the_position():
    """At 0 h of 1950, for which Spencer's declination fits: 0.035 deg. FAO-56, a plain sine: 1.5 deg."""
    _, declination, _, distance = sun.ecliptic(MIDNIGHTS_1950)
    np.testing.assert_allclose(sun.spencer_declination_rad(DAYS), declination, rtol=0, atol=np.radians(0.035))
    np.testing.assert_allclose(sun.fao56_declination_rad(DAYS), declination, rtol=0, atol=np.radians(1.5))
    np.testing.assert_allclose(sun.spencer_distance_factor(DAYS), distance**-2, rtol=0, atol=1e-3)
    np.testing.assert_allclose(sun.fao56_distance_factor(DAYS), distance**-2, rtol=0, atol=3e-3)


def test_equation_of_time_turns_the_clock_into_the_sun():
    """The sun crosses Greenwich at 12 h less the equation of time; 35 s and half a day's drift: 0.2 deg."""
    clock = MIDNIGHTS_1950 + 43_200 - 60 * sun.spencer_equation_of_time_min(DAYS)
    ascension, _, sidereal, _ = sun.ecliptic(clock)
    angle = np.mod(sidereal - ascension + np.pi, 2 * np.pi) - np.pi
    np.testing.assert_allclose(angle, 0, atol=np.radians(0.2))
