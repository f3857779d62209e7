"""Does the truth on slopes hold what physics says, worked out here once more from nothing but sun, air and ground?"""

import ast
import datetime as dt
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import rasterio
from pyproj import Proj, Transformer

from firnlight.demo import layout, sky, slopes, terrain
from firnlight.demo.plane import TilePlane, from_plane, to_plane
from firnlight.demo.truth import air
from firnlight.demo.weather import Climate, longwave_down_wm2
from firnlight.physics import sun
from firnlight.physics.clearsky import bird, global_horizontal, pressure_pa

MARCH, JULY = dt.date(2031, 3, 10), dt.date(2031, 7, 18)
SIGMA = 5.670374419e-8  # W m-2 K-4, exact by the SI of 2019


@pytest.fixture(scope="module")
def climate():
    area = layout.tiles(2, 192)
    return Climate.of(7, [sky.overpass(t, 7) for t in layout.overpasses(3, 1)], layout.extent(area))


@pytest.fixture
def no_error(monkeypatch):
    monkeypatch.setattr(slopes, "_error", lambda *_: 0.0)


def light(relief, day, albedo, climate):
    """Insolation over ground of one albedo."""
    shape = relief.view.shape
    return slopes.day_fluxes(relief, day, 7, np.full(shape, albedo, np.float32), np.zeros(shape, bool), climate).insolation


def unseen(relief):
    """The same ground under a sky that nothing of is seen: over black ground only the beam is left."""
    return replace(relief, view=np.zeros_like(relief.view))


def level(relief):
    flat = np.zeros_like(relief.view)
    return replace(relief, east=flat, north=flat, horizon=np.zeros_like(relief.horizon), view=flat + 1)


def built(monkeypatch, shape_of, size):
    """The relief of a tile of invented ground: height over a plain at 1500 m by the distance from the tile's centre."""
    plane = TilePlane(layout.tiles(1, size)[0].grid)
    inside = np.arange(size)
    x0, y0 = (float(v.mean()) for v in plane.at(inside, inside))

    def height(x, y):
        return (1500 + shape_of(np.hypot(x.astype(float) - x0, y.astype(float) - y0))).astype(np.float32)

    x, y = plane.at(np.arange(-1, size + 1), np.arange(-1, size + 1))
    h, cell = height(x, y).astype(float), plane.grid.dx
    inner = slice(1, -1)
    ground = type("Ground", (), {
        "x_m": x[inner, inner], "y_m": y[inner, inner], "elevation_m": h[inner, inner],
        "east": (h[inner, 2:] - h[inner, :-2]) / (2 * cell), "north": (h[:-2, inner] - h[2:, inner]) / (2 * cell),
    })  # fmt: skip
    monkeypatch.setattr(slopes.terrain, "elevation_m", height)
    monkeypatch.setattr(slopes.terrain, "ground_rows", lambda *_: ground)
    away = np.hypot(x[inner, inner] - x0, y[inner, inner] - y0)
    return slopes.slopes_of(plane), away


def test_no_kernel_of_the_product_has_a_part_in_the_truth():
    """Else a wrong kernel would be held against itself."""
    forbidden = ("horizon", "terrain", "light", "longwave", "day_sky", "chain", "emissivity")
    for path in Path(slopes.__file__).parent.glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            names = [a.name for a in node.names] if isinstance(node, ast.Import | ast.ImportFrom) else []
            module = getattr(node, "module", None) or ""
            for full in (f"{module}.{name}" if module else name for name in names):
                assert not full.startswith(tuple(f"firnlight.physics.{part}" for part in forbidden)), f"{path.name}: {full}"


BOWL_RADIUS_M, BOWL_DEPTH_M = 1000.0, 400.0  # of the sphere; of the bowl, 800 m from its middle to its rim


def bowl(away):
    inside = np.sqrt(np.maximum(BOWL_RADIUS_M**2 - away**2, 0))
    return np.minimum(BOWL_RADIUS_M - BOWL_DEPTH_M - inside, 0)


