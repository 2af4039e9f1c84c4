"""From a prepared population to its yields at given ages: weights, two products, and what events add."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from .results import PopulationYields
from .sources import REMNANTS, DelayedSource, StellarSource
from .weights import Segments, dead_weights, dying_basis

if TYPE_CHECKING:
    from .population import Population

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Products:
    """The segments' coefficients laid out for products with the weights.

    Attributes
    ----------
    parts : Segments
    """

    parts: Segments

    @cached_property
    def coefficients(self) -> Array:
        """Shape (segments * e, columns)."""
        return np.ascontiguousarray(self.parts.coefficients.reshape(-1, self.parts.coefficients.shape[2]))

    @cached_property
    def blocks(self) -> dict[int, slice]:
        """Rows of each stellar source: the segments of a source lie side by side."""
        ends = self.parts.coefficients.shape[1]
        out = {}
        for owner in np.unique(self.parts.owner):
            mine = np.flatnonzero(self.parts.owner == owner)
            out[int(owner)] = slice(int(mine[0]) * ends, (int(mine[-1]) + 1) * ends)
        return out

    @cached_property
    def accounts(self) -> Array:
        """Remnants of each kind, mass at birth, collapses and implosions, shape (segments * e, 6)."""
        count, ends = self.parts.coefficients.shape[:2]
        # a number of stars is the integral of 1: value 1 at both ends, slope 0
        one = np.broadcast_to(np.arange(ends) < 2, (count, ends)).astype(float)
        collapse, implode = (one * flag[:, None] for flag in (self.parts.collapse, self.parts.implodes))
        # mass at birth is a line as well: its values at the ends, and in a cubic its rise as slopes
        rise = self.parts.width[:, None] * (np.arange(ends) >= 2)
        born = np.stack([self.parts.edge[:-1], self.parts.edge[1:]] + [np.zeros(count)] * (ends - 2), axis=1)
        columns = [born + rise, collapse, implode]
        flat = np.concatenate([self.parts.remnants, np.stack(columns, axis=2)], axis=2)
        return np.ascontiguousarray(flat.reshape(count * ends, -1))


@dataclass(frozen=True, eq=False)
class Dying:
    """Who dies at each age, and how fast: what rates are made of.

    Attributes
    ----------
    parts : Segments
    segment : ndarray of int, shape (t,)
        That the turn-off mass lies in.
    basis : ndarray, shape (t, e)
        There.
    deaths : ndarray, shape (t,)
        Stars per yr and Msun formed.
    stellar : tuple of (int, int)
        Positions of stellar sources in the population, with their owner numbers.
    speeds : tuple of (int, ndarray, ndarray)
        Positions of delayed sources, events per yr and Msun formed, what one ejects.
    sources : int
    """

    parts: Segments
    segment: NDArray[np.int_]
    basis: Array
    deaths: Array
    stellar: tuple[tuple[int, int], ...]
    speeds: tuple[tuple[int, Array, Array], ...]
    sources: int

    def rates(self) -> Array:
        """Return all columns per yr, shape (sources, t, columns)."""
        rows = self.deaths[:, None] * np.einsum(
            "te,teq->tq", self.basis, self.parts.coefficients[self.segment]
        )
        out = np.zeros((self.sources, *rows.shape))
        for position, owner in self.stellar:
            out[position] = np.where((self.parts.owner[self.segment] == owner)[:, None], rows, 0.0)
        for position, speed, row in self.speeds:
            out[position] = speed[:, None] * row
        return out


def weigh(population: Population, ages: Sequence[float]) -> PopulationYields:
    """Weigh a population at ages in yr: see `Population.weigh`."""
    ready = population.prepared
    products, parts, columns = ready.products, ready.segments, ready.columns
    age = np.array(ages)
    lo, hi = population.imf.limits
    turnoff = np.asarray(ready.curve.turnoff(age))
    inside = np.clip(turnoff, lo, hi)

    weights = dead_weights(population.imf, parts, turnoff).reshape(len(age), -1)
    segment, basis = dying_basis(parts, inside)
    alive = (turnoff > lo) & (turnoff <= hi)
    deaths = np.where(alive, population.imf(inside) * abs(ready.curve.turnoff_slope(age)), 0.0)

    cumulative = np.empty((len(population.sources), len(age), columns.width))
    counted = weights @ products.accounts
    remnants = {name: counted[:, k] for k, name in enumerate(REMNANTS)}
    events: dict[str, Array] = {}
    event_rates: dict[str, Array] = {}
    stellar: list[tuple[int, int]] = []
    speeds: list[tuple[int, Array, Array]] = []
    for i, source in enumerate(population.sources):
        if isinstance(source, StellarSource):
            owner = len(stellar)
            block = products.blocks.get(owner, slice(0, 0))
            np.matmul(weights[:, block], products.coefficients[block], out=cumulative[i])
            stellar.append((i, owner))
            if source.kind == "core-collapse":
                events[source.kind] = counted[:, -2]
                event_rates[source.kind] = parts.collapse[segment] * deaths
                if source.implosions:
                    events["imploded"] = counted[:, -1]
                    event_rates["imploded"] = parts.implodes[segment] * deaths
        else:
            row = ready.events[len(speeds)]
            number, speed = _timed(source, age)
            events[source.kind], event_rates[source.kind] = number, speed
            np.multiply.outer(number, row, out=cumulative[i])
            used = number * row[columns.account("ejected")]
            remnants[source.consumes] = remnants[source.consumes] - used
            speeds.append((i, speed, row))
    notes = [*ready.notes, *ready.curve.notes_at(age, (lo, hi))]
    notes += [
        f"delayed events use up more {name} mass than there is at some ages"
        for name, value in remnants.items()
        if value.min() < -1e-12
    ]
    return PopulationYields(
        population=population,
        ages=age,
        species=columns.species,
        sources=population.kinds,
        cumulative=cumulative,
        dying=Dying(parts, segment, basis, deaths, tuple(stellar), tuple(speeds), len(population.sources)),
        living=np.where(turnoff > lo, 1.0 - counted[:, len(REMNANTS)], 0.0),
        remnants_by_kind=remnants,
        events=events,
        event_rates=event_rates,
        followed=ready.followed,
        notes=tuple(dict.fromkeys(notes)),
    )


def _timed(source: DelayedSource, age: Array) -> tuple[Array, Array]:
    """Events up to each age, and per yr at it, per Msun formed."""
    fraction, density = source.delay.fraction(age), source.delay.density(age)
    return source.number * np.asarray(fraction), source.number * np.asarray(density)
