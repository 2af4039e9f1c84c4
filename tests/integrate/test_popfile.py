import tomllib

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from steelyard.integrate import (
    DelayedSource,
    Edges,
    Join,
    Population,
    StellarSource,
    from_function,
    imf,
)
from steelyard.integrate.popfile import (
    default_population,
    population_from_dict,
    population_to_toml,
    read_population,
    template,
)
from steelyard.integrate.popfile import told as told_in
from steelyard.yields import load
from steelyard.yields.errors import InputError

AGB = {"kind": "agb", "sets": ["karakas-2010"]}
COLLAPSE = {"kind": "core-collapse", "sets": ["kobayashi-2006"]}
DELAY = {"form": "power-law", "slope": -1.1, "limits": ["40 Myr", "13.8 Gyr"]}
LATE = {"kind": "thermonuclear", "sets": ["nomoto-1997-w7"], "number": "1.3e-3 / Msun", "delay": DELAY}
GOOD = {"metallicity": 0.02, "source": [COLLAPSE]}


def again(population):
    return population_from_dict(tomllib.loads(population_to_toml(population)))


def message(data):
    with pytest.raises(InputError) as caught:
        population = population_from_dict(data, where="population.toml")
        with told_in("population.toml"):
            population.weigh(["1 Gyr"])
    text = str(caught.value)
    assert "\n" not in text
    return text


def assert_same_digits(a, b):
    np.testing.assert_array_equal(a.cumulative, b.cumulative)
    np.testing.assert_array_equal(a.rates, b.rates)
    np.testing.assert_array_equal(a.living, b.living)
    assert (a.species, a.sources, a.notes, a.events.keys()) == (
        b.species,
        b.sources,
        b.notes,
        b.events.keys(),
    )


def test_template_is_the_default_population():
    population = default_population()
    assert population.metallicity == 0.014
    assert population.imf.form == "kroupa-2001" and population.imf.limits == (0.08, 120.0)
    assert population.lifetimes == "portinari-1998"
    assert [[m.name for m in s.sets] for s in population.sources] == [
        ["karakas-2010", "doherty-2014"],
        ["kobayashi-2006"],
        ["nomoto-1997-w7"],
    ]
    # Maoz & Graur 2017, ApJ 848, 25: 1.3e-3 events per Msun in a Hubble time, slope -1.1
    assert population.sources[2].number == 1.3e-3
    assert population.sources[2].delay.slope == -1.1
    assert population.sources[2].delay.limits == (4e7, 13.8e9)
    assert population.edges == Edges("swallow", "swallow", "hold")
    assert population.joins == (Join(("agb", "core-collapse"), "bridge"),)


def test_template_has_every_key_that_can_be_written():
    """Whatever the writer makes explicit has its place and its comment in the template."""

    def keys(table, path=""):
        for key, value in table.items():
            yield f"{path}{key}"
            if isinstance(value, dict):
                yield from keys(value, f"{path}{key}.")
            elif isinstance(value, list) and value and isinstance(value[0], dict):
                for one in value:
                    yield from keys(one, f"{path}{key} {one.get('kind', '')}.")

    written = set(keys(tomllib.loads(population_to_toml(default_population()))))
    explained = set(keys(tomllib.loads(template())))
    assert written <= explained
    assert explained - written == {"ages.from", "ages.to", "ages.steps"}


def test_the_whole_design_file_is_read(tmp_path):
    path = tmp_path / "population.toml"
    path.write_text(
        """
metallicity = 0.014
solar = "asplund-2009"
species = ["O", "Mg", "Al26"]
ages = ["10 Myr", "100 Myr", "1 Gyr", "13.8 Gyr"]
[imf]
form = "kroupa-2001"
limits = ["0.08 Msun", "120 Msun"]
[lifetimes]
table = "raiteri-1996"
[[source]]
kind = "agb"
sets = ["karakas-2010", "doherty-2014"]
limits = ["1 Msun", "8 Msun"]
[[source]]
kind = "core-collapse"
sets = [{ "kobayashi-2006" = 1.0 }]
limits = ["13 Msun", "40 Msun"]
events_from = "8 Msun"
implode = [["20 Msun", "25 Msun"]]
[[join]]
between = ["agb", "core-collapse"]
policy = "reach-down"
[edges]
below = "return-only"
above = "reach-up"
metallicity = "hold"
[[source]]
kind = "thermonuclear"
sets = ["nomoto-1997-w7"]
number = "1.3e-3 / Msun"
delay = { form = "power-law", slope = -1.1, limits = ["40 Myr", "13.8 Gyr"] }
"""
    )
    read = read_population(path)
    built = Population(
        0.014,
        [
            StellarSource("agb", ["karakas-2010", "doherty-2014"], limits=(1, 8)),
            StellarSource("core-collapse", ["kobayashi-2006"], limits=(13, 40), implode=[(20, 25)]),
            DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
        ],
        lifetimes="raiteri-1996",
        joins=[Join(("agb", "core-collapse"), "reach-down")],
        edges=Edges("return-only", "reach-up"),
        species=["O", "Mg", "Al26"],
        ages=[1e7, 1e8, 1e9, 13.8e9],
    )
    assert_same_digits(read.weigh(), built.weigh())


