"""The schema of population files, by a validator that isn't ours, against the reader."""

import copy
import json
import tomllib

import pytest
from typer.testing import CliRunner

from steelyard.integrate.popfile import (
    default_population,
    population_from_dict,
    population_to_toml,
    reading,
    template,
)
from steelyard.integrate.popfile.schema import population_schema
from steelyard.scripts.main import app
from steelyard.yields.errors import InputError

jsonschema = pytest.importorskip("jsonschema")


@pytest.fixture(scope="module")
def validator():
    made = population_schema()
    jsonschema.Draft202012Validator.check_schema(made)
    return jsonschema.Draft202012Validator(made)


def changed(path, value):
    """The template's tables with one value put in, or taken out where it is None."""
    data = copy.deepcopy(tomllib.loads(template()))
    inside = data
    *way, last = path
    for step in way:
        inside = inside[step]
    if value is None:
        del inside[last]
    else:
        inside[last] = value
    return data


GOOD = [
    (("ages",), ["10 Myr", 1e9]),
    (("species",), ["O", "Al26"]),
    (("imf",), {"form": "power-law", "slopes": [1.3, 2.3], "breaks": ["0.5 Msun"]}),
    (("imf",), {"form": "power-law", "slopes": [{"value": 2.3, "per_dex": 0.2, "reference": 0.014}]}),
    (("imf",), {"form": "lognormal", "centre": "0.22 Msun", "sigma": 0.57}),
    (("lifetimes", "table"), "sets"),
    (("source", 0, "limits"), ["1 Msun", "8 Msun"]),
    (("source", 1, "implode"), [["20 Msun", "25 Msun"]]),
    (("source", 1, "implode"), {"masses": ["15 Msun", "20 Msun", "40 Msun"], "probability": [0.2, 0.6]}),
    (("source", 1, "sets"), [{"kobayashi-2006": 0.5, "limongi-chieffi-2018-R-v000": 0.5, "to": "30 Msun"}]),
    (("source", 2, "number"), {"value": "1.3e-3 / Msun", "power": -0.3, "reference": 0.014}),
    (("source", 2, "delay"), "maoz-graur-2017"),
    (("source", 2, "delay"), {"form": "exponential", "timescale": "1 Gyr", "limits": [4e7, 1.38e10]}),
    (("source", 2, "kind"), "late"),
    (("join", 0, "policy"), "return-only"),
    (("edges",), {"below": "return-only"}),
]

BAD = [
    (("metallicity",), None),
    (("metalicity",), 0.02),
    (("metallicity",), True),
    (("solar",), "asplund-2008"),
    (("species",), "all"),
    (("ages",), []),
    (("ages", "steps"), 1),
    (("ages", "step"), 3),
    (("interpolation",), "square"),
    (("imf", "form"), "salpeter"),
    (("imf", "form"), None),
    (("imf", "limit"), [1, 2]),
    (("imf", "limits"), ["1 Msun"]),
    (("lifetimes", "table"), "portinari"),
    (("source",), []),
    (("source", 0, "kind"), None),
    (("source", 0, "sets"), None),
    (("source", 0, "sets"), "karakas-2010"),
    (("source", 0, "events_from"), "8 Msun"),
    (("source", 0, "winds"), "lost"),
    (("source", 1, "implode"), {"masses": [20, 25]}),
    (("source", 2, "delay"), None),
    (("source", 2, "delay"), "salpeter-1955"),
    (("source", 2, "delay", "form"), "step"),
    (("source", 2, "consumes"), "planet"),
    (("join", 0, "between"), ["agb"]),
    (("join", 0, "policy"), "guess"),
    (("edges", "below"), "reach-up"),
]


def test_takes_what_the_reader_writes(validator):
    for text in (template(), population_to_toml(default_population())):
        validator.validate(tomllib.loads(text))


@pytest.mark.parametrize(("path", "value"), GOOD)
def test_takes_what_the_reader_takes(validator, path, value):
    data = changed(path, value)
    population_from_dict(data)
    validator.validate(data)


@pytest.mark.parametrize(("path", "value"), BAD)
def test_refuses_with_the_reader(validator, path, value):
    data = changed(path, value)
    assert not validator.is_valid(data)
    with pytest.raises(InputError):
        population_from_dict(data)


def test_has_the_keys_of_the_reader():
    made = population_schema()
    assert set(made["properties"]) == set(reading._TOP)
    source = made["properties"]["source"]["items"]
    assert set(source["then"]["properties"]) == set(reading._AGB)
    assert set(source["else"]["then"]["properties"]) == set(reading._COLLAPSE)
    assert set(source["else"]["else"]["properties"]) == set(reading._DELAYED)


def test_explains_keys_in_the_words_of_the_template():
    made = population_schema()["properties"]
    assert made["metallicity"]["description"].startswith("Mass fraction of metals at birth.")
    collapse = made["source"]["items"]["else"]["then"]["properties"]
    assert collapse["events_from"]["description"] == "Lowest initial mass that dies as a core-collapse event."


def test_is_printed_written_and_named_in_a_comment(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    runner = CliRunner()
    out = runner.invoke(app, ["weigh", "-", "--schema"])
    assert out.exit_code == 0 and json.loads(out.stdout) == population_schema()
    told = runner.invoke(app, ["weigh", "--schema"]).stdout
    assert (
        told.startswith("written: population.schema.json; ") and "#:schema ./population.schema.json" in told
    )
    assert json.loads((tmp_path / "population.schema.json").read_text()) == population_schema()
    # the line that names a schema is a comment to TOML
    hinted = f"#:schema ./population.schema.json\n{template()}"
    assert population_from_dict(tomllib.loads(hinted)).ages == default_population().ages
