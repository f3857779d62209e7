"""Does the committed sample come out as its truth says, and does the README's workflow run on it?"""

import json
from pathlib import Path

import numpy as np
import pytest
import rasterio

from firnlight.cli import main
from firnlight.core.layers import layer
from firnlight.io.rasters import grid_of

ROOT = Path(__file__).parents[2]
SAMPLE = ROOT / "sample_tiles"
COVERS = {1: "open ground", 2: "conifer forest", 3: "bare rock", 4: "glacier", 5: "lake"}


@pytest.fixture(scope="module")
def night(tmp_path_factory):
    """The README's workflow, with its paths made absolute and a store of the test's own."""
    folder = tmp_path_factory.mktemp("sample")
    text = (ROOT / "workflows/nightly.toml").read_text(encoding="utf-8")
    workflow = folder / "nightly.toml"
    workflow.write_text(text.replace("../sample_tiles", str(SAMPLE)).replace("../store", "store"), encoding="utf-8")
    assert main(["night", str(workflow), "--quiet"]) == 0
    return folder


def scenes():
    return sorted((SAMPLE / "scenes").rglob("*.json"))


def cells(night, item, name):
    body = json.loads(item.read_text(encoding="utf-8"))["properties"]
    path = night / "store/maps" / body["grid:code"] / body["datetime"][:10] / f"{name}.tif"
    with rasterio.open(path) as dataset:
        values = dataset.read(1)
        return np.where(values == -32768, np.nan, values * dataset.scales[0])


def truth(item, name):
    with rasterio.open(SAMPLE / "truth" / item.stem / f"{name}.tif") as dataset:
        values = dataset.read(1).astype(float)
        return np.where(values == dataset.nodata, np.nan, values * layer(name).step)


def clear(item):
    with rasterio.open(SAMPLE / "truth" / item.stem / "cloud.tif") as dataset:
        return dataset.read(1) == 0


@pytest.mark.parametrize("item", scenes(), ids=lambda item: item.stem)
def test_truth_is_recovered_where_the_sky_is_clear(night, item):
    for name, bias, rmse in (("albedo", 0.01, 0.02), ("insolation", 0.5, 1.5), ("absorbed_shortwave", 3.0, 8.0)):
        error = (cells(night, item, name) - truth(item, name))[clear(item)]
        assert np.isfinite(error).any()
        assert abs(np.nanmean(error)) <= bias, name
        assert np.sqrt(np.nanmean(error**2)) <= rmse, name


def test_the_stated_uncertainty_of_albedo_holds_the_truth(night):
    inside, count = 0, 0
    for item in scenes():
        error = np.abs(cells(night, item, "albedo") - truth(item, "albedo"))
        within = (error <= 2 * cells(night, item, "albedo_u"))[clear(item) & np.isfinite(error)]
        inside, count = inside + within.sum(), count + within.size
    assert inside / count >= 0.95


def test_order_of_surfaces(night):
    """Common practice, no source: snow and ice reflect most, forest and water least."""
    found = {name: [] for name in (*COVERS.values(), "snow")}
    for item in scenes():
        albedo, snow = cells(night, item, "albedo"), cells(night, item, "snow_fraction") > 0.6
        tile = json.loads(item.read_text(encoding="utf-8"))["properties"]["grid:code"]
        with rasterio.open(SAMPLE / f"static/{tile}/land_cover.tif") as dataset:
            cover = dataset.read(1)
        known = clear(item) & np.isfinite(albedo)
        found["snow"] += albedo[known & snow].tolist()
        bare = ~(cells(night, item, "snow_fraction") > 0.05)
        for code, name in COVERS.items():
            # bare ice has the index of snow, so a glacier is taken whole
            found[name] += albedo[known & (cover == code) & (bare | (name == "glacier"))].tolist()
    middle = {name: np.median(values) for name, values in found.items() if len(values) > 50}
    assert middle["snow"] == max(middle.values())
    assert {"snow", "glacier", "lake", "conifer forest", "open ground"} <= set(middle)
    assert middle["glacier"] > max(middle[name] for name in ("open ground", "conifer forest", "lake"))
    assert middle["conifer forest"] < middle["open ground"]
    assert middle["lake"] == min(middle.values())


def test_overlapping_tiles_of_two_zones_count_ground_once(night):
    tiles = [
        json.loads(path.read_text(encoding="utf-8")) for path in sorted((night / "store/terrain").glob("*/strata.json"))
    ]
    owned = sum(stratum["area_cm2"] for tile in tiles for stratum in tile["strata"])
    grids = [grid_of(SAMPLE / f"static/{tile}/elevation.tif") for tile in ("FELL-A", "FELL-B")]
    both = sum(grid.rows * grid.cols * grid.dx * grid.dy for grid in grids) * 1e4
    assert 0.5 * both < owned < 0.95 * both  # the overlap, about a fifth of a tile, is counted once


def test_the_sample_is_small():
    assert sum(path.stat().st_size for path in SAMPLE.rglob("*") if path.is_file()) < 6e6
