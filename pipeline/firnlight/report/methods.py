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
    "pressure_fao56": ("p = {sea_level_pa} (({sea_level_k} - {lapse_k_per_m} h) / {sea_level_k})^{power}",),
}
MEANING = {
    "bird_1981": "m air mass, p pressure [Pa], z sun zenith angle, I normal irradiance above the air [W m-2], ozone and "
    "water [cm], tau_380 and tau_500 aerosol optical depth at 380 and 500 nm, T transmittances, r_s albedo of the sky",
    "kasten_1966": "m relative air mass, z sun zenith angle [deg]",
    "angstrom": "aerosol optical depth at 380 nm, where only that at 500 nm is given",
    "pressure_fao56": "p air pressure [Pa], h height [m]",
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
}
HEADINGS = {
    "sensors": "Sensors",
    "conversions": "Conversions of band reflectance to broadband albedo (albedo.conversion)",
    "snow": "Snow (albedo.snow_fraction)",
    "clear_sky": "Clear sky (insolation.source)",
}


def methods_data(name: str | None = None) -> dict[str, list[Entry]]:
    """All that `firnlight methods` knows, as plain values for JSON.

    Parameters
    ----------
    name : a section, sensor, conversion or model; None for all of them.

    Returns
    -------
    section -> entries, the sections always the same; each entry has `name`, `source` and, but for sensors, `formula`
    (list of lines). An entry of a conversion has the fields of tables/broadband.toml.

    Raises
    ------
    InputProblem : nothing has that name; the nearest is offered.
    """
    sections = {"sensors": _sensors(), "conversions": _conversions(), "snow": _snow(), "clear_sky": _sky()}
    if name is None:
        return sections
    wanted = _plain_word(name)
    if wanted in sections:
        return {key: entries if key == wanted else [] for key, entries in sections.items()}
    # a family comes before the row of the same name, so that all its forms are shown
    for same in (lambda one: one.get("family", one["name"]), lambda one: one["name"], _instruments):
        found = {key: [one for one in all_ if _named(same(one), wanted)] for key, all_ in sections.items()}
        if any(found.values()):
            return found
    raise _unknown(name, wanted, sections)


def methods_text(name: str | None = None) -> str:
    """The same as text, lines of at most 100 columns; with a name, everything about it.

    Raises
    ------
    InputProblem : nothing has that name; the nearest is offered.
    """
    writers: dict[str, Callable[[list[Entry], bool], Iterator[str]]] = {
        "sensors": _sensor_lines,
        "conversions": _conversion_lines,
        "snow": _model_lines,
        "clear_sky": _model_lines,
    }
    lines: list[str] = []
    for section, entries in methods_data(name).items():
        if entries:
            lines += [*([""] if lines else []), HEADINGS[section], *writers[section](entries, name is not None)]
    if name is None:
        lines += ["", "firnlight methods NAME says more about one of them."]
    return "\n".join(lines)


def _plain_word(name: str) -> str:
    return re.sub(r"[\s-]+", "_", name.strip().lower())


def _instruments(entry: Entry) -> list[str]:
    return entry.get("instruments", [])


def _named(names: str | list[str], wanted: str) -> bool:
    return wanted in [_plain_word(one) for one in ([names] if isinstance(names, str) else names)]


def _unknown(name: str, wanted: str, sections: Mapping[str, list[Entry]]) -> SettingsProblem:
    words = [*sections]
    for entries in sections.values():
        words += [word for one in entries for word in (one.get("family"), one["name"], *_instruments(one)) if word]
    near = difflib.get_close_matches(wanted, words, n=1)
    return SettingsProblem(
        "firnlight methods",
        "name",
        name,
        "a sensor, a conversion, a model or one of " + ", ".join(sections),
        f"write {near[0]!r}" if near else "`firnlight methods` without a name lists them all",
    )


def _sensors() -> list[Entry]:
    conversions = load_table("broadband").rows.values()

    def usable(sensor: str) -> list[str]:
        return list(dict.fromkeys(row["family"] for row in conversions if sensor in row["sensors"]))

    return [{"name": name, **row, "conversions": usable(name)} for name, row in load_table("sensors").rows.items()]


def _conversions() -> list[Entry]:
    entries: list[Entry] = []
    titles: dict[str, str] = {}
    for name, row in load_table("broadband").rows.items():
        titles.setdefault(row["family"], row.get("title", row["family"]))
        basis = {"fit_error_basis": "residual standard error of the fit", "reflectance": "surface"}
        entry = {"name": name, **basis, **row, "title": titles[row["family"]], "formula": [_sum(row)]}
        entries.append(entry)
    return entries


def _snow() -> list[Entry]:
    rows = load_table("snow").rows
    rule = {"holds": "set to 0..1, and to 0 where NDSI <= 0"}
    return [_model(name, {**(rule if row.get("kind") == "fraction" else {}), **row}) for name, row in rows.items()]


def _sky() -> list[Entry]:
    return [_model(name, row) for name, row in load_table("clearsky").rows.items()]


