"""Do the conversions give the values that their published coefficients give by hand, and fit spectra made elsewhere?"""

import csv
from pathlib import Path

import numpy as np
import pytest

from firnlight.core.errors import InputProblem
from firnlight.core.tables import load_table
from firnlight.physics.broadband import albedo, conversion
from firnlight.physics.snow import is_snow, ndsi, snow_fraction

HERE = Path(__file__).parent
# invented six-band spectra; the albedos are the printed coefficients applied by hand, to six digits
BANDS = ("blue", "green", "red", "nir", "swir16", "swir22")
SPECTRA = {
    "snow": (0.92, 0.93, 0.92, 0.80, 0.08, 0.06),
    "vegetation": (0.04, 0.07, 0.05, 0.35, 0.20, 0.10),
    "ice": (0.45, 0.44, 0.40, 0.28, 0.03, 0.02),
}
BY_HAND = [
    # family, sensor, quantity, snow, vegetation, ice
    ("liang2001", "tm", "shortwave", 0.754840, 0.173690, 0.318830),  # Liang (2001), doi:10.1016/S0034-4257(00)00205-4
    ("liang2001", "tm", "visible", 0.923170, 0.051910, 0.434830),
    ("liang2001", "tm", "near_infrared", 0.575320, 0.293550, 0.199720),
    ("tasumi2008", "tm", "shortwave", 0.766690, 0.160990, 0.329550),  # Tasumi, Allen & Trezza (2008)
    ("bonafoni2020", "msi", "shortwave", 0.752884, 0.171956, 0.319136),  # Bonafoni & Sekertekin (2020)
    ("dasilva2016", "oli", "shortwave", 0.865970, 0.101490, 0.391440),  # da Silva et al. (2016), as a plain sum
    ("li2018", "msi", "shortwave", 0.673042, 0.158906, 0.282932),  # Li et al. (2018), nir08 = nir here
]
MODIS = {"red": 0.92, "nir": 0.85, "blue": 0.95, "green": 0.93, "swir12": 0.55, "swir16": 0.10, "swir22": 0.06}


def value(spectrum, form):
    rho = dict(zip(BANDS, spectrum, strict=True)) if isinstance(spectrum, tuple) else spectrum
    rho = {"nir08": rho.get("nir"), **rho}
    return float(albedo(np.array([rho[band] for band in form.bands]), form))


@pytest.mark.parametrize(("family", "sensor", "quantity", "snow", "vegetation", "ice"), BY_HAND)
def test_values_worked_out_by_hand(family, sensor, quantity, snow, vegetation, ice):
    form = conversion(family, sensor, quantity)
    for name, expected in (("snow", snow), ("vegetation", vegetation), ("ice", ice)):
        assert value(SPECTRA[name], form) == pytest.approx(expected, abs=5e-7)


def test_knap_keeps_the_square_of_its_last_term():
    # Knap, Reijmer & Oerlemans (1999), doi:10.1080/014311699212362; texts that lose the square give 0.63 for snow
    form = conversion("knap1999", "tm")
    assert value(SPECTRA["snow"], form) == pytest.approx(0.756522, abs=5e-7)
    assert value(SPECTRA["ice"], form) == pytest.approx(0.298451, abs=5e-7)


@pytest.mark.parametrize(
    ("family", "expected"), [("liang2001", 0.798240), ("liang1999", 0.747058), ("stroeve2005", 0.802697)]
)
def test_modis_forms(family, expected):
    assert value(MODIS, conversion(family, "modis")) == pytest.approx(expected, abs=5e-7)


@pytest.mark.parametrize(
    ("quantity", "expected"), [("shortwave", 0.183813), ("visible", 0.071560), ("near_infrared", 0.301090)]
)
def test_avhrr_forms_are_quadratic(quantity, expected):
    assert value({"red": 0.1, "nir": 0.3}, conversion("liang2001", "avhrr", quantity)) == pytest.approx(expected, abs=5e-7)


def test_known_errors_of_other_texts_give_other_values():
    form = conversion("liang2001", "tm")
    swapped = {**dict(zip(BANDS, SPECTRA["vegetation"], strict=True)), "red": 0.07}
    assert abs(value(swapped, form) - 0.173690) > 0.002
    assert form.intercept == -0.0018  # a course sheet misprints -0.018


def test_a_black_target_is_below_zero_and_not_clipped():
    assert value((0.0,) * 6, conversion("liang2001", "tm")) == pytest.approx(-0.0018)


