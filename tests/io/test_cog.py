"""Is a map a valid COG with the cells that were put in, whatever the blocks, and whole or not there?"""

from dataclasses import replace

import numpy as np
import pytest
import rasterio

from firnlight.core.grid import Grid
from firnlight.core.layers import layer
from firnlight.io.cog import CogWriter

GRID = Grid("EPSG:32624", 600000.0, 5160000.0, 30.0, 30.0, 700, 333)


def written(path, grid, block, threads=1, name="albedo_u"):
    about = layer(name)
    shape = (len(about.parts), *grid.shape)
    cells = np.random.default_rng(1).integers(0, 200, shape).astype(about.dtype)
    writer = CogWriter(path, about, grid, {"FIRNLIGHT_KEY": "k"})
    for window in grid.windows(*block):
        writer.write(window, cells[(slice(None), *window.slices)])
    result = writer.finish(threads)
    assert not path.exists()
    writer.publish()
    return cells, result


@pytest.mark.parametrize("shape", [(1, 1), (512, 513), (700, 333), (1030, 1)], ids=str)
@pytest.mark.parametrize("name", ["albedo", "albedo_u", "quality"])
def test_cells_come_back_and_the_layout_is_a_cog(tmp_path, shape, name):
    grid = replace(GRID, rows=shape[0], cols=shape[1])
    cells, result = written(tmp_path / "m.tif", grid, (512, 2048), name=name)
    with rasterio.open(tmp_path / "m.tif") as dataset:
        assert (dataset.read() == cells).all()
        assert dataset.tags(ns="IMAGE_STRUCTURE")["LAYOUT"] == "COG"
        assert dataset.tags()["FIRNLIGHT_KEY"] == "k"
        assert dataset.transform == rasterio.Affine(*grid.transform)
        if max(shape) > 512:
            assert dataset.overviews(1)
    assert (tmp_path / "m.tif").stat().st_size == result.size


def test_blocks_and_threads_change_no_byte(tmp_path):
    found = {
        written(tmp_path / f"{n}.tif", GRID, *how)[1]
        for n, how in enumerate([((512, 2048), 1), ((100, 37), 1), ((512, 512), 4)])
    }
    assert len(found) == 1


def test_a_discarded_map_leaves_nothing(tmp_path):
    writer = CogWriter(tmp_path / "m.tif", layer("albedo"), GRID, {})
    writer.write(next(GRID.windows(64, 64)), np.zeros((64, 64), np.int16))
    writer.discard()
    assert not list(tmp_path.iterdir())


def test_the_old_map_stays_until_the_new_one_is_whole(tmp_path):
    path = tmp_path / "m.tif"
    written(path, GRID, (512, 512))
    before = path.read_bytes()
    writer = CogWriter(path, layer("albedo"), GRID, {})
    writer.finish()
    assert path.read_bytes() == before
    writer.discard()
    assert [one.name for one in tmp_path.iterdir()] == ["m.tif"]
