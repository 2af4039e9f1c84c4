"""Coverage: which models a set has, and where its grid is ragged."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from ..grid import YieldSet
from .finding import Finding, listed


def coverage(grid: YieldSet) -> tuple[tuple[float, ...], tuple[float, ...], NDArray[np.bool_]]:
    """Return the map of a set's models.

    Parameters
    ----------
    grid : YieldSet

    Returns
    -------
    masses : tuple of float
        Every initial mass of some slice, Msun.
    metallicities : tuple of float
    has : ndarray of bool, shape (metallicities, masses)
        Whether there is a model.

    Examples
    --------
    >>> from steelyard.yields import load
    >>> masses, metallicities, has = coverage(load("kobayashi-2006"))
    >>> has.shape, bool(has.all())
    ((4, 7), True)
    """
    masses = np.array(grid.masses)
    has = np.array([np.isin(masses, one.mass) for one in grid.slices])
    return tuple(masses.tolist()), grid.metallicities, has


def ragged(grid: YieldSet) -> Iterator[Finding]:
    """Tell where slices end before others do, for no metallicity between is served there."""
    if grid.event or len(grid.slices) < 2:
        return
    low, high = min(grid.masses), max(grid.masses)
    short = [
        (one.metallicity, float(one.mass[0]), float(one.mass[-1]))
        for one in grid.slices
        if one.mass[0] > low or one.mass[-1] < high
    ]
    if not short:
        return
    parts = [f"{a:g} to {b:g} at Z = {z:g}" for z, a, b in short]
    yield Finding(
        "note",
        "coverage",
        grid.id,
        f"models run from {low:g} to {high:g} Msun, but only {listed(parts)}",
        "between two slices only the masses that both have are served; a join or another set covers the rest",
        size=float(len(short)),
    )
