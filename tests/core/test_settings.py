"""Does the workflow file say what is wrong with it, and where?"""

import pytest

from firnlight.core.errors import SettingsProblem
from firnlight.core.settings import load_workflow

GOOD = """
[area]
name = "Morrowfell snowfields"
[scenes]
items = "scenes"
[surface]
elevation = "static/{tile}/elevation.tif"
classes = { 1 = "open ground", 2 = "conifer forest" }
[regions]
elevation_bands = { from = 800, to = 3200, step = 200 }
[albedo]
conversion = { ground = "liang2001", snow = "liang2001" }
[insolation]
atmosphere = { aerosol_500nm = 0.1, water_vapour_cm = 1.0, ozone_cm = 0.3 }
[store]
path = "store"
[engine]
workers = 2
"""


def write(tmp_path, text):
    path = tmp_path / "nightly.toml"
    path.write_text(text, encoding="utf-8")
    return path


def problem(tmp_path, text):
    with pytest.raises(SettingsProblem) as caught:
        load_workflow(write(tmp_path, text))
    return str(caught.value)


def test_a_good_file_is_read_with_paths_beside_it(tmp_path):
    settings = load_workflow(write(tmp_path, GOOD))
    assert settings.surface.class_names == {1: "open ground", 2: "conifer forest"}
    assert settings.tile_path(settings.surface.elevation, "FELL-A") == tmp_path / "static/FELL-A/elevation.tif"
    assert settings.engine.workers == 2
    assert settings.regions.elevation_bands.step_m == 200


def test_only_scenes_and_store_are_required(tmp_path):
    settings = load_workflow(write(tmp_path, '[scenes]\nitems = "s"\n[store]\npath = "t"\n'))
    assert len(settings.remarks()) == 3


def test_an_unknown_key_is_refused_with_the_nearest_name_and_the_line(tmp_path):
    text = problem(tmp_path, GOOD.replace("ozone_cm", "ozone_mm"))
    assert "line 14" in text
    assert "insolation.atmosphere.ozone_mm" in text
    assert "'ozone_cm'" in text


def test_an_unknown_section_is_named_before_the_section_it_hides(tmp_path):
    text = problem(tmp_path, GOOD.replace("[store]", "[stor]"))
    assert "stor" in text
    assert "'store'" in text


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('path = "store"', "", "store.path: found nothing"),
        ("workers = 2", "workers = 0", "whole number from 1"),
        ("step = 200", "step = 170", "whole number of steps"),
        ("to = 3200", "to = 700", "must lie above"),
        ("2 = ", "x = ", "not a whole number"),
        ("aerosol_500nm = 0.1", "aerosol_500nm = 9", "less than or equal to 3"),
        ('"scenes"', "3", "a valid string"),
        ("[engine]", '[engine]\nrun_on = "gpu"', "scheduler address"),
        ("[engine]", '[engine]\nmemory_per_worker = "lots"', "2 GiB"),
        ("[insolation]", '[insolation]\nterrain = "yes"', "a valid boolean"),
        ("[insolation]", '[insolation]\nsource = { station = "nowhere" }', "there is [stations.*]"),
        ('name = "Morrowfell snowfields"', 'hydrological_year_starts = "02-30"', "10-01"),
        ("[area]", 'file = "x"\n[area]', "file: found an unknown key"),
        ("[area]", "[area", "correct the file"),
    ],
    ids=lambda value: str(value)[:20],
)
def test_a_bad_value_is_named_with_what_was_wanted(tmp_path, old, new, said):
    assert said in problem(tmp_path, GOOD.replace(old, new, 1))


def test_a_missing_file_a_folder_and_a_huge_file_are_refused(tmp_path):
    for path in (tmp_path / "none.toml", tmp_path):
        with pytest.raises(SettingsProblem, match="workflow"):
            load_workflow(path)
    with pytest.raises(SettingsProblem, match="under 1 MB"):
        load_workflow(write(tmp_path, "#" * 1_000_001))


def test_deep_nesting_is_a_message_and_not_a_crash(tmp_path):
    problem(tmp_path, "x = " + "[" * 100_000)
