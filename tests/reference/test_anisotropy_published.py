"""Do kernels, their integrals and the fixed parameters give what their published formulas give when worked out apart?"""

import math

import numpy as np
import pytest

from firnlight.core.tables import load_table
from firnlight.physics import angle_albedo, anisotropy

VOLUME, GEOMETRIC = anisotropy.GROUND
# sun, view, azimuth [deg]; RossThick and LiSparse-Reciprocal (h/b 2, b/r 1) as defined by Roujean et al. (1992), Wanner
# et al. (1995) and Lucht et al. (2000), worked out apart from this package to six digits
KERNEL_VALUES = [
    (0, 0, 0, 0.0, 0.0),
    (30, 0, 0, -0.031443, -0.698222),
    (45, 30, 0, 0.182869, -0.207545),
    (45, 30, 180, -0.128311, -1.541093),
    (60, 45, 90, 0.095366, -1.5),
    (60, 60, 0, math.pi / 4, 2.0),
    (30, 30, 0, 0.121502, 0.178633),
]
# sun zenith [deg]; the kernels above integrated apart, and the polynomials of Lucht et al. (2000)
BLACK_SKY = [
    (0, -0.021079, -0.007574, -1.288854, -1.284909),
    (30, 0.031952, 0.017118, -1.325633, -1.324499),
    (45, 0.114397, 0.097656, -1.369839, -1.367229),
    (60, 0.270482, 0.267808, -1.425309, -1.419244),
    (75, 0.585460, 0.560690, -1.477323, -1.476039),
]
HALF = 5.1e-7  # half the last printed digit
ROY_BANDS = ("blue", "green", "red", "nir", "swir16", "swir22")


@pytest.mark.parametrize(("sun", "view", "azimuth", "volume", "geometric"), KERNEL_VALUES)
def test_kernels(sun, view, azimuth, volume, geometric):
    assert anisotropy.ross_thick(sun, view, azimuth) == pytest.approx(volume, abs=HALF)
    assert anisotropy.li_sparse_reciprocal(sun, view, azimuth) == pytest.approx(geometric, abs=HALF)


@pytest.mark.parametrize(("sun", "exact_v", "polynomial_v", "exact_g", "polynomial_g"), BLACK_SKY)
def test_black_sky(sun, exact_v, polynomial_v, exact_g, polynomial_g):
    """Integrals to 4e-6: the edge of the shadow is a kink, where a Gauss sum of 100 nodes is good to 3e-6."""
    assert anisotropy.black_sky(sun, VOLUME, "exact") == pytest.approx(exact_v, abs=4e-6)
    assert anisotropy.black_sky(sun, GEOMETRIC, "exact") == pytest.approx(exact_g, abs=4e-6)
    assert anisotropy.black_sky(sun, VOLUME) == pytest.approx(polynomial_v, abs=HALF)
    assert anisotropy.black_sky(sun, GEOMETRIC) == pytest.approx(polynomial_g, abs=HALF)


def test_the_polynomial_is_near_its_kernel_and_the_misprints_are_not_in_it():
    """Some texts print the volume term's g1 as -0.070887 or without its sign; the latter is off by 0.07 at 45 deg."""
    assert load_table("anisotropy").row(VOLUME)["black_sky"][1] == -0.070987
    theta2 = np.radians(45.0) ** 2
    value = anisotropy.black_sky(45.0, VOLUME)
    assert abs(value - anisotropy.black_sky(45.0, VOLUME, "exact")) < 0.017
    assert abs(value + (0.070987 - 0.070887) * theta2 - value) > HALF
    assert abs(value + 2 * 0.070987 * theta2 - anisotropy.black_sky(45.0, VOLUME, "exact")) > 0.05


def test_the_polynomial_ends_where_it_departs_from_its_kernel():
    """At 80 deg it would give 0.691 where the volume kernel gives 0.767 (the same outside integration)."""
    for name in anisotropy.GROUND:
        assert np.isnan(anisotropy.black_sky([75.01, 80.0, 90.0, -1.0, np.nan], name)).all()
        assert np.isfinite(anisotropy.black_sky(75.0, name))
    assert anisotropy.black_sky(80.0, VOLUME, "exact") == pytest.approx(0.766613, abs=4e-6)
    assert anisotropy.black_sky(80.0, GEOMETRIC, "exact") == pytest.approx(-1.489495, abs=4e-6)


