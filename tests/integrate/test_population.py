"""Budgets of whole populations (conservation of mass), rates against cumulative yields, refusals."""

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from steelyard.integrate import DelayedSource, Edges, Join, Population, StellarSource, from_function, imf
from steelyard.integrate.sources import EDGE_ABOVE, EDGE_BELOW, JOIN_POLICIES
from steelyard.yields.errors import InputError

LATE = DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017")
HUBBLE = 13.8e9


def default(**options):
    declared = {
        "metallicity": 0.014,
        "sources": [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"]),
            LATE,
        ],
        "joins": [Join(("agb", "core-collapse"))],
        "species": "nuclides",
    }
    return Population(**(declared | options))


# --- the budget, whatever is declared ------------------------------------------------------------------

slope = st.one_of(st.sampled_from([1.0, 2.0, 3.0]), st.floats(0.2, 4.0))
limits = st.tuples(st.floats(0.01, 0.9), st.floats(50, 300))


@st.composite
def mass_functions(draw):
    form = draw(
        st.sampled_from(
            [
                "salpeter-1955",
                "kroupa-2001",
                "kroupa-1993",
                "chabrier-2003",
                "chabrier-2003-system",
                "miller-scalo-1979",
                "power-law",
                "lognormal",
            ]
        )
    )
    options = {"limits": draw(limits)}
    if form == "power-law":
        options |= {
            "slopes": [draw(slope), draw(slope), draw(slope)],
            "breaks": [draw(st.floats(1, 5)), 20.0],
        }
    if form == "lognormal":
        options |= {"centre": draw(st.floats(0.05, 5.0)), "sigma": draw(st.floats(0.3, 1.0))}
    return imf(form, **options)


AGB = st.sampled_from([["karakas-2010"], ["karakas-2010", "doherty-2014"], ["marigo-2001"], ["doherty-2014"]])
MASSIVE = st.sampled_from(
    [
        ["kobayashi-2006"],
        ["limongi-chieffi-2018-R-v150"],
        ["limongi-chieffi-2018-M-v000"],
        ["kobayashi-2006", "limongi-chieffi-2018-M-v000"],
        [{"limongi-chieffi-2018-R-v000": 0.7, "limongi-chieffi-2018-M-v300": 0.3}],
        [{"kobayashi-2006": 0.5, "limongi-chieffi-2018-M-v000": 0.5}],
    ]
)
EVENTS = st.sampled_from([["nomoto-1997-w7"], [{"iwamoto-1999-W7": 0.25, "iwamoto-1999-CDD2": 0.75}]])


@st.composite
def populations(draw):
    low, high = draw(AGB), draw(MASSIVE)
    implode = draw(st.sampled_from([(), [(15.0, 17.5)], [(9.0, 14.0), (25.0, 70.0)]]))
    sources = [
        StellarSource("agb", low),
        StellarSource(
            "core-collapse",
            high,
            implode=implode,
            events_from=draw(st.floats(7, 12)),
            winds=draw(st.sampled_from(["birth", "rest"])),
        ),
    ]
    sources = draw(st.sampled_from([sources, sources[::-1], sources[1:], sources[:1]]))
    joins = (
        [Join(("agb", "core-collapse"), draw(st.sampled_from(JOIN_POLICIES)))] if len(sources) == 2 else []
    )
    if draw(st.booleans()):
        delay = draw(
            st.sampled_from(
                [
                    "maoz-graur-2017",
                    {"form": "exponential", "timescale": "3 Gyr", "limits": ["0.1 Gyr", "12 Gyr"]},
                ]
            )
        )
        sources = [*sources, DelayedSource("thermonuclear", draw(EVENTS), 1e-3, delay)]
    return Population(
        draw(st.one_of(st.sampled_from([0.0, 1e-4, 0.02]), st.floats(0, 0.05))),
        sources,
        imf=draw(mass_functions()),
        lifetimes=draw(st.sampled_from(["portinari-1998", "raiteri-1996", "padovani-matteucci-1993"])),
        joins=joins,
        edges=Edges(draw(st.sampled_from(EDGE_BELOW)), draw(st.sampled_from(EDGE_ABOVE))),
        interpolation=draw(st.sampled_from(["linear", "cubic"])),
    )


