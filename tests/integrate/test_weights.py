"""The whole chain from published models to weighed yields, in mpmath beside the code's own.

The reference takes the models of a set, draws lines or the cubics of scipy's PchipInterpolator between
them, and integrates them against the mass function by antiderivatives at 60 digits.
"""

import itertools

import numpy as np
import pytest
from mpmath import mp, mpf
from scipy.interpolate import PchipInterpolator

from steelyard.integrate import Population, StellarSource, imf
from steelyard.integrate.span import Span
from steelyard.integrate.weights import basis, dead_weights, dying_basis, segments
from steelyard.yields import load
from steelyard.yields.curve import Curve, slice_curve

DIGITS = 60
AGES = (5e6, 6.1e6, 1.1e7, 1.4e7, 1e8, 4e8, 3e9, 1.38e10)


def power_terms(slopes, breaks, limits):
    """Pieces (lo, hi, k -> amplitude, slope) of a continuous broken power law, cut to the limits."""
    edges = [mpf(0), *map(mpf, breaks), mpf("1e9")]
    amplitude, out = mpf(1), []
    for i, slope in enumerate(map(mpf, slopes)):
        if i:
            amplitude *= edges[i] ** (slope - mpf(slopes[i - 1]))
        lo, hi = max(edges[i], mpf(limits[0])), min(edges[i + 1], mpf(limits[1]))
        if hi > lo:
            out.append((lo, hi, amplitude, slope, None))
    return out


def lognormal_terms(centre, sigma, limits, top=None):
    """A lognormal up to `top`, then slope 2.3 continuous there."""
    spread = (mp.log(mpf(centre)), mpf(sigma) * mp.log(10))
    lo, hi = map(mpf, limits)
    if top is None:
        return [(lo, hi, mpf(1), mpf(1), spread)]
    top = mpf(top)
    there = mp.exp(-((mp.log(top) - spread[0]) ** 2) / (2 * spread[1] ** 2)) / top
    return [(lo, top, mpf(1), mpf(1), spread), (top, hi, there * top ** mpf(2.3), mpf(2.3), None)]


def raw(term, power, a, b):
    """int_a^b m^power phi dm on one piece."""
    _, _, amplitude, slope, spread = term
    if spread is None:
        p = power + 1 - slope
        return amplitude * (mp.log(b / a) if p == 0 else (b**p - a**p) / p)
    mu, sd = spread
    za, zb = ((mp.log(x) - mu - power * sd**2) / (sd * mp.sqrt(2)) for x in (a, b))
    step = mp.erfc(za) - mp.erfc(zb) if za > 0 else mp.erf(zb) - mp.erf(za)
    return amplitude * mp.exp(power * mu + (power * sd) ** 2 / 2) * sd * mp.sqrt(mp.pi / 2) * step


LIMITS = (0.08, 120.0)
REFERENCES = {
    "salpeter-1955": ({"limits": LIMITS}, lambda: power_terms([2.35], [], LIMITS)),
    "kroupa-2001": ({}, lambda: power_terms([1.3, 2.3], [0.5], LIMITS)),
    "kroupa-1993": ({}, lambda: power_terms([1.3, 2.2, 2.7], [0.5, 1.0], LIMITS)),
    "chabrier-2003": ({}, lambda: lognormal_terms(0.079, 0.69, LIMITS, 1.0)),
    "chabrier-2003-system": ({}, lambda: lognormal_terms(0.22, 0.57, LIMITS, 1.0)),
    "miller-scalo-1979": ({"limits": LIMITS}, lambda: lognormal_terms(10**-1.02, (2 * 1.09) ** -0.5, LIMITS)),
    "lognormal": ({"centre": 2.0, "sigma": 0.4}, lambda: lognormal_terms(2.0, 0.4, LIMITS)),
    "slopes 1, 2, 3": (
        {"form": "power-law", "slopes": [1.0, 2.0, 3.0], "breaks": [3.1, 19.0]},
        lambda: power_terms([1.0, 2.0, 3.0], [3.1, 19.0], LIMITS),
    ),
    "slopes beside 1, 2, 3": (
        {"form": "power-law", "slopes": [1 + 1e-9, 2 - 1e-9, 3 + 1e-9], "breaks": [3.1, 19.0]},
        lambda: power_terms([1 + 1e-9, 2 - 1e-9, 3 + 1e-9], [3.1, 19.0], LIMITS),
    ),
    "slopes 3, 2, 1": (
        {"form": "power-law", "slopes": [3.0, 2.0, 1.0], "breaks": [1.7, 27.0]},
        lambda: power_terms([3.0, 2.0, 1.0], [1.7, 27.0], LIMITS),
    ),
}
CHOSEN = {"karakas-2010": ("agb", 0.02), "kobayashi-2006": ("core-collapse", 0.02)}


