"""Does each owned cell get its stratum once, and do areas add up exactly, inside and outside the tiles?"""

import json
import os
from dataclasses import replace

import exactextract
import numpy as np
import pytest
import rasterio
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Geod

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid
from firnlight.core.settings import ElevationBands
from firnlight.io import strata
from firnlight.io.ground import areas, cell_areas_cm2, to_lonlat
from firnlight.io.ownership import owned
from firnlight.io.rasters import grid_of, open_raster, read_window
from firnlight.io.regions import Region, Regions, whole_area

GRID = Grid("EPSG:32625", 300000.0, 5160000.0, 30.0, 30.0, 60, 70)
EAST = replace(GRID, left=GRID.left + 40 * 30)  # shares columns 40 to 69
GRIDS = {"a": GRID, "b": EAST}
BANDS = ElevationBands(from_m=1000.0, to_m=1600.0, step_m=200.0)
CLASSES = {1: "open ground", 2: "conifer forest", 7: "open ground"}


def write(path, values, grid=GRID, nodata=None, **extra):
    with rasterio.open(
        path, "w", driver="GTiff", height=grid.rows, width=grid.cols, count=1, dtype=values.dtype,
        crs=grid.crs, transform=rasterio.Affine(*grid.transform), nodata=nodata, **extra,
    ) as dataset:  # fmt: skip
        dataset.write(values, 1)
    return str(path)


def boxes(*rows):
    """Regions of whole cells: id, parent, left, top, right, bottom in cells of GRID."""
    found = []
    for ident, parent, left, top, right, bottom in rows:
        x0, x1, y0, y1 = (
            GRID.left + 30 * left,
            GRID.left + 30 * right,
            GRID.top - 30 * bottom,
            GRID.top - 30 * top,
        )
        found.append(Region(ident, ident.upper(), parent, shapely.box(x0, y0, x1, y1)))
    return Regions(GRID.crs, tuple(found))


NESTED = boxes(
    ("basin", None, 5, 5, 55, 50), ("upper", "basin", 5, 5, 30, 30),
    ("lower", "basin", 20, 20, 55, 40),
    ("other", None, 50, 30, 69, 58),
)  # fmt: skip


@pytest.fixture
def layers(tmp_path):
    rng = np.random.default_rng(5)
    heights = np.array([800, 1000, 1199.9, 1200, 1599, 1600, 2000, -9999.9, np.nan], np.float32)
    height = rng.choice(heights, GRID.shape)
    cover = rng.choice(np.array([0, 1, 2, 3, 7, 255], np.uint8), GRID.shape)
    elevation = write(tmp_path / "elevation.tif", height, nodata=-9999.9)
    return elevation, write(tmp_path / "land_cover.tif", cover, nodata=0), height, cover


def build(
    tmp_path,
    regions=NESTED,
    tile="a",
    grids=GRIDS,
    elevation=None,
    cover=None,
    bands=BANDS,
    name="strata.tif",
):
    out = tmp_path / tile / name
    table = strata.build_strata(grids, tile, regions, elevation, cover, CLASSES, bands, out, "key")
    with rasterio.open(out) as dataset:
        assert dataset.nodata == strata.NOBODY
        assert dataset.dtypes == ("int32",)
        assert dataset.block_shapes == [(512, 512)]
        assert dataset.compression.name.lower() == "zstd"
        assert grids[tile].difference(grid_of(out)) is None
        return table, dataset.read(1)


def test_every_cell_has_the_stratum_of_its_layers(tmp_path, layers):
    elevation, cover_path, height, cover = layers
    table, raster = build(tmp_path, elevation=elevation, cover=cover_path)
    own = owned(GRIDS, "a").mask(GRID.whole)
    area = cell_areas_cm2(areas(GRID), GRID.whole)
    bands = {
        800: (None, 1000),
        1000: (1000, 1200),
        1200: (1200, 1400),
        1599: (1400, 1600),
        1600: (1600, None),
    }
    bands |= {2000: (1600, None), float(np.float32(1199.9)): (1000, 1200)}
    covers = {1: "open ground", 7: "open ground", 2: "conifer forest"}
    inside = np.zeros(GRID.shape, bool)
    inside[5:50, 5:55] = True
    inside[30:58, 50:69] = True
    assert np.array_equal(raster != strata.NOBODY, own & inside)
    for r, c in np.argwhere(raster >= 0)[::7]:
        one = table.strata[raster[r, c]]
        assert (one.band_low_m, one.band_high_m) == bands.get(float(height[r, c]), (None, None))
        assert one.land_cover == covers.get(int(cover[r, c]), "other")
        assert ("basin" in one.regions) == (5 <= r < 50 and 5 <= c < 55)
        assert ("upper" in one.regions) == (5 <= r < 30 and 5 <= c < 30)
        assert ("other" in one.regions) == (30 <= r < 58 and 50 <= c < 69)
    for number, one in enumerate(table.strata):
        assert one.cells == (raster == number).sum() > 0
        assert one.area_cm2 == area[raster == number].sum()
    assert sum(one.area_cm2 for one in table.strata) == area[own & inside].sum()
    assert [one.order for one in table.strata] == sorted(one.order for one in table.strata)


