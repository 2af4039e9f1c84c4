import itertools

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from steelyard.integrate.delays import (
    FORMS,
    BrokenPowerLawDelay,
    ExponentialDelay,
    FunctionDelay,
    PowerLawDelay,
    TabulatedDelay,
    delay,
)
from steelyard.yields.errors import InputError

LIMITS = (40e6, 13.8e9)


def reference(density, limits, age, breaks=()):
    """Fraction by mpmath quadrature in log delay, at 40 digits."""
    with mpmath.workdps(40):
        # mpmath's quadrature stops at an absolute error, so the integrand is brought near 1
        size = density(mpmath.mpf(limits[0])) * limits[0]

        def integral(start, stop):
            edges = sorted([start, *[b for b in breaks if start < b < stop], stop])
            logs = [mpmath.log(mpmath.mpf(e)) for e in edges]
            # short pieces, for the quadrature to be exact on steep powers too
            logs = [a + (b - a) * k / 8 for a, b in itertools.pairwise(logs) for k in range(8)] + logs[-1:]
            return mpmath.quad(lambda x: density(mpmath.e**x) * mpmath.e**x / size, logs)

        return float(integral(limits[0], age) / integral(*limits))


@pytest.mark.parametrize(
    "slope",
    [-1, -1 + 1e-9, -1 - 1e-9, -1 + 3e-16, 0, -1.1, -0.5, 2.5, -7.0],
)
def test_power_law_agrees_with_quadrature(slope):
    form = PowerLawDelay(slope, LIMITS)
    for age in (LIMITS[0] * (1 + 1e-9), 4.1e7, 1e8, 1e9, 1.3799e10):
        expected = reference(lambda t: t ** mpmath.mpf(slope), LIMITS, age)
        assert form.fraction(age) == pytest.approx(expected, rel=1e-12, abs=0)


def test_power_law_of_slope_minus_one_is_a_ratio_of_logs():
    # 1/t integrates to log t
    age = np.array([5e7, 1e9])
    expected = np.log(age / LIMITS[0]) / np.log(LIMITS[1] / LIMITS[0])
    np.testing.assert_allclose(PowerLawDelay(-1, LIMITS).fraction(age), expected, rtol=1e-14)


@pytest.mark.parametrize(
    "form",
    [
        PowerLawDelay(-1.1, LIMITS),
        BrokenPowerLawDelay([-0.5, -1.1], [4e8], LIMITS),
        ExponentialDelay(1e9, LIMITS),
        TabulatedDelay([4e7, 1e8, 5e9, 1e10], [2.0, 3.0, 0.5, 0.0]),
        FunctionDelay(lambda t: t**-1.1, LIMITS),
    ],
    ids=lambda form: form.form,
)
def test_fraction_keeps_relative_accuracy_next_to_the_first_delay(form):
    first = form.limits[0]
    age = first * (1 + 1e-9)
    # so near, the density is that at the first delay to 1e-9
    expected = form.density(first) * (age - first)
    assert form.fraction(age) == pytest.approx(expected, rel=3e-9, abs=0)
    assert form.fraction(first) == 0
    assert form.fraction(form.limits[1]) == pytest.approx(1, abs=1e-15)
    assert form.fraction(0.0) == form.density(0.0) == 0
    assert form.fraction(20e9) == 1 and form.density(20e9) == 0


@pytest.mark.parametrize("slopes", [(-0.5, -1.0), (0.0, -1.1), (3.0, -1.0 + 1e-10), (-2.0, 1.5)])
def test_broken_power_law_agrees_with_quadrature(slopes):
    turn = 4e8
    form = BrokenPowerLawDelay(slopes, [turn], LIMITS)

    def density(t):
        return (t / turn) ** mpmath.mpf(slopes[0] if t < turn else slopes[1])

    for age in (4.0000001e7, 2e8, turn, 5e8, 1e10):
        assert form.fraction(age) == pytest.approx(reference(density, LIMITS, age, [turn]), rel=1e-12, abs=0)


