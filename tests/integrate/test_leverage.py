import csv
import io
import json
from dataclasses import replace

import numpy as np
import pytest
from scipy.interpolate import PchipInterpolator

from steelyard.integrate import DelayedSource, Edges, Join, Plan, Population, StellarSource, imf
from steelyard.integrate.figures.leverage import contribution_by_mass
from steelyard.integrate.leverage import leverage
from steelyard.integrate.leverage.monotone import monotone_slopes
from steelyard.integrate.leverage.nodes import nodes
from steelyard.integrate.leverage.telling import sentence, to_dict, write_csv
from steelyard.yields import load
from steelyard.yields.errors import InputError
from steelyard.yields.grid import Slice, YieldSet

AGES = ["8 Myr", "100 Myr", "13.8 Gyr"]
THERMONUCLEAR = DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017")


def population(**changes):
    given = {
        "metallicity": 0.014,
        "sources": [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"]),
            THERMONUCLEAR,
        ],
        "joins": [Join(("agb", "core-collapse"), "bridge")],
        "species": ["H", "C", "N", "O", "Mg", "Mn", "Fe"],
    }
    return Population(**given | changes)


def mixed_sources(**collapse):
    mixture = {"kobayashi-2006": 0.4, "limongi-chieffi-2018-R-v150": 0.6}
    events = {"nomoto-1997-w7": 0.3, "iwamoto-1999-WDD1": 0.7}
    return [
        StellarSource("agb", ["marigo-2001"]),
        StellarSource("core-collapse", [mixture], **collapse),
        DelayedSource("thermonuclear", [events], 1.3e-3, "maoz-graur-2017"),
    ]


POPULATIONS = {
    "usual": population(),
    "nuclides": population(species="nuclides"),
    "returning": population(
        joins=[Join(("agb", "core-collapse"), "return-only")],
        edges=Edges(above="reach-up", below="return-only"),
    ),
    "reaching": population(
        joins=[Join(("agb", "core-collapse"), "reach-down")],
        edges=Edges(above="return-only", below="reach-down"),
    ),
    "mixtures": population(sources=mixed_sources(implode=[(20, 25)], winds="rest"), metallicity=0.006),
    "failing": population(
        sources=mixed_sources(implode={"masses": [13, 18, 30], "probability": [0.3, 0.7]}), metallicity=0.006
    ),
    "sources upside down": population(
        metallicity=0.002,
        sources=[
            StellarSource("core-collapse", ["limongi-chieffi-2018-M-v150"], implode=[(20, 25)]),
            StellarSource("agb", ["karakas-2010"]),
        ],
    ),
}


@pytest.fixture(scope="module")
def found():
    return leverage(population(), AGES)


@pytest.mark.parametrize("interpolation", ["linear", "cubic"])
@pytest.mark.parametrize("name", POPULATIONS)
def test_contributions_sum_to_the_yield_by_source(name, interpolation):
    stars = replace(POPULATIONS[name], interpolation=interpolation)
    parts, result = nodes(stars).at(AGES), stars.weigh(AGES)
    for convention in ("total", "net"):
        made = parts.contribution.sum(axis=2)
        whole, expected = made + parts.birth(convention), getattr(result, convention)
        # net yields cancel: to the size of what is summed
        size = np.abs(parts.contribution).sum(axis=2) + np.abs(parts.birth(convention))
        assert np.all(np.abs(whole - expected) <= 1e-12 * size)
        steady = (np.abs(expected) > 0.01 * size) & (size > 0)
        np.testing.assert_allclose(whole[steady], expected[steady], rtol=1e-12)


def test_weights_are_those_of_a_plan(found):
    """A plan works them out by another route, from the slices' own weights."""
    plan = Plan(found.population, ages=AGES, by_source=True)
    where = {(m.set, m.metallicity, m.mass): k for k, m in enumerate(plan.models)}
    theirs, ours = plan.weights(), found.nodes.weights(AGES)
    for k, model in enumerate(found.models):
        if model.mass is not None:
            at = where[model.set, model.metallicity, model.mass]
            np.testing.assert_allclose(ours[..., k], theirs[..., at], rtol=1e-12, atol=1e-18)


