"""Do longwave, vapour pressure and FAO-56's net radiation give the numbers that others have published?

CALC values are worked out apart from this code, from the formulas as their authors print them, and stand to the last
digit shown; the others are printed in the source named beside them.
"""

import numpy as np
import pytest

from firnlight.core.tables import load_table
from firnlight.physics import cloud, humidity, longwave, sun
from firnlight.physics.clearsky import pressure_pa

MJ_PER_DAY = 0.0864  # W m-2 to MJ m-2 d-1
FAO_SOLAR_CONSTANT = 0.0820e6 / 60  # FAO-56 equation 21 [W m-2]
FAO_ZERO_K = 273.16  # FAO-56's 0 degC
NAMES = ("brunt1932", "brutsaert1975", "prata1996", "dilley_obrien1998", "konzelmann1994", "idso1981", "idso_jackson1969")
# CALC: air [K], vapour [hPa], emissivities in the order of NAMES, Dilley & O'Brien's flux [W m-2]
SKIES = [
    (273.15, 5, (0.66534, 0.70019, 0.73329, 0.72747, 0.75200, 0.77218, 0.73900), 229.631),
    (263.15, 2, (0.61192, 0.61756, 0.69904, 0.68669, 0.69768, 0.73557, 0.75795), 186.717),
    (283.15, 9, (0.71500, 0.75762, 0.76919, 0.75443, 0.78927, 0.80702, 0.75908), 274.977),
    (293.15, 15, (0.77174, 0.81095, 0.81173, 0.78247, 0.82357, 0.84887, 0.80962), 327.670),
]


@pytest.mark.parametrize(("air", "vapour", "emissivities", "flux"), SKIES)
def test_clear_sky(air, vapour, emissivities, flux):
    for name, emissivity in zip(NAMES, emissivities, strict=True):
        assert longwave.clear_emissivity(name, air, vapour) == pytest.approx(emissivity, abs=5.1e-6), name
    assert longwave.downward_clear("dilley_obrien1998", air, vapour) == pytest.approx(flux, abs=5.1e-4)


def test_swinbank_by_hand():
    """9.365e-6 x 288.15^2 = 0.777580."""
    assert longwave.clear_emissivity("swinbank1963", 288.15, 10.0) == pytest.approx(0.777580, abs=5.1e-7)


@pytest.mark.parametrize(("name", "emissivity"), [("crawford_duchon1999", 0.85010), ("unsworth_monteith1975", 0.82611)])
def test_half_covered_sky(name, emissivity):
    """CALC: 273.15 K, 5 hPa, Brutsaert's clear sky of 221.021 W m-2, cloud fraction 0.5."""
    clear = longwave.downward_clear("brutsaert1975", 273.15, 5.0)
    assert clear == pytest.approx(221.021, abs=5.1e-4)
    sky = longwave.with_cloud(name, clear, 273.15, 0.5)
    assert sky / longwave.black_body(273.15) == pytest.approx(emissivity, abs=5.1e-6)


def test_half_covered_sky_of_the_factors():
    """CALC: Sugita & Brutsaert 223.027 W m-2 (its printed clear sky was rounded: 1e-3). By hand: x (1 + 0.22 / 4)."""
    clear = longwave.downward_clear("brutsaert1975", 273.15, 5.0)
    assert longwave.with_cloud("sugita_brutsaert1993", clear, 273.15, 0.5) == pytest.approx(223.027, abs=1e-3)
    assert longwave.with_cloud("kustas1994", clear, 273.15, 0.5) == pytest.approx(221.021 * 1.055, abs=1e-3)


def test_half_covered_sky_of_the_ice_sheet():
    """By hand: (0.75200 (1 - 1/16) + 0.952 / 16) = 0.764500."""
    clear = longwave.downward_clear("konzelmann1994", 273.15, 5.0)
    sky = longwave.with_cloud("konzelmann_cloud1994", clear, 273.15, 0.5)
    assert sky / longwave.black_body(273.15) == pytest.approx(0.764500, abs=5.1e-6)


# CALC: degC, kPa over water by Tetens' form (FAO-56 equation 11), by Sonntag (1990) over water, over ice
SATURATED = [
    (-20, 0.124619, 0.125965, 0.103261),
    (-10, 0.285711, 0.287031, 0.259874),
    (-5, 0.421176, 0.422185, 0.401738),
    (0, 0.6108, 0.6112, 0.6112),
    (10, 1.227963, 1.226030, None),
    (20, 2.338281, 2.332596, None),
    (30, 4.243065, 4.233724, None),
]


