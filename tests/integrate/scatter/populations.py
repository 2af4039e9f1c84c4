"""Populations that the tests of the scatter share; sets made here are invented."""

import numpy as np

from steelyard.integrate import DelayedSource, Join, Population, StellarSource, imf
from steelyard.yields import Slice, YieldSet

Z = 0.02


def invented(id, kind, models, species=("H1", "O16"), initial=(0.7, 0.01)):
    """An invented set from {mass: (ejected, wind, total of each species)}."""
    mass = np.array(list(models), dtype=float)
    ejected, wind, total = (np.array([m[k] for m in models.values()], dtype=float) for k in range(3))
    x = np.array(initial, dtype=float)
    one = Slice(Z, mass, ejected, wind, total, total - np.outer(ejected, x), x)
    return YieldSet(id, kind, species, (one,))


#: 1 Msun of oxygen at 10 Msun, 4 at 40
PLAIN = invented("plain", "core-collapse", {10: (8, 1, (4, 1)), 40: (38, 10, (20, 4))})
#: 2 and 8 Msun
RICH = invented("rich", "core-collapse", {10: (8, 1, (4, 2)), 40: (38, 10, (20, 8))})

SALPETER = imf("salpeter-1955", limits=(0.1, 40))


def massive(sets=(PLAIN,), mass_function=SALPETER, interpolation="linear", **options):
    """Invented massive stars alone, which all die within 100 Myr."""
    source = StellarSource("core-collapse", list(sets), **options)
    return Population(
        Z, [source], imf=mass_function, species=["O"], ages=["100 Myr"], interpolation=interpolation
    )


def published(
    species=("H", "C", "N", "O", "Mg", "Si", "Fe"), ages=("20 Myr", "300 Myr", "13 Gyr"), **options
):
    """Published sets of three kinds."""
    return Population(
        0.014,
        [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"]),
            DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
        ],
        joins=[Join(("agb", "core-collapse"))],
        species=list(species),
        ages=list(ages),
        **options,
    )
