"""Terrain and net radiation through the whole way: closure, slopes, relief, albedo of a day, views and illumination."""

import datetime as dt
import json

import numpy as np
import pytest
import rasterio

from end_to_end.conftest import GAP, cells, days, rows


def test_net_radiation_closes_in_every_cell_and_row(done_area):
    for day in days(done_area):
        absorbed, longwave, net = (
            cells(day / f"{name}.tif").astype(int) for name in ("absorbed_shortwave", "net_longwave", "net_radiation")
        )
        known = net != GAP
        assert known.any()
        assert (net[known] == absorbed[known] + longwave[known]).all()
        assert ((longwave == GAP) == (net == GAP)).all()
        assert (net[absorbed == GAP] == GAP).all()
    day = days(done_area)[0].name
    found = rows(done_area, "--since", day, "--until", day, "--by", "region,elevation_band,land_cover,snow")
    with_net = [row for row in found if row["net_radiation_wm2"] is not None]
    assert with_net
    for row in with_net:
        assert row["net_radiation_wm2"] == pytest.approx(row["absorbed_wm2"] + row["net_longwave_wm2"], abs=1e-9)
        assert row["insolation_wm2"] == pytest.approx(row["reflected_wm2"] + row["absorbed_wm2"], abs=1e-9)
        assert 0 <= row["terrain_light_wm2"] < row["insolation_wm2"]
        assert row["net_radiation_u"] > row["absorbed_u"] > 0
        assert (row["melt_potential_mm_day"] is not None) == (row["snow"] == "snow")
    assert {row["snow"] for row in with_net} == {"snow", "snow-free"}


def test_slopes_get_what_they_face(done_area):
    """Common practice, no source: in March a slope gets the more, the more it leans to the south."""
    day = days(done_area)[0]
    relief = done_area.store / "terrain" / day.parent.name
    slope, aspect = cells(relief / "slope.tif") * 0.01, cells(relief / "aspect.tif") * 0.02
    light = cells(day / "insolation.tif")
    known = light != GAP
    southward = np.tan(np.radians(slope[known])) * -np.cos(np.radians(aspect[known]))
    assert np.corrcoef(southward, light[known])[0, 1] > 0.8
    view = cells(relief / "sky_view.tif")
    assert ((view >= 0) & (view <= 10000)).all()
    assert (cells(day / "terrain_light.tif")[light != GAP] <= light[light != GAP]).all()


def test_relief_is_made_once_and_again_when_it_is_gone(done_area):
    before, files = done_area.times(), done_area.files()
    assert done_area.night("--quiet") == 0
    assert done_area.touched_since(before) == set()
    (done_area.store / "terrain/FELL-A/horizon.tif").unlink()
    next((done_area.store / "maps/FELL-A").rglob("insolation.tif")).unlink()
    assert done_area.night("--quiet") == 0
    assert done_area.files() == files


def test_flat_ground_on_request_and_back_again(done_area):
    files = done_area.files()
    done_area.edit("terrain = true", "terrain = false")
    assert done_area.night("--quiet") == 0
    day = days(done_area)[0]
    item = json.loads((day / "scene.json").read_text(encoding="utf-8"))
    assert "terrain_light" not in item["assets"]
    assert rows(done_area, "--by", "region")[0]["terrain_light_wm2"] in (0, None)
    done_area.edit("terrain = false", "terrain = true")
    assert done_area.night("--quiet") == 0
    assert done_area.files() == files


def test_a_day_of_polar_night_is_zero_light_not_a_gap(area):
    """The same ground carried to 83 N in December: no sun, no light; longwave goes on."""
    scenes = area.items()
    for item in scenes:
        body = json.loads(item.read_text(encoding="utf-8"))
        when = dt.datetime.fromisoformat(body["properties"]["datetime"])
        body["properties"]["datetime"] = when.replace(month=12, day=20).isoformat().replace("+00:00", "Z")
        item.write_text(json.dumps(body), encoding="utf-8")
    code, _, err = area.run("night")
    # the sun stood too low for any albedo at the scene's hour, or the same tile-day holds both scenes: no number is made up
    assert code in (0, 3), err
    for day in days(area):
        light = cells(day / "insolation.tif")
        assert (light[light != GAP] >= 0).all()


def then(files, day, name):
    """Cells of a layer as kept files hold them."""
    path = f"maps/{day.parent.name}/{day.name}/{name}.tif"
    with rasterio.MemoryFile(files[path]) as file, file.open() as dataset:
        return dataset.read(1)


@pytest.mark.parametrize("method", ["c", "scs+c"])
def test_illumination_correction_leaves_snow_and_no_trace_when_taken_back(area, method):
    assert area.night("--quiet") == 0
    plain = area.files()
    area.edit("[albedo]", f'[albedo]\nillumination = "{method}"')
    assert area.night("--quiet") == 0
    changed = 0
    for day in days(area):
        now = cells(day / "albedo.tif")
        before, flags = (then(plain, day, name) for name in ("albedo", "quality"))
        snow = (cells(day / "quality.tif") & flags & 8) > 0
        both = (now != GAP) & (before != GAP)
        # reflectance goes through single precision: a last step
        assert np.abs(now[both & snow].astype(int) - before[both & snow]).max() <= 1
        changed += (now[both] != before[both]).sum()
    assert changed > 100
    area.edit(f'illumination = "{method}"', 'illumination = "none"')
    assert area.night("--quiet") == 0
    assert area.files() == plain


