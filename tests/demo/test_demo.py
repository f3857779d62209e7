"""Is the invented area the same however it is cut, and can its truth be recovered?"""

import datetime as dt
import json
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
import rasterio
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from pyproj import Transformer

from firnlight.core.tables import load_table
from firnlight.demo import layout, sky, slopes
from firnlight.demo.area import write_demo
from firnlight.demo.noise import row_noise, smoothstep, value_noise
from firnlight.demo.plane import TilePlane, to_plane
from firnlight.demo.scenes import Overpass, write_tile
from firnlight.demo.slopes import LARGEST_CELLS
from firnlight.demo.spectra import BANDS, SURFACES, endmembers
from firnlight.demo.terrain import CLASSES, ground_at
from firnlight.demo.truth import air
from firnlight.demo.weather import Climate
from firnlight.physics.clearsky import day_mean_insolation, day_moments

PROJECT = Path(__file__).resolve().parents[2]
SAMPLE = PROJECT / "sample_tiles"
CODES = {name: code for code, name in CLASSES.items()}


def read(path):
    with rasterio.open(path) as dataset:
        return dataset.read(1)


def contents(folder):
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in sorted(folder.rglob("*")) if path.is_file()}


def overpasses(area, scenes, seed, years=1):
    around = layout.extent(area)
    return [Overpass(n, sky.overpass(t, seed), around) for n, t in enumerate(layout.overpasses(scenes, years))]


def climate(area, scenes, seed):
    around = layout.extent(area)
    return Climate.of(seed, [sky.overpass(t, seed) for t in layout.overpasses(scenes, 1)], around)


def scenes_of(folder):
    return sorted(path.name for path in (folder / "scenes").iterdir())


def reflectance(folder, scene):
    sensor = load_table("demo_spectra").row("sensor")
    return {b: read(folder / f"scenes/{scene}/{b}.tif") * sensor["scale"] + sensor["offset"] for b in BANDS}


def cover(folder, scene):
    return read(folder / f"static/{scene[:6]}/land_cover.tif")


# cutting and repeating


@pytest.mark.parametrize(("size", "strip_rows"), [(80, 1), (80, 33), (530, 100)])
def test_the_size_of_strips_changes_no_byte(tmp_path, size, strip_rows):
    area = layout.tiles(2, size)
    for name, rows in (("whole", None), ("cut", strip_rows)):
        write_tile(tmp_path / name, area[1], overpasses(area, 2, 3)[1:], climate(area, 2, 3), strip_rows=rows)
    assert contents(tmp_path / "cut") == contents(tmp_path / "whole")


def test_the_same_seed_gives_the_same_bytes_and_another_other_skies_over_the_same_ground(tmp_path):
    for name, seed in (("one", 5), ("again", 5), ("other", 6)):
        write_demo(tmp_path / name, tiles=1, size=32, scenes=2, seed=seed)
    one, other = contents(tmp_path / "one"), contents(tmp_path / "other")
    assert one == contents(tmp_path / "again")
    assert set(one) == set(other)
    changed = {name for name in one if one[name] != other[name]}
    assert not any(name.startswith("static") for name in changed)
    assert all(name in changed for name in one if name.endswith(("nir.tif", "high_camp.csv", "weather.nc")))


def test_a_tile_is_not_changed_by_how_many_overpasses_it_has(tmp_path):
    area = layout.tiles(1, 40)
    times = overpasses(area, 3, 9)
    write_tile(tmp_path / "all", area[0], times, climate(area, 3, 9))
    write_tile(tmp_path / "last", area[0], times[2:], climate(area, 3, 9))
    every = contents(tmp_path / "all")
    for name, data in contents(tmp_path / "last").items():
        assert every[name] == data


