"""The leaky box against closed-box theory, and its budget of every element."""

import ast
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from steelyard.integrate import Population, StellarSource
from steelyard.integrate.handoff import handoff, write_handoff
from steelyard.integrate.popfile import default_population
from steelyard.scripts.examples import leaky_box
from steelyard.scripts.examples.leaky_box import Galaxy, Table, read, run


@pytest.fixture(scope="module")
def made():
    population = replace(default_population(), species=["H", "He", "C", "O", "Mg", "Fe"])
    return handoff(population, (1e-4, 0.03), error=0.05)


@pytest.fixture(scope="module")
def table(made, tmp_path_factory):
    path = tmp_path_factory.mktemp("box") / "yields.h5"
    write_handoff(made, path)
    return read(path)


def test_it_knows_nothing_of_steelyard():
    tree = ast.parse(Path(leaky_box.__file__).read_text())
    found = {a.name for n in ast.walk(tree) if isinstance(n, ast.Import) for a in n.names}
    found |= {n.module for n in ast.walk(tree) if isinstance(n, ast.ImportFrom)}
    assert found == {"sys", "dataclasses", "h5py", "numpy"}


def test_mass_of_every_element_is_conserved(table):
    out = run(table, Galaxy(lost={"thermonuclear": 0.5, "core-collapse": 0.3}, steps=80))
    there = out["gas"][-1] + out["locked"] + out["left"]
    assert np.all(np.abs(there - out["came"] - out["made"]) < 1e-10 * out["came"].sum())
    assert out["made"][table.species.index("Fe")] > 0 > out["made"][table.species.index("H")]


def test_a_closed_box_follows_the_simple_model():
    """Z = y ln(1/mu): Searle & Sargent (1972, ApJ 173, 25); Tinsley (1980, Fund. Cosmic Phys. 5, 287).

    Stars of 13 Msun and more only, at one metallicity, so that recycling is nearly instantaneous.
    """
    stars = Population(0.004, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["H", "He", "O"])
    made = handoff(stars, [0.00399, 0.004], np.geomspace(1e6, 1.38e10, 200), chosen=False)
    last = made.results[1]
    table = Table(
        made.metallicities,
        made.ages,
        list(last.species),
        list(last.sources),
        {
            "net": np.array([np.moveaxis(r.net, 0, 1) for r in made.results]),
            "ejected": np.array([r.ejected.T for r in made.results]),
        },
    )
    out = run(table, Galaxy(inflow=0.0, outflow=0.0, star_formation=1e-10, steps=250))
    oxygen = out["gas"][-1][2] / out["mass"][-1]
    simple = last.get("O", convention="net")[-1] / (1 - last.returned[-1])
    expected = simple * np.log(out["mass"][0] / out["mass"][-1])
    assert oxygen == pytest.approx(expected, rel=0.03)


def test_losing_type_ia_ejecta_lowers_iron_and_raises_alpha_over_iron(table):
    found = []
    for share in (0.0, 0.8):
        gas = run(table, Galaxy(lost={"thermonuclear": share}, steps=80))["gas"][-1]
        found.append({s: gas[i] / gas[0] for i, s in enumerate(table.species)})
    kept, lost = found
    assert lost["Fe"] < 0.8 * kept["Fe"]
    assert lost["Mg"] / lost["Fe"] > 1.2 * kept["Mg"] / kept["Fe"]


def test_the_same_digits_from_memory(made, table):
    memory = Table(
        made.metallicities,
        made.ages,
        list(made.results[0].species),
        list(made.results[0].sources),
        {
            "net": np.array([np.moveaxis(r.net, 0, 1) for r in made.results]),
            "ejected": np.array([r.ejected.T for r in made.results]),
        },
    )
    a, b = (run(t, Galaxy(steps=40)) for t in (memory, table))
    assert np.array_equal(a["gas"], b["gas"]) and np.array_equal(a["locked"], b["locked"])
