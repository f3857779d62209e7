"""Does every kind of bad input get its own clear message, exit code 2 or 3, and leave the store as it was?"""

import json

import numpy as np
import pytest
import rasterio


def edit_item(item, change):
    body = json.loads(item.read_text(encoding="utf-8"))
    change(body)
    item.write_text(json.dumps(body), encoding="utf-8")


def drop_checksum(item, band):
    edit_item(item, lambda body: body["assets"][band].pop("file:checksum"))


def rewrite(path, **changes):
    with rasterio.open(path) as dataset:
        values, profile = dataset.read(), dataset.profile
    profile.update(changes)
    with rasterio.open(path, "w", **profile) as dataset:
        dataset.write(values)


def missing_band(item):
    edit_item(item, lambda body: body["assets"].pop("nir"))


def missing_scale(item):
    edit_item(item, lambda body: body["assets"]["red"]["bands"][0].pop("raster:scale"))


def other_crs(item):
    rewrite(item.parent / "red.tif", crs="EPSG:32633")


def half_cell_shift(item):
    with rasterio.open(item.parent / "red.tif") as dataset:
        moved = dataset.transform @ rasterio.Affine.translation(0.5, 0)
    rewrite(item.parent / "red.tif", transform=moved)


def truncated(item):
    path = item.parent / "red.tif"
    path.write_bytes(path.read_bytes()[: path.stat().st_size * 2 // 3])


def all_nodata(item):
    path = item.parent / "red.tif"
    with rasterio.open(path) as dataset:
        profile, shape = dataset.profile, dataset.shape
    with rasterio.open(path, "w", **profile) as dataset:
        dataset.write(np.zeros(shape, profile["dtype"]), 1)


def not_a_raster(item):
    (item.parent / "red.tif").write_text("<html>404</html>", encoding="utf-8")


def gone(item):
    (item.parent / "red.tif").unlink()


def broken_item(item):
    item.write_text(item.read_text(encoding="utf-8")[:200], encoding="utf-8")


CASES = {
    missing_band: ("nir", "add the band"),
    missing_scale: ("scale", "raster:scale"),
    other_crs: ("CRS", "EPSG:32633"),
    half_cell_shift: ("0.500", "red.tif"),
    truncated: ("red.tif", "deliver the file again"),
    all_nodata: ("no cell with data", "nodata"),
    not_a_raster: ("red.tif", "raster"),
    gone: ("red.tif", "deliver the file"),
    broken_item: (".json", "item"),
}


@pytest.mark.parametrize("spoil", CASES, ids=lambda case: case.__name__)
def test_a_bad_scene_is_refused_by_name_and_the_others_go_on(area, spoil):
    item = area.items()[0]
    if spoil is not missing_band:
        drop_checksum(item, "red")
    spoil(item)
    code, out, err = area.run("night")
    assert code == 3
    assert "3 tile-days made" in out
    for said in CASES[spoil]:
        assert said in err
    assert "Traceback" not in err
    assert not list(area.store.rglob(".*.part.*"))
    files = area.files()
    assert area.run("night")[0] == 3
    assert area.files() == files
    code, out, _ = area.run("status", "--failed")
    assert code == 0
    assert "firnlight night" in out


@pytest.mark.parametrize("spoil", CASES, ids=lambda case: case.__name__)
def test_a_scene_that_goes_bad_later_leaves_the_store_as_it_was(done_area, spoil):
    item = done_area.items()[0]
    if spoil is not missing_band:
        drop_checksum(item, "red")
        assert done_area.night("--quiet") == 0
    files = done_area.files()
    spoil(item)
    assert done_area.night() == 3
    assert done_area.files() == files


@pytest.mark.parametrize("spoil", CASES, ids=lambda case: case.__name__)
def test_check_finds_it_and_writes_nothing(area, spoil):
    item = area.items()[0]
    if spoil is not missing_band:
        drop_checksum(item, "red")
    spoil(item)
    code, out, err = area.run("check")
    assert code == 3
    assert "1 problems" in out
    for said in CASES[spoil][:1]:
        assert said in err
    assert not area.store.exists()


def test_check_of_good_input_says_so(area):
    code, out, _ = area.run("check")
    assert (code, out) == (0, "Checked 4 scenes of 2 tiles: all good. Nothing was written.\n")


def test_an_unknown_key_is_refused_before_anything_is_written(area):
    area.edit("[insolation]", "[insolation]\nsorce = 1")
    code, _, err = area.run("night")
    assert code == 2
    assert "'source'" in err
    assert not area.store.exists()


@pytest.mark.parametrize("name", ["elevation", "land_cover"])
def test_a_static_layer_on_another_grid_is_refused(area, name):
    rewrite(area.folder / f"static/FELL-A/{name}.tif", crs="EPSG:32633")
    code, _, err = area.run("night")
    assert code in (2, 3)
    assert "EPSG:32633" in err
    assert f"{name}.tif" in err


def test_no_scenes_at_all_is_said(area):
    area.edit('items = "', 'items = "nowhere/')
    code, _, err = area.run("night")
    assert code == 2
    assert "scenes.items" in err
    assert not area.store.exists()
