"""Weighing all populations of a design, with what they share worked out once."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.composition import birth_composition
from steelyard.yields.errors import InputError

from ..population import Population
from ..results import Convention
from ..sources import DelayedSource, Source, StellarSource
from ..tracks import Columns, event_row
from .design import Design

Array = NDArray[np.float64]

PARTLY, WHOLLY = 1, 2

#: bytes of yields that are held at once
MEMORY = 2**30


@dataclass(frozen=True, eq=False)
class Weighed:
    """Yields of many populations that differ in their ingredients.

    Attributes
    ----------
    yields : ndarray, shape (n, sources, t, species)
        Msun per Msun formed.
    coverage : ndarray of int, shape (n, sources, species)
        `WHOLLY` where all sets of a source that serve follow a species, `PARTLY` where some
        do, 0 where none does.
    """

    yields: Array
    coverage: NDArray[np.int_]


def weigh_all(
    made: Design,
    at: NDArray[np.int_],
    convention: Convention = "total",
    species: tuple[str, ...] | None = None,
    progress: Callable[[Iterable[Any]], Iterable[Any]] = iter,
) -> Weighed:
    """Weigh combinations of a design's choices.

    What stars eject is worked out once for all combinations that differ only in delayed events,
    and the other way round; mass functions of the same limits share the prepared populations.

    Parameters
    ----------
    made : Design
    at : ndarray of int, shape (n, factors)
        Positions of choices.
    convention : {"total", "net"}
    species : tuple of str, optional
        Default: those of the design.
    progress : callable
        Wrapped around the loop over combinations.

    Returns
    -------
    Weighed

    Raises
    ------
    InputError
        A combination makes no population, or there is no room for the yields.
    """
    names = made.species if species is None else species
    kinds = made.base.kinds
    shape = (len(at), len(kinds), len(made.ages), len(names))
    if 8 * float(np.prod(shape)) > MEMORY:
        raise InputError(
            f"{shape[0]} populations at {shape[2]} ages with {shape[3]} species have no room in memory",
            mend="ask for fewer ages or species",
        )
    yields, coverage = np.zeros(shape), np.zeros((len(at), len(kinds), len(names)), dtype=int)
    stars = [k for k, f in enumerate(made.factors) if f.ingredient.stars]
    shared = [k for k in stars if made.factors[k].name != "imf"]
    events = [k for k, f in enumerate(made.factors) if f.ingredient.events]
    star_rows = [i for i, s in enumerate(made.base.sources) if isinstance(s, StellarSource)]
    event_rows = [i for i, s in enumerate(made.base.sources) if isinstance(s, DelayedSource)]
    prepared: dict[Any, Any] = {}
    of_stars: dict[Any, tuple[Array, NDArray[np.int_]]] = {}
    of_events: dict[Any, tuple[Array, NDArray[np.int_]]] = {}
    for n, row in enumerate(progress(at.tolist())):
        by_stars, by_events = tuple(row[k] for k in stars), tuple(row[k] for k in events)
        if by_stars not in of_stars or by_events not in of_events:
            population = made.population(row)
            if by_stars not in of_stars:
                key = (tuple(row[k] for k in shared), population.imf.limits)
                of_stars[by_stars] = _stars(population, made.ages, names, convention, prepared, key)
            if by_events not in of_events:
                of_events[by_events] = _events(population, made.ages, names, convention)
        for rows, found in ((star_rows, of_stars[by_stars]), (event_rows, of_events[by_events])):
            if rows:
                yields[n, rows], coverage[n, rows] = found
    return Weighed(yields, coverage)


def followed_by_any(sources: Sequence[Source], names: Sequence[str], solar: str) -> list[int]:
    """Return the positions of species that some set of some source follows."""
    grids = {g for s in sources for e in s.sets for g in e.load(solar)}
    return [j for j, name in enumerate(names) if any(g.columns(name) for g in grids)]


def _stars(
    population: Population,
    ages: tuple[float, ...],
    names: tuple[str, ...],
    convention: Convention,
    prepared: dict[Any, Any],
    key: Any,
) -> tuple[Array, NDArray[np.int_]]:
    """What stars eject when they die, shape (sources, t, species), and who follows what."""
    sources = tuple(s for s in population.sources if isinstance(s, StellarSource))
    have = followed_by_any(sources, names, population.solar)
    yields = np.zeros((len(sources), len(ages), len(names)))
    coverage = np.zeros((len(sources), len(names)), dtype=int)
    if have:
        alone = replace(population, sources=sources, species=[names[j] for j in have])
        # a prepared population doesn't depend on the form of its mass function
        if key in prepared:
            vars(alone)["prepared"] = prepared[key]
        result = alone.weigh(ages)
        prepared[key] = alone.prepared
        yields[..., have] = result.total if convention == "total" else result.net
        serving = {span.how for span in alone.prepared.spans}
        for i, source in enumerate(sources):
            used = [e for e in source.sets if e.name in serving]
            partly = [any(g.columns(name) for e in used for g in e.load(alone.solar)) for name in names]
            coverage[i] = np.where(partly, PARTLY, 0)
        coverage[:, have] = np.where(result.followed, WHOLLY, coverage[:, have])
    return yields, coverage


def _events(
    population: Population, ages: tuple[float, ...], names: tuple[str, ...], convention: Convention
) -> tuple[Array, NDArray[np.int_]]:
    """What delayed events eject, shape (sources, t, species), and who follows what."""
    birth = birth_composition(names, population.metallicity, population.solar)
    columns = Columns(names)
    wanted = columns.total if convention == "total" else columns.net
    yields, coverage = [], []
    for source in population.sources:
        if isinstance(source, DelayedSource):
            entry = source.sets[0]
            parts = [event_row(g, names, birth) for g in entry.load(population.solar)]
            row = sum(w * r for w, (r, _) in zip(entry.shares, parts, strict=True))
            number = source.number * np.asarray(source.delay.fraction(np.array(ages)))
            yields.append(number[:, None] * row[wanted])
            coverage.append(
                np.any([f for _, f in parts], axis=0) + np.all([f for _, f in parts], axis=0).astype(int)
            )
    return np.array(yields), np.array(coverage)