ages = st.lists(st.one_of(st.sampled_from([0.0, 1e13]), st.floats(1e5, 5e10)), min_size=1, max_size=5)


@settings(max_examples=200, suppress_health_check=[HealthCheck.too_slow])
@given(populations(), ages)
def test_every_solar_mass_is_somewhere(stars, at):
    out = stars.weigh(at)
    np.testing.assert_allclose(out.living + out.remnants + out.returned, 1.0, rtol=0, atol=1e-12)
    c = out.columns
    rest, rest_net, ejected, wind = (
        out.cumulative[..., c.account(n)] for n in ("rest_total", "rest_net", "ejected", "wind")
    )
    np.testing.assert_allclose(out.total.sum(axis=-1) + rest, ejected, rtol=0, atol=1e-12)
    np.testing.assert_allclose(out.net.sum(axis=-1) + rest_net, 0.0, rtol=0, atol=1e-12)
    np.testing.assert_allclose(
        out.total_rate.sum(axis=-1) + out.rates[..., c.account("rest_total")],
        out.rates[..., c.account("ejected")],
        rtol=1e-10,
        atol=1e-24,
    )
    assert np.all(wind >= -1e-15)
    assert np.all(ejected >= -1e-15)
    order = np.argsort(at)
    assert np.all(np.diff(out.living[order]) <= 1e-14)
    assert np.all(np.diff(out.returned[order]) >= -1e-14)
    for number in out.events.values():
        assert np.all(np.diff(number[order]) >= -1e-16)
    young = np.array(at) == 0.0
    assert np.all(out.living[young] == pytest.approx(1.0, abs=1e-13))
    assert not out.cumulative[:, young].any()
    assert not out.rates[:, young].any()


def test_isotopes_sum_to_their_element():
    nuclides, elements = default(), default(species="elements")
    a, b = nuclides.weigh(), elements.weigh()
    for symbol in b.species:
        for convention in ("total", "net"):
            for rate in (False, True):
                for source in (*a.sources, None):
                    np.testing.assert_allclose(
                        a.get(symbol, source, convention, rate),
                        b.get(symbol, source, convention, rate),
                        rtol=1e-10,
                        atol=1e-16,
                    )


@pytest.mark.parametrize("species", [["O16"], ["O"], ["O", "O16"], ["Fe", "Fe56", "H1", "He4"]])
def test_listed_species_and_rest_make_up_what_is_ejected(species):
    """Rest is what belongs to none of the listed species; a nuclide beside its element counts once."""
    options = {
        "joins": [Join(("agb", "core-collapse"), "return-only")],
        "edges": Edges("return-only", "return-only"),
    }
    out = default(species=species, **options).weigh(HUBBLE)
    rest = [out.cumulative[..., out.columns.account(name)] for name in ("rest_total", "rest_net")]
    once = out.columns.apart
    np.testing.assert_allclose(out.total[..., once].sum(axis=-1) + rest[0], out.ejected, rtol=1e-12)
    np.testing.assert_allclose(out.net[..., once].sum(axis=-1), -rest[1], rtol=1e-12, atol=1e-16)


def test_sets_of_elements_beside_sets_of_nuclides_count_no_mass_twice():
    """A nuclide beside its element counts once, as part of it."""
    out = Population(
        0.01,
        [
            StellarSource("agb", ["karakas-2010"]),
            StellarSource("core-collapse", ["limongi-chieffi-2018-M-v000"]),
        ],
        joins=[Join(("agb", "core-collapse"), "return-only")],
        edges=Edges("return-only", "return-only"),
        species="nuclides",
    ).weigh(HUBBLE)
    once = out.columns.apart
    assert not once.all()
    rest = out.cumulative[0, :, out.columns.account("rest_total")]
    np.testing.assert_allclose(out.total[0][:, once].sum(axis=-1) + rest, out.ejected[0], rtol=1e-10)


