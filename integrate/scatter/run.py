"""Drawing populations: what is asked for, checked, shared out among workers and put together."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from typing import Any

import numpy as np

from steelyard.yields.errors import InputError, nearest
from steelyard.yields.units import plain

from ..population import Population, read_ages
from .drawing import Chunk, Deck, draw
from .law import scatter_law
from .outcomes import outcomes
from .result import ScatteredYields
from .sampling import mass_sampler

#: how stars may be drawn
MODES = ("poisson", "number", "mass")

#: bytes of results that are held at once, at most
LARGEST = 4 * 2**30

#: stars drawn in one run, at most
MOST_STARS = 1e12


def scatter(
    population: Population,
    mass: Any,
    count: int,
    seed: int = 1,
    mode: str = "poisson",
    ages: Any = None,
    convention: str = "total",
    workers: int | None = None,
    survivors: bool = True,
) -> ScatteredYields:
    """Draw populations of finite mass star by star.

    Parameters
    ----------
    population : Population
    mass : float
        Of each population, Msun.
    count : int
        How many to draw.
    seed : int
        The same seed gives the same digits, on any number of workers.
    mode : {"poisson", "number", "mass"}
        "poisson": the number of stars is a Poisson number of the mean that the mass holds, so
        the mass born scatters about `mass`. "number": that mean, rounded, is the number
        of stars; mean yields are off by the rounding, at most half a star. "mass": stars are
        drawn until their mass reaches `mass`, and the last one is kept: the mass born is
        larger by int m^2 phi dm / 2 on average, mean yields are in proportion to
        it (Wald's identity), and so unbiased per Msun born.
    ages : array_like, optional
        yr; default: the population's own. Sorted, each once.
    convention : {"total", "net"}
    workers : int, optional
        Threads; default: as many as there are cores.
    survivors : bool
        Whether stars that outlive the last age are drawn too, for the mass born and living.
        Nothing else depends on them, but in mode "mass", which needs them.

    Returns
    -------
    ScatteredYields

    Raises
    ------
    InputError
        Values that make no draw, or a result too large for memory.

    Notes
    -----
    Each star ends in one way: in a mixture it follows one of the sets, with their shares
    as probabilities, and where explosions fail with a probability it explodes or it doesn't.
    So the mean over many stars is that of `Population.weigh`, and mixtures add to the scatter.

    Delayed events are a Poisson process in time at the rate that the nominal `mass` gives,
    whichever stars were drawn. Where few remnants of theirs are there, events may use
    up more than there is; a note says in how many populations.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O", "Fe"])
    >>> drawn = scatter(stars, "1000 Msun", 200, ages=["10 Myr", "30 Myr"])
    >>> drawn.get("O").shape
    (200, 2)
    >>> bool(abs(drawn.get("O")[:, -1].mean() / drawn.law.mean[-1, 0] - 1) < 0.2)
    True
    """
    mass = plain(mass, "Msun", "mass")
    if np.ndim(mass) or not 0 < mass <= 1e15:
        raise InputError(f"mass isn't one mass above 0: {mass}", mend='such as "1000 Msun"')
    count = _whole(count, "count", 1)
    seed = _whole(seed, "seed", 0)
    if mode not in MODES:
        raise InputError(f"mode {mode!r} isn't known", mend=nearest(str(mode), MODES))
    if convention not in ("total", "net"):
        raise InputError(f"convention {convention!r} isn't known", mend="choose total or net")
    when = np.unique(population.ages if ages is None else read_ages(ages))
    imf, ready = population.imf, population.prepared
    if mass * count * float(imf.number(*imf.limits)) > MOST_STARS:
        raise InputError(
            f"{count} populations of {mass:g} Msun hold more than {MOST_STARS:g} stars",
            mend="lower mass or count",
        )
    size = 8 * count * len(when) * len(population.sources) * len(ready.columns.species)
    if size > LARGEST:
        raise InputError(
            f"{count} populations at {len(when)} ages with {len(ready.columns.species)} species are"
            f" {size / 2**30:.1f} GiB, more than {LARGEST / 2**30:.0f}",
            mend="give fewer ages or species, or a lower count",
        )
    found = outcomes(population, convention)
    turnoff = np.asarray(ready.curve.turnoff(when))
    lo, hi = imf.limits
    cut = float(np.clip(turnoff[-1], lo, hi))
    fraction = np.array([late.delay.fraction(when) for late in found.late]).reshape(
        len(found.late), len(when)
    )
    numbers = np.array([late.number for late in found.late])
    deck = Deck(
        found,
        mode,
        mass,
        turnoff,
        mass * numbers[:, None] * np.diff(fraction, axis=1, prepend=0.0),
        mass_sampler(imf, cut, hi),
        mass_sampler(imf, lo, cut),
        mass_sampler(imf, lo, hi),
        survivors or mode == "mass",
    )
    law = scatter_law(found, imf, turnoff, when, mass, mode)
    return _together(population, deck, count, seed, when, convention, workers, law)


def _whole(value: Any, name: str, least: int) -> int:
    if isinstance(value, bool) or not isinstance(value, (int, np.integer)) or not least <= value < 2**63:
        raise InputError(f"{name} isn't a whole number from {least} on: {value!r}")
    return int(value)


def _together(
    population: Population,
    deck: Deck,
    count: int,
    seed: int,
    ages: Any,
    convention: str,
    workers: int | None,
    law: Any,
) -> ScatteredYields:
    """Draw all chunks and lay them into one result, sources in the population's order."""
    starts = range(0, count, deck.chunk)
    seeds = np.random.SeedSequence(seed).spawn(len(starts))
    late_kinds = [late.kind for late in deck.found.late]
    kinds = [*deck.found.kinds, *late_kinds]
    order = [kinds.index(kind) for kind in population.kinds]
    t, o = len(ages), len(deck.found.species)
    counts = ["core-collapse"] if "core-collapse" in kinds else []
    if any(getattr(s, "implosions", ()) for s in population.sources):
        counts.append("imploded")
    shape = (count, len(kinds), t)
    yields, ejected = np.empty((*shape, o)), np.empty(shape)
    remnants, dead = np.empty((count, t)), np.empty((count, t))
    events = np.empty((count, t, len(counts) + len(late_kinds)))
    born, stars = np.empty(count), np.empty(count)

    def work(job: tuple[int, np.random.SeedSequence]) -> None:
        start, own = job
        rows = slice(start, min(start + deck.chunk, count))
        chunk: Chunk = draw(deck, own, rows.stop - rows.start)
        yields[rows], ejected[rows] = chunk.yields[:, order], chunk.ejected[:, order]
        remnants[rows], dead[rows] = chunk.remnants, chunk.dead
        for k, name in enumerate(counts):
            events[rows, :, k] = chunk.collapsed if name == "core-collapse" else chunk.imploded
        events[rows, :, len(counts) :] = np.moveaxis(chunk.late, 1, 2)
        born[rows], stars[rows] = chunk.born, chunk.stars

    with ThreadPoolExecutor(workers or _cores()) as pool:
        for _ in pool.map(work, zip(starts, seeds, strict=True)):
            pass
    notes = list(population.prepared.notes)
    short = int((remnants.min(axis=1) < -1e-9 * deck.mass).sum())
    if short:
        notes.append(f"delayed events use up more remnants than there are in {short} of {count} populations")
    return ScatteredYields(
        population=population,
        mass=deck.mass,
        count=count,
        seed=seed,
        mode=deck.mode,
        convention=convention,
        ages=ages,
        species=deck.found.species,
        sources=population.kinds,
        yields=yields,
        ejected=ejected,
        remnants=remnants,
        living=born[:, None] - dead if deck.survivors else None,
        born=born if deck.survivors else None,
        stars=stars if deck.survivors else None,
        event_kinds=(*counts, *late_kinds),
        events=events,
        law=law,
        notes=tuple(dict.fromkeys(notes)),
    )


def _cores() -> int:
    import os

    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
