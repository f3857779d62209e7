"""Does light on slopes agree with isotropic transposition and the diffuse share as another library has them?

pvlib is the reference. Formulas: isotropic sky on a tilted plane, Hottel & Woertz (1942) / Liu & Jordan (1963), as cited
there; Erbs, Klein & Duffie (1982), Solar Energy 28:293-302; Kasten & Czeplak (1980), Solar Energy 24:177-189.
"""

import datetime as dt

import numpy as np
import pytest
from pvlib import irradiance

from firnlight.core.grid import Window
from firnlight.core.lattice import Lattice
from firnlight.core.settings import Insolation
from firnlight.physics import clearsky, cloud, sun
from firnlight.physics.day_sky import ClearIndex, Cloud, DaySky, Places
from firnlight.physics.terrain import beam_factor
from firnlight.stages.insolation import Relief, atmosphere, sky_lattice, slope_insolation

LAT, LON, HEIGHT = 46.5, 8.0, 2000.0
DAYS = [dt.date(2024, 3, 20), dt.date(2024, 6, 21), dt.date(2024, 12, 21)]
TILTS, ASPECTS = (v.ravel() for v in np.meshgrid([0.0, 20, 40, 60, 75], np.arange(0, 360, 45.0)))
AIR = atmosphere(Insolation().atmosphere)
HOURS = np.stack([np.arange(24.0), np.arange(1.0, 25.0)], axis=1)


def sky_of(day, **more):
    return DaySky(day, Places(np.array([LAT]), np.array([LON]), np.array([HEIGHT]), AIR, **more))


def plane(tilt_deg, aspect_deg):
    s, a = np.tan(np.radians(tilt_deg)), np.radians(aspect_deg)
    return -s * np.sin(a), -s * np.cos(a)


def transposed(light, zenith, azimuth):
    """pvlib's irradiance in the inclined planes, over black ground."""
    return irradiance.get_total_irradiance(
        TILTS, ASPECTS, zenith, azimuth, light.direct_normal_wm2.item(), (light.direct_wm2 + light.diffuse_wm2).item(),
        light.diffuse_wm2.item(), albedo=0.0, model="isotropic",
    )  # fmt: skip


@pytest.mark.parametrize("day", DAYS, ids=str)
@pytest.mark.parametrize("kind", ["clear", "cloud", "supplied"])
def test_instants_on_tilted_planes_under_an_even_sky(day, kind):
    """One law made twice: per inclined area ours is that per map area times cos S; to rounding."""
    more = {
        "clear": {},
        "cloud": {"cloud": Cloud(np.array([12.0]), np.array([[0.5]]))},
        "supplied": {"supplied": ClearIndex(HOURS, np.full((24, 1), 0.6))},
    }[kind]
    sky, lit = sky_of(day, **more), 0
    for time in clearsky.day_times_unix_s(day, 3600.0):
        zenith, azimuth, _ = (v.item() for v in sun.position(float(time), LAT, LON))
        if zenith >= 89:
            continue
        light = sky.at(float(time))
        z, a = np.radians(zenith), np.radians(azimuth)
        factor = beam_factor(*plane(TILTS, ASPECTS), np.sin(z) * np.sin(a), np.sin(z) * np.cos(a), np.cos(z))
        cosine = np.cos(np.radians(TILTS))
        ours = (factor * light.direct_normal_wm2.item() + light.diffuse_wm2.item() * (1 + cosine) / 2 / cosine) * cosine
        np.testing.assert_allclose(ours, transposed(light, zenith, azimuth)["poa_global"], rtol=1e-9, atol=1e-9)
        lit += 1
    assert lit >= 8


