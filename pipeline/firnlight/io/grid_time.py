"""Over which hours of the day, and in which unit, does each value of a supplied series count?"""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any, Literal, get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firnlight.core.errors import InputProblem

Floats = NDArray[np.float64]
Label = Literal["start", "end", "middle", "instant"]
Accumulated = Literal["interval", "since start"]
MEANS = ("mean", "average", "sum", "point")
TRIM_SHARE = 0.01  # of a step: intervals that overlap by less do so by rounding of their labels
_UNIT_H = {"day": 24.0, "d": 24.0, "hour": 1.0, "hr": 1.0, "h": 1.0, "minute": 1 / 60, "min": 1 / 60, "second": 1 / 3600,
           "sec": 1 / 3600, "s": 1 / 3600, "millisecond": 1 / 3.6e6, "ms": 1 / 3.6e6, "microsecond": 1 / 3.6e9}  # fmt: skip
_SINCE = re.compile(
    r"\s*(?P<unit>[A-Za-z]+)\s+since\s+(?P<y>-?\d{1,4})-(?P<m>\d{1,2})-(?P<d>\d{1,2})"
    r"(?:[T\s]\s*(?P<H>\d{1,2})(?::(?P<M>\d{1,2}))?(?::(?P<S>\d{1,2}(?:\.\d*)?))?)?"
    r"\s*(?:Z|UTC|GMT|(?P<zone>[+-]\d{1,2})(?::?(?P<zone_min>\d{2}))?)?\s*$"
)
_MONTH_DAYS = (31, 28, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31)
CALENDARS = ("standard", "gregorian", "proleptic_gregorian", "julian", "noleap", "365_day", "all_leap", "366_day", "360_day")


class DayMissing(InputProblem):
    """The data are readable but hold nothing for the day: a gap rather than a fault."""


def day_number(year: int, month: int, day: int, calendar: str) -> int | None:
    """Days from a fixed day of the calendar; None where it has no such day.

    References
    ----------
    Julian day numbers: Richards E. G. (2013), Calendars, in Explanatory Supplement to the Astronomical Almanac,
    3rd ed., chapter 15 (from memory; tied to Python's datetime by a test).
    """
    if calendar == "360_day":
        return 360 * year + 30 * (month - 1) + day - 1 if day <= 30 else None
    leap = calendar in ("all_leap", "366_day")
    if leap or calendar in ("noleap", "365_day"):
        lengths = [n + (leap and i == 1) for i, n in enumerate(_MONTH_DAYS)]
        return sum(lengths) * year + sum(lengths[: month - 1]) + day - 1 if day <= lengths[month - 1] else None
    a = (14 - month) // 12
    y, m = year + 4800 - a, month + 12 * a - 3
    days = day + (153 * m + 2) // 5 + 365 * y + y // 4
    gregorian = calendar == "proleptic_gregorian" or (calendar != "julian" and (year, month, day) >= (1582, 10, 15))
    return days - y // 100 + y // 400 - 32045 if gregorian else days - 32083