def _model(name: str, row: Mapping[str, Any]) -> Entry:
    """A row with its title and its formula written out; a row without words for it keeps its numbers."""
    words = FORMULAS.get(name, FORMULAS.get(str(row.get("formula")), ()))
    numbers = {key: _printed(value) for key, value in row.items()}
    formula = [re.sub(r"\+ -(?=[\d.])", "- ", line.format(**numbers)) for line in words]
    extra = {"symbols": MEANING[name]} if name in MEANING else {}
    return {"name": name, "title": TITLES.get(name, name), **row, "formula": formula, **extra}


def _printed(value: Any) -> Any:
    """Numbers as written in the table, without exponent; lists of them too."""
    if isinstance(value, list):
        return [_printed(one) for one in value]
    if isinstance(value, float):
        return format(Decimal(repr(value)), "f").removesuffix(".0")
    return value


def _sum(row: Mapping[str, Any]) -> str:
    """A conversion as a line of text; weights to three decimals at least, as papers print them."""
    terms = [(weight, band) for band, weight in row["weights"].items()]
    terms += [(weight, f"{band}^2") for band, weight in row.get("squares", {}).items()]
    terms += [(one["weight"], " ".join(one["bands"])) for one in row.get("products", [])]
    if row["intercept"]:
        terms.append((row["intercept"], ""))
    text = ""
    for number, words in terms:
        sign = ("- " if number < 0 else "+ ") if text else ("-" if number < 0 else "")
        whole, _, decimals = _printed(abs(number)).partition(".")
        text += f" {sign}{whole}.{decimals:0<3} {words}".rstrip()
    text = text.strip()
    if "divisor" in row:
        text = f"({text}) / {_printed(row['divisor'])}"
    kind = "" if row["quantity"] == "shortwave" else row["quantity"].replace("_", " ") + " "
    return f"{kind}albedo = {text}"


def _wrapped(text: str, indent: int) -> list[str]:
    # a sign stays with its number when a formula is broken
    tied = re.sub(r"(?<= [+\-/]) (?=\S)", "\xa0", text)
    pad, more = " " * indent, " " * (indent + 2)
    lines = textwrap.wrap(
        tied, WIDTH, initial_indent=pad, subsequent_indent=more, break_long_words=False, break_on_hyphens=False
    )
    return [line.replace("\xa0", " ") for line in lines]


def _sensor_lines(entries: list[Entry], full: bool) -> Iterator[str]:
    for one in entries:
        yield from _wrapped(f"{one['name']}: {one['title']}", 2)
        if full:
            for band, about in one["bands"].items():
                span = f"{about['low_um']:.3f}-{about['high_um']:.3f} um"
                yield f"    {band:<9} band {about['number']:<3} {span},  noise {about['noise']}"
            yield from _wrapped(f"noise: {one['noise_basis']}", 4)
            yield from _wrapped(f"calibration {one['calibration']:.0%} of reflectance: {one['calibration_basis']}", 4)
            yield from _wrapped(f"sun zenith at most {one['largest_sun_zenith_deg']:g} deg: {one['zenith_basis']}", 4)
        else:
            yield from _wrapped("bands: " + ", ".join(one["bands"]), 4)
        yield from _wrapped("conversions: " + ", ".join(one["conversions"]), 4)
        yield from _wrapped(f"source: {one['source']}", 4)


def _conversion_lines(entries: list[Entry], full: bool) -> Iterator[str]:
    for family in dict.fromkeys(one["family"] for one in entries):
        kin = [one for one in entries if one["family"] == family]
        yield from _wrapped(f"{family}: {kin[0]['title']}", 2)
        for one in kin:
            yield from _wrapped(one["formula"][0], 4)
            sensors = [f"{key} (+{extra:g})" if extra else key for key, extra in one["sensors"].items()]
            yield from _wrapped(
                f"for {', '.join(sensors)}; {one['reflectance']} reflectance; surfaces: {one['surfaces']}; "
                f"fit error {one['fit_error']:g}", 6,
            )  # fmt: skip
            if full:
                yield from _wrapped(f"fit error: {one['fit_error_basis']}", 6)
                yield from _wrapped(f"numbers: {one['status']}", 6)
                if "note" in one:
                    yield from _wrapped(f"note: {one['note']}", 6)
        for source in dict.fromkeys(one["source"] for one in kin):
            yield from _wrapped(f"source: {source}", 4)
    if any(extra for one in entries for extra in one["sensors"].values()):
        yield from _wrapped("(+0.01): uncertainty added because the sensor's bands are not those of the fit", 2)


def _model_lines(entries: list[Entry], full: bool) -> Iterator[str]:
    for one in entries:
        yield from _wrapped(f"{one['name']}: {one['title']}", 2)
        for line in one["formula"]:
            yield from _wrapped(line, 4)
        for key in ("symbols", "holds", "valid"):
            if key in one:
                yield from _wrapped(one[key], 6)
        if full:
            for key, title in (("status", "numbers"), ("note", "note")):
                if key in one:
                    yield from _wrapped(f"{title}: {one[key]}", 6)
        yield from _wrapped(f"source: {one['source']}", 4)
