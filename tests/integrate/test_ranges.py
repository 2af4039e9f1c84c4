"""Joins, edges, implosions and remnants, at points worked out by hand on small invented sets."""

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from steelyard.integrate import Edges, Join, Population, StellarSource, imf
from steelyard.yields import Slice, YieldSet, birth_composition
from steelyard.yields.curve import blend, slice_curve
from steelyard.yields.errors import InputError

Z = 0.02
MF = imf("salpeter-1955", limits=(0.1, 100))


def invented(id, kind, models, species=("H1", "He4", "O16"), initial=(0.7, 0.28, 0.01), metallicity=Z):
    """An invented set from {mass: (ejected, wind, total of each species)}."""
    mass = np.array(list(models), dtype=float)
    ejected, wind, total = (np.array([m[k] for m in models.values()], dtype=float) for k in range(3))
    x = np.array(initial, dtype=float)
    one = Slice(metallicity, mass, ejected, wind, total, total - np.outer(ejected, x), x)
    return YieldSet(id, kind, species, (one,))


LOW = invented("low", "agb", {2: (1.4, 0, (1.0, 0.36, 0.014)), 6: (5.0, 0, (3.3, 1.5, 0.06))})
HIGH = invented(
    "high",
    "core-collapse",
    {12: (10.5, 0.5, (5.0, 4.0, 1.0)), 20: (18.0, 3.0, (8.0, 6.0, 2.5)), 40: (36.0, 10.0, (14.0, 11.0, 8.0))},
)


def population(policy="bridge", **options):
    high = options.pop("high", {})
    declared = {
        "metallicity": Z,
        "sources": [StellarSource("agb", [LOW]), StellarSource("core-collapse", [HIGH], **high)],
        "imf": MF,
        "joins": [Join(("agb", "core-collapse"), policy)],
        "species": "nuclides",
    }
    return Population(**(declared | options))


def at(stars, mass, column="O16"):
    """The value that a star of some mass gives, read from the spans themselves."""
    ready = stars.prepared
    names = {s: i for i, s in enumerate(ready.columns.species)}
    names |= {f"net {s}": len(ready.columns.species) + i for i, s in enumerate(ready.columns.species)}
    names |= {n: ready.columns.account(n) for n in ("ejected", "remnant", "wind", "rest_total", "rest_net")}
    (span,) = [s for s in ready.spans if s.lo < mass < s.hi]
    return float(span.curve.resample(np.array([float(mass)])).values[0, names[column]])


BIRTH_O16 = float(birth_composition(["O16"], Z, "asplund-2009")[0])


def expected(policy, mass):
    """Oxygen, ejected mass and remnant at a mass between 6 (0.06; 5; 1) and 12 Msun (1.0; 10.5; 1.5)."""
    x = (mass - 6) / 6
    return {
        "bridge": ((1 - x) * 0.06 + x * 1.0, (1 - x) * 5.0 + x * 10.5, (1 - x) * 1.0 + x * 1.5),
        "reach-up": (0.06 * mass / 6, 5.0 * mass / 6, 1.0 * mass / 6),
        "reach-down": (1.0 * mass / 12, 10.5 * mass / 12, 1.5 * mass / 12),
        "return-only": (BIRTH_O16 * (mass - 1 - 0.5 * x), mass - 1 - 0.5 * x, 1 + 0.5 * x),
        "swallow": (0.0, 0.0, mass),
    }[policy]


@pytest.mark.parametrize("mass", [6.001, 7.5, 9.0, 11.0, 11.999])
@pytest.mark.parametrize("policy", ["bridge", "reach-up", "reach-down", "return-only", "swallow"])
def test_joins_by_hand(policy, mass):
    stars = population(policy)
    oxygen, ejected, remnant = expected(policy, mass)
    assert at(stars, mass) == pytest.approx(oxygen, rel=1e-12)
    assert at(stars, mass, "ejected") == pytest.approx(ejected, rel=1e-12)
    assert at(stars, mass, "remnant") == pytest.approx(remnant, rel=1e-12)
    if policy in ("return-only", "swallow"):
        assert at(stars, mass, "net O16") == 0.0


