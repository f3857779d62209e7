"""Do the files beside the demo's rasters hold what they say, and is the sample what the model makes?"""

import hashlib
import json
from pathlib import Path

import numpy as np
import pyogrio.raw
import pystac
import pytest
import rasterio
import shapely
import xarray as xr
from pyproj import Transformer

from firnlight.core.settings import load_workflow
from firnlight.demo import layout, sky
from firnlight.demo.area import workflow_text
from firnlight.demo.plane import from_plane
from firnlight.demo.scenes import Overpass, write_tile
from firnlight.demo.spectra import BANDS
from firnlight.demo.terrain import CLASSES
from firnlight.demo.weather import Climate

PROJECT = Path(__file__).resolve().parents[2]
SAMPLE = PROJECT / "sample_tiles"


def read(path):
    with rasterio.open(path) as dataset:
        return dataset.read(1)


def test_items_are_stac_and_tell_how_numbers_become_reflectance(made):
    for folder in sorted((made / "scenes").iterdir()):
        scene = folder.name
        body = json.loads((folder / f"{scene}.json").read_text(encoding="utf-8"))
        item = pystac.Item.from_dict(body)
        assert (item.id, body["stac_version"]) == (scene, "1.1.0")
        assert body["properties"]["grid:code"] == scene[:6]
        assert set(body["assets"]) == {*BANDS, "quality"}
        for name, asset in body["assets"].items():
            path = folder / asset["href"]
            assert asset["file:checksum"] == "1220" + hashlib.sha256(path.read_bytes()).hexdigest()
            with rasterio.open(path) as dataset:
                assert list(dataset.shape) == body["properties"]["proj:shape"]
                assert list(dataset.transform)[:6] == body["properties"]["proj:transform"]
                assert dataset.crs.to_string() == body["properties"]["proj:code"]
                assert (dataset.scales, dataset.offsets) == ((1.0,), (0.0,))
                if name != "quality":
                    band = asset["bands"][0]
                    assert (band["eo:common_name"], band["raster:offset"]) == (name, -0.1)
                    assert (band["nodata"], band["data_type"]) == (dataset.nodata, dataset.dtypes[0])
        fields = body["assets"]["quality"]["classification:bitfields"]
        assert [f["name"] for f in fields] == ["fill", "cloud", "cloud_shadow", "snow", "water", "saturated"]
        assert [f["offset"] for f in fields] == list(range(6))
        x, y = layout.corners(next(t.grid for t in layout.tiles(2, 192) if t.name == scene[:6]))
        lon, lat = Transformer.from_crs(body["properties"]["proj:code"], 4326, always_xy=True).transform(x, y)
        assert body["bbox"] == pytest.approx([lon.min(), lat.min(), lon.max(), lat.max()], abs=1e-6)


def test_regions_are_nested_and_the_parts_add_up(made):
    meta, _, wkb, columns = pyogrio.raw.read(made / "regions.gpkg")
    fields = dict(zip(meta["fields"], columns, strict=True))
    shapes = dict(zip(fields["id"], shapely.from_wkb(wkb), strict=True))
    parent = dict(zip(fields["id"], fields["parent"], strict=True))
    parts = [shapes[name] for name in shapes if parent[name] == "morrowfell"]
    assert len(parts) == 4
    assert sum(part.area for part in parts) == pytest.approx(shapes["morrowfell"].area, rel=1e-9)
    assert shapely.union_all(parts).symmetric_difference(shapes["morrowfell"]).area < 1e-12
    assert meta["crs"] == "EPSG:4326"
    for tile in layout.tiles(2, 192):
        lon, lat = Transformer.from_crs(tile.grid.crs, 4326, always_xy=True).transform(*layout.corners(tile.grid))
        outline = shapely.Polygon(np.column_stack([lon, lat]))
        assert shapes["high_traverse"].intersection(outline).area > 0
        assert sum(part.intersects(outline) for part in parts) >= 2


def test_weather_and_station_are_plausible_and_say_their_units(made):
    x, y = from_plane(np.array([-6e3, 6e3]), np.array([-3e3, 3e3]), "EPSG:4326")
    with xr.open_dataset(made / "weather.nc", engine="h5netcdf") as weather:
        assert weather.attrs["Conventions"].startswith("CF-1.")
        assert weather.longitude.min() < x[0]
        assert weather.longitude.max() > x[1]
        assert weather.latitude.min() < y[0]
        assert weather.latitude.max() > y[1]
        assert weather.air_temperature.attrs["units"] == "K"
        assert 240 < float(weather.air_temperature.min()) < float(weather.air_temperature.max()) < 305
        assert float(weather.vapour_pressure.min()) > 50
        assert 0 <= float(weather.cloud_fraction.min()) < float(weather.cloud_fraction.max()) <= 1
        assert str(weather.time.values[0])[:10] == "2031-03-09"
        assert str(weather.time.values[-1])[:10] == "2031-07-19"
    with xr.open_dataset(made / "insolation.nc", engine="h5netcdf") as insolation:
        flux = insolation.surface_downwelling_shortwave_flux_in_air
        assert flux.attrs["units"] == "W m-2"
        assert float(flux.min()) == 0
        assert 900 < float(flux.max()) < 1361
        assert (flux.sel(time="2031-05-14T02:00") == 0).all()  # local midnight
    rows = np.genfromtxt(made / "stations/high_camp.csv", delimiter=",", names=True, dtype=None, encoding="utf-8")
    assert rows.size == 3 * 3 * 48
    assert (rows["sw_up_wm2"] <= rows["sw_down_wm2"]).all()
    assert ((rows["lw_down_wm2"] > 120) & (rows["lw_down_wm2"] < 420)).all()
    assert rows["relative_humidity_percent"].max() <= 100


def test_the_workflow_is_read_and_nightly_is_the_same_one_for_the_sample(made):
    for path in (made / "workflow.toml", PROJECT / "workflows/nightly.toml"):
        workflow = load_workflow(path)
        assert workflow.path(workflow.scenes.items).is_dir()
        assert workflow.tile_path(workflow.surface.elevation, "FELL-A").is_file()
        assert workflow.path(workflow.regions.file).is_file()
        assert workflow.surface.class_names == CLASSES
    assert [p.name for p in made.rglob("*.toml")] == ["workflow.toml"]
    nightly = (PROJECT / "workflows/nightly.toml").read_text(encoding="utf-8")
    assert nightly == workflow_text("../sample_tiles", "../store")


def test_the_sample_is_what_the_model_makes(tmp_path):
    area = layout.tiles(2, 256)
    day = sky.overpass(layout.overpasses(3, 1)[1], 7)
    days = [sky.overpass(when, 7) for when in layout.overpasses(3, 1)]
    around = layout.extent(area)
    write_tile(tmp_path, area[0], [Overpass(1, day, around)], Climate.of(7, days, around))
    names = sorted(path.relative_to(tmp_path).as_posix() for path in tmp_path.rglob("*.tif"))
    assert len(names) == 2 + len(BANDS) + 1 + 4
    for name in names:
        new, old = read(tmp_path / name), read(SAMPLE / name)
        # another processor may round a cell the other way
        assert (new != old).mean() < 0.001, name
    for path in SAMPLE.rglob("*.json"):
        for name, asset in json.loads(path.read_text(encoding="utf-8")).get("assets", {}).items():
            digest = hashlib.sha256((path.parent / asset["href"]).read_bytes()).hexdigest()
            assert asset["file:checksum"] == "1220" + digest, f"{path.name} {name}"
    assert sum(path.stat().st_size for path in SAMPLE.rglob("*") if path.is_file()) < 5e6
