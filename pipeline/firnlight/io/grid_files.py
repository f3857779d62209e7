"""How is one variable of a NetCDF, Zarr or GeoTIFF file found, with its places and times, and its cells read?"""

from __future__ import annotations

import datetime as dt
import difflib
import re
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from pyproj import CRS
from pyproj.exceptions import CRSError

from firnlight.core.errors import InputProblem
from firnlight.io.grid_places import Places, coordinate, placed, wkt_of
from firnlight.io.grid_time import Clock
from firnlight.io.rasters import open_raster

if TYPE_CHECKING:
    import xarray as xr  # costs half a second: imported when a file is opened

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
_NAMES = {"x": ("longitude", "lon", "x", "easting"), "y": ("latitude", "lat", "y", "northing")}
_STANDARD = {"x": ("longitude", "projection_x_coordinate", "grid_longitude"),
             "y": ("latitude", "projection_y_coordinate", "grid_latitude")}  # fmt: skip
_DEGREES = {"x": ("degrees_east", "degree_east", "degrees_E", "degree_E", "degreesE", "degreeE"),
            "y": ("degrees_north", "degree_north", "degrees_N", "degree_N", "degreesN", "degreeN")}  # fmt: skip
_NAME_DAY = re.compile(r"(?<!\d)(\d{4})-?(\d{2})-?(\d{2})(?!\d)")


@dataclass(frozen=True, eq=False)
class TimeAxis:
    """What a file says about its times; each clock counts on its own epoch."""

    clock: Clock
    bounds: Clock | None = None
    starts: Clock | None = None
    lead_h: Floats | None = None


@dataclass(frozen=True, eq=False)
class Supplied:
    """One variable of an open file.

    Attributes
    ----------
    places : where its cells are.
    count : length of its time axis, 1 without one.
    times : None without a time axis; `months` where it counts the months of a year (12 numbers).
    cells : (time indices, first row, end row, first column, end column) -> raw cells (k, rows, cols).
    """

    where: str
    name: str
    units: str | None
    method: str
    places: Places
    count: int
    times: TimeAxis | None
    months: tuple[int, ...] | None
    cells: Callable[[Ints, int, int, int, int], Floats]

    def read(self, indices: Ints) -> Floats:
        """Cells at these indices of the time axis: (k, ny, nx), NaN where the file says missing.

        Raises
        ------
        InputProblem : the file is damaged.
        """
        rows, cols = self.places["rows"], self.places["cols"]
        r0, c0 = int(rows.min()), int(cols.min())
        try:
            block = self.cells(indices, r0, int(rows.max()) + 1, c0, int(cols.max()) + 1)
        except (OSError, RuntimeError, ValueError) as error:
            fix = "deliver the file again: it is damaged or cut short"
            raise InputProblem(self.where, self.name, f"cells that cannot be read ({error})", "a whole file", fix) from None
        return block[:, rows - r0][:, :, cols - c0]


def decoded(raw: NDArray[Any], attrs: dict[str, Any]) -> Floats:
    """Numbers behind packed ones, by CF: fill, missing and out-of-range values are NaN, then scale and offset."""
    if str(attrs.get("_Unsigned", "")).lower() == "true" and raw.dtype.kind == "i":
        raw = raw.view(f"u{raw.dtype.itemsize}")
    values = raw.astype(np.float64)
    bad = ~np.isfinite(values)
    for key in ("_FillValue", "missing_value"):
        for fill in np.atleast_1d(attrs.get(key, [])):
            with np.errstate(over="ignore", invalid="ignore"):  # a fill that the type cannot hold marks nothing
                bad |= raw == np.asarray(fill).astype(raw.dtype)
    low, high = attrs.get("valid_range", (attrs.get("valid_min"), attrs.get("valid_max")))
    if low is not None:
        bad |= values < float(low)
    if high is not None:
        bad |= values > float(high)
    values[bad] = np.nan
    return values * float(attrs.get("scale_factor", 1.0)) + float(attrs.get("add_offset", 0.0))


def text(attrs: dict[str, Any], key: str) -> str:
    value = attrs.get(key, "")
    value = value.item() if isinstance(value, np.ndarray) and value.size == 1 else value
    return value.decode() if isinstance(value, bytes) else str(value)


