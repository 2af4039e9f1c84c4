"""Drawn masses against the mass function's own numbers, and by scipy's Kolmogorov-Smirnov test."""

import numpy as np
import pytest
from scipy.stats import kstest

from steelyard.integrate import from_function, imf
from steelyard.integrate.scatter import mass_sampler

FORMS = {
    "salpeter-1955": imf("salpeter-1955"),
    "kroupa-2001": imf("kroupa-2001"),
    "kroupa-1993": imf("kroupa-1993"),
    "chabrier-2003": imf("chabrier-2003"),
    "miller-scalo-1979": imf("miller-scalo-1979"),
    "flat and steep": imf("power-law", slopes=[0.0, 1.0, 5.0], breaks=[1.0, 10.0]),
    "lognormal": imf("lognormal", centre=0.22, sigma=0.57),
    "narrow lognormal, far off": imf("lognormal", centre=0.05, sigma=0.3, limits=(0.5, 50)),
    "function": from_function(lambda m: m**-2.35, (0.1, 100)),
    "function with a jump": from_function(
        lambda m: np.where(m < 2, 1.0, 0.2) * np.exp(-m / 5), (0.1, 60), breaks=[2.0]
    ),
}


@pytest.mark.parametrize("name", FORMS)
@pytest.mark.parametrize("limits", [(0.0, 1e3), (0.7, 30.0), (8.0, 200.0), (0.2, 0.4)])
def test_shares_are_inverted(name, limits):
    """The number born below the mass at a share, over all, is that share."""
    form = FORMS[name]
    sampler = mass_sampler(form, *limits)
    if not sampler.number:
        pytest.skip("no stars between these masses")
    share = np.concatenate([np.linspace(0, 1, 401)[1:-1], [1e-9, 1e-5, 1 - 1e-5]])
    mass = sampler.at(share)
    assert np.all((mass >= sampler.lo) & (mass <= sampler.hi))
    back = form.number(sampler.lo, mass) / form.number(sampler.lo, sampler.hi)
    assert back == pytest.approx(share, rel=1e-9, abs=1e-6 if name.startswith("function") else 1e-12)
    assert sampler.number == pytest.approx(float(form.number(*limits)), rel=1e-12)


@pytest.mark.parametrize("name", FORMS)
def test_drawn_masses_follow_the_mass_function(name):
    """Kolmogorov-Smirnov at the level of 1e-3 (ten forms, seeds fixed)."""
    form = FORMS[name]
    lo, hi = form.limits
    drawn = mass_sampler(form, lo, hi).draw(np.random.default_rng(20), 20_000)
    found = kstest(drawn, lambda m: form.number(lo, m) / form.number(lo, hi))
    assert found.pvalue > 1e-3
    # and the test would tell: drawn from a slightly steeper one it fails
    other = kstest(drawn**0.95, lambda m: form.number(lo, m) / form.number(lo, hi))
    assert other.pvalue < 1e-3


def test_half_of_salpeters_stars():
    """Above 1 Msun half the stars are below (1 - (1 - 100^-1.35)/2)^(-1/1.35)."""
    half = (1 - 0.5 * (1 - 100**-1.35)) ** (-1 / 1.35)
    assert mass_sampler(imf("salpeter-1955"), 1, 100).at(np.array([0.5])) == pytest.approx([half], rel=1e-14)


def test_nothing_is_born_between_no_masses():
    empty = mass_sampler(imf("salpeter-1955"), 100, 120)
    assert empty.number == 0 and empty.draw(np.random.default_rng(0), 0).shape == (0,)
