"""Closed-form derivatives, against differentiation in mpmath of an evaluation written anew, and against
Richardson extrapolation of the plan's own values, whose error is far below what is asked."""

import csv
from dataclasses import replace
from importlib.resources import files
from itertools import pairwise

import numpy as np
import pytest
from mpmath import mp, mpf

from steelyard.integrate import DelayedSource, Edges, Join, Plan, Population, StellarSource, lifetimes
from steelyard.integrate.plan import candidates
from steelyard.integrate.plan.special import exprel_slope
from steelyard.integrate.sources import FailureTable
from steelyard.yields import load
from steelyard.yields.errors import InputError

SPECIES = ["He", "C", "O", "Mg", "Fe"]
AGES = np.geomspace(3.3e6, 1.3e10, 12)
AGB = StellarSource("agb", ["karakas-2010", "doherty-2014"])
COLLAPSE = StellarSource("core-collapse", ["kobayashi-2006"])
LATE = DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017")
MIXTURE = {"nomoto-1997-w7": 0.5, "iwamoto-1999-WDD2": 0.3, "iwamoto-1999-CDD1": 0.2}
SHARED = {"kobayashi-2006": 0.6, "limongi-chieffi-2018-R-v000": 0.4}


def population(z=0.011, **changes):
    given = {"sources": [AGB, COLLAPSE, LATE], "joins": (Join(("agb", "core-collapse")),), "species": SPECIES}
    return Population(z, **(given | changes))


class Anew:
    """One massive source and one of events, in mpmath: oxygen and iron from printed figures and formulas."""

    NAMES = (
        "metallicity",
        "imf.slopes[0]",
        "imf.slopes[1]",
        "imf.breaks[0]",
        "imf.limits[0]",
        "imf.limits[1]",
        "thermonuclear.number",
        "thermonuclear.delay.slope",
        "thermonuclear.delay.limits[0]",
        "thermonuclear.delay.limits[1]",
        "scale[core-collapse, O]",
    )

    def __init__(self, species):
        grid = load("kobayashi-2006")
        self.species = species
        self.slices = [
            (mpf(repr(z)), [mpf(float(m)) for m in one.mass], [mpf(float(y)) for y in self.column(grid, one)])
            for z, one in ((0.004, grid.at(0.004)), (0.02, grid.at(0.02)))
        ]
        event = load("nomoto-1997-w7")
        self.event = mpf(float(self.column(event, event.slices[0])[0]))
        text = (
            files("steelyard.tables").joinpath("portinari-1998-lifetimes", "lifetimes.csv").read_text("utf-8")
        )
        head, *rows = csv.reader(text.splitlines())
        self.z = [mpf(x) for x in head[1:]]
        self.mass = [mpf(r[0]) for r in rows]
        self.time = [[mpf(x) for x in r[1:]] for r in rows]

    def column(self, grid, one):
        return one.total @ grid.projection([self.species])[0][:, 0]

    def turnoff(self, age, z):
        k = max(i for i in range(len(self.z) - 1) if self.z[i] <= z)
        x = mp.log(z / self.z[k]) / mp.log(self.z[k + 1] / self.z[k])
        logs = [(1 - x) * mp.log(r[k]) + x * mp.log(r[k + 1]) for r in self.time]
        i = max(i for i in range(len(logs) - 1) if i == 0 or logs[i] > mp.log(age))
        share = (mp.log(age) - logs[i]) / (logs[i + 1] - logs[i])
        return self.mass[i] * (self.mass[i + 1] / self.mass[i]) ** share

    def __call__(self, age, theta):
        z, low, high, edge, least, most, number, slope, first, last, scale = theta
        (z0, m0, y0), (z1, m1, y1) = self.slices
        x = mp.log(z / z0) / mp.log(z1 / z0)

        def star(m):
            return (1 - x) * line(m0, y0, m) + x * line(m1, y1, m)

        def power(k, a, b):
            """int m^k phi dm between two masses."""
            out = mpf(0)
            for lo, hi, factor, alpha in (
                (least, edge, mpf(1), low),
                (edge, most, edge ** (high - low), high),
            ):
                p, q = max(lo, a), min(hi, b)
                if q > p:
                    out += factor * (q ** (k + 1 - alpha) - p ** (k + 1 - alpha)) / (k + 1 - alpha)
            return out

        dead, total = self.turnoff(age, z), mpf(0)
        nodes = sorted({*m0, *m1})
        for a, b in pairwise(nodes):
            p, q = max(a, dead), min(b, most)
            if q > p:
                rise = (star(b) - star(a)) / (b - a)
                total += (star(a) - rise * a) * power(0, p, q) + rise * power(1, p, q)
        total *= scale / power(1, least, most)
        p = slope + 1
        until = min(max(age, first), last)
        return total + number * (until**p - first**p) / (last**p - first**p) * self.event


