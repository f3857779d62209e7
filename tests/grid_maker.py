"""Gridded files of three days with one field, in all the forms that the tests need."""

import datetime as dt

import numpy as np
import rasterio
import xarray as xr
from affine import Affine

from firnlight.io import grids

DAY = dt.date(2031, 3, 10)
FIRST = dt.date(2031, 3, 9)  # the files begin a day before and end a day after
LON, LAT = np.arange(-36.2, -35.75, 0.1), np.arange(46.4, 46.65, 0.1)
STARTS = np.arange(72.0)
HOURLY = np.round(np.random.default_rng(5).uniform(0, 900, (72, LAT.size, LON.size)), 1)
TRUE = HOURLY[24:48]


def write(
    path,
    values=HOURLY,
    hours=STARTS,
    *,
    bounds=None,
    units="W m-2",
    lon=LON,
    lat=LAT,
    since="hours since 2031-03-09 00:00:00",
    calendar="standard",
    attrs=None,
    encoding=None,
    **more,
):
    """A CF file of one field, `sw`."""
    time = {"units": since, "calendar": calendar, "standard_name": "time"}
    data = xr.Dataset(
        {"sw": (("time", "lat", "lon"), values, {"units": units, **(attrs or {})}), **more},
        {
            "time": ("time", hours, time),
            "lat": ("lat", lat, {"units": "degrees_north"}),
            "lon": ("lon", lon, {"units": "degrees_east"}),
        },
    )
    if bounds is not None:
        data["time"].attrs["bounds"] = "time_bnds"
        data["time_bnds"] = (("time", "two"), bounds)
    data.to_netcdf(path, engine="h5netcdf", encoding={"sw": encoding or {}})
    return path


def write_tif(path, values, top_down=True, **tags):
    """Bands of one field, north up."""
    bands = values[:, ::-1] if top_down else values
    top = LAT[-1] + 0.05 if top_down else LAT[0] - 0.05
    transform = Affine(0.1, 0, LON[0] - 0.05, 0, -0.1 if top_down else 0.1, top)
    about = {"driver": "GTiff", "count": len(values), "height": LAT.size, "width": LON.size, "dtype": "float64"}
    with rasterio.open(path, "w", crs="EPSG:4326", transform=transform, nodata=-1.0, **about) as out:
        out.write(bands)
        out.update_tags(units="W m-2", **tags)
    return path


def read(path, day=DAY, **more):
    return grids.read_day(path, None, day, "flux", **more)


def climatology(path, months, **more):
    data = xr.Dataset(
        {
            "aod": (
                ("month", "lat", "lon"),
                np.asarray(months, float)[:, None, None] / 100 + np.zeros((1, 3, 5)),
                {"units": "1"},
            )
        },
        {"lat": ("lat", LAT, {"units": "degrees_north"}), "lon": ("lon", LON, {"units": "degrees_east"}), **more},
    )
    data.to_netcdf(path, engine="h5netcdf")
    return path