@pytest.mark.parametrize("policy", ["bridge", "reach-up", "reach-down", "return-only", "swallow"])
def test_a_join_is_shared_out_at_the_first_mass_that_collapses(policy):
    out = population(policy).weigh("20 Gyr")
    joined = [r for r in out.ranges if r["served_by"] == policy and r["from"] >= 6 and r["to"] <= 12]
    assert [(r["from"], r["to"], r["source"]) for r in joined] == [(6, 8, "agb"), (8, 12, "core-collapse")]
    assert float(out.events["core-collapse"][0]) == pytest.approx(float(MF.number(8, 100)), rel=1e-13)


def test_events_begin_above_a_source_of_lower_mass():
    """Stars served by agb models don't count as events, even over 8 Msun."""
    high_agb = invented("low", "agb", {2: (1.4, 0, (1, 0.3, 0.01)), 9: (7.8, 0, (5, 2, 0.1))})
    stars = population(
        sources=[StellarSource("agb", [high_agb]), StellarSource("core-collapse", [HIGH])],
    )
    out = stars.weigh("20 Gyr")
    assert float(out.events["core-collapse"][0]) == pytest.approx(float(MF.number(9, 100)), rel=1e-13)


def test_events_reach_below_the_models_where_nothing_else_is():
    alone = population(sources=[StellarSource("core-collapse", [HIGH], events_from="9 Msun")], joins=[])
    out = alone.weigh("20 Gyr")
    assert float(out.events["core-collapse"][0]) == pytest.approx(float(MF.number(9, 100)), rel=1e-13)
    assert float(out.remnants_by_kind["white dwarf"][0]) == pytest.approx(
        float(MF.mass(0.1, 9) - out.living[0]), rel=1e-12
    )


# --- beyond the sources -----------------------------------------------------------------------------------


def test_edges_swallow():
    stars = population()
    assert [at(stars, m, "remnant") for m in (1.0, 60.0)] == [1.0, 60.0]
    assert [at(stars, m, "ejected") for m in (1.0, 60.0)] == [0.0, 0.0]


def test_edges_reach():
    stars = population(edges=Edges("reach-down", "reach-up"))
    assert at(stars, 1.0) == pytest.approx(0.014 / 2)
    assert at(stars, 1.0, "ejected") == pytest.approx(1.4 / 2)
    assert at(stars, 60.0) == pytest.approx(8.0 * 1.5)
    assert at(stars, 60.0, "remnant") == pytest.approx(4.0 * 1.5)


def test_edges_return_only():
    """The end model's remnant per initial mass stays: 0.6 of 2 Msun below, 4 of 40 Msun above."""
    stars = population(edges=Edges("return-only", "return-only"))
    assert at(stars, 1.0, "remnant") == pytest.approx(0.3)
    assert at(stars, 1.0, "ejected") == pytest.approx(0.7)
    assert at(stars, 1.0) == pytest.approx(0.7 * BIRTH_O16)
    assert at(stars, 60.0, "remnant") == pytest.approx(6.0)
    assert at(stars, 60.0) == pytest.approx(54 * BIRTH_O16)
    assert at(stars, 60.0, "net O16") == 0.0


def test_limits_of_a_source_cut_its_models():
    stars = population(
        sources=[
            StellarSource("agb", [LOW], limits=(3, 5)),
            StellarSource("core-collapse", [HIGH], limits=("15 Msun", "30 Msun")),
        ]
    )
    ranges = [(r["from"], r["to"], r["served_by"]) for r in stars.weigh().ranges]
    assert ranges == [
        (0.1, 3, "swallow"),
        (3, 5, "low"),
        (5, 8, "bridge"),
        (8, 15, "bridge"),
        (15, 30, "high"),
        (30, 100, "swallow"),
    ]
    assert at(stars, 10.0) == pytest.approx(0.5 * (0.06 - 0.046 / 4 + 1.0 + 1.5 * 3 / 8), rel=1e-12)


@pytest.mark.parametrize("limits", [(0.1, 1.5), (7, 10), (13, 19), (50, 90), (3, 100), (6, 12), (2, 40)])
def test_a_mass_function_of_any_limits_is_tiled(limits):
    stars = population(imf=imf("salpeter-1955", limits=limits))
    cover = stars.prepared.spans
    assert (cover[0].lo, cover[-1].hi) == limits
    assert all(a.hi == b.lo for a, b in itertools.pairwise(cover))
    out = stars.weigh([1e7, 1e9])
    np.testing.assert_allclose(out.living + out.remnants + out.returned, 1.0, atol=1e-13)


