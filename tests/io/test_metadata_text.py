"""Is a provider's metadata text read strictly: groups apart, offsets never guessed, no entities?"""

from pathlib import Path

import pytest

from firnlight.core.errors import InputProblem
from firnlight.io.metadata_text import read_group_text, read_groups, read_xml_text
from scene_maker import product_xml

CLIP = Path(__file__).parents[1] / "reference" / "landsat8_clip"


@pytest.mark.parametrize(
    ("baseline", "known"), [("02.13", True), ("03.01", True), ("04.00", False), ("05.10", False), ("", False)]
)
def test_offsets_are_zero_only_before_they_were_introduced(tmp_path, baseline, known):
    path = tmp_path / "MTD_MSIL2A.xml"
    path.write_text(product_xml(baseline, offsets=False), encoding="utf-8")
    if known:
        assert read_xml_text(path).scaling("08") == (0.0001, 0.0)
    else:
        with pytest.raises(InputProblem, match="BOA_ADD_OFFSET"):
            read_xml_text(path)


def test_level_1c_reflectance_needs_no_sine(tmp_path):
    path = tmp_path / "MTD_MSIL1C.xml"
    path.write_text(product_xml(level="1C"), encoding="utf-8")
    text = read_xml_text(path)
    assert text.level == 1
    assert text.scaling("12") == (0.0001, -0.1012)


BOMB = '<!DOCTYPE a [<!ENTITY b "bbbbbbbbbb"><!ENTITY c "&b;&b;&b;&b;&b;&b;&b;&b;">]><a>&c;</a>'


def test_a_text_of_groups_keeps_equal_keys_apart():
    groups = read_groups(next(CLIP.glob("*_MTL.txt")))
    assert groups["PRODUCT_METADATA"]["SENSOR_ID"] == "OLI_TIRS"
    assert groups["MIN_MAX_PIXEL_VALUE"]["QUANTIZE_CAL_MIN_BAND_2"] == "1"
    text = read_group_text(next(CLIP.glob("*_MTL.txt")))
    assert (text.level, text.scale["2"], text.offset["2"]) == (1, 2e-05, -0.1)
    assert set(text.scale) == set("123456789")


@pytest.mark.parametrize(
    "text",
    [
        BOMB,
        '<!DOCTYPE a SYSTEM "file:///etc/passwd"><a/>',
        "<! doctype a><a/>",
        "<a><b></a>",
        "",
        "<a>\0</a>",
    ],
    ids=["entities", "outside", "lower case", "not closed", "empty", "empty byte"],
)
def test_xml_with_entities_or_damage_is_refused(tmp_path, text):
    path = tmp_path / "MTD_MSIL2A.xml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(InputProblem):
        read_xml_text(path)
    path.write_bytes(BOMB.encode("utf-16"))
    with pytest.raises(InputProblem, match="no text"):
        read_xml_text(path)
