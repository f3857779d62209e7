"""Is every way in which a scene can be wrong refused by name and with a cure, while the others go on?"""

import json
import os
import pickle
import stat

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Window
from firnlight.io.bands import SceneReader
from firnlight.io.scene_items import scene_of
from firnlight.io.scenes import find_scenes, open_scene
from scene_maker import (
    BANDS,
    CELL,
    COLS,
    LEFT,
    ROWS,
    band_asset,
    item_body,
    make_scene,
    numbers,
    write_item,
    write_raster,
)

# items


def spoiled(**properties):
    return lambda body: body["properties"].update(properties)


def without(*keys):
    def take(body):
        for key in keys:
            body["properties"].pop(key)

    return take


def href(text):
    return lambda body: body["assets"]["red"].update(href=text)


def red(**facts):
    return lambda body: body["assets"]["red"]["bands"][0].update(facts)


def quality(**facts):
    return lambda body: body["assets"].update(quality={"href": "quality.tif", **facts})


def twice(body):
    body["assets"]["again"] = band_asset("again.tif", "red")


def classes(*names, **band):
    listed = [{"value": n, "name": name} for n, name in enumerate(names)]
    return quality(bands=[{**band, "classification:classes": listed}])


BAD_ITEMS = {
    "no datetime": (without("datetime"), "datetime"),
    "null datetime": (spoiled(datetime=None), "datetime"),
    "datetime without zone": (spoiled(datetime="2031-03-10T14:20:00"), "UTC"),
    "nonsense datetime": (spoiled(datetime="yesterday"), "yesterday"),
    "no instruments": (without("instruments"), "instruments"),
    "unknown instrument": (spoiled(instruments=["lamp"]), "lamp"),
    "two instruments": (spoiled(instruments=["oli", "msi"]), "one instrument"),
    "no CRS": (without("proj:code"), "proj:code"),
    "unknown CRS": (spoiled(**{"proj:code": "EPSG:999999"}), "EPSG:999999"),
    "CRS of words": (spoiled(**{"proj:code": "+proj=longlat"}), "proj:code"),
    "no transform": (without("proj:transform"), "proj:transform"),
    "short transform": (spoiled(**{"proj:transform": [30, 0, 1]}), "proj:transform"),
    "rotated": (spoiled(**{"proj:transform": [30, 1, LEFT, 1, -30, 0]}), "rotation"),
    "south up": (spoiled(**{"proj:transform": [30, 0, LEFT, 0, 30, 0]}), "north-up"),
    "no shape": (without("proj:shape"), "proj:shape"),
    "shape of text": (spoiled(**{"proj:shape": ["12", "18"]}), "proj:shape"),
    "empty shape": (spoiled(**{"proj:shape": [0, 18]}), "proj:shape"),
    "tile with slashes": (spoiled(**{"grid:code": "a/b"}), "a/b"),
    "tile above": (spoiled(**{"grid:code": ".."}), "plain name"),
    "tile with dots": (spoiled(**{"grid:code": "a..b"}), "plain name"),
    "tile of nothing": (spoiled(**{"grid:code": ""}), "plain name"),
    "kind of reflectance": (spoiled(**{"firnlight:reflectance": "maybe"}), "reflectance"),
    "sun elevation": (spoiled(**{"view:sun_elevation": 95}), "sun_elevation"),
    "web address": (href("https://example.com/red.tif"), "copy the file"),
    "object store": (href("s3://bucket/red.tif"), "copy the file"),
    "file address": (href("file:///red.tif"), "copy the file"),
    "virtual file": (href("/vsicurl/https://example.com/red.tif"), "local file"),
    "virtual file with slashes": (href("//vsizip/a.zip/red.tif"), "local file"),
    "subdataset": (href("HDF5:a.h5://red"), "local file"),
    "href with an empty byte": (href("red\0.tif"), "local file"),
    "empty href": (href(""), "local file"),
    "href without end": (href("x" * 5000), "local file"),
    "scale of zero": (red(**{"raster:scale": 0}), "raster:scale"),
    "scale of text": (red(**{"raster:scale": "0.0001"}), "raster:scale"),
    "endless offset": (red(**{"raster:offset": float("inf")}), "raster:offset"),
    "endless nodata": (red(nodata="inf"), "nodata"),
    "one band twice": (twice, "again"),
    "unknown class": (classes("clear", "wobbly"), "wobbly"),
    "quality of 32 bits": (classes("clear", data_type="uint32"), "16 bits"),
    "class beyond the type": (
        quality(bands=[{"data_type": "uint8", "classification:classes": [{"value": 300, "name": "cloud"}]}]),
        "300",
    ),
    "nodata beyond the type": (classes("clear", data_type="uint8", nodata=999), "999"),
    "bit beyond the type": (
        quality(**{"classification:bitfields": [{"name": "cloud", "offset": 20, "length": 1, "classes": []}]}),
        "16 bits",
    ),
    "no assets": (lambda body: body.pop("assets"), "assets"),
    "old version": (lambda body: body.update(stac_version="0.9.0"), "stac_version"),
    "no id": (lambda body: body.update(id=""), "id"),
    "another type": (lambda body: body.update(type="feature"), "Feature"),
}


