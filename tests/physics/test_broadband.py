"""Do the uncertainties of albedo follow from the conversion, as a Monte Carlo run says?"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.errors import InputProblem
from firnlight.core.settings import Albedo
from firnlight.core.tables import load_table
from firnlight.physics.broadband import albedo, conversion, sensitivity, uncertainty_parts
from firnlight.stages.albedo import albedo_numbers

FORMS = [conversion("liang2001", "oli"), conversion("knap1999", "tm"), conversion("liang2001", "modis")]
RHO = st.lists(st.floats(0, 1), min_size=7, max_size=7)


@given(RHO, st.sampled_from(FORMS))
def test_sensitivity_is_the_slope(rho, form):
    rho = np.array(rho[: len(form.bands)])
    step = 1e-5
    for band in range(len(rho)):
        up, down = rho.copy(), rho.copy()
        up[band] += step
        down[band] -= step
        slope = (albedo(up, form) - albedo(down, form)) / (2 * step)
        assert sensitivity(rho, form)[band] == pytest.approx(slope, abs=1e-8)


@given(RHO, st.sampled_from(FORMS), st.floats(0, 0.02), st.floats(0, 0.1), st.floats(1, 3))
def test_uncertainty_never_shrinks_when_an_input_grows(rho, form, noise, calibration, factor):
    rho = np.array(rho[: len(form.bands)])
    u = np.full(len(rho), noise)
    before = uncertainty_parts(rho, form, u, calibration)
    after = uncertainty_parts(rho, form, u * factor, calibration * factor)
    assert all(b >= a for a, b in zip(before, after, strict=True))


@pytest.mark.parametrize("form", FORMS, ids=lambda form: form.name)
def test_propagation_agrees_with_monte_carlo(form):
    rng = np.random.default_rng(5)
    rho = np.linspace(0.2, 0.8, len(form.bands))
    noise, calibration, draws = np.full(len(rho), 0.005), 0.02, 40_000
    independent, _, shared = uncertainty_parts(rho, form, noise, calibration)
    noisy = rho[:, np.newaxis] + rng.normal(0, 1, (len(rho), draws)) * noise[:, np.newaxis]
    scaled = rho[:, np.newaxis] * (1 + calibration * rng.normal(0, 1, draws))
    # 40,000 draws know a standard deviation to 0.35 %; 3 % also holds the curvature
    assert albedo(noisy, form).std() == pytest.approx(independent, rel=0.03)
    assert albedo(scaled, form).std() == pytest.approx(shared, rel=0.03)


def test_an_empty_band_gives_no_albedo():
    rho = np.full((5, 2), 0.3)
    rho[2, 1] = np.nan
    value = albedo(rho, FORMS[0])
    assert np.isfinite(value[0])
    assert np.isnan(value[1])
    assert all(np.isnan(part[1]) for part in uncertainty_parts(rho, FORMS[0], np.full(5, 0.01), 0.03))


def every_form():
    """Each row of the table with each of its sensors."""
    rows = load_table("broadband").rows.items()
    return [(name, row["family"], sensor, row["quantity"]) for name, row in rows for sensor in row["sensors"]]


@pytest.mark.parametrize(("name", "family", "sensor", "quantity"), every_form())
def test_every_row_is_found_by_its_family_sensor_and_quantity(name, family, sensor, quantity):
    """So no two rows stand for the same thing."""
    form, row = conversion(family, sensor, quantity), load_table("broadband").row(name)
    assert form.name == name
    assert set(form.bands) == set(row["weights"]) | set(row.get("squares", {})) | {
        band for one in row.get("products", []) for band in one["bands"]
    }
    assert form.substitution_error == row["sensors"][sensor]
    white = sum(row["weights"].values()) + sum(row.get("squares", {}).values()) + row["intercept"]
    white += sum(one["weight"] for one in row.get("products", []))
    assert albedo(np.ones(len(form.bands)), form) == pytest.approx(white / row.get("divisor", 1.0), abs=1e-12)


@given(RHO, RHO, st.floats(0, 1))
def test_a_linear_form_of_a_mixture_is_the_mixture_of_its_albedos(one, other, share):
    form = conversion("liang2001", "oli")
    one, other = np.array(one[:5]), np.array(other[:5])
    mixed = albedo(share * one + (1 - share) * other, form)
    assert mixed == pytest.approx(share * albedo(one, form) + (1 - share) * albedo(other, form), abs=1e-12)


def test_shape_is_kept_and_values_are_not_clipped():
    form = conversion("liang2001", "oli")
    rho = np.stack([np.zeros((3, 4)), np.full((3, 4), 1.2)], axis=1).reshape(3, 2, 4)
    value = albedo(np.broadcast_to(rho, (5, 3, 2, 4)), form)
    assert value.shape == (3, 2, 4)
    assert value.dtype == np.float64
    assert value.min() < 0
    assert value.max() > 1


def test_other_bands_than_those_of_the_fit_and_the_fit_add_to_the_local_part():
    rho, noise = np.full(5, 0.5), np.full(5, 0.004)
    own, other = (uncertainty_parts(rho, conversion("liang2001", sensor), noise, 0.03) for sensor in ("tm", "oli"))
    assert own[0] == other[0]
    assert own[1] == pytest.approx(0.02)
    assert other[1] == pytest.approx(np.hypot(0.02, 0.01))
    # fully correlated: the relative error of every band at once, so the intercept has no part in it
    assert other[2] == pytest.approx(0.03 * 1.016 * 0.5)


def test_what_there_is_stands_in_the_refusal():
    with pytest.raises(InputProblem) as caught:
        conversion("knap1999", "modis")
    assert "shortwave for etm, msi, oli, tm" in str(caught.value)
    assert "for modis choose from: liang1999, liang2001, stroeve2005, tasumi2008" in str(caught.value)
    with pytest.raises(InputProblem, match="write 'liang2001'"):
        conversion("liang2010", "oli")
    with pytest.raises(InputProblem, match="no conversion gives visible from nosuch"):
        conversion("liang2001", "nosuch", "visible")
    with pytest.raises(InputProblem) as caught:  # a form for the top of the atmosphere is never proposed
        conversion("nosuch", "oli")
    assert "dasilva2016" not in caught.value.fix


@pytest.mark.parametrize(("family", "sensor"), [("dasilva2016", "oli"), ("esun", "tm")])
def test_weights_for_the_top_of_the_atmosphere_are_refused_for_surface_reflectance(family, sensor):
    with pytest.raises(InputProblem, match="surface reflectance"):
        albedo_numbers(Albedo.model_validate({"conversion": {"ground": family, "snow": family}}), sensor)
