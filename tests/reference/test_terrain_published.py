"""Do slope, incidence, horizon, sky view and correction come out as their authors' formulas say?

The numbers are computed from the printed formulas apart from this program and stand to the last digit shown; tolerances
are half that digit, or as said.
"""

import numpy as np
import pytest
from pvlib import irradiance

from firnlight.physics import horizon, terrain

HALF_DIGIT = 5.1e-7
# Horn (1981), Proceedings of the IEEE 69:14-47: a 3 x 3 window, row 0 north
WINDOW = np.array([[110, 112, 115], [105, 108, 112], [100, 103, 108.0]])
CELL_M = 30.0
# cos i = cos z cos S + sin z sin S cos(A_sun - A_slope): sun zenith, sun azimuth, slope, aspect, cos i
INCIDENCE = [
    (60, 180, 30, 180, 0.866025),
    (60, 180, 30, 0, 0.0),
    (60, 180, 30, 90, 0.433013),
    (50, 135, 10.435985, 217.647621, 0.649912),
    (50, 135, 0, 0, 0.642788),
]
# Dozier, Bruno & Downey (1981), Computers & Geosciences 7:145-151, on a profile of 8 points 10 m apart, looking to the end
PROFILE = [10, 12, 11, 15, 13, 20, 18, 10]
PROFILE_INDEX = [1, 5, 3, 5, 5, 5, 6, 7]
PROFILE_DEG = [11.309932, 11.309932, 21.801409, 14.036243, 34.992020, 0, 0, 0]
AROUND = np.arange(3600) * 0.1  # fine enough for 1e-6 below: the integrand is periodic, with kinks only at the slope's plane


def sun(zenith, azimuth):
    z, a = np.radians(zenith), np.radians(azimuth)
    return np.sin(z) * np.sin(a), np.sin(z) * np.cos(a), np.cos(z)


def plane(slope, aspect):
    """Gradient of a plane from its slope and the direction downslope."""
    s, a = np.tan(np.radians(slope)), np.radians(aspect)
    return -s * np.sin(a), -s * np.cos(a)


def view(elevation_deg, slope, aspect):
    around = np.broadcast_to(np.radians(elevation_deg), AROUND.shape)[:, np.newaxis]
    return terrain.sky_view(around, AROUND, [slope], [aspect])[0]


def test_horn_gradient_slope_and_aspect():
    east, north = terrain.gradient(WINDOW, CELL_M)
    assert (east.item(), north.item()) == (pytest.approx(0.112500, abs=HALF_DIGIT), pytest.approx(0.145833, abs=HALF_DIGIT))
    slope, aspect = terrain.slope_aspect_deg(east, north)
    assert slope.item() == pytest.approx(10.435985, abs=HALF_DIGIT)
    assert aspect.item() == pytest.approx(217.647621, abs=HALF_DIGIT)


@pytest.mark.parametrize("row", INCIDENCE)
def test_incidence(row):
    zenith, azimuth, slope, aspect, cosine = row
    factor = terrain.beam_factor(*plane(slope, aspect), *sun(zenith, azimuth))
    assert terrain.slope_parallel(factor, slope) == pytest.approx(cosine, abs=HALF_DIGIT)


def test_incidence_as_in_pvlib():
    """Same law, made apart: equal to rounding, but that pvlib keeps the sign where the surface faces away."""
    slope, aspect, zenith, azimuth = np.meshgrid(
        np.arange(0, 81, 10.0), np.arange(0, 360, 45.0), np.arange(0, 91, 15.0), np.arange(0, 360, 30.0)
    )
    theirs = irradiance.aoi_projection(slope, aspect, zenith, azimuth)
    ours = terrain.slope_parallel(terrain.beam_factor(*plane(slope, aspect), *sun(zenith, azimuth)), slope)
    np.testing.assert_allclose(ours, np.maximum(theirs, 0), atol=1e-14)
    assert (theirs < 0).any()


def test_profile_of_dozier_bruno_and_downey():
    index, tangent = horizon.profile_horizon(PROFILE[::-1], 10.0)  # it looks towards index 0
    assert (len(PROFILE) - 1 - index[::-1]).tolist() == PROFILE_INDEX
    np.testing.assert_allclose(np.degrees(np.arctan(tangent[::-1])), PROFILE_DEG, atol=HALF_DIGIT)


@pytest.mark.parametrize(("slope", "expected"), [(30, 0.933013), (45, 0.853553), (60, 0.75)])
@pytest.mark.parametrize("aspect", [0, 77.7, 180, 301])
def test_an_open_slope_sees_half_of_one_plus_cosine(slope, expected, aspect):
    assert view(0, slope, aspect) == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize(("elevation", "expected"), [(10, 0.969846), (20, 0.883022), (30, 0.75)])
@pytest.mark.parametrize("aspect", [np.nan, 0, 123])
def test_flat_ground_in_an_even_horizon_sees_cosine_squared(elevation, expected, aspect):
    assert view(elevation, 0, aspect) == pytest.approx(expected, abs=HALF_DIGIT)


@pytest.mark.parametrize(("wall", "expected"), [(30, 0.866025), (45, 0.707107)])
def test_floor_of_a_v_valley_sees_the_cosine_of_its_walls(wall, expected):
    around = np.degrees(np.arctan(np.tan(np.radians(wall)) * np.abs(np.sin(np.radians(AROUND)))))
    assert view(around, 0, np.nan) == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize("aspect", [0, 200])
def test_slope_in_an_even_horizon(aspect):
    """Dozier & Frew (1990), equation 7b, 30 degrees of slope in a horizon of 20."""
    assert view(20, 30, aspect) == pytest.approx(0.768907, abs=1e-6)


def test_terrain_takes_what_the_sky_leaves_of_the_half_space():
    assert terrain.terrain_view(0.768907, 30) == pytest.approx(0.933013 - 0.768907, abs=1e-6)
    assert terrain.terrain_view(0.94, 30) == 0


@pytest.mark.parametrize(
    ("c", "method", "slope", "expected"),
    [
        (0.2, "c", 20, 0.240796),
        (0.2, "scs+c", 20, 0.229721),
        (1.0, "c", 20, 0.266398),
        (1.0, "scs+c", 20, 0.260112),
    ],
)
def test_illumination_correction(c, method, slope, expected):
    """Teillet et al. (1982), Soenen et al. (2005): reflectance 0.3, cos i 0.85, sun at 50 degrees from the zenith."""
    got = terrain.illumination_correction(0.3, 0.85, np.cos(np.radians(50)), slope, c, method)
    assert got == pytest.approx(expected, abs=HALF_DIGIT)
