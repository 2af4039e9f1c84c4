"""Which populations are compared: a base, its ingredients and the choices of each."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from math import prod
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.nuclides import parse

from ..population import Population, read_ages
from ..popvalues import told
from ..sources import StellarSource
from .ingredients import Ingredient, ingredient, ingredients

#: one or two of every nucleosynthetic family
FAMILIES = ("C", "N", "O", "Mg", "Si", "Ca", "Mn", "Fe", "Ni")


@dataclass(frozen=True, eq=False)
class Factor:
    """An ingredient with its choices.

    Attributes
    ----------
    ingredient : Ingredient
    labels : tuple of str
        That of the base first.
    values : tuple
        What to swap in; of the base, None.
    """

    ingredient: Ingredient
    labels: tuple[str, ...]
    values: tuple[Any, ...]

    @property
    def name(self) -> str:
        """Name of the ingredient."""
        return self.ingredient.name

    def __len__(self) -> int:
        return len(self.labels)


@dataclass(frozen=True, eq=False)
class Design:
    """A base population and what to swap in it.

    Attributes
    ----------
    base : Population
    factors : tuple of Factor
    species : tuple of str
        What to compare.
    ages : tuple of float
        yr.
    limits : mapping
        Of each source that is restricted to the masses all its choices serve: those, Msun.
    """

    base: Population
    factors: tuple[Factor, ...]
    species: tuple[str, ...]
    ages: tuple[float, ...]
    limits: Mapping[str, tuple[float, float]]

    @property
    def levels(self) -> tuple[int, ...]:
        """How many choices each factor has, that of the base included."""
        return tuple(len(f) for f in self.factors)

    @property
    def size(self) -> int:
        """How many populations the full factorial has."""
        return prod(self.levels)

    @cached_property
    def one_at_a_time(self) -> NDArray[np.int_]:
        """Positions of choices, shape (n, factors): the base, then one choice swapped in each."""
        rows = [np.zeros(len(self.factors), dtype=int)]
        for k, count in enumerate(self.levels):
            for level in range(1, count):
                row = np.zeros(len(self.factors), dtype=int)
                row[k] = level
                rows.append(row)
        return np.array(rows)

    def full(self) -> NDArray[np.int_]:
        """Positions of choices, shape (size, factors): all combinations, the base first."""
        return np.indices(self.levels).reshape(len(self.levels), -1).T

    def sample(self, count: int, seed: int) -> NDArray[np.int_]:
        """Positions of choices, shape (count, factors): combinations drawn at random, the base first.

        No combination is drawn twice.
        """
        random = np.random.default_rng(seed)
        seen: dict[tuple[int, ...], None] = {(0,) * len(self.levels): None}
        while len(seen) < min(count, self.size):
            rows = random.integers(0, self.levels, size=(count, len(self.levels)))
            for row in map(tuple, rows.tolist()):
                if len(seen) < count:
                    seen.setdefault(row)
        return np.array(list(seen))

    def labels(self, at: Sequence[int]) -> dict[str, str]:
        """Return what differs from the base in one combination, by ingredient."""
        return {f.name: f.labels[i] for f, i in zip(self.factors, at, strict=True) if i}

    def population(self, at: Sequence[int]) -> Population:
        """Return the population of one combination, with all its elements.

        Raises
        ------
        InputError
            A choice can't be used in the base.
        """
        # the base's own list may name what a choice doesn't follow
        made = replace(self.base, species="elements")
        for factor, i in zip(self.factors, at, strict=True):
            if i:
                with told(f"swap {factor.name}={factor.labels[i]}"):
                    made = factor.ingredient.swap(made, factor.values[i])
        for kind, (lo, hi) in self.limits.items():
            sources = tuple(replace(s, limits=(lo, hi)) if s.kind == kind else s for s in made.sources)
            made = replace(made, sources=sources)
        return made


def design(
    population: Population,
    swaps: Mapping[str, Any],
    ages: Any = None,
    species: Sequence[str] | str | None = None,
    common_range: bool = False,
) -> Design:
    """Declare what is swapped in a population.

    Parameters
    ----------
    population : Population
        The base.
    swaps : mapping
        From the name of an ingredient (`ingredients`) to one choice or a list of them; a tuple is
        one choice, such as sets in series. A choice that is the base's own is left out.
    ages : array_like, optional
        yr; default: the oldest age of the population.
    species : sequence of str, optional
        What to compare, or ``"elements"`` for all; default: the population's own list, or
        elements of every nucleosynthetic family.
    common_range : bool
        Restrict a source whose sets are swapped to the initial masses that all its choices serve.

    Returns
    -------
    Design

    Raises
    ------
    InputError
        An ingredient or choice that isn't known or can't be used.

    Examples
    --------
    >>> from steelyard.integrate.popfile import default_population
    >>> made = design(default_population(), {"imf": ["salpeter-1955", "kroupa-1993"], "join": "swallow"})
    >>> made.levels, made.size
    ((3, 2), 6)
    """
    known = ingredients(population)
    for name in swaps:
        ingredient(population, name)
    factors = []
    for name in sorted(swaps, key=list(known).index):
        values = swaps[name] if isinstance(swaps[name], list) else [swaps[name]]
        factors.append(_factor(known[name], values, population))
    factors = [f for f in factors if len(f) > 1]
    if not factors:
        raise InputError(
            "nothing is swapped" if not swaps else "no choice differs from the base",
            mend="give another choice, such as imf=salpeter-1955",
        )
    _check_twins(factors)
    ages = (max(population.ages),) if ages is None else read_ages(ages)
    if max(ages) <= 0:
        raise InputError("nothing is ejected at age 0", mend="give an age, such as 13.8 Gyr")
    made = Design(population, tuple(factors), (), ages, {})
    made = replace(made, species=_species(made, species))
    return replace(made, limits=_common(made)) if common_range else made


def _factor(one: Ingredient, values: Sequence[Any], population: Population) -> Factor:
    base = one.tell(population)
    labels: list[str] = [base]
    kept: list[Any] = [None]
    met = {base}
    for value in values:
        text = value if isinstance(value, str) else ""
        with told(f"swap {one.name}={text}" if text else f"swap {one.name}"):
            told_as = one.tell(one.swap(population, value))
        if text and told_as in met:
            continue
        met.add(told_as)
        label = text or told_as
        # figures of one's own may have the name of published ones
        same = sum(label == other.split(" (own")[0] for other in labels)
        labels.append(f"{label} (own{f' {same}' if same > 1 else ''})" if same else label)
        kept.append(value)
    return Factor(one, tuple(labels), tuple(kept))


def _check_twins(factors: Sequence[Factor]) -> None:
    """Refuse the same ingredient under its two names."""
    names = [f.name for f in factors]
    for key in ("delay", "number"):
        longer = [n for n in names if n.endswith(f".{key}")]
        if key in names and longer:
            raise InputError(f"{key} and {longer[0]} are the same ingredient", mend=f"write {key} only")


def _species(made: Design, wanted: Sequence[str] | str | None) -> tuple[str, ...]:
    """Species in the order of Z and A, or as listed."""
    base = made.base
    if wanted is None:
        listed = [] if isinstance(base.species, str) else list(base.species)
        wanted = listed or FAMILIES
    populations = [made.population(at) for at in made.one_at_a_time]
    sets = {g for p in populations for s in p.sources for e in s.sets for g in e.load(p.solar)}
    if isinstance(wanted, str):
        if wanted != "elements":
            raise InputError(f"species {wanted!r} isn't a choice", mend='write "elements" or a list')
        return tuple(s.name for s in sorted({s.element for g in sets for s in g.parsed}))
    names = tuple(dict.fromkeys(parse(one).name for one in wanted))
    for name in names:
        if not any(g.columns(name) for g in sets):
            raise InputError(f"no set follows {name}", where="species", mend="leave it out")
    if not names:
        raise InputError("no species is named", mend="such as O,Mg,Fe")
    return names


def served(population: Population) -> dict[str, list[tuple[float, float, str]]]:
    """Return the initial masses that the sets of each source of stars serve.

    Returns
    -------
    dict
        From kind to (lowest, highest mass, set) in order of mass, Msun; joins and edges left out.

    Examples
    --------
    >>> from steelyard.integrate.popfile import default_population
    >>> served(default_population())["core-collapse"]
    [(13.0, 40.0, 'kobayashi-2006')]
    """
    stellar = [s for s in population.sources if isinstance(s, StellarSource)]
    out: dict[str, list[tuple[float, float, str]]] = {s.kind: [] for s in stellar}
    for span in population.prepared.spans:
        source = stellar[span.owner]
        if span.how in {entry.name for entry in source.sets}:
            own = out[source.kind]
            if own and own[-1][1:] == (span.lo, span.how):
                own[-1] = (own[-1][0], span.hi, span.how)
            else:
                own.append((span.lo, span.hi, span.how))
    return out


def _common(made: Design) -> dict[str, tuple[float, float]]:
    """The initial masses that all choices of a swapped source serve."""
    out = {}
    for k, factor in enumerate(made.factors):
        kind = factor.name
        if not any(s.kind == kind and isinstance(s, StellarSource) for s in made.base.sources):
            continue
        if f"{kind}.limits" in {f.name for f in made.factors}:
            raise InputError(
                f"{kind}.limits are swapped, so {kind} can't be restricted to the masses all choices serve",
                mend="leave one of the two out",
            )
        reach = []
        for at in made.one_at_a_time:
            if not at.any() or at[k]:
                ranges = served(made.population(at))[kind]
                reach.append((ranges[0][0], ranges[-1][1]))
        lo, hi = max(a for a, _ in reach), min(b for _, b in reach)
        if lo >= hi:
            raise InputError(
                f"the choices of {kind} serve no mass in common", mend="compare them without a common range"
            )
        out[kind] = (lo, hi)
    return out
