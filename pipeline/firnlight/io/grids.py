"""What does a supplied grid say about one UTC day, at any place?"""

from __future__ import annotations

import calendar
import datetime as dt
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firnlight.core.errors import InputProblem
from firnlight.io.grid_files import Supplied, open_supplied
from firnlight.io.grid_places import EVEN_DEG, Box, near_area
from firnlight.io.grid_time import Accumulated, DayPlan, Label, last_start, plan_day
from firnlight.io.ground import between, is_geographic
from firnlight.io.quantities import Conversion, conversion

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
DEEPEST_FALL_WM2 = 5.0  # a running total may fall by rounding; more is another start than thought


def _edges(nodes: Floats, cell: float) -> Floats:
    """Borders of cells, half way between centres: (n + 1,)."""
    middle = (nodes[:-1] + nodes[1:]) / 2
    first, last = (nodes[1] - nodes[0], nodes[-1] - nodes[-2]) if nodes.size > 1 else (cell, cell)
    return np.concatenate([[nodes[0] - first / 2], middle, [nodes[-1] + last / 2]])


def _between_nodes(nodes: Floats, at: Floats) -> tuple[Ints, Ints, Floats]:
    """The node before, the node after and the share of the way, at most 1, between them."""
    before = np.clip(np.searchsorted(nodes, at, side="right") - 1, 0, max(nodes.size - 2, 0))
    after = np.minimum(before + 1, nodes.size - 1)
    gap = np.where(after > before, nodes[after] - nodes[before], 1.0)
    return before, after, np.clip((at - nodes[before]) / gap, 0.0, 1.0)


def _mix(a: Floats, b: Floats, share: Floats) -> Floats:
    """a + (b - a) share, where a neighbour without weight may be NaN."""
    return np.where(share == 0, a, np.where(share == 1, b, a + (b - a) * share))


@dataclass(frozen=True, eq=False)
class DayField:
    """One quantity on its grid through one UTC day.

    Attributes
    ----------
    values : (T, ny, nx)   Means over the steps; NaN is a gap. [`units`]
    edges_h : (T, 2)       Steps in order from 0 to 24, without holes. [h from 00 UTC]
    x, y : (nx,), (ny,)    Cell centres, ascending. [CRS units]
    crs_wkt, name, units : of the grid, the variable and the values.
    """

    values: Floats
    edges_h: Floats
    x: Floats
    y: Floats
    crs_wkt: str
    name: str
    units: str

    @property
    def _goes_round(self) -> bool:
        """Whether the last column is the first one's neighbour."""
        if self.x.size < 2 or not is_geographic(self.crs_wkt):
            return False
        return bool(abs(self.x[0] + 360 - self.x[-1] - np.diff(self.x).max()) < EVEN_DEG * self.x.size)

    def _borders(self) -> tuple[Floats, Floats]:
        steps = [float(np.diff(n).mean()) for n in (self.x, self.y) if n.size > 1]
        return _edges(self.x, steps[0]), _edges(self.y, steps[0])

    def _turned(self, x: ArrayLike, edges: Floats) -> Floats:
        """Longitudes on the grid's own turn; those already on it keep their bits."""
        at = np.asarray(x, np.float64)
        if not is_geographic(self.crs_wkt):
            return at
        far = (at < edges[0]) | (at > edges[-1])
        middle = (edges[0] + edges[-1]) / 2
        return np.where(far, middle + np.mod(at - middle + 180, 360) - 180, at)

    def at(self, x: ArrayLike, y: ArrayLike) -> Floats:
        """Bilinear values at positions in the grid's CRS.

        Parameters
        ----------
        x, y : one broadcast shape   Longitudes on any turn. [CRS units]

        Returns
        -------
        (T, *shape)   In the outer half of the outermost cells the nearest value; NaN farther out, at a NaN position,
        and where a cell with weight is NaN. Takes T doubles for each position: give it nodes, not all cells of a tile.
        """
        edges_x, edges_y = self._borders()
        u, v = np.broadcast_arrays(self._turned(x, edges_x), np.asarray(y, np.float64))
        nodes, columns = self.x, np.arange(self.x.size)
        inside = (v >= edges_y[0]) & (v <= edges_y[-1]) & np.isfinite(u)
        if self._goes_round:
            nodes = np.concatenate([[nodes[-1] - 360], nodes, [nodes[0] + 360]])
            columns = np.concatenate([columns[-1:], columns, columns[:1]])
        else:
            inside &= (u >= edges_x[0]) & (u <= edges_x[-1])
        i0, i1, wx = _between_nodes(nodes, np.where(inside, u, nodes[0]))
        j0, j1, wy = _between_nodes(self.y, np.where(inside, v, self.y[0]))
        i0, i1 = columns[i0], columns[i1]
        low = _mix(self.values[:, j0, i0], self.values[:, j0, i1], wx)
        high = _mix(self.values[:, j1, i0], self.values[:, j1, i1], wx)
        return np.where(inside, _mix(low, high, wy), np.nan)