def test_children_and_rest_add_up_to_their_parent_and_overlap_is_told(tmp_path, layers):
    table, _ = build(tmp_path, elevation=layers[0], cover=layers[1])
    area = {}
    for one in table.strata:
        for region in one.regions:
            area[region] = area.get(region, 0) + one.area_cm2
    assert area["upper"] + area["lower"] + area["basin/rest"] == area["basin"]
    assert table.region_names["basin/rest"] == "rest of BASIN"
    assert table.warnings == ("region basin: 100 cells lie in several of its parts; the first in the file has them",)
    assert sum(one.cells for one in table.strata if "upper" in one.regions) == 25 * 25


def test_tiles_together_hold_each_region_once(tmp_path):
    tables = [build(tmp_path, tile=tile)[0] for tile in GRIDS]
    cells = {}
    for table in tables:
        for one in table.strata:
            for region in one.regions:
                cells[region] = cells.get(region, 0) + one.cells
    assert cells["basin"] == 50 * 45
    assert cells["other"] == 19 * 28


@pytest.mark.parametrize(("rows", "cols"), [(512, 13), (1, 70), (7, 11)])
def test_numbers_do_not_depend_on_the_windows(tmp_path, layers, monkeypatch, rows, cols):
    want, want_raster = build(tmp_path, elevation=layers[0], cover=layers[1])
    first = (tmp_path / "a/strata.json").read_bytes()
    monkeypatch.setattr(strata, "WINDOW_ROWS", rows)
    monkeypatch.setattr(strata, "WINDOW_COLS", cols)
    table, raster = build(tmp_path, elevation=layers[0], cover=layers[1])
    assert table == want
    assert np.array_equal(raster, want_raster)
    assert (tmp_path / "a/strata.json").read_bytes() == first


def test_the_table_comes_back_and_no_scratch_is_left(tmp_path, layers):
    table, _ = build(tmp_path, elevation=layers[0], cover=layers[1])
    assert strata.read_strata_table(tmp_path / "a/strata.tif") == table
    assert sorted(os.listdir(tmp_path / "a")) == ["strata.json", "strata.tif"]
    (tmp_path / "a/strata.json").write_text('{"strata": [', encoding="utf-8")
    with pytest.raises(InputProblem, match="it makes them again"):
        strata.read_strata_table(tmp_path / "a/strata.tif")


def test_a_failed_build_leaves_what_was_there(tmp_path, layers):
    table, raster = build(tmp_path, elevation=layers[0])
    damaged = tmp_path / "elevation.tif"
    damaged.write_bytes(damaged.read_bytes()[:9000])
    with pytest.raises(InputProblem, match=r"elevation\.tif"):
        build(tmp_path, elevation=str(damaged))
    assert strata.read_strata_table(tmp_path / "a/strata.tif") == table
    assert sorted(os.listdir(tmp_path / "a")) == ["strata.json", "strata.tif"]
    with open_raster(tmp_path / "a/strata.tif") as dataset:
        assert np.array_equal(read_window(dataset, GRID.whole), raster)


def test_without_layers_and_regions_there_is_one_stratum(tmp_path):
    table, raster = build(tmp_path, regions=whole_area("Morrowfell snowfields"))
    (one,) = table.strata
    assert (one.regions, one.land_cover, one.band_low_m, one.band_high_m) == (("all",), "all", None, None)
    assert table.region_names == {"all": "Morrowfell snowfields"}
    assert one.cells == (raster == 0).sum() == owned(GRIDS, "a").mask(GRID.whole).sum()


def test_no_owned_cell_in_a_region_makes_an_empty_table(tmp_path):
    table, raster = build(tmp_path, regions=boxes(("far", None, 500, 0, 510, 9)))
    assert table.strata == ()
    assert (raster == strata.NOBODY).all()


@pytest.mark.parametrize("count", [3, 60])
def test_a_cell_on_an_edge_belongs_to_the_upper_band(tmp_path, count):
    """Edges without an exact binary form, few and many: the same rule as the printed edges."""
    bands = ElevationBands(from_m=0.1, to_m=0.1 + count * 0.1, step_m=0.1)
    edges = strata.band_edges(bands)
    lows = np.array([low for low, _ in edges[1:-1]])
    height = np.resize(np.concatenate([lows, np.nextafter(lows, -1)]), GRID.shape)
    table, raster = build(
        tmp_path, whole_area("M"), elevation=write(tmp_path / "e.tif", height), bands=bands, grids={"a": GRID}
    )
    for value, number in zip(height.ravel()[:200], raster.ravel()[:200], strict=True):
        one = table.strata[number]
        assert one.band_low_m is None or one.band_low_m <= value
        assert one.band_high_m is None or value < one.band_high_m
    assert edges[0] == (None, 0.1)
    assert edges[-2] == (bands.to_m, None)


