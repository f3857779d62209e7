"""Are cells where they should be, and is their ground area true?"""

import math
from dataclasses import replace

import numpy as np
import pytest
from pyproj import CRS, Geod, Proj, Transformer
from pyproj.crs import DerivedGeographicCRS
from pyproj.crs.coordinate_operation import RotatedLatitudeLongitudeConversion

from firnlight.core.errors import InputProblem
from firnlight.core.grid import Grid, Window
from firnlight.io import ground

UTM = Grid("EPSG:32625", 300000.0, 5200020.0, 10.0, 10.0, 10980, 10980)
GEOD = Geod(ellps="WGS84")
PLACES = [(0, 0), (5490, 3), (10979, 10979), (17, 8191)]


def geodesic_cell_m2(grid, row, col, pieces=1):
    """Area of a cell's outline on its ellipsoid by pyproj.Geod, edges cut in pieces. [m2]"""
    along = np.arange(pieces) / pieces
    x0, y0 = grid.left + col * grid.dx, grid.top - row * grid.dy
    x = x0 + grid.dx * np.concatenate([along, np.ones(pieces), 1 - along, np.zeros(pieces)])
    y = y0 - grid.dy * np.concatenate([np.zeros(pieces), along, np.ones(pieces), 1 - along])
    crs = CRS.from_user_input(grid.crs)
    lon, lat = (x, y) if crs.is_geographic else Proj(crs)(x, y, inverse=True)
    return abs(crs.get_geod().polygon_area_perimeter(lon, lat)[0])


def area_cm2(grid, row, col):
    return ground.areas(grid).at(Window(row, col, 1, 1))[0, 0]


@pytest.mark.parametrize("top", [46.5, 0.25, -12.0, 89.75, -89.0])
def test_geographic_cells_match_geodesic_quadrangles(top):
    """pyproj.Geod.polygon_area_perimeter; parallels are cut into 2000 geodesics each."""
    grid = Grid("EPSG:4326", -36.0, top, 0.05, 0.05, 4, 4)
    for row in range(4):
        assert area_cm2(grid, row, 1) == pytest.approx(geodesic_cell_m2(grid, row, 1, 2000) * 1e4, rel=1e-9)


def test_geographic_cells_add_up_to_the_ellipsoid():
    """WGS 84 has a surface of 510 065 622 km2 (from memory; half the last digit is the tolerance)."""
    grid = Grid("EPSG:4326", -180.0, 90.0, 0.05, 0.05, 3600, 7200)
    total = ground.areas(grid).values[:3600, 0].sum() * 7200 / 1e10
    assert total == pytest.approx(510_065_622, abs=0.5)


def test_thin_bands_near_a_pole_lose_no_digits():
    """A thousand bands of a metre around the pole against the same ground in one."""
    thin = Grid("EPSG:4326", 0.0, 90.0, 1e-5, 1e-5, 1000, 10)
    wide = Grid("EPSG:4326", 0.0, 90.0, 1e-5, 1e-2, 1, 10)
    rows = ground.areas(thin).values[:1000, 0]
    assert rows.sum() == pytest.approx(ground.areas(wide).values[0, 0], rel=1e-12)
    assert np.allclose(np.diff(rows, 2) / rows[-1], 0, atol=1e-11)


@pytest.mark.parametrize(
    "grid",
    [
        UTM,
        replace(UTM, crs="EPSG:32624", left=640000.0),
        Grid("EPSG:3035", 4_000_000.0, 3_000_000.0, 100.0, 100.0, 500, 500),
        Grid("EPSG:3413", -200000.0, -2_000_000.0, 30.0, 30.0, 2000, 2000),
        Grid("EPSG:2263", 980000.0, 200000.0, 100.0, 50.0, 300, 300),
        Grid("EPSG:27572", 600000.0, 2_400_000.0, 30.0, 30.0, 300, 300),
    ],
    ids=["utm", "utm far east", "equal area", "polar", "US feet", "grads from Paris"],
)
def test_projected_cells_match_the_geodesic_outline(grid):
    """pyproj.Geod.polygon_area_perimeter of the cell's outline on the ellipsoid of its CRS."""
    for row, col in PLACES:
        row, col = min(row, grid.rows - 1), min(col, grid.cols - 1)
        assert area_cm2(grid, row, col) == pytest.approx(geodesic_cell_m2(grid, row, col, 8) * 1e4, rel=1e-6)


@pytest.mark.parametrize(("cell", "limit"), [(10.0, 1e-9), (20.0, 1e-9), (30.0, 1e-9), (500.0, 1e-7)])
def test_interpolated_areas_stay_within_the_stated_error(cell, limit):
    """Against pyproj's areal scale at the cell's own centre."""
    grid = replace(UTM, dx=cell, dy=cell, rows=2000, cols=2000)
    lattice = ground.areas(grid)
    centre = lattice.row_step // 2
    x, y = grid.centres(Window(centre, centre, 1200, 1200))
    for n in range(0, 1200, 171):
        lon, lat = Proj(grid.crs)(x[n], y[n], inverse=True)
        want = cell * cell * 1e4 / Proj(grid.crs).get_factors(lon, lat).areal_scale
        got = lattice.at(Window(centre + n, centre + n, 1, 1))[0, 0]
        assert got == pytest.approx(want, rel=limit)


