"""A plan against the population itself, weighed anew with its numbers changed; every kind of parameter."""

import pickle
from dataclasses import replace
from math import log

import numpy as np
import pytest

from steelyard.integrate import DelayedSource, Edges, Join, Plan, Population, StellarSource, imf
from steelyard.integrate.imf import AnalyticIMF
from steelyard.integrate.moments import Piece
from steelyard.integrate.plan import candidates, theta_from
from steelyard.integrate.sources import FailureTable
from steelyard.yields.errors import InputError

SPECIES = ["H", "He", "C", "N", "O", "Mg", "Fe"]
AGES = [0.0, 3.2e6, 5e6, 1e7, 2.9e7, 4e7, 1e8, 1e9, 1.38e10, 2e10]
AGB = StellarSource("agb", ["karakas-2010", "doherty-2014"])
COLLAPSE = StellarSource("core-collapse", ["kobayashi-2006"])
LATE = DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017")
BRIDGE = (Join(("agb", "core-collapse")),)


def population(z=0.014, **changes):
    given = {"sources": [AGB, COLLAPSE, LATE], "joins": BRIDGE, "species": SPECIES} | changes
    return Population(z, **given)


def agree(plan, theta, other, scale=None):
    """Compare a plan's result with what a population weighs, both conventions and by source or not."""
    result = other.weigh(plan.ages)
    wanted = getattr(result, plan.convention)
    if scale is not None:
        wanted = wanted * scale
    if not plan.by_source:
        wanted = wanted.sum(axis=0)
    # what is nothing throughout is compared as it is
    size = abs(wanted).max(axis=tuple(range(wanted.ndim - 1)))
    size = np.where(size > 0, size, 1.0)
    np.testing.assert_allclose(plan(theta) / size, wanted / size, rtol=1e-13, atol=1e-13)


def power_law(slopes, breaks=(0.5,), limits=(0.08, 120.0)):
    return imf("power-law", slopes=slopes, breaks=breaks, limits=limits)


def lognormal_and_power(slope, edge, limits):
    """Chabrier's (2003) lognormal up to an edge and a slope above it, continuous, normalised to 1 Msun."""
    low = Piece(limits[0], edge, 0.0, 1.0, log(0.079), 1 / (0.69 * log(10)) ** 2)
    high = Piece(edge, limits[1], float(np.log(low(edge))) + slope * log(edge), slope)
    raw = AnalyticIMF("test", {}, (low, high))
    whole = log(float(raw.mass(*limits)))
    return replace(raw, pieces=(replace(low, log_a=-whole), replace(high, log_a=high.log_a - whole)))


MIXTURE = {"nomoto-1997-w7": 0.7, "iwamoto-1999-WDD2": 0.3}


def late(number=1.3e-3, spec="maoz-graur-2017", sets=("nomoto-1997-w7",)):
    return DelayedSource("thermonuclear", list(sets), number, spec)


def power_delay(slope=-1.1, limits=(4e7, 1.38e10)):
    return {"form": "power-law", "slope": slope, "limits": list(limits)}


def exponential(timescale=1e9, limits=(0.0, 1.38e10)):
    return {"form": "exponential", "timescale": timescale, "limits": list(limits)}


def broken(slopes=(-0.5, -1.1), breaks=(4e8,), limits=(4e7, 1.38e10)):
    return {"form": "broken-power-law", "slopes": slopes, "breaks": breaks, "limits": limits}


def mixed_stars(share):
    return StellarSource(
        "core-collapse",
        [{"kobayashi-2006": share, "limongi-chieffi-2018-R-v000": 1 - share}],
        limits=(13, 40),
    )