def line(mass, values, m):
    i = max(i for i in range(len(mass) - 1) if i == 0 or mass[i] <= m)
    return values[i] + (values[i + 1] - values[i]) * (m - mass[i]) / (mass[i + 1] - mass[i])


@pytest.mark.parametrize("species", ["O", "Fe"])
def test_derivatives_equal_those_in_mpmath(species):
    free = [n.replace("O]", f"{species}]") for n in Anew.NAMES]
    stars = population(sources=[COLLAPSE, LATE], joins=(), species=["O", "Fe"])
    theta = np.array([0.011, 1.3, 2.35, 0.5, 0.08, 37.0, 1.3e-3, -1.1, 4e7, 1.3e10, 1.25])
    ages = [1.1e7, 1.5e7, 1e8, 9e9]
    value, jacobian = Plan(stars, free, ages).jacobian(theta)
    at = ["O", "Fe"].index(species)
    with mp.workdps(40):
        anew = Anew(species)
        exact = [mpf(x) for x in theta]
        for t, age in enumerate(ages):
            wanted = anew(mpf(age), exact)
            assert abs(value[t, at] / wanted - 1) < 1e-12
            for i, name in enumerate(free):

                def along(x, i=i, age=age):
                    return anew(mpf(age), [*exact[:i], x, *exact[i + 1 :]])

                slope = mp.diff(along, exact[i], h=mpf(10) ** -15 * exact[i])
                size = max(abs(slope), abs(wanted / exact[i]) * mpf(10) ** -3)
                assert abs(jacobian[i, t, at] - slope) < 1e-9 * size, (name, age)


def extrapolated(f, x, step, sides=2):
    """Derivative from differences at halved steps: central ones, or forward ones from x on."""
    rows = []
    order = 4 if sides == 2 else 2
    for k in range(6 if sides == 2 else 7):
        h = step / 2**k
        row = [(f(x + h) - f(x - h)) / (2 * h) if sides == 2 else (f(x + h) - f(x)) / h]
        for j, coarser in enumerate(rows[-1] if rows else [], start=1):
            row.append(row[j - 1] + (row[j - 1] - coarser) / (order**j - 1))
        rows.append(row)
    errors = [abs(r[-1] - r[-2]).max() for r in rows[1:]]
    return rows[1:][int(np.argmin(errors))][-1]


def just_above(plan, theta, at):
    """A plan along one number from just above a value: at a slice's own metallicity its layout is another."""

    def along(x):
        moved = np.nextafter(x, np.inf) if x == theta[at] else x
        return plan(np.where(np.arange(len(theta)) == at, moved, theta))

    return along


def check(plan, theta, tolerance=1e-9, sides=2, only=None, step=2e-3):
    value, jacobian = plan.jacobian(theta)
    np.testing.assert_allclose(value, plan(theta), rtol=1e-14, atol=1e-18)
    for i, name in enumerate(plan.free):
        if only and name != only:
            continue

        def along(x, i=i):
            return plan(np.where(np.arange(len(theta)) == i, x, theta))

        f = along if sides == 2 else just_above(plan, theta, i)
        scale = abs(theta[i]) or 1.0
        wanted = extrapolated(f, theta[i], step * scale, sides)
        size = max(abs(wanted).max(), 1e-3 * abs(value).max() / scale)
        assert abs(jacobian[i] - wanted).max() < tolerance * size, name
    return jacobian


