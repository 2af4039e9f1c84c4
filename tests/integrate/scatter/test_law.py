"""The exact law against quadrature by scipy and values by hand."""

from math import sqrt

import numpy as np
import pytest
from scipy.integrate import quad

from steelyard.integrate import DelayedSource, Population, StellarSource, imf
from steelyard.integrate.scatter import scatter
from steelyard.integrate.scatter.law import second_moment
from steelyard.yields.errors import InputError

from .populations import PLAIN, RICH, SALPETER, Z, invented, massive, published


def law(population, mass=1000.0, mode="poisson", ages=None):
    return scatter(population, mass, 1, mode=mode, ages=ages).law


def integral(function, lo=10, hi=40, mass_function=SALPETER):
    return quad(lambda m: float(mass_function(m)) * function(m), lo, hi, epsabs=0, epsrel=1e-12)[0]


def oxygen(m):
    """Of the invented set: the line through 1 Msun at 10 and 4 at 40."""
    return 1 + 3 * (m - 10) / 30


def test_moments_of_lines():
    """Campbell's theorem: mean, variance and third cumulant are int phi y, y^2 and y^3 times the mass."""
    found = law(massive())
    for n, value in (
        (1, found.mean[0, 0]),
        (2, found.covariance[0, 0, 0]),
        (3, found.third[0, 0]),
    ):
        assert value == pytest.approx(1000 * integral(lambda m, n=n: oxygen(m) ** n), rel=1e-11)
    assert found.skewness[0, 0] == pytest.approx(
        integral(lambda m: oxygen(m) ** 3) / sqrt(1000) / integral(lambda m: oxygen(m) ** 2) ** 1.5, rel=1e-11
    )
    assert found.stars == pytest.approx(1000 * float(SALPETER.number(0.1, 40)))


@pytest.mark.parametrize("form", ["chabrier-2003", "kroupa-2001"])
def test_moments_of_cubics(form):
    """Products of cubics, of degree six and nine, at an age at which stars of 20 Msun have died."""
    three = invented(
        "three", "core-collapse", {10: (8, 1, (4, 1)), 20: (18, 3, (9, 1.5)), 40: (38, 9, (20, 6))}
    )
    mass_function = imf(form, limits=(0.1, 40))
    population = massive([three], mass_function, "cubic")
    age = float(population.prepared.curve.lifetime(20.0)) * 0.8
    found = law(population, ages=[age])
    lowest = float(population.prepared.curve.turnoff(age))
    spans = population.prepared.spans

    def value(m):
        span = next(s for s in spans if s.lo <= m <= s.hi)
        return float(span.curve.resample(np.array([m])).values[0, 0])

    for n, at in ((1, found.mean[0, 0]), (2, found.covariance[0, 0, 0]), (3, found.third[0, 0])):
        wanted = integral(lambda m, n=n: value(m) ** n, lowest, 40, mass_function)
        assert at == pytest.approx(1000 * wanted, rel=1e-10)


def test_means_are_those_of_the_weighed_population():
    population = published()
    found, weighed = law(population), population.weigh()
    np.testing.assert_allclose(found.mean, 1000 * weighed.total.sum(axis=0), rtol=1e-12, atol=1e-18)
    np.testing.assert_allclose(
        np.einsum("tii->ti", found.covariance), found.by_source.sum(axis=0), rtol=1e-12, atol=1e-18
    )


def test_covariances_are_symmetric_and_keep_the_inequality_of_schwarz():
    found = law(published())
    for t in range(3):
        c = found.covariance[t]
        np.testing.assert_allclose(c, c.T, rtol=1e-12)
        sigma = np.sqrt(np.diag(c))
        assert np.all(np.abs(c) <= np.outer(sigma, sigma) * (1 + 1e-12))
        assert np.linalg.eigvalsh(c / np.outer(sigma, sigma)).min() > -1e-12


def test_a_mixture_adds_the_scatter_between_its_sets():
    """Half y, half 2y: int phi y^2 (1 + 4)/2, where the mean star would have (3/2)^2."""
    found = law(massive([{PLAIN: 0.5, RICH: 0.5}]))
    square = integral(lambda m: oxygen(m) ** 2)
    assert found.mean[0, 0] == pytest.approx(1500 * integral(oxygen), rel=1e-11)
    assert found.covariance[0, 0, 0] == pytest.approx(2500 * square, rel=1e-11)
    assert found.third[0, 0] == pytest.approx(4500 * integral(lambda m: oxygen(m) ** 3), rel=1e-11)


