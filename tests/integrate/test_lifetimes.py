import csv
from importlib.resources import files

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from steelyard.integrate.lifetimes import LAWS, lifetimes, tabulated
from steelyard.yields.errors import InputError


def power(mass, metallicity):
    return 1e10 * mass**-2.5 * (1 + metallicity)


def curves(metallicity):
    """One curve of every kind."""
    own = tabulated(
        [13, 15, 20, 25], [1.6e7, 1.35e7, 9.3e6, 7.6e6], outside=lifetimes("portinari-1998").at(metallicity)
    )
    laws = [lifetimes(name).at(metallicity) for name in LAWS]
    return [*laws, lifetimes(power).at(metallicity), own, tabulated([1, 3, 40], [1e10, 4e8, 5e6])]


metallicities = st.floats(1e-5, 0.049)


@pytest.mark.parametrize(
    ("age", "mass"), [("10 Myr", 18.679092629), ("100 Myr", 5.3022609458), ("1 Gyr", 2.1938428770)]
)
def test_portinari_turnoff_at_solar_metallicity(age, mass):
    # log-log in the column Z = 0.02 of Portinari, Chiosi & Bressan (1998), worked out apart from this code
    assert lifetimes("portinari-1998").at(0.02).turnoff(age) == pytest.approx(mass, rel=1e-10)


def test_portinari_returns_the_printed_figures_at_its_nodes():
    # Portinari, Chiosi & Bressan (1998, A&A 334, 505): the Sun lives 1.03e10 yr, 9 Msun 3.17e7 yr
    curve = lifetimes("portinari-1998").at(0.02)
    assert curve.lifetime(1.0) == 1.03e10 and curve.lifetime(9.0) == 3.17e7
    text = files("steelyard.tables").joinpath("portinari-1998-lifetimes/lifetimes.csv").read_text()
    head, *rows = csv.reader(text.splitlines())
    for k, z in enumerate(head[1:], start=1):
        got = lifetimes("portinari-1998").at(float(z)).lifetime([float(r[0]) for r in rows])
        np.testing.assert_allclose(got, [float(r[k]) for r in rows], rtol=1e-14)


def test_portinari_between_columns_is_straight_in_log_z():
    law = lifetimes("portinari-1998")
    middle = law.at(np.sqrt(0.008 * 0.02)).lifetime([1.0, 9.0])
    expected = np.sqrt(np.array(law.at(0.008).lifetime([1.0, 9.0])) * law.at(0.02).lifetime([1.0, 9.0]))
    np.testing.assert_allclose(middle, expected, rtol=1e-13)


def test_portinari_lifetimes_fall_with_mass_at_every_metallicity():
    for z in np.geomspace(0.0004, 0.0499, 40):
        assert np.all(np.diff(lifetimes("portinari-1998").at(z).lifetimes) < 0)


def test_portinari_flat_end_at_the_highest_metallicity():
    # the table prints 3.11e6 yr for both 100 and 120 Msun at Z = 0.05
    curve = lifetimes("portinari-1998").at(0.05)
    assert curve.turnoff(3.11e6) == pytest.approx(100.0, rel=1e-14)
    assert curve.turnoff(3.1099e6) == np.inf and curve.turnoff_slope(3.1099e6) == 0
    assert curve.lifetime(110.0) == curve.lifetime(500.0) == 3.11e6


def test_raiteri_against_the_published_polynomial():
    # Raiteri, Villata & Navarro (1996, A&A 315, 105): 10 Msun at Z = 0.02, by hand with mpmath
    lz = mpmath.log10(mpmath.mpf("0.02"))
    exponent = (
        (mpmath.mpf("10.13") + mpmath.mpf("0.07547") * lz - mpmath.mpf("0.008084") * lz**2)
        + (mpmath.mpf("-4.424") - mpmath.mpf("0.7939") * lz - mpmath.mpf("0.1187") * lz**2)
        + (mpmath.mpf("1.262") + mpmath.mpf("0.3385") * lz + mpmath.mpf("0.05417") * lz**2)
    )
    assert lifetimes("raiteri-1996").at(0.02).lifetime(10.0) == pytest.approx(float(10**exponent), rel=1e-13)


def test_raiteri_against_portinari(capsys):
    """Two fits to the Padova tracks: they should agree to a third; say where they differ most."""
    differences = {}
    for z in (0.0004, 0.004, 0.008, 0.02):
        table = lifetimes("portinari-1998").at(z)
        ratio = np.array(lifetimes("raiteri-1996").at(z).lifetime(table.masses)) / table.lifetimes
        differences.update({(z, m): r - 1 for m, r in zip(table.masses, ratio, strict=True)})
    (z, mass), most = max(differences.items(), key=lambda item: abs(item[1]))
    with capsys.disabled():
        print(f"\nraiteri-1996 differs most from portinari-1998 by {most:+.1%}, at {mass:g} Msun, Z = {z:g}")
    assert (z, mass) == (0.004, 1.3)
    assert 0.33 < most < 0.34
    assert np.mean(np.abs(list(differences.values()))) < 0.1