def test_whole_number_heights_and_their_nodata(tmp_path):
    height = np.resize(np.array([999, 1000, -32768, 1600], np.int16), GRID.shape)
    path = write(tmp_path / "e.tif", height, nodata=-32768)
    table, raster = build(tmp_path, whole_area("M"), elevation=path, grids={"a": GRID})
    met = [(table.strata[n].band_low_m, table.strata[n].band_high_m) for n in raster[0, :4]]
    assert met == [(None, 1000.0), (1000.0, 1200.0), (None, None), (1600.0, None)]


def test_cover_without_data_is_other_even_where_its_code_is_listed(tmp_path):
    cover = np.resize(np.array([1, 2, 7], np.int16), GRID.shape)
    path = write(tmp_path / "c.tif", cover, nodata=7)
    table, raster = build(tmp_path, whole_area("M"), cover=path, grids={"a": GRID})
    assert [table.strata[n].land_cover for n in raster[0, :3]] == ["open ground", "conifer forest", "other"]


@pytest.mark.parametrize("which", ["elevation", "cover"])
def test_a_layer_on_another_grid_is_refused_with_its_name(tmp_path, which):
    path = write(tmp_path / f"{which}.tif", np.zeros(GRID.shape, np.float32), replace(GRID, left=GRID.left + 15))
    with pytest.raises(InputProblem, match=r"origin shifted by 0\.500 of a cell") as caught:
        build(tmp_path, **{which: path})
    assert caught.value.where == path


def test_sums_are_exact_for_the_largest_cells(tmp_path):
    """Cells of 44 km2: a float64 sum of their cm2 would be rounded."""
    grid = Grid("EPSG:3035", 3_000_000.0, 4_000_000.0, 6600.0, 6600.7, 300, 300)
    table, raster = build(tmp_path, whole_area("M"), grids={"a": grid})
    area = cell_areas_cm2(areas(grid), grid.whole)
    assert table.strata[0].area_cm2 == sum(map(int, area.ravel()))
    assert (raster == 0).all()


def test_zonal_totals_equal_exactextract(tmp_path):
    """exactextract's weighted_sum (weights: our cell areas) and count, on polygons of whole cells."""
    values = np.random.default_rng(2).normal(300, 50, GRID.shape)
    regions = boxes(("one", None, 3, 4, 30, 40), ("two", None, 25, 10, 66, 59))
    table, raster = build(tmp_path, regions, grids={"a": GRID})
    area = cell_areas_cm2(areas(GRID), GRID.whole)
    paths = [write(tmp_path / "v.tif", values), write(tmp_path / "w.tif", area.astype(np.float64))]
    shapes = [{"type": "Feature", "geometry": json.loads(shapely.to_geojson(region.geometry))} for region in regions.all]
    with rasterio.open(paths[0]) as v, rasterio.open(paths[1]) as w:
        found = exactextract.exact_extract(v, shapes, ["weighted_sum", "count"], weights=w)
    for region, one in zip(regions.all, found, strict=True):
        numbers = [n for n, s in enumerate(table.strata) if region.id in s.regions]
        cells = np.isin(raster, numbers)
        assert one["properties"]["weighted_sum"] == pytest.approx((values[cells] * area[cells]).sum(), rel=1e-12)
        assert one["properties"]["count"] == sum(table.strata[n].cells for n in numbers)


def geodesic_cm2(polygon):
    """Area of a polygon in GRID's CRS by pyproj.Geod, edges cut to 100 m. [cm2]"""
    move = to_lonlat(GRID.crs)
    dense = shapely.transform(shapely.segmentize(polygon, 100), lambda xy: np.column_stack(move.transform(*xy.T)))
    return abs(Geod(ellps="WGS84").geometry_area_perimeter(dense)[0]) * 1e4


def test_ground_outside_every_tile_matches_the_geodesic_area():
    """shapely difference in the tiles' CRS, measured by pyproj.Geod."""
    regions = boxes(("in", None, 5, 5, 20, 20), ("half", None, 60, 50, 200, 100), ("out", None, 300, 300, 350, 310))
    found = strata.outside_area_cm2(regions, GRIDS)
    covered = shapely.union_all([shapely.box(g.left, g.bottom, g.right, g.top) for g in GRIDS.values()])
    assert found["in"] == 0
    for name, number in (("half", 1), ("out", 2)):
        want = geodesic_cm2(regions.all[number].geometry.difference(covered))
        assert found[name] == pytest.approx(want, rel=1e-6)


