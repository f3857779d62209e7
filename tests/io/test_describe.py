"""Do plain folders become scenes that open, with the scaling their metadata tells and nothing guessed?"""

import datetime as dt
import hashlib
import json
import math
import shutil
from pathlib import Path

import numpy as np
import pystac
import pytest
import rasterio

from firnlight.core.errors import InputProblem
from firnlight.core.layers import flag_bit
from firnlight.io.bands import SceneReader
from firnlight.io.describe import describe
from firnlight.io.scenes import find_scenes, open_scene
from scene_maker import CELL, COLS, CRS, ROWS, numbers, product_xml, write_raster

CLIP = Path(__file__).parents[1] / "reference" / "landsat8_clip"
CLIP_PATTERN = "*_{tile}_{date}_*_{band}.TIF"
OLI_BANDS = ("blue", "green", "red", "nir", "swir16", "swir22")
TOP = "top of atmosphere"


@pytest.fixture
def clip(tmp_path):
    shutil.copytree(CLIP, tmp_path / "clip")
    return tmp_path / "clip"


@pytest.fixture
def plain(tmp_path):
    """Two dates of one tile, without any metadata."""
    for date in ("20310310", "20310326"):
        for n, band in enumerate(("B3", "B4", "B5")):
            write_raster(tmp_path / "plain" / f"fell_a_{date}_{band}.tif", numbers(seed=n), nodata=0)
    return tmp_path / "plain"


PLAIN = {"pattern": "{tile}_{date}_{band}.tif", "sensor": "oli"}
SAID = {"scale": 0.0001, "offset": 0.0, "time": "14:20:00"}


def opened(item, bands):
    (scene,), problems = find_scenes(str(item), Path("/"))
    assert problems == []
    return open_scene(scene, bands)


def properties(item):
    return json.loads(item.read_text(encoding="utf-8"))["properties"]


# a real Level-1 scene


def test_the_sun_and_time_are_those_of_the_metadata_text(clip):
    """SUN_ELEVATION = 58.99675180, SUN_AZIMUTH = 146.98479703, SCENE_CENTER_TIME = 10:17:42.1661960Z."""
    (item,) = describe(clip, "oli", CLIP_PATTERN, reflectance=TOP)
    told = properties(item)
    assert told["view:sun_elevation"] == 58.99675180
    assert told["view:sun_azimuth"] == 146.98479703
    assert told["datetime"] == "2013-07-07T10:17:42.166Z"
    assert (told["platform"], told["instruments"], told["version"]) == ("landsat-8", ["oli"], "2.7.0")
    assert told["created"] == "2017-05-03T12:18:52Z"
    scene = opened(item, OLI_BANDS)
    assert scene.sun_elevation_deg == 58.99675180
    assert scene.reflectance == TOP
    assert (scene.tile, scene.id) == ("195025", "195025_20130707_oli")
    assert set(scene.bands) == set(OLI_BANDS)


def test_reflectance_is_that_of_the_metadata_over_the_sine_of_the_sun(clip):
    """Half of the clip is summer crops and forest: dark in the visible, bright in the near infrared."""
    (item,) = describe(clip, "oli", CLIP_PATTERN, reflectance=TOP)
    scene = opened(item, OLI_BANDS)
    values, _, flags = SceneReader(scene, OLI_BANDS).read(scene.grid.whole)
    with rasterio.open(next(clip.glob("*_B5.TIF"))) as dataset:
        expected = (2.0e-05 * dataset.read(1) - 0.1) / math.sin(math.radians(58.99675180))
    scales = np.array([scene.bands[name].scale for name in OLI_BANDS])[:, None, None]
    offsets = np.array([scene.bands[name].offset for name in OLI_BANDS])[:, None, None]
    reflectance = dict(zip(OLI_BANDS, values * scales + offsets, strict=True))
    np.testing.assert_allclose(reflectance["nir"], expected, rtol=1e-12)
    for one in reflectance.values():
        assert 0.0 < one.min() < one.max() < 0.6
    assert np.median(reflectance["nir"]) > 2 * np.median(reflectance["red"])
    assert np.median(reflectance["blue"]) > np.median(reflectance["red"])  # the air scatters blue light
    assert not flags.any()  # quality 2720: low confidence of cloud, shadow, snow and cirrus


