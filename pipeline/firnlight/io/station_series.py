"""What did a station measure, hour by hour, on one UTC day?"""

from __future__ import annotations

import csv
import datetime as dt
import math
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from firnlight.core.errors import InputProblem
from firnlight.io.grid_files import choose, decoded, open_dataset, text, time_axis
from firnlight.io.grid_time import DayMissing, Label, plan_day, smallest_step
from firnlight.io.quantities import conversion

Floats = NDArray[np.float64]
SENTINELS = (-9999.0, -999.0, -6999.0)  # common practice for "no value", no source
EMPTY = ("", "nan", "na", "n/a", "null", "none", "-")
SUFFIXES = {"wm2": "W m-2", "jm2": "J m-2", "kjm2": "kJ m-2", "mjm2": "MJ m-2", "whm2": "Wh m-2", "c": "degC", "k": "K",
            "percent": "%", "pct": "%", "pa": "Pa", "hpa": "hPa", "kpa": "kPa", "ms": "m s-1"}  # fmt: skip
_REAL_CALENDARS = ("standard", "gregorian", "proleptic_gregorian")
_EPOCH = dt.date(1970, 1, 1)
_WANTED = "a table of measurements (CSV with one header line, or NetCDF)"


@dataclass(frozen=True, eq=False)
class DaySeries:
    """One column through one UTC day.

    Attributes
    ----------
    values : (T,)          Means over the steps; NaN is a gap. [`units`]
    edges_h : (T, 2)       Steps in order from 0 to 24, without holes. [h from 00 UTC]
    name, units : of the column and the values.
    """

    values: Floats
    edges_h: Floats
    name: str
    units: str


@dataclass(frozen=True, eq=False)
class StationSeries:
    """One column of a station's file.

    Attributes
    ----------
    times_s : (n,)            Time labels, ascending, each once. [s since 1970-01-01 UTC]
    values : (n,)             NaN where missing. [`units`; J m-2 where `amounts`]
    bounds_s : (n, 2), None   The file's own intervals. [s since 1970-01-01 UTC]
    where, name, units, amounts, method, label, step_hours : what `day` needs to know.
    """

    times_s: Floats
    values: Floats
    bounds_s: Floats | None
    where: str
    name: str
    units: str
    amounts: bool
    method: str
    label: Label | None
    step_hours: float | None

    def day(self, day: dt.date) -> DaySeries:
        """Steps of one UTC day; what the file lacks is NaN, and a day it lacks is NaN throughout.

        Raises
        ------
        InputProblem : it cannot be told what a time stands for (set `label`), or intervals overlap.
        """
        zero = (day - _EPOCH).days * 86_400
        hours = np.round(self.times_s - zero) / 3600
        bounds = None if self.bounds_s is None else np.round(self.bounds_s - zero) / 3600
        try:
            plan = plan_day(
                hours,
                where=self.where,
                day=day,
                amounts=self.amounts,
                bounds=bounds,
                method=self.method,
                label=self.label,
                step_hours=self.step_hours,
                accumulated="interval" if self.amounts else None,
            )
        except DayMissing:
            step = self.step_hours or (smallest_step(hours, self.where) if hours.size > 1 else 24.0)
            cuts = np.linspace(0, 24, max(round(24 / step), 1) + 1)
            gaps = np.full(cuts.size - 1, np.nan)
            return DaySeries(gaps, np.stack([cuts[:-1], cuts[1:]], axis=1), self.name, self.units)
        return DaySeries(plan.apply(self.values, np.arange(hours.size)), plan.edges_h, self.name, self.units)


def column_units(column: str) -> str | None:
    """Units that a column's name tells: "sw_down_wm2", "SWin [W m-2]" and such; None where it tells none."""
    bracket = re.search(r"[\[(]([^\])]+)[\])]\s*$", column)
    if bracket:
        return bracket[1]
    return SUFFIXES.get(column.lower().rsplit("_", 1)[-1]) if "_" in column else None


def _number(cell: str, separator: str) -> float | None:
    """A cell as a number, NaN where it says missing, None where it cannot be read."""
    word = cell.strip().strip("\"'")
    if word.lower() in EMPTY:
        return math.nan
    for form in (word, word.replace(",", ".") if separator != "," else word):
        try:
            value = float(form)
        except ValueError:
            continue
        return value if math.isfinite(value) else math.nan
    return None