def test_two_models_by_hand():
    """An invented set of two stars and phi = m^-2 between them, normalised by ln 2: integrals on paper."""
    one = Slice(
        0.01,
        np.array([10.0, 20.0]),
        np.array([8.0, 17.0]),
        np.zeros(2),
        np.array([[1.0], [4.0]]),
        np.array([[0.9], [3.8]]),
        np.array([0.01]),
    )
    grid = YieldSet("invented", "core-collapse", ("O",), (one,), derived=frozenset({"net"}))
    stars = Population(
        0.01,
        [StellarSource("core-collapse", [grid])],
        imf=imf("power-law", slopes=[2.0], limits=(10, 20)),
        ages=["1 Gyr"],
    )
    found = leverage(stars)
    # phi = m^-2 / ln 2; int phi (20 - m)/10 dm and int phi (m - 10)/10 dm
    low = (20 * 0.05 - np.log(2)) / 10 / np.log(2)
    high = (np.log(2) - 10 * 0.05) / 10 / np.log(2)
    np.testing.assert_allclose(found.contribution("O")[0, 0], [low, 4 * high], rtol=1e-13)
    assert not found.birth("O").any()
    first = found.ranked("O")[0]
    assert first.model.mass == 20 and first.derivative == pytest.approx(high, rel=1e-13)
    assert first.doubled == pytest.approx(np.log10((low + 8 * high) / (low + 4 * high)), rel=1e-12)
    assert first.halved == pytest.approx(np.log10((low + 2 * high) / (low + 4 * high)), rel=1e-12)
    np.testing.assert_allclose(found.birth("O", "net").sum(), -(low * 0.1 + high * 0.2), rtol=1e-12)


def test_winds_that_no_table_prints_are_birth_composition(found):
    """Kobayashi+ 2006 list the explosion: what a model makes is what the journal's table prints."""
    k = next(k for k, m in enumerate(found.models) if (m.metallicity, m.mass) == (0.02, 20.0))
    oxygen = found.result.species.index("O")
    grid = load("kobayashi-2006")
    wind = grid.at(0.02).wind[list(grid.at(0.02).mass).index(20)]
    assert wind > 1
    total = grid.value("O", 20, 0.02) - wind * grid.at(0.02).initial[grid.columns("O")].sum()
    assert found.nodes.printed[k, oxygen] == pytest.approx(total, rel=1e-12)
    assert found.birth("O")[1, -1] > 0
    source = StellarSource("core-collapse", ["kobayashi-2006"], winds="rest")
    rest = replace(found.population, sources=[source], joins=[])
    assert not leverage(rest, ["1 Gyr"]).birth("O").any()


def test_net_yields_of_agb_models_are_all_theirs(found):
    """Karakas 2010 prints net yields: no part of the net yield of AGB stars is anybody else's."""
    names = ["H", "C", "N", "O", "Mg", "Fe"]
    alone = population(sources=[StellarSource("agb", ["karakas-2010"])], joins=[], species=names)
    parts = nodes(alone).at(AGES)
    assert not parts.birth_net.any()
    assert parts.birth_total[0, -1].all()


def doubled(grid, metallicity, mass, species):
    """The set with what is printed of one model and element twice as large."""
    columns = grid.columns(species)
    slices = []
    for one in grid.slices:
        total, net = one.total.copy(), one.net.copy()
        if one.metallicity == metallicity:
            at = np.ix_(one.mass == mass, columns)
            printed = (one.listed if "net" in grid.derived else one.net)[at]
            total[at] += printed
            net[at] += printed
        slices.append(replace(one, total=total, net=net))
    return replace(grid, slices=tuple(slices))


@pytest.mark.parametrize("interpolation", ["linear", "cubic"])
@pytest.mark.parametrize(
    ("set_", "z", "mass", "species"),
    [
        ("kobayashi-2006", 0.02, 30.0, "O"),
        ("kobayashi-2006", 0.004, 13.0, "Fe"),
        ("karakas-2010", 0.02, 3.0, "C"),
    ],
)
def test_a_model_twice_as_large_moves_the_yield_as_told(set_, z, mass, species, interpolation):
    """Weighed again with the set's figures changed."""
    sources = [
        StellarSource("agb", ["karakas-2010"]),
        StellarSource("core-collapse", ["kobayashi-2006"]),
        THERMONUCLEAR,
    ]
    stars = population(sources=sources, interpolation=interpolation)
    other = doubled(load(set_), z, mass, species)
    changed = [replace(s, sets=[other]) if set_ in [m.name for m in s.sets] else s for s in sources]
    told = leverage(stars, AGES)
    again = replace(stars, sources=changed).weigh(AGES)
    one = next(
        c
        for c in told.ranked(species)
        if c.model and (c.model.set, c.model.metallicity, c.model.mass) == (set_, z, mass)
    )
    moved = np.log10(again.get(species)[-1] / told.result.get(species)[-1])
    assert one.doubled == pytest.approx(moved, rel=1e-9)
    for convention in ("total", "net"):
        k = told.models.index(one.model)
        rise = told.nodes.change(k, [told.result.species.index(species)], 2.0, AGES)
        moved = [
            again.get(species, s, convention) - told.result.get(species, s, convention) for s in again.sources
        ]
        np.testing.assert_allclose(rise, moved, rtol=1e-9, atol=1e-15)


