import io
import json
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from steelyard.integrate import DelayedSource, Edges, Join, Population, StellarSource, delay, imf
from steelyard.integrate.contrasting import MARKS, contrast, design, ingredients, read_swap, served
from steelyard.integrate.contrasting.telling import rows, sentences, signed
from steelyard.integrate.contrasting.weighing import weigh_all
from steelyard.integrate.contrasting.writing import to_markdown, write_csv, write_latex
from steelyard.integrate.figures import save
from steelyard.integrate.figures.contrast import abundance_envelope, strip_chart
from steelyard.yields import load
from steelyard.yields.errors import InputError

LIMONGI = [f"limongi-chieffi-2018-{s}-v{v}" for s in "MR" for v in ("000", "150", "300")]
IWAMOTO = [f"iwamoto-1999-{m}" for m in ("CDD1", "CDD2", "W7", "W70", "WDD1", "WDD2", "WDD3")]


def population(**changes):
    given = {
        "metallicity": 0.014,
        "sources": [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"]),
            DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
        ],
        "joins": [Join(("agb", "core-collapse"), "bridge")],
    }
    return Population(**given | changes)


def events(**changes):
    """One source of stars without metals of note, so that events decide."""
    sources = [
        StellarSource("core-collapse", ["kobayashi-2006"]),
        DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
    ]
    return population(sources=sources, joins=[], **changes)


@pytest.fixture(scope="module")
def found():
    swaps = {
        "core-collapse": LIMONGI,
        "agb": ["marigo-2001+doherty-2014"],
        "thermonuclear": IWAMOTO,
        "imf": "salpeter-1955",
    }
    return contrast(population(), swaps)


def one(found, species, **swapped):
    swapped = {k.replace("_", "-"): v for k, v in swapped.items()}
    (row,) = [i for i, labels in enumerate(found.labels) if labels == swapped]
    return found.dex[row, 0, found.position(species)]


def test_each_choice_is_what_its_own_population_weighs_to(found):
    base = population()
    other = replace(
        base, sources=[base.sources[0], StellarSource("core-collapse", [LIMONGI[1]]), base.sources[2]]
    )
    for name in ("C", "O", "Mn", "Fe"):
        expected = np.log10(other.weigh([13.8e9]).get(name)[0] / base.weigh([13.8e9]).get(name)[0])
        assert one(found, name, core_collapse=LIMONGI[1]) == pytest.approx(expected, abs=1e-12)
    salpeter = replace(base, imf=imf("salpeter-1955", limits=(0.08, 120)))
    expected = np.log10(salpeter.weigh([13.8e9]).get("O")[0] / base.weigh([13.8e9]).get("O")[0])
    assert one(found, "O", imf="salpeter-1955") == pytest.approx(expected, abs=1e-12)


def test_combinations_are_what_their_own_populations_weigh_to():
    swaps = {
        "imf": ["salpeter-1955", "chabrier-2003"],
        "imf.limits": [(0.1, 100)],
        "agb": ["karakas-2010"],
        "thermonuclear": ["iwamoto-1999-W7:0.5/iwamoto-1999-WDD2:0.5"],
        "delay": {"form": "exponential", "timescale": "1 Gyr", "limits": ["40 Myr", "13.8 Gyr"]},
        "number": ["2e-3 / Msun"],
        "lifetimes": "raiteri-1996",
        "join": ["swallow"],
        "edges.above": "reach-up",
        "interpolation": "cubic",
        "metallicity": [0.004],
        "core-collapse.implode": "25-40",
        "solar": "anders-grevesse-1989",
    }
    made = design(population(), swaps, ["30 Myr", "1 Gyr"], ["N", "O", "Mn"])
    at = made.sample(12, 3)
    for convention in ("total", "net"):
        weighed = weigh_all(made, at, convention)
        for i, row in enumerate(at):
            alone = replace(made.population(row), species="elements").weigh(made.ages)
            for k, source in enumerate(alone.sources):
                expected = np.stack([alone.get(s, source, convention) for s in made.species], axis=1)
                np.testing.assert_allclose(weighed.yields[i, k], expected, rtol=1e-12, atol=1e-18)
            wholly = np.stack([[s not in alone.missing[k] for s in made.species] for k in alone.sources])
            assert ((weighed.coverage[i] == 2) == wholly).all()