def _time(cell: str, form: str | None, offset_h: float) -> float | None:
    word = cell.strip().strip("\"'")
    try:
        time = dt.datetime.strptime(word, form) if form else dt.datetime.fromisoformat(word)
    except ValueError:
        return None
    if time.tzinfo is None:
        return time.replace(tzinfo=dt.UTC).timestamp() - offset_h * 3600
    return time.timestamp()


def _rows(path: Path) -> Iterator[tuple[int, list[str], str]]:
    """Line number, cells and separator of each line that is neither empty nor a comment."""
    separator = ""
    with path.open(encoding="utf-8-sig", errors="replace", newline="") as stream:
        for number, line in enumerate(stream, 1):
            if "\0" in line:
                raise InputProblem(str(path), f"line {number}", "bytes that are no text", _WANTED, "deliver the file again")
            if not line.strip() or line.startswith("#"):
                continue
            separator = separator or max("\t;,", key=line.count)
            yield number, next(csv.reader([line], delimiter=separator)), separator


def _read_csv(
    path: Path, column: str, time_column: str | None, time_format: str | None, utc_offset_hours: float
) -> tuple[Floats, Floats]:
    where = str(path)
    rows = _rows(path)
    header = [name.strip() for name in next(rows, (0, [], ","))[1]]
    if len(header) < 2:
        found = "no header line" if not header else f"a header of one column, {header[0][:60]!r}"
        raise InputProblem(where, "header", found, _WANTED, "write the column names on the first line")
    value_at = header.index(choose(where, column, header))
    told = [n for n in header if n.lower().startswith(("time", "date"))]
    time_at = header.index(choose(where, time_column or (told or header)[0], header))
    times: list[float] = []
    values: list[float] = []
    seen: dict[float, tuple[int, float]] = {}
    for number, cells, separator in rows:
        if len(cells) != len(header):
            found = f"{len(cells)} cells, where the header has {len(header)}"
            raise InputProblem(
                where, f"line {number}", found, "one cell for each column", "complete the line, or take it out"
            )
        time = _time(cells[time_at], time_format, utc_offset_hours)
        if time is None:
            wanted = f"a time of the form {time_format}" if time_format else "an ISO 8601 time such as 2031-03-09T00:30:00Z"
            fix = "set time_format, or begin lines that are no measurement with #"
            raise InputProblem(where, f"line {number}, {header[time_at]}", repr(cells[time_at][:40]), wanted, fix)
        value = _number(cells[value_at], separator)
        if value is None:
            found = repr(cells[value_at][:40])
            fix = "correct the cell, or leave it empty where nothing was measured"
            raise InputProblem(where, f"line {number}, {header[value_at]}", found, "a number", fix)
        line, before = seen.setdefault(time, (number, value))
        if line == number:
            times.append(time)
            values.append(value)
        elif not (value == before or (math.isnan(value) and math.isnan(before))):
            found = f"the time of line {line} again with another value"
            fix = "take one out; clocks must not be set back in autumn"
            raise InputProblem(where, f"line {number}, {header[time_at]}", found, "each time once", fix)
    order = np.argsort(times, kind="stable")
    return np.array(times)[order], np.array(values)[order]