def test_derivatives_with_cubics_are_those_of_small_changes():
    stars = population(
        interpolation="cubic", sources=[StellarSource("core-collapse", ["kobayashi-2006"])], joins=[]
    )
    found = leverage(stars, ["1 Gyr"])
    at = found.result.species.index("Mg")
    for k in range(len(found.models)):
        h = 1e-6
        up, down = (found.nodes.change(k, [at], 1 + s * h, ["1 Gyr"])[0, 0] for s in (1, -1))
        made = float(found.contribution("Mg")[0, 0, k])
        assert (up - down) / (2 * h) == pytest.approx(made, rel=1e-6, abs=1e-12)


@pytest.mark.parametrize("count", [2, 3, 7])
def test_slopes_are_scipys_and_homogeneous(count):
    random = np.random.default_rng(count)
    mass = np.cumsum(random.uniform(0.5, 3, count))
    values = random.normal(size=(count, 40))
    values[-1, :5] = values[-2, :5]
    slopes, derivatives = monotone_slopes(mass, values)
    np.testing.assert_allclose(slopes, PchipInterpolator(mass, values)(mass, 1), rtol=1e-12, atol=1e-13)
    # Euler's theorem for functions of degree 1
    np.testing.assert_allclose(np.einsum("jks,ks->js", derivatives, values), slopes, rtol=1e-11, atol=1e-12)
    away = values[:, 5:]
    step = 1e-7 * random.normal(size=away.shape)
    rise = monotone_slopes(mass, away + step)[0] - monotone_slopes(mass, away - step)[0]
    told = 2 * np.einsum("jks,ks->js", monotone_slopes(mass, away)[1], step)
    np.testing.assert_allclose(rise, told, rtol=1e-4, atol=1e-11)


@pytest.mark.parametrize("convention", ["total", "net"])
def test_ranges_and_profile_integrate_to_the_yield(found, convention):
    for species in ("C", "O", "Fe"):
        whole = found.result.get(species, None, convention)
        parts = found.ranges(species, convention)
        np.testing.assert_allclose(sum(p["amount"] for p in parts), whole, rtol=1e-12)
        assert parts[-1]["from"] is None and parts[-1]["source"] == "thermonuclear"
        for age in (1, 2):
            profile = found.profile(species, age, convention)
            stars = whole[age] - found.result.get(species, "thermonuclear", convention)[age]
            assert profile.cumulative[0] == 0
            assert profile.cumulative[-1] == pytest.approx(stars, rel=1e-12)
            # trapezia on the grid's own spacing
            area = np.trapezoid(profile.density, np.log(profile.mass))
            assert area == pytest.approx(stars, rel=2e-4)
            for part in parts[:-1]:
                inside = np.interp([part["from"], part["to"]], profile.mass, profile.cumulative)
                assert np.diff(inside)[0] == pytest.approx(part["amount"][age], abs=1e-12)
            for i, source in enumerate(found.result.sources[:2]):
                mine = np.where(profile.source == i, profile.density, 0.0)
                own = found.result.get(species, source, convention)[age]
                assert np.trapezoid(mine, np.log(profile.mass)) == pytest.approx(
                    own, rel=1e-3, abs=2e-4 * stars
                )


def test_printed_part_of_the_profile_is_the_models(found):
    for interpolation in ("linear", "cubic"):
        told = leverage(replace(found.population, interpolation=interpolation), AGES)
        profile = told.profile("C")
        made = told.contribution("C")[:2, -1].sum()
        assert np.trapezoid(profile.printed, np.log(profile.mass)) == pytest.approx(made, rel=3e-4)


def test_parameters_move_yields_as_told(found):
    slope, total, net = found.by_parameter["imf.slopes[1]"]
    assert slope == 2.3
    h, low, high = 1e-4, *found.population.imf.limits
    steep, flat = (
        replace(
            found.population,
            imf=imf("power-law", slopes=[1.3, 2.3 + d], breaks=[0.5], limits=(low, high)),
        ).weigh(AGES)
        for d in (h, -h)
    )
    np.testing.assert_allclose((steep.total - flat.total).sum(axis=0) / (2 * h), total, rtol=1e-6, atol=1e-12)
    np.testing.assert_allclose((steep.net - flat.net).sum(axis=0) / (2 * h), net, rtol=1e-6, atol=1e-12)
    number, by, _ = found.by_parameter["thermonuclear.number"]
    np.testing.assert_allclose(number * by, found.result.total[2], rtol=1e-12)