def test_more_events_scale_what_only_events_eject():
    made = contrast(events(), {"number": [2.6e-3]}, species=["Mn", "Fe"])
    row = made.base
    # twice the events: log10 of (stars + 2 events) / (stars + events)
    for j, name in enumerate(made.species):
        stars, ia = (row.get(name, k)[0] for k in ("core-collapse", "thermonuclear"))
        assert made.dex[1, 0, j] == pytest.approx(np.log10((stars + 2 * ia) / (stars + ia)), abs=1e-13)


def test_what_a_set_lacks_is_marked_and_never_a_number(found):
    row = next(i for i, labels in enumerate(found.labels) if "agb" in labels)
    # Marigo 2001 gives C, N and O
    for name in ("C", "N", "O"):
        assert np.isfinite(found.dex[row, 0, found.position(name)])
    for name in ("Mg", "Si", "Fe", "Ni"):
        assert np.isnan(found.dex[row, 0, found.position(name)])
        assert MARKS[found.marks[row, 0, found.position(name)]] == "lacks"
    turned = contrast(
        population(sources=[StellarSource("agb", ["marigo-2001"]), *population().sources[1:]]),
        {"agb": "karakas-2010"},
    )
    assert MARKS[turned.marks[1, 0, turned.position("Mg")]] == "base lacks"
    assert np.isfinite(turned.dex[1, 0, turned.position("O")])


def test_following_at_some_masses_only_is_not_the_same_as_at_none():
    # Karakas 2010 follows Co, Doherty et al. 2014 and Marigo 2001 don't follow all: no shared footing
    made = contrast(population(), {"agb": "marigo-2001+doherty-2014"}, species="elements")
    base = made.base
    for j, name in enumerate(made.species):
        sets = [load(s) for s in ("karakas-2010", "doherty-2014")]
        others = [load(s) for s in ("marigo-2001", "doherty-2014")]
        ours, theirs = (sum(bool(g.columns(name)) for g in group) for group in (sets, others))
        if ours > theirs:
            assert MARKS[made.marks[1, 0, j]] == "lacks", name
    assert base.ages.tolist() == [13.8e9]


def test_ratios_are_over_sources_that_follow_both(found):
    assert found.ratio_sources["Mn"] == ("core-collapse", "thermonuclear")
    assert found.ratio_sources["O"] == ("agb", "core-collapse", "thermonuclear")
    base = found.base
    both = sum(base.get("Mn", k)[0] for k in found.ratio_sources["Mn"])
    iron = sum(base.get("Fe", k)[0] for k in found.ratio_sources["Mn"])
    # solar log eps of Mn 5.43 and Fe 7.50 (Asplund et al. 2009), atomic weights 54.938 and 55.845 (IUPAC)
    expected = np.log10((both / 54.938) / (iron / 55.845)) - (5.43 - 7.50)
    assert found.ratio[0, 0, found.position("Mn")] == pytest.approx(expected, abs=1e-4)
    assert found.ratio[0, 0, found.position("O")] == pytest.approx(base.ratio("O", "Fe")[0], abs=1e-12)


def test_net_yields_that_change_sign_are_said():
    # Karakas 2010 at Z = 0.02: first dredge-up lowers 12C up to 2 Msun, third dredge-up raises it from 2.5 on
    sources = [StellarSource("agb", ["karakas-2010"], limits=(1, 2))]
    stars = population(sources=sources, joins=[], metallicity=0.02)
    made = contrast(stars, {"agb.limits": [(1, 1.5), (1, 4)]}, species=["C12"], convention="net")
    values = made.yields[:, 0, 0]
    assert values[0] < 0 < values[2] and values[1] < 0
    assert made.dex[1, 0, 0] == pytest.approx(np.log10(values[1] / values[0]))
    assert MARKS[made.marks[2, 0, 0]] == "- to +" and np.isnan(made.dex[2, 0, 0])
    later = contrast(events(), {"imf": "salpeter-1955"}, ages=["1 Myr"], species=["O"])
    assert MARKS[later.marks[1, 0, 0]] == "zero"


