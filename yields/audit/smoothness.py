"""Values that break the smooth run over mass and metallicity.

A model's value is compared, in the log, with the range of its two neighbours in mass, and with what the
slices of neighbouring metallicity have at its mass, after these are shifted so as to meet its own slice at
either of the two neighbours. How far it lies outside of both ranges, on the same side, is its departure.
Yields depart by nature, some species much and others little; so a departure counts only where it exceeds
that of every other model, for the same species, by a set factor: it stands alone.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from ..grid import YieldSet
from .finding import Finding, listed

Array = NDArray[np.float64]

#: mass fraction of the ejecta under which a value is nothing, so that no run of it can break
FLOOR = 1e-11

#: dex by which a total stands out: a factor of 3
ALONE = float(np.log10(3))

#: dex for what is more than this of the ejecta in half of the models, for it scatters less and matters more
ALONE_MAJOR = 0.25
MAJOR = 1e-4

#: dex for net yields, which pass through zero, and for masses and lifetimes, which hardly scatter
ALONE_NET = 0.6
ALONE_MASS = 0.15

#: times the departure that is usual for the farthest model of a species: in a restless set more is natural
USUAL = 1.7

#: of what was there at birth: a net yield under this says that the star left the species alone
TOUCHED = 0.03


def departures(masses: Sequence[Array], values: Sequence[Array]) -> Array:
    """Return how far every model lies outside the range of its neighbours.

    Parameters
    ----------
    masses : sequence of ndarray, shape (n_k,)
        Initial masses of each slice, in order of metallicity.
    values : sequence of ndarray, shape (n_k, s)
        Values that scatter evenly: logarithms.

    Returns
    -------
    ndarray, shape (sum of n_k, s)
        Signed; 0 inside the range over mass or over metallicity.

    Examples
    --------
    >>> m = np.arange(1.0, 6.0)
    >>> departures([m], [np.array([[0.0], [0.1], [3.0], [0.3], [0.4]])]).ravel()
    array([-0.1,  0. ,  2.7, -0.1,  0. ])
    """
    out = []
    for k, (mass, y) in enumerate(zip(masses, values, strict=True)):
        near = _neighbour_rows(len(mass))
        over_mass = _outside(y, y[near].min(axis=0), y[near].max(axis=0))
        beside = []
        for other in (k - 1, k + 1):
            if 0 <= other < len(masses):
                there = _resample(mass, masses[other], values[other])
                beside += [there + (y - there)[rows] for rows in near]
        if beside:
            over_z = _outside(y, np.minimum.reduce(beside), np.maximum.reduce(beside))
            alike = np.sign(over_z) == np.sign(over_mass)
            size = np.where(alike, np.minimum(np.abs(over_mass), np.abs(over_z)), 0.0)
            over_mass = np.sign(over_mass) * size
        out.append(over_mass)
    return np.concatenate(out)


def _neighbour_rows(n: int) -> NDArray[np.int_]:
    """Rows of the two neighbours of each model, shape (2, n): on both sides or, at an end, the next two."""
    if n == 1:
        return np.zeros((2, 1), dtype=int)
    if n == 2:
        return np.array([[1, 0], [1, 0]])
    return np.array([[1, *range(n - 2), n - 3], [2, *range(2, n), n - 2]])


def _outside(y: Array, low: Array, high: Array) -> Array:
    return np.where(y > high, y - high, np.where(y < low, y - low, 0.0))


def _resample(mass: Array, nodes: Array, values: Array) -> Array:
    x = np.log(mass)
    at = np.log(nodes)
    if len(nodes) == 1:
        return np.repeat(values, len(mass), axis=0)
    i = np.clip(np.searchsorted(at, x) - 1, 0, len(nodes) - 2)
    share = np.clip((x - at[i]) / (at[i + 1] - at[i]), 0.0, 1.0)[:, None]
    return (1 - share) * values[i] + share * values[i + 1]


def standing_alone(masses: Sequence[Array], departure: Array) -> tuple[NDArray[np.int_], Array]:
    """Return, for each column, the model that departs most and by how much more than any other.

    Parameters
    ----------
    masses : sequence of ndarray
    departure : ndarray, shape (models, s)

    Returns
    -------
    model : ndarray of int, shape (s,)
    lead : ndarray, shape (s,)
        Of the absolute departures; the two neighbours in mass, which a bad value spoils, left out.
    """
    size = np.abs(departure)
    model = size.argmax(axis=0)
    slice_of = np.concatenate([np.full(len(m), k) for k, m in enumerate(masses)])
    position = np.arange(len(slice_of))[:, None]
    near = (np.abs(position - model) <= 1) & (slice_of[:, None] == slice_of[model])
    others = np.where(near, 0.0, size)
    return model, size.max(axis=0) - others.max(axis=0)


def totals(grid: YieldSet) -> Iterator[Finding]:
    """Find total yields that break the run."""
    if grid.event:
        return
    with np.errstate(divide="ignore", invalid="ignore"):
        values = [np.log10(np.maximum(_per_ejecta(one.total, one.ejected), FLOOR)) for one in grid.slices]
    major = np.median(np.concatenate(values), axis=0) > np.log10(MAJOR)
    yield from _breaks(grid, "total", values, np.where(major, ALONE_MAJOR, ALONE))


def nets(grid: YieldSet) -> Iterator[Finding]:
    """Find published net yields that break the run: on a scale linear about zero, logarithmic beyond.

    Models whose totals break it are left out: they are told already.
    """
    if grid.event or "net" in grid.derived:
        return
    told = {(f.metallicity, f.mass) for f in totals(grid)}
    shares = [_per_ejecta(one.net, one.ejected) for one in grid.slices]
    usual = np.maximum(np.median(np.abs(np.concatenate(shares)), axis=0) / 10, FLOOR)
    values = []
    for one, share in zip(grid.slices, shares, strict=True):
        scale = np.maximum(usual, TOUCHED * one.initial)
        values.append(np.arcsinh(share / scale) / np.log(10))
    found = _breaks(grid, "net", values, np.full(len(grid.species), ALONE_NET))
    yield from (f for f in found if (f.metallicity, f.mass) not in told)


def masses(grid: YieldSet) -> Iterator[Finding]:
    """Find remnants, ejected masses and lifetimes that break the run."""
    if grid.event:
        return
    axis = [one.mass for one in grid.slices]
    accounts = {
        "remnant": [one.remnant for one in grid.slices],
        "ejected mass": [one.ejected for one in grid.slices],
    }
    lifetimes = [one.lifetime for one in grid.slices]
    if all(values is not None for values in lifetimes):
        accounts["lifetime"] = [v for v in lifetimes if v is not None]
    for name, columns in accounts.items():
        values = [np.log10(np.maximum(v, 1e-3))[:, None] for v in columns]
        if name == "ejected mass":
            values = [y - np.log10(mass)[:, None] for y, mass in zip(values, axis, strict=True)]
        departure = departures(axis, values)
        model, lead = standing_alone(axis, departure)
        if lead[0] < ALONE_MASS:
            continue
        k, row = _slice_row(axis, int(model[0]))
        one = grid.slices[k]
        unit = "yr" if name == "lifetime" else "Msun"
        yield Finding(
            "warning",
            "smooth run",
            grid.id,
            f"{name} is {columns[k][row]:.4g} {unit}, {_factor(float(departure[model[0], 0]))}"
            f" its neighbours ({_neighbours(one.mass, columns[k], row)})",
            "compare the masses of this model and its neighbours with the paper",
            one.metallicity,
            float(one.mass[row]),
            size=float(departure[model[0], 0]),
            unit="dex",
        )


def _per_ejecta(values: Array, ejected: Array) -> Array:
    return values / np.maximum(ejected, 1e-3)[:, None]


def _breaks(grid: YieldSet, convention: str, values: Sequence[Array], alone: Array) -> Iterator[Finding]:
    axis = [one.mass for one in grid.slices]
    departure = departures(axis, values)
    model, lead = standing_alone(axis, departure)
    farthest = np.abs(departure).max(axis=0)
    out = (lead > alone) & (farthest > np.where(alone < ALONE, 0.0, USUAL * np.median(farthest)))
    for position in np.unique(model[out]):
        columns = np.flatnonzero((model == position) & out)
        columns = columns[np.argsort(-np.abs(departure[position, columns]))]
        k, row = _slice_row(axis, int(position))
        one = grid.slices[k]
        names = tuple(grid.species[c] for c in columns)
        # what stands out less, beside what stands out by itself, belongs to the same story
        also = np.flatnonzero(
            (np.abs(departure[position]) > np.log10(3)) & ~np.isin(np.arange(len(lead)), columns)
        )
        also = also[np.argsort(-np.abs(departure[position, also]))]
        worst = columns[0]
        figures = getattr(one, convention)[:, worst]
        shares = _per_ejecta(figures[:, None], one.ejected)[:, 0]
        more = f"; {listed([grid.species[c] for c in also])} too" if also.size else ""
        yield Finding(
            "warning" if convention == "total" else "note",
            "smooth run",
            grid.id,
            f"{listed(names)}: the {convention} yield of {names[0]}, {figures[row]:.3g} Msun or"
            f" {shares[row]:.3g} of the ejecta, lies {_factor(float(departure[position, worst]))} the run of"
            f" its neighbours ({_neighbours(one.mass, shares, row)}){more}",
            "look it up in the paper; if it stands there, mind that sums over the set follow this one model",
            one.metallicity,
            float(one.mass[row]),
            (*names, *(grid.species[c] for c in also)),
            float(departure[position, worst]),
            "dex",
        )


def _factor(dex: float) -> str:
    """Say how far something lies off."""
    side = "above" if dex > 0 else "below"
    power = abs(dex)
    return f"a factor {10**power:.3g} {side}" if power < 6 else f"{power:.0f} orders {side}"


def _neighbours(mass: Array, values: Array, row: int) -> str:
    near = sorted(range(len(mass)), key=lambda i: (abs(i - row), i))[1:3]
    return ", ".join(f"{mass[i]:g} Msun: {values[i]:.3g}" for i in sorted(near))


def _slice_row(axis: Sequence[Array], position: int) -> tuple[int, int]:
    for k, mass in enumerate(axis):
        if position < len(mass):
            return k, position
        position -= len(mass)
    raise IndexError(position)
