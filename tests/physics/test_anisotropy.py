"""Do the kernels behave as light does, and does the inversion give back what was put in and own up to the rest?"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firnlight.core.errors import InputProblem
from firnlight.physics import anisotropy, anisotropy_fast

zeniths = st.floats(0, 80)
azimuths = st.floats(-360, 720)
names = st.sampled_from(sorted(anisotropy.KERNELS))
TRUTH = np.array([0.30, 0.12, 0.03])
NOISE = 0.01
FREE = anisotropy.Limits(largest_u=np.inf, largest_condition=1e9, spare_looks=0)
PRIOR = anisotropy.Prior((0.2, 0.09, 0.02), 0.1)
TWINS = pytest.mark.parametrize("invert", [anisotropy.invert, anisotropy_fast.invert], ids=["plain", "fast"])


def wide_looks(rng, looks=16):
    """Angles of a wide swath over two weeks: design (looks, 3)."""
    return anisotropy.design(rng.uniform(40, 55, looks), rng.uniform(0, 65, looks), rng.choice([30.0, 150.0, 210.0], looks))


def narrow_looks(rng, looks=16):
    """Near nadir, the sun hardly moving: the kernels cannot be told apart."""
    return anisotropy.design(rng.uniform(45, 47, looks), rng.uniform(0, 7, looks), rng.choice([80.0, 260.0], looks))


@given(names, zeniths, zeniths, azimuths)
def test_kernels_are_reciprocal(name, one, other, azimuth):
    kernel = anisotropy.KERNELS[name]
    assert kernel(one, other, azimuth) == pytest.approx(kernel(other, one, azimuth), rel=1e-9, abs=1e-9)


@given(names, zeniths, zeniths, st.floats(0, 180))
def test_left_and_right_of_the_sun_are_alike(name, sun, view, azimuth):
    kernel = anisotropy.KERNELS[name]
    for same in (-azimuth, 360 - azimuth, 360 + azimuth):
        # the shadow's edge has a slope like a square root's, so rounding of the azimuth shows
        assert kernel(sun, view, azimuth) == pytest.approx(kernel(sun, view, same), abs=1e-6)


@given(st.sampled_from(anisotropy.GROUND), st.floats(10, 70), azimuths)
def test_ground_is_brightest_with_the_sun_behind_the_sensor(name, zenith, azimuth):
    kernel = anisotropy.KERNELS[name]
    assert kernel(zenith, zenith, 0.0) >= kernel(zenith, zenith, azimuth) - 1e-9
    assert kernel(zenith, zenith, 0.0) > kernel(zenith, zenith, 180.0) + 0.03


@given(st.floats(40, 75), st.floats(40, 75))
def test_snow_is_brightest_towards_the_sun(sun, view):
    ring = anisotropy.snow(sun, view, np.arange(0.0, 181.0, 15.0))
    assert np.argmax(ring) == ring.size - 1
    assert ring[-1] > ring[0] + 0.05


@pytest.mark.parametrize("name", anisotropy.KERNELS)
@pytest.mark.parametrize(
    "angles", [(90.0, 0.0, 0.0), (0.0, 90.0, 0.0), (-1.0, 0.0, 0.0), (0.0, np.nan, 0.0), (0.0, 0.0, np.nan)]
)
def test_no_kernel_beyond_the_horizon_nor_without_an_angle(name, angles):
    assert np.isnan(anisotropy.KERNELS[name](*angles))


@pytest.mark.parametrize("name", anisotropy.KERNELS)
def test_the_integral_is_that_of_the_kernel(name):
    """By a plain midpoint sum over 360 x 360 directions: within 2e-4."""
    view = (np.arange(360) + 0.5) / 4
    azimuth = np.arange(360) + 0.5
    share = np.sin(np.radians(view)) * np.cos(np.radians(view)) * np.radians(0.25) * np.radians(1.0) / np.pi
    for sun in (0.0, 50.0):
        plain = np.sum(anisotropy.KERNELS[name](sun, view[:, np.newaxis], azimuth) * share[:, np.newaxis])
        assert anisotropy.black_sky(sun, name, "exact") == pytest.approx(plain, abs=2e-4)


def test_shapes_of_the_integrals():
    assert anisotropy.black_sky(np.full((2, 3), 30.0), "snow", "exact").shape == (2, 3)
    assert anisotropy.black_sky_weights(np.full((2, 3), 30.0)).shape == (2, 3, 3)
    assert np.isnan(anisotropy.black_sky([30.0, np.nan, 90.0], "snow", "exact")).tolist() == [False, True, True]
    assert anisotropy.white_sky("snow") == anisotropy.white_sky("snow", "exact")
    assert anisotropy.white_sky_weights(("ross_thick", "snow")).shape == (3,)


@pytest.mark.parametrize(("name", "method"), [("snow", "polynomial"), ("ross_thick", "by hand"), ("moss", "exact")])
def test_integrals_that_there_are_not(name, method):
    with pytest.raises(InputProblem):
        anisotropy.black_sky(30.0, name, method)


@given(st.floats(0, 1), st.floats(0, 1), st.floats(0, 1))
def test_blue_sky_lies_between(black, white, share):
    value = anisotropy.blue_sky(black, white, share)
    assert min(black, white) - 1e-12 <= value <= max(black, white) + 1e-12
    assert anisotropy.blue_sky(black, white, 0.0) == black
    assert anisotropy.blue_sky(black, white, 1.0) == white


def test_uncertainty_of_an_albedo():
    """Diagonal: sqrt(sum U2 u2) = sqrt(0.01^2 + (0.2 x 0.05)^2) by hand; fully correlated errors add as they are."""
    assert anisotropy.albedo_uncertainty([1, 0.2, 0], np.diag([0.01, 0.05, 9.0]) ** 2) == pytest.approx(0.01 * 2**0.5)
    u = np.array([0.01, 0.05, 0.0])
    many = np.stack([np.outer(u, u)] * 4).reshape(2, 2, 3, 3)
    np.testing.assert_allclose(anisotropy.albedo_uncertainty([1, 0.2, 0], many), np.full((2, 2), 0.02))


@TWINS
@pytest.mark.parametrize("kernels", [anisotropy.GROUND, ("ross_thick", "snow"), ("snow",), (*anisotropy.GROUND, "snow")])
def test_noise_free_looks_give_the_parameters_back(invert, kernels):
    rng = np.random.default_rng(5)
    design = anisotropy.design(
        rng.uniform(40, 60, (16, 2, 3)), rng.uniform(0, 60, (16, 2, 3)), rng.uniform(0, 360, (16, 2, 3)), kernels
    )
    truth = rng.uniform(0.05, 0.4, (2, 3, 1 + len(kernels)))
    got = invert(np.einsum("l...i,...i->l...", design, truth), np.full(16, NOISE**-2), design, kernels, limits=FREE)
    np.testing.assert_allclose(got.parameters, truth, atol=1e-9)
    assert (got.how == anisotropy.FITTED).all()
    assert (got.looks == 16).all()
    assert got.covariance.shape == (2, 3, 1 + len(kernels), 1 + len(kernels))
    np.testing.assert_array_equal(got.scatter, 1.0)  # noise as the weights say, not the accident of none


@TWINS
def test_noise_stays_within_its_covariance(invert):
    """d' C^-1 d / 3 of 4000 cells is F(3, 13): mean 13 / 11, 5 % above 3.4105 (F table); 4 standard errors of room."""
    rng = np.random.default_rng(11)
    design = wide_looks(rng)
    sigma = rng.uniform(0.5, 2, 16) * NOISE
    rho = (design @ TRUTH)[:, np.newaxis] + rng.normal(size=(16, 4000)) * sigma[:, np.newaxis]
    got = invert(rho, sigma**-2 * 7.0, design, limits=FREE, least_scatter=0.0)  # 7: relative weights must do
    free = got.how == anisotropy.FITTED
    assert free.mean() > 0.95
    off = got.parameters[free] - TRUTH
    f = np.einsum("ci,cij,cj->c", off, np.linalg.inv(got.covariance[free]), off) / 3
    assert np.mean(f) == pytest.approx(13 / 11, abs=4 * np.std(f) / free.sum() ** 0.5)
    assert np.mean(f > 3.4105) == pytest.approx(0.05, abs=4 * (0.05 * 0.95 / free.sum()) ** 0.5)
    assert got.scatter[free].mean() == pytest.approx(7.0, rel=0.05)