def _read_netcdf(path: Path, column: str) -> tuple[Floats, Floats, Floats | None, str, str]:
    """Times, values, bounds, units and method of a variable along time."""
    where = str(path)
    with open_dataset(path) as data:
        columns = [str(v) for v in data.data_vars if data[v].ndim]
        names = [v for v in columns if max(data[v].shape) == data[v].size > 0 and data[v].dtype.kind in "iuf"]
        name = choose(where, column, names)
        long = [str(d) for d in data[name].dims if data.sizes[d] > 1] or [str(data[name].dims[0])]
        axis = time_axis(data, long[0], where)
        if axis.clock.calendar not in _REAL_CALENDARS:
            wanted = "one of " + ", ".join(_REAL_CALENDARS)
            fix = "write the calendar of the measurements"
            raise InputProblem(where, f"calendar of {long[0]}", axis.clock.calendar, wanted, fix)
        attrs = dict(data[name].attrs)
        try:
            values = decoded(data[name].values, attrs).ravel()
        except (OSError, RuntimeError, ValueError) as error:
            found, fix = f"values that cannot be read ({error})", "deliver the file again: it is damaged or cut short"
            raise InputProblem(where, name, found, "a whole file", fix) from None
        times = axis.clock.hours(_EPOCH) * 3600
        bounds = axis.bounds.hours(_EPOCH) * 3600 if axis.bounds else None
    order = np.argsort(times, kind="stable")
    if not np.isfinite(times).all() or (np.diff(times[order]) == 0).any():
        raise InputProblem(where, long[0], "empty or repeated times", "each time once", "correct the times")
    said = re.search(rf"\b(?:{re.escape(long[0])}|time)\s*:\s*(\w+)", text(attrs, "cell_methods"))
    ordered = None if bounds is None else bounds[order]
    return times[order], values[order], ordered, text(attrs, "units"), said[1] if said else ""


def read_series(
    path: str | Path,
    column: str,
    quantity: str,
    *,
    units: str | None = None,
    label: Label | None = None,
    step_hours: float | None = None,
    time_column: str | None = None,
    time_format: str | None = None,
    utc_offset_hours: float = 0.0,
    missing: Sequence[float] = SENTINELS,
) -> StationSeries:
    """One column of a station's file, all of it.

    Parameters
    ----------
    path : CSV (comma, semicolon or tab; one header line; lines that begin with # are left out) or NetCDF.
    column : its name, or the variable's.
    quantity : a key of io/quantities.py, such as "flux" or "air_temperature".
    units : in place of the file's; a CSV tells them by the column's name (`column_units`) or not at all.
    label : what a time stands for: "start", "middle" or "end" of its interval, or "instant".
    step_hours : length of an interval; None takes the distance of the times. [h]
    time_column : None takes the first whose name begins with time or date, else the first column.
    time_format : as for strptime; None reads ISO 8601.
    utc_offset_hours : of times without a zone: local minus UTC, the same all year. 0 is UTC. CSV only. [h]
    missing : numbers that mean "no value".

    Returns
    -------
    StationSeries   In our units; energies (J m-2 and such) are amounts of each interval.

    Raises
    ------
    InputProblem : no such file or column (with the nearest name), unknown units, a cell or time that cannot be read (with
    its line), one time with two values, or values that no such quantity has.
    """
    where, file = str(path), Path(path)
    try:
        with file.open("rb") as stream:
            first = stream.read(8)
    except OSError as error:
        fix = "deliver the file, or correct its path"
        raise InputProblem(where, "file", error.strerror or str(error), _WANTED, fix) from None
    if first.startswith((b"\x89HDF", b"CDF")):
        times, values, bounds, told, method = _read_netcdf(file, column)
    else:
        times, values = _read_csv(file, column, time_column, time_format, utc_offset_hours)
        bounds, told, method = None, column_units(column) or "", ""
    if not times.size:
        raise InputProblem(where, column, "no measurement", "at least one line of numbers", "deliver the file again")
    units = units or told or None
    convert = conversion(quantity, units, where, column)
    values = np.where(np.isin(values, missing), np.nan, values) * convert.factor + convert.offset
    if not convert.amounts:
        convert.check(values, where, column, str(units))
    return StationSeries(
        times, values, bounds, where, column, convert.unit, convert.amounts, method, label, step_hours
    )  # fmt: skip


def day_series(
    path: str | Path,
    column: str,
    day: dt.date,
    quantity: str,
    *,
    units: str | None = None,
    label: Label | None = None,
    step_hours: float | None = None,
    time_column: str | None = None,
    time_format: str | None = None,
    utc_offset_hours: float = 0.0,
    missing: Sequence[float] = SENTINELS,
) -> DaySeries:
    """One UTC day of one column; `read_series` and its `day` in one, for many days call those."""
    series = read_series(
        path, column, quantity, units=units, label=label, step_hours=step_hours, time_column=time_column,
        time_format=time_format, utc_offset_hours=utc_offset_hours, missing=missing,
    )  # fmt: skip
    return series.day(day)
