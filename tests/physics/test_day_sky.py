"""Does a day's light hold just what the clear sky, the cloud or the supplied series says, split in any way?"""

import datetime as dt
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from firnlight.physics import clearsky, sun
from firnlight.physics.clearsky_fast import day_light
from firnlight.physics.day_sky import ClearIndex, Cloud, DaySky, Places, index_of_intervals

AIR = clearsky.Atmosphere.of(aerosol_500nm=0.1, water_vapour_cm=1.0, ozone_cm=0.3)
DAY = dt.date(2024, 5, 14)
LAT, LON, HEIGHT = 46.5, 8.0, 1500.0
HEIGHTS = np.array([0.0, HEIGHT, 3000.0])
PLACES = [(46.5, 8.0), (-44.0, 170.0), (69.0, -50.0)]  # the second has the sun up at both ends of the UTC day
HOURS = np.stack([np.arange(24.0), np.arange(1.0, 25.0)], axis=1)


def sky_at(lat=LAT, lon=LON, heights=HEIGHTS, day=DAY, air=AIR, **more):
    return DaySky(day, Places(*(np.atleast_1d(np.asarray(v, float)) for v in (lat, lon, heights)), air, **more))


def minutes(day, lat, lon, height=HEIGHT, cloudiness=lambda hour: 1.0):
    """Light of each minute on black ground, with that of the dusk, 3 W m-2 that fade to 6 degrees below the horizon."""
    zenith, _, distance = sun.position(clearsky.day_times_unix_s(day, 60.0), lat, lon)
    space = sun.solar_constant_wm2() / distance**2
    clear = clearsky.bird(zenith, space, clearsky.pressure_pa(height), AIR).black_ground_wm2
    return clear * cloudiness((np.arange(1440) + 0.5) / 60) + 3 * np.clip((96 - zenith) / 6, 0, 1)


def means(series, edges):
    """Interval means of a series of minutes; edges fall on minutes."""
    return np.array([series[round(a * 60) : round(b * 60)].mean() for a, b in edges])


def index_of(series, edges, lat=LAT, lon=LON, height=HEIGHT, day=DAY):
    series = np.asarray(series, float)[:, np.newaxis]
    return index_of_intervals(day, edges, series, *(np.array([v]) for v in (lat, lon, height)), AIR)


@given(
    day=st.dates(dt.date(1990, 1, 1), dt.date(2049, 12, 31)),
    latitude=st.floats(-89, 89),
    longitude=st.floats(-180, 180),
    aerosol=st.floats(0, 1),
)
@settings(deadline=None, max_examples=10)
def test_a_clear_day_is_that_of_the_fast_kernel(day, latitude, longitude, aerosol):
    air = clearsky.Atmosphere.of(aerosol, 1.5, 0.32)
    got = sky_at(latitude, longitude, day=day, air=air).moments(5)
    wanted = day_light(day, [latitude], [longitude], HEIGHTS, air, orders=5)
    np.testing.assert_allclose(got, wanted, rtol=1e-9, atol=1e-12)
    np.testing.assert_array_equal(day_light(day, [latitude], [longitude], HEIGHTS, air, 4)[..., :4], wanted[..., :4])


def test_direct_light_of_the_fast_kernel_is_the_mean_of_its_steps():
    """Written out from the formulas: the last column beside the moments."""
    zenith, _, distance = sun.position(clearsky.day_times_unix_s(DAY), LAT, LON)
    space = sun.solar_constant_wm2() / distance**2
    direct = clearsky.bird(zenith, space, clearsky.pressure_pa(HEIGHT), AIR).direct_horizontal_wm2.mean()
    assert day_light(DAY, [LAT], [LON], [HEIGHT], AIR)[0, 0, -1] == pytest.approx(direct, rel=1e-12)


@pytest.mark.parametrize("place", PLACES)
@given(data=st.data())
@settings(deadline=None, max_examples=8)
def test_any_split_of_a_series_keeps_the_days_light(place, data):
    """From minutes to the whole day, even or not, along time steps or across: to 0.1 %.

    Left out is light from intervals with the sun below the horizon throughout: of the dusk here, below 0.6 W m-2.
    """
    kind = data.draw(st.sampled_from(["hours", "cuts"]))
    if kind == "hours":
        step = data.draw(st.sampled_from([1 / 60, 1 / 12, 0.25, 0.5, 1.0, 3.0, 6.0, 24.0]))
        cuts = np.arange(0, 24 + step / 2, step)
    else:
        inner = data.draw(st.sets(st.integers(1, 1439), min_size=0, max_size=30))
        cuts = np.array([0, *sorted(inner), 1440]) / 60
    edges = np.stack([cuts[:-1], cuts[1:]], axis=1)
    change = np.random.default_rng(data.draw(st.integers(0, 999))).uniform(0.2, 1.1, 25)
    series = minutes(DAY, *place, cloudiness=lambda hour: np.interp(hour, np.arange(25), change))
    supplied = means(series, edges)
    index = index_of(supplied, edges, *place)
    moments = sky_at(*place, supplied=index).moments(4)
    high = sun.position(clearsky.day_times_unix_s(DAY), *place)[0] < 90
    middles = (np.arange(144) + 0.5) / 6
    sunny = [bool(high[(middles > a - 1 / 12) & (middles < b + 1 / 12)].any()) for a, b in edges]
    with_sun = (supplied * np.diff(edges)[:, 0])[sunny].sum() / 24
    assert moments[0, 1, 0] == pytest.approx(with_sun, rel=1e-3)
    assert moments[0, 1, 0] == pytest.approx(series.mean(), abs=0.6)
    assert (moments[..., 1:4] == 0).all()  # no light between ground and sky: it is in the series