@TWINS
def test_more_scatter_than_the_weights_say_widens_and_less_does_not_narrow(invert):
    rng = np.random.default_rng(2)
    design = wide_looks(rng)
    noise = rng.normal(size=16) * NOISE
    calm, said, wild = (invert(design @ TRUTH + k * noise, np.full(16, NOISE**-2), design, limits=FREE) for k in (0, 0.1, 5))
    np.testing.assert_array_equal(calm.covariance, said.covariance)
    assert wild.scatter == pytest.approx(25, rel=0.8)
    np.testing.assert_allclose(wild.covariance, wild.scatter * calm.covariance, rtol=1e-9)


@TWINS
def test_belief_goes_by_what_the_looks_tell_not_by_their_number(invert):
    rng = np.random.default_rng(3)
    few, many = wide_looks(rng, 7), narrow_looks(rng, 40)
    seven = invert(few @ TRUTH, np.full(7, NOISE**-2), few)
    forty = invert(many @ TRUTH, np.full(40, NOISE**-2), many)
    assert seven.how == anisotropy.FITTED
    assert forty.how == anisotropy.UNSEEN
    assert np.isnan(forty.parameters).all()
    assert np.isnan(forty.covariance).all()
    assert np.isnan(forty.scatter)
    assert forty.looks == 40


