"""Initial mass functions against their papers and against analytic values written out."""

import math

import numpy as np
import pytest
from mpmath import mp, mpf, quad

from steelyard.integrate import from_function, imf
from steelyard.integrate.imf import FORMS, kroupa_2001, power_law, salpeter_1955
from steelyard.integrate.mass_function import MassFunction
from steelyard.yields.errors import InputError

EXTRA = {
    "power-law": {"slopes": [1.0, 2.0, 3.0], "breaks": [0.5, 8.0]},
    "lognormal": {"centre": 0.2, "sigma": 0.6},
}
ALL = [imf(form, **EXTRA.get(form, {})) for form in FORMS]


def analytic(slope, power, a, b):
    """int_a^b m^(power - slope) dm for a slope that makes no logarithm."""
    p = power + 1 - slope
    return (b**p - a**p) / p


@pytest.mark.parametrize("mf", ALL, ids=lambda f: f.form)
def test_one_solar_mass_is_formed(mf):
    assert float(mf.mass(*mf.limits)) == pytest.approx(1.0, rel=4e-15)
    assert isinstance(mf, MassFunction)
    assert mf.to_dict()["form"] == mf.form
    assert imf(**mf.to_dict()).mass(3, 5) == pytest.approx(float(mf.mass(3, 5)), rel=1e-14)


@pytest.mark.parametrize("mf", ALL, ids=lambda f: f.form)
def test_continuous_positive_and_zero_outside(mf):
    for edge in mf.breaks:
        below, above = mf([edge * (1 - 1e-12), edge * (1 + 1e-12)])
        assert below == pytest.approx(above, rel=1e-10)
    lo, hi = mf.limits
    assert np.all(mf(np.geomspace(lo, hi, 50)) > 0)
    assert mf([lo / 1.001, hi * 1.001]).tolist() == [0.0, 0.0]
    assert mf(hi) > 0
    assert np.shape(mf(1.0)) == ()


@pytest.mark.parametrize("mf", ALL, ids=lambda f: f.form)
def test_counts_agree_with_quadrature_of_the_function_itself(mf):
    for a, b in ((mf.limits[0], 1.0), (8.0, 40.0), (3.0, 3.3)):
        inner = [x for x in (mf.limits[0], *mf.breaks, mf.limits[1]) if a < x < b]
        edges = [a, *inner, b]
        with mp.workdps(20):
            number = quad(lambda m: mpf(float(mf(float(m)))), edges)
        assert float(mf.number(a, b)) == pytest.approx(float(number), rel=1e-11)


def test_kroupa_2001_counts_and_masses_written_out():
    """Kroupa (2001, MNRAS 322, 231): phi = k m^-1.3 to 0.5 Msun, k 0.5 m^-2.3 above; all analytic."""
    mass = analytic(1.3, 1, 0.08, 0.5) + 0.5 * analytic(2.3, 1, 0.5, 120.0)
    number = analytic(1.3, 0, 0.08, 0.5) + 0.5 * analytic(2.3, 0, 0.5, 120.0)
    mf = kroupa_2001()
    assert float(mf.number(0.08, 120)) == pytest.approx(number / mass, rel=1e-13)
    mean = float(mf.mass(0.08, 120) / mf.number(0.08, 120))
    assert mean == pytest.approx(mass / number, rel=1e-13)
    assert float(mf.number(8, 120)) == pytest.approx(0.5 * analytic(2.3, 0, 8.0, 120.0) / mass, rel=1e-13)
    assert float(mf.number(8, 120)) == pytest.approx(1.09123948905e-2, rel=1e-11)
    fraction = float(mf.mass(8, 120))
    assert fraction == pytest.approx(0.5 * analytic(2.3, 1, 8.0, 120.0) / mass, rel=1e-13)
    # common practice: stars above 8 Msun hold about a fifth of the mass and number about one in 100 Msun
    assert 0.19 < fraction < 0.24
    assert 0.55 < mean < 0.70


def test_kroupa_2001_goes_on_below_the_hydrogen_limit():
    """Slope 0.3 from 0.01 to 0.08 Msun in the same paper, continuous at 0.08."""
    mf = kroupa_2001(limits=(0.01, 120))
    assert mf.breaks == (0.08, 0.5)
    ratio = float(mf(0.02) / mf(0.04))
    assert ratio == pytest.approx(2**0.3, rel=1e-12)
    assert float(mf(0.1) / mf(0.2)) == pytest.approx(2**1.3, rel=1e-12)