def test_the_smallest_area_is_written(tmp_path):
    steps = []
    written = write_demo(tmp_path, tiles=1, size=16, scenes=1, on_step=steps.append)
    assert all(path.is_file() for path in written)
    assert {path for path in tmp_path.rglob("*") if path.is_file()} == set(written)
    assert [(step.done, step.total, step.outcome) for step in steps] == [(1, 1, "made")]
    with pytest.raises(ValueError, match="size=15"):
        write_demo(tmp_path, size=15)


@pytest.mark.parametrize("count", [1, 2, 3, 9, 30])
def test_tiles_lie_on_both_sides_of_the_zone_boundary_and_share_a_fifth_of_their_ground(count):
    area = layout.tiles(count, 100)
    assert len({tile.name for tile in area}) == count
    west = (count + 1) // 2
    assert [tile.grid.crs for tile in area] == ["EPSG:32624"] * west + ["EPSG:32625"] * (count - west)
    x, y = np.column_stack([np.mean(to_plane(*layout.corners(t.grid), t.grid.crs), axis=1) for t in area])
    apart = np.maximum(np.abs(x[:, np.newaxis] - x), np.abs(y[:, np.newaxis] - y)) + 3000 * np.eye(count)
    assert apart.min() > 0.65 * 3000  # zones are turned against each other
    assert count == 1 or ((x < 0).sum() == west and (x > 0).sum() == count - west)
    if count == 2:
        (a, b) = (to_plane(*layout.corners(tile.grid), tile.grid.crs)[0] for tile in area)
        assert 0.15 < (a.max() - b.min()) / 3000 < 0.27
    for crs in {t.grid.crs for t in area}:
        lefts = sorted({t.grid.left for t in area if t.grid.crs == crs})
        assert all(b - a == 0.8 * 3000 for a, b in pairwise(lefts))


def test_overpasses_spread_through_the_season_of_each_year():
    times = layout.overpasses(3, 2)
    assert [f"{t:%Y-%m-%d}" for t in times] == [
        "2030-03-10", "2030-05-14", "2030-07-18", "2031-03-10", "2031-05-14", "2031-07-18",
    ]  # fmt: skip
    assert [f"{t:%m-%d}" for t in layout.overpasses(1, 1)] == ["05-14"]
    for t in times:
        local = (t.hour + t.minute / 60 - 36.0 / 15) % 24
        assert local == pytest.approx(10.5, abs=0.1)


@given(st.integers(0, 20_000), st.integers(1, 300), st.integers(1, 300))
@settings(deadline=None, max_examples=30)
def test_noise_of_a_row_does_not_depend_on_how_much_of_it_is_asked_for(row, few, many):
    few, many = sorted((few, many))
    assert (row_noise(row, few, "a") == row_noise(row, many, "a")[:few]).all()
    assert not (row_noise(row, many, "a") == row_noise(row + 1, many, "a")).any()


@given(
    arrays(np.float32, (2, 7), elements=st.floats(-(2**20), 2**20, width=32)),
    st.sampled_from([120.0, 900.0, 11_000.0]),
)
@settings(deadline=None, max_examples=60)
def test_value_noise_stays_in_its_range_and_depends_on_the_place_alone(places, wavelength):
    field = value_noise(places[0], places[1], wavelength, "test")
    assert (np.abs(field) <= 1).all()
    for n in range(7):
        assert value_noise(places[0][n : n + 1], places[1][n : n + 1], wavelength, "test")[0] == field[n]
    step = smoothstep(field, -0.3, 0.2)
    assert (step[field <= -0.3] == 0).all()
    assert (step[field >= 0.2] > 0.999999).all()


# one ground