@TWINS
@pytest.mark.parametrize("spoil", ["largest_u", "largest_condition", "spare_looks"])
def test_each_limit_counts(invert, spoil):
    design = wide_looks(np.random.default_rng(3))
    call = design @ TRUTH, np.full(16, NOISE**-2), design
    assert invert(*call).how == anisotropy.FITTED
    limits = {**vars(anisotropy.default_limits()), spoil: {"spare_looks": 14}.get(spoil, 1e-3)}
    assert invert(*call, limits=anisotropy.Limits(**limits)).how == anisotropy.UNSEEN


@TWINS
def test_few_looks_scale_the_prior_and_are_less_sure(invert):
    rng = np.random.default_rng(4)
    design = wide_looks(rng)
    shape = np.array(PRIOR.parameters)
    rho = 1.5 * design @ shape
    weights = np.full(16, NOISE**-2)
    full = invert(rho, weights, design, prior=PRIOR)
    white = anisotropy.white_sky_weights()
    sure = anisotropy.albedo_uncertainty(white, full.covariance)
    assert full.how == anisotropy.FITTED
    for looks in (1, 2, 3):
        few = invert(rho[:looks], weights[:looks], design[:looks], prior=PRIOR)
        assert few.how == anisotropy.SCALED_PRIOR
        np.testing.assert_allclose(few.parameters, 1.5 * shape, rtol=1e-12)
        unsure = anisotropy.albedo_uncertainty(white, few.covariance)
        assert unsure > 2 * sure
        assert unsure >= PRIOR.relative_u * white @ few.parameters
        assert invert(rho[:looks], weights[:looks], design[:looks]).how == anisotropy.UNSEEN


@TWINS
def test_the_scale_of_a_prior_and_its_uncertainty_by_hand(invert):
    """Shape (1, 0, 0), looks 0.2 and 0.4, weights 3e4 and 1e4: a = 0.25, s2 = 3e4 0.05^2 + 1e4 0.15^2 = 300."""
    design = np.array([[1.0, 0.1, -1.0], [1.0, 0.2, -1.1]])
    got = invert([0.2, 0.4], [3e4, 1e4], design, prior=anisotropy.Prior((1.0, 0.0, 0.0), 0.1))
    np.testing.assert_allclose(got.parameters, [0.25, 0, 0], rtol=1e-12)
    assert got.scatter == pytest.approx(300)
    assert got.covariance[0, 0] == pytest.approx(0.025**2 + 300 / 4e4)