# --- sets in series ------------------------------------------------------------------------------------


UPPER = invented(
    "upper", "agb", {5: (4.3, 0, (3, 1, 0.5)), 8: (6.9, 0, (4, 2, 0.9)), 10: (8.7, 0, (5, 3, 1.2))}
)


def test_a_set_in_series_serves_what_those_before_it_dont():
    stars = population(sources=[StellarSource("agb", [LOW, UPPER])], joins=[])
    assert [r["served_by"] for r in stars.weigh().ranges] == ["swallow", "low", "upper", "swallow"]
    assert at(stars, 5.5) == pytest.approx(0.014 + 0.046 * 3.5 / 4, rel=1e-12)
    assert at(stars, 6.5) == pytest.approx(0.5 + 0.4 * 0.5, rel=1e-12)
    turned = population(sources=[StellarSource("agb", [UPPER, LOW])], joins=[])
    assert at(turned, 5.5) == pytest.approx(0.5 + 0.4 / 6, rel=1e-12)


@pytest.mark.parametrize("policy", ["bridge", "swallow", "reach-down"])
def test_the_gap_between_sets_in_series_takes_a_join_by_their_ids(policy):
    far = invented("far", "agb", {8: (6.9, 0, (4, 2, 0.9)), 10: (8.7, 0, (5, 3, 1.2))})
    stars = population(sources=[StellarSource("agb", [LOW, far])], joins=[Join(("low", "far"), policy)])
    value = {"bridge": 0.5 * (0.06 + 0.9), "swallow": 0.0, "reach-down": 0.9 * 7 / 8}[policy]
    assert at(stars, 7.0) == pytest.approx(value, rel=1e-12)


def test_a_set_that_serves_nothing_is_told():
    inner = invented("inner", "agb", {3: (2.3, 0, (1.6, 0.6, 0.02)), 5: (4.1, 0, (3, 1, 0.03))})
    notes = population(sources=[StellarSource("agb", [LOW, inner])], joins=[]).weigh().notes
    assert any("inner serves no mass" in n for n in notes)


# --- implosions ------------------------------------------------------------------------------------------


def test_stars_that_implode_eject_their_wind_alone():
    """At 16 Msun between models of 12 (wind 0.5) and 20 Msun (wind 3): 1.75 Msun at the birth composition."""
    stars = population(high={"implode": [(14, 18)]})
    assert at(stars, 16.0, "ejected") == pytest.approx(1.75)
    assert at(stars, 16.0, "remnant") == pytest.approx(16 - 1.75)
    assert at(stars, 16.0) == pytest.approx(1.75 * 0.01)
    assert at(stars, 16.0, "net O16") == pytest.approx(0.0, abs=1e-15)
    assert at(stars, 13.9) == pytest.approx(1 + 1.5 * 1.9 / 8)
    out = stars.weigh("20 Gyr")
    assert float(out.events["imploded"][0]) == pytest.approx(float(MF.number(14, 18)), rel=1e-13)
    assert float(out.events["core-collapse"][0]) == pytest.approx(float(MF.number(8, 100)), rel=1e-13)
    assert next(r for r in out.ranges if r["served_by"] == "high, imploding")["from"] == 14


def test_a_window_that_reaches_into_a_join_swallows_there():
    stars = population(high={"implode": [(9, 14)]})
    assert at(stars, 10.0, "remnant") == 10.0
    assert at(stars, 8.5, "ejected") > 0
    assert at(stars, 13.0, "ejected") == pytest.approx(0.5 + 2.5 / 8)


def test_a_window_without_collapse_is_told():
    notes = population(high={"implode": [(3, 5)]}).weigh().notes
    assert any("no star that collapses is born at 3-5 Msun" in n for n in notes)


def test_imploding_without_listed_winds_is_told():
    still = invented("still", "core-collapse", {12: (10.5, 0, (5, 4, 1)), 40: (36, 0, (14, 11, 8))})
    stars = population(sources=[StellarSource("core-collapse", [still], implode=[(20, 30)])], joins=[])
    assert any("eject nothing" in n for n in stars.weigh().notes)
    assert at(stars, 25.0, "ejected") == 0.0