def dead_integrals(terms, mass, turnoff, order):
    """int ((m - m_i) / h_i)^k phi dm over the dead of every interval, normalised."""
    whole = sum(raw(t, 1, t[0], t[1]) for t in terms)
    out = []
    for lo, hi in itertools.pairwise(mass):
        c, h = mpf(float(lo)), mpf(float(hi)) - mpf(float(lo))
        row = [mpf(0)] * (order + 1)
        for term in terms:
            a = max(c, term[0], mpf(min(float(turnoff), 1e9)))
            b = min(c + h, term[1])
            if b > a:
                r = [raw(term, j, a, b) for j in range(order + 1)]
                for k in range(order + 1):
                    row[k] += sum(mp.binomial(k, j) * (-c) ** (k - j) * r[j] for j in range(k + 1)) / h**k
        out.append([x / whole for x in row])
    return out


def polynomials(mass, values, slopes):
    """Coefficients of 1, x, x^2, x^3 in every interval, exact from the node values (and slopes)."""
    out = []
    for i in range(len(mass) - 1):
        h = mpf(float(mass[i + 1])) - mpf(float(mass[i]))
        y0, y1 = (np.array([mpf(float(v)) for v in values[j]]) for j in (i, i + 1))
        if slopes is None:
            out.append((y0, y1 - y0))
        else:
            d0, d1 = (np.array([mpf(float(v)) * h for v in slopes[j]]) for j in (i, i + 1))
            out.append((y0, d0, 3 * (y1 - y0) - 2 * d0 - d1, d0 + d1 - 2 * (y1 - y0)))
    return out


@pytest.mark.parametrize("method", ["linear", "cubic"])
@pytest.mark.parametrize("set_id", CHOSEN)
@pytest.mark.parametrize("name", REFERENCES)
def test_weighed_yields_equal_the_reference(name, set_id, method):
    kind, z = CHOSEN[set_id]
    options, terms = REFERENCES[name]
    grid = load(set_id)
    one = grid.at(z)
    stars = Population(
        z,
        [StellarSource(kind, [set_id], winds="rest")],
        imf=imf(options.get("form", name), **{k: v for k, v in options.items() if k != "form"}),
        species="nuclides",
        interpolation=method,
        ages=AGES,
    )
    got = stars.weigh()
    quantity = one.listed if kind == "core-collapse" else one.net
    values = got.total[0] if kind == "core-collapse" else got.net[0]
    slopes = PchipInterpolator(one.mass, quantity, axis=0)(one.mass, 1) if method == "cubic" else None
    turnoff = np.asarray(stars.prepared.curve.turnoff(np.array(AGES)))
    with mp.workdps(DIGITS):
        pieces = polynomials(one.mass, quantity, slopes)
        for t, m_t in enumerate(turnoff):
            moments = dead_integrals(terms(), one.mass, m_t, 3 if method == "cubic" else 1)
            parts = [
                c * w
                for poly, row in zip(pieces, moments, strict=True)
                for c, w in zip(poly, row, strict=True)
            ]
            wanted = np.array([float(x) for x in sum(parts)])
            scale = np.array([float(x) for x in sum(abs(p) for p in parts)])
            # net yields cross zero: then 1e-12 is of the sum without signs
            scale = np.abs(wanted) if kind == "core-collapse" else scale
            assert np.all(np.abs(values[t] - wanted) <= 1e-12 * scale), (t, m_t)
            if m_t > one.mass[-1]:
                assert not values[t].any()