def test_two_negative_net_yields_have_a_ratio():
    made = contrast(population(), {"imf": "salpeter-1955"}, species=["H"], convention="net")
    values = made.yields[:, 0, 0]
    assert (values < 0).all()
    assert made.dex[1, 0, 0] == pytest.approx(np.log10(values[1] / values[0]), abs=1e-15)


def test_range_and_deviation_are_over_base_and_choices(found):
    j = found.position("O")
    values = found.dex[:, 0, j]
    assert values[0] == 0
    assert found.range()[0, j] == pytest.approx(values.max() - values.min())
    assert found.deviation()[0, j] == pytest.approx(np.std(values))
    lacked = found.dex[:, 0, found.position("Fe")]
    assert found.range()[0, found.position("Fe")] == pytest.approx(np.nanmax(lacked) - np.nanmin(lacked))


def test_limongi_chieffi_2018_as_its_paper_says():
    """Limongi & Chieffi 2018, ApJS 237, 13, abstract and section 5.

    In set R stars above 25 Msun collapse whole and eject their wind only, so that set M makes
    more O; rotation makes primary N, the more the lower the metallicity.
    """
    stars = Population(0.014, [StellarSource("core-collapse", [LIMONGI[0]])])
    swaps = {"core-collapse": LIMONGI[1:]}
    found = contrast(stars, swaps, species=["N", "O"], convention="net")
    assert one(found, "O", core_collapse="limongi-chieffi-2018-R-v000") < -0.3
    low = contrast(replace(stars, metallicity=3.236e-4), swaps, species=["N", "O"], convention="net")
    rise, at_solar = (one(c, "N", core_collapse="limongi-chieffi-2018-M-v300") for c in (low, found))
    assert at_solar > 0.2 and rise > at_solar + 1


def test_iwamoto_1999_as_its_paper_says(found):
    # the slow deflagration W70 and the delayed detonations are less neutron-rich than W7: less Ni
    w7 = one(found, "Ni", thermonuclear="iwamoto-1999-W7")
    assert all(one(found, "Ni", thermonuclear=m) < w7 for m in IWAMOTO if m != "iwamoto-1999-W7")
    assert abs(one(found, "Fe", thermonuclear="iwamoto-1999-W7")) < 0.01


def test_common_range_is_what_all_choices_serve():
    swaps = {"core-collapse": LIMONGI[:1], "agb": "marigo-2001+doherty-2014"}
    made = design(population(), swaps, common_range=True)
    assert made.limits == {"core-collapse": (13.0, 40.0), "agb": (1.0, 8.5)}
    for row in made.one_at_a_time:
        ranges = served(made.population(row))
        assert (ranges["core-collapse"][0][0], ranges["core-collapse"][-1][1]) == (13.0, 40.0)
        assert (ranges["agb"][0][0], ranges["agb"][-1][1]) == (1.0, 8.5)
    apart, alike = contrast(population(), swaps), contrast(made)
    # stars of 40-120 Msun make oxygen in set M
    assert one(alike, "O", core_collapse=LIMONGI[0]) < one(apart, "O", core_collapse=LIMONGI[0])
    assert any("restricted to the 13-40 Msun" in n for n in alike.notes)
    with pytest.raises(InputError, match=r"core-collapse\.limits are swapped"):
        design(population(), swaps | {"core-collapse.limits": (15, 30)}, common_range=True)