def test_two_tiles_see_the_same_ground(made):
    with (
        rasterio.open(made / "static/FELL-A/elevation.tif") as a,
        rasterio.open(made / "static/FELL-B/elevation.tif") as b,
    ):
        rows, cols = np.mgrid[4:188, 4:188]
        x, y = rasterio.transform.xy(b.transform, rows.ravel(), cols.ravel())
        ax, ay = Transformer.from_crs(b.crs, a.crs, always_xy=True).transform(x, y)
        ac, ar = ~a.transform @ (np.asarray(ax), np.asarray(ay))
        ac, ar = ac - 0.5, ar - 0.5
    inside = (ac > 1) & (ac < 189) & (ar > 1) & (ar < 189)
    assert inside.mean() > 0.15
    i, j = ar[inside].astype(int), ac[inside].astype(int)
    fi, fj = ar[inside] - i, ac[inside] - j

    def differences(name):
        one, two = read(made / name.format("A")).astype(float), read(made / name.format("B")).astype(float)
        top = one[i, j] * (1 - fj) + one[i, j + 1] * fj
        low = one[i + 1, j] * (1 - fj) + one[i + 1, j + 1] * fj
        return np.abs(top * (1 - fi) + low * fi - two[rows.ravel()[inside], cols.ravel()[inside]])

    # bilinear reading of ground that bends over 150 m: about 1 m; covers and snow edges are sharper
    assert np.percentile(differences("static/FELL-{}/elevation.tif"), 99) < 2.5
    for day in ("20310310", "20310514", "20310718"):
        assert (
            np.percentile(differences(f"truth/FELL-{{}}_{day}/insolation.tif"), 75) < 80
        )  # steps of 0.1: slopes bend between cells
        assert np.percentile(differences(f"truth/FELL-{{}}_{day}/albedo.tif"), 75) < 150


def test_cells_are_what_the_function_of_the_plane_says(made):
    with rasterio.open(made / "static/FELL-B/elevation.tif") as dataset:
        height = dataset.read(1)
        rows, cols = np.mgrid[0:192:7, 0:192:7]
        x, y = rasterio.transform.xy(dataset.transform, rows.ravel(), cols.ravel())
        px, py = to_plane(np.asarray(x), np.asarray(y), dataset.crs.to_string())
    ground = ground_at(px.astype(np.float32)[np.newaxis], py.astype(np.float32)[np.newaxis])
    off = np.abs(ground.elevation_m[0] - height[rows.ravel(), cols.ravel()])
    assert off.max() < 3  # the broad shape is read between nodes 120 m apart
    assert off.mean() < 0.5
    same = ground.cover[0] == read(made / "static/FELL-B/land_cover.tif")[rows.ravel(), cols.ravel()]
    assert same.mean() > 0.95


def test_the_sample_has_every_cover_and_a_mountain_range_of_heights():
    seen, heights = set(), []
    for tile in ("FELL-A", "FELL-B"):
        seen |= set(np.unique(read(SAMPLE / f"static/{tile}/land_cover.tif")).tolist())
        heights.append(read(SAMPLE / f"static/{tile}/elevation.tif"))
    assert seen == set(CLASSES)
    assert np.min(heights) > 700
    assert 2000 < np.ptp(heights) < 2700


# the truth


@pytest.mark.parametrize("name", SURFACES)
def test_spectra_are_reflectances_and_the_published_conversion_nearly_fits_them(name):
    row = endmembers()[SURFACES.index(name)]
    assert ((row > 0) & (row < 1)).all()
    form = load_table("broadband").row("liang2001")
    converted = sum(w * row[BANDS.index(b)] for b, w in form["weights"].items()) + form["intercept"]
    assert converted == pytest.approx(row[-1], abs=0.02)


def test_the_truth_is_recovered_from_clear_cells(made):
    form = load_table("broadband").row("liang2001")
    calibration = json.loads((made / "truth/about.json").read_text())["relative_calibration_error"]
    every = []
    for scene in scenes_of(made):
        bands = reflectance(made, scene)
        got = sum(w * bands[b] for b, w in form["weights"].items()) / (1 + calibration) + form["intercept"]
        clear = (read(made / f"truth/{scene}/cloud.tif") & 3 == 0) & (read(made / f"scenes/{scene}/nir.tif") > 0)
        error = (got - read(made / f"truth/{scene}/albedo.tif") * 1e-4)[clear]
        # half a tile holds few patches of the 0.022 that six bands cannot tell
        assert abs(error.mean()) <= 0.03
        assert np.sqrt((error**2).mean()) <= 0.035
        every.append(error)
    assert abs(np.concatenate(every).mean()) <= 0.015
    assert np.concatenate(every).std() > 0.003  # noise, calibration and slopes are in it