def test_a_round_bowl_sees_the_sky_and_lights_itself_as_a_sphere_does(monkeypatch, no_error, climate):
    """Any two pieces of a sphere's inside see each other by the same factor, area / (4 pi R2). So everywhere in a bowl of
    depth h the view of the sky is 1 - h / 2R, and its walls, whichever of them the sun finds, light each cell by
    (1 - V) a V G / (1 - a (1 - V)): what enters the opening, spread over the bowl.

    Marches whose steps grow by 5 % pass beside the rim's top: 0.01 of the view, so 5 % of the 0.2 that walls take of it.
    """
    relief, away = built(monkeypatch, bowl, 70)
    deep = away < 650
    view = 1 - BOWL_DEPTH_M / (2 * BOWL_RADIUS_M)
    assert deep.sum() > 1000
    assert np.abs(relief.view[deep] - view).max() < 0.01
    for day, albedo in ((MARCH, 0.85), (JULY, 0.2)):
        flat = light(level(relief), day, albedo, climate)
        diffuse = flat - light(unseen(level(relief)), day, 0.0, climate)
        beam = light(unseen(relief), day, 0.0, climate)
        widen = np.sqrt(1 + relief.east**2 + relief.north**2)
        from_walls = (light(relief, day, albedo, climate) - beam - diffuse * relief.view * widen) / widen
        expected = (1 - view) * albedo * view * flat / (1 - albedo * (1 - view))
        assert from_walls[deep] == pytest.approx(expected[deep], rel=0.05)


@pytest.mark.parametrize(("day", "moved"), [(MARCH, 0.15), (JULY, 0.03)])
def test_a_hill_on_a_plain_neither_makes_nor_loses_beam(monkeypatch, no_error, climate, day, moved):
    """A hill 200 m high with slopes up to 26 degrees: its shadow lacks what its sunny side gets.

    Shadows are longer than the 1.9 km to the tile's edge while the sun is under 6 degrees, and cells across a shadow's edge
    are lit or not: 0.3 % of the light on the hill, where 3 to 15 % has moved.
    """
    relief, away = built(monkeypatch, lambda d: 200 * np.exp(-(d**2) / (2 * 250.0**2)), 128)
    relief = replace(relief, elevation_m=np.full_like(relief.elevation_m, 1500))  # the same air all over
    beam, flat = light(unseen(relief), day, 0.0, climate), light(unseen(level(relief)), day, 0.0, climate)
    hill = away < 750
    assert (beam - flat).sum() == pytest.approx(0, abs=0.003 * flat[hill].sum())
    assert np.abs(beam - flat).sum() > moved * flat[hill].sum()


def sampled_view(east, north, horizon_along, count=1500):
    """Share of directions, drawn by the cosine to the cell's normal, that end in the sky."""
    n = np.arange(count)
    u, turn = (n + 0.5) / count, 2 * np.pi * np.mod(n * 0.6180339887498949, 1)
    normal = np.array([-east, -north, 1.0]) / np.sqrt(1 + east**2 + north**2)
    across = np.cross(normal, [0.0, 1.0, 0.0])
    across /= np.linalg.norm(across)
    along = np.cross(normal, across)
    way = np.sqrt(u)[:, None] * (np.cos(turn)[:, None] * across + np.sin(turn)[:, None] * along)
    way += np.sqrt(1 - u)[:, None] * normal
    up = np.arcsin(way[:, 2])
    return float((up > horizon_along(np.arctan2(way[:, 0], way[:, 1]))).mean())


