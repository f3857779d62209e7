"""How cloudy is it, judged by how much sunlight is missing; and how much light does a cloudy sky let through?"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firnlight.core.tables import load_table

Floats = NDArray[np.float64]
LOWEST_SUN_ZENITH_DEG = 80.0  # nearer the horizon the index is noise; common practice, no source
FRACTION_SLACK = 0.02  # a packed cloud fraction may miss 0..1 by so much


def _floats(values: ArrayLike) -> Floats:
    return np.asarray(values, np.float64)


def believable_fraction(cloud_fraction: ArrayLike) -> Floats:
    """Cloud fraction set to 0..1, any shape; NaN where it is NaN or misses 0..1 by more than 0.02. [1]"""
    c = _floats(cloud_fraction)
    kept = np.where((c >= -FRACTION_SLACK) & (c <= 1 + FRACTION_SLACK), c, np.nan)
    return np.asarray(np.clip(kept, 0.0, 1.0))


def clear_sky_index(
    measured_wm2: ArrayLike,
    clear_wm2: ArrayLike,
    zenith_deg: ArrayLike,
    steps: int = 1,
    highest_zenith_deg: float = LOWEST_SUN_ZENITH_DEG,
) -> Floats:
    """Share of the cloudless sky's light that arrives, over intervals of some time steps.

    Parameters
    ----------
    measured_wm2 : (t, ...)   Global irradiance on flat ground; NaN is missing. [W m-2]
    clear_wm2 : (t, ...)      The same under a cloudless sky, over the same ground, as from clearsky. [W m-2]
    zenith_deg : (t, ...)     Of the sun. [deg]
    steps : time steps in an interval; t is a multiple of it. Light, not its ratio, is averaged over them.
    highest_zenith_deg : steps with the sun lower than this are left out. [deg]

    Returns
    -------
    (t / steps, ...)   Above 1 where cloud beside the sun adds light. NaN where fewer than half of the steps are
    known with the sun high enough: by night, and where nothing was measured. [1]

    Raises
    ------
    ValueError : t is no multiple of steps.

    Notes
    -----
    A mean over about an hour is wanted for the cloud of the whole sky: within minutes the sun is either out or not.
    """
    measured, clear, zenith = np.broadcast_arrays(_floats(measured_wm2), _floats(clear_wm2), _floats(zenith_deg))
    if steps < 1 or measured.shape[0] % steps:
        raise ValueError(f"{measured.shape[0]} time steps do not make intervals of {steps}")
    with np.errstate(invalid="ignore"):
        known = np.isfinite(measured) & (clear > 0) & (zenith <= highest_zenith_deg)

    def total(values: NDArray[np.float64]) -> Floats:
        return np.asarray(values.reshape(-1, steps, *values.shape[1:]).sum(axis=1))

    light, full = total(np.where(known, measured, 0.0)), total(np.where(known, clear, 0.0))
    enough = 2 * total(known.astype(np.float64)) >= steps
    index = np.full(light.shape, np.nan)
    np.divide(light, full, out=index, where=enough)
    return index


def index_over_bright_ground(
    index: ArrayLike, ground_albedo: ArrayLike, clear_sky_albedo: ArrayLike, cloud_albedo: float | None = None
) -> Floats:
    """Clear-sky index freed of the light that goes to and fro between bright ground and cloud.

    Over snow a cloud deck throws light back to the ground, and the index looks clearer than the cloud is.

    Parameters
    ----------
    index : any shape              Measured global irradiance over a cloudless sky's **over black ground**. [1]
    ground_albedo : any shape      Of the wider surroundings. [1]
    clear_sky_albedo : any shape   Of the cloudless sky seen from below, ClearSky.sky_albedo. [1]
    cloud_albedo : of a cloud deck seen from below; that of tables/clearsky.toml by default. [1]

    Returns
    -------
    broadcast shape   The index x that black ground would give: measured = clear x / (1 - a r), where the sky's albedo
    r = r_clear x + r_cloud (1 - x) with x set to 0..1. NaN where an input is NaN or an albedo is outside 0..1. [1]

    References
    ----------
    The geometric series of Bird & Hulstrom (1981), tables/clearsky.toml; that the sky's albedo goes linearly with the
    cloud fraction 1 - x is our choice.
    """
    base = load_table("clearsky").row("cloud_base")["albedo"] if cloud_albedo is None else cloud_albedo
    m, a, r = _floats(index), _floats(ground_albedo), _floats(clear_sky_albedo)
    good = (a >= 0) & (a <= 1) & (r >= 0) & (r <= 1)
    mixed = m * (1 - a * base) / (1 - m * a * (base - r))
    free = np.where(m * (1 - a * r) >= 1, m * (1 - a * r), mixed)  # no cloud: only the cloudless sky throws light back
    free = np.where(m <= 0, m * (1 - a * base), free)
    return np.where(good, free, np.nan)


def cloud_from_index(index: ArrayLike, form: str = "crawford_duchon1999") -> Floats:
    """Cloud fraction from the clear-sky index.

    Parameters
    ----------
    index : any shape   From clear_sky_index. [1]
    form : "crawford_duchon1999", the light that is missing, c = 1 - index: what their longwave form takes, and nearer to
        how black the sky is than to how much of it is covered; or "kasten_czeplak1980", the inverse of their
        transmission, an observer's fraction, which is all covered at an index of 0.25.

    Returns
    -------
    that shape, within 0..1   NaN in gives NaN. [1]

    Raises
    ------
    ValueError : no such form.

    References
    ----------
    Crawford & Duchon (1999), tables/longwave.toml; Kasten & Czeplak (1980), tables/clearsky.toml.
    """
    missing = 1 - np.clip(_floats(index), 0.0, 1.0)
    if form == "crawford_duchon1999":
        return np.asarray(missing)
    if form == "kasten_czeplak1980":
        row = load_table("clearsky").row("kasten_czeplak_1980")
        return np.asarray(np.minimum(missing / row["factor"], 1.0) ** (1 / row["power"]))
    raise ValueError(f"cloud form {form!r}: wanted crawford_duchon1999 or kasten_czeplak1980")


def fill_between(fraction: ArrayLike, longest_gap: int | None = None) -> Floats:
    """Cloud by night: straight lines in time between what is known before and after, held at the ends.

    Parameters
    ----------
    fraction : (t, ...)   At equal time steps; NaN by night and where missing. [1]
    longest_gap : steps; a longer run of NaN is left as it is; None fills any.

    Returns
    -------
    (t, ...)   NaN in series without any known value, and in runs longer than the longest gap. [1]

    Notes
    -----
    What the sky does by night is not known from sunlight: this holds for the mean of many nights, not for one.
    """
    given = _floats(fraction)
    flat = given.reshape(given.shape[0], -1)
    filled = flat.copy()
    place = np.arange(flat.shape[0])
    for one in range(flat.shape[1]):
        known = np.flatnonzero(~np.isnan(flat[:, one]))
        if not known.size:
            continue
        filled[:, one] = np.interp(place, known, flat[known, one])
        if longest_gap is not None:
            starts, ends = np.r_[0, known + 1], np.r_[known, place.size]
            for start, end in zip(starts, ends, strict=True):
                if end - start > longest_gap:
                    filled[start:end, one] = np.nan
    return filled.reshape(given.shape)


def cloud_through_the_day(
    measured_wm2: ArrayLike,
    clear_wm2: ArrayLike,
    zenith_deg: ArrayLike,
    steps: int = 1,
    form: str = "crawford_duchon1999",
    longest_gap: int | None = None,
) -> Floats:
    """Cloud fraction of each interval, day and night, from sunlight: clear_sky_index, cloud_from_index, fill_between.

    Returns
    -------
    (t / steps, ...)   See those three for what comes in, NaN and errors. [1]
    """
    index = clear_sky_index(measured_wm2, clear_wm2, zenith_deg, steps)
    return fill_between(cloud_from_index(index, form), longest_gap)


def transmission(cloud_fraction: ArrayLike) -> Floats:
    """Share of the cloudless sky's global irradiance that comes through: 1 - 0.75 c^3.4, any shape. [1]

    NaN where the fraction is NaN or misses 0..1 by more than 0.02.

    References
    ----------
    Kasten & Czeplak (1980), tables/clearsky.toml.
    """
    row = load_table("clearsky").row("kasten_czeplak_1980")
    return np.asarray(1 - row["factor"] * believable_fraction(cloud_fraction) ** row["power"])


def clouded_sky_albedo(clear_sky_albedo: ArrayLike, cloud_fraction: ArrayLike, cloud_albedo: float | None = None) -> Floats:
    """Share of light from the ground that a partly cloudy sky throws back, broadcast shape. [1]

    The cloudless sky's and the cloud's own by their shares of the sky; NaN in gives NaN. With
    clearsky.global_horizontal this gives the light trapped over snow: G / (1 - a r).

    References
    ----------
    The cloud's own: tables/clearsky.toml, cloud_base.
    """
    base = load_table("clearsky").row("cloud_base")["albedo"] if cloud_albedo is None else cloud_albedo
    c = believable_fraction(cloud_fraction)
    return np.asarray(_floats(clear_sky_albedo) * (1 - c) + base * c)


def angstrom_prescott(
    sunshine_share: ArrayLike, extraterrestrial: ArrayLike, overcast: float = 0.25, gain: float = 0.50
) -> Floats:
    """A day's insolation from how long the sun shone: (0.25 + 0.50 n / N) Ra.

    Parameters
    ----------
    sunshine_share : any shape     Hours of sun over hours of daylight, 0..1. [1]
    extraterrestrial : any shape   The day's insolation above the air. [any unit of flux]
    overcast, gain : numbers of the form; FAO-56's where no local ones are known. [1]

    Returns
    -------
    broadcast shape   In the unit of `extraterrestrial`; NaN where an input is NaN or the share is outside 0..1.

    References
    ----------
    Allen R. G., Pereira L. S., Raes D., Smith M. (1998). FAO Irrigation and Drainage Paper 56, equation 35.
    """
    share = _floats(sunshine_share)
    share = np.where((share >= 0) & (share <= 1), share, np.nan)
    return np.asarray((overcast + gain * share) * _floats(extraterrestrial))


def clear_day_fao56(extraterrestrial: ArrayLike, elevation_m: ArrayLike) -> Floats:
    """A cloudless day's insolation: (0.75 + 2e-5 z) Ra, z below 6000 m; NaN in, or higher up, gives NaN.

    References
    ----------
    FAO-56 equation 37, as in angstrom_prescott.
    """
    height = _floats(elevation_m)
    return np.asarray((0.75 + 2e-5 * np.where(height < 6000, height, np.nan)) * _floats(extraterrestrial))
