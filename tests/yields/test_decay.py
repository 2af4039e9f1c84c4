"""Decay against Bateman's equations with half-lives of NUBASE2020 and ICRP-107, named beside each."""

import math

import numpy as np
import pytest
import radioactivedecay

from steelyard.yields import InputError, Slice, YieldSet, load
from steelyard.yields.decay import decayed, remaining

YEAR_D = 365.25


def one_model(masses, ejected=2.0):
    """An invented event-like model with these totals and nothing at birth."""
    total = np.array([list(masses.values())])
    none = np.zeros(len(masses))
    one = Slice(0.02, np.array([15.0]), np.array([ejected]), np.zeros(1), total, total.copy(), none)
    return YieldSet("invented", "core-collapse", tuple(masses), (one,))


def totals(grid):
    return dict(zip(grid.species, grid.slices[0].total[0], strict=True))


def rate(half_life):
    return math.log(2) / half_life


def two_steps(t, a, b):
    """Parent, daughter and granddaughter at time t; half-lives a, b (Bateman 1910)."""
    x, y = rate(a), rate(b)
    first = math.exp(-x * t)
    second = x / (y - x) * (math.exp(-x * t) - math.exp(-y * t))
    return first, second, 1 - first - second


@pytest.mark.parametrize("days", [1.0, 6.075, 20.0, 100.0, 500.0])
def test_nickel_to_iron_with_icrp_107(days):
    # ICRP-107: Ni56 6.075 d, Co56 77.23 d
    made = totals(decayed(one_model({"Ni56": 0.07, "Fe56": 0.01}), f"{days} d"))
    ni, co, fe = two_steps(days, 6.075, 77.23)
    assert made["Ni56"] == pytest.approx(0.07 * ni, rel=1e-9)
    assert made["Co56"] == pytest.approx(0.07 * co, rel=1e-9)
    assert made["Fe56"] == pytest.approx(0.01 + 0.07 * fe, rel=1e-9)


def test_nickel_to_iron_with_nubase_2020():
    # NUBASE2020, Kondev+ 2021, Chin. Phys. C 45, 030001 (from memory): Ni56 6.075 d, Co56 77.236 d
    given = {"Ni56": "6.075 d", "Co56": "77.236 d"}
    made = totals(decayed(one_model({"Ni56": 0.07, "Fe56": 0.0}), "80 d", half_lives=given))
    ni, co, _ = two_steps(80.0, 6.075, 77.236)
    assert made["Ni56"] == pytest.approx(0.07 * ni, rel=1e-9)
    assert made["Co56"] == pytest.approx(0.07 * co, rel=1e-9)


@pytest.mark.parametrize(
    ("half_life", "given"),
    [(60.0, None), (59.1, {"Ti44": "59.1 yr"})],  # ICRP-107; NUBASE2020 (from memory)
)
def test_titanium_to_calcium(half_life, given):
    # ICRP-107: Sc44 3.97 h; its year is 365.2422 d
    year = 365.2422 / YEAR_D if given is None else 1.0
    made = totals(decayed(one_model({"Ti44": 1e-4, "Ca44": 0.0}), 100.0, half_lives=given))
    ti, sc, ca = two_steps(100.0, half_life * year, 3.97 / 24 / YEAR_D)
    assert made["Ti44"] == pytest.approx(1e-4 * ti, rel=1e-6)
    assert made["Sc44"] == pytest.approx(1e-4 * sc, rel=1e-6)
    assert made["Ca44"] == pytest.approx(1e-4 * ca, rel=1e-6)


@pytest.mark.parametrize("age", [1e5, 7.17e5, 5e6])
def test_aluminium_to_magnesium(age):
    # Al26 ground state: 7.17e5 yr, in ICRP-107 and NUBASE2020 alike
    made = totals(decayed(one_model({"Al26": 1e-5, "Mg26": 0.0}), age, half_lives={"Al26": 7.17e5}))
    assert made["Al26"] == pytest.approx(1e-5 * 0.5 ** (age / 7.17e5), rel=1e-9)
    assert sum(made.values()) == pytest.approx(1e-5, rel=1e-12)
    default = totals(decayed(one_model({"Al26": 1e-5, "Mg26": 0.0}), age))
    assert default["Al26"] == pytest.approx(made["Al26"], rel=2e-4)