CASES = {
    "all": {},
    "lognormal": {"imf": "chabrier-2003"},
    "three pieces": {
        "imf": "kroupa-1993",
        "lifetimes": "raiteri-1996",
        "edges": Edges("reach-down", "reach-up"),
    },
    "cubic": {"interpolation": "cubic", "lifetimes": "padovani-matteucci-1993"},
    "exponential": {
        "sources": [
            AGB,
            COLLAPSE,
            replace(LATE, delay={"form": "exponential", "timescale": 2e9, "limits": [5e7, 1.35e10]}),
        ]
    },
    "winds and birth composition": {
        "edges": Edges("return-only", "return-only"),
        "joins": (Join(("agb", "core-collapse"), "return-only"),),
        "z": 0.017,
    },
    "lifetimes of a function": {"lifetimes": lambda m, z: 1.2e10 * (1 + 10 * z) * m**-2.6 + 2e6},
}


@pytest.mark.parametrize("name", CASES)
def test_every_parameter_against_extrapolated_differences(name):
    stars = population(**CASES[name])
    free = [*candidates(stars), "scale[agb, C]", "scale[thermonuclear, Fe]"]
    plan = Plan(stars, free, AGES, "net" if name == "cubic" else "total", by_source=True)
    theta = plan.start.copy()
    moved = {"core-collapse.events_from": 10.3, "imf.limits[1]": 37.0, "scale[agb, C]": 1.3}
    # a break on a node has a derivative, but no second one to extrapolate with
    moved |= {name: value * 0.93 for name, value in zip(free, theta, strict=True) if "imf.breaks" in name}
    for at, value in moved.items():
        theta[free.index(at)] = value
    check(plan, theta)


def test_shares_of_mixtures():
    stars = population(
        sources=[
            AGB,
            StellarSource("core-collapse", [SHARED], limits=(13, 40)),
            replace(LATE, sets=[MIXTURE]),
        ]
    )
    free = [
        "core-collapse.share[kobayashi-2006]",
        "thermonuclear.share[nomoto-1997-w7]",
        "thermonuclear.share[iwamoto-1999-CDD1]",
        "metallicity",
        "scale[core-collapse, Mg]",
    ]
    for convention in ("total", "net"):
        plan = Plan(stars, free, AGES, convention, True)
        check(plan, np.array([0.55, 0.4, 0.35, 0.006, 0.8]))


def test_products_with_vectors_are_those_of_the_jacobian():
    rng = np.random.default_rng(3)
    for by_source in (False, True):
        stars = population(sources=[AGB, COLLAPSE, replace(LATE, sets=[MIXTURE])])
        free = [*candidates(stars), "scale[core-collapse, Fe]", "thermonuclear.share[iwamoto-1999-CDD1]"]
        plan = Plan(stars, free, AGES, "net", by_source)
        theta = plan.start * 1.01
        value, jacobian = plan.jacobian(theta)
        direction, cotangent = rng.normal(size=len(free)) * theta, rng.normal(size=plan.shape)
        along, back = plan.jvp(theta, direction), plan.vjp(theta, cotangent)
        assert np.array_equal(along[0], value)
        assert np.array_equal(back[0], value)
        wanted = np.tensordot(direction, jacobian, 1)
        np.testing.assert_allclose(along[1], wanted, rtol=1e-12, atol=1e-14 * abs(wanted).max())
        wanted = (jacobian * cotangent).reshape(len(free), -1).sum(axis=1)
        np.testing.assert_allclose(back[1], wanted, rtol=1e-11)