@pytest.mark.parametrize("case", BAD_ITEMS)
def test_a_bad_item_is_a_problem_and_the_others_go_on(tmp_path, case):
    spoil, said = BAD_ITEMS[case]
    body = item_body()
    body["id"] = "bad"
    spoil(body)
    bad = write_item(tmp_path / "a/bad.json", body)
    make_scene(tmp_path / "b")
    scenes, problems = find_scenes(".", tmp_path)
    assert [scene.id for scene in scenes] == ["fell-a-0310"]
    assert len(problems) == 1
    assert problems[0].where == str(bad)
    assert said in str(problems[0])
    travelled = pickle.loads(pickle.dumps(problems[0]))
    assert str(travelled) == str(problems[0])


@pytest.mark.parametrize(
    "text",
    [b"", b"{", b'{"type": "Feature", ', b"\xff\xfe\x00", b"[" * 200_000, b"<html>404</html>"],
    ids=["empty", "brace", "cut short", "not text", "deep", "html"],
)
def test_json_that_is_none_is_a_problem(tmp_path, text):
    make_scene(tmp_path / "b")
    (tmp_path / "a.json").write_bytes(text)
    scenes, problems = find_scenes(".", tmp_path)
    assert len(scenes) == 1
    assert [problem.where for problem in problems] == [str(tmp_path / "a.json")]
    assert "item" in str(problems[0])


def test_a_pipe_and_a_dangling_link_are_never_waited_for(tmp_path):
    make_scene(tmp_path / "b")
    os.mkfifo(tmp_path / "pipe.json")
    (tmp_path / "link.json").symlink_to(tmp_path / "gone.json")
    scenes, problems = find_scenes(".", tmp_path)
    assert len(scenes) == 1
    assert sorted(os.path.basename(problem.where) for problem in problems) == ["link.json", "pipe.json"]


def test_a_file_named_by_the_user_must_be_an_item(tmp_path):
    write_item(tmp_path / "catalog.json", {"type": "Catalog", "stac_version": "1.1.0"})
    scenes, problems = find_scenes("catalog.json", tmp_path)
    assert scenes == []
    assert "item collection" in str(problems[0])


@pytest.mark.parametrize("items", ["nowhere", "no*where", "a\0b"])
def test_nothing_there_is_neither_scene_nor_problem(tmp_path, items):
    assert find_scenes(items, tmp_path) == ([], [])


JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=5), inner, max_size=3),
    max_leaves=6,
)


@given(st.data())
@settings(deadline=None, max_examples=200)
def test_any_value_anywhere_in_an_item_gives_a_scene_or_a_problem(data):
    body = item_body()
    at = body
    for _ in range(data.draw(st.integers(0, 5))):
        inner = [
            key for key in (at if isinstance(at, dict) else range(len(at))) if isinstance(at[key], dict | list) and at[key]
        ]
        if not inner:
            break
        at = at[data.draw(st.sampled_from(inner))]
    key = data.draw(st.sampled_from(sorted(at) if isinstance(at, dict) else range(len(at))))
    at[key] = data.draw(JSON)
    try:
        scene = scene_of(body, "/items/one.json")
    except InputProblem as caught:
        scene, problem = None, caught
    if scene is None:
        assert problem.where == "/items/one.json"
        assert problem.fix
    else:
        assert scene.datetime.utcoffset().total_seconds() == 0
        assert "/" not in scene.tile
        assert ".." not in scene.tile


