"""Which sensors, conversions and models are there: formula, where it holds, error, source?"""

from __future__ import annotations

import difflib
import re
import textwrap
from collections.abc import Callable, Iterator, Mapping
from decimal import Decimal
from typing import Any

from firnlight.core.errors import SettingsProblem
from firnlight.core.tables import load_table

WIDTH = 100
_EXPONENT = re.compile(r"\d+(\.\d+)?[eE][-+]?\d+")
Entry = dict[str, Any]

# The words of a formula; {field} and {field[0]} are numbers of the row. Symbols are explained in MEANING.
FORMULAS: dict[str, tuple[str, ...]] = {
    "snow_test": (
        "NDSI = (green - swir16) / (green + swir16)",
        "snow: NDSI >= {ndsi}, nir > {nir} and green > {green}",
    ),
    "albedo_range": ("kept: {low} <= albedo <= {high}, then set to 0..1",),
    "linear": ("fraction = {numbers[0]} + {numbers[1]} NDSI",),
    "tanh": ("fraction = {numbers[0]} tanh({numbers[1]} NDSI + {numbers[2]}) + {numbers[3]}",),
    "bird_1981": (
        "P = m p / {reference_pressure_pa}",
        "T_r = exp(-{rayleigh[0]} P^{rayleigh[1]} (1 + P - P^{rayleigh[2]}))",
        "X_o = ozone m",
        "T_o = 1 - {ozone[0]} X_o (1 + {ozone[1]} X_o)^-{ozone[2]}"
        " - {ozone[3]} X_o / (1 + {ozone[4]} X_o + {ozone[5]} X_o^2)",
        "T_g = exp(-{mixed_gases[0]} P^{mixed_gases[1]})",
        "X_w = water m",
        "T_w = 1 - {water_vapour[0]} X_w / ((1 + {water_vapour[1]} X_w)^{water_vapour[2]} + {water_vapour[3]} X_w)",
        "tau = {aerosol[0]} tau_380 + {aerosol[1]} tau_500",
        "T_a = exp(-(tau^{aerosol[2]}) (1 + tau - tau^{aerosol[3]}) m^{aerosol[4]})",
        "T_aa = 1 - {absorption[0]} (1 - m + m^{absorption[1]}) (1 - T_a)",
        "T_as = T_a / T_aa",
        "direct = I cos(z) {direct} T_r T_o T_g T_w T_a",
        "diffuse = I cos(z) {scattered[0]} T_o T_g T_w T_aa"
        " ({scattered[1]} (1 - T_r) + {forward_scatter} (1 - T_as)) / (1 - m + m^{scattered[2]})",
        "r_s = {sky_albedo} + (1 - {forward_scatter}) (1 - T_as)",
        "insolation = (direct + diffuse) / (1 - albedo r_s)",
    ),
    "kasten_1966": ("m = 1 / (cos(z) + {airmass[0]} ({airmass[1]} - z)^-{airmass[2]})",),
    "angstrom": ("tau_380 = tau_500 ({wavelengths_nm[0]} / {wavelengths_nm[1]})^-{exponent}",),
    "kasten_czeplak_1980": (
        "insolation under cloud = clear (1 - {factor} c^{power}) (1 - {ground_albedo} r) / (1 - {ground_albedo} r_s)",
        "direct share = clear direct share (1 - c^{spread_power})",
    ),
    "cloud_base": ("r = r_s (1 - c) + {albedo} c",),
    "pressure_fao56": ("p = {sea_level_pa} (({sea_level_k} - {lapse_k_per_m} h) / {sea_level_k})^{power}",),
}
MEANING = {
    "bird_1981": "m air mass, p pressure [Pa], z sun zenith angle, I normal irradiance above the air [W m-2], ozone and "
    "water [cm], tau_380 and tau_500 aerosol optical depth at 380 and 500 nm, T transmittances, r_s albedo of the sky",
    "kasten_1966": "m relative air mass, z sun zenith angle [deg]",
    "angstrom": "aerosol optical depth at 380 nm, where only that at 500 nm is given",
    "pressure_fao56": "p air pressure [Pa], h height [m]",
    "kasten_czeplak_1980": "c cloud fraction, r and r_s albedo of the sky with and without cloud, clear: over black "
    "ground without cloud",
    "cloud_base": "c cloud fraction, r and r_s albedo of the sky with and without cloud",
}
TITLES = {
    "snow_test": "snow test",
    "albedo_range": "range of albedo that is believed",
    "salomonson_appel_2004": "snow fraction, Salomonson & Appel (2004)",
    "salomonson_appel_2006": "snow fraction, Salomonson & Appel (2006)",
    "gascoin_2020": "snow fraction, Gascoin et al. (2020)",
    "bird_1981": "clear-sky insolation, Bird & Hulstrom (1981)",
    "kasten_1966": "relative air mass, Kasten (1966)",
    "angstrom": "aerosol at another wavelength",
    "pressure_fao56": "air pressure from height",
    "kasten_czeplak_1980": "insolation under cloud, Kasten & Czeplak (1980)",
    "cloud_base": "light that cloud throws back to the ground",
}
HEADINGS = {
    "sensors": "Sensors",
    "conversions": "Conversions of band reflectance to broadband albedo (albedo.conversion)",
    "snow": "Snow (albedo.snow_fraction)",
    "clear_sky": "Clear sky and cloud (insolation.source, insolation.cloud)",
    "longwave": "Longwave from the sky (longwave.method, longwave.cloud)",
    "emissivity": "Emissivity of the ground (longwave.emissivity)",
    "anisotropy": "Reflection that differs with direction (albedo.day, albedo.anisotropy)",
}