def test_a_series_that_is_a_clear_sky_gives_it_back_at_all_heights():
    clear = sky_at().moments(4)
    zenith, _, distance = sun.position(clearsky.day_times_unix_s(DAY), LAT, LON)
    space = sun.solar_constant_wm2() / distance**2
    light = clearsky.bird(zenith, space, clearsky.pressure_pa(HEIGHT), AIR).black_ground_wm2
    index = index_of(light.reshape(24, 6).mean(axis=1), HOURS)
    lit = index.index > 0
    np.testing.assert_allclose(index.index[lit], 1.0, rtol=1e-12)
    assert 14 <= lit.sum() <= 16  # a May day has 15 hours of sun
    np.testing.assert_allclose(sky_at(supplied=index).moments(4)[..., 0], clear[..., 0], rtol=1e-12)


def test_without_a_height_of_its_own_a_series_is_the_same_at_all_heights():
    edges = np.stack([np.arange(0.0, 24, 3), np.arange(3.0, 25, 3)], axis=1)
    supplied = means(minutes(DAY, LAT, LON, 0.0), edges)
    index = index_of(supplied, edges, height=0.0)
    flat = sky_at(supplied=replace(index, by_height=False)).moments(4)
    assert np.ptp(flat, axis=1).max() == 0
    assert flat[0, 0, 0] == pytest.approx(supplied.mean(), rel=1e-3)
    rising = sky_at(supplied=index).moments(4)
    assert (np.diff(rising[0, :, 0]) > 1).all()
    assert rising[0, 0, 0] == pytest.approx(flat[0, 0, 0], rel=1e-12)
    clear = sky_at().moments(4)[0, :, 0]
    assert rising[0, 2, 0] / rising[0, 0, 0] == pytest.approx(clear[2] / clear[0], rel=0.01)


@pytest.mark.parametrize("step", [1 / 6, 1.0])
def test_the_dusk_at_a_station_does_not_light_up_the_ground_that_the_sun_reaches_first(step):
    """55 km east and west of a station the day is the same to 0.1 %, wherever in its interval the sun comes up.

    One time step with the sun just up holds next to no clear light: the dusk over it would be an index of thousands.
    """
    cuts = np.arange(0, 24 + step / 2, step)
    edges = np.stack([cuts[:-1], cuts[1:]], axis=1)
    for turn in np.arange(0.01, 2.5, 0.2):  # degrees: a time step of the sun
        supplied = means(minutes(DAY, LAT, LON + turn), edges)
        index = index_of(supplied, edges, lon=LON + turn)
        assert index.index.max() < 1.5
        there = replace(index, index=np.repeat(index.index, 2, axis=1))
        light = sky_at([LAT, LAT], LON + turn + np.array([-0.7, 0.7]), HEIGHT, supplied=there).moments(2)[:, 0, 0]
        assert light == pytest.approx(supplied.mean(), rel=1e-3)


def test_a_gap_by_day_is_a_gap_and_a_gap_by_night_is_none():
    supplied = means(minutes(DAY, LAT, LON), HOURS)
    whole = sky_at(supplied=index_of(supplied, HOURS)).moments(4)
    for hour, known in ((0, True), (23, True), (12, False), (5, False)):
        series = supplied.copy()
        series[hour] = np.nan
        moments = sky_at(supplied=index_of(series, HOURS)).moments(4)
        if known:
            np.testing.assert_array_equal(moments, whole)
        else:
            assert np.isnan(moments[..., [0, -1]]).all()


def test_minutes_with_a_gap_by_day_are_a_gap():
    cuts = np.arange(1441) / 60
    edges = np.stack([cuts[:-1], cuts[1:]], axis=1)
    series = minutes(DAY, LAT, LON)
    assert np.isfinite(sky_at(supplied=index_of(series, edges)).moments(2)).all()
    series[721] = np.nan
    assert np.isnan(sky_at(supplied=index_of(series, edges)).moments(2)[..., 0]).all()


