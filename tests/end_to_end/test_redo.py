"""Is exactly that remade which depends on what changed, with equal bytes where inputs are equal?"""

import hashlib
import json

import pytest
import rasterio

FLUXES = {
    "insolation", "terrain_light", "absorbed_shortwave", "absorbed_shortwave_u", "net_longwave", "net_radiation",
    "net_radiation_u", "budget", "item",
}  # fmt: skip
ABSORBED = {"absorbed_shortwave", "absorbed_shortwave_u"}
ALL = {"albedo", "albedo_u", "snow_fraction", "quality"} | FLUXES


def kinds(names):
    """Products behind paths of the store."""
    out = set()
    for name in names:
        if name.startswith("maps/"):
            out.add("item" if name.endswith("scene.json") else name.rsplit("/", 1)[1].removesuffix(".tif"))
        else:
            out.add(name.split("/", 1)[0])
    return out


@pytest.mark.parametrize("name", ["albedo", "insolation", "quality"])
def test_a_deleted_map_is_remade_alone_and_equal(done_area, name):
    path = sorted((done_area.store / "maps").rglob(f"{name}.tif"))[0]
    before, files = done_area.times(), done_area.files()
    path.unlink()
    assert done_area.night("--quiet") == 0
    assert done_area.touched_since(before) == {str(path.relative_to(done_area.store))}
    assert done_area.files() == files


def test_budget_files_rebuilt_from_the_maps_alone_are_byte_equal(done_area):
    before, files = done_area.times(), done_area.files()
    gone = sorted((done_area.store / "budget").rglob("*.parquet"))
    for path in gone:
        path.unlink()
    for path in (done_area.folder / "scenes").rglob("*.tif"):
        path.chmod(0o400)
    assert done_area.night("--quiet") == 0
    assert done_area.touched_since(before) == {str(path.relative_to(done_area.store)) for path in gone}
    assert done_area.files() == files


def test_an_edited_map_is_noticed_and_remade(done_area):
    path = sorted((done_area.store / "maps").rglob("albedo.tif"))[0]
    data = path.read_bytes()
    path.write_bytes(data[:-1] + bytes([data[-1] ^ 1]))
    assert done_area.night("--quiet") == 0
    assert path.read_bytes() == data


@pytest.mark.parametrize(
    ("old", "new", "remade"),
    [
        (
            "aerosol_500nm = 0.1",
            "aerosol_500nm = 0.05",
            FLUXES,
        ),
        ("step = 200", "step = 400", {"budget", "item", "terrain"}),
        (
            'snow_fraction = "gascoin_2020"',
            'snow_fraction = "salomonson_appel_2004"',
            {"snow_fraction", "budget", "item"},
        ),
        (
            "\nrelative_uncertainty = 0.01",
            "\nrelative_uncertainty = 0.1",
            {"absorbed_shortwave_u", "net_radiation_u", "budget", "item"},
        ),
        ('snow = "liang2001"', 'snow = "knap1999"', ALL),
        ('method = "brutsaert1975"', 'method = "prata1996"', FLUXES - {"insolation", "terrain_light", *ABSORBED}),
        ("\nuncertainty_wm2 = 2.0", "\nuncertainty_wm2 = 4.0", {"net_radiation_u", "budget", "item"}),
        ("correlation_length_m = 1500.0", "correlation_length_m = 3000.0", {"budget", "item"}),
        ("[albedo]", '[albedo]\nday = "sun path"', ALL),
        ("[store]", "[store]\nfinal_after_days = 3", set()),
        ("workers = ", "workers = 1 #", set()),
    ],
    ids=[
        "atmosphere",
        "bands",
        "snow fraction",
        "sky error",
        "conversion",
        "longwave",
        "longwave error",
        "correlation",
        "albedo of a day",
        "state",
        "workers",
    ],
)
def test_a_setting_redoes_what_depends_on_it_and_no_more(done_area, old, new, remade):
    text = done_area.workflow.read_text(encoding="utf-8")
    if "final_after_days" in new:
        text = "\n".join(line for line in text.splitlines() if not line.startswith("final_after_days"))
        done_area.workflow.write_text(text + "\n", encoding="utf-8")
    before = done_area.times()
    done_area.edit(old, new)
    assert done_area.night("--quiet") == 0
    assert kinds(done_area.touched_since(before)) == remade
    done_area.edit(new, old)


def change_a_cell(path):
    with rasterio.open(path, "r+") as dataset:
        values = dataset.read(1)
        values[3, 3] += 7
        dataset.write(values, 1)


def test_a_touched_scene_with_its_old_checksum_is_refused_and_nothing_is_lost(done_area):
    item = done_area.items()[0]
    change_a_cell(item.parent / "red.tif")
    files = done_area.files()
    code, _, err = done_area.run("night")
    assert code == 3
    assert "file:checksum" in err
    assert "red.tif" in err
    assert done_area.files() == files


def test_a_changed_scene_redoes_its_tile_day_alone(done_area):
    item = done_area.items()[0]
    change_a_cell(item.parent / "red.tif")
    body = json.loads(item.read_text(encoding="utf-8"))
    digest = hashlib.sha256((item.parent / "red.tif").read_bytes()).hexdigest()
    body["assets"]["red"]["file:checksum"] = "1220" + digest
    item.write_text(json.dumps(body), encoding="utf-8")
    before = done_area.times()
    assert done_area.night("--quiet") == 0
    tile, day = body["properties"]["grid:code"], body["properties"]["datetime"][:10]
    touched = done_area.touched_since(before)
    assert touched
    assert all(f"{tile}/{day}" in name or f"{tile}_{day}" in name for name in touched)


def test_the_same_scene_under_another_name_and_folder_changes_nothing(done_area):
    first = done_area.items()[0].parent
    first.rename(first.with_name("moved"))
    before = done_area.times()
    assert done_area.night("--quiet") == 0
    assert kinds(done_area.touched_since(before)) <= {"item"}