def test_ranking_is_in_order_and_told_in_words(found):
    ranked = found.ranked("Fe", -1, "total", top=2)
    assert ranked[0].name == "nomoto-1997-w7, event" and ranked[0].model.mass is None
    assert sum(c.model is not None for c in ranked) == 2
    assert [abs(c.amount) for c in ranked] == sorted((abs(c.amount) for c in ranked), reverse=True)
    assert sum(c.share for c in found.ranked("Fe")) == pytest.approx(1, abs=1e-12)
    assert sentence(found, "Fe").startswith("If the event of nomoto-1997-w7 is wrong by a factor of 2 in Fe,")
    # nomoto-1997-w7 makes 53 %: log10 1.53 and log10 0.73
    assert ranked[0].doubled == pytest.approx(np.log10(1 + ranked[0].share), rel=1e-12)
    assert "(twice as much)" in sentence(found, "O") and "25 Msun" not in sentence(found, "Fe")
    assert (
        sentence(leverage(population(), ["1 yr"]), "Fe") == "Fe: no published model makes any of it by then."
    )


def test_json_and_csv_hold_every_part(found, tmp_path):
    told = json.loads(json.dumps(to_dict(found, ["O", "Fe"], "net", 3), allow_nan=False))
    for species in ("O", "Fe"):
        made = sum(np.array(told["contribution"][s][species]).sum(axis=1) for s in told["sources"])
        born = sum(np.array(told["birth_composition"][s][species]) for s in told["sources"])
        np.testing.assert_allclose(made + born, told["yield"][species], rtol=1e-12)
        assert len(told["ranked"][species]) == len(told["sentences"][species]) == 3
    assert told["parameters"]["metallicity"]["value"] == 0.014
    write_csv(found, tmp_path / "leverage.csv", ["O"], "net")
    text = (tmp_path / "leverage.csv").read_text()
    assert text.startswith("# steelyard population yields") and "# set kobayashi-2006 sha256" in text
    rows = list(csv.DictReader(io.StringIO("".join(x for x in text.splitlines(True) if x[0] != "#"))))
    last = [r for r in rows if float(r["age_yr"]) == 13.8e9]
    amount = sum(float(r["amount_net"]) for r in last)
    assert amount == pytest.approx(found.result.get("O", None, "net")[-1], rel=1e-12)
    assert {r["set"] for r in last} >= {"karakas-2010", "birth composition", "nomoto-1997-w7"}


def test_elements_of_a_result_in_nuclides_are_whole(found):
    told = leverage(replace(found.population, species="nuclides"), AGES)
    np.testing.assert_allclose(told.contribution("O"), found.contribution("O"), rtol=1e-11, atol=1e-18)


def test_ages_in_any_order(found):
    told = leverage(found.population, AGES[::-1])
    np.testing.assert_array_equal(told.contribution("O")[:, ::-1], found.contribution("O"))


def test_what_is_not_there_is_refused(found):
    with pytest.raises(InputError, match="isn't in the population"):
        found.contribution("Au")
    with pytest.raises(InputError, match="choose total or net"):
        found.birth("O", "gross")
    with pytest.raises(InputError, match="isn't known"):
        found.profile("O", -1, "gross")


def panels(figure):
    return {axes.get_title(loc="left"): axes for axes in figure.axes}


def test_figure_has_a_panel_a_species_with_shares_and_marks(found):
    figure = contribution_by_mass(found)
    drawn = panels(figure)
    assert list(drawn) == ["H", "C", "N", "O", "Mg", "Mn", "Fe"]
    marks = [line for line in drawn["O"].lines if line.get_marker() == "s"]
    assert [round(m, 6) for m in marks[0].get_xdata()] == [13, 15, 18, 20, 25, 30, 40]
    box = drawn["Fe"].artists[0]
    shares = [area.get_text() for area in box.get_child().get_children()]
    whole = found.result.get("Fe")[-1]
    assert shares == [f"{found.result.get('Fe', s)[-1] / whole:.0%}" for s in found.result.sources]
    assert "13.8 Gyr" in figure.get_supylabel()
    assert "kobayashi-2006" in figure.provenance[1]


def test_areas_of_the_figure_are_shares(found):
    (panel,) = contribution_by_mass(found, ["C"], convention="net").axes
    curves = [line for line in panel.lines if line.get_marker() == "None" and len(line.get_xdata()) > 2]
    areas = sum(np.trapezoid(line.get_ydata(), np.log10(line.get_xdata())) for line in curves)
    whole = found.result.get("C", None, "net")[-1]
    stars = 1 - found.result.get("C", "thermonuclear", "net")[-1] / whole
    assert areas == pytest.approx(stars, abs=2e-3)


def test_nothing_made_is_nothing_drawn():
    with pytest.raises(InputError, match="nothing of O is made"):
        contribution_by_mass(leverage(population(), ["1 yr"]), ["O"])