def test_what_differs_in_coverage_is_said(found):
    text = "\n".join(found.notes)
    assert "13-40 Msun (kobayashi-2006); 13-120 Msun (limongi-chieffi-2018-{M-v000" in text
    assert "lists the explosion only (kobayashi-2006)" in text
    assert "all choices form 1 Msun between 0.08-120 Msun" in text
    assert "the slice at 0.01345 is held" in text
    assert found.ranges["core-collapse"]["base"] == [(13.0, 40.0, "kobayashi-2006")]
    assert found.lacking == {"agb": ["Ca", "Mn"]}
    nuclides = contrast(population(), {"core-collapse": LIMONGI[:1]}, species=["C13", "O"])
    assert any("elements only, so nuclides aren't followed" in n for n in nuclides.notes)
    assert MARKS[nuclides.marks[1, 0, 0]] == "lacks"


def test_swaps_are_read():
    base = population()
    assert read_swap("imf=salpeter-1955, kroupa-1993", base) == ("imf", ["salpeter-1955", "kroupa-1993"])
    name, choices = read_swap('delay={form="exponential",timescale="1 Gyr",limits=[4e7,1.38e10]}', base)
    assert name == "delay" and choices[0]["limits"] == [4e7, 1.38e10]
    assert read_swap("imf.limits=[0.1,100],0.08-60", base)[1] == [[0.1, 100], "0.08-60"]
    assert read_swap("core-collapse=limongi-chieffi-2018-*", base)[1] == LIMONGI
    assert read_swap("thermonuclear=iwamoto-1999-*", base)[1] == IWAMOTO
    made = design(base, dict([read_swap("agb=marigo-2001+doherty-2014,karakas-2010", base)]))
    assert made.factors[0].labels == ("karakas-2010+doherty-2014", "marigo-2001+doherty-2014", "karakas-2010")


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("imff=salpeter-1955", "'imff' isn't known; did you mean imf"),
        ("agbs=marigo-2001", "did you mean agb"),
        ("imf", "isn't a swap"),
        ("imf=", "isn't a swap"),
        ("=x", "isn't a swap"),
        ("imf=a,,b", "a choice is empty"),
        ("imf={form=", "doesn't end"),
        ("imf={form}", "can't be read"),
        ("core-collapse=nobody-*", "no yield set matches"),
    ],
)
def test_swaps_that_cannot_be_read(text, says):
    with pytest.raises(InputError) as error:
        read_swap(text, population())
    assert says in str(error.value) and "\n" not in str(error.value)


@pytest.mark.parametrize(
    ("swaps", "says"),
    [
        ({}, "nothing is swapped"),
        ({"imf": "kroupa-2001"}, "no choice differs from the base"),
        ({"imf": "salpeter"}, "did you mean salpeter-1955"),
        ({"core-collapse": "kobayshi-2006"}, "did you mean kobayashi-2006"),
        ({"core-collapse": "a:0.5/kobayashi-2006:0.5"}, "'a' isn't known"),
        ({"core-collapse": "kobayashi-2006:0.5/limongi-chieffi-2018-M-v000:0.6"}, "sum to 1"),
        ({"core-collapse": "kobayashi-2006/limongi-chieffi-2018-M-v000:1"}, "no share"),
        ({"lifetimes": "portinari"}, "did you mean portinari-1998"),
        ({"join": "bridges"}, "policy 'bridges' isn't known"),
        ({"edges.above": "reach-down"}, "isn't known"),
        ({"delay": "exponential"}, "lacks timescale and limits"),
        ({"number": -1}, "negative"),
        ({"number": "1 Msun"}, "number"),
        ({"number": 1e-3, "thermonuclear.number": 2e-3}, "same ingredient"),
        ({"interpolation": "spline"}, "isn't known"),
        ({"solar": "asplund"}, "asplund-2009"),
        ({"agb": "limongi-chieffi-2018-M-v000"}, "overlap"),
        ({"agb": "nomoto-1997-w7"}, "single events"),
        ({"thermonuclear": "kobayashi-2006"}, "stars over initial mass"),
    ],
)
def test_swaps_that_cannot_be_used(swaps, says):
    with pytest.raises(InputError) as error:
        contrast(population(), swaps)
    assert says in str(error.value) and "\n" not in str(error.value)


