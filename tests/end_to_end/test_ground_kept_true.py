"""Do the static ground and the totals over it always belong together, whatever is lost, edited or half done?"""

import json

import pytest

from firnlight.run import night as nights


def table(area):
    code, out, err = area.run("budget", "--by", "region,elevation_band", "--json", "--quiet")
    return code, out, err


@pytest.mark.parametrize(
    ("name", "spoil"),
    [
        ("FELL-A/strata.tif", "gone"),
        ("FELL-A/strata.json", "gone"),
        ("FELL-A/strata.json", "empty"),
        ("regions.json", "gone"),
        ("regions.json", "empty"),
    ],
)
def test_a_lost_or_emptied_file_of_the_ground_is_said_and_the_next_night_makes_it_again(done_area, name, spoil):
    whole, files = table(done_area)[1], done_area.files()
    path = done_area.store / "terrain" / name
    path.unlink() if spoil == "gone" else path.write_bytes(b"")
    code, _, err = table(done_area)
    assert code == 2
    assert "firnlight night" in err
    assert "Traceback" not in err
    assert done_area.run("night")[0] == 0
    assert done_area.files() == files
    assert table(done_area)[1] == whole


def test_a_setting_changed_cut_short_and_changed_back_leaves_no_mixture(done_area, monkeypatch):
    whole = table(done_area)[1]
    done_area.edit("step = 200", "step = 400")
    with monkeypatch.context() as patch:

        def die(*_):
            raise KeyboardInterrupt

        patch.setattr(nights, "engine", die)
        assert done_area.night() == 130
    done_area.edit("step = 400", "step = 200")
    assert table(done_area)[0] == 2
    assert done_area.night() == 0
    assert table(done_area)[1] == whole


def test_totals_of_two_settings_are_never_one_table(done_area):
    day = json.loads(done_area.items()[-1].read_text(encoding="utf-8"))["properties"]["datetime"][:10]
    done_area.edit("step = 200", "step = 400")
    assert done_area.night("--since", day) == 0
    code, _, err = table(done_area)
    assert code == 2
    assert "without dates" in err
    assert done_area.run("budget", "--since", day, "--quiet")[0] == 0
    assert done_area.night() == 0
    assert table(done_area)[0] == 0


def test_fewer_tiles_in_the_workflow_are_fewer_in_the_table(done_area):
    before = json.loads(done_area.run("budget", "--by", "", "--json", "--quiet")[1])["rows"][0]["area_km2"]
    done_area.edit("[area]", '[area]\ntiles = ["FELL-A"]')
    assert done_area.night() == 0
    after = json.loads(done_area.run("budget", "--by", "", "--json", "--quiet")[1])["rows"][0]["area_km2"]
    # 80 x 80 cells of 30 m, less what lies in no region
    assert 0 < after <= 5.77
    assert after < before


def test_damaged_polygons_are_mended_and_said(area):
    import shapely
    from pyogrio.raw import write

    bow = shapely.from_wkt("POLYGON ((-36.1 46.4, -35.9 46.6, -35.9 46.4, -36.1 46.6, -36.1 46.4))")
    fields = {"id": ["bow"], "name": ["Bow"], "parent": [None]}
    write(
        area.folder / "bow.gpkg", shapely.to_wkb([bow]), list(map(_objects, fields.values())), list(fields),
        geometry_type="Polygon", crs="EPSG:4326", driver="GPKG",
    )  # fmt: skip
    area.edit('file = "regions.gpkg"', 'file = "bow.gpkg"')
    code, _, err = area.run("night")
    assert code == 0
    assert "Note: " in err
    assert "bow" in err


def _objects(values):
    import numpy as np

    return np.array(values, dtype=object)


def test_a_missing_regions_file_is_one_message_and_leaves_no_store(area):
    area.edit('file = "regions.gpkg"', 'file = "nope.gpkg"')
    code, _, err = area.run("night")
    assert code == 2
    assert err.count("nope.gpkg") == 1
    assert "regions.file" in err
    assert not area.store.exists()