def field_at(field: DayField, longitude_deg: ArrayLike, latitude_deg: ArrayLike) -> Floats:
    """Bilinear values at places: (T, *shape), as `DayField.at`."""
    return field.at(*_to_grid(field, longitude_deg, latitude_deg))


def _to_grid(field: DayField, longitude_deg: ArrayLike, latitude_deg: ArrayLike) -> tuple[Floats, Floats]:
    lon, lat = np.broadcast_arrays(np.asarray(longitude_deg, np.float64), np.asarray(latitude_deg, np.float64))
    x, y = between("EPSG:4326", field.crs_wkt).transform(lon, lat)
    return np.asarray(x, np.float64), np.asarray(y, np.float64)


def on_grid(field: DayField, longitude_deg: ArrayLike, latitude_deg: ArrayLike) -> tuple[Floats, Floats]:
    """Places in the grid's CRS, longitudes on the grid's own turn: two arrays of the broadcast shape. [CRS units]"""
    x, y = _to_grid(field, longitude_deg, latitude_deg)
    return np.asarray(field._turned(x, field._borders()[0])), y


def cell_edges(field: DayField) -> tuple[Floats, Floats]:
    """Borders of the grid's columns (nx + 1,) and rows (ny + 1,), ascending. [CRS units]"""
    return field._borders()


def cell_index(field: DayField, longitude_deg: ArrayLike, latitude_deg: ArrayLike) -> Ints:
    """Which cell of the grid holds each place.

    Returns
    -------
    shape of the places   row x nx + column, an index into `values[t].ravel()`; -1 outside the grid and at NaN. Borders
    lie half way between centres and belong to the cell above or to the right.
    """
    edges_x, edges_y = field._borders()
    x, y = _to_grid(field, longitude_deg, latitude_deg)
    u, v = np.broadcast_arrays(field._turned(x, edges_x), y)
    col = np.searchsorted(edges_x, u, side="right") - 1
    row = np.searchsorted(edges_y, v, side="right") - 1
    col, row = np.where(u == edges_x[-1], field.x.size - 1, col), np.where(v == edges_y[-1], field.y.size - 1, row)
    inside = (col >= 0) & (col < field.x.size) & (row >= 0) & (row < field.y.size)
    return np.asarray(np.where(inside, row * field.x.size + col, -1))


def _plan(
    source: Supplied,
    day: dt.date,
    convert: Conversion,
    label: Label | None,
    step_hours: float | None,
    accumulated: Accumulated | None,
    starts_hours: Sequence[float] | None,
) -> DayPlan:
    if source.times is None:
        fix = "write CF times into it, or for a GeoTIFF band times, or the day (YYYY-MM-DD) into its name"
        raise InputProblem(source.where, source.name, "no time axis", f"times that hold {day}", fix)
    times = source.times
    hours = times.clock.hours(day)
    bounds = times.bounds.hours(day) if times.bounds else None
    method = source.method
    if convert.quantity != "flux" and not method and bounds is None:
        method = "point"  # the CF default of what is no amount
    starts = None
    if starts_hours is not None:
        starts = last_start(hours, starts_hours)
    elif times.starts is not None:
        starts = np.broadcast_to(times.starts.hours(day), hours.shape)
    elif times.lead_h is not None:
        starts = hours - times.lead_h
    return plan_day(
        hours,
        where=source.where,
        day=day,
        amounts=convert.amounts,
        bounds=bounds,
        method=method,
        label=label,
        step_hours=step_hours,
        accumulated=accumulated,
        starts=starts,
    )