def test_imploding_winds_belong_to_no_species_where_winds_go_to_rest():
    stars = population(high={"implode": [(14, 18)], "winds": "rest"})
    assert at(stars, 16.0, "ejected") == pytest.approx(1.75)
    assert at(stars, 16.0) == pytest.approx(0.0, abs=1e-15)


def test_imploding_stars_eject_their_wind_alone_in_cubics_too():
    """No net yield, and nothing but the wind, between models as at them."""
    stars = population(high={"implode": [(14, 18)]}, interpolation="cubic")
    for mass in (14.5, 16.0, 17.9):
        assert at(stars, mass, "net O16") == pytest.approx(0.0, abs=1e-14)
        assert at(stars, mass, "ejected") == pytest.approx(at(stars, mass, "wind"), rel=1e-12)
        assert at(stars, mass) == pytest.approx(0.01 * at(stars, mass, "ejected"), rel=1e-12)


@pytest.mark.parametrize("winds", ["birth", "rest"])
def test_cubics_through_straight_figures_are_straight(winds):
    """Models that lie on lines in mass give the same by cubics as by lines."""
    models = {m: (0.9 * m - 0.5, 0.3 * m - 3, (0.4 * m, 0.3 * m, 0.05 * m - 0.2)) for m in (12, 15, 22, 40)}
    # totals hold the wind as well
    straight = invented("straight", "core-collapse", models)
    a, b = (
        population(
            sources=[StellarSource("core-collapse", [straight], winds=winds)], joins=[], interpolation=how
        ).weigh("20 Gyr")
        for how in ("linear", "cubic")
    )
    np.testing.assert_allclose(b.cumulative, a.cumulative, rtol=1e-12, atol=1e-16)


def test_winds_to_rest_or_at_birth_composition():
    """At 20 Msun 3 Msun of wind: 0.03 Msun of its oxygen is listed or not; what is ejected stays."""
    mass = 20.0 - 1e-12
    birth, rest = population(), population(high={"winds": "rest"})
    assert at(birth, mass) == pytest.approx(2.5)
    assert at(rest, mass) == pytest.approx(2.47)
    assert at(birth, mass, "ejected") == at(rest, mass, "ejected")
    assert at(rest, mass, "rest_total") == pytest.approx(18 - 16.5 + 3 * 0.99)


# --- remnants by kind ------------------------------------------------------------------------------------


def test_remnants_turn_into_black_holes_where_the_limit_is_crossed():
    """Remnants 1.5 at 12, 2.0 at 20, 4.0 at 40 Msun: 2.5 Msun is reached at 25 Msun."""
    out = population().weigh("20 Gyr")
    holes = float(MF.mass(40, 100))
    line = 2.0 - 0.1 * 20.0
    holes += line * float(MF.number(25, 40)) + 0.1 * float(MF.mass(25, 40))
    assert float(out.remnants_by_kind["black hole"][0]) == pytest.approx(holes, rel=1e-12)
    stars = line * float(MF.number(20, 25)) + 0.1 * float(MF.mass(20, 25))
    stars += (1.5 - 12 / 16) * float(MF.number(12, 20)) + float(MF.mass(12, 20)) / 16
    stars += (1.0 - 0.5) * float(MF.number(8, 12)) + float(MF.mass(8, 12)) / 12
    assert float(out.remnants_by_kind["neutron star"][0]) == pytest.approx(stars, rel=1e-12)


@given(st.floats(0.5, 6.0), st.sampled_from(["linear", "cubic"]))
def test_the_limit_moves_mass_between_kinds_only(limit, how):
    a = population(high={"neutron_star_limit": limit}, interpolation=how).weigh("1 Gyr")
    b = population(interpolation=how).weigh("1 Gyr")
    assert float(a.remnants[0]) == pytest.approx(float(b.remnants[0]), rel=1e-13)
    np.testing.assert_allclose(a.cumulative, b.cumulative, rtol=1e-12, atol=1e-16)