@TWINS
def test_parameters_are_held_at_zero_at_the_best_place(invert):
    """No other parameters of a fine lattice, none below 0, fit better; and the covariance is that of the free fit."""
    rng = np.random.default_rng(6)
    design = wide_looks(rng)
    rho = design @ np.array([0.3, -0.1, 0.02])
    weights = np.full(16, NOISE**-2)
    got = invert(rho, weights, design, limits=FREE, least_scatter=1e-9)
    assert got.how == anisotropy.HELD_AT_ZERO
    assert (got.parameters >= 0).all()
    assert got.parameters[1] == 0
    cost = np.sum((rho - design @ got.parameters) ** 2)
    steps = rng.uniform(-0.02, 0.02, (5000, 3)) * rng.choice([0.01, 1.0], (5000, 1))
    others = np.maximum(got.parameters + steps, 0.0)
    assert (np.sum((rho - others @ design.T) ** 2, axis=1) >= cost).all()
    spread = np.linalg.inv(design.T @ np.diag(weights) @ design)
    np.testing.assert_allclose(got.covariance, got.scatter * spread, rtol=1e-9)


@TWINS
def test_a_look_that_is_missing_in_a_cell_is_left_out_of_it_alone(invert):
    rng = np.random.default_rng(7)
    design = np.stack([wide_looks(rng) for _ in range(5)], axis=1)
    rho = np.einsum("lci,i->lc", design, TRUTH) + rng.normal(size=(16, 5)) * NOISE
    weights = np.full((16, 5), NOISE**-2)
    whole = invert(rho, weights, design, prior=PRIOR)
    spoiled = [one.copy() for one in (rho, weights, design)]
    spoiled[0][3, 0] = np.nan
    spoiled[1][3, 1] = np.nan
    spoiled[1][3, 2] = -1.0
    spoiled[2][3, 3, 2] = np.nan
    got = invert(*spoiled, prior=PRIOR)
    without = invert(*(np.delete(one, 3, axis=0) for one in (rho, weights, design)), prior=PRIOR)
    assert got.looks.tolist() == [15, 15, 15, 15, 16]
    np.testing.assert_allclose(got.parameters[:4], without.parameters[:4], rtol=1e-9)
    np.testing.assert_allclose(got.covariance[:4], without.covariance[:4], rtol=1e-9)
    np.testing.assert_allclose(got.parameters[4], whole.parameters[4], rtol=1e-12)


@TWINS
def test_no_look_is_unseen_whatever_the_prior(invert):
    design = wide_looks(np.random.default_rng(8))
    got = invert(np.full((16, 2, 2), np.nan), np.ones(16), design, prior=PRIOR)
    assert (got.how == anisotropy.UNSEEN).all()
    assert (got.looks == 0).all()
    assert np.isnan(got.parameters).all()
    # one look of relative weight says nothing of scatter
    one = invert([0.2], [1.0], design[:1], prior=PRIOR, least_scatter=0.0)
    assert one.how == anisotropy.UNSEEN
    assert invert([0.2], [1.0], design[:1], prior=PRIOR).how == anisotropy.SCALED_PRIOR


@TWINS
def test_a_dark_noisy_look_does_not_turn_the_prior_round(invert):
    design = wide_looks(np.random.default_rng(8), 1)
    got = invert([-0.01], [NOISE**-2], design, prior=PRIOR)
    np.testing.assert_array_equal(got.parameters, 0.0)
    assert got.covariance[0, 0] > 0


@TWINS
def test_shapes_that_do_not_fit_are_refused(invert):
    design = wide_looks(np.random.default_rng(9))
    for weights, wrong in ((np.ones(15), design), (np.ones(16), design[:15]), (np.ones(16), design[:, :2])):
        with pytest.raises(InputProblem, match="inversion"):
            invert(np.full(16, 0.3), weights, wrong)


