"""Madau & Dickinson (2014, ARA&A 52, 415): event numbers and return fractions of simple populations.

Their section 2.2 and 5.1: 0.0068 core-collapse events per Msun (Salpeter, 8-40 of 0.1-100 Msun); return
fraction 0.27 for Salpeter and 0.41 for Chabrier at a turn-off of 1 Msun, with remnants of
0.444 + 0.084 m below 8 Msun, 1.4 Msun for 8-40 Msun and black holes of the whole mass above.
"""

import numpy as np
import pytest
from mpmath import mp, mpf, quad

from steelyard.integrate import Population, StellarSource, imf
from steelyard.yields import Slice, YieldSet

LIMITS = (0.1, 100.0)


def remnants_only(id, kind, mass, remnant):
    """An invented set of the given remnants that ejects all else as it was born; it follows nothing but H."""
    mass, remnant = np.array(mass), np.array(remnant)
    ejected = mass - remnant
    one = Slice(0.02, mass, ejected, 0 * mass, 0.7 * ejected[:, None], 0 * ejected[:, None], np.array([0.7]))
    return YieldSet(id, kind, ("H",), (one,))


def stars(form):
    low = remnants_only("low", "agb", [0.5, 8.0], [0.444 + 0.084 * 0.5, 0.444 + 0.084 * 8.0])
    high = remnants_only("high", "core-collapse", [8.0, 40.0], [1.4, 1.4])
    return Population(
        0.02,
        [StellarSource("agb", [low]), StellarSource("core-collapse", [high])],
        imf=imf(form, limits=LIMITS),
        lifetimes=lambda mass, metallicity: 1e10 * mass**-2.5,
    )


@pytest.mark.parametrize("form, fraction", [("salpeter-1955", 0.27), ("chabrier-2003", 0.41)])
def test_return_fraction(form, fraction):
    out = stars(form).weigh("10 Gyr")
    returned = float(out.returned[0])
    assert round(returned, 2) == fraction
    assert float(out.living[0] + out.remnants[0]) == pytest.approx(1 - returned, abs=1e-14)

    def phi(m):
        if form == "salpeter-1955":
            return m ** mpf(-2.35)
        low = lambda x: mp.exp(-((mp.log10(x) - mp.log10(mpf("0.079"))) ** 2) / (2 * mpf("0.69") ** 2)) / x  # noqa: E731
        return low(m) if m < 1 else low(mpf(1)) * m ** mpf(-2.3)

    with mp.workdps(25):
        lost = quad(lambda m: phi(m) * (m - mpf("0.444") - mpf("0.084") * m), [1, 3, 8])
        lost += quad(lambda m: phi(m) * (m - mpf("1.4")), [8, 20, 40])
        whole = quad(lambda m: m * phi(m), [0.1, 0.3, 1, 10, 100])
    assert returned == pytest.approx(float(lost / whole), rel=1e-12)


@pytest.mark.parametrize("form, kind", [("salpeter-1955", "neutron star"), ("chabrier-2003", "neutron star")])
def test_remnants_by_kind(form, kind):
    """1.4 Msun is a neutron star (Chandrasekhar's limit, handbook); all above 40 Msun are black holes."""
    out = stars(form).weigh("10 Gyr")
    mf = imf(form, limits=LIMITS)
    assert float(out.remnants_by_kind[kind][0]) == pytest.approx(1.4 * float(mf.number(8, 40)), rel=1e-13)
    assert float(out.remnants_by_kind["black hole"][0]) == pytest.approx(float(mf.mass(40, 100)), rel=1e-13)
    dwarfs = 0.444 * float(mf.number(1, 8)) + 0.084 * float(mf.mass(1, 8))
    assert float(out.remnants_by_kind["white dwarf"][0]) == pytest.approx(dwarfs, rel=1e-13)


def test_events_per_mass_formed():
    """k_CC = 0.0068 per Msun, from (40^-1.35 - 8^-1.35) / 1.35 over the Salpeter mass integral."""
    number = (8**-1.35 - 40**-1.35) / 1.35
    mass = (0.1**-0.35 - 100**-0.35) / 0.35
    assert float(imf("salpeter-1955", limits=LIMITS).number(8, 40)) == pytest.approx(number / mass, rel=1e-13)
    assert number / mass == pytest.approx(6.8015e-3, rel=1e-5)
    assert round(number / mass, 4) == 0.0068


def test_events_of_a_population_reach_over_the_top_of_its_models():
    """All stars of 8 to 100 Msun that die count, those that vanish into black holes included."""
    out = stars("salpeter-1955").weigh(["10 Gyr", "0.05 Myr"])
    whole = (8**-1.35 - 100**-1.35) / 1.35 / ((0.1**-0.35 - 100**-0.35) / 0.35)
    assert float(out.events["core-collapse"][0]) == pytest.approx(whole, rel=1e-12)
    assert float(out.events["core-collapse"][1]) == 0.0


def test_events_of_the_kroupa_function():
    """Kroupa (2001) 0.08-120 Msun: 0.5 (8^-1.3 - 120^-1.3) / 1.3 over its mass integral."""
    mass = (0.5**0.7 - 0.08**0.7) / 0.7 + 0.5 * (0.5**-0.3 - 120**-0.3) / 0.3
    number = 0.5 * (8**-1.3 - 120**-1.3) / 1.3 / mass
    alone = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])])
    assert float(alone.weigh("20 Gyr").events["core-collapse"][0]) == pytest.approx(number, rel=1e-12)
    assert number == pytest.approx(1.09123948905e-2, rel=1e-11)