def test_top_of_atmosphere_is_never_taken_for_surface_reflectance(clip):
    with pytest.raises(InputProblem, match=r"Level-1.*surface") as caught:
        describe(clip, "oli", CLIP_PATTERN)
    assert "not corrected for" in str(caught.value)
    assert not list(clip.rglob("*.json"))


def test_an_item_is_a_stac_item_with_checksums(clip):
    (item,) = describe(clip, "oli", CLIP_PATTERN, reflectance=TOP)
    body = json.loads(item.read_text(encoding="utf-8"))
    assert pystac.Item.from_dict(body).id == body["id"]
    for asset in body["assets"].values():
        data = (item.parent / asset["href"]).read_bytes()
        assert asset["file:checksum"] == "1220" + hashlib.sha256(data).hexdigest()
    ring = np.array(body["geometry"]["coordinates"][0])
    assert (body["bbox"][:2], body["bbox"][2:]) == (ring.min(axis=0).tolist(), ring.max(axis=0).tolist())
    x, y = ring[:-1, 0], ring[:-1, 1]
    assert (x * np.roll(y, -1) - y * np.roll(x, -1)).sum() > 0  # counter-clockwise
    assert 8.7 < x.mean() < 8.8  # the scene's corners lie at 7.4 to 10.8 E, 49.2 to 51.3 N
    assert 50.7 < y.mean() < 50.9


def test_the_same_folder_gives_the_same_bytes_and_is_not_written_twice(clip):
    (item,) = describe(clip, "oli", CLIP_PATTERN, reflectance=TOP)
    text, when = item.read_bytes(), item.stat().st_mtime_ns
    assert describe(clip, "oli", CLIP_PATTERN, reflectance=TOP) == [item]
    assert item.stat().st_mtime_ns == when
    item.unlink()
    describe(clip, "oli", CLIP_PATTERN, reflectance=TOP)
    assert item.read_bytes() == text


def test_items_in_another_folder_lead_back_to_the_rasters(clip, tmp_path):
    (item,) = describe(clip, "oli", CLIP_PATTERN, out=tmp_path / "items", reflectance=TOP)
    assert item.parent == tmp_path / "items"
    assert "../clip/" in item.read_text(encoding="utf-8")
    assert opened(item, OLI_BANDS).bands["red"].path.startswith(str(clip))


def edit(folder, old, new):
    text = next(folder.glob("*_MTL.txt"))
    was = text.read_text(encoding="utf-8")
    assert old in was
    text.write_text(was.replace(old, new), encoding="utf-8")


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("SUN_ELEVATION = 58.99675180", "SUN_ELEVATION = -3.1", "sun above the horizon"),
        ("SUN_ELEVATION = 58.99675180", "SUN_ELEVATION = high", "a number"),
        ("SUN_ELEVATION = ", "SUN_HEIGHT = ", "SUN_ELEVATION"),
        ("DATE_ACQUIRED = 2013-07-07", "DATE_ACQUIRED = 2013-07-08", "2013-07-08"),
        ('SENSOR_ID = "OLI_TIRS"', 'SENSOR_ID = "ETM"', "--sensor oli"),
        ("END_GROUP = PRODUCT_METADATA", "END_GROUP = OTHER", "line 66"),
        ("    STATION_ID = ", "    STATION_ID ", "line 9"),
        ("REFLECTANCE_MULT_BAND_4 = 2.0000E-05", "", "scale"),
        ("END_GROUP = L1_METADATA_FILE", "", "inside a group"),
    ],
    ids=[
        "night",
        "no number",
        "no sun",
        "other day",
        "other sensor",
        "group",
        "line",
        "no scale",
        "cut short",
    ],
)
def test_a_damaged_or_wrong_metadata_text_is_refused(clip, old, new, said):
    edit(clip, old, new)
    with pytest.raises(InputProblem) as caught:
        describe(clip, "oli", CLIP_PATTERN, reflectance=TOP)
    assert said in str(caught.value)
    assert not list(clip.rglob("*.json"))


