"""What may become of a star: the ways it can end, with their probabilities, along initial mass.

Where a population mixes yield sets, or lets a share of stars implode, its mean yields are
all it needs to be weighed. A star drawn for itself ends in one way only. So the population
is laid out once for each way; the mean over the ways is the population's own layout.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError

from ..delays import Delay
from ..population import Population
from ..ranges import spans
from ..sources import DelayedSource, FailureTable, StellarSource
from ..span import Ground
from ..tracks import Columns, braid, event_row, strands
from ..weights import Segments, segments

Array = NDArray[np.float64]

#: ways for a star to end, beyond which a population is too much of a mixture
MOST = 64


@dataclass(frozen=True, eq=False)
class Late:
    """Events of a delayed source: of several classes, where its set is a mixture.

    Attributes
    ----------
    kind : str
    number : float
        Per Msun formed, over the delay's limits.
    delay : Delay
    shares : ndarray, shape (c,)
        Of each class of events.
    rows : ndarray, shape (c, q)
        What one event of each class adds to the columns.
    """

    kind: str
    number: float
    delay: Delay
    shares: Array
    rows: Array


@dataclass(frozen=True, eq=False)
class Outcomes:
    """The ways in which the stars of a population may end.

    Attributes
    ----------
    species : tuple of str
    parts : Segments
        Of initial mass; its coefficients are those of one of the ways.
    coefficients : ndarray, shape (s, k, e, q)
        For each segment and way, in the basis of `Segments`. Columns: the species, the
        ejected mass, the remnant.
    probability : ndarray, shape (s, k)
    implodes : ndarray of bool, shape (s, k)
    late : tuple of Late
    kinds : tuple of str
        Of the stellar sources, as `Segments.owner` counts them.
    """

    species: tuple[str, ...]
    parts: Segments
    coefficients: Array
    probability: Array
    implodes: NDArray[np.bool_]
    late: tuple[Late, ...]
    kinds: tuple[str, ...]


def outcomes(population: Population, convention: str = "total") -> Outcomes:
    """Lay out the ways in which the stars of a population may end.

    Parameters
    ----------
    population : Population
    convention : {"total", "net"}

    Returns
    -------
    Outcomes

    Raises
    ------
    InputError
        There are more than 64 ways.
    """
    ready = population.prepared
    columns = ready.columns
    wanted = np.r_[
        columns.total if convention == "total" else columns.net,
        columns.account("ejected"),
        columns.account("remnant"),
    ]
    stellar = [s for s in population.sources if isinstance(s, StellarSource)]
    entries = [entry for source in stellar for entry in source.sets]
    choices = [[k for k, share in enumerate(e.shares) if share > 0] for e in entries]
    fails = any(isinstance(s.implode, FailureTable) for s in stellar)
    states = (False, True) if fails else (False,)
    ways = list(product(states, *choices))
    if len(ways) > MOST:
        raise InputError(
            f"stars can end in {len(ways)} ways, by the mixtures of the population",
            mend=f"mix fewer sets, for at most {MOST} ways",
        )
    laid = [_lay(population, stellar, way[0], way[1:]) for way in ways]
    parts, probability, coefficients = laid[0], [], []
    implodes = _implosions(population, parts)
    for way, one in zip(ways, laid, strict=True):
        chosen = [e.shares[k] for e, k in zip(entries, way[1:], strict=True)]
        fate = np.where(way[0], implodes, 1 - implodes) if fails else np.ones(len(implodes))
        probability.append(float(np.prod(chosen)) * fate)
        coefficients.append(one.coefficients[..., wanted])
    imploding = np.array([one.implodes > 0 for one in laid])
    merged = _merged(np.array(coefficients), np.array(probability), imploding)
    late = tuple(
        _late(s, population, columns, wanted) for s in population.sources if isinstance(s, DelayedSource)
    )
    return Outcomes(columns.species, parts, *merged, late, tuple(s.kind for s in stellar))


def _implosions(population: Population, parts: Segments) -> Array:
    """Return the share of stars that implodes in each segment, from the population's own layout."""
    own = population.prepared.segments
    middle = 0.5 * (parts.edge[:-1] + parts.edge[1:])
    return own.implodes[np.clip(np.searchsorted(own.edge, middle) - 1, 0, len(own.implodes) - 1)]


def _lay(
    population: Population, stellar: list[StellarSource], fails: bool, chosen: tuple[int, ...]
) -> Segments:
    """The segments of a population whose mixtures and explosions all end in one way."""
    columns = population.prepared.columns
    z, solar, at = population.metallicity, population.solar, iter(chosen)
    tracks, sources = [], []
    for source in stellar:
        rows = []
        for entry in source.sets:
            k = next(at)
            parts, told = strands(
                entry,
                z,
                columns.species,
                population.interpolation,
                population.edges.metallicity,
                source.winds,
                solar,
            )
            # a set's slices follow one another; of the sets not chosen only their masses count
            keep, only = entry.shares[k], entry.load(solar)[k]
            parts = [replace(p, weight=p.weight / keep if p.grid is only else 0.0) for p in parts]
            rows.append(braid(entry.name, parts, columns.species, told))
        tracks.append(rows)
        if isinstance(source.implode, FailureTable):
            sure = tuple(float(p == 1 or (fails and p > 0)) for p in source.implode.probability)
            source = replace(source, implode=FailureTable(source.implode.masses, sure))
        sources.append(source)
    ground = Ground(columns, population.prepared.birth, population.imf.limits)
    cover, _ = spans(sources, tracks, population.joins, population.edges, ground)
    cubic = population.interpolation == "cubic"
    return segments(cover, cubic, columns.account("remnant"), None)


def _merged(
    coefficients: Array, probability: Array, implodes: NDArray[np.bool_]
) -> tuple[Array, Array, NDArray[np.bool_]]:
    """Ways side by side, shape (s, k, ...), those of a segment that are the same made one."""
    count = len(coefficients)
    probability = probability.copy()
    for k in range(count):
        for j in range(k):
            same = np.all(coefficients[j] == coefficients[k], axis=(1, 2)) & (implodes[j] == implodes[k])
            probability[j] += np.where(same, probability[k], 0.0)
            probability[k] = np.where(same, 0.0, probability[k])
    order = np.argsort(probability == 0, axis=0, kind="stable")
    most = int((probability > 0).sum(axis=0).max())
    rows = np.arange(probability.shape[1])
    take = [order[k] for k in range(most)]
    return (
        np.stack([coefficients[k, rows] for k in take], axis=1),
        np.stack([probability[k, rows] for k in take], axis=1),
        np.stack([implodes[k, rows] for k in take], axis=1),
    )


def _late(source: DelayedSource, population: Population, columns: Columns, wanted: NDArray[np.int_]) -> Late:
    (entry,) = source.sets
    grids = entry.load(population.solar)
    birth = population.prepared.birth
    rows = [event_row(grid, columns.species, birth)[0][wanted] for grid in grids]
    shares = np.array(entry.shares)
    has = shares > 0
    return Late(source.kind, source.number, source.delay, shares[has], np.array(rows)[has])