def test_single_cells_get_what_is_worked_out_for_them_alone(no_error, climate):
    """Marched along the sun's own azimuth through the ground, turned by pyproj's convergence; sky sampled by direction.

    96 horizons read in a line, 5 minutes and air in levels against none of these: 0.5 % of the light, 0.01 of the view.
    """
    plane = TilePlane(layout.tiles(2, 96)[1].grid)
    grid, relief = plane.grid, slopes.slopes_of(plane)
    ground = terrain.ground_rows(plane, 0, grid.rows)
    albedo = sky.surface(ground, sky.overpass(dt.datetime(2031, 3, 10, 13, tzinfo=dt.UTC), 7)).albedo
    got = slopes.day_fluxes(relief, MARCH, 7, albedo, np.zeros(albedo.shape, bool), climate).insolation
    far = [20.0]
    while far[-1] < 10_000:
        far.append(far[-1] + max(20.0, 0.03 * far[-1]))
    far = np.array(far)[:, np.newaxis]
    start = dt.datetime(2031, 3, 10, tzinfo=dt.UTC).timestamp()
    times = start + (np.arange(144) + 0.5) * 600
    darkest, brightest = (np.unravel_index(f(got), got.shape) for f in (np.argmin, np.argmax))
    for r, c in (darkest, brightest, (20, 70), (48, 48), (75, 15)):
        x, y = grid.left + (c + 0.5) * grid.dx, grid.top - (r + 0.5) * grid.dy
        (lon,), (lat,) = Transformer.from_crs(grid.crs, 4326, always_xy=True).transform([x], [y])
        turn = Proj(grid.crs).get_factors(lon, lat).meridian_convergence

        def height(px, py):
            at = to_plane(px, py, grid.crs)
            return terrain.elevation_m(*(v.astype(np.float32) for v in at)).astype(float)

        here = height(np.array([x]), np.array([y]))[0]

        def horizon(azimuth, x=x, y=y, here=here, height=height):
            rise = height(x + far * np.sin(azimuth), y + far * np.cos(azimuth)) - here
            return np.arctan(np.maximum((rise / far).max(axis=0), 0))

        east, north = relief.east[r, c], relief.north[r, c]
        view = sampled_view(east, north, horizon)
        assert relief.view[r, c] == pytest.approx(view, abs=0.01)
        zenith, bearing, distance = sun.position(times, lat, lon)
        clear = bird(zenith, sun.solar_constant_wm2() / distance**2, pressure_pa(here), air())
        z, a = np.radians(zenith), np.radians(bearing - turn)
        facing = np.maximum(np.cos(z) - np.sin(z) * (np.sin(a) * east + np.cos(a) * north), 0)
        beam = (np.nan_to_num(clear.direct_normal_wm2) * facing * (np.pi / 2 - z > horizon(a)))[zenith < 90].sum() / 144
        near, wide = (
            float(albedo[max(0, r - n) : r + n + 1, max(0, c - n) : c + n + 1].mean(dtype=float)) for n in (17, 67)
        )
        lit = global_horizontal(clear.black_ground_wm2, clear.sky_albedo, wide)[zenith < 90]
        whole, diffuse = lit.sum() / 144, (lit - clear.direct_horizontal_wm2[zenith < 90]).sum() / 144
        widen = np.sqrt(1 + east**2 + north**2)
        walls = (1 - view) * widen * near * view * whole / (1 - near * (1 - view))
        assert got[r, c] == pytest.approx(beam + diffuse * view * widen + walls, abs=0.005 * whole + 0.01 * diffuse)


def test_slopes_that_face_the_sun_get_more_most_so_in_march(made):
    gain = {}
    for day in ("20310310", "20310718"):
        north_faces, south_faces = [], []
        for tile in ("FELL-A", "FELL-B"):
            with rasterio.open(made / f"static/{tile}/elevation.tif") as dataset:
                height = dataset.read(1).astype(float)
            with rasterio.open(made / f"truth/{tile}_{day}/insolation.tif") as dataset:
                light_steps = dataset.read(1)
            rise = -np.gradient(height, 30.0)[0]  # to the north; rows go south
            north_faces.append(light_steps[rise < -0.3])
            south_faces.append(light_steps[rise > 0.3])
        gain[day] = np.concatenate(south_faces).mean() / np.concatenate(north_faces).mean()
    assert gain["20310310"] > 1.6
    assert 1.05 < gain["20310718"] < gain["20310310"] - 0.3