def test_iron_60_to_nickel_60_in_equilibrium():
    # ICRP-107: Fe60 1.5e6 yr, Co60m 10.467 min, Co60 5.2713 yr; NUBASE2020: Fe60 2.62e6 yr (from memory)
    for half_life, given in ((1.5e6 * 365.2422 / YEAR_D, None), (2.62e6, {"Fe60": "2.62 Myr"})):
        made = totals(decayed(one_model({"Fe60": 1e-5, "Ni60": 0.0}), 3e6, half_lives=given))
        left = 1e-5 * 0.5 ** (3e6 / half_life)
        assert made["Fe60"] == pytest.approx(left, rel=1e-9)
        # secular equilibrium: activity of the daughter is that of the parent, but for the 0.24 % of the
        # isomer Co60m that go to Ni60 directly (ICRP-107)
        ratio = 0.9976 * 5.2713 / (half_life * YEAR_D / 365.2422)
        assert made["Co60"] / made["Fe60"] == pytest.approx(ratio, rel=1e-4)
        assert "Co60m" not in made
        assert sum(made.values()) == pytest.approx(1e-5, rel=1e-12)


@pytest.mark.parametrize("nuclide", ["Ni57", "Fe52", "Cr48", "Ti44", "K40", "Cu64", "U235", "Th232", "Cl36"])
@pytest.mark.parametrize("age", [1e-6, 1e-2, 30.0, 1e7])
def test_chains_agree_with_the_solver_of_radioactivedecay(nuclide, age):
    symbol = nuclide.rstrip("0123456789")
    other = radioactivedecay.Inventory({f"{symbol}-{nuclide[len(symbol) :]}": 1.0}, "num")
    ours = remaining(nuclide, age)
    for name, share in other.decay(age * 365.25 * 86400, "s").numbers().items():
        assert ours.get(name.replace("-", ""), 0.0) == pytest.approx(share, rel=1e-5, abs=1e-9)
    assert sum(ours.values()) == pytest.approx(1.0, rel=1e-9)


@pytest.mark.parametrize("age", [None, 1.0, 1e6])
@pytest.mark.parametrize("id", ["karakas-2010", "doherty-2014", "kobayashi-2006", "nomoto-1997-w7"])
def test_budgets_stay_closed(id, age):
    old, new = load(id), decayed(load(id), age)
    for a, b in zip(old.slices, new.slices, strict=True):
        assert np.array_equal(a.ejected, b.ejected)
        assert np.allclose(b.total.sum(axis=1) + b.rest(), b.ejected, rtol=1e-13)
        if old.derived:  # where both are printed they differ by their rounding
            assert np.allclose(b.net, b.total - b.ejected[:, None] * b.initial, rtol=1e-9, atol=1e-12)


def test_mass_that_reaches_what_isnt_followed_goes_to_rest():
    old, new = load("karakas-2010"), decayed(load("karakas-2010"))
    assert "Mn55" not in new.species and "Mn55" in new.notes[-1]
    k = old.species.index("Fe55")
    s = old.species.index("S35")
    for a, b in zip(old.slices, new.slices, strict=True):
        gone = a.total[:, [k, s]].sum(axis=1)
        assert np.allclose(b.rest() - a.rest(), gone, atol=1e-14)


def test_all_to_the_end_leaves_nature_and_what_is_kept():
    made = decayed(
        one_model({"Al26": 1e-5, "Fe60": 1e-5, "K40": 1e-6, "Mg26": 0.0, "Ni60": 0.0}), keep=["26Al"]
    )
    assert made.species == ("Mg26", "Al26", "K40", "Ni60")
    assert totals(made) == pytest.approx({"Mg26": 0.0, "Al26": 1e-5, "K40": 1e-6, "Ni60": 1e-5})
    assert "Al26 kept" in made.notes[-1]