@dataclass(frozen=True, eq=False)
class Clock:
    """Times as a file holds them: numbers of a CF unit such as "hours since 2031-03-09", in a CF calendar."""

    numbers: Floats
    units: str
    calendar: str
    where: str
    name: str = "time"

    def _parts(self) -> tuple[float, int, float]:
        """Hours per unit; day number of the epoch; hours of the epoch after its 00 UTC."""
        found = _SINCE.match(self.units)
        unit = found["unit"].lower() if found else ""
        factor = _UNIT_H.get(unit, _UNIT_H.get(unit.removesuffix("s"), 0.0))
        if found is None or not factor:
            wanted = 'a CF time unit such as "hours since 2031-03-09 00:00:00" (days to microseconds)'
            raise InputProblem(self.where, f"units of {self.name}", self.units or "none", wanted, "write CF times")
        if self.calendar not in CALENDARS:
            wanted = "one of " + ", ".join(CALENDARS)
            raise InputProblem(self.where, f"calendar of {self.name}", self.calendar, wanted, "write a CF calendar")
        y, m, d = (int(found[n]) for n in "ymd")
        number = day_number(y, m, d, self.calendar) if 1 <= m <= 12 else None
        next_month = day_number(y + m // 12, m % 12 + 1, 1, self.calendar) if number is not None else None
        if number is None or next_month is None or not d >= 1 or number >= next_month:
            raise InputProblem(self.where, f"units of {self.name}", self.units, "a day of its calendar", "correct the epoch")
        hours = int(found["H"] or 0) + int(found["M"] or 0) / 60 + float(found["S"] or 0) / 3600
        if found["zone"]:
            sign = -1 if found["zone"].startswith("-") else 1
            hours -= sign * (abs(int(found["zone"])) + int(found["zone_min"] or 0) / 60)
        return factor, number, hours

    def hours(self, day: dt.date) -> Floats:
        """The times, as hours from 00 UTC of a day, to the second.

        Raises
        ------
        DayMissing : the calendar has no such day (29 February without leap years).
        InputProblem : units or calendar are not CF.
        """
        factor, epoch, hours = self._parts()
        number = day_number(day.year, day.month, day.day, self.calendar)
        if number is None:
            raise DayMissing(self.where, f"time {day}", f"calendar {self.calendar}, which has no such day", "the day",
                             "nothing to mend: the day stays a gap")  # fmt: skip
        return np.asarray(np.round((self.numbers * factor - ((number - epoch) * 24 - hours)) * 3600) / 3600)

    def months(self) -> list[int]:
        """Calendar month of each time, 1..12."""
        factor, epoch, hours = self._parts()
        found = []
        base = day_number(0, 1, 1, self.calendar) or 0
        for number in np.floor(epoch + (self.numbers * factor + hours) / 24 + 1e-9):
            year = int((number - base) // 366)
            while (day_number(year + 1, 1, 1, self.calendar) or 0) <= number:
                year += 1
            found.append(max(m for m in range(1, 13) if (day_number(year, m, 1, self.calendar) or 0) <= number))
        return found


@dataclass(frozen=True, eq=False)
class DayPlan:
    """How each step of the day is made: weight x one value of the file + weight x another.

    Attributes
    ----------
    edges_h : (T, 2)         Steps in order, which fill 0..24. [h]
    source : (T, 2) int      Indices into the file's time axis; -1 takes none. Both -1: a gap.
    weight : (T, 2)          Per unit of the file; for amounts, per second. [1 or s-1]
    """

    edges_h: Floats
    source: NDArray[np.int64]
    weight: Floats

    def apply(self, values: NDArray[Any], indices: NDArray[np.int64]) -> Floats:
        """Steps (T, ...) from the values (k, ...) that lie at `indices` (ascending) of the file's time axis."""
        steps = np.full((len(self.edges_h), *values.shape[1:]), np.nan)
        for t, (pair, weights) in enumerate(zip(self.source, self.weight, strict=True)):
            for n, weight in zip(pair, weights, strict=True):
                if n >= 0:
                    part = weight * values[np.searchsorted(indices, n)]
                    steps[t] = part if n == pair[0] else steps[t] + part
        return steps

    @property
    def needed(self) -> NDArray[np.int64]:
        """Indices of the file's time axis that are used, ascending."""
        return np.asarray(np.unique(self.source[self.source >= 0]))


_Piece = tuple[float, float, int, int, float, float]


def need(where: str, setting: str, found: str, choices: Sequence[str], fix: str) -> InputProblem:
    """What is said when only a setting can tell."""
    return InputProblem(where, setting, found, f"{setting} = " + " | ".join(f'"{c}"' for c in choices), fix)


def smallest_step(hours: Floats, where: str) -> float:
    """Usual distance between times: the smallest near the day, or at all where only one is near. [h]"""
    near = hours[(hours > -48) & (hours < 72)]
    hours = near if near.size > 1 else hours
    if hours.size < 2:
        raise InputProblem(where, "step_hours", "one time without bounds", "the length of its interval",
                           "set step_hours, or write time bounds into the file")  # fmt: skip
    step = float(np.diff(np.sort(hours)).min())
    if step <= 0:
        raise InputProblem(where, "time", "the same time twice", "each time once", "take one of the two out")
    return step


def label_edges(hours: Floats, label: Label, step_h: float) -> Floats:
    """Start and end of the interval of each label: (n, 2). [h]"""
    start = hours - {"start": 0.0, "middle": step_h / 2, "end": step_h}[label]
    return np.stack([start, start + step_h], axis=1)


def _instants(hours: Floats, step_h: float | None, where: str) -> list[_Piece]:
    """Linear in time between points a step apart; half a step is held where a neighbour lacks."""
    step = step_h or smallest_step(hours, where)
    order = np.argsort(hours, kind="stable")
    # two more than lie in the day, on both sides, so that no end of the list is taken for a lack of data
    first, last = np.searchsorted(hours[order], [0.0, 24.0])
    order = order[max(first - 2, 0) : last + 2]
    if (np.diff(hours[order]) <= 0).any():
        raise InputProblem(where, "time", "the same time twice", "each time once", "take one of the two out")
    pieces: list[_Piece] = []
    at = [float(hours[n]) for n in order]
    near = [b - a <= step * (1 + TRIM_SHARE) for a, b in pairwise(at)]
    for k, n in enumerate(order):
        if k == 0 or not near[k - 1]:
            pieces.append((at[k] - step / 2, at[k], int(n), -1, 1.0, 0.0))
        if k == len(at) - 1 or not near[k]:
            pieces.append((at[k], at[k] + step / 2, int(n), -1, 1.0, 0.0))
            continue
        start, end = max(at[k], 0.0), min(at[k + 1], 24.0)
        late = ((start + end) / 2 - at[k]) / (at[k + 1] - at[k])
        pieces.append((at[k], at[k + 1], int(n), int(order[k + 1]), 1 - late, late))
    return pieces


def _running(edges: Floats, used: NDArray[np.int64], amounts: bool, where: str) -> list[_Piece]:
    """Differences of totals (or of means) since a common start."""
    pieces: list[_Piece] = []
    before: dict[float, int] = {}
    for n in used[np.lexsort((edges[used, 1], edges[used, 0]))]:
        start, end = (float(v) for v in edges[n])
        if end <= start:
            continue  # a total of no time at all
        last = before.get(start, -1)
        since = start if last < 0 else float(edges[last, 1])
        if end <= since:
            raise InputProblem(where, "time", "the same time twice", "each time once", "take one of the two out")
        before[start] = int(n)
        length = end - since
        now, then = (1 / (length * 3600),) * 2 if amounts else ((end - start) / length, (since - start) / length)
        pieces.append((since, end, int(n), last, now, 0.0 if last < 0 else -then))
    return pieces


def _shares_starts(edges: Floats) -> bool:
    """Whether intervals run from a common start to different ends."""
    order = np.lexsort((edges[:, 1], edges[:, 0]))
    steps = np.diff(edges[order], axis=0)
    return bool(((steps[:, 0] == 0) & (steps[:, 1] > 0)).any())


def last_start(ends_h: Floats, starts_hours: ArrayLike) -> Floats:
    """The latest of some UTC hours of each day that lies before each end. [h]"""
    starts = np.sort(np.mod(np.asarray(starts_hours, np.float64), 24))
    days = np.floor(ends_h / 24)[:, np.newaxis] * 24
    tries = np.concatenate([days - 24 + starts, days + starts], axis=1)
    return np.asarray(np.where(tries < ends_h[:, np.newaxis] - 1e-9, tries, -np.inf).max(axis=1))


def plan_day(
    hours: Floats,
    *,
    where: str,
    day: dt.date,
    amounts: bool = False,
    bounds: Floats | None = None,
    method: str = "",
    label: Label | None = None,
    step_hours: float | None = None,
    accumulated: Accumulated | None = None,
    starts: Floats | None = None,
) -> DayPlan:
    """Steps of one day from the labels of a series.

    Parameters
    ----------
    hours : (n,)                 Labels, from 00 UTC of the day. [h]
    amounts                      Whether values are energy per area, not a mean.
    bounds : (n, 2) or None      The file's own intervals, taken where no `label` is set. [h]
    method                       "point", "mean", "sum" or "" of the file.
    label, step_hours, accumulated   Settings; None leaves it to the file.
    starts : (n,) or None        Start of each running total. [h]

    Returns
    -------
    DayPlan   Steps that reach beyond the day are cut at its edges and keep their mean; hours without data are gaps.

    Raises
    ------
    DayMissing : nothing lies in the day.
    InputProblem : it cannot be told which interval a value stands for; intervals overlap; a setting is unknown.
    """
    for setting, value, known in (("label", label, get_args(Label)), ("accumulated", accumulated, get_args(Accumulated))):
        if value is not None and value not in known:
            raise need(where, setting, repr(value), known, f"correct {setting}")
    if method and method not in MEANS:
        raise InputProblem(
            where, "cell_methods", f"time: {method}", "time: " + ", ".join(MEANS), "supply means, not extremes"
        )
    hours = np.asarray(hours, np.float64)
    if not (hours.size and np.isfinite(hours).all()):
        raise InputProblem(where, "time", "no times, or empty ones", "a time for each value", "write the times")
    edges = None
    if bounds is not None and label is None:
        edges = np.sort(bounds, axis=1)
    if not amounts and accumulated is not None:
        raise InputProblem(where, "accumulated", f'"{accumulated}" for a mean', "an energy unit such as J m-2",
                           "take accumulated out, or correct the units")  # fmt: skip
    if not amounts and (label == "instant" or (label is None and method == "point")):
        pieces = _instants(hours, step_hours, where)
    else:
        if edges is None:
            running = amounts and accumulated == "since start"
            if label is None and not running:
                raise need(where, "label", "times without bounds", get_args(Label)[:3], "say what a time label stands for")
            if amounts and accumulated is None:
                raise need(where, "accumulated", "amounts without bounds", get_args(Accumulated), "say what they add up")
            if amounts and label == "instant":
                raise need(where, "label", '"instant" for amounts', get_args(Label)[:3], "correct label")
            step = step_hours or (0.0 if label in (None, "end") and running else smallest_step(hours, where))
            edges = label_edges(hours, label or "end", step)
            if running:
                if starts is None:
                    raise InputProblem(where, "starts_hours", "running totals without their start",
                                       "UTC hours at which they begin anew, such as [0] or [0, 12]",
                                       "set starts_hours")  # fmt: skip
                edges[:, 0] = starts
        inside = (edges[:, 1] > 0) & (edges[:, 0] < 24)
        used = np.flatnonzero(np.isin(edges[:, 0], edges[inside, 0]))  # all that run from a start of the day's
        if accumulated == "since start" or _shares_starts(edges[used]):
            pieces = _running(edges, used, amounts, where)
        else:
            length = (edges[:, 1] - edges[:, 0]) * 3600
            pieces = []
            for n in used[length[used] > 0]:
                start, end = (float(v) for v in edges[n])
                pieces.append((start, end, int(n), -1, 1 / float(length[n]) if amounts else 1.0, 0.0))
    return _within_day(pieces, hours, where, day)


def _within_day(pieces: list[_Piece], hours: Floats, where: str, day: dt.date) -> DayPlan:
    """Cut at 0 and 24, see that none overlap, and fill holes with gaps as long as the usual step."""
    inside = sorted((p for p in pieces if p[1] > 0 and p[0] < 24), key=lambda p: p[:2])
    if not inside:
        zero = dt.datetime.combine(day, dt.time())
        try:
            ends = [f"{zero + dt.timedelta(hours=float(h)):%Y-%m-%d %H:%M}" for h in (hours.min(), hours.max())]
        except OverflowError:
            ends = [f"{h:g} h" for h in (hours.min(), hours.max())]
        raise DayMissing(where, f"time {day}", f"times from {ends[0]} to {ends[1]}", "values of that day",
                         "supply a file that holds the day")  # fmt: skip
    usual = float(np.median([p[1] - p[0] for p in inside]))
    full: list[_Piece] = []
    at = 0.0
    for start, end, *rest in inside:
        if start < at - TRIM_SHARE * usual and full:
            raise InputProblem(where, f"time {day}", f"intervals that overlap at {start:g} h", "intervals without overlap",
                               "supply one value for each hour, or correct the bounds, label or step_hours")  # fmt: skip
        start = max(start, at)
        full += _gaps(at, start, usual)
        if min(end, 24.0) > start:
            full.append((start, min(end, 24.0), *rest))  # type: ignore[arg-type]
        at = min(end, 24.0)
    full += _gaps(at, 24.0, usual)
    edges, source, weight = ([[p[k], p[k + 1]] for p in full] for k in (0, 2, 4))
    return DayPlan(np.array(edges, np.float64), np.array(source, np.int64), np.array(weight, np.float64))


def _gaps(start: float, end: float, step: float) -> list[_Piece]:
    count = max(round((end - start) / step), 1)
    cuts = np.linspace(start, end, count + 1) if end - start > 1e-6 else np.array([])
    return [(float(a), float(b), -1, -1, 0.0, 0.0) for a, b in pairwise(cuts)]
