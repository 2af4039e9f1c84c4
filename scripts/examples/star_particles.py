"""Feed a simulation: what star particles eject from one time step to the next, by look-up.

The particles are invented: born at random over 1 Gyr, with random masses and metallicities. The
table is made once, with an error that is known, and saved; each step is then one call.

    python -m steelyard.scripts.examples.star_particles
"""

import sys
import tempfile
from pathlib import Path

import numpy as np

from steelyard.integrate import DelayedSource, Join, Population, StellarSource
from steelyard.integrate.stars import StarTable, star_table


def prepare(path: Path, error: float = 1e-3) -> StarTable:
    """Read the table of a population, or make and save it if it isn't there yet."""
    if path.exists():
        return StarTable.load(path)
    sources = [
        StellarSource("agb", ["karakas-2010", "doherty-2014"]),
        StellarSource("core-collapse", ["kobayashi-2006"]),
        DelayedSource("thermonuclear", ["nomoto-1997-w7"], number=1.3e-3, delay="maoz-graur-2017"),
    ]
    species = ["H", "He", "C", "N", "O", "Mg", "Si", "Fe"]
    stars = Population(0.014, sources, joins=[Join(("agb", "core-collapse"))], species=species)
    table = star_table(stars, metallicities=(1e-4, 0.04), error=error)
    table.save(path)
    return table


def simulate(table: StarTable, particles: int, steps: int = 50, step: float = 2e7) -> dict[str, np.ndarray]:
    """Run the time steps, and return what each ejected of every column, and the particles."""
    rng = np.random.default_rng(11)
    born = rng.uniform(0, 1e9, particles)
    metallicity = 10 ** rng.uniform(-4, -1.5, particles)
    mass = rng.uniform(1e3, 1e4, particles)
    ejected = np.zeros((steps, len(table.columns)))
    for i in range(steps):
        end = (i + 1) * step
        alive = born < end
        age = np.maximum(i * step - born[alive], 0.0)
        dt = end - born[alive] - age
        ejected[i] = table.eject(age, metallicity[alive], dt, mass[alive], accounts=True).sum(axis=0)
    return {"ejected": ejected, "born": born, "metallicity": metallicity, "mass": mass}


def main(path: Path | None = None, particles: int = 20_000) -> None:
    """Simulate, and print what the particles have given back."""
    with tempfile.TemporaryDirectory() as folder:
        table = prepare(path or Path(folder) / "stars.h5")
    run = simulate(table, particles)
    print(f"{particles} particles; table of {table.nbytes / 1e6:.1f} MB, error below {table.error:g}")
    for name, value in zip(table.columns, run["ejected"].sum(axis=0), strict=True):
        print(f"{name}: {value / run['mass'].sum():.3e} per Msun formed")


if __name__ == "__main__":
    main(*(Path(argument) for argument in sys.argv[1:2]))
