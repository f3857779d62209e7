"""Does one command take scenes to maps and a table that closes, and does a second do nothing?"""

import json
import sqlite3

import numpy as np
import pystac
import pytest
import rasterio

from firnlight.core.layers import day_layers, layer
from firnlight.io.sheets import read_totals

FILL = -32768


def days(area):
    return sorted((area.store / "maps").glob("*/*"))


def maps_of(folder):
    out = {}
    for name in day_layers("terrain", "longwave"):
        with rasterio.open(folder / f"{name}.tif") as dataset:
            out[name] = dataset.read()
    return out


def test_every_scene_becomes_all_layers_and_totals(area):
    code, out, err = area.run("night")
    assert code == 0
    assert out.startswith("4 tile-days made, 0 already up to date")
    assert "[4/4]" in err
    assert "Next: firnlight budget" in err
    assert len(days(area)) == 4
    for folder in days(area):
        assert {path.name for path in folder.iterdir()} == {
            *(f"{n}.tif" for n in day_layers("terrain", "longwave")),
            "scene.json",
        }
    assert len(list((area.store / "budget").rglob("*.parquet"))) == 4
    assert not list(area.store.rglob(".*.part.*"))


def test_maps_are_cogs_that_say_what_they_hold(done_area):
    for folder in days(done_area):
        for name in day_layers("terrain", "longwave"):
            about = layer(name)
            with rasterio.open(folder / f"{name}.tif") as dataset:
                assert dataset.tags(ns="IMAGE_STRUCTURE")["LAYOUT"] == "COG"
                assert dataset.compression.name.lower() == "zstd"
                assert dataset.dtypes[0] == about.dtype
                assert dataset.nodata == about.nodata
                assert dataset.scales[0] == about.step
                assert dataset.units[0] == about.unit
                assert dataset.tags(1).get("standard_name", "") == about.standard_name
                assert dataset.crs.to_epsg() in (32624, 32625)


def test_items_are_stac_and_lead_back_to_the_scenes(done_area):
    for folder in days(done_area):
        item = pystac.Item.from_file(str(folder / "scene.json"))
        assert set(item.assets) == {*day_layers("terrain", "longwave"), "budget"}
        for asset in item.assets.values():
            assert (folder / asset.href).resolve().stat().st_size == asset.extra_fields["file:size"]
        sources = [link for link in item.links if link.rel == "derived_from"]
        assert sources
        for link in sources:
            scene = json.loads((folder / link.get_href(transform_href=False)).read_text(encoding="utf-8"))
            assert scene["id"] == link.title


def test_incoming_is_reflected_plus_absorbed_in_every_cell(done_area):
    for folder in days(done_area):
        maps = maps_of(folder)
        incoming, absorbed, albedo = (maps[n].astype(np.int64) for n in ("insolation", "absorbed_shortwave", "albedo"))
        seen = incoming != FILL
        assert seen.any()
        assert ((absorbed != FILL) == seen).all()
        assert (absorbed[seen] == (incoming[seen] * (10000 - albedo[seen]) + 5000) // 10000).all()
        assert ((absorbed[seen] >= 0) & (absorbed[seen] <= incoming[seen])).all()


def test_rows_close_and_children_add_up_to_their_parent(done_area):
    for path in (done_area.store / "budget").rglob("*.parquet"):
        sums = {}
        for row in read_totals(path).rows:
            t = row.totals
            assert t.insolation == t.reflected + t.absorbed
            assert t.area == sum(t.bins)
            sums[row.region] = sums[row.region] + t if row.region in sums else t
        parent = next(name for name in sums if f"{name}/rest" in sums or name.lower().startswith("morrow"))
        regions = json.loads((done_area.store / "terrain/regions.json").read_text(encoding="utf-8"))
        children = [name for name, up in regions["parents"].items() if up == parent and name in sums]
        assert len(children) >= 2
        total = sums[children[0]]
        for name in children[1:]:
            total = total + sums[name]
        assert total == sums[parent]


def test_states_and_unseen_add_up_to_the_region(done_area):
    _, text, _ = done_area.run("budget", "--by", "region,snow", "--json")
    by_state = json.loads(text)["rows"]
    _, text, _ = done_area.run("budget", "--by", "region", "--json")
    for whole in json.loads(text)["rows"]:
        parts = [row for row in by_state if row["region"] == whole["region"]]
        assert sum(row["area_km2"] for row in parts) == pytest.approx(whole["area_km2"], rel=1e-12)
        assert sum(row["seen_km2"] for row in parts) == pytest.approx(whole["seen_km2"], rel=1e-12)
        shares = (whole["coverage"], whole["cloud_share"], whole["shadow_share"], whole["missing_share"])
        assert sum(shares) == pytest.approx(1)


def test_a_second_night_does_nothing_and_touches_no_file(done_area):
    before = done_area.times()
    code, out, _ = done_area.run("night")
    assert code == 0
    assert out == "Nothing to do: 4 tile-days are up to date.\n"
    assert done_area.times() == before


def test_a_dry_run_says_why_and_writes_nothing(area):
    code, out, _ = area.run("night", "--dry-run")
    assert code == 0
    assert out.count("make (new)") == 4
    assert "4 tile-days with 4 scenes to make" in out
    assert not area.store.exists()


def test_a_span_and_a_tile_can_be_asked_for(area):
    first = area.items()[0]
    day = json.loads(first.read_text(encoding="utf-8"))["properties"]["datetime"][:10]
    assert area.night("--quiet", "--since", day, "--until", day, "--tile", "FELL-A") == 0
    assert [folder.name for folder in days(area)] == [day]
    assert area.run("night", "--tile", "FELL-Z")[0] == 2


def test_a_deleted_ledger_is_rebuilt_from_the_products(done_area):
    before, files = done_area.times(), done_area.files()
    with sqlite3.connect(done_area.store / "ledger.db") as db:
        rows = db.execute("select tile, day, name, path, key, size, digest from product order by 1, 2, 3").fetchall()
    db.close()
    (done_area.store / "ledger.db").unlink()
    code, out, _ = done_area.run("night")
    assert (code, out) == (0, "Nothing to do: 4 tile-days are up to date.\n")
    assert done_area.touched_since(before) == set()
    assert done_area.files() == files
    with sqlite3.connect(done_area.store / "ledger.db") as db:
        again = db.execute("select tile, day, name, path, key, size, digest from product order by 1, 2, 3").fetchall()
    db.close()
    assert again == rows


def test_another_run_holds_the_store(done_area):
    from filelock import FileLock

    with FileLock(done_area.store / ".lock"):
        code, _, err = done_area.run("night")
    assert code == 5
    assert "another run holds this store" in err