def test_ages_in_equal_steps_of_the_logarithm():
    ages = population_from_dict(GOOD | {"ages": {"from": "1 Myr", "to": "10 Gyr", "steps": 5}}).ages
    np.testing.assert_allclose(ages, [1e6, 1e7, 1e8, 1e9, 1e10], rtol=1e-14)


def test_byte_order_mark_and_windows_lines(tmp_path):
    path = tmp_path / "population.toml"
    path.write_bytes(b"\xef\xbb\xbf" + template().replace("\n", "\r\n").encode())
    assert read_population(path).ages == default_population().ages


FORMS = [
    imf("salpeter-1955"),
    imf("chabrier-2003", limits=(0.1, 100)),
    imf("power-law", slopes=[0.3, 1.3, 2.35], breaks=[0.08, 0.5], limits=(0.1, 120)),
    imf("lognormal", centre=0.22, sigma=0.57),
]
DELAYS = [
    "maoz-graur-2017",
    {"form": "exponential", "timescale": "1.5 Gyr", "limits": [4e7, 1.38e10]},
    {"form": "broken-power-law", "slopes": [0, -1.1], "breaks": [1e9], "limits": [4e7, 1.38e10]},
    {"form": "tabulated", "ages": [0.0, 1e9, 1e10], "densities": [0, 1, 0.3]},
]


@pytest.mark.parametrize("made", FORMS, ids=lambda f: f.form)
@pytest.mark.parametrize("delay", DELAYS, ids=lambda d: d if isinstance(d, str) else d["form"])
def test_round_trip_keeps_every_digit(made, delay):
    population = Population(
        0.0127,
        [
            StellarSource("agb", ["karakas-2010"], limits=(1.1, 6)),
            StellarSource(
                "core-collapse",
                [{"kobayashi-2006": 0.7, "limongi-chieffi-2018-R-v000": 0.3}],
                implode=[(22, 23.5)],
                winds="rest",
                events_from=9,
                neutron_star_limit=2.1,
            ),
            DelayedSource("merger", ["iwamoto-1999-WDD1"], 3e-4, delay, consumes="neutron star"),
        ],
        imf=made,
        lifetimes="padovani-matteucci-1993",
        joins=[Join(("agb", "core-collapse"), "return-only")],
        edges=Edges("reach-down", "return-only", "refuse"),
        solar="lodders-2003",
        species=["C", "O", "Fe"],
        ages=[1e7, 1.1e9, 0.1 + 0.2],
        interpolation="cubic",
    )
    assert_same_digits(again(population).weigh(), population.weigh())


def test_a_given_set_that_is_the_shipped_one_is_written_by_its_id():
    population = Population(0.02, [StellarSource("core-collapse", [load("kobayashi-2006")])])
    assert "#" not in population_to_toml(population)
    assert_same_digits(again(population).weigh(), population.weigh())


def test_what_a_file_cannot_hold_is_named_and_not_read_back():
    late = {"form": "function", "function": lambda age: 1 / age, "limits": [4e7, 1e10]}
    other = load("kobayashi-2006", "lodders-2003")
    cases = {
        "the mass function": Population(
            0.02, [StellarSource("agb", ["karakas-2010"])], imf=from_function(lambda m: m**-2.35, (0.1, 100))
        ),
        "the lifetimes": Population(
            0.02, [StellarSource("agb", ["karakas-2010"])], lifetimes=lambda mass, z: 1e10 * mass**-2.5
        ),
        "the delay": Population(
            0.02,
            [StellarSource("agb", ["karakas-2010"]), DelayedSource("late", ["nomoto-1997-w7"], 1e-3, late)],
        ),
        "the yield set": Population(
            0.02, [StellarSource("core-collapse", [_raised(other)])], solar="lodders-2003"
        ),
    }
    for what, population in cases.items():
        text = population_to_toml(population)
        assert text.startswith(f"# not held by this file: {what}"), what
        with pytest.raises(InputError):
            population_from_dict(tomllib.loads(text))


