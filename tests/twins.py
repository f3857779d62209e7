"""Which fast kernel belongs to which plain reference, and with what are the two compared?

TWINS: name -> (fast, reference, arguments). `arguments(rng)` builds one call's arguments, hard cases among
them. Both callables take them all and return an array or a tuple of arrays; a kernel that writes in place is
wrapped here.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable
from typing import Any

import numpy as np

from firnlight.physics import clearsky, clearsky_fast

Twin = tuple[Callable[..., Any], Callable[..., Any], Callable[[np.random.Generator], tuple[Any, ...]]]


def sky_arguments(rng: np.random.Generator) -> tuple[Any, ...]:
    """A day, places from pole to pole (one unknown), heights (one unknown), any air."""
    day = dt.date(1985, 1, 1) + dt.timedelta(days=int(rng.integers(0, 23_000)))
    latitude = np.concatenate([rng.uniform(-90, 90, 5), [-90.0, 90.0, 66.56, np.nan]])
    longitude = rng.uniform(-180, 180, latitude.size)
    elevation = np.concatenate([rng.uniform(-500, 9000, 4), [np.nan]])
    air = clearsky.Atmosphere.of(rng.choice([0.0, 0.1, 3.0]), rng.uniform(0, 10), rng.uniform(0, 1))
    return (
        day,
        latitude,
        longitude,
        elevation,
        air,
        int(rng.integers(2, 9)),
        float(rng.choice([600.0, 1800.0])),
    )


TWINS: dict[str, Twin] = {
    "day_moments": (clearsky_fast.day_moments, clearsky.day_moments, sky_arguments),
}