def test_ages_in_any_order_give_the_same_figures():
    stars = default()
    at = np.array([3e9, 0.0, 1e7, 1e15, 5e6, 1e7])
    mixed, single = stars.weigh(at), [stars.weigh(t) for t in at]
    np.testing.assert_allclose(
        mixed.cumulative, np.concatenate([s.cumulative for s in single], axis=1), rtol=1e-12, atol=1e-18
    )
    np.testing.assert_allclose(mixed.rates, np.concatenate([s.rates for s in single], axis=1), rtol=1e-13)
    np.testing.assert_allclose(mixed.living, [s.living[0] for s in single], rtol=1e-14, atol=1e-15)
    assert mixed.ages.tolist() == at.tolist()
    assert mixed.living[3] == 0.0
    assert not mixed.rates[:, 3].any()


def test_one_source_weighs_the_same_in_company():
    """Sources don't touch each other's own models: the agb part alone equals that beside the others."""
    both = default(joins=[Join(("agb", "core-collapse"), "swallow")], edges=Edges("swallow", "swallow"))
    alone = default(sources=[StellarSource("agb", ["karakas-2010", "doherty-2014"])], joins=[])
    a, b = both.weigh([1e8, HUBBLE]), alone.weigh([1e8, HUBBLE])
    for symbol in b.species:
        np.testing.assert_allclose(a.get(symbol, "agb"), b.get(symbol, "agb"), rtol=1e-12, atol=1e-20)


def test_metallicity_interpolates_between_slices():
    """Convex in log10 Z: at the logarithmic middle of two slices the mean of both, lifetimes apart."""
    z = (0.004 * 0.02) ** 0.5
    low, high, middle = (
        Population(x, [StellarSource("core-collapse", ["kobayashi-2006"], winds="rest")]).weigh(1e11)
        for x in (0.004, 0.02, z)
    )
    for symbol in ("O", "Fe", "Zn"):
        mean = 0.5 * (low.get(symbol) + high.get(symbol))
        np.testing.assert_allclose(middle.get(symbol), mean, rtol=1e-12)


def test_mixture_weighs_its_sets_by_their_shares():
    r, m = "limongi-chieffi-2018-R-v000", "limongi-chieffi-2018-M-v000"
    z = 0.01345002048429
    a, b, both = (
        Population(z, [StellarSource("core-collapse", [s])], edges=Edges()).weigh(1e11)
        for s in (r, m, {r: 0.25, m: 0.75})
    )
    # M reaches 120 Msun as R does at this metallicity, so that the ranges are the same
    assert a.ranges[-1]["from"] == b.ranges[-1]["from"]
    np.testing.assert_allclose(both.total, 0.25 * a.total + 0.75 * b.total, rtol=1e-11, atol=1e-18)


def test_shares_that_sum_to_one_within_the_digits_written_close_the_budget():
    shares = {"limongi-chieffi-2018-R-v000": 0.3333333333, "limongi-chieffi-2018-M-v000": 0.6666666663}
    out = Population(0.01, [StellarSource("core-collapse", [shares])]).weigh(HUBBLE)
    assert float((out.living + out.remnants + out.returned)[0]) == pytest.approx(1.0, abs=1e-12)


# --- rates ----------------------------------------------------------------------------------------------


def kinks(stars):
    """Ages at which some rate jumps: deaths at edges of segments, breaks of lifetimes, delay limits."""
    ready = stars.prepared
    masses = np.concatenate(
        [ready.segments.edge, stars.imf.breaks, [b for b in ready.curve.breaks if 0.05 < b < 200]]
    )
    masses = masses[(masses >= stars.imf.limits[0]) & (masses <= stars.imf.limits[1])]
    at = np.concatenate([ready.curve.lifetime(masses), [4e7, HUBBLE]])
    return np.unique(at)