#: name of the case: free names, theta, the population that is planned, and the one to compare with
CASES = {
    "nothing": ([], [], {}, {}),
    "slope": (["imf.slopes[-1]"], [2.7], {}, {"imf": power_law([1.3, 2.7])}),
    "slope of integer exponent": (["imf.slopes[-1]"], [2.0], {}, {"imf": power_law([1.3, 2.0])}),
    "both slopes": (["imf.slopes[1]", "imf.slopes[0]"], [2.1, 0.9], {}, {"imf": power_law([0.9, 2.1])}),
    "steep slope": (["imf.slopes[-1]"], [9.5], {}, {"imf": power_law([1.3, 9.5])}),
    "break": (["imf.breaks[0]"], [1.7], {}, {"imf": power_law([1.3, 2.3], (1.7,))}),
    "limits": (
        ["imf.limits[1]", "imf.limits[0]"],
        [31.0, 0.2],
        {},
        {"imf": power_law([1.3, 2.3], limits=(0.2, 31.0))},
    ),
    "limit inside the models": (
        ["imf.limits[0]", "imf.slopes[0]"],
        [1.5, 2.6],
        {"imf": power_law([2.35], (), (0.1, 100.0))},
        {"imf": power_law([2.6], (), (1.5, 100.0))},
    ),
    "three pieces": (
        ["imf.slopes[1]", "imf.breaks[0]", "imf.slopes[2]"],
        [2.0, 0.4, 3.1],
        {"imf": "kroupa-1993"},
        {"imf": power_law([1.3, 2.0, 3.1], (0.4, 1.0))},
    ),
    "chabrier": (
        ["imf.slopes[0]", "imf.breaks[0]", "imf.limits[1]"],
        [2.6, 1.4, 90.0],
        {"imf": "chabrier-2003"},
        {"imf": lognormal_and_power(2.6, 1.4, (0.08, 90.0))},
    ),
    "lognormal": (
        ["imf.limits[1]"],
        [60.0],
        {"imf": imf("lognormal", centre=2.0, sigma=0.5)},
        {"imf": imf("lognormal", centre=2.0, sigma=0.5, limits=(0.08, 60.0))},
    ),
    "metallicity": (["metallicity"], [0.003], {}, {"z": 0.003}),
    "metallicity of a slice": (["metallicity"], [0.004], {}, {"z": 0.004}),
    "metallicity of a slice at the edge": (["metallicity"], [0.02], {}, {"z": 0.02}),
    "metallicity beyond the sets": (["metallicity"], [0.035], {}, {"z": 0.035}),
    "metallicity below the sets": (["metallicity"], [2e-5], {}, {"z": 2e-5}),
    "no metals": (
        ["metallicity"],
        [0.0],
        {"sources": [COLLAPSE], "joins": ()},
        {"z": 0.0, "sources": [COLLAPSE], "joins": ()},
    ),
    "raiteri": (
        ["metallicity", "imf.slopes[-1]"],
        [0.006, 2.2],
        {"lifetimes": "raiteri-1996"},
        {"z": 0.006, "lifetimes": "raiteri-1996", "imf": power_law([1.3, 2.2])},
    ),
    "number": (["thermonuclear.number"], [2e-3], {}, {"sources": [AGB, COLLAPSE, late(2e-3)]}),
    "delay slope": (
        ["thermonuclear.delay.slope"],
        [-0.9],
        {},
        {"sources": [AGB, COLLAPSE, late(spec=power_delay(-0.9))]},
    ),
    "delay slope -1 and limits": (
        ["thermonuclear.delay.slope", "thermonuclear.delay.limits[0]", "thermonuclear.delay.limits[1]"],
        [-1.0, 1e8, 1e10],
        {},
        {"sources": [AGB, COLLAPSE, late(spec=power_delay(-1.0, (1e8, 1e10)))]},
    ),
    "timescale": (
        ["thermonuclear.delay.timescale", "thermonuclear.delay.limits[0]"],
        [3e9, 1e7],
        {"sources": [AGB, COLLAPSE, late(spec=exponential())]},
        {"sources": [AGB, COLLAPSE, late(spec=exponential(3e9, (1e7, 1.38e10)))]},
    ),
    "broken delay": (
        ["thermonuclear.delay.slopes[1]", "thermonuclear.delay.breaks[0]"],
        [-1.4, 1e9],
        {"sources": [AGB, COLLAPSE, late(spec=broken())]},
        {"sources": [AGB, COLLAPSE, late(spec=broken((-0.5, -1.4), (1e9,)))]},
    ),
    "share of events": (
        ["thermonuclear.share[nomoto-1997-w7]"],
        [0.2],
        {"sources": [AGB, COLLAPSE, late(sets=[MIXTURE])]},
        {
            "sources": [
                AGB,
                COLLAPSE,
                late(sets=[{"nomoto-1997-w7": 0.2, "iwamoto-1999-WDD2": 0.8}]),
            ]
        },
    ),
    "share of stars": (
        ["core-collapse.share[kobayashi-2006]", "metallicity"],
        [0.25, 0.005],
        {"sources": [AGB, mixed_stars(0.6), LATE]},
        {"sources": [AGB, mixed_stars(0.25), LATE], "z": 0.005},
    ),
    "lowest collapse mass": (
        ["core-collapse.events_from"],
        [10.7],
        {},
        {"sources": [AGB, replace(COLLAPSE, events_from=10.7), LATE]},
    ),
    "lowest collapse mass above the join": (
        ["core-collapse.events_from"],
        [17.0],
        {},
        {"sources": [AGB, replace(COLLAPSE, events_from=17.0), LATE]},
    ),
}


@pytest.mark.parametrize("name", CASES)
def test_every_kind_of_parameter(name):
    free, theta, planned, changed = CASES[name]
    declared, other = population(**planned), population(**(planned | changed))
    for convention, by_source in (("total", False), ("net", True)):
        plan = Plan(declared, free, AGES, convention, by_source)
        agree(plan, theta, other)
        agree(plan, plan.start, declared)


