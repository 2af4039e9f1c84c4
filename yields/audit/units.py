"""Axes and columns in the wrong unit: grams for solar masses, Z/Zsun for Z, logarithms for values."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from ..grid import YieldSet
from .finding import Finding

#: the most metals by mass that any published grid of stars is born with, with room above
MOST_METALS = 0.1

#: Msun; the lightest star that dies within the age of the Universe, and the heaviest computed, with room
MASSES = (0.5, 1000.0)

#: yr; no star lives less, and no star with yields much longer than the Universe is old
LIFETIMES = (1e6, 3e11)


def axes(grid: YieldSet) -> Iterator[Finding]:
    """Check metallicities, masses and lifetimes against what stars have."""
    if grid.event:
        return
    for one in grid.slices:
        if one.metallicity > MOST_METALS:
            yield Finding(
                "error",
                "units",
                grid.id,
                f"Z = {one.metallicity:g} would be more metals than any star is born with",
                "Z is a mass fraction: if the paper gives Z/Zsun, multiply by its solar Z",
                one.metallicity,
                size=one.metallicity,
            )
        for row in np.flatnonzero((one.mass < MASSES[0]) | (one.mass > MASSES[1])):
            yield Finding(
                "error",
                "units",
                grid.id,
                f"an initial mass of {one.mass[row]:g} Msun is no star's that ejects yields",
                "check whether the mass is in Msun, not in g or as a logarithm",
                one.metallicity,
                float(one.mass[row]),
                size=float(one.mass[row]),
                unit="Msun",
            )
        if one.lifetime is None:
            continue
        for row in np.flatnonzero((one.lifetime < LIFETIMES[0]) | (one.lifetime > LIFETIMES[1])):
            yield Finding(
                "error",
                "units",
                grid.id,
                f"a lifetime of {one.lifetime[row]:.3g} yr is no star's",
                "check the unit of the lifetimes: yr, Myr or Gyr",
                one.metallicity,
                float(one.mass[row]),
                size=float(one.lifetime[row]),
                unit="yr",
            )


def logarithms(grid: YieldSet) -> Iterator[Finding]:
    """Find yields that look like logarithms: nearly all negative and of the size of an exponent."""
    convention = "net" if "total" in grid.derived else "total"
    values = np.concatenate([getattr(one, convention).ravel() for one in grid.slices])
    values = values[values != 0]
    if values.size < 3:
        return
    negative = float((values < 0).mean())
    middle = float(np.median(values))
    if negative > 0.9 and -60 < middle < -1:
        yield Finding(
            "error",
            "units",
            grid.id,
            f"{negative:.0%} of the yields are negative, their median is {middle:.3g}: they look like log10",
            "say so in the layout, so that the figures are taken as logarithms",
            size=middle,
        )