def methods_data(name: str | None = None) -> dict[str, dict[str, Entry]]:
    """All that `firnlight methods` knows, as plain values for JSON.

    Parameters
    ----------
    name : a section, sensor, instrument, conversion, model or family of conversions; None for all of them.

    Returns
    -------
    {"methods": name -> entry}; an entry has `section`, `source`, `formula` (lines; none for a sensor) and the fields
    of its table. A family gives all its forms, also where a row has the same name.

    Raises
    ------
    InputProblem : nothing has that name; the nearest is offered.
    """
    entries = {**_sensors(), **_conversions(), **_snow()}
    for section, table in _TABLES.items():
        rows = load_table(table).rows.items()
        entries |= {key if key not in entries else f"{section}_{key}": _model(key, row, section) for key, row in rows}
    if name is None:
        return {"methods": entries}
    wanted = _plain_word(name)
    words = {key: _words(key, one) for key, one in entries.items()}
    for level in range(3):  # section or family, then row, then instrument
        found = {key: entries[key] for key, levels in words.items() if wanted in levels[level]}
        if found:
            return {"methods": found}
    known = list(dict.fromkeys(word for levels in words.values() for level in levels for word in level))
    near = difflib.get_close_matches(wanted, known, n=1)
    raise SettingsProblem(
        "firnlight methods",
        "name",
        name,
        "a sensor, a conversion, a model or one of " + ", ".join(HEADINGS),
        f"write {near[0]!r}" if near else "`firnlight methods` without a name lists them all",
    )


def methods_text(name: str | None = None) -> str:
    """The same as text, lines of at most WIDTH columns; with a name, everything about it.

    Raises
    ------
    InputProblem : nothing has that name; the nearest is offered.
    """
    entries = methods_data(name)["methods"]
    lines: list[str] = []
    for section, heading in HEADINGS.items():
        mine = {key: one for key, one in entries.items() if one["section"] == section}
        if mine:
            lines += [*([""] if lines else []), heading, "=" * len(heading)]
        for key, one in mine.items():
            lines += ["", key]
            for text in _SAYS[section](one, name is not None):
                lines += _wrapped(text)
    if name is None:
        lines += ["", "firnlight methods NAME says more about one of them."]
    return "\n".join(lines)


def _plain_word(name: str) -> str:
    return re.sub(r"[\s-]+", "_", name.strip().lower())


def _words(key: str, one: Entry) -> tuple[list[str], list[str], list[str]]:
    """What an entry is found by: its section and family, its name, its instruments."""
    return [one["section"], one.get("family", key)], [key], [_plain_word(word) for word in one.get("instruments", [])]


def _sensors() -> dict[str, Entry]:
    conversions = load_table("broadband").rows.values()

    def usable(sensor: str) -> list[str]:
        return list(dict.fromkeys(row["family"] for row in conversions if sensor in row["sensors"]))

    rows = load_table("sensors").rows.items()
    return {key: {**row, "section": "sensors", "formula": [], "conversions": usable(key)} for key, row in rows}


def _conversions() -> dict[str, Entry]:
    entries: dict[str, Entry] = {}
    titles: dict[str, str] = {}
    for key, row in load_table("broadband").rows.items():
        title = titles.setdefault(row["family"], row.get("title", row["family"]))
        more = {"section": "conversions", "title": title, "formula": [_sum(row)]}
        entries[key] = {"reflectance": "surface", **row, **more}
    return entries


def _snow() -> dict[str, Entry]:
    rule = "set to 0..1, and to 0 where NDSI <= 0"
    rows = load_table("snow").rows
    entries = {key: _model(key, row, "snow") for key, row in rows.items()}
    return {key: {**one, "holds": rule} if one.get("kind") == "fraction" else one for key, one in entries.items()}


