"""Kobayashi, Umeda, Nomoto, Tominaga & Ohkubo (2006, ApJ 653, 1145): integrals and averages of its yields."""

import csv
import itertools
from importlib.resources import files

import pytest
from mpmath import mp, mpf

from steelyard.integrate import Population, StellarSource, imf

ALL_DEAD = 1e11


def printed(metallicity):
    """Rows of the table at one metallicity, in order of mass, read here without the package."""
    text = files("steelyard.tables").joinpath("kobayashi-2006", "total.csv").read_text(encoding="utf-8")
    rows = [r for r in csv.DictReader(text.splitlines()) if float(r["metallicity"]) == metallicity]
    return sorted(rows, key=lambda r: float(r["mass"]))


def power(slope, n, a, b):
    p = n + 1 - mpf(slope)
    return (b**p - a**p) / p


def kroupa_lines(rows, names):
    """int phi y dm, y straight between the models; Kroupa (2001) on 0.08-120 Msun, all antiderivatives."""
    whole = power("1.3", 1, mpf("0.08"), mpf("0.5")) + mpf("0.5") * power("2.3", 1, mpf("0.5"), mpf(120))
    total = mpf(0)
    for lower, upper in itertools.pairwise(rows):
        a, b = mpf(lower["mass"]), mpf(upper["mass"])
        ya, yb = (sum(mpf(r[n]) for n in names) for r in (lower, upper))
        slope = (yb - ya) / (b - a)
        total += (ya - slope * a) * power("2.3", 0, a, b) + slope * power("2.3", 1, a, b)
    return float(mpf("0.5") * total / whole)


@pytest.mark.parametrize(
    "metallicity, species, nuclides, value",
    [
        (0.02, "O16", ["O16"], 7.193084341578e-3),
        (0.02, "Fe", ["Fe54", "Fe56", "Fe57", "Fe58"], 4.29519877813e-4),
        (0.001, "Mg", ["Mg24", "Mg25", "Mg26"], 8.2317981375e-4),
    ],
)
def test_integrals_over_the_explosion_alone(metallicity, species, nuclides, value):
    with mp.workdps(30):
        wanted = kroupa_lines(printed(metallicity), nuclides)
    stars = Population(
        metallicity,
        [StellarSource("core-collapse", ["kobayashi-2006"], winds="rest")],
        imf="kroupa-2001",
        species="nuclides",
    )
    got = float(stars.weigh(ALL_DEAD).get(species)[0])
    assert got == pytest.approx(wanted, rel=1e-12)
    # the same, worked out separately from the same table
    assert got == pytest.approx(value, rel=1e-10)


def per_event(metallicity, species):
    """Salpeter average over the models' own 13-40 Msun, Msun per event."""
    mf = imf("salpeter-1955", limits=(0.07, 50))
    stars = Population(
        metallicity,
        [StellarSource("core-collapse", ["kobayashi-2006"], events_from=13.0, winds="rest")],
        imf=mf,
    )
    return float(stars.weigh(ALL_DEAD).get(species)[0] / mf.number(13, 40))


def test_iron_per_event_is_that_of_normal_supernovae():
    """Normal SNe II eject about 0.07 Msun of 56Ni, as SN 1987A did, and these models are set to it.

    Common practice for the figure; the paper fixes the mass cut so that M(Fe) = 0.07 Msun (from memory).
    """
    for z in (0.0, 0.001, 0.004, 0.02):
        assert 0.065 < per_event(z, "Fe") < 0.1, z


def test_oxygen_per_event():
    """Averages of the same group's yields: 1.80 Msun of O16 over 10-50 Msun, Salpeter.

    Tsujimoto et al. (1995, MNRAS 277, 945), table 3, from memory. Models of 13-40 Msun leave out the lightest
    stars, which dilute, and the heaviest, which enrich: a bracket of a quarter about it.
    """
    for z in (0.0, 0.001, 0.004, 0.02):
        assert 1.35 < per_event(z, "O") < 2.4, z


def test_alpha_over_iron_of_core_collapse_is_a_few_times_solar():
    """[O/Fe] and [Mg/Fe] of halo stars, 0.3 to 0.6, are what core collapse alone makes (common practice)."""
    for z in (0.001, 0.004):
        stars = Population(
            z, [StellarSource("core-collapse", ["kobayashi-2006"])], solar="anders-grevesse-1989"
        )
        out = stars.weigh(ALL_DEAD)
        assert 0.2 < float(out.ratio("O", "Fe", convention="net")[0]) < 0.7
        assert 0.1 < float(out.ratio("Mg", "Fe", convention="net")[0]) < 0.7


def test_heavier_stars_make_more_oxygen():
    """Oxygen grows steeply with initial mass (the paper, section 2): from about 0.2 to about 8 Msun."""
    rows = printed(0.02)
    oxygen = [float(r["O16"]) for r in rows]
    assert 0.1 < oxygen[0] < 0.5
    assert 5 < oxygen[-1] < 10