def test_what_contradicts_the_metadata_is_refused(clip):
    with pytest.raises(InputProblem, match="leave out --scale"):
        describe(clip, "oli", CLIP_PATTERN, reflectance=TOP, scale=0.0001)


LEVEL_2 = """GROUP = LANDSAT_METADATA_FILE
  GROUP = PRODUCT_CONTENTS
    PROCESSING_LEVEL = "L2SP"
    COLLECTION_NUMBER = 02
  END_GROUP = PRODUCT_CONTENTS
  GROUP = IMAGE_ATTRIBUTES
    SPACECRAFT_ID = "LANDSAT_9"
    SENSOR_ID = "OLI_TIRS"
    DATE_ACQUIRED = 2031-03-10
    SCENE_CENTER_TIME = "14:20:01.5Z"
    SUN_ELEVATION = 31.5
  END_GROUP = IMAGE_ATTRIBUTES
  GROUP = LEVEL2_PROCESSING_RECORD
    PROCESSING_SOFTWARE_VERSION = "LPGS_16.3.0"
    DATE_PRODUCT_GENERATED = 2031-03-13T05:00:00Z
  END_GROUP = LEVEL2_PROCESSING_RECORD
  GROUP = LEVEL2_SURFACE_REFLECTANCE_PARAMETERS
    REFLECTANCE_MULT_BAND_3 = 2.75e-05
    REFLECTANCE_ADD_BAND_3 = -0.2
  END_GROUP = LEVEL2_SURFACE_REFLECTANCE_PARAMETERS
  GROUP = LEVEL1_PROCESSING_RECORD
    PROCESSING_LEVEL = "L1TP"
    PROCESSING_SOFTWARE_VERSION = "LPGS_16.2.0"
  END_GROUP = LEVEL1_PROCESSING_RECORD
  GROUP = LEVEL1_RADIOMETRIC_RESCALING
    REFLECTANCE_MULT_BAND_3 = 2.0E-05
    REFLECTANCE_ADD_BAND_3 = -0.1
  END_GROUP = LEVEL1_RADIOMETRIC_RESCALING
END_GROUP = LANDSAT_METADATA_FILE
END
"""


def test_a_level_2_text_scales_by_its_own_group_without_the_sun(tmp_path):
    """Scale 0.0000275, offset -0.2: Collection 2 Level-2 (product guide, from memory); the rest invented."""
    write_raster(tmp_path / "LC09_L2SP_001002_20310310_20310313_02_T1_SR_B3.TIF", numbers(), nodata=0)
    cells = np.zeros((ROWS, COLS), np.uint16)
    cells[0, :7] = [1, 1 << 3, 1 << 4, 1 << 5, 1 << 6, (1 << 1) | (1 << 6), 2 << 8]
    write_raster(tmp_path / "LC09_L2SP_001002_20310310_20310313_02_T1_QA_PIXEL.TIF", cells, nodata=1)
    (tmp_path / "LC09_L2SP_001002_20310310_20310313_02_T1_MTL.txt").write_text(LEVEL_2, encoding="utf-8")
    (item,) = describe(tmp_path, "oli", CLIP_PATTERN)
    scene = opened(item, ("green",))
    assert (scene.bands["green"].scale, scene.bands["green"].offset) == (2.75e-05, -0.2)
    assert (scene.version, scene.reflectance) == ("16.3.0", "surface")
    assert scene.datetime == dt.datetime(2031, 3, 10, 14, 20, 1, 500000, tzinfo=dt.UTC)
    flags = SceneReader(scene, ("green",)).read(scene.grid.whole)[2]
    names = ("missing", "cloud", "shadow", "snow")
    assert flags[0, :7].tolist() == [*(flag_bit(name) for name in names), 0, flag_bit("cloud"), 0]
    with pytest.raises(InputProblem, match="Level-2, surface"):
        describe(tmp_path, "oli", CLIP_PATTERN, reflectance=TOP)


# XML texts