# files


def problem_of(folder, bands=BANDS):
    (scene,), problems = find_scenes("item.json", folder)
    assert problems == []
    with pytest.raises(InputProblem) as caught:
        open_scene(scene, bands)
    return caught.value


def file_problem(tmp_path, spoil, *said):
    """Spoil red.tif of a good scene, and look whether the problem names the file and says what is wrong."""
    make_scene(tmp_path)
    path = tmp_path / "red.tif"
    spoil(path)
    problem = problem_of(tmp_path)
    for words in ("red.tif", *said):
        assert words in str(problem)
    return problem


def to_pipe(path):
    path.unlink()
    os.mkfifo(path)


def to_folder(path):
    path.unlink()
    path.mkdir()


def to_virtual(path):
    path.write_text('<VRTDataset rasterXSize="18" rasterYSize="12"></VRTDataset>', encoding="utf-8")


BAD_FILES = {
    "gone": (lambda path: path.unlink(), "deliver the file"),
    "empty": (lambda path: path.write_bytes(b""), "0 bytes"),
    "web page": (lambda path: path.write_text("<html>404</html>"), "raster"),
    "virtual raster": (to_virtual, "raster"),
    "pipe": (to_pipe, "device"),
    "folder": (to_folder, "folder"),
    "header only": (lambda path: path.write_bytes(path.read_bytes()[:12]), "deliver the file again"),
    "other CRS": (lambda path: write_raster(path, numbers(), crs="EPSG:32633"), "CRS EPSG:32633"),
    "no CRS": (lambda path: write_raster(path, numbers(), crs=None), "CRS"),
    "half a cell off": (lambda path: write_raster(path, numbers(), left=LEFT + CELL / 2), "0.500"),
    "a fiftieth of a cell off": (lambda path: write_raster(path, numbers(), left=LEFT + CELL / 50), "0.020"),
    "wrong shape": (lambda path: write_raster(path, numbers(ROWS - 1)), "shape 11 x 18"),
    "odd resolution": (lambda path: write_raster(path, numbers(8, 12), cell=45.0), "grid"),
    "finer but shifted": (
        lambda path: write_raster(path, numbers(ROWS * 2, COLS * 2), cell=CELL / 2, left=LEFT + 7),
        "shifted",
    ),
    "coarser but short": (lambda path: write_raster(path, numbers(5, 9), cell=CELL * 2), "shape 5 x 9"),
    "other type than said": (
        lambda path: write_raster(path, numbers(dtype="int16")),
        "uint16 as the item says",
    ),
    "32 bits": (lambda path: write_raster(path, numbers(dtype="int32")), "int32"),
}


@pytest.mark.parametrize("case", BAD_FILES)
def test_a_bad_file_is_refused_by_name(tmp_path, case):
    spoil, said = BAD_FILES[case]
    file_problem(tmp_path, spoil, said)


def test_no_pipe_is_left_open(tmp_path):
    file_problem(tmp_path, to_pipe)
    assert stat.S_ISFIFO((tmp_path / "red.tif").stat().st_mode)


def test_a_missing_band_is_said_with_those_there_are(tmp_path):
    make_scene(tmp_path)
    problem = problem_of(tmp_path, ("green", "swir16"))
    for words in ("swir16", "fell-a-0310", "green, red, nir", "add the band"):
        assert words in str(problem)


def test_a_file_with_fewer_bands_than_the_item_is_refused(tmp_path):
    body = item_body()
    body["assets"] = {"all": {"href": "all.tif", "bands": [band_asset("", name)["bands"][0] for name in BANDS]}}
    write_raster(tmp_path / "all.tif", np.stack([numbers(), numbers()]))
    write_item(tmp_path / "item.json", body)
    assert "at least 3 bands" in str(problem_of(tmp_path))


