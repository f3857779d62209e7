"""Do the conversions give the values that their published coefficients give by hand, and fit spectra made elsewhere?"""

import csv
from dataclasses import replace
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
    # Knap, Reijmer & Oerlemans (1999), doi:10.1080/014311699212362; texts that lose the square give 0.849 for snow
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


@pytest.mark.parametrize(
    ("family", "sensor", "quantity", "intercept"),
    [
        ("liang2001", "tm", "shortwave", -0.0018),
        ("liang2001", "tm", "near_infrared", -0.003),
        ("liang2001", "modis", "shortwave", -0.0015),
        ("liang2001", "avhrr", "shortwave", 0.0035),
        ("liang2001", "avhrr", "visible", 0.0074),
        ("liang2001", "aster", "shortwave", -0.0015),
        ("liang1999", "modis", "shortwave", 0.0036),
        ("stroeve2005", "modis", "shortwave", -0.0093),
        ("li2018", "msi", "shortwave", -0.0049),
        ("knap1999", "tm", "shortwave", 0.0),
    ],
)
def test_a_black_target_gives_the_printed_intercept(family, sensor, quantity, intercept):
    form = conversion(family, sensor, quantity)
    assert float(albedo(np.zeros(len(form.bands)), form)) == intercept


def test_the_normalised_form_is_the_whole_sum_over_1_016():
    """Liang (2001) as in a course sheet of 2010: a white target gives (1.016 - 0.0018) / 1.016."""
    form = conversion("liang2001_normalised", "tm")
    assert value((1.0,) * 6, form) == pytest.approx(0.998228, abs=5e-7)
    for name, plain in (("snow", 0.754840), ("vegetation", 0.173690), ("ice", 0.318830)):
        assert value(SPECTRA[name], form) == pytest.approx(plain / 1.016, abs=5e-7)
    misprinted = replace(form, intercept=-0.018 / 1.016)  # the sheet's typed formula
    assert value(SPECTRA["ice"], form) - value(SPECTRA["ice"], misprinted) > 0.015


def test_texts_that_lose_the_last_square_of_knap_leave_the_published_range():
    """Knap et al. (1999): albedo 0.08 (debris) to 0.86 (dry snow; green 0.96 and nir 0.90 give 0.857 by hand)."""
    form = conversion("knap1999", "tm")
    dry = {"green": 0.96, "nir": 0.90}
    assert form.bands == ("green", "nir")
    assert value(dry, form) == pytest.approx(0.857, abs=5e-4)
    unsquared = replace(form, weights=(0.726, -0.015 + 0.581), quadratic=((-0.322, 0.0), (0.0, 0.0)))
    assert value(dry, unsquared) > 0.86 + 3 * form.fit_error
    assert value(SPECTRA["ice"], unsquared) - value(SPECTRA["ice"], form) > 0.1


def test_green_in_place_of_red_is_another_value():
    """A known error with Liang (2001): weights 0.356, 0.130, 0.373 laid on blue, green, nir."""
    form = conversion("liang2001", "tm")
    for name, spectrum in SPECTRA.items():
        rho = dict(zip(BANDS, spectrum, strict=True))
        wrong = value({**rho, "red": rho["green"]}, form)
        assert wrong - value(spectrum, form) == pytest.approx(0.130 * (rho["green"] - rho["red"]), abs=1e-12), name
        assert wrong != value(spectrum, form)


@pytest.mark.parametrize(("quantity", "rmse", "bias"), [("visible", 0.001, 0.0005), ("near_infrared", 0.0135, 0.010)])
def test_spectra_with_oli_bands(quantity, rmse, bias):
    """tests/reference/spectra/README.md; the extra 0.01 for other bands than those of the fit covers the bias."""
    form, data = conversion("liang2001", "oli", quantity), spectra()
    error = albedo(np.array([data[OLI[band]] for band in form.bands]), form) - data[f"albedo_{quantity}"]
    assert np.sqrt(np.mean(error**2)) <= rmse
    assert abs(error.mean()) <= bias
    assert np.sqrt(np.mean(error**2)) <= np.hypot(form.fit_error, form.substitution_error)


def test_figures_of_a_careful_implementation_on_the_spectra():
    """Liang (2001) and Tasumi et al. (2008): the errors themselves, to the last digit noted beside the spectra."""
    data = spectra()
    for family, sensor, columns, rmse, bias in (
        ("liang2001", "oli", OLI, 0.0073, -0.0006),
        ("liang2001", "etm", ETM, 0.0088, -0.0042),
        ("tasumi2008", "etm", ETM, 0.020, -0.019),
    ):
        form = conversion(family, sensor)
        error = albedo(np.array([data[columns[band]] for band in form.bands]), form) - data["albedo_shortwave"]
        digit = 5e-4 if family == "tasumi2008" else 5e-5
        assert np.sqrt(np.mean(error**2)) == pytest.approx(rmse, abs=digit)
        assert error.mean() == pytest.approx(bias, abs=digit)


def test_handbook_ranges_hold_for_the_endmembers():
    """Oke T. R. (1987). Boundary layer climates, table 1.1: fresh snow 0.80-0.95, desert 0.20-0.45, grass 0.16-0.26,
    water at small zenith angles 0.03-0.10 (last from memory). Endmembers: common practice, no source."""
    form = conversion("liang2001", "tm")
    fresh = (0.98, 0.98, 0.97, 0.93, 0.12, 0.10)
    sand = (0.18, 0.28, 0.36, 0.45, 0.52, 0.48)
    water = (0.08, 0.06, 0.04, 0.02, 0.01, 0.01)
    for spectrum, low, high in (
        (fresh, 0.80, 0.95),
        (sand, 0.20, 0.45),
        (SPECTRA["vegetation"], 0.16, 0.26),
        (water, 0.03, 0.10),
    ):
        assert low <= value(spectrum, form) <= high


def test_snow_fraction_at_a_bare_index_is_nothing_though_the_formula_gives_some():
    """Salomonson & Appel (2004) gives 0.06 and Gascoin et al. (2020) 0.0552 at NDSI 0: both are set to 0 there."""
    for name, floor in (("salomonson_appel_2004", 0.06), ("gascoin_2020", 0.0552)):
        assert snow_fraction(0.0, name) == 0
        assert snow_fraction(1e-9, name) == pytest.approx(floor, abs=5e-5)