@pytest.mark.parametrize("z", [0.004, 0.008])
def test_at_the_metallicity_of_a_slice_it_is_the_upper_side(z):
    plan = Plan(population(), ["metallicity", "imf.slopes[1]"], AGES)
    check(plan, np.array([z, 2.3]), 1e-7, sides=1, only="metallicity", step=1e-2)
    check(plan, np.array([z, 2.3]), only="imf.slopes[1]")


def test_beyond_the_sets_only_birth_and_lifetimes_move():
    plan = Plan(population(), ["metallicity"], AGES)
    check(plan, np.array([0.03]))
    high = Plan(population(), ["metallicity"], AGES).jacobian([0.06])[1]
    assert not high[:, :, SPECIES.index("O")].any()
    refusing = Plan(population(edges=Edges(metallicity="refuse")), ["metallicity"], AGES)
    below = extrapolated(lambda x: refusing([0.02 - max(x, 4e-18)]), 0.0, 2e-4, sides=1)
    np.testing.assert_allclose(refusing.jacobian([0.02])[1][0], -below, rtol=1e-6, atol=1e-8)


def test_outside_its_join_the_lowest_collapse_mass_moves_nothing():
    plan = Plan(population(), ["core-collapse.events_from"], AGES, by_source=True)
    assert not plan.jacobian([15.0])[1].any()
    assert plan.jacobian([11.0])[1].any()


def test_a_plan_without_free_numbers_has_an_empty_jacobian():
    value, jacobian = Plan(population(), (), AGES).jacobian()
    assert jacobian.shape == (0, *value.shape)


@pytest.mark.parametrize("law", ["portinari-1998", "raiteri-1996", "padovani-matteucci-1993"])
@pytest.mark.parametrize("z", [0.0005, 0.006, 0.0123, 0.028])
def test_lifetimes_move_with_metallicity(law, z):
    mass = np.array([0.7, 1.0, 3.3, 6.5, 9.0, 25.0, 90.0, 119.0])
    one = lifetimes(law)
    wanted = extrapolated(lambda x: np.log(one.at(x).lifetime(mass)), z, 0.02 * z)
    np.testing.assert_allclose(one.metallicity_slope(mass, z), wanted, rtol=1e-9, atol=1e-9)


def test_lifetimes_held_at_their_edges_and_those_of_a_function():
    for law, z in (("portinari-1998", 0.05), ("portinari-1998", 1e-4), ("raiteri-1996", 0.03)):
        assert not lifetimes(law).metallicity_slope([1.0, 30.0], z).any()
    one = lifetimes(lambda m, z: 1e10 * (1 + 10 * z + z**2) * m**-2.5)
    for z in (0.0, 1e-5, 0.02):
        wanted = (10 + 2 * z) / (1 + 10 * z + z**2)
        np.testing.assert_allclose(one.metallicity_slope([0.9, 20.0], z), wanted, rtol=1e-8)


def test_integrals_of_powers_move_as_in_mpmath():
    z = np.concatenate([np.linspace(-30, 30, 41), [-1.0, 1.0, -1 + 1e-12, 1e-9, 0.0, 0.4, -0.7]])
    with mp.workdps(40):
        wanted = [
            float((mp.exp(x) * (x - 1) + 1) / x**2) if x else 0.5 for x in (mpf(float(value)) for value in z)
        ]
    np.testing.assert_allclose(exprel_slope(z), wanted, rtol=2e-15)


@pytest.mark.parametrize("slope", [-3.0, -0.5, 0.0, 1.0, 2.0, 4.5, 7.9, 11.0])
def test_slopes_of_any_size(slope):
    stars = population(imf="salpeter-1955")
    check(Plan(stars, ["imf.slopes[0]", "imf.limits[0]"], AGES), np.array([slope, 0.11]), step=0.03)