def open_dataset(path: str | Path) -> xr.Dataset:
    """Open a NetCDF file or Zarr folder lazily, nothing decoded.

    Raises
    ------
    InputProblem : no such file, another format, or a damaged file.
    """
    import xarray as xr

    name = str(path)
    wanted = "a NetCDF file, a Zarr folder or a GeoTIFF"
    file = Path(path)
    if not file.exists():
        raise InputProblem(name, "file", "no such file", wanted, "deliver the file, or correct its path")
    try:
        if file.is_dir():
            engine = "zarr"
            if not any((file / n).exists() for n in ("zarr.json", ".zgroup", ".zmetadata")):
                raise InputProblem(name, "file", "a folder that is no Zarr group", wanted, "name the file itself")
        else:
            with file.open("rb") as stream:
                first = stream.read(8)
            if first.startswith(b"\x89HDF\r\n\x1a\n"):
                engine = "h5netcdf"
            elif first[:3] == b"CDF" and first[3:4] in (b"\x01", b"\x02"):
                engine = "scipy"
            else:
                found = "0 bytes" if not first else f"bytes that begin {first!r}"
                raise InputProblem(name, "file", found, wanted, "deliver the file in one of these forms")
        more: dict[str, Any] = {"consolidated": False} if engine == "zarr" else {}
        return xr.open_dataset(name, engine=engine, decode_cf=False, cache=False, **more)
    except InputProblem:
        raise
    except Exception as error:  # each reader raises its own kinds on damaged bytes
        fix = "deliver the file again: it is damaged or cut short"
        raise InputProblem(name, "file", f"a file that cannot be opened ({error})", wanted, fix) from None


def _dataset_crs(data: xr.Dataset, name: str, where: str, degrees: bool) -> str:
    """From the grid mapping; longitude and latitude without one are WGS 84."""
    words = re.split(r"[:\s]+", text(data[name].attrs, "grid_mapping").strip())
    keys = ("crs_wkt", "spatial_ref", "grid_mapping_name")
    found = [w for w in words if w in data.variables]
    if words[0] and not found:
        raise InputProblem(where, f"grid_mapping of {name}", words[0], "a variable of the file", "write that variable")
    found = found or [str(v) for v in data.variables if any(k in data[v].attrs for k in keys)]
    if found:
        attrs = dict(data[found[0]].attrs)
        for key in keys[:2]:
            if text(attrs, key):
                return wkt_of(text(attrs, key), where)
        try:
            return str(CRS.from_cf(attrs).to_wkt())
        except (CRSError, KeyError, ValueError) as error:
            fix = "write the CRS into that variable as crs_wkt, or set crs"
            raise InputProblem(where, f"grid mapping {found[0]}", str(error)[:120], "a known CRS", fix) from None
    if degrees:
        return wkt_of("EPSG:4326", where)
    fix = "write a grid mapping with crs_wkt into the file, or set crs"
    raise InputProblem(where, "CRS", "none", "the CRS of its x and y", fix)


def _axis(data: xr.Dataset, name: str, axis: str, where: str) -> str:
    """Dimension of a variable that runs along x or y."""
    for dim in map(str, data[name].dims):
        if dim not in data.variables or data[dim].ndim != 1:
            continue
        attrs = dict(data[dim].attrs)
        told = text(attrs, "axis").lower() == axis or text(attrs, "standard_name") in _STANDARD[axis]
        if told or text(attrs, "units") in _DEGREES[axis] or dim.lower() in _NAMES[axis]:
            return dim
    found = "dimensions " + (", ".join(map(str, data[name].dims)) or "none")
    wanted = f"one with a 1-D coordinate along {axis} (longitude, latitude, x or y)"
    raise InputProblem(where, name, found, wanted, "write CF coordinates (axis, standard_name or units) into the file")


def _clock(data: xr.Dataset, name: str, where: str, parent: str | None = None) -> Clock:
    attrs = dict(data[name].attrs)
    own = dict(data[parent].attrs) if parent else {}
    units = text(attrs, "units") or text(own, "units")
    calendar = text(attrs, "calendar") or text(own, "calendar") or "standard"
    if data[name].dtype.kind not in "iuf":
        raise InputProblem(where, name, f"values of type {data[name].dtype}", "numbers with CF units", "write CF times")
    return Clock(decoded(data[name].values, attrs), units, calendar.lower(), where, name)


