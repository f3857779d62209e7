"""How does the demo get its chance: the same number for the same place, however the work is cut?"""

from __future__ import annotations

import hashlib
from functools import cache

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float32]
_SIDE = 256  # of the table of random values: a noise field repeats after this many wavelengths


def key(*facts: object) -> int:
    """128 bits that belong to these facts and no others."""
    text = "|".join(str(fact) for fact in facts)
    return int.from_bytes(hashlib.sha256(text.encode()).digest()[:16], "big")


def chance(*facts: object) -> np.random.Generator:
    """A stream of random numbers of its own for these facts."""
    return np.random.Generator(np.random.Philox(key=key(*facts)))


def row_noise(row: int, cols: int, *facts: object) -> Floats:
    """Standard normal numbers for the cells of one row: (cols,). Each row has its own place in the stream."""
    stream = np.random.Philox(key=key(*facts), counter=[0, 0, row, 0])
    return np.random.Generator(stream).standard_normal(cols, dtype=np.float32)


@cache
def _table() -> Floats:
    values = chance("table of the value noise").random(_SIDE * _SIDE, dtype=np.float32) * np.float32(2) - np.float32(1)
    values.setflags(write=False)
    return values


def smoothstep(x: Floats, low: float, high: float) -> Floats:
    """0 below `low`, 1 above `high`, smooth between; any shape.

    Sums and products only, so equal on every machine.
    """
    t = np.clip((x - np.float32(low)) * np.float32(1 / (high - low)), np.float32(0), np.float32(1))
    return np.asarray(t * t * (np.float32(3) - np.float32(2) * t), np.float32)


def value_noise(x_m: Floats, y_m: Floats, wavelength_m: float, *facts: object) -> Floats:
    """A smooth random field in -1..1 with one size of hill.

    Parameters
    ----------
    x_m, y_m : any shape     Plane coordinates. [m]
    wavelength_m : distance between the random values. [m]
    facts : what the field belongs to; they turn and shift it.

    Returns
    -------
    any shape   Twice differentiable in x and y. [1]
    """
    turn, shift_x, shift_y = _placing(wavelength_m, *facts)
    cos, sin = np.float32(np.cos(turn) / wavelength_m), np.float32(np.sin(turn) / wavelength_m)
    u, v = x_m * cos + y_m * sin, y_m * cos - x_m * sin
    u += np.float32(shift_x)
    v += np.float32(shift_y)
    iu, iv = np.floor(u), np.floor(v)
    u -= iu
    v -= iv
    left, below = iu.astype(np.int32) & (_SIDE - 1), (iv.astype(np.int32) & (_SIDE - 1)) * _SIDE
    right, above = (left + 1) & (_SIDE - 1), (below + _SIDE) & (_SIDE * _SIDE - 1)
    u, v = _fade(u), _fade(v)
    table = _table()
    low, high = table.take(below + left), table.take(above + left)
    low += (table.take(below + right) - low) * u
    high += (table.take(above + right) - high) * u
    high -= low
    high *= v
    high += low
    return high


@cache
def _placing(wavelength_m: float, *facts: object) -> tuple[float, float, float]:
    turn, shift_x, shift_y = chance("field", wavelength_m, *facts).random(3)
    return float(turn * 2 * np.pi), float(shift_x * _SIDE), float(shift_y * _SIDE)


def _fade(t: Floats) -> Floats:
    # 6 t^5 - 15 t^4 + 10 t^3
    out = t * np.float32(6)
    out -= np.float32(15)
    out *= t
    out += np.float32(10)
    t = t * t * t
    out *= t
    return out
