"""Does a day keep the energy that a grid, a station or a cloud gives it, and is what is unknown a gap?"""

import datetime as dt

import numpy as np
import pytest
from pyproj import CRS, Proj

from firnlight.core.grid import Grid, Window
from firnlight.core.settings import Insolation
from firnlight.io.ground import positions
from firnlight.physics.clearsky import day_times_unix_s
from firnlight.physics.day_sky import Cloud, DaySky, Places, index_of_intervals
from firnlight.stages.chain import Around
from firnlight.stages.insolation import atmosphere, grid_north_deg

DAY = dt.date(2031, 5, 14)
LAT, LON = np.array([46.5, 46.9]), np.array([-36.0, -35.5])
HEIGHTS = np.array([500.0, 1500.0, 3000.0])
AIR = atmosphere(Insolation().atmosphere)
FILL = -32768


def places(**more):
    return Places(LAT, LON, HEIGHTS, AIR, **more)


def supplied(hours, value=200.0, height=1500.0):
    """A series of `hours` long means whose day's mean is `value`, with a sun-like course."""
    edges = np.stack([np.arange(0, 24, hours), np.arange(hours, 25, hours)], axis=1).astype(float)
    middle = edges.mean(axis=1)
    course = np.maximum(np.cos((middle - 14.4) / 24 * 2 * np.pi), 0.0)
    if hours == 24:
        course = np.ones(1)
    wm2 = np.repeat((course / course.mean() * value)[:, np.newaxis], 2, axis=1)
    return edges, wm2, index_of_intervals(DAY, edges, wm2, LAT, LON, np.full(2, height), AIR)


@pytest.mark.parametrize("hours", [1, 3, 6, 24])
def test_a_supplied_series_keeps_its_energy_at_its_own_height_and_adds_no_ground_light(hours):
    _, _, index = supplied(hours)
    moments = DaySky(DAY, places(supplied=index)).moments(4)
    # light supplied for an hour with the sun below the horizon has no course to follow: the rest of a per cent
    assert moments[:, 1, 0] == pytest.approx(200.0, rel=0.01)
    assert (moments[:, :, 1:4] == 0).all()
    assert (np.diff(moments[:, :, 0], axis=1) > 0).all()  # thinner air higher up
    direct = moments[:, 1, 4]
    assert ((direct > 0.1 * 200) & (direct < 0.9 * 200)).all()


def test_without_a_height_the_same_is_kept_everywhere():
    from dataclasses import replace

    _, _, index = supplied(1, height=0.0)
    moments = DaySky(DAY, places(supplied=replace(index, by_height=False))).moments(4)
    assert np.ptp(moments[:, :, 0], axis=1) == pytest.approx(0.0, abs=1e-9)
    assert moments[:, 0, 0] == pytest.approx(200.0, rel=0.01)


def test_a_station_that_measures_the_clear_sky_gives_it_back():
    edges = np.stack([np.arange(48) / 2, np.arange(1, 49) / 2], axis=1)
    clear = DaySky(DAY, Places(LAT[:1], LON[:1], np.array([1500.0]), AIR))
    start = dt.datetime(2031, 5, 14, tzinfo=dt.UTC).timestamp()
    light = np.array([[float((one := clear.at(t)).direct_wm2[0, 0] + one.diffuse_wm2[0, 0])] for t in day_times_unix_s(DAY)])
    means = light.reshape(48, -1).mean(axis=1, keepdims=True)
    index = index_of_intervals(DAY, edges, means, LAT[:1], LON[:1], np.array([1500.0]), AIR)
    lit = means[:, 0] > 1
    assert index.index[lit, 0] == pytest.approx(1.0, abs=1e-9)
    assert start == day_times_unix_s(DAY)[0] - 300