def test_isomer_and_ground_state_are_two_nuclides():
    # Al26m decays to Mg26 directly, half-life 6.346 s (NUBASE2020, from memory); ICRP-107 doesn't list it
    grid = one_model({"Mg26": 0.0, "Al26": 1e-5, "Al26m": 2e-6})
    with pytest.raises(InputError, match=r"Al26m has no decay.*half-life"):
        decayed(grid, "1 yr")
    made = totals(decayed(grid, "6.346 s", half_lives={"Al26m": ("6.346 s", "Mg26")}))
    assert made["Al26m"] == pytest.approx(1e-6, rel=1e-9)
    assert made["Mg26"] == pytest.approx(1e-6, rel=1e-6)
    assert made["Al26"] == pytest.approx(1e-5, rel=1e-9)
    # without a daughter it is the isobar of lower mass, since the ground state is radioactive too
    guessed = totals(decayed(grid, "6.346 s", half_lives={"Al26m": "6.346 s"}))
    assert guessed == pytest.approx(made)


def test_alpha_particles_are_counted_as_helium():
    made = totals(decayed(one_model({"He4": 0.0, "U238": 238e-6, "Th232": 0.0, "Pb206": 0.0}), 4.468e9))
    left = 238e-6 * 0.5 ** (4.468e9 / (4.468e9 * 365.2422 / YEAR_D))
    assert made["U238"] == pytest.approx(left, rel=1e-3)
    gone = 238e-6 - made["U238"]
    assert made["Pb206"] == pytest.approx(gone * 206 / 238, rel=1e-3)
    assert made["He4"] == pytest.approx(gone * 32 / 238, rel=1e-3)
    assert sum(made.values()) == pytest.approx(238e-6, rel=1e-6)  # the rest: spontaneous fission, 5.5e-7


def test_age_zero_changes_nothing():
    old, new = load("karakas-2010"), decayed(load("karakas-2010"), 0.0)
    assert new.species == old.species
    assert all(np.allclose(a.total, b.total, rtol=1e-14) for a, b in zip(old.slices, new.slices, strict=True))


def test_ages_in_steps_are_the_age_at_once():
    start = one_model({"Ni56": 0.07, "Co56": 0.0, "Fe56": 0.0})
    twice, once = decayed(decayed(start, "10 d"), "30 d"), decayed(start, "40 d")
    assert totals(twice) == pytest.approx(totals(once), rel=1e-10)


def test_ids_and_checksums_tell_decays_apart():
    agb = load("karakas-2010")
    made = [
        decayed(agb),
        decayed(agb, "1 Myr"),
        decayed(agb, keep=["Fe60"]),
        decayed(agb, half_lives={"Al26": 7e5}),
    ]
    assert made[0].id == "karakas-2010+decayed" and made[1].id == "karakas-2010+decayed-1e+06yr"
    assert len({one.checksum for one in [agb, *made]}) == 5
    assert decayed(agb).checksum == made[0].checksum


@pytest.mark.parametrize(
    ("call", "why"),
    [
        (lambda: decayed(load("marigo-2001")), "element can't decay"),
        (lambda: decayed(load("karakas-2010"), "-1 yr"), "negative"),
        (lambda: decayed(load("karakas-2010"), "3 Msun"), "wrong dimension"),
        (lambda: decayed(load("karakas-2010"), keep=["Pd107"]), "Pd107 isn't among"),
        (lambda: decayed(load("karakas-2010"), half_lives={"Al26": "0 yr"}), "isn't positive"),
        (
            lambda: decayed(load("karakas-2010"), half_lives={"Al26": (1.0, "Mg26", 3)}),
            "a half-life and a daughter",
        ),
        (lambda: decayed(load("karakas-2010"), half_lives={"Xx26": 1.0}), "isn't known"),
    ],
)
def test_refusals(call, why):
    with pytest.raises(InputError, match=why):
        call()