def test_other_refusals():
    swaps = {"imf": "salpeter-1955"}
    for arguments, says in (
        ({"convention": "gross"}, "convention"),
        ({"species": ["Tc"]}, "no set follows Tc"),
        ({"species": "nuclides"}, "isn't a choice"),
        ({"ages": ["0 yr"]}, "age 0"),
        ({"full": True, "most": 1}, "most is 1"),
        ({"ages": np.geomspace(1e6, 1e10, 10**7)}, "no room in memory"),
    ):
        with pytest.raises(InputError, match=says):
            contrast(population(), swaps, **arguments)


def test_objects_can_be_swapped_in():
    own = replace(load("kobayashi-2006"), notes=("mine",))
    late = delay({"form": "exponential", "timescale": 1e9, "limits": [4e7, 1.38e10]})
    made = design(
        population(),
        {
            "core-collapse": [own, (load("kobayashi-2006"),)],
            "imf": imf("power-law", slopes=[2.7]),
            "delay": late,
            "lifetimes": lambda m, z: 1e10 * m**-2.5,
        },
    )
    by_name = {f.name: f.labels for f in made.factors}
    assert by_name["core-collapse"] == ("kobayashi-2006", "kobayashi-2006 (own)", "kobayashi-2006 (own 2)")
    assert by_name["imf"][1].startswith("power-law slopes=2.7")
    assert by_name["delay"][1].startswith("exponential")
    found = contrast(made)
    assert found.dex[found.by_factor("core-collapse")] == pytest.approx(0, abs=1e-14)
    assert np.isfinite(found.dex).all()


def test_what_can_be_swapped_changes_what_it_names():
    base = population(edges=Edges())
    choices = {
        "metallicity": "0.02", "solar": "asplund-2021", "imf": "salpeter-1955", "imf.limits": "0.1-100",
        "lifetimes": "raiteri-1996", "interpolation": "cubic", "agb": "karakas-2010", "agb.limits": "1-6",
        "agb.winds": "rest", "core-collapse": LIMONGI[0], "core-collapse.limits": "15-40",
        "core-collapse.winds": "rest", "core-collapse.implode": "20-25",
        "core-collapse.events_from": "9 Msun",
        "thermonuclear": IWAMOTO[0], "thermonuclear.delay": {"form": "maoz-graur-2017", "slope": -1.0},
        "thermonuclear.number": 1e-3, "delay": {"form": "maoz-graur-2017", "slope": -1.0}, "number": 1e-3,
        "join": "swallow", "edges.below": "reach-down", "edges.above": "reach-up",
        "edges.metallicity": "refuse",
    }  # fmt: skip
    known = ingredients(base)
    assert set(known) == set(choices)
    for name, value in choices.items():
        changed = known[name].swap(base, value)
        assert known[name].tell(changed) != known[name].tell(base)
        others = {n for n in known if known[n].tell(changed) != known[n].tell(base)}
        assert {n.split(".")[-1] for n in others} == {name.split(".")[-1]} or name == "thermonuclear"


def test_a_join_of_a_series_goes_with_its_series():
    joins = [Join(("agb", "core-collapse")), Join(("karakas-2010", "doherty-2014"), "swallow")]
    found = contrast(population(joins=joins), {"agb": "karakas-2010"}, species=["C"])
    assert np.isfinite(found.dex).all()


def test_design_full_and_sample():
    made = design(population(), {"core-collapse": LIMONGI, "thermonuclear": IWAMOTO})
    assert made.size == 56 and made.full().shape == (56, 2) and not made.full()[0].any()
    assert len(made.one_at_a_time) == 1 + 6 + 7
    drawn = made.sample(20, 1)
    assert len({tuple(r) for r in drawn.tolist()}) == 20 and not drawn[0].any()
    assert (drawn == made.sample(20, 1)).all() and (drawn != made.sample(20, 2)).any()
    assert len(made.sample(99, 1)) == 56


