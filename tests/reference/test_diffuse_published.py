"""Does the sky's share of the light come out as its authors' formulas say?

The numbers in RIDLEY and ERBS are computed by hand from the printed formulas and stand to the last digit shown.
"""

import numpy as np
import pytest
from pvlib import irradiance

from firnlight.physics import diffuse

# Erbs, Klein & Duffie (1982), Solar Energy 28:293: clearness index, diffuse share
ERBS = [(0.1, 0.991), (0.3, 0.948596), (0.5, 0.659150), (0.65, 0.333612), (0.75, 0.183081), (0.8, 0.165270), (0.9, 0.165)]
# Ridley, Boland & Lauret (2010), Renewable Energy 35:478: clearness, solar time, altitude, day clearness, persistence, share
RIDLEY = [(0.5, 12, 60, 0.55, 0.5, 0.689011), (0.75, 12, 45, 0.72, 0.74, 0.170951)]


@pytest.mark.parametrize(("clearness", "share"), ERBS)
def test_erbs(clearness, share):
    assert diffuse.erbs(clearness) == pytest.approx(share, abs=5.1e-7)


@pytest.mark.parametrize("row", RIDLEY)
def test_ridley_boland_lauret(row):
    *inputs, share = row
    assert diffuse.brl(*inputs) == pytest.approx(share, abs=5.1e-7)


def test_ridley_boland_lauret_afternoon_is_less_diffuse_than_morning():
    """The solar-time term is +0.006 in the exponent; two later texts print it with the other sign."""
    assert diffuse.brl(0.5, 15, 40, 0.55, 0.5) < diffuse.brl(0.5, 9, 40, 0.55, 0.5)


def test_erbs_as_in_pvlib():
    """Same formula, made apart: equal to rounding wherever its clearness is within 0..1."""
    zenith, day_of_year = np.meshgrid(np.arange(0, 81, 10.0), np.array([1, 80, 172, 246, 355]))
    above = irradiance.get_extra_radiation(day_of_year, method="spencer") * np.cos(np.radians(zenith))
    for part in np.linspace(0, 1, 41):
        theirs = irradiance.erbs(part * above, zenith, day_of_year)
        np.testing.assert_allclose(
            diffuse.erbs(theirs["kt"]),
            np.where(part > 0, theirs["dhi"], above) / np.where(part > 0, part, 1) / above,
            atol=1e-12,
        )
