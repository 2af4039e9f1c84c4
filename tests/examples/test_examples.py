"""The other examples run, and what they print follows from weighing the same population."""

from dataclasses import replace

import numpy as np
import pytest

from steelyard.integrate.popfile import population_from_dict
from steelyard.scripts.examples import many_populations, star_particles


def test_star_particles(tmp_path, capsys):
    path = tmp_path / "stars.h5"
    star_particles.main(path, particles=300)
    told = dict(line.rsplit(": ", 1) for line in capsys.readouterr().out.splitlines()[1:])
    table = star_particles.prepare(path)
    run = star_particles.simulate(table, 300)
    # the oldest particle and three others, weighed afresh
    import tomllib

    stars = population_from_dict(tomllib.loads(table.attributes["population"]))
    for i in (int(run["born"].argmin()), 5, 50, 250):
        age = 1e9 - run["born"][i]
        exact = replace(stars, metallicity=run["metallicity"][i]).weigh([age]).total.sum(axis=0)[0]
        got = table.eject(0.0, run["metallicity"][i], age)[0]
        assert np.all(np.abs(got - exact) < 1e-3 * (exact + 0.01 * exact.sum()))
    whole = table.eject(0.0, run["metallicity"], 1e9 - run["born"], run["mass"], accounts=True).sum(axis=0)
    assert run["ejected"].sum(axis=0) == pytest.approx(whole, rel=1e-10)
    assert float(told["O"].split()[0]) == pytest.approx(whole[4] / run["mass"].sum(), rel=1e-3)


def test_many_populations(tmp_path, capsys):
    path = tmp_path / "populations.h5"
    many_populations.main(path, members=200)
    first = capsys.readouterr().out
    many_populations.main(path, members=200)
    assert capsys.readouterr().out == first
    assert [line.split()[0] for line in first.splitlines()] == ["C", "O", "Mg", "Fe"]
