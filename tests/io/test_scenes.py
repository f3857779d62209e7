"""Are scenes found by their items, opened on one grid, and read the same in any windows?"""

import datetime as dt
import shutil
import time
from pathlib import Path

import numpy as np
import pytest
import rasterio
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from firnlight.core.grid import Grid, Window
from firnlight.core.layers import flag_bit
from firnlight.core.tables import load_table
from firnlight.io.bands import SceneReader, content_files, native_block
from firnlight.io.scenes import find_scenes, open_scene
from scene_maker import (
    BANDS,
    CELL,
    CLOUD_BITS,
    COLS,
    CRS,
    LEFT,
    ROWS,
    SCENE_CLASSES,
    TOP,
    band_asset,
    item_body,
    make_scene,
    numbers,
    write_item,
    write_raster,
)

GRID = Grid(CRS, LEFT, TOP, CELL, CELL, ROWS, COLS)
WHOLE = GRID.whole
ETM = Path(__file__).parents[1] / "reference" / "etm_scene" / "etm_clip.tif"


def one_scene(folder, items="."):
    scenes, problems = find_scenes(items, folder)
    assert problems == []
    assert len(scenes) == 1
    return scenes[0]


def opened(folder, bands=BANDS):
    return open_scene(one_scene(folder), bands)


def read(folder, bands=BANDS, window=WHOLE):
    return SceneReader(opened(folder, bands), bands).read(window)


def set_bands(body, **changes):
    """Change what the item says of every band; None takes it out."""
    for name in BANDS:
        body["assets"][name] = band_asset(f"{name}.tif", name, **changes)
    return body


# finding


def test_an_item_becomes_a_scene(tmp_path):
    path = make_scene(tmp_path, item_body(platform="p", version="2.1", created="2031-03-11T00:00:00Z"))
    scene = one_scene(tmp_path)
    assert scene.id == "fell-a-0310"
    assert (scene.tile, scene.sensor, scene.platform) == ("FELL-A", "oli", "p")
    assert scene.datetime == dt.datetime(2031, 3, 10, 14, 20, tzinfo=dt.UTC)
    assert (scene.version, scene.created) == ("2.1", "2031-03-11T00:00:00Z")
    assert scene.grid == GRID
    assert scene.item_path == str(path)
    assert scene.reflectance == "surface"
    green = scene.bands["green"]
    assert (green.scale, green.offset, green.nodata, green.band) == (0.005, -0.1, 0, 1)
    assert content_files(scene) == [str(tmp_path / f"{name}.tif") for name in BANDS]


def test_a_folder_is_searched_to_its_depths_and_other_json_is_passed_over(tmp_path):
    make_scene(tmp_path / "a/b")
    body = item_body()
    body["id"] = "second"
    make_scene(tmp_path / "c", body)
    write_item(tmp_path / "catalog.json", {"type": "Catalog", "stac_version": "1.1.0", "links": []})
    write_item(tmp_path / "numbers.json", [1, 2])
    write_item(tmp_path / ".hidden.part.json", item_body())
    scenes, problems = find_scenes(".", tmp_path)
    assert problems == []
    assert [scene.id for scene in scenes] == ["fell-a-0310", "second"]


@pytest.mark.parametrize("items", ["a/item.json", "a", "*/item.json", "*", "**/*.json"])
def test_a_file_a_folder_and_globs_name_the_same_scene(tmp_path, items):
    make_scene(tmp_path / "a")
    assert one_scene(tmp_path, items).id == "fell-a-0310"


def test_an_item_collection_holds_many_scenes_and_one_bad_one(tmp_path):
    make_scene(tmp_path)
    good, bad = item_body(), item_body(datetime=None)
    bad["id"] = "bad"
    (tmp_path / "item.json").unlink()
    write_item(tmp_path / "all.json", {"type": "FeatureCollection", "features": [good, bad]})
    scenes, problems = find_scenes("all.json", tmp_path)
    assert [scene.id for scene in scenes] == ["fell-a-0310"]
    assert ["datetime" in str(one) for one in problems] == [True]


