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
from firnlight.physics.chain_fast import albedo_block, flux_block
from firnlight.stages.albedo import albedo_numbers, empty_layers

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
def test_flux_kernel_equals_the_plain_chain_and_closes(seed):
    rng = np.random.default_rng(seed)
    window = Window(int(rng.integers(0, 60)), int(rng.integers(0, 60)), 23, 37)
    shape = (window.rows, window.cols)
    albedo = rng.integers(0, 10001, shape).astype(np.int16)
    albedo[rng.random(shape) < 0.1] = FILL
    albedo_u = rng.integers(0, 900, (4, *shape)).astype(np.int16)
    elevation = rng.uniform(-600, 5000, shape).astype(np.float32)
    elevation[rng.random(shape) < 0.05] = np.nan
    first = rng.uniform(0, 500, (8, 8, 22, 1)) * (rng.random((8, 8, 1, 1)) < 0.9)
    moments = Lattice(16, 16, np.concatenate([first * 0.1**k for k in range(4)], axis=-1))
    fast = [np.empty(shape, np.int16) for _ in range(3)]
    flux_block(
        albedo,
        albedo_u,
        elevation,
        window.row,
        window.col,
        moments.values,
        16,
        16,
        -500.0,
        250.0,
        0.05,
        np.int16(FILL),
        *fast,
    )
    plain = chain.flux_block(albedo, albedo_u, elevation, window, moments, -500.0, 250.0, 0.05, FILL)
    for got, name in zip(fast, plain, strict=True):
        assert ((got == FILL) == (plain[name] == FILL)).all()
        close(got, plain[name])
    seen = fast[0] != FILL
    assert ((fast[1][seen] >= 0) & (fast[1][seen] <= fast[0][seen])).all()


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