@pytest.mark.parametrize("by_source", [False, True])
@pytest.mark.parametrize("convention", ["total", "net"])
def test_either_convention_by_source_or_summed(convention, by_source):
    free = ["metallicity", "imf.slopes[-1]", "thermonuclear.number", "core-collapse.events_from"]
    plan = Plan(population(), free, AGES, convention, by_source)
    other = {"imf": power_law([1.3, 2.6]), "sources": [AGB, replace(COLLAPSE, events_from=9.5), late(2e-3)]}
    agree(plan, [0.007, 2.6, 2e-3, 9.5], population(0.007, **other))


@pytest.mark.parametrize("interpolation", ["linear", "cubic"])
@pytest.mark.parametrize("policy", ["bridge", "reach-up", "reach-down", "return-only", "swallow"])
def test_every_join_with_either_interpolation(policy, interpolation):
    joins = (Join(("agb", "core-collapse"), policy), Join(("karakas-2010", "doherty-2014"), policy))
    how = {"joins": joins, "interpolation": interpolation}
    for convention, z, slope in (("total", 0.014, 2.3), ("net", 0.0005, 2.7)):
        plan = Plan(population(**how), ["metallicity", "imf.slopes[-1]"], AGES, convention, True)
        agree(plan, [z, slope], population(z, imf=power_law([1.3, slope]), **how))


@pytest.mark.parametrize("below", ["swallow", "reach-down", "return-only"])
@pytest.mark.parametrize("above", ["swallow", "reach-up", "return-only"])
def test_every_edge(below, above):
    how = {"edges": Edges(below, above)}
    plan = Plan(population(**how), ["imf.limits[0]", "imf.limits[1]"], AGES, by_source=True)
    agree(plan, [0.3, 90.0], population(imf=power_law([1.3, 2.3], limits=(0.3, 90.0)), **how))


@pytest.mark.parametrize("winds", ["birth", "rest"])
def test_windows_that_implode(winds):
    source = replace(COLLAPSE, implode=((18, 22), (30, 120)), winds=winds)
    how = {"sources": [AGB, source, LATE]}
    plan = Plan(population(**how), ["imf.slopes[-1]", "metallicity"], AGES, by_source=True)
    agree(plan, [2.6, 0.0015], population(0.0015, imf=power_law([1.3, 2.6]), **how))


@pytest.mark.parametrize("interpolation", ["linear", "cubic"])
def test_explosions_that_fail_with_a_probability(interpolation):
    source = replace(COLLAPSE, implode=FailureTable([16.0, 21.0, 40.0], [0.3, 0.8]))
    how = {"sources": [AGB, source, LATE], "interpolation": interpolation}
    plan = Plan(population(**how), ["imf.slopes[-1]", "metallicity"], AGES, "net", True)
    agree(plan, [2.6, 0.0015], population(0.0015, imf=power_law([1.3, 2.6]), **how))


def test_scale_factors_act_on_one_source_and_species():
    names = ["scale[agb, C]", "scale[core-collapse, Fe]", "scale[thermonuclear, Fe]", "scale[agb,O]"]
    theta = [0.5, 1.7, 0.0, -2.0]
    scale = np.ones((3, 1, len(SPECIES)))
    for source, name, value in ((0, "C", 0.5), (1, "Fe", 1.7), (2, "Fe", 0.0), (0, "O", -2.0)):
        scale[source, 0, SPECIES.index(name)] = value
    for by_source in (True, False):
        agree(Plan(population(), names, AGES, by_source=by_source), theta, population(), scale)


def test_sources_in_any_order():
    for order in ([LATE, COLLAPSE, AGB], [COLLAPSE, LATE, AGB]):
        how = {"sources": order}
        plan = Plan(population(**how), ["metallicity", "core-collapse.events_from"], AGES, by_source=True)
        moved = {"sources": [replace(COLLAPSE, events_from=9.1) if s is COLLAPSE else s for s in order]}
        agree(plan, [0.006, 9.1], population(0.006, **moved))


def test_lifetimes_of_a_function_and_of_the_sets():
    def years(mass, z):
        return 1.2e10 * (1 + 10 * z) * mass**-2.6 + 3e6

    how = {"lifetimes": years}
    agree(Plan(population(**how), ["metallicity"], AGES), [0.009], population(0.009, **how))
    massive = StellarSource("core-collapse", ["limongi-chieffi-2018-R-v000"])
    how = {"sources": [massive], "joins": (), "lifetimes": "sets", "species": ["O", "Fe"]}
    agree(
        Plan(population(**how), ["imf.slopes[-1]"], AGES), [2.7], population(imf=power_law([1.3, 2.7]), **how)
    )
    with pytest.raises(InputError, match='lifetimes = "sets"'):
        Plan(population(**how), ["metallicity"])