def _raised(grid):
    from dataclasses import replace

    slices = [replace(s, total=s.total * 1.1) for s in grid.slices]
    return replace(grid, slices=tuple(slices))


@pytest.mark.parametrize(
    ("data", "told"),
    [
        ({"metalicity": 0.02}, "population.toml: key 'metalicity' isn't known; did you mean metallicity?"),
        ({"imf": {"form": "kroupa-2001", "limit": [1, 2]}}, "imf.limit isn't a parameter of kroupa-2001"),
        ({"imf": {"form": "kroupa"}}, "did you mean kroupa-2001"),
        ({"imf": {"form": "kroupa-2001", "limits": ["120 Msun", "0.08 Msun"]}}, "lower mass first"),
        ({"imf": {"form": "kroupa-2001", "limits": [-1, 2]}}, "-1 Msun"),
        ({"imf": {"form": "kroupa-2001", "limits": ["0.08 Myr", "120 Msun"]}}, "wrong dimension"),
        ({"imf": {"form": "power-law", "slopes": [1e6]}}, "can't be normalised"),
        ({"imf": ["kroupa-2001"]}, "imf is a table, not a list"),
        ({"imf": {}}, "lacks form"),
        ({"lifetimes": {"table": "portinari"}}, "did you mean portinari-1998?"),
        (
            {"lifetimes": {"tabel": "portinari-1998"}},
            "[lifetimes]: key 'tabel' isn't known; did you mean table?",
        ),
        (
            {"edges": {"metallicty": "hold"}},
            "[edges]: key 'metallicty' isn't known; did you mean metallicity?",
        ),
        (
            {"edges": {"above": "extrapolate"}},
            "edges.above: policy 'extrapolate' isn't known; choose swallow",
        ),
        ({"metallicity": 0.1, "edges": {"metallicity": "refuse"}}, "0.02"),
        ({"metallicity": -0.1}, "isn't a mass fraction"),
        ({"metallicity": [0.1, 0.2]}, "metallicity is one number, not a list"),
        ({"metallicity": True}, "metallicity is one number, not True"),
        ({"metallicity": 10**400}, "not a very large number"),
        ({"metallicity": float("nan")}, "isn't finite"),
        ({"metallicity": "0.02 Msun"}, "wrong dimension"),
        ({"solar": "asplund"}, "did you mean asplund-2021, asplund-2009?"),
        ({"solar": ["asplund-2009"]}, "solar is text, not a list"),
        ({"species": "element"}, 'write "elements", "nuclides", or a list'),
        ({"species": ["O", "Mgg"]}, "population.toml: species: species 'Mgg' isn't known; did you mean"),
        ({"species": []}, "species [] isn't a choice"),
        ({"interpolation": "spline"}, "choose linear or cubic"),
        ({"ages": []}, "ages needs at least one age"),
        ({"ages": ["-1 Gyr"]}, "age is negative"),
        ({"ages": ["1e200 Gyr"]}, "ages is out of all proportion: '1e200 Gyr'; check its unit"),
        ({"imf": {"form": "kroupa-2001", "limits": [1e-300, 100]}}, "imf.limits is out of all proportion"),
        ({"ages": ["inf"]}, "isn't finite"),
        ({"ages": ["10 Msun"]}, "wrong dimension"),
        ({"ages": [[1.0]]}, "ages is one number, not a list"),
        ({"ages": [1.0] * 10_001}, "at most 10000"),
        ({"ages": {"from": "1 Myr", "to": "1 Gyr", "steps": 10**9}}, "ages.steps isn't a whole number"),
        ({"ages": {"from": "1 Myr", "to": "1 Gyr", "steps": 2.5}}, "ages.steps isn't a whole number"),
        ({"ages": {"from": 0, "to": "1 Gyr", "steps": 5}}, "can't go from 0 to 1e+09 yr"),
        ({"ages": {"from": 1, "until": "1 Gyr", "steps": 5}}, "ages: key 'until' isn't known"),
        ({"source": []}, "there is no source"),
        ({"source": AGB}, "source is a list, not a table; head each with [[source]]"),
        ({"source": ["agb"]}, "source 1: a source is a table, not 'agb'"),
        ({"source": [AGB, AGB]}, "source agb is named twice"),
        ({"source": [{"sets": ["karakas-2010"]}]}, "source 1: the source lacks kind"),
        ({"source": [COLLAPSE | {"kind": "core-colapse"}]}, "did you mean core-collapse?"),
        ({"source": [COLLAPSE | {"kind": 3}]}, "kind is text, not 3"),
        ({"source": [{"kind": "agb"}]}, "source 1 (agb): the source lacks sets"),
        (
            {"source": [AGB, COLLAPSE | {"event_from": 8}]},
            "source 2 (core-collapse): key 'event_from' isn't",
        ),
        ({"source": [AGB | {"implode": []}]}, "key 'implode' isn't known"),
        ({"source": [COLLAPSE | {"sets": ["kobayashi-2005"]}]}, "did you mean kobayashi-2006"),
        ({"source": [COLLAPSE | {"sets": "kobayashi-2006"}]}, "sets is a list, not 'kobayashi-2006'"),
        ({"source": [COLLAPSE | {"sets": []}]}, "sets must be a list of at least one set"),
        ({"source": [COLLAPSE | {"sets": [{"kobayashi-2006": 0.5}]}]}, "sum to 1, not 0.5"),
        ({"source": [COLLAPSE | {"sets": [{"kobayashi-2006": [0.5]}]}]}, "is one number, not a list"),
        ({"source": [COLLAPSE | {"sets": ["nomoto-1997-w7"]}]}, "lists single events, not stars"),
        ({"source": [COLLAPSE | {"limits": [40, 13]}]}, "limits: 40 isn't below 13 Msun"),
        ({"source": [COLLAPSE | {"limits": [13, 40, 50]}]}, "limits needs two masses"),
        ({"source": [COLLAPSE | {"limits": [50, 60]}]}, "no set has models inside its limits"),
        ({"source": [COLLAPSE | {"implode": [["20 Msun", "-25 Msun"]]}]}, "isn't below -25"),
        ({"source": [COLLAPSE | {"implode": ["20 Msun"]}]}, "implode is a list, not '20 Msun'"),
        ({"source": [COLLAPSE | {"winds": "none"}]}, 'choose "birth" or "rest"'),
        ({"source": [COLLAPSE | {"events_from": "-8 Msun"}]}, "events_from must be positive"),
        (
            {"source": [AGB, COLLAPSE]},
            "there is a gap without a join: 6.5-13 Msun between agb and core-collapse",
        ),
        ({"source": [AGB | {"sets": ["kobayashi-2006"]}, COLLAPSE]}, "overlap"),
        ({"source": [COLLAPSE, LATE | {"delay": 3}]}, "source 2 (thermonuclear): delay is a table, not 3"),
        ({"source": [COLLAPSE, LATE | {"delay": DELAY | {"slop": 1}}]}, "did you mean slope"),
        ({"source": [COLLAPSE, LATE | {"delay": DELAY | {"limits": 3}}]}, "delay.limits needs a list"),
        ({"source": [COLLAPSE, LATE | {"delay": DELAY | {"slope": [1]}}]}, "delay.slope is one number"),
        ({"source": [COLLAPSE, LATE | {"delay": {"form": "powerlaw"}}]}, "did you mean power-law"),
        ({"source": [COLLAPSE, LATE | {"number": "1.3e-3 Msun"}]}, "wrong dimension"),
        ({"source": [COLLAPSE, LATE | {"number": -1}]}, "number is negative"),
        ({"source": [COLLAPSE, {k: v for k, v in LATE.items() if k != "delay"}]}, "the source lacks delay"),
        ({"source": [COLLAPSE, LATE | {"consumes": "star"}]}, "consumes 'star' isn't a remnant"),
        ({"join": [{"between": ["agb"]}]}, "join 1: join.between needs two names"),
        ({"join": [{"policy": "bridge"}]}, "join 1: the join lacks between"),
        ({"join": [{"between": ["agb", "x"], "police": "bridge"}]}, "join 1: key 'police' isn't known"),
        ({"join": [{"between": ["agb", "core-collapse"]}]}, "these aren't neighbours"),
        ({"join": {"between": 3}}, "join is a list, not a table"),
    ],
)
def test_bad_values_are_told_in_one_line(data, told):
    text = message(GOOD | data)
    assert text.startswith("population.toml: ")
    assert told in text
    assert len(text) < 400