@pytest.mark.parametrize("day", DAYS, ids=str)
def test_a_day_on_tilted_planes_under_an_even_sky(day):
    """Open slopes over black ground: pvlib's instants, every five minutes, summed to the day.

    Within 1 % of the light on the plane or on flat ground, whichever is more: half-hour steps of the sun
    (tests/physics/test_light.py), and 0.05 W m-2 of rounding.
    """
    total, steps = np.zeros(TILTS.size), clearsky.day_times_unix_s(day, 300.0)
    sky = sky_of(day)
    for time in steps:
        zenith, azimuth, _ = (v.item() for v in sun.position(float(time), LAT, LON))
        if zenith < 90:
            total += transposed(sky.at(float(time)), zenith, azimuth)["poa_global"]
    total /= steps.size
    lats, lons = np.meshgrid(LAT + np.array([0.01, -0.01]), LON + np.array([-0.01, 0.01]), indexing="ij")
    lattice = sky_lattice(day, (), Lattice(64, 64, lons), Lattice(64, 64, lats), Insolation(), heights_m=(1500.0, 2500.0))
    shape, cosine = (1, TILTS.size), np.cos(np.radians(TILTS))
    relief = Relief(
        *(np.round(v).astype(np.int16).reshape(shape) for v in (TILTS * 100, ASPECTS * 50, (1 + cosine) / 2 * 10000)),
        np.zeros((len(lattice.directions), *shape), np.uint8),
    )  # fmt: skip
    got = slope_insolation(
        np.ones(shape, bool),
        np.full(shape, HEIGHT, np.float32),
        relief,
        np.zeros((1, 1)),
        64,
        Window(32, 12, *shape),
        lattice,
    )
    assert not got["terrain_light"].any()
    ours = got["insolation"].ravel() / 10 * cosine
    assert (np.abs(ours - total) <= 0.01 * np.maximum(total, total[0]) + 0.05).all()
    assert np.ptp(total) > 0.5 * total[0]


@pytest.mark.parametrize("day", DAYS, ids=str)
@pytest.mark.parametrize("share", [0.1, 0.3, 0.5, 0.7, 0.9, 1.0])
def test_direct_share_of_a_supplied_hour(day, share):
    """Erbs et al.; pvlib has another solar constant, so the hour is scaled by the two: the clearness is then the same."""
    sky = sky_of(day, supplied=ClearIndex(HOURS, np.full((24, 1), share)))
    noon = dt.datetime(day.year, day.month, day.day, 11, 25, tzinfo=dt.UTC)
    zenith, _, distance = (v.item() for v in sun.position(noon.timestamp(), LAT, LON))
    light = sky.at(noon.timestamp())
    whole = (light.direct_wm2 + light.diffuse_wm2).item()
    number = day.timetuple().tm_yday
    theirs = irradiance.get_extra_radiation(number)
    scale = theirs / (sun.solar_constant_wm2() / distance**2)
    found = irradiance.erbs(whole * scale, zenith, number)
    assert light.diffuse_wm2.item() / whole == pytest.approx(found["dhi"] / (whole * scale), rel=1e-9)
    assert light.direct_normal_wm2.item() * np.cos(np.radians(zenith)) == pytest.approx(light.direct_wm2.item(), rel=1e-12)


@pytest.mark.parametrize(("eighths", "share"), [(0, 1.0), (2, 0.993269), (4, 0.928951), (6, 0.717987), (8, 0.25)])
def test_cloud_over_grass(eighths, share):
    """Kasten & Czeplak (1980): 1 - 0.75 (N/8)^3.4 of the clear light, both over grass of albedo 0.2; to the last digit."""
    fraction = eighths / 8
    time = dt.datetime(2024, 6, 21, 10, tzinfo=dt.UTC).timestamp()
    clear, dim = sky_of(DAYS[1]).at(time), sky_of(DAYS[1], cloud=Cloud(np.array([12.0]), np.array([[fraction]]))).at(time)
    over_grass = [
        clearsky.global_horizontal(one.direct_wm2 + one.diffuse_wm2, one.sky_albedo, 0.2).item() for one in (clear, dim)
    ]
    assert over_grass[1] / over_grass[0] == pytest.approx(share, abs=5.1e-7)
    assert cloud.transmission(fraction) == pytest.approx(share, abs=5.1e-7)
    # (N/8)^2 of the direct light's share goes over to the sky's (from memory)
    direct_share = [(one.direct_wm2 / (one.direct_wm2 + one.diffuse_wm2)).item() for one in (clear, dim)]
    assert direct_share[1] == pytest.approx(direct_share[0] * (1 - fraction**2), rel=1e-12)