def time_axis(data: xr.Dataset, dim: str, where: str) -> TimeAxis:
    """Times along a dimension, with their bounds and the start of their forecast where the file has them.

    Raises
    ------
    InputProblem : no coordinate of numbers with CF units, or bounds that are missing or of another shape.
    """
    if dim not in data.variables:
        raise InputProblem(where, dim, "no coordinate", "a time coordinate with CF units", "write the times into the file")
    clock = _clock(data, dim, where)
    name = text(dict(data[dim].attrs), "bounds")
    bounds = None
    if name:
        if name not in data.variables or data[name].shape != (clock.numbers.size, 2):
            fix = "write the bounds, or take the attribute out and set label"
            raise InputProblem(where, f"bounds of {dim}", name, "a variable of the file with two times each", fix)
        bounds = _clock(data, name, where, parent=dim)
    starts, lead = None, None
    for other in map(str, data.variables):
        kind = text(dict(data[other].attrs), "standard_name")
        if data[other].dims not in ((), (dim,)) or other == dim:
            continue
        if kind == "forecast_reference_time":
            starts = _clock(data, other, where)
        elif kind == "forecast_period":
            # a length of time: counted on any epoch it is that many hours after it
            length = _clock(data, other, where)
            span = Clock(length.numbers, f"{length.units} since 2000-01-01", "standard", where, other)
            lead = span.hours(dt.date(2000, 1, 1))
    return TimeAxis(clock, bounds, starts, lead)


def _time_dim(data: xr.Dataset, name: str, others: list[str], where: str) -> str | None:
    """The dimension of times among those left; all others must have length 1."""
    long = [d for d in others if data.sizes[d] > 1]
    for dim in others:
        attrs = dict(data[dim].attrs) if dim in data.variables else {}
        told = text(attrs, "axis") == "T" or text(attrs, "standard_name") == "time" or " since " in text(attrs, "units")
        if (told or dim.lower() in ("time", "month")) and long in ([], [dim]):
            return dim
    if long:
        wanted = "at most a time axis beside its two axes of places"
        raise InputProblem(where, name, "dimensions " + ", ".join(map(str, data[name].dims)), wanted,
                           "write each level, member or forecast into a file or variable of its own")  # fmt: skip
    return None


def choose(where: str, wanted: str | None, names: list[str]) -> str:
    """A variable by its name; without a name, the only one there is.

    Raises
    ------
    InputProblem : no such variable (with the nearest name), or a choice that is left open.
    """
    if wanted in names:
        return str(wanted)
    if wanted is None and len(names) == 1:
        return names[0]
    near = difflib.get_close_matches(wanted or "", names, n=1, cutoff=0.5)
    fix = f"write {near[0]!r}" if near else "set variable to one of them"
    known = "one of: " + (", ".join(names) or "(the file has no gridded variable)")
    raise InputProblem(where, "variable", wanted or "no name", known, fix)


def _from_dataset(data: xr.Dataset, where: str, variable: str | None, crs: str | None) -> Supplied:
    bounds = {text(dict(data[v].attrs), "bounds") for v in data.variables}
    names = [str(v) for v in data.variables if data[v].ndim >= 2 and v not in bounds]
    name = choose(where, variable, names)
    field = data[name]
    x_dim, y_dim = (_axis(data, name, axis, where) for axis in "xy")
    if field.dtype.kind not in "iuf":
        raise InputProblem(where, name, f"values of type {field.dtype}", "numbers", "write the field as numbers")
    degrees = any(
        text(dict(data[x_dim].attrs), k) in v for k, v in (("units", _DEGREES["x"]), ("standard_name", ("longitude",)))
    )
    wkt = wkt_of(crs, where) if crs else _dataset_crs(data, name, where, degrees)
    others = [str(d) for d in field.dims if d not in (x_dim, y_dim)]
    t_dim = _time_dim(data, name, others, where)
    count = data.sizes[t_dim] if t_dim else 1
    times, months = None, None
    if t_dim is not None:
        if " since " in text(dict(data[t_dim].attrs) if t_dim in data.variables else {}, "units"):
            times = time_axis(data, t_dim, where)
            months = tuple(times.clock.months()) if data.sizes[t_dim] == 12 else None
        elif data.sizes[t_dim] == 12:
            numbers = data[t_dim].values if t_dim in data.variables else np.arange(1, 13)
            months = tuple(int(m) for m in numbers)
        elif data.sizes[t_dim] > 1 or t_dim.lower() == "time":
            times = time_axis(data, t_dim, where)
    attrs = dict(field.attrs)
    said = re.search(rf"\b(?:{re.escape(t_dim or 'time')}|time)\s*:\s*(\w+)", text(attrs, "cell_methods"))

    def cells(indices: Ints, r0: int, r1: int, c0: int, c1: int) -> Floats:
        near = indices.size and indices[-1] - indices[0] + 1 == indices.size
        at: Any = slice(int(indices[0]), int(indices[-1]) + 1) if near else indices
        picked = {d: 0 for d in others if d != t_dim} | {y_dim: slice(r0, r1), x_dim: slice(c0, c1)}
        if t_dim is None:
            return decoded(field.isel(picked).transpose(y_dim, x_dim).values[np.newaxis], attrs)
        return decoded(field.isel(picked | {t_dim: at}).transpose(t_dim, y_dim, x_dim).values, attrs)

    x, y = (
        coordinate(decoded(data[d].values, dict(data[d].attrs)), text(dict(data[d].attrs), "units"), d, wkt, where)
        for d in (x_dim, y_dim)
    )
    units = text(attrs, "units") or None
    method = said[1] if said else ""
    return Supplied(where, name, units, method, placed(x, y, wkt, where), count, times, months, cells)


