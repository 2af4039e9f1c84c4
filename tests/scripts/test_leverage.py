"""`steelyard leverage`, and the errors that `steelyard weigh --spread` prints."""

import json
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from steelyard.integrate.files import read_hdf5
from steelyard.scripts import terminal

runner = CliRunner()

SPREAD = """
[[spread]]
set = "kobayashi-2006"
elements = ["O", "Mg"]
sigma = 0.15
correlation_length = 0.1
common = 0.5
"""


def test_table_sentences_and_files(run):
    text = run("leverage", "--elements", "O,Fe", "--top", "2", "-o", "out")
    lines = text.splitlines()
    iron = next(line for line in lines if line.startswith("Fe"))
    assert iron.split()[1:3] == ["nomoto-1997-w7,", "event"] and "53.2 %" in iron
    assert (
        "If the event of nomoto-1997-w7 is wrong by a factor of 2 in Fe, the total yield of Fe moves by"
        in text
    )
    assert sum("birth composition" in line and "%" in line for line in lines) == 2
    assert sum(line.split()[:1] == ["sum"] and "100.0 %" in line for line in lines) == 2
    assert any(line.startswith("thermonuclear.number") and "+0.53" in line for line in lines)
    made = sorted(path.name for path in Path("out").iterdir())
    figures = ["leverage-by-mass", "mass-function-and-weights"]
    assert made == sorted(["leverage.csv", *(f"{one}.{kind}" for one in figures for kind in ("pdf", "png"))])
    assert Path("out/leverage-by-mass.png").read_bytes()[:4] == b"\x89PNG"


def test_shares_of_ranges_sum_to_a_hundred(run):
    text = run("leverage", "-e", "C", "-e", "Mn", "--net", "--no-figures")
    rows = text.split("% of each")[1].split("follow parameters")[0].splitlines()
    cells = [
        row.split()[-2:] for row in rows if row and row.split()[0].replace("-", "").replace(".", "").isdigit()
    ]
    cells += [row.split()[-2:] for row in rows if "nomoto" in row]
    assert np.array(cells, dtype=float).sum(axis=0) == pytest.approx([100, 100], abs=0.4)


def test_json_is_all_that_is_printed_and_sums(run):
    told = json.loads(run("leverage", "--elements", "O", "--ages", "10 Myr, 13.8 Gyr", "--net", "--json"))
    assert told["ages_yr"] == [1e7, 13.8e9] and told["convention"] == "net"
    made = sum(np.array(told["contribution"][s]["O"]).sum(axis=1) for s in told["sources"])
    born = sum(np.array(told["birth_composition"][s]["O"]) for s in told["sources"])
    np.testing.assert_allclose(made + born, told["yield"]["O"], rtol=1e-12)
    again = json.loads(run("weigh", "--json", "--ages", "10 Myr, 13.8 Gyr", "--species", "O"))
    np.testing.assert_allclose(told["yield"]["O"], again["sum"]["net"]["O"], rtol=1e-12)
    assert not list(Path().iterdir())


def test_young_population_says_that_nothing_is_made(run):
    text = run("leverage", "-e", "Fe", "--ages", "1 Myr")
    assert "Fe: no published model makes any of it by then." in text
    assert "not drawn: leverage-by-mass: nothing of Fe is made" in text


def test_own_population_file_and_its_elements(run):
    Path("mine.toml").write_text(
        'metallicity = 0.02\nspecies = ["Mg", "Al27"]\n'
        '[[source]]\nkind = "core-collapse"\nsets = ["kobayashi-2006"]\n'
    )
    told = json.loads(run("leverage", "mine.toml", "--json"))
    assert told["species"] == ["Mg", "Al27"] and {m["metallicity"] for m in told["models"]} == {0.02}


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["-e", "Xx"], "--elements: species 'Xx' isn't known"),
        (["-e", "U"], "no set of the population follows U"),
        (["-e", ","], "--elements names nothing"),
        (["--top", "0"], "give 1 or more"),
        (["--ages", "-3 Myr"], "age is negative"),
        (["nowhere.toml"], "there is no such file"),
    ],
)
def test_bad_words_are_refused(refused, words, said):
    assert said in refused("leverage", *words)


def test_weigh_prints_errors_beside_every_yield(run, monkeypatch):
    Path("spread.toml").write_text(SPREAD)
    words = (
        "weigh",
        "--species",
        "C,O,Mg,Fe",
        "--ages",
        "13.8 Gyr",
        "--spread",
        "spread.toml",
        "--no-figures",
    )
    text = run(*words)
    head = next(line.split() for line in text.splitlines() if line.strip().startswith("agb"))
    assert head == ["agb", "±", "core-collapse", "±", "thermonuclear", "±", "sum", "±", "[X/Fe]", "±"]
    oxygen = next(line.split() for line in text.splitlines() if line.startswith("O "))
    held = read_hdf5("yields.h5")
    at = held.species.index("O")
    assert f"{held.arrays['covariance'][0, at, at] ** 0.5:.1e}" == oxygen[-3]
    assert f"{held.arrays['error'][0, 1, at]:.1e}" in oxygen
    assert "kobayashi-2006: 0.15 dex on O, Mg" in text and "published by nobody" in text
    assert Path("yields-errors.csv").is_file()
    assert "the digits agree" in run("weigh", "yields.h5")
    # no room for all of them: those of sources are in the files
    monkeypatch.setattr(terminal, "PIPED_WIDTH", 80)
    narrow = run(*words)
    head = next(line.split() for line in narrow.splitlines() if line.strip().startswith("agb"))
    assert head == ["agb", "core-collapse", "thermonuclear", "sum", "±", "[X/Fe]", "±"]


def test_weigh_json_holds_errors(run):
    told = json.loads(run("weigh", "--species", "O,Fe", "--ages", "1 Gyr", "--spread", "assumed", "--json"))
    errors = told["errors"]
    whole = np.array(errors["covariance"])
    np.testing.assert_allclose(errors["standard_deviation"]["sum"]["O"], np.sqrt(whole[:, 0, 0]), rtol=1e-12)
    assert errors["stated"][0]["sigma"] == 0.15
    assert set(errors["standard_deviation"]) == {"agb", "core-collapse", "thermonuclear", "sum"}


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--spread", "nowhere.toml"], "nowhere.toml: there is no such file"),
        (["--spread", "bad.toml"], "bad.toml: spread of kobayashi-2007: the population has no such set"),
        (["--spread", "assumed", "--rate"], "leave out --rate"),
    ],
)
def test_bad_errors_are_refused(refused, words, said):
    Path("bad.toml").write_text(SPREAD.replace("2006", "2007"))
    assert said in refused("weigh", "--no-figures", *words)
