"""Which published models, which initial masses and which parameters a population's yields rest on."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError

from ..population import Population
from ..results import Convention, PopulationYields
from ..sources import StellarSource, set_id
from ..weights import dead_weights, dying_basis
from .nodes import Model, Nodes, Parts, nodes, positions

Array = NDArray[np.float64]

#: what belongs to no model
BIRTH = "birth composition"

#: steps of the grid along initial mass, per unit of log10
STEPS_PER_DEX = 400


@dataclass(frozen=True)
class Contributor:
    """What one model, or birth composition, makes of a yield.

    Attributes
    ----------
    model : Model or None
        None for birth composition.
    source : str
        Source that the model's set belongs to; for birth composition, the one that ejects it.
    amount : float
        Msun per Msun formed; the amounts of all contributors sum to the yield.
    share : float
        Of the yield. For a model also d ln E / d ln (what its paper prints).
    printed : float or None
        The printed figure, Msun.
    derivative : float or None
        dE/d(printed figure): stars or events per Msun formed.
    doubled, halved : float
        dex by which the yield moves where the model's figure is twice or half as large; NaN
        where it would be negative, and for birth composition.
    """

    model: Model | None
    source: str
    amount: float
    share: float
    printed: float | None
    derivative: float | None
    doubled: float
    halved: float

    @property
    def name(self) -> str:
        """The model, or birth composition with its source."""
        return str(self.model) if self.model else f"{BIRTH} ({self.source})"


@dataclass(frozen=True, eq=False)
class Profile:
    """How a yield is made along initial mass.

    Attributes
    ----------
    mass : ndarray, shape (m,)
        Msun, increasing.
    source : ndarray of int, shape (m,)
        Position of the source that stars of that mass count for.
    density : ndarray, shape (m,)
        dE/dln m of the stars dead at the age, Msun per Msun formed.
    printed : ndarray, shape (m,)
        The part of it that models' printed figures make; the rest is at birth composition.
    cumulative : ndarray, shape (m,)
        Yield of the stars dead below each mass, Msun per Msun formed.
    """

    mass: Array
    source: NDArray[np.int_]
    density: Array
    printed: Array
    cumulative: Array


@dataclass(frozen=True, eq=False)
class Leverage:
    """What a population's yields rest on.

    Attributes
    ----------
    nodes : Nodes
        The dependence on published models.
    result : PopulationYields
        The yields themselves.
    parts : Parts
        The yields split over models and birth composition.
    """

    nodes: Nodes
    result: PopulationYields
    parts: Parts

    @property
    def models(self) -> tuple[Model, ...]:
        """The published models, in the order of `contribution`."""
        return self.nodes.models

    @property
    def population(self) -> Population:
        """What was weighed."""
        return self.result.population

    def contribution(self, species: str) -> Array:
        """Return what each model makes of a yield, shape (sources, t, models), Msun per Msun formed.

        The same in total and net yields: weight times what its paper prints.
        """
        return self.parts.contribution[..., positions(self.result.species, species)].sum(axis=-1)

    def birth(self, species: str, convention: Convention = "total") -> Array:
        """Return the part of a yield that belongs to no model, shape (sources, t), Msun per Msun formed."""
        check_convention(convention)
        return self.parts.birth(convention)[..., positions(self.result.species, species)].sum(axis=-1)

    def ranked(
        self, species: str, age: int = -1, convention: Convention = "total", top: int | None = None
    ) -> list[Contributor]:
        """Return who makes a yield, the largest part first.

        Parameters
        ----------
        species : str
        age : int
            Position among the result's ages.
        convention : {"total", "net"}
        top : int, optional
            How many models; default: all that make any. Birth composition comes on top of them.

        Returns
        -------
        list of Contributor

        Examples
        --------
        >>> from steelyard.integrate import Population, StellarSource
        >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O"])
        >>> first = leverage(stars, ["1 Gyr"]).ranked("O", top=1)[0]
        >>> print(first.model, f"{first.share:.0%} {first.doubled:+.3f} dex")
        kobayashi-2006, 40 Msun, Z = 0.02 28% +0.106 dex
        """
        at = positions(self.result.species, species)
        whole = float(self.result.get(species, None, convention)[age])
        amounts = self.contribution(species)[:, age].sum(axis=0)
        births = self.birth(species, convention)[:, age]
        order = [k for k in np.argsort(-abs(amounts), kind="stable") if amounts[k] != 0][:top]
        out = [self._model(int(k), at, float(amounts[k]), whole, age) for k in order]
        for source, amount in zip(self.result.sources, births.tolist(), strict=True):
            if amount:
                out.append(
                    Contributor(None, source, amount, share_of(amount, whole), None, None, np.nan, np.nan)
                )
        return sorted(out, key=lambda c: -abs(c.amount))

    def _model(self, k: int, at: Sequence[int], amount: float, whole: float, age: int) -> Contributor:
        years = [float(self.result.ages[age])]
        moves = []
        for factor in (2.0, 0.5):
            after = whole + float(self.nodes.change(k, at, factor, years).sum())
            moves.append(float(np.log10(after / whole)) if whole > 0 and after > 0 else np.nan)
        printed = float(self.nodes.printed[k, list(at)].sum())
        return Contributor(
            self.models[k],
            self.models[k].source,
            amount,
            share_of(amount, whole),
            printed,
            amount / printed if printed else None,
            *moves,
        )

    def ranges(self, species: str, convention: Convention = "total") -> list[dict[str, Any]]:
        """Return which range of initial mass makes how much of a yield.

        Parameters
        ----------
        species : str
        convention : {"total", "net"}

        Returns
        -------
        list of dict
            ``from``, ``to`` (Msun; None for delayed events), ``source``, ``served_by`` (sets, or
            the policy of a join or edge), ``amount``: ndarray, shape (t,), Msun per Msun formed.
            The amounts sum to the yield.
        """
        check_convention(convention)
        ready, result = self.population.prepared, self.result
        parts = ready.segments
        at = self._columns(species, convention)
        each = np.einsum("tse,se->ts", self._dead, parts.coefficients[..., at].sum(axis=-1))
        middle = parts.lo + 0.5 * parts.width
        out = []
        for one in result.ranges:
            inside = (middle > one["from"]) & (middle < one["to"])
            out.append(one | {"amount": each[:, inside].sum(axis=1)})
        for source in self.population.sources:
            if not isinstance(source, StellarSource):
                served = source.sets[0].name
                amount = result.get(species, source.kind, convention)
                out.append(
                    {"from": None, "to": None, "source": source.kind, "served_by": served, "amount": amount}
                )
        return out

    def profile(self, species: str, age: int = -1, convention: Convention = "total") -> Profile:
        """Return how the dead stars of a population make a yield along initial mass.

        Parameters
        ----------
        species : str
        age : int
            Position among the result's ages.
        convention : {"total", "net"}

        Returns
        -------
        Profile
            On a grid of 400 masses a dex, the ends of all pieces on both of their sides.
        """
        check_convention(convention)
        population, ready = self.population, self.population.prepared
        lo, hi = population.imf.limits
        dead = float(np.clip(ready.curve.turnoff(np.array([self.result.ages[age]]))[0], lo, hi))
        steps = max(2, int(np.log10(hi / lo) * STEPS_PER_DEX))
        ends = np.array([*ready.segments.edge, *population.imf.breaks, dead])
        near = np.concatenate([ends, ends * (1 - 1e-9), ends * (1 + 1e-9)])
        mass = np.unique(np.concatenate([np.geomspace(lo, hi, steps), near[(near >= lo) & (near <= hi)]]))
        which, basis = dying_basis(ready.segments, mass)
        at = self._columns(species, convention)
        coefficients = ready.segments.coefficients[..., at].sum(axis=-1)
        stars = mass * population.imf(mass) * (mass > dead)
        printed = self.nodes.printed_along(mass)[:, positions(self.result.species, species)].sum(axis=-1)
        above = np.maximum(mass, dead)[::-1]
        cumulative = np.einsum(
            "tse,se->t", dead_weights(population.imf, ready.segments, above), coefficients
        )[::-1]
        stellar = [i for i, s in enumerate(population.sources) if isinstance(s, StellarSource)]
        return Profile(
            mass,
            np.array(stellar)[ready.segments.owner[which]],
            stars * np.einsum("me,me->m", basis, coefficients[which]),
            stars * printed,
            cumulative[0] - cumulative,
        )

    @cached_property
    def by_parameter(self) -> dict[str, tuple[float, Array, Array]]:
        """Derivatives of yields to the numbers that the population declares.

        From each parameter's name (`steelyard.integrate.plan.parameters`) to its value, and dE/dp
        of the total and of the net yields, shape (t, species), in closed form. Parameters without
        one are left out; there are none where the mass function is a function of the user's.
        """
        from ..plan import Plan, candidates

        population = self.population
        names = candidates(population)
        for source in population.sources:
            names += [
                f"{source.kind}.share[{set_id(s)}]"
                for entry in source.sets
                if len(entry.sets) > 1
                for s in entry.sets
            ]

        def derivatives(free: list[str]) -> dict[str, tuple[float, Array, Array]]:
            try:
                plans = [Plan(population, free, self.result.ages, c) for c in ("total", "net")]
                total, net = (p.jacobian(p.start)[1] for p in plans)
            except InputError:
                # one that has no closed derivative: leave out which it is
                return {} if len(free) == 1 else {k: v for n in free for k, v in derivatives([n]).items()}
            return {n: (float(plans[0].start[i]), total[i], net[i]) for i, n in enumerate(free)}

        return derivatives(names)

    @cached_property
    def _dead(self) -> Array:
        population = self.population
        asked = np.asarray(self.result.ages)
        order = np.argsort(asked, kind="stable")
        turnoff = np.asarray(population.prepared.curve.turnoff(asked[order]))
        dead = dead_weights(population.imf, population.prepared.segments, turnoff)
        return dead[np.argsort(order, kind="stable")]

    def _columns(self, species: str, convention: Convention) -> list[int]:
        first = 0 if convention == "total" else len(self.result.species)
        return [first + i for i in positions(self.result.species, species)]


def leverage(population: Population, ages: Any = None) -> Leverage:
    """Find what a population's yields rest on.

    Parameters
    ----------
    population : Population
    ages : array_like, optional
        yr, or text and Quantities; default: the population's own.

    Returns
    -------
    Leverage

    Notes
    -----
    What belongs to a model is its weight times what its paper prints: net yields where the paper
    gives them, total yields elsewhere. All else is birth composition, told by source: the wind
    that a set of explosions doesn't list, what the stars of a set of net yields return unchanged
    (total yields), less what was there at birth (net yields of a set of totals), and joins and
    edges that return ejecta as they were born. So a factor on a model is a factor on its printed
    figures, and moves total and net yields by the same amount.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O"])
    >>> found = leverage(stars, ["1 Gyr"])
    >>> whole = found.contribution("O").sum() + found.birth("O").sum()
    >>> bool(abs(whole / found.result.get("O") - 1) < 1e-12)
    True
    """
    found = nodes(population)
    result = population.weigh(ages)
    return Leverage(found, result, found.at(result.ages))


def check_convention(convention: str) -> None:
    """Refuse what is neither total nor net."""
    if convention not in ("total", "net"):
        raise InputError(f"convention {convention!r} isn't known", mend="choose total or net")


def share_of(amount: float, whole: float) -> float:
    """Return a part of a yield as its share; NaN where there is no yield."""
    return amount / whole if whole else np.nan
