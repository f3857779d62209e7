"""Are polygons read with care, and does each cell get the regions its centre lies in?"""

import json
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pyogrio.raw
import pytest
import rasterstats
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from rasterio import Affine

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid, Window
from firnlight.io.ground import between
from firnlight.io.regions import ALL, Membership, Region, Regions, read_regions, whole_area

GRID = Grid("EPSG:32624", 600000.0, 5160000.0, 30.0, 20.0, 40, 50)


def square(left, top, right, bottom):
    """A polygon in cells of GRID, rows downwards."""
    x, y = (GRID.left + GRID.dx * v for v in (left, right)), (GRID.top - GRID.dy * v for v in (bottom, top))
    (x0, x1), (y0, y1) = x, y
    return shapely.box(x0, y0, x1, y1)


def regions_of(*rows):
    return Regions("EPSG:32624", tuple(Region(i, i.upper(), p, g) for i, p, g in rows))


def ids_of(regions, grid=GRID):
    """The set of ids of each cell: (rows, cols) of tuples."""
    return ids_in(Membership(regions, grid), grid.whole)


def ids_in(membership, window):
    lengths, numbers, sets = membership.runs(window)
    assert lengths.sum() == window.rows * window.cols
    assert (lengths > 0).all()
    names = np.empty(len(sets), object)
    names[:] = [one.ids for one in sets]
    return np.repeat(names[numbers], lengths).reshape(window.rows, window.cols)


def has(cells, ident):
    return np.vectorize(lambda ids: ident in ids, otypes=[bool])(cells)


