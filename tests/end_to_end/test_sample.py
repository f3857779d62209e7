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


def true_values(item, name):
    """Truth of a layer; absorbed and net follow from what the truth holds."""
    if name == "absorbed_shortwave":
        return truth(item, "insolation") * (1 - truth(item, "albedo"))
    if name == "net_radiation":
        return true_values(item, "absorbed_shortwave") + truth(item, "net_longwave")
    return truth(item, name)


def compared(night, name, items=None):
    """Error, stated standard uncertainty and truth of all clear cells that were seen."""
    parts = []
    for item in items or scenes():
        error = cells(night, item, name) - true_values(item, name)
        u = cells(night, item, f"{name}_u") if name != "insolation" else np.full(error.shape, np.nan)
        known = clear(item) & np.isfinite(error)
        parts.append((error[known], u[known], true_values(item, name)[known]))
    return (np.concatenate(one) for one in zip(*parts, strict=True))


@pytest.mark.parametrize("name", ["albedo", "absorbed_shortwave", "net_radiation"])
def test_truth_is_recovered_and_the_stated_uncertainty_holds_it(night, name):
    """Slopes included. The truth errs by draws in the sizes that the workflow states, so one sigma should hold 68 %; a few
    draws are shared by many cells, which is what the margins are for."""
    error, u, true = compared(night, name)
    assert error.size > 200_000
    assert abs(error.mean()) <= 0.02 * abs(true.mean())
    assert np.sqrt((error**2).mean()) <= 1.2 * u.mean()
    share = (np.abs(error) <= u).mean()
    assert 0.63 <= share <= (0.75 if name == "albedo" else 0.73)


def test_insolation_of_each_scene_comes_near_the_truth_on_slopes(night):
    """The sky's own errors are 3 % here and there and 1 % for a day: the rest is ours."""
    for item in scenes():
        error, _, true = compared(night, "insolation", [item])
        assert abs(error.mean()) <= 0.03 * true.mean()
        assert error.std() <= 0.05 * true.mean()
        assert true.std() > 0.03 * true.mean()  # there are slopes in it


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
    assert sum(path.stat().st_size for path in SAMPLE.rglob("*") if path.is_file()) < 5e6
