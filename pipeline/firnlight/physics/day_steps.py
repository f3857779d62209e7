"""How is a flux known as means over some intervals of a day told as means over others, with no energy lost?"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]
ROUNDING_H = 1e-9  # times of a day in hours, computed in doubles, differ by less
LEAST_PROFILE_WHM2 = 1e-9  # a sun weaker than this over an interval is no sun: shares of it would be noise


def intervals(edges_h: ArrayLike) -> Floats:
    """Start and end of each interval: (n, 2), from that, or from n + 1 successive edges. [h]

    Raises
    ------
    ValueError : another shape, an interval that does not end after it starts, or two that overlap.
    """
    edges = np.asarray(edges_h, np.float64)
    if edges.ndim == 1 and edges.size >= 2:
        edges = np.stack([edges[:-1], edges[1:]], axis=1)
    if edges.ndim != 2 or edges.shape[1] != 2 or not edges.size:
        raise ValueError(f"edges of shape {edges.shape}: wanted (n, 2), or n + 1 edges")
    if not (edges[:, 1] > edges[:, 0]).all():
        raise ValueError("an interval must end after it starts")
    if (edges[1:, 0] < edges[:-1, 1] - ROUNDING_H).any():
        raise ValueError("intervals must follow each other without overlap")
    return edges


def overlap_h(edges_h: ArrayLike, out_edges_h: ArrayLike) -> Floats:
    """Hours that each output interval shares with each input interval: (outputs, inputs)."""
    source, out = intervals(edges_h), intervals(out_edges_h)
    starts = np.maximum(out[:, :1], source[:, 0])
    ends = np.minimum(out[:, 1:], source[:, 1])
    shared = np.maximum(ends - starts, 0.0)
    return np.where(shared > ROUNDING_H, shared, 0.0)


def overlap_mean(edges_h: ArrayLike, values: ArrayLike, out_edges_h: ArrayLike, least_share: float = 1.0) -> Floats:
    """Means over other intervals, each input value holding through its interval.

    Parameters
    ----------
    edges_h : (n, 2) or (n + 1,)       Intervals of the values, ascending; between them nothing is known. [h]
    values : (n, ...)                  Interval means; NaN is missing. [any unit per time]
    out_edges_h : (m, 2) or (m + 1,)   Wanted intervals, ascending. [h]
    least_share : within 0..1          Share of an output interval that must be known. [1]

    Returns
    -------
    (m, ...)   Mean over the known part; NaN where less than `least_share` of it, or nothing, is known. Outputs that
    cover known inputs hold the same sum of value x length (to rounding).

    Raises
    ------
    ValueError : intervals that overlap or do not fit the values, or a share outside 0..1.
    """
    given, source, out = np.asarray(values, np.float64), intervals(edges_h), intervals(out_edges_h)
    if given.shape[0] != source.shape[0]:
        raise ValueError(f"{given.shape[0]} values for {source.shape[0]} intervals")
    if not 0 <= least_share <= 1:
        raise ValueError(f"least share {least_share} outside 0..1")
    shared = overlap_h(source, out)
    flat = given.reshape(given.shape[0], -1)
    known = np.isfinite(flat)
    hours = shared @ known.astype(np.float64)
    total = shared @ np.where(known, flat, 0.0)
    needed = (least_share * (out[:, 1] - out[:, 0]) - ROUNDING_H)[:, np.newaxis]
    enough = (hours > 0) & (hours >= needed)
    mean = np.full(hours.shape, np.nan)
    np.divide(total, hours, out=mean, where=enough)
    return mean.reshape(out.shape[0], *given.shape[1:])


class Split(NamedTuple):
    """Finer means, and which interval had energy without sun and was spread evenly.

    Attributes
    ----------
    values : (m, ...)     Mean of each step. [W m-2]
    sunless : (n, ...)    True for an interval with energy whose profile is 0 throughout.
    """

    values: Floats
    sunless: NDArray[np.bool_]


def split_by_sun(flux: ArrayLike, edges_h: ArrayLike, step_edges_h: ArrayLike, clear_profile: ArrayLike) -> Split:
    """Tell interval means as means over finer steps, in proportion to a clear sky or the sun above the air.

    Parameters
    ----------
    flux : (n, ...)                     Mean of each interval; NaN is missing. [W m-2]
    edges_h : (n, 2) or (n + 1,)        Intervals, ascending. [h]
    step_edges_h : (m, 2) or (m + 1,)   Steps, ascending; they fill each interval and cross no edge of one. [h]
    clear_profile : (m, ...)            Mean of each step under a clear sky; below 0 counts as 0; its trailing axes
        broadcast against those of `flux`. [W m-2]

    Returns
    -------
    Split   Each interval keeps its mean (to rounding), and a step without sun gets exactly 0. An interval with
    energy but no sun is spread evenly and told in `sunless`. NaN in an interval's flux, or in the profile of
    any of its steps, makes all its steps NaN; steps outside all intervals are NaN.

    Raises
    ------
    ValueError : shapes that do not fit, or steps that do not fill the intervals.
    """
    given, source, steps = np.asarray(flux, np.float64), intervals(edges_h), intervals(step_edges_h)
    profile = np.asarray(clear_profile, np.float64)
    if given.shape[0] != source.shape[0] or profile.shape[0] != steps.shape[0]:
        raise ValueError("as many fluxes as intervals, and as many profile values as steps, are needed")
    shared = overlap_h(steps, source)
    length, step_length = source[:, 1] - source[:, 0], steps[:, 1] - steps[:, 0]
    whole = np.isclose(shared, step_length, rtol=0, atol=ROUNDING_H * 2)
    filled = np.isclose(shared.sum(axis=1), length, rtol=0, atol=ROUNDING_H * (2 + steps.shape[0]))
    if not filled.all() or (~whole & (shared > 0)).any():
        raise ValueError("steps must fill each interval and cross no edge of one")
    rest = np.broadcast_shapes(given.shape[1:], profile.shape[1:])
    profile = profile.reshape(profile.shape[0], *[1] * (len(rest) + 1 - profile.ndim), *profile.shape[1:])
    values = np.full((steps.shape[0], *rest), np.nan)
    sunless = np.zeros((source.shape[0], *rest), bool)
    for i in range(source.shape[0]):
        own = np.flatnonzero(shared[i])
        hours = step_length[own].reshape(-1, *[1] * len(rest))
        sun = np.broadcast_to(np.maximum(profile[own], 0.0), (own.size, *rest))  # np.maximum keeps NaN
        total = (sun * hours).sum(axis=0)
        mean = np.broadcast_to(given[i], rest)
        dark = total < LEAST_PROFILE_WHM2
        share = sun / np.where(dark, 1.0, total) * hours.sum(axis=0)
        values[own] = mean * np.where(dark, 1.0, share)
        sunless[i] = dark & np.isfinite(mean) & (mean != 0)
    return Split(values, sunless)