@pytest.mark.parametrize("interpolation", ["linear", "cubic"])
@pytest.mark.parametrize("lifetimes", ["portinari-1998", "raiteri-1996", "sets"])
def test_rates_are_the_derivatives_of_what_has_come(interpolation, lifetimes):
    massive = "limongi-chieffi-2018-M-v150" if lifetimes == "sets" else "kobayashi-2006"
    stars = default(
        sources=[
            StellarSource("agb", ["karakas-2010"]),
            StellarSource("core-collapse", [massive], implode=[(16, 19)]),
            LATE,
        ],
        species=["O", "Fe", "N", "C"],
        interpolation=interpolation,
        lifetimes=lifetimes,
    )
    at = np.geomspace(4.1e6, 1.3e10, 60)
    step = 1e-4
    sharp = np.log(kinks(stars))
    at = at[np.abs(np.log(at)[:, None] - sharp).min(axis=1) > 4 * step]
    assert len(at) > 40
    points = [stars.weigh(at * (1 + k * step)) for k in (-2, -1, 1, 2)]
    out = stars.weigh(at)

    def derivative(pick):
        far, near, right, further = (pick(p) for p in points)
        return (8 * (right - near) - (further - far)) / (12 * step * at)

    scale = np.abs(out.rates).max(axis=1, keepdims=True) * (at.min() / at)[:, None]
    miss = np.abs(derivative(lambda p: p.cumulative.transpose(0, 2, 1)).transpose(0, 2, 1) - out.rates)
    assert np.all(miss <= 1e-5 * np.abs(out.rates) + 1e-7 * scale + 1e-24)
    for kind in out.events:
        np.testing.assert_allclose(
            derivative(lambda p, kind=kind: p.events[kind]), out.event_rates[kind], rtol=1e-5, atol=1e-20
        )


def test_rates_add_up_to_what_has_come():
    """Gauss-Legendre in ln t between the kinks against the cumulative yields at 13.8 Gyr."""
    stars = default(species="elements")
    x, w = np.polynomial.legendre.leggauss(12)
    edges = np.log(kinks(stars))
    edges = np.concatenate([edges[edges < np.log(HUBBLE)], [np.log(HUBBLE)]])
    half, middle = 0.5 * np.diff(edges), 0.5 * (edges[1:] + edges[:-1])
    t = np.exp(middle[:, None] + half[:, None] * x)
    weight = (half[:, None] * w * t).ravel()
    inside = stars.weigh(t.ravel())
    whole = stars.weigh(HUBBLE)
    summed = np.einsum("t,stq->sq", weight, inside.rates)
    scale = np.einsum("t,stq->sq", weight, np.abs(inside.rates))
    assert np.all(np.abs(summed - whole.cumulative[:, 0]) <= 1e-9 * scale + 1e-20)
    for kind, number in whole.events.items():
        assert weight @ inside.event_rates[kind] == pytest.approx(float(number[0]), rel=1e-9)


# --- mass functions and lifetimes of the user's own ------------------------------------------------------


def test_a_smooth_function_of_mass_closes_the_budget_and_equals_the_closed_form():
    own = from_function(lambda m: m**-2.35, limits=(0.1, 100))
    assert own.error < 1e-13
    a, b = (default(imf=f).weigh() for f in (own, imf("salpeter-1955", limits=(0.1, 100))))
    np.testing.assert_allclose(a.living + a.remnants + a.returned, 1.0, atol=1e-12)
    np.testing.assert_allclose(a.cumulative, b.cumulative, rtol=1e-10, atol=1e-17)
    np.testing.assert_allclose(a.rates, b.rates, rtol=1e-10, atol=1e-28)


def test_the_error_of_a_function_with_an_untold_kink_covers_the_error_of_yields():
    def broken(m):
        return np.where(m < 4.4, m**-1.3, 4.4 * m**-2.3)

    told, untold = (from_function(broken, limits=(0.08, 120), breaks=b) for b in ([4.4], []))
    assert untold.error > 1e-8
    a, b = (
        default(imf=f, sources=[StellarSource("agb", ["karakas-2010"])], joins=[]).weigh(HUBBLE)
        for f in (told, untold)
    )
    assert abs(float(b.returned[0] / a.returned[0]) - 1) < 30 * untold.error