def test_kroupa_tout_gilmore_1993():
    """Their equation 13: 0.035 m^-1.3, 0.019 m^-2.2, 0.019 m^-2.7 (from memory), joined at 0.5 and 1 Msun."""
    mf = imf("kroupa-1993")
    assert mf.breaks == (0.5, 1.0)
    for m, slope in ((0.2, 1.3), (0.7, 2.2), (5.0, 2.7)):
        assert float(mf(m) / mf(m * 1.01)) == pytest.approx(1.01**slope, rel=1e-12)
    # amplitude below 0.5 Msun over that above, made continuous: 0.5^(1.3 - 2.2) to the paper's two digits
    low, high = float(mf(0.2)) * 0.2**1.3, float(mf(0.7)) * 0.7**2.2
    assert low / high == pytest.approx(0.035 / 0.019, rel=0.02)


def test_chabrier_2003_is_continuous_at_one_solar_mass():
    """PASP 115, 763, table 1: 0.158 exp(-(log m - log 0.079)^2 / (2 0.69^2)), x = 1.3 above."""
    mf = imf("chabrier-2003")
    for a, b in ((0.1, 0.3), (0.3, 0.999)):
        ratio = (b / a) * math.exp((math.log10(b / 0.079) ** 2 - math.log10(a / 0.079) ** 2) / (2 * 0.69**2))
        assert float(mf(a) / mf(b)) == pytest.approx(ratio, rel=1e-12)
    assert float(mf(2.0) / mf(4.0)) == pytest.approx(2**2.3, rel=1e-12)
    # the paper's own amplitudes, 0.158 and 4.43e-2 per log m, leave a step at 1 Msun that is closed here
    step = 0.158 * math.exp(-(math.log10(1 / 0.079) ** 2) / (2 * 0.69**2)) / 4.43e-2
    assert step == pytest.approx(1.0, abs=0.02)
    below, above = mf([1 - 1e-13, 1.0])
    assert below == pytest.approx(above, rel=1e-11)


def test_chabrier_2003_system_form():
    """The same paper: 0.086 exp(-(log m - log 0.22)^2 / (2 0.57^2)), peak at 0.22."""
    mf = imf("chabrier-2003-system")
    m = np.geomspace(0.1, 0.9, 4001)
    assert m[np.argmax(m * mf(m))] == pytest.approx(0.22, rel=1e-3)


def test_miller_and_scalo_1979_shape():
    """xi(log m) = C0 exp(-1.09 (log m + 1.02)^2), constants from memory: a slope of -0.95 (log m + 1.02).

    Their figure is commonly summed up as Gamma = dlog xi / dlog m = -(1 + log m) (common practice).
    """
    mf = imf("miller-scalo-1979")
    for m in (0.3, 1.0, 10.0, 60.0):
        h = 1e-4
        up, down = (m * 10**s for s in (h, -h))
        gamma = math.log10(up * float(mf(up)) / (down * float(mf(down)))) / (2 * h)
        assert gamma == pytest.approx(-2 * 1.09 * math.log10(math.e) * (math.log10(m) + 1.02), rel=1e-6)
        assert gamma == pytest.approx(-(1 + math.log10(m)), abs=0.15)


def test_salpeter_between_any_limits():
    mf = salpeter_1955(limits=("0.1 Msun", "100 Msun"))
    total = analytic(2.35, 1, 0.1, 100.0)
    number = mf.number([8.0, 1.0, 90.0], [40.0, 1.0, 500.0])
    wanted = [analytic(2.35, 0, a, b) / total for a, b in ((8, 40), (1, 1), (90, 100))]
    np.testing.assert_allclose(number, wanted, rtol=1e-13)


@pytest.mark.parametrize("slope", [1.0, 2.0, 3.0])
def test_slopes_beside_the_awkward_ones_go_over_into_them(slope):
    exact, beside = (power_law([s], limits=(0.1, 100)).number(8, 40) for s in (slope, slope + 1e-9))
    assert float(beside) == pytest.approx(float(exact), rel=1e-8)
    assert float(beside) != float(exact)