def test_whole_areas_are_rounded_half_up_and_the_same_for_any_window():
    lattice = ground.areas(UTM)
    whole = ground.cell_areas_cm2(lattice, Window(100, 200, 70, 90))
    assert whole.dtype == np.int64
    assert np.array_equal(ground.cell_areas_cm2(lattice, Window(131, 217, 3, 5)), whole[31:34, 17:22])
    assert np.abs(whole - lattice.at(Window(100, 200, 70, 90))).max() <= 0.5


def spread(grid):
    rows, cols = np.meshgrid(np.arange(0, grid.rows, 97), np.arange(0, grid.cols, 101), indexing="ij")
    return rows.ravel(), cols.ravel()


@pytest.mark.parametrize(
    ("grid", "step"),
    [
        (UTM, 200),
        (UTM, 500),
        (replace(UTM, crs="EPSG:32601", left=340000.0, top=7_300_000.0, rows=4000, cols=4000), 200),
        (replace(UTM, crs="EPSG:3413", left=-700000.0, top=-900000.0, rows=4000, cols=4000), 100),
        (Grid("EPSG:4326", 179.5, 47.0, 0.001, 0.001, 1000, 1000), 64),
    ],
    ids=["utm 2 km", "utm 5 km", "across 180", "polar", "degrees across 180"],
)
def test_positions_are_good_to_a_hundred_thousandth_of_a_degree(grid, step):
    """Against pyproj at every 97th row and 101st column."""
    lon, lat = ground.positions(grid, step)
    rows, cols = spread(grid)
    x, y = grid.left + (cols + 0.5) * grid.dx, grid.top - (rows + 0.5) * grid.dy
    want_lon, want_lat = Transformer.from_crs(grid.crs, "EPSG:4326", always_xy=True).transform(x, y)
    for r, c, one_lon, one_lat in zip(rows, cols, want_lon, want_lat, strict=True):
        place = Window(int(r), int(c), 1, 1)
        assert abs((lon.at(place)[0, 0] - one_lon + 180) % 360 - 180) < 1e-5
        assert abs(lat.at(place)[0, 0] - one_lat) < 1e-5
    assert np.abs(np.diff(lon.values, axis=1)).max() < 90


@pytest.mark.parametrize(("crs", "atol"), [("EPSG:4326", 1e-9), ("EPSG:4313", 5e-3)])
def test_geographic_tiles_reach_the_pole(crs, atol):
    """The second datum lies some hundred metres off, and knows no latitude beyond the pole."""
    grid = Grid(crs, 0.0, -89.5, 0.1, 0.1, 5, 5)
    latitude = ground.positions(grid, 3)[1].at(grid.whole)
    np.testing.assert_allclose(latitude[:, 0], [-89.55, -89.65, -89.75, -89.85, -89.95], atol=atol)


def test_what_has_no_place_or_no_area_is_refused():
    around_pole = Grid("EPSG:3413", -50000.0, 50000.0, 100.0, 100.0, 1000, 1000)
    with pytest.raises(InputProblem, match="pole"):
        ground.positions(around_pole, 16)
    with pytest.raises(InputProblem, match="a place inside"):
        ground.positions(replace(UTM, left=1e9), 1000)
    with pytest.raises(InputProblem, match="a place inside"):
        ground.areas(replace(UTM, top=5e8))
    with pytest.raises(InputProblem, match="a place inside"):
        ground.areas(Grid("EPSG:4326", 0.0, 90.5, 0.1, 0.1, 10, 10))
    with pytest.raises(InputProblem, match="cell area"):
        ground.areas(replace(UTM, dx=20000.0, dy=20000.0, rows=5, cols=5))
    rotated = DerivedGeographicCRS("EPSG:4326", RotatedLatitudeLongitudeConversion(40, 0)).to_wkt()
    for crs in (rotated, "EPSG:4978", "EPSG:99999"):
        with pytest.raises(InputProblem, match="map projection"):
            ground.areas(Grid(crs, 0.0, 10.0, 0.1, 0.1, 10, 10))


def test_sizes_and_centres():
    assert ground.cell_size_m(Grid("EPSG:2263", 980000.0, 200000.0, 100.0, 50.0, 3, 3)) == pytest.approx(30.48006096)
    degree = ground.cell_size_m(Grid("EPSG:4326", 0.0, 1.0, 1.0, 0.5, 2, 2))
    assert degree == pytest.approx(math.radians(1) * 6378137)
    lon, lat = ground.centre_lonlat(replace(UTM, left=500000.0 - 54900.0))
    assert lon == pytest.approx(-33)
    assert 46 < lat < 47
