"""Does the fused kernel store what the plain chain stores?"""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from firnlight.core.grid import Window
from firnlight.core.lattice import Lattice
from firnlight.core.layers import layer
from firnlight.core.settings import Albedo, Conversions
from firnlight.physics import chain
from firnlight.physics.chain_fast import absorbed_block, albedo_block, carry_block, net_block
from firnlight.physics.longwave import MELTING_K, black_body
from firnlight.stages.albedo import albedo_numbers, carried_share, empty_layers

FLAGS = layer("quality").flags
BITS = {name: 1 << n for n, name in enumerate(FLAGS)}
FILL = -32768
PAIRS = [("liang2001", "liang2001", "oli"), ("tasumi2008", "knap1999", "etm"), ("liang2001", "stroeve2005", "modis")]


def close(fast, plain):
    """Equal, but for a last step where two libraries round a tie differently."""
    difference = np.abs(fast.astype(int) - plain.astype(int))
    assert difference.max() <= 1
    assert (difference > 0).mean() <= 1e-3


@given(st.integers(0, 2**32 - 1), st.sampled_from(PAIRS), st.sampled_from(["gascoin_2020", "salomonson_appel_2004"]))
@settings(deadline=None, max_examples=25)
def test_albedo_kernel_equals_the_plain_chain(seed, pair, fraction):
    rng = np.random.default_rng(seed)
    ground, snow, sensor = pair
    numbers = albedo_numbers(Albedo(conversion=Conversions(ground=ground, snow=snow), snow_fraction=fraction), sensor)
    window = Window(int(rng.integers(0, 40)), int(rng.integers(0, 40)), 31, 47)
    shape = (len(numbers.bands), window.rows, window.cols)
    dn = rng.integers(0, 7000, shape).astype(np.uint16)
    bright = rng.random(shape[1:]) < 0.4
    for band, name in enumerate(numbers.bands):
        if name.startswith("swir"):
            dn[band][bright] = rng.integers(500, 1200, bright.sum())
    dn[rng.random(shape) < 0.02] = 0
    flags = rng.choice([0, 0, 0, 0, 1, 2, 4, 8, 16], shape[1:]).astype(np.uint8)
    scale, offset, nodata = (np.full(len(numbers.bands), v) for v in (0.0002, -0.1, 0.0))
    zenith = Lattice(16, 16, rng.uniform(60, 80, (8, 8)))
    fast = empty_layers(shape[1:])
    albedo_block(
        dn, scale, offset, nodata, flags, window.row, window.col, zenith.values, 16, 16, **numbers.kernel_arguments(),
        bits=tuple(np.uint8(1 << n) for n in range(8)), fill=np.int16(FILL), albedo=fast["albedo"],
        albedo_u=fast["albedo_u"], snow_fraction=fast["snow_fraction"], quality=fast["quality"],
    )  # fmt: skip
    rho = np.where(dn == 0, np.nan, dn * 0.0002 - 0.1)
    plain = chain.albedo_block(
        dict(zip(numbers.bands, rho, strict=True)), flags, zenith.at(window), zenith_limit_deg=numbers.zenith_limit_deg,
        ground=numbers.ground, snow=numbers.snow, noise=dict(zip(numbers.bands, numbers.noise, strict=True)),
        calibration=numbers.calibration, fraction_name=fraction, range_limits=numbers.range_limits, bits=BITS, fill=FILL,
    )  # fmt: skip
    assert (fast["quality"] == plain["quality"]).all()
    for name in ("albedo", "albedo_u", "snow_fraction"):
        assert ((fast[name] == FILL) == (plain[name] == FILL)).all()
        close(fast[name], plain[name])


@given(st.integers(0, 2**32 - 1))
@settings(deadline=None, max_examples=25)
def test_carry_kernel_equals_the_plain_chain(seed):
    rng = np.random.default_rng(seed)
    window = Window(int(rng.integers(0, 60)), int(rng.integers(0, 60)), 23, 37)
    shape = (window.rows, window.cols)
    albedo = rng.integers(0, 10001, shape).astype(np.int16)
    albedo[rng.random(shape) < 0.1] = FILL
    albedo_u = rng.integers(0, 900, (4, *shape)).astype(np.int16)
    albedo_u[:, albedo == FILL] = FILL
    snowy = rng.random(shape) < 0.5
    shapes = Lattice(16, 16, rng.uniform([0, 0, 0.7, 0.7], [0.5, 0.5, 1.4, 1.4], (8, 8, 4)))
    plain = chain.carry_block(albedo, albedo_u, snowy, shapes, window, FILL)
    carry_block(
        albedo, albedo_u, np.where(snowy, BITS["snow"], 0).astype(np.uint8), np.uint8(BITS["snow"]), shapes.values, 16, 16,
        window.row, window.col, carried_share(), np.int16(FILL),
    )  # fmt: skip
    for got, name in ((albedo, "albedo"), (albedo_u, "albedo_u")):
        assert ((got == FILL) == (plain[name] == FILL)).all()
        close(got, plain[name])


