"""Karakas (2010, MNRAS 403, 1413): integrals of its net yields."""

import csv
import itertools
from importlib.resources import files

import pytest
from mpmath import mp, mpf

from steelyard.integrate import Population, StellarSource

ALL_DEAD = 1e12


def power(slope, n, a, b):
    p = n + 1 - mpf(slope)
    return (b**p - a**p) / p


def kroupa_lines(metallicity, name):
    """int phi y dm of the printed net yields, Vassiliadis & Wood mass loss; Kroupa (2001), 0.08-120."""
    text = files("steelyard.tables").joinpath("karakas-2010", "net.csv").read_text(encoding="utf-8")
    rows = [
        r
        for r in csv.DictReader(text.splitlines())
        if float(r["metallicity"]) == metallicity and r["variant"] in ("", "VW93")
    ]
    rows.sort(key=lambda r: float(r["mass"]))
    whole = power("1.3", 1, mpf("0.08"), mpf("0.5")) + mpf("0.5") * power("2.3", 1, mpf("0.5"), mpf(120))
    total = mpf(0)
    for lower, upper in itertools.pairwise(rows):
        a, b, ya, yb = (mpf(x) for x in (lower["mass"], upper["mass"], lower[name], upper[name]))
        slope = (yb - ya) / (b - a)
        total += (ya - slope * a) * power("2.3", 0, a, b) + slope * power("2.3", 1, a, b)
    return float(mpf("0.5") * total / whole)


def net(metallicity, species):
    stars = Population(metallicity, [StellarSource("agb", ["karakas-2010"])], species="nuclides")
    return float(stars.weigh(ALL_DEAD).get(species, convention="net")[0])


@pytest.mark.parametrize(
    "metallicity, species, value",
    [(0.02, "C12", 2.3658682427e-4), (0.0001, "C12", 2.3019472554e-3), (0.02, "N14", 4.1093966662e-4)],
)
def test_integrals_of_net_yields(metallicity, species, value):
    with mp.workdps(30):
        wanted = kroupa_lines(metallicity, species)
    got = net(metallicity, species)
    assert got == pytest.approx(wanted, rel=1e-11)
    assert got == pytest.approx(value, rel=1e-10)


def test_metal_poor_stars_make_more_carbon():
    """Third dredge-up and hot bottom burning are the stronger the fewer metals (the paper's abstract)."""
    assert net(0.0001, "C12") > net(0.004, "C12") > net(0.02, "C12") > 0


def test_mass_loss_is_told_apart():
    """The 6 Msun model at Z = 1e-4 is there with two laws of mass loss; all other models are the same."""
    a, b = (
        Population(0.0001, [StellarSource("agb", [s])]).weigh(ALL_DEAD).get("C", convention="net")[0]
        for s in ("karakas-2010", "karakas-2010-reimers")
    )
    assert a != b
    assert a == pytest.approx(b, rel=0.1)