def test_items_of_stac_1_0_are_read(tmp_path):
    body = item_body(**{"proj:code": None, "proj:epsg": 32624})
    body["stac_version"] = "1.0.0"
    for name in BANDS:
        body["assets"][name] = {
            "href": f"./{name}.tif",
            "eo:bands": [{"name": "B", "common_name": name}],
            "raster:bands": [{"data_type": "uint16", "nodata": 0, "scale": 0.01, "offset": 0}],
        }
    make_scene(tmp_path, body)
    scene = opened(tmp_path)
    assert scene.grid == GRID
    assert (scene.bands["red"].scale, scene.bands["red"].offset) == (0.01, 0)


def test_times_of_other_zones_become_utc(tmp_path):
    make_scene(tmp_path, item_body(datetime="2031-03-10T23:30:00.1234567-02:00"))
    assert one_scene(tmp_path).datetime == dt.datetime(2031, 3, 11, 1, 30, 0, 123456, tzinfo=dt.UTC)


@pytest.mark.parametrize(
    ("told", "kind"),
    [
        ({"processing:level": "L1TP"}, "top of atmosphere"),
        ({"processing:level": "Level-1C"}, "top of atmosphere"),
        ({"processing:level": "L2A"}, "surface"),
        ({"firnlight:reflectance": "top of atmosphere"}, "top of atmosphere"),
        ({"processing:level": "L1", "firnlight:reflectance": "surface"}, "surface"),
    ],
    ids=["L1TP", "L1C", "L2A", "said", "said against level"],
)
def test_the_kind_of_reflectance_is_carried(tmp_path, told, kind):
    make_scene(tmp_path, item_body(**told))
    assert one_scene(tmp_path).reflectance == kind


def test_a_tile_without_a_name_gets_one_from_its_grid(tmp_path):
    make_scene(tmp_path, item_body(**{"grid:code": None}))
    assert one_scene(tmp_path).tile == "EPSG32624_600000_5160000"
    write_item(tmp_path / "item.json", item_body(**{"grid:code": None, "firnlight:tile": "fell_b"}))
    assert one_scene(tmp_path).tile == "fell_b"


def test_pictures_for_people_are_no_bands(tmp_path):
    body = item_body()
    body["assets"]["picture"] = band_asset("https://example.com/p.tif", "red") | {"roles": ["visual"]}
    make_scene(tmp_path, body)
    assert one_scene(tmp_path).bands["red"].path == str(tmp_path / "red.tif")


def test_a_hundred_thousand_items_would_take_seconds(tmp_path):
    collection = {"type": "FeatureCollection", "features": []}
    for n in range(2000):
        body = item_body()
        body["id"] = f"scene {n}"
        body["assets"]["quality"] = CLOUD_BITS
        collection["features"].append(body)
    write_item(tmp_path / "all.json", collection)
    begun = time.process_time()
    scenes, problems = find_scenes("all.json", tmp_path)
    assert (len(scenes), problems) == (2000, [])
    assert time.process_time() - begun < 1.5  # 75 s per 100,000 at worst, far above what was seen
    assert len({id(scene.quality[0].flags) for scene in scenes}) == 1  # one shared table, not 64 kB a scene


# opening and reading


@pytest.mark.parametrize("dtype", ["uint8", "int16", "uint16", "float32"])
def test_numbers_come_as_they_are_stored(tmp_path, dtype):
    cells = {name: numbers(dtype=dtype, seed=n) for n, name in enumerate(BANDS)}
    make_scene(tmp_path, set_bands(item_body(), data_type=dtype), **cells)
    values, nodata, flags = read(tmp_path)
    assert values.dtype == dtype
    np.testing.assert_array_equal(values, np.stack(list(cells.values())))
    np.testing.assert_array_equal(nodata, [0, 0, 0])
    assert not flags.any()


def test_scale_offset_and_nodata_come_from_the_item_before_the_file(tmp_path):
    make_scene(tmp_path)
    write_raster(tmp_path / "red.tif", numbers(), scale=0.5, offset=7.0, nodata=9)
    red = opened(tmp_path).bands["red"]
    assert (red.scale, red.offset, red.nodata) == (0.005, -0.1, 0)
    body = set_bands(item_body(), **{"raster:scale": None, "raster:offset": None, "nodata": None})
    write_item(tmp_path / "item.json", body)
    red = open_scene(one_scene(tmp_path), ("red",)).bands["red"]
    assert (red.scale, red.offset, red.nodata) == (0.5, 7.0, 9)