def test_albedo_of_a_day_is_brighter_than_at_the_overpass_near_noon(area):
    """Snow reflects more under a low sun, and the overpass is near noon: Gardner & Sharp (2010), as in methods."""
    assert area.night("--quiet") == 0
    before = {day: (cells(day / "albedo.tif"), cells(day / "albedo_u.tif")) for day in days(area)}
    area.edit("[albedo]", '[albedo]\nday = "sun path"')
    assert area.night("--quiet") == 0
    for day, (then, then_u) in before.items():
        now, snow = cells(day / "albedo.tif"), cells(day / "quality.tif") & 8 > 0
        seen = snow & (now != GAP)
        assert ((now == GAP) == (then == GAP)).all()
        assert 0 < (now[seen] - then[seen]).mean() * 1e-4 < 0.05
        assert (cells(day / "albedo_u.tif")[seen] >= then_u[seen]).all()


def test_a_view_from_the_side_is_brought_to_one_from_above_but_not_over_snow(area):
    assert area.night("--quiet") == 0
    before = {day: (cells(day / "albedo.tif"), cells(day / "quality.tif") & 8 > 0) for day in days(area)}
    area.edit("[albedo]", '[albedo]\nanisotropy = "nadir"')
    code, _, err = area.run("night")
    assert code == 3
    assert "view:off_nadir" in err
    for item in area.items():
        body = json.loads(item.read_text(encoding="utf-8"))
        body["properties"] |= {"view:off_nadir": 15.0, "view:azimuth": 300.0}
        item.write_text(json.dumps(body), encoding="utf-8")
    assert area.night("--quiet") == 0
    seen = 0
    for day, (then_albedo, snow) in before.items():
        now = cells(day / "albedo.tif")
        both = (now != GAP) & (then_albedo != GAP)
        assert (now[both & snow] == then_albedo[both & snow]).all()
        ground = both & ~snow
        if not ground.any():
            continue
        seen += ground.sum()
        change = now[ground].astype(float) - then_albedo[ground]
        assert 20 < np.abs(change).mean() < 400  # a few per cent of a dark ground
    assert seen > 500


def heights(area, tile="FELL-A"):
    return area.folder / "static" / tile / "elevation.tif"


def test_holes_that_the_elevation_does_not_declare_are_holes(done_area):
    day = days(done_area)[0]
    before = cells(day / "insolation.tif")
    with rasterio.open(heights(done_area), "r+") as dataset:
        values = dataset.read(1)
        values[5, 5], values[40:44, 40:44], values[60, 60] = -9999.0, -32768.0, 1e20
        dataset.nodata = None
        dataset.write(values, 1)
    assert done_area.night("--quiet") == 0
    now = cells(day / "insolation.tif")
    for hole in ((5, 5), (41, 41), (60, 60)):
        assert now[hole] == GAP
    both = (now != GAP) & (before != GAP)
    assert both.sum() > 0.5 * (before != GAP).sum()
    # slopes and horizons beside the holes change, the rest of the tile does not
    assert np.abs(now[both].astype(int) - before[both]).mean() < 20
    table = json.loads((done_area.store / "terrain/FELL-A/relief.json").read_text(encoding="utf-8"))
    assert table["low_m"] > 0


def test_elevation_without_a_height_is_refused_though_a_neighbour_overlaps(area):
    with rasterio.open(heights(area), "r+") as dataset:
        dataset.write(np.full(dataset.shape, -9999.0, np.float32), 1)
    code, _, err = area.run("night")
    assert code == 3
    assert "no cell with a height" in err
    assert not list((area.store / "maps").rglob("FELL-A/*/insolation.tif"))
    assert list((area.store / "maps/FELL-B").rglob("insolation.tif"))


@pytest.mark.parametrize("name", ["horizon.tif", "sky_view.tif", "slope.tif"])
def test_damaged_relief_is_made_again(done_area, name):
    files = done_area.files()
    path = done_area.store / "terrain/FELL-B" / name
    path.write_bytes(path.read_bytes()[:-100])
    next((done_area.store / "maps/FELL-B").rglob("insolation.tif")).unlink()
    assert done_area.night("--quiet") == 0
    assert done_area.files() == files


def test_cells_that_are_not_metres_on_the_ground_have_their_true_size():
    from firnlight.core.grid import Grid
    from firnlight.io.elevation import square_cell_m

    assert square_cell_m(Grid("EPSG:32624", 5e5, 5.15e6, 30.0, 30.0, 64, 64), "a") == 30.0
    stretched = square_cell_m(Grid("EPSG:3857", 0.0, 8.4e6, 60.0, 60.0, 64, 64), "b")  # 60 N: half as long on the ground
    assert stretched == pytest.approx(30.0, rel=0.01)
    feet = square_cell_m(Grid("EPSG:2225", 6.5e6, 2.2e6, 100.0, 100.0, 64, 64), "c")
    assert feet == pytest.approx(30.48, rel=0.01)