@pytest.mark.parametrize("row", SATURATED, ids=lambda row: f"{row[0]} degC")
def test_saturation(row):
    celsius, *kilopascal = row
    for form, printed in zip(("fao56", "sonntag1990", "sonntag1990_ice"), kilopascal, strict=True):
        if printed is not None:
            got = humidity.saturation_vapour_pressure(celsius + 273.15, form)
            assert got == pytest.approx(10 * printed, abs=5.1e-6), form


@pytest.mark.parametrize(("celsius", "printed"), [(0, 0.044450), (10, 0.082283), (20, 0.144740), (30, 0.243363)])
def test_slope_of_saturation(celsius, printed):
    """CALC [kPa per degC]; FAO-56 equation 13 rounds 17.27 x 237.3 = 4098.17 to 4098: 4e-5 of the slope."""
    assert humidity.saturation_slope(celsius + 273.15) == pytest.approx(10 * printed, rel=5.5e-5)


@pytest.mark.parametrize(
    ("height", "worked", "printed"),
    [(0, 0.067364, 0.067), (1000, 0.059866, 0.060), (2000, 0.053059, 0.053), (3000, 0.046892, 0.047)],
)
def test_psychrometric_constant(height, worked, printed):
    """CALC, and FAO-56 table 2.2 to half its last digit [kPa per degC]."""
    got = humidity.psychrometric_constant(pressure_pa(height)) / 10
    assert got == pytest.approx(worked, abs=5.1e-7)
    assert got == pytest.approx(printed, abs=5e-4)


def test_fao56_example_10_insolation_from_sunshine():
    """Rio de Janeiro, 22 deg 54' S, 15 May (J 135), 7.1 h of sun a day: Ra 25.1, N 10.9 h, Rs 14.5 MJ m-2 d-1."""
    latitude, declination = np.radians(-(22 + 54 / 60)), sun.fao56_declination_rad(135)
    above = MJ_PER_DAY * sun.daily_extraterrestrial_wm2(
        latitude, declination, sun.fao56_distance_factor(135), FAO_SOLAR_CONSTANT
    )
    hours = sun.day_length_h(latitude, declination)
    assert above == pytest.approx(25.1, abs=0.05)
    assert hours == pytest.approx(10.9, abs=0.05)
    light = cloud.angstrom_prescott(220 / 31 / hours, above)  # 220 h in 31 days
    assert light == pytest.approx(14.5, abs=0.05)
    assert light == pytest.approx(14.456098, abs=5.1e-7)  # CALC, unrounded
    assert cloud.clear_day_fao56(25.1, 0.0) == pytest.approx(18.8, abs=0.05)


def _fao_net_longwave():
    return -MJ_PER_DAY * longwave.net_fao56(25.1 + FAO_ZERO_K, 19.1 + FAO_ZERO_K, 21.0, 14.5 / 18.8)


def test_fao56_example_11_net_longwave():
    """Tmax 25.1, Tmin 19.1 degC, e 2.1 kPa, Rs 14.5, Rso 18.8: R_nl 3.5 MJ m-2 d-1; CALC 3.534035 with printed inputs."""
    assert _fao_net_longwave() == pytest.approx(3.5, abs=0.05)
    assert _fao_net_longwave() == pytest.approx(3.534035, abs=5e-7)
    # FAO's kelvin are 0.01 K larger than ours: 0.015 % of the flux
    ours = -MJ_PER_DAY * longwave.net_fao56(25.1 + 273.15, 19.1 + 273.15, 21.0, 14.5 / 18.8)
    assert ours == pytest.approx(3.534035, rel=1.5e-4)


def test_fao56_example_12_net_radiation():
    """R_ns 0.77 x 14.5 = 11.1, R_n 7.6 MJ m-2 d-1; CALC 7.630965."""
    net = (1 - 0.23) * 14.5 - _fao_net_longwave()
    assert net == pytest.approx(7.6, abs=0.05)
    assert net == pytest.approx(7.630965, abs=5e-7)


@pytest.mark.parametrize(("celsius", "printed"), [(1, 27.70), (10, 31.52), (20, 36.21), (30, 41.41), (40, 47.15)])
def test_fao56_table_2_8(celsius, printed):
    """Annex table 2.8 [MJ m-2 d-1]: to half its last digit with FAO's constant, to 0.08 % with the exact one."""
    fao = load_table("longwave").row("fao56")["numbers"][0]
    assert fao * (celsius + FAO_ZERO_K) ** 4 == pytest.approx(printed, abs=0.005)
    assert MJ_PER_DAY * longwave.black_body(celsius + FAO_ZERO_K) == pytest.approx(printed, rel=1e-3)