def line_span(lo, hi, y0, y1, slopes=None):
    values = np.array([[y0], [y1]], dtype=float)
    steep = None if slopes is None else np.array(slopes, dtype=float)[:, None]
    return Span(lo, hi, 0, "x", Curve(np.array([lo, hi]), values, steep, np.eye(2)))


@pytest.mark.parametrize("cubic", [False, True])
@pytest.mark.parametrize("width", [1e-9, 1e-4, 1.0, 13.0])
def test_narrow_and_wide_segments(width, cubic):
    """One segment of 8 (1 + width) Msun: its weights against antiderivatives, to 1e-12 of the stars in it."""
    lo, hi = 8.0, 8.0 * (1 + width)
    mf = imf("kroupa-2001", limits=(lo, hi))
    parts = segments([line_span(lo, hi, 1, 1, [0, 0] if cubic else None)], cubic, 0, np.inf)
    middle = 0.5 * (lo + hi)
    got = dead_weights(mf, parts, np.array([np.inf, middle, 0.5]))
    assert not got[0].any()
    with mp.workdps(80):
        terms = power_terms([2.3], [], (lo, hi))
        for row, m_t in ((1, middle), (2, lo)):
            (moment,) = dead_integrals(terms, np.array([lo, hi]), m_t, 3)
            one, x, x2, x3 = moment
            if cubic:
                wanted = [one - 3 * x2 + 2 * x3, 3 * x2 - 2 * x3, x - 2 * x2 + x3, x3 - x2]
            else:
                wanted = [one - x, x]
            np.testing.assert_allclose(
                got[row, 0], [float(w) for w in wanted], rtol=0, atol=1e-12 * float(one)
            )


def test_basis_of_a_point_reproduces_lines_and_cubics():
    """Hermite's form (textbook): values and slopes times the width at both ends give the cubic back."""
    x = np.array([0.0, 0.3, 1.0])
    np.testing.assert_allclose(basis(np.stack([x**0, x])) @ [2.0, 5.0], 2 + 3 * x, rtol=1e-15)
    poly = np.polynomial.Polynomial([1.0, -2.0, 0.5, 4.0])
    ends = [poly(0.0), poly(1.0), poly.deriv()(0.0), poly.deriv()(1.0)]
    np.testing.assert_allclose(basis(np.stack([x**k for k in range(4)])) @ ends, poly(x), atol=1e-14)


def test_the_dying_belong_to_the_segment_below_at_a_node():
    spans = [line_span(1.0, 2.0, 0, 1), line_span(2.0, 4.0, 5, 7)]
    parts = segments(spans, False, 0, np.inf)
    which, values = dying_basis(parts, np.array([4.0, 2.0, 1.5, 1.0]))
    assert which.tolist() == [1, 0, 0, 0]
    np.testing.assert_allclose(values, [[0, 1], [0, 1], [0.5, 0.5], [1, 0]], atol=1e-15)


def test_weights_are_linear_in_the_published_yields():
    """E = W Y: with the share of each published model, the integrals are a product with its own yields."""
    one = load("kobayashi-2006").at(0.02)
    species = one.total.shape[1]
    curve = slice_curve(one, np.eye(species))
    mf = imf("kroupa-2001", limits=(13, 40))
    parts = segments([Span(13.0, 40.0, 0, "x", curve)], False, 2 * species + 3, np.inf)
    (weights,) = dead_weights(mf, parts, np.array([12.0]))
    per_model = np.einsum("se,sek->k", weights, parts.share)
    integrals = np.einsum("se,seq->q", weights, parts.coefficients)
    np.testing.assert_allclose(per_model @ one.total, integrals[:species], rtol=1e-13)
    assert per_model.sum() == pytest.approx(float(mf.number(13, 40)), rel=1e-13)