def test_ages_and_metallicity_take_units():
    pint = pytest.importorskip("pint")
    units = pint.UnitRegistry()
    stars = default(metallicity="1.4 percent")
    assert stars.metallicity == pytest.approx(0.014)
    a = stars.weigh(["10 Myr", "1 Gyr"])
    b = stars.weigh(units.Quantity([0.01, 1.0], "gigayear"))
    np.testing.assert_allclose(a.cumulative, b.cumulative, rtol=1e-12)


# --- refusals --------------------------------------------------------------------------------------------

AGB_ONLY = [StellarSource("agb", ["karakas-2010"])]


@pytest.mark.parametrize(
    "make, says",
    [
        (lambda: Population(-0.1, AGB_ONLY), "isn't a mass fraction"),
        (lambda: Population("10 Myr", AGB_ONLY), "wrong dimension"),
        (lambda: Population(float("nan"), AGB_ONLY), "isn't finite"),
        (lambda: Population(0.02, []), "no source"),
        (lambda: Population(0.02, [LATE]).weigh(), "no source of stars"),
        (lambda: Population(0.02, AGB_ONLY * 2), "named twice"),
        (lambda: Population(0.02, AGB_ONLY).weigh(-1.0), "age is negative"),
        (lambda: Population(0.02, AGB_ONLY).weigh([]), "at least one age"),
        (lambda: Population(0.02, AGB_ONLY).weigh("10 Msun"), "wrong dimension"),
        (lambda: Population(0.02, AGB_ONLY, species=["Fe", "Og"]).weigh(), "follows Og"),
        (lambda: Population(0.02, AGB_ONLY, species=["Xx99"]).weigh(), "Xx99"),
        (lambda: Population(0.02, AGB_ONLY, species="isotopes").weigh(), "isn't a choice"),
        (lambda: Population(0.02, AGB_ONLY, interpolation="quartic"), "linear or cubic"),
        (lambda: Population(0.02, AGB_ONLY, solar="asplund-2010"), "did you mean .*asplund-2009"),
        (lambda: Population(0.02, AGB_ONLY, imf="salpeter"), "did you mean salpeter-1955"),
        (lambda: Population(0.02, AGB_ONLY, lifetimes="portinari").weigh(), "did you mean portinari-1998"),
        (lambda: Population(0.02, AGB_ONLY, lifetimes="sets").weigh(), "gives lifetimes"),
        (lambda: Population(0.03, AGB_ONLY, edges=Edges(metallicity="refuse")).weigh(), "0.0001 to 0.02"),
        (
            lambda: Population(0.02, [StellarSource("agb", ["karakas-2011"])]).weigh(),
            "did you mean karakas-2010",
        ),
        (lambda: Population(0.02, [StellarSource("agb", ["nomoto-1997-w7"])]).weigh(), "single events"),
        (
            lambda: Population(
                0.02, [*AGB_ONLY, DelayedSource("x", ["karakas-2010"], 1, "maoz-graur-2017")]
            ).weigh(),
            "stars over initial mass",
        ),
        (lambda: Population(0.02, AGB_ONLY, imf=lambda m: m**-2.35).weigh(), "from_function"),
    ],
)
def test_refusals_say_how_to_mend(make, says):
    with pytest.raises(InputError, match=says) as caught:
        make()
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("interpolation", ["linear", "cubic"])
def test_living_mass_is_the_mass_function_under_the_turnoff(interpolation):
    """The budget's living mass against the integral of m phi itself, a closed form of its own."""
    stars = default(interpolation=interpolation)
    out = stars.weigh(np.geomspace(1e6, 2e11, 60))
    turnoff = stars.prepared.curve.turnoff(out.ages)
    lo, hi = stars.imf.limits
    np.testing.assert_allclose(
        out.living, stars.imf.mass(lo, np.clip(turnoff, lo, hi)), rtol=1e-13, atol=1e-15
    )