def test_failed_explosions_scatter_as_events():
    """At 20-30 Msun one in four ejects its wind at birth composition: 0.01 of 1 + 9 (m - 10)/30."""
    table = {"masses": [20, 30], "probability": [0.25]}
    found = law(massive(implode=table))

    def wind(m):
        return 0.01 * (1 + 9 * (m - 10) / 30)

    square = integral(lambda m: oxygen(m) ** 2, 10, 20) + integral(lambda m: oxygen(m) ** 2, 30, 40)
    square += integral(lambda m: 0.75 * oxygen(m) ** 2 + 0.25 * wind(m) ** 2, 20, 30)
    assert found.covariance[0, 0, 0] == pytest.approx(1000 * square, rel=1e-11)
    mean = integral(oxygen) + 0.25 * integral(lambda m: wind(m) - oxygen(m), 20, 30)
    assert found.mean[0, 0] == pytest.approx(1000 * mean, rel=1e-11)


def test_delayed_events_of_two_classes():
    """Events are Poisson: variance = number (share_a y_a^2 + share_b y_b^2)."""
    sets = ("iwamoto-1999-W7", "iwamoto-1999-CDD2")
    late = DelayedSource(
        "thermonuclear", [dict(zip(sets, (0.25, 0.75), strict=True))], 2e-3, "maoz-graur-2017"
    )
    source = StellarSource("core-collapse", [PLAIN])
    both = law(Population(Z, [source, late], imf=SALPETER, species=["Fe"], ages=["13.8 Gyr"]))
    one, other = (
        Population(Z, [source, DelayedSource("x", [s], 1, "maoz-graur-2017")], species=["Fe"])
        .weigh("13.8 Gyr")
        .get("Fe")[0]
        for s in sets
    )
    assert both.mean[0, 0] == pytest.approx(2 * (0.25 * one + 0.75 * other), rel=1e-12)
    assert both.covariance[0, 0, 0] == pytest.approx(2 * (0.25 * one**2 + 0.75 * other**2), rel=1e-12)


def test_a_fixed_number_of_stars_takes_the_scatter_of_the_number_away():
    """N (int p y^2 - (int p y)^2), and the third central moment."""
    found = law(massive(), mode="number")
    n1 = float(SALPETER.number(0.1, 40))
    stars = round(1000 * n1)
    assert found.stars == stars and found.born == pytest.approx(stars / n1)
    m1, m2, m3 = (integral(lambda m, n=n: oxygen(m) ** n) / n1 for n in (1, 2, 3))
    assert found.mean[0, 0] == pytest.approx(stars * m1, rel=1e-11)
    assert found.covariance[0, 0, 0] == pytest.approx(stars * (m2 - m1**2), rel=1e-11)
    assert found.third[0, 0] == pytest.approx(stars * (m3 - 3 * m1 * m2 + 2 * m1**3), rel=1e-11)


def test_a_fixed_mass_leaves_what_is_not_in_proportion_to_mass():
    """Renewal theory: (M + Q/2) Y and M int phi (y - Y m)^2, living stars with y = 0 included."""
    found = law(massive(), mode="mass")
    q, y = integral(lambda m: m * m, 0.1), integral(oxygen)
    assert second_moment(SALPETER) == pytest.approx(q, rel=1e-11)
    assert found.born == pytest.approx(1000 + q / 2)
    assert found.mean[0, 0] == pytest.approx((1000 + q / 2) * y, rel=1e-11)
    rest = integral(lambda m: (oxygen(m) - y * m) ** 2) + integral(lambda m: (y * m) ** 2, 0.1, 10)
    assert found.covariance[0, 0, 0] == pytest.approx(1000 * rest, rel=1e-10)


def test_skewness_falls_with_the_root_of_mass_and_says_when_a_gaussian_serves():
    small, large = law(massive(), 100.0), law(massive(), 10000.0)
    assert small.skewness[0, 0] == pytest.approx(10 * large.skewness[0, 0], rel=1e-12)
    assert not small.gaussian[0, 0] and large.gaussian[0, 0]


def test_too_many_ways_to_end():
    sets = [invented(f"n{k}", "core-collapse", {10: (8, 1, (4, k)), 40: (38, 10, (20, 4))}) for k in range(3)]
    entries = [{s: 1 / 3 for s in sets} | {"from": 10 + k, "to": 11 + k} for k in range(4)]
    with pytest.raises(InputError, match="81 ways"):
        law(massive(entries))