def _model(key: str, row: Mapping[str, Any], section: str) -> Entry:
    """A row with its title and its formula written out; without words for it, no lines."""
    words = FORMULAS.get(key, FORMULAS.get(str(row.get("formula")), ()))
    numbers = {name: _printed(value) for name, value in row.items()}
    formula = [line.format(**numbers).replace("+ -", "- ") for line in words]
    if not formula and "formula" in row:
        formula = [_EXPONENT.sub(lambda found: format(Decimal(found[0]), "f"), row["formula"])]
    if not formula and "emissivity" in row:
        formula = [f"emissivity = {_printed(row['emissivity'])}"]
    extra = {"symbols": MEANING[key]} if key in MEANING else {}
    title = TITLES.get(key, row.get("title", key.replace("_", " ")))
    return {**row, "section": section, "title": title, "formula": formula, **extra}


def _printed(value: Any) -> Any:
    """Numbers as in the table, never with an exponent; lists of them too."""
    if isinstance(value, list):
        return [_printed(one) for one in value]
    return format(Decimal(repr(value)), "f").removesuffix(".0") if isinstance(value, float) else value


def _sum(row: Mapping[str, Any]) -> str:
    """A conversion as one line of text."""
    terms = [(weight, band) for band, weight in row["weights"].items()]
    terms += [(weight, f"{band}^2") for band, weight in row.get("squares", {}).items()]
    terms += [(one["weight"], " ".join(one["bands"])) for one in row.get("products", [])]
    if row["intercept"]:
        terms.append((row["intercept"], ""))
    text = " ".join(f"{'-' if number < 0 else '+'} {_printed(abs(number))} {band}".rstrip() for number, band in terms)
    text = text.removeprefix("+ ")
    if "divisor" in row:
        text = f"({text}) / {_printed(row['divisor'])}"
    kind = "" if row["quantity"] == "shortwave" else row["quantity"].replace("_", " ") + " "
    return f"{kind}albedo = {text}"


def _wrapped(text: str) -> list[str]:
    # a sign stays with its number when a formula is broken
    tied = re.sub(r"(?<= [+\-/]) (?=\S)", "\xa0", text)
    lines = textwrap.wrap(
        tied, WIDTH, initial_indent="  ", subsequent_indent="    ", break_long_words=False, break_on_hyphens=False
    )
    return [line.replace("\xa0", " ") for line in lines]


def _sensor_says(one: Entry, full: bool) -> Iterator[str]:
    yield one["title"]
    if full:
        for band, about in one["bands"].items():
            span = f"{about['low_um']:.3f}-{about['high_um']:.3f} um"
            yield f"{band}: band {about['number']}, {span}, noise {about['noise']}"
        yield f"noise: {one['noise_basis']}"
        yield f"calibration {one['calibration']:.0%} of reflectance: {one['calibration_basis']}"
        yield f"sun zenith at most {one['largest_sun_zenith_deg']:g} deg: {one['zenith_basis']}"
    else:
        yield "bands: " + ", ".join(one["bands"])
    yield "conversions: " + ", ".join(one["conversions"])
    yield f"source: {one['source']}"


def _conversion_says(one: Entry, full: bool) -> Iterator[str]:
    yield f"{one['title']}; family {one['family']}"
    yield one["formula"][0]
    sensors = [f"{key} (+{extra:g})" if extra else key for key, extra in one["sensors"].items()]
    yield f"for {', '.join(sensors)}; {one['reflectance']} reflectance; surfaces: {one['surfaces']}"
    yield f"fit error {one['fit_error']:g}: {one['fit_error_basis']}"
    if full:
        if any(one["sensors"].values()):
            yield "(+...): uncertainty to add because the sensor's bands are not those of the fit; judgement, no source"
        yield f"numbers: {one['status']}"
        if "note" in one:
            yield f"note: {one['note']}"
    yield f"source: {one['source']}"


def _model_says(one: Entry, full: bool) -> Iterator[str]:
    yield one["title"]
    yield from one["formula"]
    for key in ("symbols", "holds", "valid"):
        if key in one:
            yield one[key]
    if full:
        for key, title in (("status", "numbers"), ("note", "note")):
            if key in one:
                yield f"{title}: {one[key]}"
    yield f"source: {one['source']}"


_SAYS: dict[str, Callable[[Entry, bool], Iterator[str]]] = {
    "sensors": _sensor_says,
    "conversions": _conversion_says,
    "snow": _model_says,
    "clear_sky": _model_says,
    "longwave": _model_says,
    "emissivity": _model_says,
    "anisotropy": _model_says,
}
_TABLES = {"clear_sky": "clearsky", "longwave": "longwave", "emissivity": "emissivity", "anisotropy": "anisotropy"}
