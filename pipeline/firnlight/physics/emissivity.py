"""How much of a black body's longwave does the ground give off?"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firnlight.core.errors import SettingsProblem
from firnlight.core.tables import load_table

Floats = NDArray[np.float64]


def covers() -> dict[str, float]:
    """Emissivity of each cover of tables/emissivity.toml. [1]"""
    return {name: float(row["emissivity"]) for name, row in load_table("emissivity").rows.items() if "emissivity" in row}


def of_cover(name: str, given: Mapping[str, float] | None = None) -> float:
    """Emissivity of a kind of ground.

    Parameters
    ----------
    name : a cover of tables/emissivity.toml, or any land-cover name with a word of one, such as "conifer forest"; of
        two such words the last counts, as in "forest road".
    given : emissivity by name, taken before the table's.

    Raises
    ------
    SettingsProblem : no word of the name is known.

    References
    ----------
    tables/emissivity.toml, each row its own.
    """
    if given is not None and name in given:
        return float(given[name])
    rows = {key: row for key, row in load_table("emissivity").rows.items() if "emissivity" in row}
    for word in reversed(re.findall(r"[a-z]+", name.lower())):
        for key, row in rows.items():
            if word == key or word in row["words"]:
                return float((given or {}).get(key, row["emissivity"]))
    raise SettingsProblem(
        "workflow",
        "longwave.emissivity",
        f"nothing for land cover {name!r}",
        "an emissivity for it, or a name with one of: " + ", ".join(rows),
        f'add "{name}" = 0.97, or its value, to [longwave.emissivity]',
    )


def by_cover(names: Iterable[str], given: Mapping[str, float] | None = None) -> Floats:
    """Emissivity of each name, in their order: (n,); see of_cover. [1]"""
    return np.array([of_cover(name, given) for name in names], np.float64)


def from_ndvi(ndvi: ArrayLike, red: ArrayLike) -> Floats:
    """Emissivity of snow-free land from its greenness, by thresholds.

    Parameters
    ----------
    ndvi : any shape   Normalised difference vegetation index. [1]
    red : any shape    Surface reflectance near 0.66 um, used where NDVI is below 0.2. [1]

    Returns
    -------
    broadcast shape   NaN where an input is NaN or NDVI is outside -1..1; not for snow, ice or water. [1]

    References
    ----------
    Sobrino, Jimenez-Munoz & Paolini (2004), tables/emissivity.toml.
    """
    row = load_table("emissivity").row("sobrino2004")
    low, high = row["ndvi"]
    index, reflectance = np.broadcast_arrays(np.asarray(ndvi, np.float64), np.asarray(red, np.float64))
    cover = ((index - low) / (high - low)) ** 2
    bare = row["bare"][0] - row["bare"][1] * reflectance
    mixed = row["mixed"][0] + row["mixed"][1] * cover
    value = np.where(index < low, bare, np.where(index <= high, mixed, row["full"]))
    return np.where((np.abs(index) <= 1) & ~np.isnan(reflectance), value, np.nan)


def from_leaf_area(leaf_area_index: ArrayLike) -> Floats:
    """Emissivity of snow-free land from its leaf area, any shape; NaN in, or below 0, gives NaN. [1]

    References
    ----------
    0.95 + 0.01 LAI, 0.98 at most: tasumi2003 of tables/emissivity.toml.
    """
    base, slope, most = load_table("emissivity").row("tasumi2003")["numbers"]
    leaves = np.asarray(leaf_area_index, np.float64)
    return np.where(leaves >= 0, np.minimum(base + slope * leaves, most), np.nan)