def test_written_tables_carry_numbers_and_origin(found, tmp_path):
    write_csv(found, tmp_path / "c.csv")
    text = (tmp_path / "c.csv").read_text()
    comments = [line for line in text.splitlines() if line.startswith("#")]
    assert any(load("kobayashi-2006").checksum in line for line in comments)
    assert any(load("marigo-2001").checksum in line for line in comments)
    assert any('form = "kroupa-2001"' in line for line in comments)
    frame = pd.read_csv(io.StringIO(text), comment="#", keep_default_na=False, dtype=str)
    assert len(frame) == len(found.at) * len(found.species)
    picked = frame[(frame.species == "O") & (frame["core-collapse"] == LIMONGI[1])]
    assert float(picked.dex.iloc[0]) == one(found, "O", core_collapse=LIMONGI[1])
    assert set(frame[frame.agb == "marigo-2001+doherty-2014"].mark) == {"", "lacks"}
    write_latex(found, tmp_path / "c.tex")
    tex = (tmp_path / "c.tex").read_text()
    assert tex.count("\\toprule") == tex.count("\\bottomrule") == 1 and "\\textit{lacks}" in tex
    body = [line for line in tex.splitlines() if line.endswith(r"\\")]
    assert {line.count("&") for line in body} == {len(found.species) + 1}
    markdown = to_markdown(found)
    assert {line.count("|") for line in markdown.splitlines()} == {len(found.species) + 3}


def test_rows_and_sentences(found):
    table = rows(found)
    assert [r.factor for r in table[:2]] == ["imf", "agb"] and table[-2].label == "range"
    assert table[1].cells[found.position("Fe")] == "lacks"
    (line,) = [s for s in sentences(found) if s.startswith("[Mn/Fe]")]
    own = found.ratio[found.by_factor("thermonuclear"), 0, found.position("Mn")]
    assert f"thermonuclear {np.ptp(own):.2f} dex ({signed(own.min())} with iwamoto-1999-WDD3" in line
    assert signed(-0.0049) == "0.00" and signed(0.0051) == "+0.01"


def test_json_is_plain(found):
    told = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert len(told["choices"]) == len(found.at) - 1
    choice = next(c for c in told["choices"] if "agb" in c["swapped"])
    assert choice["dex"]["Fe"] == [None] and choice["mark"]["Fe"] == ["lacks"]


@pytest.mark.parametrize("full", [False, True])
def test_figures_show_every_choice(full, tmp_path):
    swaps = {"core-collapse": LIMONGI, "agb": "marigo-2001+doherty-2014"}
    found = contrast(population(), swaps, full=full)
    strip = strip_chart(found)
    (legend,) = strip.legends
    texts = [t.get_text() for t in legend.get_texts()]
    assert set(LIMONGI) <= set(texts) and "at the foot: no value" in texts
    assert ("all combinations" in texts) == full
    marks = {(line.get_marker(), line.get_markerfacecolor()) for line in strip.axes[0].lines[1:]}
    assert len(marks) >= 7
    envelope = abundance_envelope(found)
    values = found.ratio[:, 0, found.position("O")]
    box = next(p for p in envelope.axes[0].patches if abs(p.get_x() + p.get_width() / 2 - 2) < 1e-9)
    assert box.get_y() == pytest.approx(np.nanmin(values))
    assert box.get_height() == pytest.approx(np.nanmax(values) - np.nanmin(values))
    for figure, name in ((strip, "s.png"), (envelope, "e.pdf")):
        save(figure, tmp_path / name)
        assert (tmp_path / name).stat().st_size > 5000


def test_figures_refuse_what_they_cannot_draw():
    stars = population(sources=[StellarSource("agb", ["marigo-2001"])], joins=[], metallicity=0.008)
    found = contrast(stars, {"imf": "salpeter-1955"}, species=["C", "O"])
    strip_chart(found)
    with pytest.raises(InputError, match=r"no \[X/Fe\]"):
        abundance_envelope(found)
