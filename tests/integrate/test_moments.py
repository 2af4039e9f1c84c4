"""Closed-form moments against antiderivatives evaluated with mpmath (a general reference library)."""

import itertools

import numpy as np
import pytest
from mpmath import mp, mpf

from steelyard.integrate.moments import Piece, lognormal_piece, power_piece

LN10 = "2.30258509299404568401799145468436420760110148862877297603332790096757260967735248023600"


def raw_moment(power, slope, a, b):
    """int_a^b m^(power - slope) dm by its antiderivative."""
    p = mpf(power) + 1 - mpf(slope)
    return mp.log(mpf(b) / mpf(a)) if p == 0 else (mpf(b) ** p - mpf(a) ** p) / p


def raw_lognormal(power, centre, sigma, a, b):
    """int_a^b m^(power - 1) exp(-(ln m - centre)^2 / (2 sigma^2)) dm: an error function."""
    peak = mpf(centre) + power * mpf(sigma) ** 2
    za, zb = ((mp.log(mpf(x)) - peak) / (mpf(sigma) * mp.sqrt(2)) for x in (a, b))
    # erfc where both ends lie on one side, so that the tails keep their digits
    if za > 0:
        step = mp.erfc(za) - mp.erfc(zb)
    elif zb < 0:
        step = mp.erfc(-zb) - mp.erfc(-za)
    else:
        step = mp.erf(zb) - mp.erf(za)
    return (
        mp.exp(power * mpf(centre) + (power * mpf(sigma)) ** 2 / 2) * mpf(sigma) * mp.sqrt(mp.pi / 2) * step
    )


def reference(raw, a, b, c, h, order):
    return [
        sum(mp.binomial(k, j) * (-mpf(c)) ** (k - j) * raw(j, a, b) for j in range(k + 1)) / mpf(h) ** k
        for k in range(order + 1)
    ]


def worst(got, wanted):
    return max(float(abs(mpf(float(g)) / w - 1)) for g, w in zip(got, wanted, strict=True))


# a, b, origin and unit: whole segments, parts at either end of one, narrow and wide
INTERVALS = [
    (1.0, 1.25, 1.0, 0.25),
    (13.0, 15.0, 13.0, 2.0),
    (0.08, 1.0, 0.08, 0.92),
    (0.5, 120.0, 0.08, 119.92),
    (40.0, 120.0, 40.0, 80.0),
    (0.01, 300.0, 0.01, 299.99),
    (17.3, 18.0, 15.0, 3.0),
    (8.0, 8.0 * (1 + 1e-9), 8.0, 8.0 * (1 + 1e-9) - 8.0),
    (8.0, 8.0 * (1 + 1e-9), 6.5, 6.5),
    (1.0, 1.9, 1.0, 0.9),
    (1.0, 2.1, 1.0, 1.1),
]
SLOPES = [0.3, 1.3, 2.3, 2.35, 2.7, -1.5, 6.0]
SLOPES += [k + d for k in (0.0, 1.0, 2.0, 3.0, 4.0) for d in (0.0, 1e-9, -1e-9, 1e-4)]


@pytest.mark.parametrize("slope", SLOPES)
def test_power_laws_agree_with_the_antiderivative_at_80_digits(slope):
    piece = power_piece(1e-3, 1e3, slope)
    with mp.workdps(80):
        for a, b, c, h in INTERVALS:
            got = piece.moments([a], [b], [c], [h], 3)[:, 0]
            # h is what the caller takes for the width: compared with the same float
            wanted = reference(lambda j, a, b: raw_moment(j, slope, a, b), a, b, c, h, 3)
            assert worst(got, wanted) < 1e-12, (slope, a, b, c, h)


CHABRIER = (0.079, 0.69)  # Chabrier (2003, PASP 115, 763), single stars
SYSTEM = (0.22, 0.57)  # the same paper, systems
MILLER_SCALO = (10**-1.02, (2 * 1.09) ** -0.5)  # Miller & Scalo (1979), from memory