@pytest.mark.parametrize("seed", range(12))
def test_fast_inversion_equals_the_plain_one(seed):
    """Codes to the bit, floats to 1e-9 of the largest: a 3 x 3 inverse of condition 1e4 keeps 12 digits of 16."""
    rng = np.random.default_rng(seed)
    looks, cells = int(rng.integers(1, 24)), (7, 40)
    kernels = [anisotropy.GROUND, ("ross_thick", "snow"), ("snow",), (*anisotropy.GROUND, "snow")][seed % 4]
    sun, azimuth = rng.uniform(30, 60, (looks, *cells)), rng.uniform(0, 360, (looks, *cells))
    view = rng.uniform(0, 60, (looks, *cells)) * rng.choice([0.01, 1.0], cells)
    design = anisotropy.design(sun, view, azimuth, kernels)
    p = 1 + len(kernels)
    rho = np.einsum("l...i,...i->l...", design, rng.uniform(-0.05, 0.3, (*cells, p))) + rng.normal(size=sun.shape) * NOISE
    rho[rng.random(rho.shape) < rng.choice([0.0, 0.3, 0.9])] = np.nan
    weights = rng.uniform(0, 1, (looks, *cells)) * NOISE**-2
    if seed % 3 == 0:
        weights = weights[:, 0, 0]
    if seed % 3 == 1:
        design = design[:, 0, 0]
    prior = anisotropy.Prior(tuple(rng.uniform(0.01, 0.3, p)), 0.1) if seed % 2 else None
    call = rho, weights, design, kernels, prior, None, float(seed % 2)
    fast, plain = anisotropy_fast.invert(*call), anisotropy.invert(*call)
    for field in ("how", "looks"):
        np.testing.assert_array_equal(getattr(fast, field), getattr(plain, field))
        assert getattr(fast, field).dtype == getattr(plain, field).dtype
    for field in ("parameters", "covariance", "scatter"):
        np.testing.assert_allclose(getattr(fast, field), getattr(plain, field), rtol=1e-9, atol=1e-11)


@TWINS
def test_bands_share_one_design(invert):
    rng = np.random.default_rng(10)
    design = anisotropy.design(*(rng.uniform(30, 60, (16, 4)) for _ in range(2)), rng.uniform(0, 360, (16, 4)))
    truth = rng.uniform(0.02, 0.3, (6, 4, 3))
    rho = np.einsum("lci,bci->lbc", design, truth)
    got = invert(rho, np.full(16, NOISE**-2), design[:, np.newaxis], limits=FREE)
    np.testing.assert_allclose(got.parameters, truth, atol=1e-9)


def test_the_ground_prior_is_the_weighted_mean_of_the_bands():
    """Liang (2001) weights times Roy et al. (2016), by hand: iso 0.211386, volume 0.092371, geometric 0.024709."""
    prior = anisotropy.ground_prior()
    assert prior.parameters == pytest.approx((0.211386, 0.092371, 0.024709), abs=1e-6)
    assert prior.relative_u > 0


@given(st.sampled_from(["blue", "green", "red", "nir", "swir16", "rededge075"]), zeniths, azimuths)
def test_seen_from_above_nothing_changes(band, sun, azimuth):
    assert anisotropy.nadir_factor(band, sun, 0.0, azimuth) == pytest.approx(1.0, abs=1e-12)


@given(st.floats(0, 70), st.floats(0, 15), azimuths, st.floats(0, 70))
def test_factors_follow_each_other(sun, view, azimuth, target):
    """To nadir first and then to another sun is the same as both at once."""
    both = anisotropy.nadir_factor("red", sun, view, azimuth, target)
    first = anisotropy.nadir_factor("red", sun, view, azimuth)
    assert both == pytest.approx(first * anisotropy.nadir_factor("red", sun, 0.0, 0.0, target), rel=1e-12)


def test_snow_is_left_as_it_is():
    angles = np.array([45.0, 45.0, np.nan, np.nan])
    got = anisotropy.nadir_factor("nir", angles, 7.0, 0.0, snow=[True, False, True, False])
    assert got[[0, 2]].tolist() == [1.0, 1.0]
    assert got[1] < 0.97
    assert np.isnan(got[3])


def test_a_band_without_parameters_is_refused():
    for band in ("coastal", "source", "green "):
        with pytest.raises(InputProblem, match="one of blue, green"):
            anisotropy.nadir_factor(band, 45.0, 7.0, 0.0)


def test_the_mean_sun_is_lower_towards_the_poles():
    north = anisotropy.mean_sun_zenith(np.arange(10.0, 91.0))
    south = anisotropy.mean_sun_zenith(-np.arange(10.0, 91.0))
    assert (np.diff(north) > 0).all()
    assert (np.diff(south) > 0).all()


def test_no_sun_beyond_the_poles():
    assert np.isnan(anisotropy.mean_sun_zenith([91.0, -91.0, np.nan])).all()