@pytest.mark.parametrize(
    ("content", "told"),
    [
        (b"", "the file is empty"),
        (b" \n\n", "the file is empty"),
        (b"# nothing\n", "the population lacks metallicity and source"),
        (b"metallicity = 0.02\nsolar = asplund\n", "line 2 column 9: this isn't TOML"),
        (b'metallicity = 0.02\nsolar = "asplund\n', "line 2 column"),
        (b"metallicity = 0.02\nmetallicity = 0.03\n", "line 2 column"),
        (b"ages = [1,\n2,\n", "this isn't TOML"),
        (b"\x89PNG\r\n\x1a\n\x00\x00\xff", "isn't text in UTF-8"),
        (b"\x00\x00\x00", "this isn't TOML"),
        (b"a = " + b"[" * 5000 + b"]" * 5000, "nested too deeply"),
        (b"metallicity = " + b"9" * 5000, "a value can't be read"),
        (b"metallicity = 2020-01-01\nsource = []", "metallicity is one number"),
        (b"a" * 2_000_000, "larger than 1 MB"),
    ],
)
def test_bad_files_are_told_in_one_line(tmp_path, content, told):
    path = tmp_path / "population.toml"
    path.write_bytes(content)
    with pytest.raises(InputError) as caught:
        read_population(path)
    text = str(caught.value)
    assert text.startswith(f"{path}: ") and told in text and "\n" not in text and len(text) < 400