def test_the_crossing_of_a_cubic_is_found():
    """With cubics the remnant over the limit is that of scipy's interpolant, cut at its root."""
    from scipy.interpolate import PchipInterpolator

    curve = PchipInterpolator([12, 20, 40], [1.5, 2.0, 4.0])
    (root,) = curve.solve(2.5, extrapolate=False)
    out = population(interpolation="cubic").weigh("20 Gyr")
    x, w = np.polynomial.legendre.leggauss(40)
    m = root + (40 - root) * (x + 1) / 2
    holes = float(w @ (MF(m) * curve(m))) * (40 - root) / 2 + float(MF.mass(40, 100))
    assert float(out.remnants_by_kind["black hole"][0]) == pytest.approx(holes, rel=1e-12)


# --- what only one side follows ---------------------------------------------------------------------------


def lent(policy):
    """The core-collapse set follows Fe56, the agb set doesn't."""
    iron = invented(
        "iron",
        "core-collapse",
        {12: (10.5, 0, (5.0, 4.0, 1.0, 0.1)), 40: (36, 0, (14, 11, 8.0, 0.2))},
        ("H1", "He4", "O16", "Fe56"),
        (0.7, 0.28, 0.01, 0.001),
    )
    return population(policy, sources=[StellarSource("agb", [LOW]), StellarSource("core-collapse", [iron])])


def test_an_end_is_lent_birth_composition_for_what_only_the_other_follows():
    """At 6 Msun 5 Msun of ejecta hold 5 X(Fe56) at birth; half-way to 12 Msun the mean with 0.1 Msun."""
    stars = lent("bridge")
    x = float(birth_composition(["Fe56"], Z, "asplund-2009")[0])
    assert at(stars, 9.0, "Fe56") == pytest.approx(0.5 * (5 * x + 0.1), rel=1e-12)
    rest = 5 - 4.86 - 5 * x, 10.5 - 10.1
    assert at(stars, 9.0, "rest_total") == pytest.approx(0.5 * sum(rest), rel=1e-12)
    assert any("low doesn't follow Fe;" in n for n in stars.weigh().notes)
    assert stars.weigh().missing == {"agb": ["Fe56"], "core-collapse": []}


@pytest.mark.parametrize("policy", ["swallow", "return-only"])
def test_joins_that_use_no_end_models_yields_claim_nothing_of_them(policy):
    assert not any("doesn't follow" in n for n in lent(policy).weigh().notes)


# --- refusals --------------------------------------------------------------------------------------------


def test_slices_without_a_mass_in_common():
    a = invented("a", "agb", {2: (1.4, 0, (1, 0.3, 0.01)), 3: (2.3, 0, (1, 0.3, 0.01))}).slices[0]
    b = invented("a", "agb", {5: (4, 0, (1, 0.3, 0.01)), 6: (5, 0, (1, 0.3, 0.01))}, metallicity=0.04).slices[
        0
    ]
    apart = YieldSet("apart", "agb", LOW.species, (a, b))
    stars = Population(0.03, [StellarSource("agb", [apart])], imf=MF)
    with pytest.raises(InputError, match=r"apart: .* no mass in common \(2-3, 5-6 Msun\) at Z = 0.02, 0.04"):
        stars.weigh()
    with pytest.raises(InputError, match="no mass in common"):
        blend([slice_curve(s, np.eye(3)) for s in (a, b)], [0.5, 0.5])
    assert Population(0.02, [StellarSource("agb", [apart])], imf=MF).weigh().returned[-1] > 0


@pytest.mark.parametrize(
    "options, says",
    [
        ({"joins": []}, "gap without a join: 6-12 Msun between agb and core-collapse; add"),
        ({"joins": [Join(("core-collapse", "agb"))]}, "gap without a join"),
        (
            {"joins": [Join(("agb", "core-collapse")), Join(("agb", "thermonuclear"))]},
            "aren't neighbours in this order; neighbours are: agb and core-collapse",
        ),
        (
            {"sources": [StellarSource("agb", [UPPER]), StellarSource("core-collapse", [HIGH, LOW])]},
            "overlap: ",
        ),
        (
            {"sources": [StellarSource("agb", [LOW], limits=(7, 8))], "joins": []},
            r"source agb: no set has models inside its limits \(they reach 2-6 Msun\)",
        ),
    ],
)
def test_sources_that_dont_fit_together(options, says):
    with pytest.raises(InputError, match=says) as caught:
        population(**options).weigh()
    assert "\n" not in str(caught.value)