def test_an_offset_of_zero_beside_a_scale_tag_counts_as_told(tmp_path):
    make_scene(tmp_path, set_bands(item_body(), **{"raster:scale": None, "raster:offset": None}))
    write_raster(tmp_path / "red.tif", numbers(), scale=0.0001, offset=0.0)
    red = open_scene(one_scene(tmp_path), ("red",)).bands["red"]
    assert (red.scale, red.offset) == (0.0001, 0.0)


def test_a_table_may_tell_the_scale_only_for_a_sensor_that_never_changed(tmp_path, monkeypatch):
    make_scene(tmp_path, set_bands(item_body(), **{"raster:scale": None, "raster:offset": None}))
    row = load_table("sensors").row("oli")
    monkeypatch.setitem(row, "fixed_for_all_versions", True)
    monkeypatch.setitem(row, "scale", 0.002)
    monkeypatch.setitem(row, "offset", 0.01)
    red = opened(tmp_path).bands["red"]
    assert (red.scale, red.offset) == (0.002, 0.01)


def test_nodata_may_come_from_the_quality_alone(tmp_path):
    body = set_bands(item_body(), nodata=None)
    body["assets"]["quality"] = CLOUD_BITS
    make_scene(tmp_path, body)
    write_raster(tmp_path / "quality.tif", numbers(dtype="uint8"))
    assert opened(tmp_path).bands["red"].nodata is None
    values, nodata, _ = read(tmp_path)
    assert values.dtype == np.uint16
    assert np.isnan(nodata).all()


def test_sidecar_files_change_nothing(tmp_path):
    make_scene(tmp_path, set_bands(item_body(), nodata=None))
    for name in BANDS:
        write_raster(tmp_path / f"{name}.tif", numbers(), nodata=3)
        (tmp_path / f"{name}.tif.aux.xml").write_text(
            '<PAMDataset><PAMRasterBand band="1"><NoDataValue>7</NoDataValue></PAMRasterBand></PAMDataset>'
        )
    assert opened(tmp_path).bands["red"].nodata == 3


def test_one_file_may_hold_all_bands(tmp_path):
    body = item_body()
    about = [band_asset("", name)["bands"][0] for name in BANDS]
    body["assets"] = {"all": {"href": "all.tif", "bands": about}}
    cells = np.stack([numbers(seed=n) for n in range(3)])
    write_raster(tmp_path / "all.tif", cells, tiled=True, blockxsize=16, blockysize=16)
    write_item(tmp_path / "item.json", body)
    values, _, _ = read(tmp_path, ("nir", "green"))
    np.testing.assert_array_equal(values, cells[[2, 0]])
    assert native_block(opened(tmp_path)) == (16, 16)
    assert content_files(one_scene(tmp_path)) == [str(tmp_path / "all.tif")]


def test_a_finer_band_is_averaged_and_an_empty_cell_empties_the_mean(tmp_path):
    fine = numbers(ROWS * 2, COLS * 2)
    fine[0, 1] = 0
    make_scene(tmp_path)
    write_raster(tmp_path / "red.tif", fine, cell=CELL / 2)
    values, nodata, _ = read(tmp_path)
    expected = fine.reshape(ROWS, 2, COLS, 2).mean(axis=(1, 3)).astype(np.float32)
    expected[0, 0] = np.nan
    assert values.dtype == np.float32
    np.testing.assert_array_equal(values[1], expected)
    assert np.isnan(nodata).all()


