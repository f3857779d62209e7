"""Does vapour stay vapour: rise with warmth, come back from dew point, and go missing when it is not known?"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.tables import load_table
from firnlight.physics import humidity

temperatures = st.floats(200, 330)
shares = st.floats(0, 1)
FORMS = list(humidity.SATURATION)


@pytest.mark.parametrize("form", FORMS)
def test_saturation_rises_with_temperature(form):
    assert (np.diff(humidity.saturation_vapour_pressure(np.linspace(200, 273.15, 500), form)) > 0).all()


@given(st.floats(208, 273.1))
def test_ice_holds_less_vapour_than_supercooled_water(temperature):
    ice = humidity.saturation_vapour_pressure(temperature, "sonntag1990_ice")
    assert ice < humidity.saturation_vapour_pressure(temperature)


@given(temperatures, shares)
def test_dew_point_of_the_vapour_gives_the_vapour_back(air, share):
    """The form turned round by hand: t = c ln(e / a) / (b - ln(e / a))."""
    vapour = humidity.vapour_from_relative_humidity(max(share, 0.01), air)
    a, b, c, *_ = humidity.SATURATION["sonntag1990"]
    log = np.log(vapour / a)
    dew_k = c * log / (b - log) + 273.15
    if dew_k > 180:
        assert humidity.vapour_from_dew_point(dew_k) == pytest.approx(vapour, rel=1e-9)
        assert dew_k <= air + 1e-9


@pytest.mark.parametrize("form", FORMS)
def test_slope_is_the_slope(form):
    t = np.linspace(240, 273, 30)
    step = 1e-3
    rise = np.diff([humidity.saturation_vapour_pressure(t + s, form) for s in (-step, step)], axis=0)[0] / (2 * step)
    np.testing.assert_allclose(humidity.saturation_slope(t, form), rise, rtol=1e-7)


def test_specific_humidity_of_pure_vapour_is_the_pressure():
    assert humidity.vapour_from_specific_humidity(1.0, 2000.0) == pytest.approx(20.0)
    # by hand: 0.010 kg kg-1 at 1000 hPa: 10 / (0.622 + 0.00378)
    assert humidity.vapour_from_specific_humidity(0.01, 1e5) == pytest.approx(10 / 0.62578)


def test_out_of_range_is_missing_and_a_little_off_is_set_right():
    got = humidity.vapour_from_relative_humidity([-0.01, 1.02, -0.2, 60.0], 283.15)
    full = humidity.saturation_vapour_pressure(283.15)
    np.testing.assert_array_equal(got, [0, full, np.nan, np.nan])
    np.testing.assert_array_equal(humidity.saturation_vapour_pressure([100.0, 400.0]), [np.nan, np.nan])
    assert np.isnan(humidity.saturation_vapour_pressure(280.0, "sonntag1990_ice"))
    np.testing.assert_array_equal(
        humidity.vapour_from_specific_humidity([-1e-4, -0.01, 2, 0.01, 0.01], [1e5, 1e5, 1e5, 0, -1]),
        [0, np.nan, np.nan, np.nan, np.nan],
    )
    assert np.isnan(humidity.psychrometric_constant(0.0))
    assert np.isnan(humidity.precipitable_water_cm(-1.0, 280.0))
    assert np.isnan(humidity.precipitable_water_cm(5.0, 0.0))


def test_nan_in_gives_nan():
    nan, two = np.nan, (humidity.vapour_from_relative_humidity, humidity.vapour_from_specific_humidity)
    for make in (humidity.saturation_vapour_pressure, humidity.saturation_slope, humidity.vapour_from_dew_point):
        assert np.isnan(make(nan))
    for make in (*two, humidity.precipitable_water_cm):
        assert np.isnan(make(nan, 280.0))
        assert np.isnan(make(0.5, nan))
    assert np.isnan(humidity.psychrometric_constant(nan))
    for place in range(4):
        numbers = [280.0, 100.0, 500.0, 0.0065]
        numbers[place] = nan
        assert np.isnan(humidity.air_at_height(*numbers))
    for place in range(3):
        numbers = [270.0, 280.0, 8.0]
        numbers[place] = nan
        assert np.isnan(humidity.vapour_pressure_at(*numbers))


def test_higher_up_it_is_colder_by_the_lapse():
    assert humidity.air_at_height(288.15, 0, 1000, 0.0065) == pytest.approx(281.65)
    assert humidity.air_at_height(281.65, 1000, 0, 0.0065) == pytest.approx(288.15)
    assert humidity.air_at_height(280.0, 500, 900, -0.01) == pytest.approx(284.0)  # an inversion


@given(temperatures, temperatures, shares)
def test_relative_humidity_is_kept_with_height(here, there, share):
    vapour = humidity.vapour_from_relative_humidity(share, here)
    moved = humidity.vapour_pressure_at(there, here, vapour)
    assert moved == pytest.approx(humidity.vapour_from_relative_humidity(share, there), rel=1e-9)


def test_vapour_falls_with_height_as_the_docstring_says():
    """By a factor e over 2.1 km near 0 degC."""
    there = humidity.air_at_height(276.56, 0, 2100, 0.0065)
    assert humidity.vapour_pressure_at(there, 276.56, 6.0) == pytest.approx(6 / np.e, rel=0.02)


def test_column_water_is_as_in_the_longwave_form():
    assert load_table("longwave").row("prata1996")["numbers"][2] == humidity.PRATA_CM_K_PER_HPA
    assert load_table("longwave").row("dilley_obrien1998")["numbers"][5] == 100 * humidity.PRATA_CM_K_PER_HPA


def test_unknown_form_is_refused():
    with pytest.raises(ValueError, match="sonntag1990_ice"):
        humidity.saturation_vapour_pressure(280.0, "magnus")


def test_shapes_broadcast():
    assert humidity.vapour_from_relative_humidity(np.full((3, 1), 0.5), np.full(4, 280.0)).shape == (3, 4)
    assert humidity.vapour_pressure_at(np.full((2, 5), 270.0), np.full((2, 1), 280.0), 5.0).shape == (2, 5)