def test_no_file_and_a_folder(tmp_path):
    with pytest.raises(InputError, match="there is no such file"):
        read_population(tmp_path / "none.toml")
    with pytest.raises(InputError, match="this is a folder"):
        read_population(tmp_path)


LEAVES = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(),
    st.integers(min_value=10**300),
    st.floats(),
    st.text(max_size=8),
    st.sampled_from(["agb", "core-collapse", "kobayashi-2006", "1 Msun", "1e3 Myr", "hold", "bridge"]),
)
KEYS = st.sampled_from(
    [
        "metallicity",
        "ages",
        "species",
        "imf",
        "form",
        "limits",
        "slopes",
        "breaks",
        "lifetimes",
        "table",
        "source",
        "kind",
        "sets",
        "number",
        "delay",
        "slope",
        "join",
        "between",
        "policy",
        "edges",
        "from",
        "to",
        "steps",
        "implode",
        "winds",
        "events_from",
        "solar",
        "interpolation",
        "consumes",
    ]
)
JUNK = st.recursive(
    LEAVES, lambda inner: st.lists(inner, max_size=3) | st.dictionaries(KEYS, inner, max_size=4), max_leaves=8
)


@given(st.dictionaries(KEYS, JUNK, max_size=6))
def test_junk_is_an_input_error(data):
    with pytest.raises(InputError) as caught:
        population_from_dict(data | {"unheard-of": 1})
    assert "\n" not in str(caught.value)


@given(KEYS, JUNK, st.sampled_from(["top", "imf", "lifetimes", "agb", "late", "delay", "join", "edges"]))
def test_junk_in_one_place_is_read_or_refused(key, junk, place):
    data = {
        "metallicity": 0.02,
        "ages": ["1 Gyr"],
        "imf": {"form": "power-law", "slopes": [1.3, 2.3], "breaks": [0.5]},
        "lifetimes": {"table": "portinari-1998"},
        "source": [dict(AGB), {**LATE, "delay": dict(DELAY)}],
        "join": [{"between": ["agb", "core-collapse"]}],
        "edges": {"below": "swallow"},
    }
    tables = {
        "top": data,
        "agb": data["source"][0],
        "late": data["source"][1],
        "delay": data["source"][1]["delay"],
        "join": data["join"][0],
    }
    tables.get(place, data.get(place, data))[key] = junk
    try:
        population = population_from_dict(data)
    except InputError:
        return
    assert population_from_dict(tomllib.loads(population_to_toml(population))).ages == population.ages