def test_broken_power_law_without_a_bend_is_one_power_law():
    age = np.geomspace(4.1e7, 1.37e10, 50)
    one, two = PowerLawDelay(-1.1, LIMITS), BrokenPowerLawDelay([-1.1, -1.1, -1.1], [1e8, 1e9], LIMITS)
    np.testing.assert_allclose(two.fraction(age), one.fraction(age), rtol=1e-13)
    np.testing.assert_allclose(two.density(age), one.density(age), rtol=1e-13)


def test_steep_slopes_do_not_overflow():
    # ∫ x^200 from 1 to a million-fold: all events come at the end
    form = PowerLawDelay(200.0, (1e4, 1e10))
    age = 9.99e9
    expected = reference(lambda t: (t / mpmath.mpf(1e10)) ** 200, form.limits, age)
    assert form.fraction(age) == pytest.approx(expected, rel=1e-11)
    assert np.isfinite(form.density(1e10))


@pytest.mark.parametrize("timescale", [1e6, 1e9, 1e13])
def test_exponential_agrees_with_quadrature(timescale):
    form = ExponentialDelay(timescale, LIMITS)
    for age in (4.0000001e7, 4.2e7, 1e9):
        expected = reference(
            lambda t: mpmath.e ** (-(t - LIMITS[0]) / timescale), LIMITS, age, [LIMITS[0] + 20 * timescale]
        )
        assert form.fraction(age) == pytest.approx(expected, rel=1e-12, abs=0)


def test_tabulated_agrees_with_quadrature():
    ages, densities = [4e7, 1e8, 5e9, 1e10], [2.0, 3.0, 0.5, 0.0]
    form = TabulatedDelay(ages, densities)

    def density(t):
        k = max(i for i in range(3) if ages[i] <= t or i == 0)
        return densities[k] + (densities[k + 1] - densities[k]) * (t - ages[k]) / (ages[k + 1] - ages[k])

    for age in (5e7, 1e8, 3e9, 9.9e9):
        expected = reference(density, form.limits, age, ages[1:-1])
        assert form.fraction(age) == pytest.approx(expected, rel=1e-12, abs=0)


def test_function_agrees_with_closed_form_within_the_error_it_reports():
    age = np.geomspace(4.1e7, 1.37e10, 40)
    closed = BrokenPowerLawDelay([-0.5, -1.1], [4e8], LIMITS)
    numeric = FunctionDelay(closed.density, LIMITS)
    miss = np.abs(numeric.fraction(age) - closed.fraction(age)).max()
    assert miss <= max(numeric.error, 1e-13) * 10
    assert 0 < numeric.error < 1e-9


def test_function_with_a_step_reports_an_error_that_covers_the_miss():
    # uniform from 1 to 3 Gyr, nothing before or after
    numeric = FunctionDelay(lambda t: 1.0 if 1e9 < t < 3e9 else 0.0, (1e8, 1e10))
    assert abs(numeric.fraction(2e9) - 0.5) <= 2 * numeric.error
    assert numeric.error < 1e-6


@given(
    slopes=st.lists(st.floats(-5, 5), min_size=1, max_size=4),
    first=st.floats(1e5, 1e8),
    span=st.floats(1.5, 1e4),
)
def test_density_is_the_derivative_of_the_fraction(slopes, first, span):
    last = first * span
    breaks = np.geomspace(first, last, len(slopes) + 1)[1:-1]
    form = BrokenPowerLawDelay(slopes, breaks, (first, last))
    edges = np.array([first, *breaks, last])
    middle = np.sqrt(edges[1:] * edges[:-1])
    step = 1e-5 * middle
    rise = form.fraction(middle + step) - form.fraction(middle - step)
    # the difference of two fractions carries the rounding of both, a few times 1e-16 of 1
    np.testing.assert_allclose(form.density(middle) * 2 * step, rise, rtol=1e-6, atol=1e-14)
    # it never falls, but for that rounding where it is flat near 1
    assert np.all(np.diff(form.fraction(np.geomspace(first, last, 200))) >= -4e-15)