def test_raiteri_holds_its_least_lifetime():
    curve = lifetimes("raiteri-1996").at(0.02)
    assert curve.lifetime(curve.mass_of_least * 2) == curve.lifetime(curve.mass_of_least) == curve.least
    assert curve.turnoff(curve.least * 0.999) == np.inf
    assert curve.turnoff(curve.least) == pytest.approx(curve.mass_of_least, rel=1e-6)


def test_padovani_matteucci_meets_its_published_values_and_its_jump():
    # Padovani & Matteucci (1993, ApJ 416, 26): 160 Gyr at 0.6 Msun, 1.2 m^-1.85 + 0.003 Gyr above 6.6
    curve = lifetimes("padovani-matteucci-1993").at(0.02)
    assert curve.lifetime(0.6) == 160e9 and curve.lifetime(0.3) == 160e9
    assert curve.lifetime(10.0) == pytest.approx((1.2 * 10**-1.85 + 0.003) * 1e9, rel=1e-14)
    # about 10 Gyr for the Sun: common practice; the formula gives 7.1 Gyr
    assert curve.lifetime(1.0) == pytest.approx(1e10, rel=0.3)
    before, after = curve.lifetime(6.6), curve.lifetime(np.nextafter(6.6, 7))
    assert before > after
    between = np.linspace(after * 1.0001, before * 0.9999, 5)
    assert np.all(curve.turnoff(between) == 6.6) and np.all(curve.turnoff_slope(between) == 0)
    assert curve.turnoff(before * 1.001) < 6.6 < curve.turnoff(after * 0.999)
    assert curve.turnoff(161e9) == 0 and curve.turnoff(2.9e6) == np.inf


@given(metallicity=metallicities, log_mass=st.floats(np.log(0.61), np.log(120.0)))
def test_turnoff_inverts_lifetime(metallicity, log_mass):
    mass = float(np.exp(log_mass))
    for curve in curves(metallicity):
        if curve.law == "raiteri-1996" and mass > curve.mass_of_least:
            continue
        age = curve.lifetime(mass)
        back = curve.turnoff(age)
        # a lifetime is known to 4e-16 of itself: where it hardly falls with mass, so is the mass
        slack = 4e-16 * abs(age * curve.turnoff_slope(age) / mass)
        if curve.law == "raiteri-1996":
            # log10 t of 1e7 carries 7 times the rounding, and next to the least the root halves digits
            slack = min(40 * slack, 1e-6)
        assert back == pytest.approx(mass, rel=max(1e-12, slack))


@given(metallicity=metallicities, log_age=st.floats(np.log(3.6e6), np.log(5e10)))
def test_slope_is_the_derivative_of_the_turnoff(metallicity, log_age):
    age = float(np.exp(log_age))
    for curve in curves(metallicity):
        mass = curve.turnoff(age)
        if any(abs(b / mass - 1) < 1e-3 for b in curve.breaks):
            continue
        step = 1e-5 * age
        expected = (curve.turnoff(age + step) - curve.turnoff(age - step)) / (2 * step)
        assert curve.turnoff_slope(age) == pytest.approx(expected, rel=2e-6)


@given(metallicity=st.floats(0, 0.1))
def test_lifetimes_never_rise_with_mass_nor_turnoffs_with_age(metallicity):
    mass, age = np.geomspace(0.08, 400, 300), np.geomspace(1e6, 2e11, 300)
    for name in LAWS:
        curve = lifetimes(name).at(metallicity)
        # equal but for rounding where a curve is flat
        assert np.all(np.diff(np.log(curve.lifetime(mass))) < 1e-13)
        turn = curve.turnoff(age)
        finite = turn[np.isfinite(turn) & (turn > 0)]
        assert np.all(np.diff(np.log(finite)) < 1e-13)
        assert np.all(curve.turnoff_slope(age) <= 0)


def test_slope_at_a_kink_is_that_towards_later_ages():
    curve = lifetimes("portinari-1998").at(0.02)
    age = 3.17e7  # 9 Msun
    step = 1e-6 * age
    later = (curve.turnoff(age + step) - curve.turnoff(age)) / step
    earlier = (curve.turnoff(age) - curve.turnoff(age - step)) / step
    assert curve.turnoff_slope(age) == pytest.approx(later, rel=1e-5)
    assert curve.turnoff_slope(age) != pytest.approx(earlier, rel=1e-3)


