"""`steelyard scatter` from the command line."""

import json
from pathlib import Path

import h5py
import numpy as np
import pytest
from typer.testing import CliRunner

from steelyard.integrate.popfile import default_population

runner = CliRunner()

SMALL = ("scatter", "--mass", "100", "--count", "60", "--species", "O,Fe")


def test_json_holds_the_exact_law_and_the_sample(run):
    found = json.loads(run(*SMALL, "--json"))
    assert (found["mass"], found["count"], found["seed"], found["mode"]) == (100, 60, 1, "poisson")
    assert len(found["ages_yr"]) == 20 and found["species"] == ["O", "Fe"]
    weighed = default_population().weigh(found["ages_yr"])
    assert found["exact"]["mean"]["O"] == pytest.approx((100 * weighed.get("O")).tolist(), rel=1e-12)
    for part in ("mean", "sigma", "skewness", "gaussian"):
        assert list(found["exact"][part]) == ["O", "Fe"] and len(found["exact"][part]["O"]) == 20
    assert list(found["sample"]["quantiles"]) == ["0.025", "0.16", "0.5", "0.84", "0.975"]
    error = found["exact"]["sigma"]["O"][-1] / np.sqrt(60)
    assert abs(found["sample"]["mean"]["O"][-1] - found["exact"]["mean"]["O"][-1]) < 4 * error
    assert found["exact"]["gaussian"]["O"][-1] is False
    assert not list(Path().iterdir())


def test_files_and_table(run):
    text = run(*SMALL, "--output", "out", "--ages", "30 Myr, 13.8 Gyr", "--ratio", "O/Fe", "--workers", "2")
    assert sorted(p.name for p in Path("out").iterdir()) == [
        "ratio-scatter.pdf",
        "ratio-scatter.png",
        "scatter.csv",
        "scatter.h5",
    ]
    assert "Total yields up to 30 Myr, Msun" in text and "up to 13.8 Gyr" in text
    assert "60 populations of 100 Msun, Poisson numbers of stars, seed 1" in text
    assert "a Gaussian fails for 2 of 2 species" in text
    with h5py.File("out/scatter.h5") as file:
        assert file["yields"].shape == (60, 2, 3, 2)
        mean = file["mean"][-1, 0]
    row = next(line.split() for line in text.split("13.8 Gyr", 1)[1].splitlines() if line.startswith("O "))
    assert row[1] == f"{mean:.3e}"


def test_a_seed_gives_the_same_bytes(run):
    for name, workers in (("a", "1"), ("b", "3")):
        run(*SMALL, "-o", name, "--no-figures", "--seed", "5", "--workers", workers)
    for name in ("scatter.h5", "scatter.csv"):
        assert Path("a", name).read_bytes() == Path("b", name).read_bytes()


@pytest.mark.parametrize(
    ("mode", "says"), [("number", "number of stars is rounded"), ("mass", "0 per Msun born")]
)
def test_biases_are_told(run, mode, says):
    assert says in run(*SMALL, "--mode", mode, "--no-figures")


def test_a_population_file_gives_its_ages_and_species(run):
    Path("mine.toml").write_text(
        'metallicity = 0.02\nspecies = ["O", "Mg"]\nages = ["20 Myr"]\n'
        '[[source]]\nkind = "core-collapse"\nsets = ["kobayashi-2006"]\n'
    )
    found = json.loads(run("scatter", "mine.toml", "--count", "20", "--net", "--json"))
    assert found["ages_yr"] == [2e7] and found["convention"] == "net" and found["species"] == ["O", "Mg"]


def test_a_young_population_has_no_figure_but_a_table(run):
    text = run(*SMALL, "--ages", "1 Myr", "-o", "out")
    assert "not drawn: ratio-scatter: [O/Fe] of the ejecta isn't defined" in text
    assert "eject nothing by the last age" in text


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        (("--mass", "10 Myr"), "wrong dimension"),
        (("--mass", "0"), "mass isn't one mass above 0"),
        (("--count", "0"), "count isn't a whole number from 1"),
        (("--count", "many"), "valid integer"),
        (("--seed", "-1"), "seed isn't a whole number"),
        (("--mode", "masss"), "did you mean mass?"),
        (("--workers", "-2"), "-2 threads"),
        (("--ages", "-1 Gyr"), "age is negative"),
        (("--species", "Xx"), "isn't known"),
        (("--ratio", "O"), "isn't a ratio"),
        (("--ratio", "O/Xy"), "--ratio"),
        (("--mass", "1e14"), "more than 1e+12 stars"),
        (("nowhere.toml",), "there is no such file"),
        (("--count", "100000000", "--mass", "1"), "GiB"),
    ],
)
def test_refusals(refused, arguments, says):
    assert says in refused("scatter", "--species", "O,Fe", *arguments)