TILE_XML = """<n1:Level-2A_Tile_ID xmlns:n1="https://example.com/tile.xsd">
<SENSING_TIME metadataLevel="Standard">2031-03-10T14:25:10.5Z</SENSING_TIME>
<Mean_Sun_Angle><ZENITH_ANGLE unit="deg">50.5</ZENITH_ANGLE>
<AZIMUTH_ANGLE unit="deg">160.25</AZIMUTH_ANGLE></Mean_Sun_Angle>
</n1:Level-2A_Tile_ID>"""


@pytest.fixture
def msi(tmp_path):
    """A product folder: 20 m bands, one 10 m band, classes, and both texts above them."""
    for band in ("B03", "B8A", "B11"):
        write_raster(tmp_path / "p/R20m" / f"T01ABC_20310310T142031_{band}_20m.tif", numbers())
    write_raster(tmp_path / "p/R10m" / "T01ABC_20310310T142031_B04_10m.tif", numbers(ROWS * 2, COLS * 2), cell=CELL / 2)
    cells = np.full((ROWS, COLS), 11, np.uint8)
    cells[0, 0] = 9
    write_raster(tmp_path / "p/R20m" / "T01ABC_20310310T142031_SCL_20m.tif", cells)
    (tmp_path / "p/MTD_MSIL2A.xml").write_text(product_xml(), encoding="utf-8")
    (tmp_path / "p/MTD_TL.xml").write_text(TILE_XML, encoding="utf-8")
    return tmp_path


MSI_PATTERN = "{tile}_{date}_{band}_*m.tif"


def test_offsets_of_each_band_are_read_and_never_guessed_from_the_date(msi):
    (item,) = describe(msi, "msi", MSI_PATTERN)
    scene = opened(item, ("green", "red", "nir08", "swir16"))
    offsets = {name: scene.bands[name].offset for name in ("green", "red", "nir08", "swir16")}
    assert offsets == {"green": -0.1002, "red": -0.1003, "nir08": -0.1008, "swir16": -0.1011}
    assert {scene.bands[name].scale for name in offsets} == {0.0001}
    assert {scene.bands[name].nodata for name in offsets} == {0}
    assert scene.bands["red"].ratio == 2
    assert scene.grid.dx == CELL
    assert scene.sun_elevation_deg == 39.5
    assert (scene.platform, scene.version, scene.tile) == ("sentinel-2b", "05.10", "T01ABC")
    flags = SceneReader(scene, ("green",)).read(scene.grid.whole)[2]
    assert flags[0, :2].tolist() == [flag_bit("cloud"), flag_bit("snow")]


# plain folders


def test_every_date_becomes_an_item(plain):
    items = describe(plain, **PLAIN, **SAID)
    assert [item.name for item in items] == ["fell_a_20310310_oli.json", "fell_a_20310326_oli.json"]
    scenes, problems = find_scenes(".", plain)
    assert problems == []
    assert [(scene.tile, scene.datetime.isoformat()) for scene in scenes] == [
        ("fell_a", "2031-03-10T14:20:00+00:00"),
        ("fell_a", "2031-03-26T14:20:00+00:00"),
    ]
    scene = open_scene(scenes[0], ("green", "red", "nir"))
    assert (scene.bands["nir"].scale, scene.bands["nir"].nodata, scene.grid.crs) == (0.0001, 0, CRS)


@pytest.mark.parametrize("word", ["scale", "offset", "time"])
def test_what_nothing_tells_must_be_said(plain, word):
    with pytest.raises(InputProblem, match=f"give --{word}"):
        describe(plain, **PLAIN, **{key: value for key, value in SAID.items() if key != word})
    assert not list(plain.glob("*.json"))


def test_tags_of_the_file_tell_the_scale(tmp_path):
    write_raster(tmp_path / "a_20310310_red.tif", numbers(), scale=0.002, offset=-0.05, nodata=0)
    (item,) = describe(tmp_path, **PLAIN, time="10:00")
    red = opened(item, ("red",)).bands["red"]
    assert (red.scale, red.offset) == (0.002, -0.05)
    with pytest.raises(InputProblem, match="leave out --offset"):
        describe(tmp_path, **PLAIN, time="10:00", offset=0.0)


