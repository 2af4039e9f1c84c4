"""Weigh many populations on many processes, into a file that outlasts an interruption.

Slopes of the mass function and numbers of Type Ia supernovae are drawn from invented distributions.
Stopped and run again with the same file, the script goes on where it was. On a cluster, put a
``dask.distributed.Client`` in place of the pool; nothing else changes.

    python -m steelyard.scripts.examples.many_populations populations.h5
"""

import sys
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np

from steelyard.integrate import DelayedSource, Join, Population, StellarSource
from steelyard.integrate.ensemble import ensemble


def main(path: Path = Path("populations.h5"), members: int = 100_000, workers: int = 2) -> None:
    """Weigh the members, and print the mean and spread of each species."""
    sources = [
        StellarSource("agb", ["karakas-2010", "doherty-2014"]),
        StellarSource("core-collapse", ["kobayashi-2006"]),
        DelayedSource("thermonuclear", ["nomoto-1997-w7"], number=1.3e-3, delay="maoz-graur-2017"),
    ]
    joins = [Join(("agb", "core-collapse"))]
    species = ["C", "O", "Mg", "Fe"]
    stars = Population(0.014, sources, joins=joins, species=species, ages=["30 Myr", "1 Gyr", "13 Gyr"])
    rng = np.random.default_rng(8)
    thetas = {
        "imf.slopes[-1]": rng.normal(2.3, 0.15, members),
        "thermonuclear.number": rng.lognormal(np.log(1.3e-3), 0.3, members),
    }
    with ProcessPoolExecutor(workers) as pool:
        found = ensemble(stars, thetas, path, executor=pool)
    summary = found.summary()
    for j, name in enumerate(species):
        mean, spread = summary.mean[-1, j], summary.deviation[-1, j]
        print(f"{name} at {found.ages[-1]:.3g} yr: {mean:.3e} +- {spread:.1e} Msun per Msun formed")


if __name__ == "__main__":
    main(*(Path(argument) for argument in sys.argv[1:2]))