def test_age_zero_has_killed_nothing():
    for curve in curves(0.014):
        assert curve.turnoff(0.0) == np.inf and curve.turnoff_slope(0.0) == 0
        mixed = curve.turnoff(np.array([[0.0, 1e7], [1e8, 1e9]]))
        assert mixed.shape == (2, 2) and np.all(np.isfinite(mixed.ravel()[1:]))


def test_metallicity_outside_the_law_is_held_and_noted():
    curve = lifetimes("portinari-1998").at(0.0)
    assert curve.lifetime(1.0) == 6.03e9  # the column Z = 0.0004
    assert "those of Z = 0.0004 are held beyond" in curve.notes[0]
    assert lifetimes("raiteri-1996").at(0.05).notes
    assert lifetimes("portinari-1998").at(0.02).notes == ()


def test_turnoffs_outside_the_law_are_noted_only_where_they_matter():
    curve = lifetimes("portinari-1998").at(0.02)
    # the end line of the table, continued
    slope = np.log(3.23 / 3.39) / np.log(1.2)
    assert curve.lifetime(150.0) == pytest.approx(3.23e6 * (150 / 120) ** slope, rel=1e-12)
    assert curve.notes_at("10 Myr") == ()
    assert "continued" in curve.notes_at(["2 Myr", "10 Myr"])[0]
    assert curve.notes_at(["2 Myr", "10 Myr"], limits=(0.08, 120.0)) == ()
    assert len(curve.notes_at(["2 Myr", "10 Myr"], limits=(0.08, 300.0))) == 1


def test_own_lifetimes_hold_inside_and_another_law_outside():
    outer = lifetimes("portinari-1998").at(0.02)
    masses, times = [13.0, 15.0, 25.0], [1.6e7, 1.35e7, 7.6e6]
    curve = tabulated(masses, times, outside=outer, law="own")
    np.testing.assert_allclose(curve.lifetime(masses), times, rtol=1e-14)
    np.testing.assert_array_equal(curve.lifetime([1.0, 5.0, 60.0]), outer.lifetime([1.0, 5.0, 60.0]))
    assert set(masses) <= set(curve.breaks) and {9.0, 12.0} & set(curve.breaks) == {9.0}
    assert curve.metallicity == 0.02


def test_function_may_return_units_and_is_followed_beyond_its_range():
    from steelyard.yields.units import registry

    year = registry()("yr")
    curve = lifetimes(lambda mass, metallicity: 10 * mass**-2.5 * 1e9 * year).at(0.02)
    assert curve.turnoff("10 Gyr") == pytest.approx(1.0, rel=1e-12)
    plain_curve = lifetimes(power).at(0.0)
    assert plain_curve.turnoff(1e10 * 300**-2.5) == pytest.approx(300.0, rel=1e-12)
    assert plain_curve.turnoff(1e10 * 0.02**-2.5) == pytest.approx(0.02, rel=1e-12)
    assert plain_curve.turnoff(1e-9) == np.inf and plain_curve.turnoff(1e30) == 0


@pytest.mark.parametrize(
    ("attempt", "message"),
    [
        (lambda: lifetimes("portinari-98"), "did you mean portinari-1998"),
        (lambda: lifetimes("portinari-1998").at(-0.1), "metallicity"),
        (lambda: lifetimes("portinari-1998").at(0.02).turnoff(-1.0), "age is negative"),
        (lambda: lifetimes("portinari-1998").at(0.02).turnoff("3 Msun"), "wrong dimension"),
        (lambda: lifetimes("portinari-1998").at(0.02).lifetime(0.0), "mass is not above 0"),
        (lambda: tabulated([13, 15, 20], [1e7, 2e7, 5e6], law="own"), "from 13 to 15 Msun"),
        (lambda: tabulated([13, 13], [1e7, 2e7]), "stands twice"),
        (lambda: tabulated([13], [1e7]), "two stars at least"),
        (
            lambda: tabulated([13, 15], [3e7, 2.9e7], outside=lifetimes("portinari-1998").at(0.02)),
            "from 10.4 to 13 Msun",
        ),
        (lambda: lifetimes(lambda m, z: m).at(0.02), "doesn't fall"),
        (lambda: lifetimes(lambda m, z: -m).at(0.02), "not above 0"),
        (lambda: lifetimes(lambda m, z: float("nan")).at(0.02), "isn't finite"),
    ],
)
def test_bad_input_is_one_line(attempt, message):
    with pytest.raises(InputError, match=message) as caught:
        attempt()
    assert "\n" not in str(caught.value)