def test_maoz_graur_2017():
    # Maoz & Graur (2017, ApJ 848, 25): t^-1.1, (1.3 ± 0.1)e-3 events per Msun in a Hubble time,
    # which makes 2.1e-13 events per Msun and yr at 1 Gyr (from memory)
    late = delay("maoz-graur-2017")
    assert 1.3e-3 * late.fraction("13.8 Gyr") == 1.3e-3
    assert 1.3e-3 * late.density("1 Gyr") == pytest.approx(2.1e-13, rel=0.03)
    assert late.density(2e9) / late.density(1e9) == pytest.approx(2**-1.1, rel=1e-12)


def test_mapping_round_trip():
    for spec in (
        {"form": "power-law", "slope": -1.1, "limits": ["40 Myr", "13.8 Gyr"]},
        {"form": "exponential", "timescale": "1 Gyr", "limits": [0, 13.8e9]},
        {"form": "broken-power-law", "slopes": [0, -1], "breaks": ["1 Gyr"], "limits": ["40 Myr", "10 Gyr"]},
        {"form": "tabulated", "ages": ["0 Gyr", "1 Gyr"], "densities": [1, 0]},
        {"form": "function", "function": np.sqrt, "limits": ["40 Myr", "10 Gyr"]},
    ):
        form = delay(spec)
        assert type(form) is FORMS[spec["form"]]
        assert delay(form.to_dict()) == form
        assert delay(form) is form
    assert delay({"form": "maoz-graur-2017", "slope": -1}).slope == -1


@pytest.mark.parametrize(
    ("spec", "message"),
    [
        ({"form": "power-law", "slop": -1, "limits": [1, 2]}, "did you mean slope?"),
        ({"form": "powerlaw", "slope": -1, "limits": [1, 2]}, "did you mean power-law"),
        ({"slope": -1}, "delay has no form"),
        ({"form": "power-law", "limits": [1, 2]}, "lacks slope"),
        ({"form": "power-law", "slope": -1, "limits": [0, 2]}, "not above 0"),
        ({"form": "power-law", "slope": -1, "limits": ["2 Gyr", "1 Gyr"]}, "not after the first"),
        ({"form": "power-law", "slope": -1, "limits": [5]}, "instead of 2"),
        ({"form": "power-law", "slope": -1, "limits": ["1 Msun", "2 Gyr"]}, "wrong dimension"),
        ({"form": "power-law", "slope": "steep", "limits": [1, 2]}, "slope"),
        ({"form": "exponential", "timescale": -1, "limits": [1, 2]}, "timescale is not above 0"),
        ({"form": "broken-power-law", "slopes": [1], "breaks": [1.5], "limits": [1, 2]}, "fit together"),
        (
            {"form": "broken-power-law", "slopes": [1, 2], "breaks": [3], "limits": [1, 2]},
            "inside the limits",
        ),
        ({"form": "tabulated", "ages": [1, 2], "densities": [1, -1]}, "negative"),
        ({"form": "tabulated", "ages": [1, 2], "densities": [0, 0]}, "no density is above 0"),
        ({"form": "tabulated", "ages": [2, 1], "densities": [1, 1]}, "rise"),
        ({"form": "function", "function": lambda t: -1.0, "limits": [1, 2]}, "density at"),
        ({"form": "function", "function": lambda t: np.nan, "limits": [1, 2]}, "is nan"),
        ({"form": "function", "function": lambda t: 0.0, "limits": [1, 2]}, "0 all over"),
        (7, "not a mapping"),
    ],
)
def test_bad_input_is_one_line_that_names_the_place(spec, message):
    with pytest.raises(InputError, match=message) as caught:
        delay(spec, where="population.toml [[source]] delay")
    assert str(caught.value).startswith("population.toml [[source]] delay")
    assert "\n" not in str(caught.value)
