"""Do the classes and bits of a provider's quality raster become our flags, and is an unknown name refused?"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.layers import flag_bit
from firnlight.core.tables import load_table
from firnlight.io.bands import SceneReader
from firnlight.io.quality import plain_word, word_flags
from firnlight.io.scenes import find_scenes, open_scene
from scene_maker import BANDS, CLOUD_BITS, COLS, ROWS, SCENE_CLASSES, bit, item_body, make_scene, write_raster


def quality_of(tmp_path, asset, cells):
    body = item_body()
    body["assets"]["quality"] = asset
    make_scene(tmp_path, body)
    write_raster(tmp_path / asset["href"], cells)
    (scene,), _ = find_scenes("item.json", tmp_path)
    return SceneReader(open_scene(scene, BANDS), BANDS).read(scene.grid.whole)[2]


def bits(*flags):
    return sum(flag_bit(flag) for flag in flags)


def test_bitfields_become_our_flags(tmp_path):
    cells = np.zeros((ROWS, COLS), np.uint8)
    cells[0, :8] = [0, 1, 2, 4, 8, 0b010000, 0b100000, 0b110000]
    cells[0, 8] = 0b110111
    flags = quality_of(tmp_path, CLOUD_BITS, cells)
    said = [0, bits("missing"), bits("shadow"), bits("snow"), bits("saturated"), 0, 0, bits("cloud")]
    assert flags[0, :8].tolist() == said
    assert flags[0, 8] == bits("missing", "shadow", "snow", "cloud")
    assert not flags[1:].any()


def test_classes_become_our_flags_and_an_unlisted_number_is_missing(tmp_path):
    cells = np.full((ROWS, COLS), 6, np.uint8)
    cells[0, :13] = range(13)
    flags = quality_of(tmp_path, SCENE_CLASSES, cells)
    cloud = bits("cloud")
    assert flags[0, :13].tolist() == [
        bits("missing"),
        bits("saturated", "missing"),
        bits("shadow"),
        bits("shadow"),
        0,
        0,
        0,
        0,
        cloud,
        cloud,
        cloud,
        bits("snow"),
        bits("missing"),
    ]
    assert not flags[1:].any()


def test_a_signed_quality_raster_is_read_by_its_bits(tmp_path):
    asset = {
        "href": "quality.tif",
        "bands": [{"data_type": "int16", "nodata": -2}],
        "classification:bitfields": [bit("cloud", 15), bit("snow", 1)],
    }
    cells = np.zeros((ROWS, COLS), np.int16)
    cells[0, :3] = [-32768, 2, -2]
    assert quality_of(tmp_path, asset, cells)[0, :4].tolist() == [
        bits("cloud"),
        bits("snow"),
        bits("cloud", "snow", "missing"),
        0,
    ]


@given(st.text(max_size=40))
def test_case_and_separators_of_a_class_do_not_count(text):
    assert plain_word(plain_word(text)) == plain_word(text)
    assert plain_word(f"  {text.upper()} - ") == plain_word(text.upper().lower()) or not text.isascii()


@pytest.mark.parametrize(
    ("word", "field", "flags"),
    [
        ("CLOUD SHADOW", "", ("shadow",)),
        ("high", "cloud_confidence", ("cloud",)),
        ("high", "Cirrus Confidence", ("cloud",)),
        ("medium", "cloud_confidence", ()),
        ("not_cloud", "", ()),
        ("no cloud", "", ()),
        ("no-data", "", ("missing",)),
        ("not_valid", "", ("missing",)),
        ("unclassified", "", ()),
    ],
    ids=str,
)
def test_words_of_the_table(word, field, flags):
    assert word_flags(word, field) == bits(*flags)


def test_every_class_of_every_layout_is_a_known_word():
    for row in load_table("quality_layouts").rows.values():
        assert set(row["sensors"]) <= set(load_table("sensors").rows)
        for word in row.get("classes", ()):
            word_flags(word)
        taken = 0
        for name, first, words in row.get("fields", ()):
            mask = ((1 << (len(words) - 1).bit_length()) - 1) << first
            assert taken & mask == 0, f"{name} overlaps another field"
            taken |= mask
            for word in words:
                word_flags(word, name)