def test_hours_that_a_series_does_not_tell_are_gaps_by_day_alone():
    supplied = means(minutes(DAY, LAT, LON), HOURS)
    whole = sky_at(supplied=index_of(supplied, HOURS)).moments(4)
    day_only = slice(3, 21)
    part = sky_at(supplied=index_of(supplied[day_only], HOURS[day_only])).moments(4)
    np.testing.assert_array_equal(part, whole)
    short = slice(8, 21)
    assert np.isnan(sky_at(supplied=index_of(supplied[short], HOURS[short])).moments(4)[..., 0]).all()


def test_an_unknown_height_of_the_series_is_a_gap_not_darkness():
    index = index_of(means(minutes(DAY, LAT, LON), HOURS), HOURS, height=np.nan)
    assert np.isnan(sky_at(supplied=index).moments(4)[..., 0]).all()


def test_air_may_differ_from_place_to_place():
    lat, lon = np.array([46.5, 46.5]), np.array([8.0, 8.0])
    clean, hazy = AIR, clearsky.Atmosphere.of(0.4, 2.0, 0.3)
    both = clearsky.Atmosphere(
        *(np.array(pair)[:, np.newaxis] for pair in zip(clean.numbers(), hazy.numbers(), strict=True))
    )
    got = sky_at(lat, lon, air=both).moments(4)
    for n, air in enumerate((clean, hazy)):
        np.testing.assert_allclose(got[n], sky_at(air=air).moments(4)[0], rtol=1e-12)
    supplied = np.repeat(means(minutes(DAY, LAT, LON), HOURS)[:, np.newaxis], 2, axis=1)
    index = index_of_intervals(DAY, HOURS, supplied, lat, lon, np.full(2, HEIGHT), both)
    assert (index.index[12, 1] > index.index[12, 0]).all()  # the same light is a larger share under haze
    moments = DaySky(DAY, Places(lat, lon, HEIGHTS, both, None, index)).moments(2)
    assert moments[0, 1, 0] == pytest.approx(moments[1, 1, 0], rel=1e-3)


def test_direct_light_of_a_series_stays_below_what_arrives_above_the_air():
    """However bright the series, and near the horizon too."""
    for value in (50.0, 400.0, 2000.0):
        sky = sky_at(supplied=ClearIndex(HOURS, np.full((24, 1), value / 300)))
        for time in clearsky.day_times_unix_s(DAY):
            light = sky.at(float(time))
            assert (light.direct_normal_wm2 <= 1361 * 1.04).all()
            assert (light.direct_wm2 >= 0).all()
            assert (light.diffuse_wm2 >= -1e-9).all()


def cloudy(fraction, hours=(0.0, 24.0)):
    values = np.broadcast_to(np.asarray(fraction, float).reshape(-1, 1), (len(hours), 1))
    return sky_at(cloud=Cloud(np.array(hours), values)).moments(4)


def test_more_cloud_less_light_less_beam_and_more_light_between_ground_and_sky():
    clear = sky_at().moments(4)
    np.testing.assert_allclose(cloudy(0.0), clear, rtol=1e-12)
    before = clear
    for c in np.linspace(0.1, 1.0, 10):
        now = cloudy(c)
        assert (now[..., 0] < before[..., 0]).all()
        assert (now[..., 4] < before[..., 4]).all()
        assert (now[..., 1] / now[..., 0] > before[..., 1] / before[..., 0]).all()
        before = now
    assert np.abs(before[..., 4]).max() < 1e-9  # overcast: no direct light
    np.testing.assert_allclose(before[..., 1] / before[..., 0], 0.5, rtol=1e-12)  # and a sky of albedo 0.5


def test_cloud_goes_in_straight_lines_between_its_hours_and_is_held_beyond():
    cloud = Cloud(np.array([6.0, 12.0]), np.array([[0.2, 0.0], [0.8, 1.0]]))
    for hour, wanted in ((0, [0.2, 0]), (6, [0.2, 0]), (9, [0.5, 0.5]), (11, [0.7, 5 / 6]), (12, [0.8, 1]), (20, [0.8, 1])):
        np.testing.assert_allclose(cloud.at(float(hour)), wanted, atol=1e-12)


def test_cloud_missing_by_day_is_a_gap_and_missing_by_night_is_none():
    hours = np.arange(0.5, 24)
    known = np.full(24, 0.4)
    night, day = known.copy(), known.copy()
    night[[0, 1, 22, 23]] = np.nan
    day[12] = np.nan
    np.testing.assert_array_equal(cloudy(night, hours), cloudy(known, hours))
    assert np.isnan(cloudy(day, hours)[..., 0]).all()
    assert np.isnan(sky_at(lat=np.nan, cloud=Cloud(hours, known[:, np.newaxis])).moments(2)).all()