@st.composite
def polygons(draw):
    """Star-shaped polygons with rough outlines, some with a hole, some partly off the tile."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    found = []
    for _ in range(draw(st.integers(1, 6))):
        turn = np.sort(rng.random(draw(st.integers(3, 30)))) * 2 * np.pi
        reach = rng.uniform(30, 700, turn.size)
        middle = np.array([600000.0, 5160000.0]) + rng.uniform(-200, 1700, 2) * (1, -0.5)
        outline = middle + np.column_stack([np.cos(turn), np.sin(turn)]) * reach[:, np.newaxis]
        polygon = shapely.make_valid(shapely.Polygon(outline))
        if draw(st.booleans()):
            polygon = polygon.difference(shapely.Point(middle).buffer(25))
        if polygon.area > 0 and polygon.geom_type in ("Polygon", "MultiPolygon"):
            found.append(polygon)
    return found


@pytest.mark.filterwarnings("ignore:Use `@` matmul")
@given(polygons())
@settings(deadline=None, max_examples=40)
def test_counts_equal_rasterstats(shapes):
    """rasterstats.zonal_stats 'count' on the same grid, cells by the centre rule (all_touched off)."""
    cells = ids_of(regions_of(*((f"r{n}", None, shape) for n, shape in enumerate(shapes))))
    affine, ones = Affine(*GRID.transform), np.ones(GRID.shape)
    stats = rasterstats.zonal_stats(shapes, ones, affine=affine, stats="count", nodata=-1)
    assert [int(has(cells, f"r{n}").sum()) for n in range(len(shapes))] == [one["count"] for one in stats]


@given(polygons(), st.integers(1, 30), st.integers(1, 60))
@settings(deadline=None, max_examples=30)
def test_cutting_never_changes_membership(shapes, rows, cols):
    parents = [None, "r0", "r0", "r1", None, "r4"]
    regions = regions_of(*((f"r{n}", parents[n], shape) for n, shape in enumerate(shapes)))
    membership = Membership(regions, GRID)
    whole = ids_in(membership, GRID.whole)
    for window in GRID.windows(rows, cols):
        assert (ids_in(membership, window) == whole[window.slices]).all()


@given(polygons())
@settings(deadline=None, max_examples=30)
def test_parts_and_rest_are_their_whole(shapes):
    parents = [None, "r0", "r0", "r1", "r1", "r0"]
    regions = regions_of(*((f"r{n}", parents[n], shape) for n, shape in enumerate(shapes)))
    cells = ids_of(regions)
    for whole in ("r0", "r1"):
        parts = [name for name, parent in regions.parents.items() if parent == whole]
        if parts:
            assert np.array_equal(sum(has(cells, part).astype(int) for part in parts), has(cells, whole))


def test_neighbours_with_edges_through_centres_share_no_cell_and_leave_none():
    edges = (0, 10.5, 25.5, 50)
    strips = [(f"c{n}", None, square(a, 0, b, 40)) for n, (a, b) in enumerate(pairwise(edges))]
    rows = [("up", None, square(0, 0, 50, 20.5)), ("down", None, square(0, 20.5, 50, 40))]
    for group in (strips, rows):
        cells = ids_of(regions_of(*group))
        assert all(len(ids) == 1 for ids in cells.ravel())
        assert cells[20, 10] == (("c1",) if group is strips else ("down",))


def test_more_than_64_regions_and_free_overlap():
    cells = ids_of(regions_of(*((f"r{n:03}", None, square(0, 0, 50, (n + 1) / 4)) for n in range(150))))
    for row in (0, 7, 39):
        want = tuple(f"r{n:03}" for n in range(150) if (n + 1) / 4 > row + 0.5)
        assert cells[row, 3] == want


def test_nesting_siblings_and_rest():
    regions = regions_of(
        ("basin", None, square(0, 0, 20, 20)),
        ("east", "basin", square(10, 0, 25, 20)),  # reaches over the edge of its basin
        ("west", "basin", square(0, 0, 12, 10)),  # overlaps east, which comes first
        ("peak", "west", square(5, 5, 11, 9)),
        ("lone", None, square(0, 0, 1, 1)),
    )
    cells = ids_of(regions)
    assert cells[0, 0] == ("basin", "lone", "west", "west/rest")
    assert cells[6, 6] == ("basin", "peak", "west")
    assert cells[6, 10] == (
        "basin",
        "east",
    )  # claimed by peak and so by west too: the first in the file has it
    assert cells[15, 3] == ("basin", "basin/rest")
    assert cells[3, 24] == ("basin", "east")
    assert cells[30, 30] == ()
    _, _, sets = Membership(regions, GRID).runs(GRID.whole)
    assert {one.contested for one in sets if one.contested} == {("basin",)}
    assert regions.names["basin/rest"] == "rest of BASIN"
    assert regions.parents["west/rest"] == "west"
    assert regions.roots == ["basin", "lone"]


def test_no_polygons_make_one_region_of_everything():
    regions = whole_area("Morrowfell snowfields")
    assert set(ids_of(regions).ravel()) == {(ALL,)}
    assert regions.names == {ALL: "Morrowfell snowfields"}


@pytest.mark.parametrize("turns", [0, 1, -1])
def test_regions_in_degrees_land_on_the_same_cells(turns):
    there = square(10, 10, 30, 30)
    move = between("EPSG:32624", "EPSG:4326")
    dense = shapely.segmentize(there, 1.0)
    degrees = shapely.transform(
        dense, lambda xy: np.column_stack(move.transform(xy[:, 0], xy[:, 1])) + np.array([360 * turns, 0])
    )
    world = shapely.box(-180, -89, 180, 89)  # far corners have no place in the tile's zone
    regions = Regions("EPSG:4326", (Region("a", "A", None, degrees), Region("w", "W", None, world)))
    cells = ids_of(regions)
    want = np.zeros(GRID.shape, bool)
    want[10:30, 10:30] = True
    assert np.array_equal(has(cells, "a"), want)
    assert has(cells, "w").all()


def test_long_edges_are_straight_in_the_crs_of_the_file():
    """An edge along a parallel bulges by kilometres in a zone: cells follow the parallel, not the chord."""
    grid = Grid("EPSG:32624", 500000.0, 5200000.0, 1000.0, 1000.0, 100, 250)
    regions = Regions("EPSG:4326", (Region("n", "N", None, shapely.box(-60, 46.5, -10, 60)),))
    inside = has(ids_of(regions, grid), "n")
    x, y = np.meshgrid(*grid.centres(grid.whole))
    latitude = between(grid.crs, "EPSG:4326").transform(x, y)[1]
    assert np.array_equal(inside, latitude > 46.5)


def write(path, features):
    collection = {"type": "FeatureCollection", "features": features}
    path.write_text(json.dumps(collection), encoding="utf-8")
    return path


def feature(geometry, **fields):
    shape = None if geometry is None else json.loads(shapely.to_geojson(geometry))
    return {"type": "Feature", "properties": fields, "geometry": shape}


BOX = shapely.box(-37, 46, -36, 47)


def test_geojson_with_text_and_parents(tmp_path):
    path = write(
        tmp_path / "regions.geojson",
        [
            feature(BOX, Code="a\u0007\u202eb", name="Größe <b>\n2</b>", parent=None),
            feature(BOX, Code="c", name=None, parent="ab"),
        ],
    )
    regions = read_regions(path)
    assert [(r.id, r.name, r.parent) for r in regions.all] == [
        ("ab", "Größe <b>2</b>", None),
        ("c", "c", "ab"),
    ]


@pytest.mark.parametrize("ending", ["gpkg", "shp", "fgb"])
def test_other_formats_and_default_ids(tmp_path, ending):
    path = tmp_path / f"regions.{ending}"
    names = np.array(["North", "South"], object)
    shapes = shapely.to_wkb(np.array([BOX, shapely.box(-37, 45, -36, 46)]))
    pyogrio.raw.write(path, shapes, [names], ["title"], geometry_type="Polygon", crs="EPSG:4258")
    regions = read_regions(path)
    assert sorted(r.name for r in regions.all) == ["North", "South"]
    assert len({r.id for r in regions.all}) == 2
    assert "4258" in regions.crs
    assert read_regions(path, id_field="title").roots == [r.name for r in regions.all]


def test_layers_and_fields_are_chosen_by_name(tmp_path):
    path = tmp_path / "two.gpkg"
    for layer, ident in (("basins", "b"), ("bands", "z")):
        fields = [np.array([ident], object), np.array([7.0])]
        pyogrio.raw.write(
            path, shapely.to_wkb(np.array([BOX])), fields, ["id", "number"], geometry_type="Polygon",
            crs="EPSG:4326", layer=layer, append=path.exists(),
        )  # fmt: skip
    assert read_regions(path, layer="bands").all[0].id == "z"
    assert read_regions(path, layer="bands", id_field="number").all[0].id == "7"
    for layer, match in ((None, "basins, bands"), ("nowhere", "nowhere")):
        with pytest.raises(InputProblem, match=match):
            read_regions(path, layer=layer)
    with pytest.raises(InputProblem, match=r"id_field.*found fell"):
        read_regions(path, layer="bands", id_field="fell")


def test_crossing_rings_are_mended_and_named(tmp_path):
    bow = shapely.Polygon([(-37, 46), (-36, 47), (-36, 46), (-37, 47)])
    regions = read_regions(write(tmp_path / "bow.geojson", [feature(bow, id="bow"), feature(BOX, id="box")]))
    assert regions.repaired == ("bow",)
    assert regions.all[0].geometry.is_valid
    assert regions.all[0].geometry.area == pytest.approx(0.5)


LINE = shapely.LineString([(-37, 46), (-36, 47)])
BAD = {
    "doubled id": ([feature(BOX, id="a"), feature(BOX, id="a")], "ids that differ"),
    "no id": ([feature(BOX, id="a"), feature(BOX, id=None)], "id of feature 2"),
    "reserved id": ([feature(BOX, id="all")], "a text of its own"),
    "rest": ([feature(BOX, id="a/rest")], "a text of its own"),
    "unknown parent": ([feature(BOX, id="a", parent="b")], "parent of a: found b"),
    "ring of parents": ([feature(BOX, id="a", parent="b"), feature(BOX, id="b", parent="a")], "lead upwards"),
    "no geometry": ([feature(BOX, id="b"), feature(None, id="a")], "region a: found no polygon"),
    "a line": ([feature(LINE, id="a")], "region a: found no polygon"),
    "nothing": ([], "at least one polygon"),
}


@pytest.mark.parametrize("name", sorted(BAD))
def test_bad_regions_are_refused_with_file_and_cure(tmp_path, name):
    features, match = BAD[name]
    path = write(tmp_path / "bad.geojson", features)
    with pytest.raises(InputProblem, match=match) as caught:
        read_regions(path)
    assert caught.value.where == str(path)


def test_files_that_are_no_vector_files_are_refused(tmp_path):
    with pytest.raises(InputProblem, match="no such file"):
        read_regions(tmp_path / "none.gpkg")
    page = tmp_path / "page.gpkg"
    page.write_text("<html>log in</html>", encoding="utf-8")
    with pytest.raises(InputProblem, match="a readable vector file"):
        read_regions(page)
    good = write(tmp_path / "good.geojson", [feature(BOX, id="a")])
    virtual = tmp_path / "list.vrt"
    virtual.write_text(
        f'<OGRVRTDataSource><OGRVRTLayer name="good"><SrcDataSource>{good}</SrcDataSource></OGRVRTLayer></OGRVRTDataSource>',
        encoding="utf-8",
    )
    with pytest.raises(InputProblem, match="other sources"):
        read_regions(virtual)


@pytest.mark.filterwarnings("ignore:'crs' was not provided")
def test_a_missing_crs_is_refused(tmp_path):
    path = tmp_path / "bare.gpkg"
    pyogrio.raw.write(path, shapely.to_wkb(np.array([BOX])), [], [], geometry_type="Polygon", crs=None)
    with pytest.raises(InputProblem, match="write the CRS into the file"):
        read_regions(path)


def test_windows_off_every_region_are_one_run():
    lengths, _, sets = Membership(regions_of(("a", None, square(0, 0, 5, 5))), GRID).runs(Window(20, 20, 7, 9))
    assert lengths.tolist() == [63]
    assert sets[0].ids == ()
    far = replace(GRID, left=700000.0)
    assert set(ids_of(regions_of(("a", None, square(0, 0, 5, 5))), far).ravel()) == {()}
