"""How much of the light on flat ground comes from the sky, not the sun's disc, judged by how bright it is?"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]
HIGHEST_CLEARNESS = 1.0  # both fits were made on hours between 0 and 1


def _clearness(values: ArrayLike) -> Floats:
    """Clearness kept within 0..1; NaN stays NaN."""
    return np.asarray(np.clip(np.asarray(values, np.float64), 0.0, HIGHEST_CLEARNESS))


def clearness_index(global_wm2: ArrayLike, extraterrestrial_horizontal_wm2: ArrayLike) -> Floats:
    """Share of the light above the air that reaches flat ground, one broadcast shape, within 0..1. [1]

    NaN where an input is NaN, and where nothing arrives above the air: there is no clearness by night.
    """
    down, above = np.broadcast_arrays(
        np.asarray(global_wm2, np.float64), np.asarray(extraterrestrial_horizontal_wm2, np.float64)
    )
    share = np.full(down.shape, np.nan)
    np.divide(down, above, out=share, where=above > 0)
    return _clearness(share)


def erbs(clearness: ArrayLike) -> Floats:
    """Diffuse share of the hour's global irradiance from clearness alone.

    Parameters
    ----------
    clearness : any shape   Clearness index of the hour, clipped to 0..1. [1]

    Returns
    -------
    that shape, 0.164..1   NaN in gives NaN. [1]

    Notes
    -----
    Falls with clearness, but for a rise of 0.0007 between 0.79 and 0.80 that is in the published polynomial.
    Light that snow sends back to the sky is not in the fit: over snow the sky's share is larger.

    References
    ----------
    Erbs D. G., Klein S. A., Duffie J. A. (1982). Estimation of the diffuse radiation fraction for hourly, daily
    and monthly-average global radiation. Solar Energy 28:293-302.
    """
    k = _clearness(clearness)
    middle = 0.9511 + k * (-0.1604 + k * (4.388 + k * (-16.638 + k * 12.336)))
    share = np.where(k <= 0.22, 1 - 0.09 * k, np.where(k <= 0.80, middle, 0.165))
    return np.where(np.isnan(k), np.nan, share)


def neighbour_mean(clearness: ArrayLike) -> Floats:
    """How bright it was just before and just after: the persistence that `brl` takes.

    Parameters
    ----------
    clearness : (T, ...)   Clearness index of successive hours; NaN by night and where missing. [1]

    Returns
    -------
    (T, ...)   Mean of the two neighbours; the one there is where the other is NaN (after sunrise, before sunset);
    NaN without any, and where the hour itself is NaN. [1]

    References
    ----------
    Ridley, Boland & Lauret (2010), as in `brl`. That a missing hour is treated as a night hour is our choice.
    """
    k = _clearness(clearness)
    around = np.full((2, *k.shape), np.nan)
    around[0, 1:], around[1, :-1] = k[:-1], k[1:]
    known = np.isfinite(around)
    count = known.sum(axis=0)
    total = np.where(known, around, 0.0).sum(axis=0)
    return np.where((count > 0) & np.isfinite(k), total / np.maximum(count, 1), np.nan)


def brl(
    clearness: ArrayLike,
    apparent_solar_time_h: ArrayLike,
    altitude_deg: ArrayLike,
    day_clearness: ArrayLike,
    persistence: ArrayLike,
) -> Floats:
    """Diffuse share of the hour's global irradiance from clearness, its course, and the sun's place.

    Parameters
    ----------
    clearness : any shape               Clearness index of the hour, clipped to 0..1. [1]
    apparent_solar_time_h : any shape   By the sun, 12 when it stands highest. [h]
    altitude_deg : any shape            Of the sun above the horizon. [deg]
    day_clearness : any shape           Clearness index of the whole day, clipped to 0..1. [1]
    persistence : any shape             From `neighbour_mean`, clipped to 0..1. [1]

    Returns
    -------
    broadcast shape, within 0..1   Falls with each clearness. NaN where an input is NaN. [1]

    Notes
    -----
    Light that snow sends back to the sky is not in the fit: over snow the sky's share is larger.

    References
    ----------
    Ridley B., Boland J., Lauret P. (2010). Modelling of diffuse solar fraction with multiple predictors.
    Renewable Energy 35:478-483, doi:10.1016/j.renene.2009.07.018 (the doi is from memory).
    """
    exponent = (
        -5.38
        + 6.63 * _clearness(clearness)
        + 0.006 * np.asarray(apparent_solar_time_h, np.float64)
        - 0.007 * np.asarray(altitude_deg, np.float64)
        + 1.75 * _clearness(day_clearness)
        + 1.31 * _clearness(persistence)
    )
    return np.asarray(1 / (1 + np.exp(exponent)))