@pytest.mark.parametrize("centre, sigma", [CHABRIER, SYSTEM, MILLER_SCALO, (1.0, 0.3), (0.2, 2.0)])
def test_lognormals_agree_with_error_functions_at_80_digits(centre, sigma):
    piece = lognormal_piece(1e-3, 1e3, centre, sigma)
    with mp.workdps(80):
        sd = mpf(sigma) * mpf(LN10)
        for a, b, c, h in INTERVALS:
            got = piece.moments([a], [b], [c], [h], 3)[:, 0]
            raw = lambda j, a, b: raw_lognormal(j, mp.log(mpf(centre)), sd, a, b)  # noqa: E731
            assert worst(got, reference(raw, a, b, c, h, 3)) < 1e-12, (centre, sigma, a, b, c, h)


@pytest.mark.parametrize("sigma", [0.3, 0.2, 0.1, 0.05])
def test_sharp_lognormals_agree_within_five_sigma_of_their_peak(sigma):
    """Far from a sharp peak the local slope is steep, and a series needs more terms than the width says."""
    piece = lognormal_piece(1e-3, 1e3, 1.0, sigma)
    far = 10 ** (5 * sigma)
    misses = {}
    with mp.workdps(80):
        sd = mpf(sigma) * mpf(LN10)
        raw = lambda j, a, b: raw_lognormal(j, mpf(0), sd, a, b)  # noqa: E731
        for a, width in itertools.product((1 / far, 0.7, 1.0, 1.2, far), (1e-9, 1e-3, 0.02, 0.05, 0.1, 0.5)):
            b = a * (1 + width)
            h = b - a
            got = piece.moments([a], [b], [a], [h], 3)[:, 0]
            wanted = reference(raw, a, b, a, h, 3)
            # weights of values between 0 and 1: what counts is the error over the number of stars
            misses[a, width] = max(
                float(abs(mpf(float(g)) - w) / wanted[0]) for g, w in zip(got, wanted, strict=True)
            )
    assert max(misses.values()) < 1e-12, {k: v for k, v in misses.items() if v > 1e-12}


def test_the_exponent_that_makes_a_logarithm():
    """int m^-1 dm is a logarithm; slopes beside 1 go over into it smoothly."""
    exact = np.log(50.0)
    for d in (0.0, 1e-15, 1e-12, 1e-9):
        (got,) = power_piece(1.0, 100.0, 1.0 + d).moments([2.0], [100.0], [0.0], [1.0], 0)[:, 0]
        assert got == pytest.approx(exact, rel=max(3e-15, 4 * d))


def test_series_and_antiderivative_meet_where_one_gives_way_to_the_other():
    """Adding up parts gives the whole: no step at the change of method."""
    for piece in (power_piece(0.01, 300, 2.35), lognormal_piece(0.01, 300, *CHABRIER)):
        for ratio in (1.3, 1.5, 1.7, 1.9, 2.0, 2.2, 4.0):
            edges = np.geomspace(1.0, ratio, 8)
            parts = piece.moments(edges[:-1], edges[1:], 1.0, 1.0, 3).sum(axis=1)
            whole = piece.moments([1.0], [ratio], [1.0], [1.0], 3)[:, 0]
            np.testing.assert_allclose(parts, whole, rtol=5e-14)


def test_a_call_gives_the_function_itself():
    m = np.array([0.3, 2.0, 40.0])
    np.testing.assert_allclose(power_piece(0.1, 100, 2.35, 3.0)(m), 3.0 * m**-2.35, rtol=1e-14)
    x = np.log10(m / 0.22)
    np.testing.assert_allclose(
        lognormal_piece(0.1, 100, 0.22, 0.57, 2.0)(m), 2.0 / m * np.exp(-(x**2) / (2 * 0.57**2)), rtol=1e-13
    )


def test_many_intervals_at_once_equal_one_by_one():
    piece = Piece(0.01, 300.0, 0.1, 1.0, -2.5, 0.4)
    a, b, c, h = (np.array(v) for v in zip(*INTERVALS, strict=True))
    together = piece.moments(a, b, c, h, 3)
    alone = np.concatenate([piece.moments(*([x] for x in row), 3) for row in INTERVALS], axis=1)
    np.testing.assert_allclose(together, alone, rtol=1e-14)