def test_every_weight_set_of_sums_is_near_one():
    # Tasumi et al. (2008) and Bonafoni & Sekertekin (2020) weigh by solar irradiance: sums 1.000 as printed
    for family, sensor in (("tasumi2008", "tm"), ("tasumi2008", "modis"), ("bonafoni2020", "msi")):
        assert sum(conversion(family, sensor).weights) == pytest.approx(1.0, abs=5e-4)


def test_a_conversion_for_another_sensor_is_refused_with_those_that_exist():
    with pytest.raises(InputProblem, match="liang2001"):
        conversion("knap1999", "modis")


def spectra():
    with (HERE / "spectra/canopy_and_soil_band_and_broadband_albedo.csv").open(encoding="utf-8") as stream:
        return {key: np.array([float(v) for v in column]) for key, column in _columns(stream)}


def _columns(stream):
    rows = [row for row in csv.reader(stream) if not row[0].startswith("#")]
    return zip(rows[0], zip(*rows[1:], strict=True), strict=True)


OLI = dict(zip(BANDS, ("oli_b2", "oli_b3", "oli_b4", "oli_b5", "oli_b6", "oli_b7"), strict=True))
ETM = dict(zip(BANDS, ("etm_b1", "etm_b2", "etm_b3", "etm_b4", "etm_b5", "etm_b7"), strict=True))


@pytest.mark.parametrize(
    ("family", "sensor", "quantity", "truth", "columns", "rmse", "bias"),
    [
        # tests/reference/spectra/README.md; bounds a little above what a careful implementation gets
        ("liang2001", "oli", "shortwave", "albedo_shortwave", OLI, 0.008, 0.001),
        ("liang2001", "etm", "shortwave", "albedo_shortwave", ETM, 0.009, 0.005),
        ("liang2001", "etm", "visible", "albedo_visible", ETM, 0.002, 0.002),
        ("liang2001", "etm", "near_infrared", "albedo_near_infrared", ETM, 0.012, 0.012),
        ("tasumi2008", "etm", "shortwave", "albedo_shortwave", ETM, 0.021, 0.020),
    ],
    ids=["liang oli", "liang etm", "visible", "near infrared", "tasumi"],
)
def test_spectra_made_by_nobody_here(family, sensor, quantity, truth, columns, rmse, bias):
    form, data = conversion(family, sensor, quantity), spectra()
    error = albedo(np.array([data[columns[band]] for band in form.bands]), form) - data[truth]
    assert np.sqrt(np.mean(error**2)) <= rmse
    assert abs(error.mean()) <= bias


def test_snow_index_and_fraction():
    # computed by hand from Dozier (1989); Salomonson & Appel (2004, 2006); Gascoin et al. (2020)
    assert ndsi([0.8, 0.4, 0.9], [0.1, 0.2, 0.08]) == pytest.approx([0.777778, 0.333333, 0.836735], abs=5e-7)
    index = [0.2, 0.4, 0.6, 0.9]
    assert snow_fraction(index, "salomonson_appel_2004") == pytest.approx([0.302, 0.544, 0.786, 1], abs=5e-5)
    assert snow_fraction(index, "salomonson_appel_2006") == pytest.approx([0.28, 0.57, 0.86, 1], abs=5e-5)
    assert snow_fraction(index, "gascoin_2020") == pytest.approx([0.1443, 0.3274, 0.5842, 0.8732], abs=5e-5)
    assert snow_fraction([0.0, -0.5], "gascoin_2020") == pytest.approx([0, 0])


def test_snow_is_bright_in_green_and_dark_at_one_and_a_half_micrometres():
    green, nir, swir = np.array([0.9, 0.05, 0.4, np.nan]), np.array([0.8, 0.3, 0.05, 0.8]), np.array([0.1, 0.01, 0.1, 0.1])
    assert is_snow(green, nir, swir).tolist() == [True, False, False, False]


def test_order_of_surfaces():
    """Common practice, no source: snow and ice reflect most, forest and water least."""
    form = conversion("liang2001", "tm")
    water = (0.06, 0.04, 0.03, 0.02, 0.01, 0.01)
    sand = (0.18, 0.28, 0.36, 0.45, 0.52, 0.48)
    order = [value(one, form) for one in (SPECTRA["snow"], sand, SPECTRA["ice"], SPECTRA["vegetation"], water)]
    assert order[0] == max(order)
    assert min(order[1:3]) > order[3] > order[4]


def test_every_row_says_what_it_holds_for_and_who_published_it():
    for row in load_table("broadband").rows.values():
        assert row["fit_error"] > 0
        assert row["surfaces"]
        assert row["source"]