def test_snow_and_ice_are_brightest_water_and_forest_darkest():
    """Common practice, no source: the order of surfaces under a summer sun, and in late winter."""
    for scene in ("FELL-B_20310718", "FELL-B_20310310"):
        albedo, codes = read(SAMPLE / f"truth/{scene}/albedo.tif") * 1e-4, cover(SAMPLE, scene)
        by_name = {name: albedo[codes == code].mean() for name, code in CODES.items()}
        order = sorted(by_name, key=by_name.get)
        if scene.endswith("0718"):
            assert order[:2] == ["lake", "conifer forest"]
            assert order[-1] == "glacier"
            assert by_name["lake"] < 0.08
            assert by_name["conifer forest"] < 0.15
        else:
            assert order[0] == "conifer forest"  # the lake is frozen and under snow
            assert by_name["glacier"] > 0.7
    snow = read(SAMPLE / "scenes/FELL-A_20310514/quality.tif") & 8 > 0
    albedo = read(SAMPLE / "truth/FELL-A_20310514/albedo.tif")
    assert np.percentile(albedo[snow], 5) > np.percentile(albedo[~snow], 90)


def test_the_snowline_rises_and_snow_darkens_through_the_season(made):
    bright, share = [], []
    for day in ("20310310", "20310514", "20310718"):
        snow = read(made / f"scenes/FELL-A_{day}/quality.tif") & 8 > 0
        share.append(snow.mean())
        bright.append(np.percentile(read(made / f"truth/FELL-A_{day}/albedo.tif")[snow], 99))
    assert share[0] > share[1] > share[2] > 0
    assert bright[0] - 200 > bright[1] > bright[2] + 200  # steps of 0.0001


def test_level_lakes_get_the_clear_sky_and_slopes_what_they_face(made):
    for scene in scenes_of(made):
        incoming = read(made / f"truth/{scene}/insolation.tif") * 0.1
        with rasterio.open(made / f"static/{scene[:6]}/elevation.tif") as dataset:
            height, transform, crs = dataset.read(1).astype(float), dataset.transform, dataset.crs
        day = dt.date.fromisoformat(scene[-8:])
        x, y = rasterio.transform.xy(transform, 96, 96)
        lon, lat = Transformer.from_crs(crs, 4326, always_xy=True).transform(x, y)
        moments = day_moments(day, np.array([lat]), np.array([lon]), np.array([800.0, 2000.0]), air(), 8)
        low, high = (float(day_mean_insolation(moments[0, n], 0.3)) for n in range(2))
        lake = cover(made, scene) == CODES["lake"]
        if lake.sum() > 200:  # walls around take some sky and give some light; 4 standard deviations of the sky's error
            assert np.median(incoming[lake]) == pytest.approx(low, rel=0.13)
        assert 0.7 * low < incoming.mean() < 1.4 * high
        south = np.gradient(height, 30.0)[0] * -1  # rows go south: ground that falls that way faces the sun
        inner = ~lake
        assert np.corrcoef(south[inner], incoming[inner])[0, 1] > 0.25


def test_net_longwave_is_a_loss_of_the_size_of_clear_and_cloudy_skies(made):
    """Common practice, no source: snow and ground lose between nothing and 150 W m-2 to the sky over a day."""
    for scene in scenes_of(made):
        lost = read(made / f"truth/{scene}/net_longwave.tif") * 0.1
        assert lost.min() > -170
        assert lost.max() < 40
        assert lost.mean() < -20