def test_errors_have_the_size_that_is_stated_for_them(climate):
    """400 cells, each far from the others, tell a size to 4 %, and 24 days together to 1 %; the 24 shared draws to 15 %."""
    plane = TilePlane(layout.tiles(1, 20)[0].grid)
    relief = level(slopes.slopes_of(plane))
    relief = replace(relief, elevation_m=np.full_like(relief.elevation_m, 1500))
    apart = np.arange(20, dtype=np.float32) * 37_000
    relief = replace(relief, x_m=np.tile(apart, (20, 1)), y_m=np.tile(apart[:, np.newaxis], (1, 20)))
    flat = np.zeros((20, 20), np.float32)
    night = dt.date(2031, 1, 5)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(slopes, "_error", lambda *_: 0.0)
        plain = slopes.day_fluxes(relief, night, 7, flat, flat > 0, climate)
    found = [slopes.day_fluxes(relief, night, seed, flat, flat > 0, climate) for seed in range(24)]
    sky_error = np.array([one.insolation / plain.insolation - 1 for one in found])
    warmth = np.array([one.net_longwave - plain.net_longwave for one in found])
    for error, local, shared in ((sky_error, 0.03, 0.01), (warmth, 6.0, 2.0)):
        assert error.std(axis=(1, 2)).mean() == pytest.approx(local, rel=0.05)
        assert error.mean(axis=(1, 2)).std() == pytest.approx(shared, rel=0.5)
        assert abs(error.mean()) < 4 * shared / np.sqrt(24)
    assert abs(np.corrcoef(sky_error.ravel(), warmth.ravel())[0, 1]) < 0.2  # not one error seen twice


def test_open_level_ground_loses_the_longwave_of_its_own_height(no_error, climate):
    """Three-hourly middles against hours: 0.5 W m-2. Snow is no warmer than melting ice, and ground as warm as the air."""
    plane = TilePlane(layout.tiles(1, 16)[0].grid)
    relief = level(slopes.slopes_of(plane))
    heights = np.linspace(800, 3000, 16)[:, np.newaxis] + np.zeros((16, 16))
    relief = replace(relief, elevation_m=heights)
    snow = np.tile(np.arange(16) < 8, (16, 1))
    for day in (MARCH, JULY):
        got = slopes.day_fluxes(relief, day, 7, np.full((16, 16), 0.5, np.float32), snow, climate).net_longwave
        times = dt.datetime(day.year, day.month, day.day, tzinfo=dt.UTC).timestamp() + (np.arange(8) + 0.5) * 10_800
        warm = climate.temperature_k(times, heights[:, 0])
        vapour, cover = climate.vapour_pressure_pa(times, warm), climate.cloud_fraction(times)
        down = longwave_down_wm2(warm, vapour, np.repeat(cover[:, np.newaxis], 16, axis=1))
        ground = 0.97 * (down - SIGMA * warm**4).mean(axis=0)
        white = 0.99 * (down - SIGMA * np.minimum(warm, 273.15) ** 4).mean(axis=0)
        assert got[:, 12] == pytest.approx(ground, abs=0.5)
        assert got[:, 3] == pytest.approx(white, abs=0.5)
    assert (white[:4] > ground[:4] + 20).all()  # low snow in July, where it would be warm
    narrow = slopes.day_fluxes(
        replace(relief, view=relief.view * 0.6), day, 7, np.full((16, 16), 0.5, np.float32), snow, climate
    )
    assert narrow.net_longwave == pytest.approx(0.6 * got)


def test_grid_north_is_turned_as_pyproj_says():
    """Its convergence is the bearing of grid north as seen from true north."""
    for tile in layout.tiles(2, 64):
        grid = tile.grid
        x, y = (grid.left + grid.right) / 2, (grid.top + grid.bottom) / 2
        (lon,), (lat,) = from_plane(*to_plane(np.array([x]), np.array([y]), grid.crs), "EPSG:4326")
        expected = Proj(grid.crs).get_factors(lon, lat).meridian_convergence
        assert abs(expected) > 1.5
        assert slopes._grid_north(grid) == pytest.approx(expected, abs=0.05)