def read_day(
    path: str | Path,
    variable: str | None,
    day: dt.date,
    quantity: str,
    *,
    around: Box | None = None,
    units: str | None = None,
    label: Label | None = None,
    step_hours: float | None = None,
    accumulated: Accumulated | None = None,
    starts_hours: Sequence[float] | None = None,
    crs: str | None = None,
) -> DayField:
    """One UTC day of a gridded variable, read alone and turned into means over steps in our units.

    Parameters
    ----------
    path : NetCDF, Zarr or GeoTIFF. Times without a zone are UTC; any CF calendar. Bands of a GeoTIFF are times: by
        their descriptions or `time` tags, else they cut the day in the file's name evenly.
    variable : its name; None takes the only one. Not used for a GeoTIFF.
    quantity : a key of io/quantities.py, such as "flux" or "air_temperature".
    around : west, south, east, north: only cells near it are read, which bounds the memory. [deg]
    units : in place of the file's.
    label : what a time stands for: "start", "middle" or "end" of its interval, or "instant". None: the file's
        bounds or `cell_methods`; states without either are instants, fluxes without are refused.
    step_hours : length of an interval; None takes the distance of the times. [h]
    accumulated : amounts (J m-2 and such) without bounds are of each "interval", or run "since start".
    starts_hours : UTC hours of the day at which running amounts begin anew; None takes the file's
        forecast_reference_time or forecast_period. [h]
    crs : in place of the file's.

    Returns
    -------
    DayField   Instants become means of straight lines between them (half a step is held at a gap). Steps that reach
    beyond the day are cut and keep their mean. Hours without values are NaN steps, never filled.

    Raises
    ------
    DayMissing (an InputProblem) : the file is sound but holds nothing of that day, or its calendar has no such day.
    InputProblem : file, variable, units, times, coordinates or CRS cannot be used; it names the setting that helps.
    """
    with open_supplied(path, variable, crs) as source:
        told = units or source.units
        convert = conversion(quantity, told, source.where, source.name)
        plan = _plan(source, day, convert, label, step_hours, accumulated, starts_hours)
        if around is not None:
            source = replace(source, places=near_area(source.places, around, source.where))
        values = plan.apply(source.read(plan.needed), plan.needed) * convert.factor + convert.offset
        name = source.name
    if convert.amounts and (values < -DEEPEST_FALL_WM2).any():
        fix = "correct accumulated or starts_hours"
        raise InputProblem(str(path), name, "running amounts that fall", "amounts that rise until they begin anew", fix)
    convert.check(values, str(path), name, str(told))
    places = source.places
    return DayField(values, plan.edges_h, places["x"], places["y"], places["crs_wkt"], name, convert.unit)


def month_shares(day: dt.date) -> tuple[int, int, float]:
    """Months between whose middles the noon of a day lies, and how far on it is from the first: (1..12, 1..12, [1])."""
    lengths = np.array([calendar.monthrange(day.year, m)[1] for m in range(1, 13)], np.float64)
    middles = np.cumsum(lengths) - lengths / 2
    middles = np.concatenate([[-lengths[11] / 2], middles, [lengths.sum() + lengths[0] / 2]])
    at = (day - dt.date(day.year, 1, 1)).days + 0.5
    n = int(np.searchsorted(middles, at, side="right")) - 1
    share = (at - middles[n]) / (middles[n + 1] - middles[n])
    return (n - 1) % 12 + 1, n % 12 + 1, float(share)


def read_static_field(
    path: str | Path,
    variable: str | None,
    day: dt.date,
    quantity: str,
    *,
    around: Box | None = None,
    units: str | None = None,
    crs: str | None = None,
) -> DayField:
    """A field without time, or a monthly climatology at one day; arguments as `read_day`.

    Returns
    -------
    DayField of one step. Of twelve months, those on both sides are mixed by the distance of their middles from the
    day's noon, December beside January.

    Raises
    ------
    InputProblem : as `read_day`; also a time axis that is neither one time nor the twelve months.
    """
    with open_supplied(path, variable, crs) as source:
        told = units or source.units
        convert = conversion(quantity, told, source.where, source.name)
        if convert.amounts:
            raise InputProblem(source.where, source.name, f"units {told!r}", "a rate or a state", "supply no energy amounts")
        if around is not None:
            source = replace(source, places=near_area(source.places, around, source.where))
        if source.count == 1:
            values = source.read(np.array([0]))
        elif source.months is not None and sorted(source.months) == list(range(1, 13)):
            first, second, share = month_shares(day)
            at = [source.months.index(m) for m in (first, second)]
            both = source.read(np.sort(at))
            a, b = both if at[0] < at[1] else both[::-1]
            values = _mix(a, b, np.full(a.shape, share))[np.newaxis]
        else:
            fix = "supply one field, or twelve (January to December, or with CF times)"
            raise InputProblem(source.where, source.name, f"{source.count} times", "none, or the twelve months", fix)
        values = values * convert.factor + convert.offset
        name, places = source.name, source.places
    convert.check(values, str(path), name, str(told))
    edges = np.array([[0.0, 24.0]])
    return DayField(values, edges, places["x"], places["y"], places["crs_wkt"], name, convert.unit)
