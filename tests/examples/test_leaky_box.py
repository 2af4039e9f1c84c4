"""The leaky box against closed-box theory, and its budget of every element."""

import ast
from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import pytest

from steelyard.integrate import Population, StellarSource
from steelyard.integrate.handoff import handoff, write_handoff
from steelyard.integrate.popfile import default_population
from steelyard.integrate.scatter import scatter, write_scatter
from steelyard.scripts.examples import leaky_box
from steelyard.scripts.examples.leaky_box import Galaxy, Table, read, read_chance, run


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


@pytest.fixture(scope="module")
def chance(made, table, tmp_path_factory):
    """Populations of 1000 Msun at the lowest metallicity, drawn star by star."""
    path = tmp_path_factory.mktemp("drawn") / "scatter.h5"
    population = made.results[0].population
    ages = np.geomspace(3e6, 1.38e10, 25)
    write_scatter(scatter(population, 1e3, 1500, ages=ages, convention="net", seed=5), path)
    return path


def test_a_scatter_file_gives_the_spread_that_its_exact_covariance_tells(table, chance):
    """Variances of independent draws add: Campbell's theorem, kept in the file, against galaxies run."""
    steady = {"star_formation": 5e-11, "history": ((1e11, 1.0),)}
    few = Galaxy(gas=2e5, inflow=0.0, outflow=0.0, steps=25, until=8e9, **steady)
    drawn = read_chance(chance, table)
    ends = np.array([run(table, few, drawn, seed)["gas"][-1] for seed in range(150)])
    mean = run(table, few)
    step = few.until / few.steps
    with h5py.File(chance) as file:
        ages, covariance = file["time"][:], file["covariance"][:]
    for name in ("O", "Mg", "Fe"):
        i = table.species.index(name)
        variance = 0.0
        for k in range(few.steps - 1):
            stars = few.star_formation * mean["mass"][k] * step
            count = round(stars / drawn.mass)
            age = (few.steps - k - 1) * step
            of_one = np.interp(np.log10(age), np.log10(ages), covariance[:, i, i])
            variance += (stars / (count * drawn.mass)) ** 2 * count * of_one
        assert ends[:, i].std(ddof=1) == pytest.approx(variance**0.5, rel=0.2)
        assert ends[:, i].mean() == pytest.approx(mean["gas"][-1][i], abs=4 * (variance / 150) ** 0.5)


def test_mass_is_conserved_with_chance_too(table, chance):
    out = run(table, Galaxy(gas=3e4, inflow=3e-6, steps=30), read_chance(chance, table), seed=2)
    assert np.all(abs(out["gas"][-1] + out["locked"] + out["left"] - out["came"] - out["made"]) < 1e-10 * 3e4)
    again = run(table, Galaxy(gas=3e4, inflow=3e-6, steps=30), read_chance(chance, table), seed=3)
    metals = [np.log10(one["gas"][-1][3:].sum() / one["mass"][-1]) for one in (out, again)]
    assert metals[0] != metals[1]


def test_other_draws_are_refused(made, table, tmp_path):
    drawn = scatter(made.results[0].population, 1e3, 5, ages=[1e9], convention="total")
    write_scatter(drawn, tmp_path / "total.h5")
    with pytest.raises(SystemExit, match="net yields"):
        read_chance(tmp_path / "total.h5", table)