@pytest.mark.parametrize("dtype", ["uint16", "float32"])
@pytest.mark.parametrize("word", ["scale", "offset"])
def test_a_missing_scale_or_offset_is_refused_with_the_cure(tmp_path, word, dtype):
    body = item_body()
    body["assets"]["red"] = band_asset("red.tif", "red", data_type=dtype, **{f"raster:{word}": None})
    make_scene(tmp_path, body, red=numbers(dtype=dtype))
    problem = problem_of(tmp_path)
    for words in ("red.tif", "band red", f"add raster:{word}", "firnlight describe", "scale 1, offset 0"):
        assert words in str(problem)


def test_missing_nodata_is_refused_unless_the_numbers_can_tell(tmp_path):
    body = item_body()
    body["assets"]["red"] = band_asset("red.tif", "red", nodata=None)
    make_scene(tmp_path, body)
    assert "add nodata" in str(problem_of(tmp_path))
    body["assets"]["red"] = band_asset("red.tif", "red", nodata=None, data_type="float32")
    make_scene(tmp_path, body, red=numbers(dtype="float32"))
    (scene,), _ = find_scenes("item.json", tmp_path)
    assert open_scene(scene, BANDS).bands["red"].nodata is None


@pytest.mark.parametrize("nodata", [-9999, 0.5, 70000])
def test_nodata_that_the_type_cannot_hold_is_refused(tmp_path, nodata):
    body = item_body()
    body["assets"]["red"] = band_asset("red.tif", "red", nodata=nodata)
    make_scene(tmp_path, body)
    assert str(nodata) in str(problem_of(tmp_path))


def test_a_quality_raster_of_another_type_than_the_item_says_is_refused(tmp_path):
    body = item_body()
    classes("clear", "cloud", data_type="uint8")(body)
    make_scene(tmp_path, body)
    write_raster(tmp_path / "quality.tif", numbers())
    problem = problem_of(tmp_path)
    assert "quality.tif" in str(problem)
    assert "uint16" in str(problem)


@pytest.mark.parametrize("compress", ["none", "deflate", "zstd"])
@pytest.mark.parametrize("share", [0.999, 0.6])
def test_a_truncated_file_opens_and_its_reading_names_file_band_and_window(tmp_path, compress, share):
    body = item_body(**{"proj:shape": [200, 200]})
    noise = np.random.default_rng(3).integers(1, 60000, (200, 200)).astype("uint16")
    make_scene(tmp_path, body, **dict.fromkeys(BANDS, noise))
    path = write_raster(tmp_path / "red.tif", noise, compress=compress, blockysize=10)
    path.write_bytes(path.read_bytes()[: int(path.stat().st_size * share)])
    (scene,), _ = find_scenes("item.json", tmp_path)
    scene = open_scene(scene, BANDS)
    reader = SceneReader(scene, BANDS)
    reader.read(Window(0, 0, 10, 200))
    with pytest.raises(InputProblem) as caught:
        reader.read(Window(150, 20, 50, 30))
    for words in (
        "red.tif",
        "band red",
        "fell-a-0310",
        "rows 150 to 199",
        "columns 20 to 49",
        "deliver the file again",
    ):
        assert words in str(caught.value)


def test_an_item_may_name_files_above_it_and_files_by_their_whole_path(tmp_path):
    make_scene(tmp_path)
    body = item_body()
    body["assets"]["red"]["href"] = "../red.tif"
    body["assets"]["nir"]["href"] = str(tmp_path / "nir.tif")
    body["assets"]["green"]["href"] = "../green.tif"
    path = write_item(tmp_path / "items" / "item.json", body)
    (scene,), problems = find_scenes(str(path), tmp_path)
    assert problems == []
    assert open_scene(scene, BANDS).bands["red"].path == str(tmp_path / "red.tif")
    assert json.loads(path.read_text(encoding="utf-8")) == body


@pytest.mark.parametrize("name", ["red band?.tif", "red#1.tif", "red!x.tif", "rød.tif", "red%20a.tif"])
def test_odd_file_names_are_taken_as_they_are(tmp_path, name):
    body = item_body()
    body["assets"]["red"]["href"] = name
    make_scene(tmp_path, body)
    (tmp_path / "red.tif").rename(tmp_path / name)
    (scene,), _ = find_scenes("item.json", tmp_path)
    assert open_scene(scene, BANDS).bands["red"].scale == 0.005