REFUSED = {
    "form 'broken-power-law' has no closed-form derivative": lambda: Plan(
        population(
            sources=[
                AGB,
                COLLAPSE,
                replace(
                    LATE,
                    delay={
                        "form": "broken-power-law",
                        "slopes": [-0.5, -1.1],
                        "breaks": [4e8],
                        "limits": [4e7, 1e10],
                    },
                ),
            ]
        ),
        ["thermonuclear.delay.slopes[0]"],
    ).jacobian([-0.5]),
    "number of events is negative": lambda: Plan(population(), ["thermonuclear.number"]).jacobian([-1e-3]),
    "cotangent has shape (3,), not": lambda: Plan(population(), ["metallicity"]).vjp([0.01], np.ones(3)),
    "theta has shape (2,), not (1,)": lambda: Plan(population(), ["metallicity"]).jvp([0.01], [1.0, 2.0]),
    "no weights with cubic interpolation": lambda: Plan(population(interpolation="cubic")).weights(),
    "by_source=True": lambda: Plan(population(), ["scale[agb, C]"]).vjp_models([1.0], np.ones((7, 5))),
}


@pytest.mark.parametrize("message", REFUSED)
def test_what_cannot_be_is_refused_in_one_line(message):
    with pytest.raises(InputError) as caught:
        REFUSED[message]()
    assert message in str(caught.value)
    assert "\n" not in str(caught.value)


def nudged(grid, which, row, amount):
    """A set with one model's yields of its first ten species raised."""
    one = grid.slices[which]
    total, net = one.total.copy(), one.net.copy()
    total[row, :10] += amount
    net[row, :10] += amount
    slices = list(grid.slices)
    slices[which] = replace(one, total=total, net=net)
    return replace(grid, slices=tuple(slices))


@pytest.mark.parametrize("convention", ["total", "net"])
def test_weights_of_models_are_the_change_when_one_is_raised(convention):
    agb, massive, event = load("karakas-2010"), load("kobayashi-2006"), load("nomoto-1997-w7")
    implode = ((33, 36),) if convention == "total" else FailureTable([14.0, 28.0, 40.0], [0.2, 0.7])

    def plan(agb, massive, event):
        sources = [
            StellarSource("agb", [agb, "doherty-2014"]),
            StellarSource("core-collapse", [massive], implode=implode),
            replace(LATE, sets=[event]),
        ]
        return Plan(
            population(sources=sources, species="nuclides"),
            ["imf.slopes[1]"],
            AGES,
            convention,
            by_source=True,
        )

    whole = plan(agb, massive, event)
    base, weights = whole([2.2]), whole.weights([2.2])
    assert weights.shape == (3, len(AGES), len(whole.models))
    amount = 1e-3
    for grid, which, row in (
        (agb, 2, 3),
        (agb, 3, -3),
        (massive, 2, 0),
        (massive, 3, -2),
        (event, 0, 0),
    ):
        changed = nudged(grid, which, row, amount)
        other = plan(*(changed if g is grid else g for g in (agb, massive, event)))
        one = grid.slices[which]
        model = whole.models.index((grid.id, one.metallicity, float(one.mass[row])))
        species = whole.species.index(grid.species[5])
        moved = (other([2.2]) - base)[:, :, species] / amount
        assert abs(moved).max() > 0
        np.testing.assert_allclose(weights[:, :, model], moved, rtol=1e-9, atol=1e-12 * abs(moved).max())


def test_a_cotangent_reaches_the_published_yields():
    plan = Plan(population(), ["metallicity", "scale[agb, C]"], AGES, by_source=True)
    theta = [0.006, 1.4]
    weights, cotangent = plan.weights(theta), np.random.default_rng(4).normal(size=plan.shape)
    back = plan.vjp_models(theta, cotangent)
    assert back.shape == (len(plan.models), len(SPECIES))
    model = plan.models.index(("karakas-2010", 0.004, 3.0))
    wanted = 1.4 * weights[0, :, model] @ cotangent[0, :, SPECIES.index("C")]
    wanted += weights[1:, :, model].ravel() @ cotangent[1:, :, SPECIES.index("C")].ravel()
    assert back[model, SPECIES.index("C")] == pytest.approx(wanted, rel=1e-12)