def test_hours_of_night_may_be_missing_and_hours_of_day_may_not():
    edges, wm2, _ = supplied(1)
    at_night, by_day = wm2.copy(), wm2.copy()
    at_night[2] = np.nan  # 02 UTC is 23:36 by the sun
    by_day[15] = np.nan
    for series, known in ((at_night, True), (by_day, False)):
        index = index_of_intervals(DAY, edges, series, LAT, LON, np.full(2, 1500.0), AIR)
        moments = DaySky(DAY, places(supplied=index)).moments(4)
        assert np.isfinite(moments).all() == known
        assert np.isnan(moments[..., 0]).all() == (not known)


def test_cloud_dims_and_spreads_the_clear_sky():
    clear = DaySky(DAY, places()).moments(4)
    before = clear
    for c in (0.0, 0.3, 0.6, 0.9, 1.0):
        cloud = Cloud(np.arange(0.0, 25.0, 3.0), np.full((9, 2), c))
        now = DaySky(DAY, places(cloud=cloud)).moments(4)
        if c == 0:
            np.testing.assert_allclose(now, clear, rtol=1e-12)
        else:
            assert (now[..., 0] < before[..., 0]).all()
            assert (now[..., 4] < before[..., 4]).all()
            assert (now[..., 1] / now[..., 0] > before[..., 1] / before[..., 0]).all()  # a whiter sky
        before = now
    assert before[..., 4] == pytest.approx(0.0, abs=1e-9)
    # Kasten & Czeplak (1980): an overcast sky leaves a quarter, over grass
    grass = before[..., 0] / (1 - 0.2 * before[..., 1] / before[..., 0])
    clear_grass = clear[..., 0] / (1 - 0.2 * clear[..., 1] / clear[..., 0])
    assert grass / clear_grass == pytest.approx(0.25, abs=0.01)
    gap = np.full((9, 2), 0.5)
    gap[5] = np.nan
    assert np.isnan(DaySky(DAY, places(cloud=Cloud(np.arange(0.0, 25.0, 3.0), gap))).moments(4)[..., 0]).all()


@pytest.mark.parametrize(("crs", "left"), [("EPSG:32624", 250_000.0), ("EPSG:32624", 740_000.0), ("EPSG:32760", 300_000.0)])
def test_grid_north_is_the_projections_own(crs, left):
    grid = Grid(crs, left, 5_160_000.0, 30.0, 30.0, 64, 64)
    lon, lat = positions(grid, 64)
    centre = lon.at(Window(32, 32, 1, 1))[0, 0], lat.at(Window(32, 32, 1, 1))[0, 0]
    # meridian convergence: true north east of grid north is negative for a bearing of grid north
    wanted = Proj(CRS(crs)).get_factors(*centre).meridian_convergence
    got = grid_north_deg(lat.values, lon.values)[0]
    assert abs(wanted) > 1
    assert abs(got) == pytest.approx(abs(wanted), abs=0.01)
    # going to grid north by 10 km changes longitude to the east where the bearing is positive
    to_lonlat = Proj(CRS(crs))
    x, y = left + 960, 5_160_000.0 - 960
    low, high = to_lonlat(x, y, inverse=True), to_lonlat(x, y + 10_000, inverse=True)
    assert np.sign(high[0] - low[0]) == np.sign(got)


def test_surroundings_are_means_of_coarse_cells_however_cut():
    rng = np.random.default_rng(3)
    albedo = rng.integers(0, 10_001, (70, 90)).astype(np.int16)
    albedo[rng.random(albedo.shape) < 0.2] = FILL
    albedo[17:34, 17:34] = FILL
    whole, cut = Around(70, 90, 17), Around(70, 90, 17)
    whole.add(albedo, Window(0, 0, 70, 90))
    for row in range(0, 70, 13):
        for col in range(0, 90, 31):
            part = albedo[row : row + 13, col : col + 31]
            cut.add(part, Window(row, col, *part.shape))
    assert (whole.mean() == cut.mean()).all()
    cell = albedo[0:17, 0:17].astype(float)
    assert whole.mean()[0, 0] == pytest.approx(cell[cell != FILL].mean() * 1e-4)
    assert 0.3 < whole.mean()[1, 1] < 0.7  # unseen: from its neighbours
    nothing = Around(70, 90, 17)
    assert (nothing.mean() == 0).all()