def _raster_times(source: Any, where: str) -> TimeAxis | None:
    """Times in band names; else the day of the file's name, cut into as many parts as there are bands."""
    zero = dt.datetime(2000, 1, 1, tzinfo=dt.UTC)
    units = "seconds since 2000-01-01"
    told = []
    for band, text in enumerate(source.descriptions, 1):
        tags = {k.lower(): v for k, v in source.tags(band).items()}
        try:
            time = dt.datetime.fromisoformat(tags.get("time") or text or "")
        except ValueError:
            break
        told.append((time.replace(tzinfo=time.tzinfo or dt.UTC) - zero).total_seconds())
    if len(told) == source.count:
        return TimeAxis(Clock(np.array(told), units, "standard", where))
    for y, m, d in _NAME_DAY.findall(Path(where).stem):
        try:
            start = (dt.datetime(int(y), int(m), int(d), tzinfo=dt.UTC) - zero).total_seconds()
        except ValueError:
            continue
        cuts = start + np.linspace(0, 86_400, source.count + 1)
        bounds = Clock(np.stack([cuts[:-1], cuts[1:]], axis=1), units, "standard", where)
        return TimeAxis(Clock(cuts[:-1], units, "standard", where), bounds)
    return None


def _from_raster(source: Any, where: str, crs: str | None) -> Supplied:
    t = source.transform
    if t.b or t.d:
        raise InputProblem(where, "geotransform", tuple(t)[:6], "cells without rotation", "warp the raster north-up")
    if not crs and not source.crs:
        raise InputProblem(where, "CRS", "none", "a coordinate reference system", "write the CRS into the file, or set crs")
    wkt = wkt_of(crs or source.crs.to_wkt(), where)
    x = t.c + t.a * (np.arange(source.width) + 0.5)
    y = t.f + t.e * (np.arange(source.height) + 0.5)
    tags = {k.lower(): v for k, v in source.tags().items()}

    def cells(indices: Ints, r0: int, r1: int, c0: int, c1: int) -> Floats:
        bands = [int(n) + 1 for n in indices]
        raw = source.read(bands, window=((r0, r1), (c0, c1)))
        packed = [{"scale_factor": source.scales[b - 1], "add_offset": source.offsets[b - 1]} for b in bands]
        fills = [{} if source.nodatavals[b - 1] is None else {"missing_value": source.nodatavals[b - 1]} for b in bands]
        return np.stack([decoded(v, p | f) for v, p, f in zip(raw, packed, fills, strict=True)])

    months = tuple(range(1, 13)) if source.count == 12 else None
    units = source.units[0] or tags.get("units")
    name = tags.get("variable") or Path(where).stem
    times = _raster_times(source, where)
    return Supplied(where, name, units, "", placed(x, y, wkt, where), source.count, times, months, cells)


@contextmanager
def open_supplied(path: str | Path, variable: str | None, crs: str | None = None) -> Iterator[Supplied]:
    """Open one variable of a file; a GeoTIFF holds one variable, its bands are times, and `variable` is not used.

    Parameters
    ----------
    crs : taken in place of the file's own.

    Raises
    ------
    InputProblem : no such file or variable, no CRS, coordinates or times that cannot be understood, a damaged file.
    """
    where = str(path)
    try:
        with Path(path).open("rb") as stream:
            first = stream.read(4)
    except OSError:
        first = b""  # told below
    if first in (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+"):
        with open_raster(path) as source:
            yield _from_raster(source, where, crs)
        return
    with open_dataset(path) as data:
        yield _from_dataset(data, where, variable, crs)