@given(st.integers(0, 2**32 - 1))
@settings(deadline=None, max_examples=25)
def test_absorbed_kernel_equals_the_plain_chain_and_closes(seed):
    rng = np.random.default_rng(seed)
    shape = (23, 37)
    albedo, insolation = rng.integers(0, 10001, shape).astype(np.int16), rng.integers(0, 30001, shape).astype(np.int16)
    albedo[rng.random(shape) < 0.1] = FILL
    insolation[rng.random(shape) < 0.1] = FILL
    albedo_u = rng.integers(0, 900, (4, *shape)).astype(np.int16)
    fast = [np.empty(shape, np.int16) for _ in range(2)]
    absorbed_block(albedo, albedo_u, insolation, 0.05, 0.03, np.int16(FILL), 30000.0, *fast)
    plain = chain.absorbed_block(albedo, albedo_u, insolation, 0.05, 0.03, FILL, 30000)
    for got, name in zip(fast, plain, strict=True):
        assert ((got == FILL) == (plain[name] == FILL)).all()
        close(got, plain[name])
    seen = fast[0] != FILL
    assert (seen == ((albedo != FILL) & (insolation != FILL))).all()
    assert ((fast[0][seen] >= 0) & (fast[0][seen] <= insolation[seen])).all()


@given(st.integers(0, 2**32 - 1), st.booleans())
@settings(deadline=None, max_examples=25)
def test_net_kernel_equals_the_plain_chain_and_closes(seed, on_slopes):
    rng = np.random.default_rng(seed)
    window = Window(int(rng.integers(0, 60)), int(rng.integers(0, 60)), 23, 37)
    shape = (window.rows, window.cols)
    absorbed = rng.integers(0, 6000, shape).astype(np.int16)
    absorbed[rng.random(shape) < 0.1] = FILL
    absorbed_u = rng.integers(0, 900, shape).astype(np.int16)
    quality = np.where(rng.random(shape) < 0.5, BITS["snow"], 0).astype(np.uint8)
    elevation = rng.uniform(-600, 5000, shape).astype(np.float32)
    elevation[rng.random(shape) < 0.05] = np.nan
    covers = rng.integers(1, 4, shape).astype(np.uint8)
    emissivity = np.array([0.99, 0.97, 0.95, 0.98])
    nodes = rng.uniform(150, 400, (8, 8, 22, 3))
    nodes[7, 7] = np.nan
    longwave = Lattice(16, 16, nodes)
    slope = rng.integers(0, 7501, shape).astype(np.int16) if on_slopes else np.empty((0, 0), np.int16)
    sky_view = rng.integers(0, 10001, shape).astype(np.int16) if on_slopes else np.empty((0, 0), np.int16)
    cosine = np.cos(np.radians(np.arange(8001) * 0.01))
    surface_k = rng.uniform(230, 310, shape).astype(np.float32)
    surface_k[rng.random(shape) < 0.5] = np.nan
    fast = [np.empty(shape, np.int16) for _ in range(3)]
    net_block(
        absorbed, absorbed_u, quality, np.uint8(BITS["snow"]), elevation, covers, emissivity, slope, sky_view, cosine,
        surface_k, float(black_body(1.0)), MELTING_K, window.row, window.col, nodes, 16, 16, -500.0, 250.0,
        8.0, 4.0, np.int16(FILL), 10000.0, 30000.0, *fast,
    )  # fmt: skip
    snowy = quality != 0
    view = sky_view / 10000.0 / cosine[slope] if on_slopes else np.ones(shape)
    plain = chain.net_block(
        absorbed, absorbed_u, snowy, elevation, np.where(snowy, emissivity[0], emissivity[covers]), view, window, longwave,
        -500.0, 250.0, 8.0, 4.0, FILL, 10000, 30000, surface_k.astype(float),
    )  # fmt: skip
    for got, name in zip(fast, plain, strict=True):
        assert ((got == FILL) == (plain[name] == FILL)).all()
        close(got, plain[name])
    seen = fast[0] != FILL
    assert seen.any()
    assert (fast[1][seen].astype(int) == absorbed[seen].astype(int) + fast[0][seen]).all()
    assert (fast[1][~seen] == FILL).all()


def test_a_value_beyond_the_limits_is_flagged_and_not_used():
    numbers = albedo_numbers(Albedo(), "oli")
    rho = {name: np.array([[0.3, 1.2, 1.005, -0.2, -0.01]]) for name in numbers.bands}
    out = chain.albedo_block(
        rho, np.zeros((1, 5), np.uint8), np.full((1, 5), 40.0), zenith_limit_deg=76.0, ground=numbers.ground,
        snow=numbers.snow, noise=dict.fromkeys(numbers.bands, 0.005), calibration=0.03, fraction_name="gascoin_2020",
        range_limits=(-0.02, 1.02), bits=BITS, fill=FILL,
    )  # fmt: skip
    expected = [0, BITS["outside_range"], BITS["set_to_limit"], BITS["outside_range"], BITS["set_to_limit"]]
    assert out["quality"][0].tolist() == expected
    assert out["albedo"][0].tolist() == [pytest.approx(3030, abs=1), FILL, 10000, FILL, 0]