def test_slopes_of_large_tiles_are_not_followed(tmp_path):
    area = layout.tiles(1, LARGEST_CELLS + 18)
    write_tile(tmp_path, area[0], overpasses(area, 1, 3), climate(area, 1, 3))
    names = {path.name for path in (tmp_path / "truth").rglob("*.tif")}
    assert names == {"albedo.tif", "cloud.tif"}


def test_a_march_sees_a_wall_where_it_stands(monkeypatch):
    """A plain with a wall 300 m high, 1.5 km to the east: 11.3 deg there, nothing to the west, a smaller view of the sky."""
    plane = TilePlane(layout.tiles(1, 32)[0].grid)
    x0 = float(plane.at(np.arange(16, 17), np.arange(16, 17))[0][0, 0])

    def height(x_m, y_m):
        return np.where(np.abs(x_m - x0 - 1500) < 60, np.float32(1300), np.float32(1000)) + np.float32(0) * y_m

    monkeypatch.setattr(slopes.terrain, "elevation_m", height)
    level = np.zeros((32, 32), np.float32)
    ground = type("Ground", (), {"x_m": level, "y_m": level, "elevation_m": level + 1000, "east": level, "north": level})
    monkeypatch.setattr(slopes.terrain, "ground_rows", lambda *_: ground)
    found = slopes.slopes_of(plane)
    east, west = found.horizon[slopes.AZIMUTHS // 4, 16, 16], found.horizon[3 * slopes.AZIMUTHS // 4, 16, 16]
    assert np.degrees(east) == pytest.approx(np.degrees(np.arctan(300 / 1450)), abs=0.7)
    assert west == 0
    assert 0.97 < found.view[16, 16] < 0.995


def test_the_mask_is_the_truth_with_the_planted_mistakes(made):
    planted = np.zeros(2, int)
    for scene in scenes_of(made):
        truth, mask = read(made / f"truth/{scene}/cloud.tif"), read(made / f"scenes/{scene}/quality.tif")
        seen = mask & 1 == 0
        cloud, shadow, called, missed = (truth >> bit & 1 == 1 for bit in range(4))
        assert ((mask & 2 > 0) == (cloud & ~missed | called))[seen].all()
        assert ((mask & 4 > 0) == shadow)[seen].all()
        assert not (called & cloud).any()
        assert not (missed & ~cloud).any()
        assert (mask[~seen] == 1).all()
        for band in BANDS:
            assert ((read(made / f"scenes/{scene}/{band}.tif") == 0) == ~seen).all()
        planted += called.sum(), missed.sum()
    assert (planted > 100).all()


def test_shadows_fall_away_from_the_sun(made):
    about = json.loads((made / "truth/about.json").read_text())
    for one in about["overpasses"]:
        truth = read(made / f"truth/FELL-A_{one['time'][:10].replace('-', '')}/cloud.tif")
        reach = about["sky"]["cloud_height_m"] * np.tan(np.radians(one["sun_zenith_deg"])) / 30
        azimuth = np.radians(one["sun_azimuth_deg"])
        rows, cols = np.nonzero(truth & 2)
        rows = np.rint(rows - reach * np.cos(azimuth)).astype(int)
        cols = np.rint(cols + reach * np.sin(azimuth)).astype(int)
        inside = (rows >= 0) & (rows < 192) & (cols >= 0) & (cols < 192)
        assert inside.sum() > 50
        # grid north is up to 2.3 deg off the plane's north
        assert (truth[rows[inside], cols[inside]] & 1).mean() > 0.75


def test_some_ground_lies_outside_the_second_swath(made):
    fill = {scene: (read(made / f"scenes/{scene}/quality.tif") & 1).mean() for scene in scenes_of(made)}
    assert 0.02 < fill.pop("FELL-A_20310514") < 0.2
    assert set(fill.values()) == {0}