def test_nuclides_in_every_source():
    how = {"species": "nuclides"}
    plan = Plan(population(**how), ["imf.slopes[-1]", "metallicity"], AGES, "net", True)
    agree(plan, [2.5, 0.011], population(0.011, imf=power_law([1.3, 2.5]), **how))


def test_ages_keep_the_order_they_were_given_in():
    ages = [1e9, 1e7, 1e10, 1e7]
    plan = Plan(population(), ["metallicity"], ages)
    agree(plan, [0.01], population(0.01))
    assert np.array_equal(plan([0.01])[1], plan([0.01])[3])


def test_a_call_writes_into_a_buffer():
    plan = Plan(population(), ["imf.slopes[-1]"], AGES)
    out = np.empty(plan.shape)
    assert plan([2.5], out) is out
    assert np.array_equal(out, plan([2.5]))
    with pytest.raises(InputError, match="out is float32"):
        plan([2.5], np.empty(plan.shape, np.float32))


def test_a_plan_survives_pickling():
    plan = Plan(population(), ["imf.slopes[-1]", "metallicity"], AGES)
    before = plan([2.5, 0.01])
    assert np.array_equal(pickle.loads(pickle.dumps(plan))([2.5, 0.01]), before)


def test_values_by_name_take_units():
    plan = Plan(population(), ["imf.limits[1]", "thermonuclear.delay.limits[0]"], AGES)
    theta = theta_from(plan, {"thermonuclear.delay.limits[0]": "50 Myr"})
    np.testing.assert_allclose(theta, [120.0, 5e7], rtol=1e-12)
    with pytest.raises(InputError, match=r"isn't free; free are imf\.limits\[1\]"):
        theta_from(plan, {"metallicity": 0.01})


def test_every_candidate_can_be_free():
    names = candidates(population())
    plan = Plan(population(), names, AGES)
    agree(plan, plan.start, population())


def test_repr_says_what_is_planned():
    text = repr(Plan(population(), ["metallicity"], AGES, "net"))
    assert text == (
        "Plan(net yields of agb, core-collapse, thermonuclear: 10 ages x 7 species, free: metallicity)"
    )


IMPLODING = [AGB, replace(COLLAPSE, implode=((9, 20),)), LATE]

REFUSED = {
    "theta has shape (1,), not (2,); give metallicity, imf.slopes[1]": lambda p: p([0.01]),
    "theta has shape (2,), not (n, 2)": lambda p: p.batch([0.01, 2.3]),
    "isn't finite, for imf.slopes[1]": lambda p: p([0.01, np.nan]),
    "theta in row 1 holds a value that isn't finite": lambda p: p.batch([[0.01, 2.3], [np.inf, 2.3]]),
    "metallicity 0.7 isn't a mass fraction": lambda p: p([0.7, 2.3]),
    "metallicity -0.01 isn't": lambda p: p([-0.01, 2.3]),
    "did you mean imf.slopes[0]": lambda p: Plan(p.population, ["imf.slope[0]"]),
    "did you mean metallicity": lambda p: Plan(p.population, ["metalicity"]),
    "did you mean thermonuclear": lambda p: Plan(p.population, ["thermonuclaer.number"]),
    "is named twice": lambda p: Plan(p.population, ["metallicity", "metallicity"]),
    "there are only 2": lambda p: Plan(p.population, ["imf.slopes[2]"]),
    "must be a list of names": lambda p: Plan(p.population, "metallicity"),
    "limits and breaks of the mass function are out of order": lambda p: Plan(
        p.population, ["imf.breaks[0]"]
    )([130.0]),
    "limits of the delay are out of order": lambda p: Plan(p.population, ["thermonuclear.delay.limits[0]"])(
        [2e10]
    ),
    "number of events is negative": lambda p: Plan(p.population, ["thermonuclear.number"])([-1e-3]),
    "metallicity 0.03 lies outside the set's": lambda p: Plan(
        population(edges=Edges(metallicity="refuse")), ["metallicity"]
    )([0.03]),
    "convention 'gross' isn't known": lambda p: Plan(p.population, convention="gross"),
    "stars that implode": lambda p: Plan(population(sources=IMPLODING), ["core-collapse.events_from"]),
}


@pytest.mark.parametrize("message", REFUSED)
def test_what_cannot_be_is_refused_in_one_line(message):
    plan = Plan(population(), ["metallicity", "imf.slopes[1]"], AGES)
    with pytest.raises(InputError) as caught:
        REFUSED[message](plan)
    assert message in str(caught.value)
    assert "\n" not in str(caught.value)
