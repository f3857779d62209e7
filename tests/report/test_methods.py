"""Does `methods` write every formula out with its source?"""

import json
import math
import re

import numpy as np
import pytest

from firnlight.core.errors import InputProblem
from firnlight.core.tables import load_table
from firnlight.physics import broadband, clearsky, snow
from firnlight.report.methods import WIDTH, methods_data, methods_text


def test_every_conversion_sensor_and_fraction_is_listed_within_the_width():
    text = methods_text(None)
    for table in ("broadband", "sensors"):
        for name in load_table(table).rows:
            assert f"\n{name}\n" in text
    assert max(map(len, text.splitlines())) <= WIDTH


def test_a_formula_is_written_out():
    text = methods_text("liang2001")
    assert "0.356 blue + 0.13 red + 0.373 nir + 0.085 swir16 + 0.072 swir22 - 0.0018" in text
    assert "0.726 green - 0.015 nir - 0.322 green^2 + 0.581 nir^2" in methods_text("knap1999")


def test_everything_has_a_source():
    assert all(entry["source"] for entry in methods_data(None)["methods"].values())


def test_a_wrong_name_gets_the_nearest():
    with pytest.raises(InputProblem, match="tasumi2008"):
        methods_text("tasumi208")


NAME = r"[A-Za-z_][A-Za-z_0-9]*"


def worked_out(line, values):
    """The right side of a printed formula as a number: a factor beside a factor means times, ^ means power."""
    text = line.split(" = ", 1)[1].replace("^", "**")
    tokens = re.findall(rf"{NAME}|[\d.]+|\*\*|[()+/*-]", text)
    calls = {"exp": math.exp, "tanh": math.tanh, "cos": lambda deg: math.cos(math.radians(deg))}
    out = ""
    before = ""
    for token in tokens:
        ends = re.fullmatch(rf"{NAME}|[\d.]+|\)", before) and before not in calls
        starts = re.fullmatch(rf"{NAME}|[\d.]+|\(", token)
        out += (" * " if ends and starts else " ") + token
        before = token
    return eval(out, {"__builtins__": {}}, {**calls, **values})


@pytest.mark.parametrize("name", load_table("broadband").rows)
def test_the_printed_conversion_is_the_one_that_is_computed(name):
    row = load_table("broadband").row(name)
    form = broadband.conversion(row["family"], next(iter(row["sensors"])), row["quantity"])
    rho = np.linspace(0.15, 0.85, len(form.bands))
    line = methods_data(name)["methods"][name]["formula"][0]
    printed = worked_out(line, dict(zip(form.bands, rho.tolist(), strict=True)))
    assert printed == pytest.approx(float(broadband.albedo(rho, form)), abs=1e-12)


@pytest.mark.parametrize("name", ["salomonson_appel_2004", "salomonson_appel_2006", "gascoin_2020"])
def test_the_printed_snow_fraction_is_the_one_that_is_computed(name):
    line = methods_data(name)["methods"][name]["formula"][0]
    assert worked_out(line, {"NDSI": 0.37}) == pytest.approx(float(snow.snow_fraction(0.37, name)), abs=1e-12)


def test_the_printed_clear_sky_is_the_one_that_is_computed():
    models = methods_data("clear_sky")["methods"]
    known = {"z": 40.0, "h": 1500.0, "I": 1361.0, "ozone": 0.3, "water": 1.2, "tau_500": 0.1, "albedo": 0.6}
    for name in ("pressure_fao56", "kasten_1966", "angstrom", "bird_1981"):
        for line in models[name]["formula"]:
            known[line.split(" = ")[0]] = worked_out(line, known)
    air = clearsky.Atmosphere.of(aerosol_500nm=0.1, water_vapour_cm=1.2, ozone_cm=0.3)
    sky = clearsky.bird(40.0, 1361.0, clearsky.pressure_pa(1500.0), air)
    light = clearsky.global_horizontal(sky.black_ground_wm2, sky.sky_albedo, 0.6)
    assert known["tau_380"] == pytest.approx(air.aerosol_380nm, rel=1e-12)
    assert known["direct"] == pytest.approx(float(sky.direct_horizontal_wm2), rel=1e-12)
    assert known["insolation"] == pytest.approx(float(light), rel=1e-12)


def test_every_model_has_a_formula_and_every_conversion_its_error_and_where_it_holds():
    for name, entry in methods_data(None)["methods"].items():
        assert entry["formula"] or entry["section"] == "sensors", name
        if entry["section"] == "conversions":
            text = methods_text(name)
            assert f"fit error {entry['fit_error']:g}" in text
            assert "surfaces: " in text
            assert "numbers: " in text


def test_a_name_finds_a_family_a_row_a_sensor_an_instrument_or_a_section():
    assert {"liang2001", "liang2001_modis_visible", "liang2001_aster"} <= set(methods_data("liang2001")["methods"])
    assert set(methods_data("liang2001_modis")["methods"]) == {"liang2001_modis"}
    assert set(methods_data("OLI")["methods"]) == set(methods_data("oli-2")["methods"]) == {"oli"}
    assert set(methods_data("clear-sky")["methods"]) == set(load_table("clearsky").rows)
    assert "li2018" in methods_data("msi")["methods"]["msi"]["conversions"]


def test_with_a_name_every_line_keeps_the_width_and_the_data_is_json():
    data = methods_data(None)
    assert json.loads(json.dumps(data)) == data
    for name in data["methods"]:
        assert max(map(len, methods_text(name).splitlines())) <= WIDTH <= 100


def test_no_number_is_printed_with_an_exponent():
    assert not re.search(r"\d[eE][-+]?\d", "".join("".join(e["formula"]) for e in methods_data(None)["methods"].values()))
