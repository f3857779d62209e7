"""Does real imagery go through `describe` and `night`? (sources: README.md beside each file in tests/reference)"""

import json
import shutil
from pathlib import Path

import numpy as np
import pytest
import rasterio

from firnlight.cli import main
from firnlight.physics import sun

REFERENCE = Path(__file__).parents[1] / "reference"
PATTERN = "LC08_L1TP_{tile}_{date}_20170503_01_T1_{band}.TIF"


@pytest.fixture
def clip(tmp_path):
    folder = tmp_path / "clip"
    shutil.copytree(REFERENCE / "landsat8_clip", folder)
    for path in folder.iterdir():
        path.chmod(0o644)
    return folder


def test_a_real_level_1_clip_needs_a_word_and_then_gives_sensible_albedo(clip, tmp_path, capsys):
    describe = ["describe", str(clip), "--sensor", "oli", "--pattern", PATTERN]
    assert main(describe) == 2
    assert "top of atmosphere" in capsys.readouterr().err
    assert main([*describe, "--reflectance", "top of atmosphere"]) == 0
    item = json.loads(next(clip.glob("*.json")).read_text(encoding="utf-8"))
    # Level-1 metadata: SUN_ELEVATION at the scene's centre, not at this clip: half a degree of sun per 55 km
    when = np.datetime64(item["properties"]["datetime"].rstrip("Z")).astype("datetime64[us]").astype(float) / 1e6
    assert item["properties"]["view:sun_elevation"] == pytest.approx(58.99675180)
    corners = {}
    for line in (clip / next(p.name for p in clip.glob("*MTL.txt"))).read_text(encoding="utf-8").splitlines():
        key, _, value = line.strip().partition(" = ")
        if key.startswith("CORNER_") and key.endswith(("LAT_PRODUCT", "LON_PRODUCT")):
            corners[key] = float(value)
    lat = np.mean([v for k, v in corners.items() if "LAT" in k])
    lon = np.mean([v for k, v in corners.items() if "LON" in k])
    assert 90 - float(sun.position(when, lat, lon)[0]) == pytest.approx(58.99675180, abs=0.05)
    workflow = tmp_path / "clip.toml"
    text = f'[scenes]\nitems = "{clip}"\n[store]\npath = "store"\n[surface]\nelevation = "{clip / "DEM.TIF"}"\n'
    workflow.write_text(text, encoding="utf-8")
    assert main(["night", str(workflow)]) == 3
    assert "top of atmosphere" in capsys.readouterr().err
    workflow.write_text(text.replace("[store]", 'reflectance = "top of atmosphere"\n[store]'), encoding="utf-8")
    assert main(["night", str(workflow)]) == 2  # Liang (2001) is not made for it
    assert "a conversion of top of atmosphere reflectance" in capsys.readouterr().err
    forms = '[albedo]\nconversion = { ground = "dasilva2016", snow = "dasilva2016" }'
    planetary = text.replace("[store]", f'reflectance = "top of atmosphere"\n{forms}\n[store]')
    workflow.write_text(planetary, encoding="utf-8")
    assert main(["night", str(workflow)]) == 0
    with rasterio.open(next((tmp_path / "store").rglob("albedo.tif"))) as dataset:
        stored = dataset.read(1)
    seen = stored != -32768
    assert seen.mean() > 0.5
    values = stored[seen] * 0.0001
    # farmland, forest and town: handbook albedos of crops, grass and forest span 0.05 to 0.26 (Oke 1987, table 1.1)
    assert 0.10 <= np.median(values) <= 0.30
    assert ((values > 0.05) & (values < 0.40)).mean() > 0.99


def test_a_real_scene_without_metadata_keeps_the_order_of_surfaces(tmp_path, capsys):
    """Common practice, no source: the sea is darkest, under any linear scaling of the stored numbers."""
    with rasterio.open(REFERENCE / "etm_scene/etm_clip.tif") as dataset:
        bands, profile = dataset.read(), dataset.profile
    profile.update(count=1)
    for number, values in zip((1, 2, 3, 4, 5, 7), bands, strict=True):
        with rasterio.open(tmp_path / f"COAST_20000801_{number}.tif", "w", **profile) as dataset:
            dataset.write(values, 1)
    describe = ["describe", str(tmp_path), "--sensor", "etm", "--pattern", "{tile}_{date}_{band}.tif"]
    assert main(describe) == 2
    assert "scale" in capsys.readouterr().err
    extra = ["--scale", "0.0025", "--offset", "0", "--nodata", "0", "--time", "12:30:00"]
    assert main([*describe, *extra]) == 0
    workflow = tmp_path / "coast.toml"
    workflow.write_text('[scenes]\nitems = "."\n[store]\npath = "store"\n', encoding="utf-8")
    assert main(["night", str(workflow)]) == 0
    with rasterio.open(next((tmp_path / "store").rglob("albedo.tif"))) as dataset:
        stored = dataset.read(1)
    water = (bands[4] < 30) & (bands[3] < bands[1])  # dark at 1.6 um and falling from green to near infrared
    land = (bands[3] > bands[2] * 1.3) & (bands[4] > 40)
    assert water.sum() > 50
    assert land.sum() > 50
    assert np.median(stored[water & (stored >= 0)]) < np.percentile(stored[land & (stored >= 0)], 5)