def test_a_coarser_band_is_repeated(tmp_path):
    coarse = numbers(ROWS // 2, COLS // 2)
    coarse[1, 1] = 0
    make_scene(tmp_path)
    write_raster(tmp_path / "red.tif", coarse, cell=CELL * 2)
    values, _, _ = read(tmp_path)
    expected = coarse.repeat(2, 0).repeat(2, 1).astype(np.float32)
    expected[expected == 0] = np.nan
    np.testing.assert_array_equal(values[1], expected)
    np.testing.assert_array_equal(values[0], numbers(seed=0))


def test_mixed_types_come_as_float32_with_nan_for_empty(tmp_path):
    red = numbers(dtype="int16")
    red[2, 3] = -5
    body = item_body()
    body["assets"]["red"] = band_asset("red.tif", "red", data_type="int16", nodata=-5)
    make_scene(tmp_path, body, red=red)
    values, nodata, _ = read(tmp_path)
    assert values.dtype == np.float32
    assert np.isnan(values[1, 2, 3])
    assert np.isnan(nodata).all()


WINDOWS = st.tuples(st.integers(0, ROWS - 1), st.integers(0, COLS - 1), st.integers(1, ROWS), st.integers(1, COLS)).map(
    lambda w: Window(w[0], w[1], min(w[2], ROWS - w[0]), min(w[3], COLS - w[1]))
)


@pytest.fixture(scope="module")
def mixed_scene(tmp_path_factory):
    """Red three times finer, nir twice coarser, quality twice finer and six times coarser."""
    folder = tmp_path_factory.mktemp("mixed")
    body = set_bands(item_body(), data_type="float32")
    body["assets"]["quality"] = CLOUD_BITS
    body["assets"]["classes"] = SCENE_CLASSES
    noise = np.random.default_rng(4)
    fine, coarse = noise.random((ROWS * 3, COLS * 3)), noise.random((ROWS // 2, COLS // 2))
    make_scene(folder, body, green=noise.random((ROWS, COLS)).astype("float32"))
    write_raster(folder / "red.tif", fine.astype("float32"), cell=CELL / 3)
    write_raster(folder / "nir.tif", coarse.astype("float32"), cell=CELL * 2)
    write_raster(folder / "quality.tif", noise.integers(0, 64, (ROWS * 2, COLS * 2)).astype("uint8"), cell=CELL / 2)
    write_raster(folder / "classes.tif", noise.integers(0, 12, (ROWS // 6, COLS // 6)).astype("uint8"), cell=CELL * 6)
    reader = SceneReader(opened(folder), BANDS)
    yield reader, reader.read(WHOLE)
    reader.close()


@given(WINDOWS)
@settings(deadline=None, max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_no_cutting_into_windows_changes_a_bit(mixed_scene, window):
    reader, (values, _, flags) = mixed_scene
    part, _, part_flags = reader.read(window)
    rows, cols = window.slices
    assert part.tobytes() == values[:, rows, cols].tobytes()
    assert part_flags.tobytes() == flags[rows, cols].tobytes()


def test_the_flags_of_finer_and_several_quality_rasters_are_joined(mixed_scene):
    reader, (_, _, flags) = mixed_scene
    folder = Path(reader._scene.item_path).parent
    with rasterio.open(folder / "quality.tif") as dataset:
        fine = dataset.read(1)
    with rasterio.open(folder / "classes.tif") as dataset:
        coarse = dataset.read(1).repeat(6, 0).repeat(6, 1)
    shadow = ((fine & 2) != 0).reshape(ROWS, 2, COLS, 2).any(axis=(1, 3)) | np.isin(coarse, (2, 3))
    np.testing.assert_array_equal((flags & flag_bit("shadow")) != 0, shadow)


# a real raster


def test_a_real_scene_of_six_bands_opens_and_is_ordered_as_nature_orders_it(tmp_path):
    shutil.copy(ETM, tmp_path)
    with rasterio.open(ETM) as dataset:
        properties = {
            "instruments": ["etm"],
            "proj:code": f"EPSG:{dataset.crs.to_epsg()}",
            "proj:shape": list(dataset.shape),
            "proj:transform": list(dataset.transform)[:6],
        }
        cells = dataset.read()
    names = ("blue", "green", "red", "nir", "swir16", "swir22")
    about = {"data_type": "uint8", "raster:scale": 1 / 255, "raster:offset": 0.0, "nodata": 0}
    body = item_body(**properties)
    body["assets"] = {"all": {"href": ETM.name, "bands": [band_asset("", name, **about)["bands"][0] for name in names]}}
    write_item(tmp_path / "item.json", body)
    values, _, _ = read(tmp_path, names, Window(10, 20, 140, 140))
    np.testing.assert_array_equal(values, cells[:, 10:150, 20:160])
    sea = values[3] < 20  # water is darker the longer the wave
    assert sea.sum() > 100
    assert np.median(values[0][sea]) > np.median(values[2][sea]) > np.median(values[4][sea])
