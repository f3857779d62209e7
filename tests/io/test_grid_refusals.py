"""Is a supplied field that cannot be told, or is broken, refused by name and with a cure?"""

import pickle
from pathlib import Path

import numpy as np
import pytest
import rasterio
import xarray as xr
from affine import Affine

from firnlight.core.errors import InputProblem
from firnlight.io import grids
from grid_maker import DAY, HOURLY, LAT, STARTS, TRUE, read, write

SAMPLE = Path(__file__).parents[2] / "sample_tiles"
EACH = np.stack([STARTS, STARTS + 1], axis=1)


def problem(*args, **more):
    with pytest.raises(InputProblem) as caught:
        read(*args, **more)
    assert pickle.loads(pickle.dumps(caught.value)).fix == caught.value.fix
    return caught.value


def ended(per_day):
    """Totals since the last of `per_day` starts of each day, at the ends of the hours. [J m-2]"""
    parts = HOURLY.reshape(3 * per_day, 24 // per_day, *HOURLY.shape[1:])
    return 3600 * parts.cumsum(axis=1).reshape(HOURLY.shape)


# refusals


@pytest.mark.parametrize(
    ("written", "settings", "what", "word"),
    [
        ({}, {}, "label", '"start" | "end" | "middle"'),
        ({}, {"label": "begin"}, "label", '"instant"'),
        ({"units": "J m-2"}, {"label": "end"}, "accumulated", '"interval" | "since start"'),
        ({"units": "J m-2"}, {"accumulated": "since start"}, "starts_hours", "[0, 12]"),
        ({"bounds": EACH}, {"accumulated": "interval"}, "accumulated", "energy unit"),
        ({"units": "furlong"}, {"label": "start"}, "sw", "W m-2, kW m-2"),
        ({"units": "w m-2"}, {"label": "start"}, "sw", "'W m-2'"),
        ({"units": ""}, {"label": "start"}, "sw", "no units"),
        ({"units": "kW m-2"}, {"label": "start"}, "sw", "within"),
        ({"calendar": "lunar"}, {"label": "start"}, "calendar of time", "noleap"),
        ({"since": "months since 2031-01-01"}, {"label": "start"}, "units of time", "hours since"),
        ({"since": "hours since 2031-02-40"}, {"label": "start"}, "units of time", "hours since"),
        ({"attrs": {"cell_methods": "time: maximum"}, "bounds": EACH}, {}, "cell_methods", "extremes"),
        ({"bounds": EACH * [1, 1] + [0, 1]}, {}, "time 2031-03-10", "overlap"),
        ({"hours": np.append(STARTS[:-1], 30.0)}, {"label": "start"}, "time", "twice"),
        ({"hours": np.append(STARTS[:-1], 30.0)}, {"label": "instant"}, "time", "twice"),
        ({"hours": np.append(STARTS[:-1], np.nan)}, {"label": "start"}, "time", "empty"),
        ({"attrs": {"grid_mapping": "utm"}, "bounds": EACH}, {}, "grid_mapping of sw", "utm"),
        ({"lat": LAT + 60, "bounds": EACH}, {}, "latitude", "90"),
        ({"lat": LAT[[0, 2, 1]], "bounds": EACH}, {}, "y or latitude", "unordered"),
        ({"bounds": EACH}, {"crs": "EPSG:0"}, "CRS", "known"),
        ({"bounds": EACH}, {"around": (10, 10, 11, 11)}, "area", "covers"),
    ],
)
def test_what_cannot_be_told_is_refused_by_name(tmp_path, written, settings, what, word):
    found = problem(write(tmp_path / "sw.nc", **written), **settings)
    assert found.what == what
    assert word in str(found)


def test_running_amounts_read_with_the_wrong_start_are_refused(tmp_path):
    path = write(tmp_path / "sw.nc", ended(2), units="J m-2", hours=STARTS + 1)
    assert "starts_hours" in problem(path, accumulated="since start", starts_hours=[0]).fix


def test_the_nearest_variable_is_named(tmp_path):
    path = write(tmp_path / "sw.nc", bounds=EACH, other=(("lat", "lon"), TRUE[0]))
    with pytest.raises(InputProblem, match="write 'sw'"):
        grids.read_day(path, "sv", DAY, "flux")
    with pytest.raises(InputProblem, match="one of: sw, other"):
        grids.read_day(path, None, DAY, "flux")


def test_one_time_without_bounds_needs_its_length(tmp_path):
    path = write(tmp_path / "sw.nc", TRUE[:1], STARTS[24:25])
    assert problem(path, label="start").what == "step_hours"
    field = read(path, label="start", step_hours=24)
    np.testing.assert_array_equal(field.values, TRUE[:1])
    assert field.edges_h.tolist() == [[0, 24]]


@pytest.mark.parametrize("broken", ["none", "empty", "text", "cut", "folder", "hdf"])
def test_a_broken_file_is_refused(tmp_path, broken):
    path = tmp_path / "sw.nc"
    if broken == "cut":
        whole = write(path, bounds=EACH).read_bytes()
        path.write_bytes(whole[: len(whole) // 2])
    elif broken == "folder":
        path.mkdir()
    elif broken != "none":
        path.write_bytes({"empty": b"", "text": b"a,b\n1,2\n", "hdf": b"\x89HDF\r\n\x1a\n" + bytes(500)}[broken])
    found = problem(path)
    assert found.what == "file"
    assert found.where == str(path)


def test_a_raster_without_crs_or_turned_is_refused(tmp_path):
    about = {"driver": "GTiff", "count": 1, "height": 3, "width": 3, "dtype": "float32"}
    for name, more, what in (("a", {"crs": None}, "CRS"), ("b", {"crs": "EPSG:4326"}, "geotransform")):
        turned = Affine.rotation(30) if name == "b" else Affine.identity()
        path = tmp_path / f"{name}_20310310.tif"
        with rasterio.open(path, "w", transform=Affine(1, 0, 5, 0, -1, 5) @ turned, **about, **more) as out:
            out.write(np.ones((1, 3, 3), np.float32))
        assert problem(path).what == what


@pytest.mark.parametrize("form", [2, 3])
def test_zarr_is_read_in_both_forms(tmp_path, form):
    inner = xr.load_dataset(write(tmp_path / "a.nc", bounds=EACH), engine="h5netcdf", decode_cf=False)
    inner.to_zarr(tmp_path / "sw.zarr", zarr_format=form, consolidated=False)
    assert (read(tmp_path / "sw.zarr").values == TRUE).all()
    chunk = max((p for p in (tmp_path / "sw.zarr").rglob("*") if p.is_file()), key=lambda p: p.stat().st_size)
    chunk.write_bytes(b"nothing")
    with pytest.raises(InputProblem):
        read(tmp_path / "sw.zarr")


def test_netcdf_3_is_read(tmp_path):
    inner = xr.load_dataset(write(tmp_path / "a.nc", bounds=EACH), engine="h5netcdf", decode_cf=False)
    inner.to_netcdf(tmp_path / "classic.nc", engine="scipy", format="NETCDF3_64BIT")
    assert (read(tmp_path / "classic.nc").values == TRUE).all()