def test_white_sky():
    """Integrated apart: 0.189186 and -1.377658; Lucht et al. (2000) print 0.189184 and -1.377622, 4e-5 off at most."""
    assert anisotropy.white_sky(VOLUME, "exact") == pytest.approx(0.189186, abs=1e-5)
    assert anisotropy.white_sky(GEOMETRIC, "exact") == pytest.approx(-1.377658, abs=1e-5)
    assert anisotropy.white_sky(VOLUME) == 0.189184
    assert anisotropy.white_sky(GEOMETRIC) == -1.377622
    for name in anisotropy.GROUND:
        assert anisotropy.white_sky(name) == pytest.approx(anisotropy.white_sky(name, "exact"), abs=4e-5)


def test_albedo_of_the_fixed_near_infrared_parameters():
    """Roy et al. (2016) parameters at 45 deg, worked out apart: black 0.279172, white 0.292878, a fifth diffuse 0.281913."""
    f = np.array(load_table("anisotropy").row("fixed_parameters")["nir"])
    black = anisotropy.black_sky_weights(45.0) @ f
    white = anisotropy.white_sky_weights() @ f
    assert black == pytest.approx(0.279172, abs=HALF)
    assert white == pytest.approx(0.292878, abs=HALF)
    assert anisotropy.blue_sky(black, white, 0.2) == pytest.approx(0.281913, abs=HALF)


@pytest.mark.parametrize(
    ("azimuth", "wanted"),
    [
        (0.0, (0.958718, 0.952705, 0.958390, 0.956931, 0.959063, 0.960795)),
        (180.0, (1.037159, 1.043215, 1.037668, 1.038909, 1.037007, 1.035434)),
    ],
)
def test_nadir_factor(azimuth, wanted):
    """Sun 45, view 7 deg; parameters of Roy et al. (2016), ratio worked out apart."""
    for band, value in zip(ROY_BANDS, wanted, strict=True):
        assert anisotropy.nadir_factor(band, 45.0, 7.0, azimuth) == pytest.approx(value, abs=HALF), band
    # to another sun, from the kernel values above: (0.1690 - 0.0574 x 0.031443 - 0.0227 x 0.698222) over
    # (0.1690 + 0.0574 x 0.182869 - 0.0227 x 0.207545)
    assert anisotropy.nadir_factor("red", 45.0, 30.0, 0.0, 30.0) == pytest.approx(0.151345 / 0.174785, abs=5e-6)
    assert anisotropy.nadir_factor("nir", 60.0, 7.0, 90.0) == pytest.approx(0.998524, abs=HALF)


@pytest.mark.parametrize(("latitude", "zenith"), [(0, 31.0076), (30, 37.7522), (45, 47.7708), (60, 60.3585), (-45, 55.5645)])
def test_mean_sun_zenith(latitude, zenith):
    """Zhang, Roy & Kovalskyy (2016) polynomial worked out apart, to half the last digit."""
    assert anisotropy.mean_sun_zenith(latitude) == pytest.approx(zenith, abs=5.1e-5)


@pytest.mark.parametrize(
    ("sun", "view", "azimuth", "value"),
    [(60, 0, 0, -0.105610), (60, 60, 0, -0.138273), (60, 60, 180, 0.341675), (45, 30, 90, -0.062182)],
)
def test_snow_kernel(sun, view, azimuth, value):
    """Jiao et al. (2019) with alpha 0.3, worked out apart."""
    assert anisotropy.snow(sun, view, azimuth) == pytest.approx(value, abs=HALF)


def test_the_snow_kernel_is_nothing_overhead():
    """Its offsets are printed to four digits (5e-5), from R0 = 1.108063 and R0 / e = 0.407634."""
    assert anisotropy.snow(0, 0, 0) == pytest.approx(0.0, abs=5e-5)
    slope, constant = load_table("anisotropy").row("snow")["offset"]
    assert constant == pytest.approx(-1.108063, abs=5e-5)
    assert slope == pytest.approx(1.108063 / math.e, abs=5e-5)


@pytest.mark.parametrize(
    ("surface", "carbon", "zenith", "cloud", "albedo"),
    [
        (600, 0, 60, 0, 0.871813),
        (200, 0, 60, 0, 0.828164),
        (200, 0.1, 60, 0, 0.801870),
        (100, 0.5, 49.5, 0, 0.690775),
        (200, 0.1, 60, 5, 0.851787),
        (200, 0, 60, 0.3, 0.838947),  # thin cloud: a share sqrt(0.3 / 1.5) of the light counts as diffuse
        (20, 0, 60, 0, 0.720245),
        (1.5, 0, 60, 0, 0.565643),
    ],
)
def test_gardner_and_sharp(surface, carbon, zenith, cloud, albedo):
    """Gardner & Sharp (2010) formulas worked out apart."""
    assert angle_albedo.gardner_sharp(surface, carbon, zenith, cloud) == pytest.approx(albedo, abs=HALF)