def test_limits_inside_one_piece_and_a_sliver():
    mf = kroupa_2001(limits=(1.0, 2.0))
    assert mf.breaks == ()
    assert float(mf.number(1, 2)) == pytest.approx(
        analytic(2.3, 0, 1.0, 2.0) / analytic(2.3, 1, 1.0, 2.0), rel=1e-13
    )
    sliver = kroupa_2001(limits=(1.0, 1.0 + 1e-9))
    assert float(sliver.number(1, 2)) == pytest.approx(1.0, rel=2e-9)


# --- mass functions from a function --------------------------------------------------------------------


def broken(m):
    return np.where(m < 0.5, m**-1.3, 0.5 * m**-2.3)


def test_a_function_equals_the_closed_form_where_its_breaks_are_told():
    mf = from_function(broken, limits=(0.08, 120), breaks=[0.5])
    assert mf.error < 1e-13
    for a, b in ((0.08, 0.5), (8, 40), (39.9, 40)):
        assert float(mf.number(a, b)) == pytest.approx(float(kroupa_2001().number(a, b)), rel=1e-12)


@pytest.mark.parametrize(
    "function, limits, exact",
    [
        (broken, (0.08, 120), analytic(1.3, 1, 0.08, 0.5) + 0.5 * analytic(2.3, 1, 0.5, 120.0)),
        (lambda m: m**-2.35 * (m > 0.7), (0.1, 100), analytic(2.35, 1, 0.7, 100.0)),
        (lambda m: np.abs(m - 1.1) ** 0.5 * m**-2.0, (0.1, 100), None),
        (lambda m: m**-2.35, (0.1, 100), analytic(2.35, 1, 0.1, 100.0)),
    ],
    ids=["kink", "jump", "root", "smooth"],
)
def test_the_stated_error_of_a_function_is_honest(function, limits, exact):
    """True error of the normalisation, against exact values or mpmath quadrature split at the kink."""
    if exact is None:
        with mp.workdps(25):
            exact = float(quad(lambda m: mp.sqrt(abs(m - mpf(1.1))) / m, [0.1, 0.5, 1.1, 2, 10, 100]))
    mf = from_function(function, limits=limits)
    true = abs(1.0 / mf.scale / exact - 1.0)
    assert true <= 10 * mf.error + 1e-14
    assert mf.error < 0.02


def test_breaks_of_a_function_take_units():
    mf = from_function(broken, limits=("0.08 Msun", "120 Msun"), breaks=["0.5 Msun"])
    assert mf.breaks == (0.5,)


@pytest.mark.parametrize(
    "function",
    [lambda m: -(m**-2.35), lambda m: m * np.nan, lambda m: 0.0 * m, lambda m: 1.0],
    ids=["negative", "nan", "zero", "scalar"],
)
def test_functions_that_are_no_mass_function(function):
    with pytest.raises(InputError, match=r"imf: "):
        from_function(function, limits=(0.1, 100))


@pytest.mark.parametrize(
    "make, says",
    [
        (lambda: imf("kroupa"), "did you mean kroupa-2001"),
        (lambda: imf("kroupa-2001", limit=(1, 2)), "did you mean limits"),
        (lambda: imf("kroupa-2001", slopes=[2.3]), "imf.slopes isn't a parameter of kroupa-2001"),
        (lambda: imf("kroupa-2001", limits=(120, 0.08)), "write the lower mass first"),
        (lambda: imf("kroupa-2001", limits=(1, 1)), "write the lower mass first"),
        (lambda: imf("kroupa-2001", limits=(0, 120)), "positive lowest mass"),
        (lambda: imf("kroupa-2001", limits=(-1, 120)), "positive lowest mass"),
        (lambda: imf("kroupa-2001", limits=(1, 2, 3)), "two masses"),
        (lambda: imf("kroupa-2001", limits=("1 yr", "2 yr")), "wrong dimension"),
        (lambda: imf("power-law"), "needs slopes"),
        (lambda: imf("lognormal", centre=0.2), "needs sigma"),
        (lambda: imf("lognormal", centre=0.2, sigma=-1), "must be positive"),
        (lambda: imf("power-law", slopes=[1, 2], breaks=[]), "one break fewer"),
        (lambda: imf("power-law", slopes=[1, 2, 3], breaks=[2, 1]), "low mass to high"),
    ],
)
def test_refusals_say_how_to_mend(make, says):
    with pytest.raises(InputError, match=says) as caught:
        make()
    assert "\n" not in str(caught.value)