@pytest.mark.parametrize(
    ("name", "pattern", "day"),
    [
        ("a_2031-03-10_4.tif", "{tile}_{date}_{band}.tif", (3, 10, 12, 0)),
        ("a_20310310T091500_b04.tif", "{tile}_{date}_{band}.tif", (3, 10, 9, 15)),
        ("x.red.2031069.tif", "*.{band}.{date}.tif", (3, 10, 12, 0)),
        ("fell-b/2031-03-10/SR_B4.TIF", "{tile}/{date}/{band}.TIF", (3, 10, 12, 0)),
        ("20310310/a_20310310_RED.tif", "{date}/a_{date}_{band}.tif", (3, 10, 12, 0)),
    ],
    ids=["ISO", "with time", "day of year", "folders", "date twice"],
)
def test_names_of_many_forms(tmp_path, name, pattern, day):
    write_raster(tmp_path / name, numbers(), nodata=0)
    (item,) = describe(tmp_path, "oli", pattern, scale=0.01, offset=0.0, time="12:00")
    scene = opened(item, ("red",))
    assert scene.datetime == dt.datetime(2031, *day, tzinfo=dt.UTC)


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"pattern": "{tile}_{day}_{band}.tif"}, "{day}"),
        ({"pattern": "{tile}_{band}.tif"}, "{date}"),
        ({"pattern": "x{tile}_{date}_{band}.tif"}, "fell_a_20310310_B3.tif"),
        ({"sensor": "camera"}, "camera"),
        ({"reflectance": "maybe"}, "maybe"),
        ({"time": "25 o'clock"}, "HH:MM:SS"),
    ],
    ids=["unknown place", "no date", "nothing fits", "unknown sensor", "kind", "time"],
)
def test_wrong_use_is_said(plain, change, said):
    with pytest.raises(InputProblem, match=said):
        describe(plain, **(PLAIN | SAID | change))


def test_a_band_twice_a_day_that_is_none_and_a_missing_folder_are_refused(plain):
    shutil.copytree(plain, plain / "copy")
    with pytest.raises(InputProblem, match="second file"):
        describe(plain, **PLAIN, **SAID)
    shutil.rmtree(plain / "copy")
    (plain / "fell_a_20311340_B3.tif").write_bytes(b"")
    with pytest.raises(InputProblem, match="20311340"):
        describe(plain, **PLAIN, **SAID)
    with pytest.raises(InputProblem, match="no such folder"):
        describe(plain / "nowhere", **PLAIN, **SAID)


def test_a_band_on_another_grid_is_refused_before_anything_is_written(plain):
    write_raster(plain / "fell_a_20310326_B4.tif", numbers(), left=600007.0, nodata=0)
    with pytest.raises(InputProblem, match=r"fell_a_20310326_B4\.tif.*shifted"):
        describe(plain, **PLAIN, **SAID)
    assert not list(plain.glob("*.json"))


def test_two_texts_in_one_folder_are_told_apart_or_refused(clip):
    text = next(clip.glob("*_MTL.txt"))
    other = text.read_text(encoding="utf-8").replace("2013-07-07", "2013-07-23")
    (clip / "LC08_L1TP_195025_20130723_20170503_01_T1_MTL.txt").write_text(other, encoding="utf-8")
    (item,) = describe(clip, "oli", CLIP_PATTERN, reflectance=TOP)
    assert properties(item)["datetime"].startswith("2013-07-07")
    text.rename(clip / "one_MTL.txt")
    (clip / "LC08_L1TP_195025_20130723_20170503_01_T1_MTL.txt").rename(clip / "two_MTL.txt")
    assert describe(clip, "oli", CLIP_PATTERN, reflectance=TOP) == [item]
    shutil.copy(clip / "one_MTL.txt", clip / "three_MTL.txt")
    with pytest.raises(InputProblem, match="one a scene"):
        describe(clip, "oli", CLIP_PATTERN, reflectance=TOP)
