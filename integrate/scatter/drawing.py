"""The draws themselves: chunks of populations, each with random numbers of its own.

Chunks have a size that depends on nothing but the population, and each chunk its own
stream (numpy's SeedSequence), so the digits are the same however many workers share them.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .outcomes import Outcomes
from .sampling import MassSampler

Array = NDArray[np.float64]

#: stars that are worked on at once
BATCH = 2**17

#: populations in a chunk, at most
LARGEST_CHUNK = 128


@dataclass(frozen=True, eq=False)
class Deck:
    """What every chunk draws from.

    Attributes
    ----------
    found : Outcomes
    mode : {"poisson", "number", "mass"}
    mass : float
        Msun.
    turnoff : ndarray, shape (t,)
        Turn-off masses, Msun, decreasing.
    late : ndarray, shape (delayed sources, t)
        Mean numbers of events from one age to the next.
    dying, surviving, all : MassSampler
        Stars that die by the last age, those that don't, both.
    survivors : bool
        Whether those that live on are drawn too. Fixed masses need them.
    """

    found: Outcomes
    mode: str
    mass: float
    turnoff: Array
    late: Array
    dying: MassSampler
    surviving: MassSampler
    all: MassSampler
    survivors: bool

    @property
    def stars(self) -> int:
        """Number of stars of a population in mode "number"."""
        return max(1, int(np.floor(self.mass * self.all.number + 0.5)))

    @property
    def chunk(self) -> int:
        """How many populations are drawn with one stream of random numbers."""
        return int(np.clip(BATCH / max(self.mass * self.dying.number, 1.0), 1, LARGEST_CHUNK))


@dataclass(frozen=True, eq=False)
class Chunk:
    """Populations drawn.

    Attributes
    ----------
    yields : ndarray, shape (n, sources, t, species)
        Msun, up to each age. Stellar sources come first, then delayed ones.
    ejected : ndarray, shape (n, sources, t)
        Msun.
    remnants : ndarray, shape (n, t)
        Msun.
    dead : ndarray, shape (n, t)
        Mass at birth of the stars that have died, Msun.
    collapsed, imploded : ndarray, shape (n, t)
        Numbers of stars.
    late : ndarray, shape (n, delayed sources, t)
        Numbers of events.
    born, stars : ndarray, shape (n,)
        Mass, Msun, and number of all stars drawn.
    """

    yields: Array
    ejected: Array
    remnants: Array
    dead: Array
    collapsed: Array
    imploded: Array
    late: Array
    born: Array
    stars: Array


def draw(deck: Deck, seed: np.random.SeedSequence, count: int) -> Chunk:
    """Draw populations.

    Parameters
    ----------
    deck : Deck
    seed : numpy.random.SeedSequence
        Of this chunk alone.
    count : int
        Populations.

    Returns
    -------
    Chunk
    """
    # streams apart, so that what ejects doesn't depend on whether the survivors are drawn
    stars, others, events, fates = (np.random.default_rng(s) for s in seed.spawn(4))
    tally = _Tally(deck, count, fates)
    if deck.mode == "mass":
        _until_mass(deck, tally, stars, count)
    else:
        _by_number(deck, tally, stars, others, count)
    return tally.result(events)


def _by_number(
    deck: Deck, tally: _Tally, random: np.random.Generator, others: np.random.Generator, count: int
) -> None:
    if deck.mode == "poisson":
        dying = random.poisson(deck.mass * deck.dying.number, count)
        living = others.poisson(deck.mass * deck.surviving.number, count)
    else:
        share = deck.dying.number / deck.all.number
        dying = random.binomial(deck.stars, min(share, 1.0), count)
        living = deck.stars - dying
    for population, batch in _batches(dying):
        tally.die(deck.dying.draw(random, batch), population)
    if deck.survivors:
        for population, batch in _batches(living):
            tally.live(deck.surviving.draw(others, batch), population)


def _batches(numbers: NDArray[np.int_]) -> Iterator[tuple[NDArray[np.int_], int]]:
    """Whose stars they are, `BATCH` of them at a time."""
    ends = np.cumsum(numbers)
    for start in range(0, int(ends[-1]), BATCH):
        size = min(BATCH, int(ends[-1]) - start)
        yield np.searchsorted(ends, np.arange(start, start + size), side="right"), size


def _until_mass(deck: Deck, tally: _Tally, random: np.random.Generator, count: int) -> None:
    """Draw star after star; the one that reaches the mass is the last, and is kept."""
    reached, open_ = np.zeros(count), np.arange(count)
    expected = deck.mass * deck.all.number
    while len(open_):
        share = (deck.mass - reached[open_].min()) / deck.mass
        some = int(np.ceil(1.05 * expected * share + 20))
        some = max(1, min(some, BATCH // len(open_)))
        masses = deck.all.draw(random, some * len(open_)).reshape(len(open_), some)
        sums = np.cumsum(masses, axis=1) + reached[open_, None]
        kept = np.concatenate([np.ones((len(open_), 1), dtype=bool), sums[:, :-1] < deck.mass], axis=1)
        row, _ = np.nonzero(kept)
        own, mass = open_[row], masses[kept]
        dies = mass >= deck.dying.lo if deck.dying.number else np.zeros(len(mass), dtype=bool)
        tally.die(mass[dies], own[dies])
        tally.live(mass[~dies], own[~dies])
        reached[open_] = sums[:, -1]
        open_ = open_[sums[:, -1] < deck.mass]


class _Tally:
    """Sums over stars, by population and age."""

    def __init__(self, deck: Deck, count: int, fates: np.random.Generator) -> None:
        found = deck.found
        self.deck, self.count, self.fates = deck, count, fates
        self.t, self.sources = len(deck.turnoff), len(found.kinds)
        segments, ways, ends, width = found.coefficients.shape
        self.flat = np.ascontiguousarray(found.coefficients.reshape(segments * ways * ends, width))
        self.cumulative = np.cumsum(found.probability, axis=1)[:, :-1]
        self.sums = np.zeros((count * self.sources * self.t, width))
        self.dead = np.zeros(count * self.t)
        self.collapsed, self.imploded = np.zeros(count * self.t), np.zeros(count * self.t)
        self.born, self.stars = np.zeros(count), np.zeros(count)

    def live(self, mass: Array, population: NDArray[np.int_]) -> None:
        """Count stars that outlive the last age."""
        self.born += np.bincount(population, mass, self.count)
        self.stars += np.bincount(population, minlength=self.count)

    def die(self, mass: Array, population: NDArray[np.int_]) -> None:
        """Count stars that die by the last age, and what they eject."""
        from scipy.sparse import csr_matrix

        self.live(mass, population)
        found, parts = self.deck.found, self.deck.found.parts
        ways, ends = found.coefficients.shape[1:3]
        segment = np.clip(np.searchsorted(parts.edge, mass, side="right") - 1, 0, len(parts.owner) - 1)
        # a star is dead at the first age whose turn-off mass isn't above its own
        age = np.searchsorted(-self.deck.turnoff, -mass, side="left")
        way = np.zeros(len(mass), dtype=int)
        if ways > 1:
            way = (self.fates.random(len(mass))[:, None] >= self.cumulative[segment]).sum(axis=1)
        x = (mass - parts.lo[segment]) / parts.width[segment]
        shape = np.stack([1 - x, x], axis=1) if ends == 2 else _hermite(x)
        row = (population * self.sources + parts.owner[segment]) * self.t + age
        column = ((segment * ways + way) * ends)[:, None] + np.arange(ends)
        # in order of rows, with sums over stars left to the product
        order = np.argsort(row, kind="stable")
        starts = np.concatenate([[0], np.cumsum(np.bincount(row, minlength=len(self.sums)) * ends)])
        weights = csr_matrix(
            (shape[order].ravel(), column[order].ravel(), starts), shape=(len(self.sums), len(self.flat))
        )
        self.sums += weights @ self.flat
        cell = population * self.t + age
        self.dead += np.bincount(cell, mass, len(self.dead))
        self.collapsed += np.bincount(cell, parts.collapse[segment], len(self.dead))
        self.imploded += np.bincount(cell, found.implodes[segment, way], len(self.dead))

    def result(self, random: np.random.Generator) -> Chunk:
        """Sum over ages, and draw the delayed events."""
        found, late = self.deck.found, self.deck.late
        o = len(found.species)
        width = self.sums.shape[1]
        sums = np.zeros((self.count, self.sources + len(found.late), self.t, width))
        sums[:, : self.sources] = self.sums.reshape(self.count, self.sources, self.t, width)
        events = np.zeros((self.count, len(found.late), self.t))
        for i, one in enumerate(found.late):
            classes = random.poisson(late[i, :, None] * one.shares, (self.count, self.t, len(one.shares)))
            sums[:, self.sources + i] = classes @ one.rows
            events[:, i] = classes.sum(axis=2)
        np.cumsum(sums, axis=2, out=sums)
        dead, collapsed, imploded = (
            np.cumsum(v.reshape(self.count, self.t), axis=1)
            for v in (self.dead, self.collapsed, self.imploded)
        )
        return Chunk(
            sums[..., :o],
            sums[..., o],
            sums[..., o + 1].sum(axis=1),
            dead,
            collapsed,
            imploded,
            np.cumsum(events, axis=2),
            self.born,
            self.stars,
        )


def _hermite(x: Array) -> Array:
    upper = x * x * (3 - 2 * x)
    return np.stack([1 - upper, upper, x * (1 - x) ** 2, x * x * (x - 1)], axis=1)
