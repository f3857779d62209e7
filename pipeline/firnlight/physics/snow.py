"""Is it snow, and how much of the cell does it cover?"""

from __future__ import annotations

import difflib

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firnlight.core.errors import SettingsProblem
from firnlight.core.tables import load_table

Floats = NDArray[np.float64]
LINEAR, TANH = 0, 1


def snow_limits() -> tuple[float, float, float]:
    """Least NDSI, and the near-infrared and green reflectance that snow must exceed. [1]"""
    row = load_table("snow").row("snow_test")
    return row["ndsi"], row["nir"], row["green"]


def fraction_numbers(name: str) -> tuple[int, tuple[float, ...]]:
    """Form (LINEAR or TANH) and numbers of a snow-fraction formula.

    Raises
    ------
    SettingsProblem : no formula of that name.
    """
    rows = {key: row for key, row in load_table("snow").rows.items() if row.get("kind") == "fraction"}
    if name not in rows:
        near = difflib.get_close_matches(name, rows, n=1)
        raise SettingsProblem(
            "workflow",
            "albedo.snow_fraction",
            name,
            "one of " + ", ".join(rows),
            f"write {near[0]!r}" if near else "see `firnlight methods` for what each is",
        )
    row = rows[name]
    return (LINEAR if row["formula"] == "linear" else TANH), tuple(row["numbers"])


def ndsi(green: ArrayLike, swir: ArrayLike) -> Floats:
    """Normalised difference snow index, (green - swir) / (green + swir).

    Parameters
    ----------
    green, swir : any shape   Surface reflectance near 0.55 and 1.6 um. [1]

    Returns
    -------
    that shape   -1 where the sum is not positive (dark noise is not snow); NaN in gives NaN. [1]

    References
    ----------
    Dozier (1989), tables/snow.toml.
    """
    g, s = np.asarray(green, np.float64), np.asarray(swir, np.float64)
    total = g + s
    index = np.divide(g - s, total, out=np.full_like(total, -1.0), where=total > 0)
    return np.where(np.isnan(total), np.nan, index)


def is_snow(green: ArrayLike, nir: ArrayLike, swir: ArrayLike) -> NDArray[np.bool_]:
    """Does a cell pass the snow test on NDSI, near infrared and green?

    Parameters
    ----------
    green, nir, swir : any shape   Surface reflectance near 0.55, 0.85 and 1.6 um. [1]

    Returns
    -------
    that shape   NaN is not snow. Snow under trees mostly fails the test: it is not relaxed there.

    References
    ----------
    Dozier (1989), Hall et al. (1995), tables/snow.toml.
    """
    least, nir_limit, green_limit = snow_limits()
    return (ndsi(green, swir) >= least) & (np.asarray(nir) > nir_limit) & (np.asarray(green) > green_limit)


def snow_fraction(index: ArrayLike, name: str) -> Floats:
    """Share of a cell that snow covers, from its NDSI.

    Parameters
    ----------
    index : any shape   NDSI. [1]
    name : a formula of tables/snow.toml.

    Returns
    -------
    that shape, in 0..1; 0 where NDSI <= 0; NaN in gives NaN. [1]

    Notes
    -----
    NDSI alone does not tell snow from dark water or shadow, whose index is high too: ask is_snow as well.

    Raises
    ------
    SettingsProblem : no formula of that name.

    References
    ----------
    tables/snow.toml, each row its own.
    """
    form, c = fraction_numbers(name)
    x = np.asarray(index, np.float64)
    share = c[0] + c[1] * x if form == LINEAR else c[0] * np.tanh(c[1] * x + c[2]) + c[3]
    return np.where(x <= 0, 0.0, np.clip(share, 0.0, 1.0))