@given(st.integers(0, 2**32 - 1))
@settings(deadline=None, max_examples=20)
def test_outside_parts_and_rest_add_up(seed):
    rng = np.random.default_rng(seed)
    parents = [None, "r0", "r0", "r1", "r1", None]
    rows = []
    for n, parent in enumerate(parents):
        left, top = rng.uniform(-60, 100, 2)
        rows.append((f"r{n}", parent, left, top, left + rng.uniform(1, 90), top + rng.uniform(1, 90)))
    found = strata.outside_area_cm2(boxes(*rows), GRIDS)
    assert found["r1"] + found["r2"] + found["r0/rest"] == found["r0"]
    assert found["r3"] + found["r4"] + found["r1/rest"] == found["r1"]
    assert min(found.values()) >= 0


def test_outside_the_first_of_overlapping_parts_counts_and_a_whole_holds_its_parts():
    found = strata.outside_area_cm2(
        boxes(("p", None, 0, 90, 40, 100), ("x", "p", 0, 90, 30, 100), ("y", "p", 20, 90, 40, 100)), GRIDS
    )
    assert found["y"] * 2 < found["x"] < found["p"] == found["x"] + found["y"]
    assert found["p/rest"] == 0
    # a strip of the whole that is rounding by itself, but not for its part
    edge = 110.00005
    found = strata.outside_area_cm2(boxes(("p", None, 0, 0, edge, 60), ("x", "p", 109, 0, edge, 60)), GRIDS)
    assert found["p"] == found["x"] > 0


def test_no_slit_opens_between_tiles_side_by_side():
    grids = {"a": GRID, "b": replace(GRID, left=GRID.right, rows=37), "c": replace(GRID, top=GRID.bottom)}
    assert strata.outside_area_cm2(boxes(("r", None, 69.9, 7.4, 70.1, 7.6)), grids) == {"r": 0}
    assert strata.outside_area_cm2(whole_area("M"), grids) == {"all": 0}


def truncated(path):
    write(path, np.random.default_rng(0).random(GRID.shape), compress="deflate")
    path.write_bytes(path.read_bytes()[:5000])


def test_what_is_no_raster_is_refused(tmp_path):
    page, empty, virtual, cut = (tmp_path / name for name in ("page.tif", "empty.tif", "list.vrt", "cut.tif"))
    page.write_text("<html>log in</html>", encoding="utf-8")
    empty.touch()
    source = write(tmp_path / "good.tif", np.zeros(GRID.shape, np.uint8))
    virtual.write_text(
        '<VRTDataset rasterXSize="70" rasterYSize="60"><VRTRasterBand dataType="Byte" band="1">'
        f"<SimpleSource><SourceFilename>{source}</SourceFilename></SimpleSource></VRTRasterBand></VRTDataset>",
        encoding="utf-8",
    )
    truncated(cut)
    os.mkfifo(tmp_path / "pipe.tif")
    missing, pipe = tmp_path / "none.tif", tmp_path / "pipe.tif"
    for path in (page, empty, virtual, tmp_path, missing, pipe, "/vsicurl/none", "a\0b"):
        with pytest.raises(InputProblem) as caught:
            open_raster(path)
        assert caught.value.where == str(path)
    with pytest.raises(InputProblem, match="a folder or device"):
        open_raster(pipe)
    with pytest.raises(InputProblem, match=r"cut\.tif"), open_raster(cut) as dataset:
        read_window(dataset, GRID.whole)


@pytest.mark.filterwarnings("ignore:Dataset has no geotransform")
def test_grids_are_read_or_refused(tmp_path):
    assert grid_of(write(tmp_path / "good.tif", np.zeros(GRID.shape, np.uint8))) == GRID
    local = "+proj=laea +lat_0=46.5 +lon_0=-36 +datum=WGS84 +units=m"
    odd = replace(GRID, crs=rasterio.CRS.from_string(local).to_wkt())
    assert grid_of(write(tmp_path / "odd.tif", np.zeros(GRID.shape, np.uint8), odd)).crs.startswith("PROJCS[")
    for name, transform, crs, match in (
        ("turned", rasterio.Affine(30, 5, 0, 5, -30, 0), GRID.crs, "without rotation"),
        ("south", rasterio.Affine(30, 0, 0, 0, 30, 0), GRID.crs, "without rotation"),
        ("bare", rasterio.Affine(30, 0, 0, 0, -30, 0), None, "write the CRS"),
    ):
        path = tmp_path / f"{name}.tif"
        with rasterio.open(
            path, "w", driver="GTiff", height=9, width=9, count=1, dtype="uint8", crs=crs, transform=transform
        ) as dataset:
            dataset.write(np.zeros((1, 9, 9), np.uint8))
        with pytest.raises(InputProblem, match=match):
            grid_of(path)
