"""Grids of metallicity and age between which straight lines stay within a stated error."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.units import plain

from ..population import Population, read_ages
from ..results import PopulationYields

Array = NDArray[np.float64]

#: where between two nodes the error is looked for
CHECKED = np.array([0.25, 0.5, 0.75])

#: where it is measured in the end: other places than those that placed the nodes
MEASURED = np.array([0.12, 0.38, 0.62, 0.88])

#: of the bound, for each of the two axes while nodes are placed
SHARE = 0.4

#: relative width of the interval in which a jump between two metallicities is shut in
ASIDE = 1e-6

#: nodes of one axis after which no more are made
MOST = 600

#: Msun per Msun formed under which nobody cares for an error
FLOOR = 1e-12

#: oldest age at which nothing has been ejected yet, yr
YOUNGEST = 1e6


@dataclass(frozen=True, eq=False)
class Handoff:
    """A population at every metallicity and age of a grid.

    Attributes
    ----------
    population : Population
        As it was given; its own metallicity doesn't matter.
    results : tuple of PopulationYields
        One for each metallicity, at the same ages.
    error : float or None
        Bound asked for; None where an axis was given.
    checked : float
        Largest error measured between the nodes, in the same measure.
    """

    population: Population
    results: tuple[PopulationYields, ...]
    error: float | None
    checked: float

    @property
    def metallicities(self) -> Array:
        """Shape (z,), increasing."""
        return np.array([r.population.metallicity for r in self.results])

    @property
    def ages(self) -> Array:
        """Shape (t,), yr, increasing."""
        return self.results[0].ages

    @property
    def interpolation(self) -> str:
        """How the receiving code is to interpolate, and how well that does."""
        first = self.metallicities[:2]
        near_0 = f" (in metallicity itself between 0 and {first[1]:g})" if first[0] == 0 else ""
        return (
            f"cumulative quantities: linear in log10 of metallicity{near_0} and in log10 of age; 0 ejected"
            f" below the first age if that is {YOUNGEST:g} yr or less; error at most {self.checked:.2e} of"
            " the largest value that source and quantity have at any age at that metallicity (net yields:"
            " of the larger of total and net; mass of no species: of the mass ejected), measured at four"
            " places between any two nodes of each axis; not between metallicities"
            f" {ASIDE:g} of their value apart, which shut in jumps of the sets; rates are exact at the"
            " nodes, nothing is promised between: difference cumulative quantities instead"
        )


def handoff(
    population: Population,
    metallicities: Any = (1e-4, 0.03),
    ages: Any = None,
    error: float = 1e-2,
    chosen: bool = True,
) -> Handoff:
    """Weigh a population over metallicity and age, on nodes that suit linear interpolation.

    Parameters
    ----------
    population : Population
        Its own metallicity and ages don't matter.
    metallicities : sequence of float
        Lowest (0 is one) and highest, with nodes chosen between; or all nodes, where `chosen` is False.
    ages : sequence, optional
        All nodes, yr; default: chosen between 1 Myr and the population's last.
    error : float
        Bound on the error of interpolation, 1e-4 to 0.3; without meaning where both axes are given.
    chosen : bool

    Returns
    -------
    Handoff

    Raises
    ------
    InputError
        Values that make no grid, or a bound not met with 600 nodes of an axis.

    Notes
    -----
    The error is that of cumulative yields and accounts interpolated linearly in log10 of
    metallicity (in metallicity itself next to 0) and of age, in units of the largest value that
    the source and quantity have at any age at that metallicity; for net yields, of the larger
    of total and net; for mass of no species, of the mass ejected.

    Where sets in series change the masses they serve, yields jump at the metallicity of a
    model. Such a jump is shut in between nodes a millionth of it apart, where no bound holds.

    Examples
    --------
    >>> from steelyard.integrate import StellarSource
    >>> stars = Population(0.01, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O"])
    >>> made = handoff(stars, (0.004, 0.02), error=0.05)
    >>> made.checked <= 0.05
    True
    """
    error = plain(error, "", "error")
    if not 1e-4 <= error <= 0.3:
        raise InputError(f"error {error:g} isn't between 1e-4 and 0.3", mend="such as 1e-2")
    zs = sorted(set(np.atleast_1d(plain(metallicities, "", "metallicities")).tolist()))
    if not zs or zs[0] < 0 or zs[-1] >= 0.5:
        raise InputError("metallicities are mass fractions of metals", mend="such as 1e-4 and 0.03")
    if chosen and len(zs) > 2:
        raise InputError(
            f"nodes are chosen between two metallicities, not {len(zs)}", mend="give the lowest and highest"
        )
    if len(zs) < 2:
        raise InputError("one metallicity is no grid", mend="give two or more, or use `steelyard weigh`")
    last = float(max(population.ages))
    # ages are those of the grid
    draft = _Draft(population := replace(population, ages=(last,)))
    if chosen:
        zs = draft.with_jumps(*zs)
    fixed = ages is not None
    nodes = sorted(set(read_ages(ages))) if fixed else [YOUNGEST, last]
    if nodes[0] <= 0 or len(nodes) < 2 or nodes[0] >= nodes[-1]:
        raise InputError("ages needs two or more above 0", mend='such as ["1 Myr", "13.8 Gyr"]')
    place = SHARE * error
    while True:
        age_nodes = np.array(nodes)
        bad_age = np.zeros(len(nodes) - 1, dtype=bool)
        if not fixed:
            for z in zs:
                bad_age |= draft.along_age(z, age_nodes) > place
        bad_z = np.zeros(len(zs) - 1, dtype=bool)
        if chosen:
            bad_z = np.array(
                [_is_wide(a, b) and draft.across(a, b, age_nodes, CHECKED) > place for a, b in _pairs(zs)]
            )
        if not bad_age.any() and not bad_z.any():
            wide = [(a, b) for a, b in _pairs(zs) if _is_wide(a, b)] or [(z, z) for z in zs]
            checked = max(draft.measured(a, b, age_nodes) for a, b in wide)
            if checked <= error or (fixed or not chosen):
                break
            place *= 0.7
            continue
        nodes = _halved(nodes, bad_age)
        zs = _halved(zs, bad_z)
        if max(len(nodes), len(zs)) > MOST:
            raise InputError(
                f"an error of {error:g} isn't met with {MOST} nodes",
                where="handoff",
                mend="allow a larger error, or narrow the metallicities",
            )
    given = None if fixed or not chosen else error
    return Handoff(population, tuple(draft.at(z).weigh(nodes) for z in zs), given, float(checked))


def _pairs(values: Sequence[float]) -> list[tuple[float, float]]:
    return list(pairwise(values))


def _is_wide(lo: float, hi: float) -> bool:
    """Whether an interval of metallicity isn't one that only shuts in a jump."""
    return hi > lo * (1 + 3 * ASIDE)


def _at(lo: float, hi: float, x: float) -> float:
    """Return the place between two nodes: straight in log10, next to 0 straight."""
    return float(lo * (hi / lo) ** x) if lo > 0 else x * hi


def _halved(values: Sequence[float], bad: NDArray[np.bool_]) -> list[float]:
    middles = [_at(a, b, 0.5) for (a, b), is_bad in zip(_pairs(values), bad, strict=True) if is_bad]
    return sorted([*values, *middles])


def _between(ages: Array, places: Array) -> Array:
    """Ages at places between nodes, shape (t - 1, places)."""
    log = np.log(ages)
    return np.exp(log[:-1, None] + places * np.diff(log)[:, None])


class _Draft:
    """A population at the metallicities asked for so far."""

    def __init__(self, population: Population) -> None:
        self._population = population
        self._made: dict[float, Population] = {}

    def at(self, z: float) -> Population:
        if z not in self._made:
            self._made[z] = replace(self._population, metallicity=z)
        return self._made[z]

    def with_jumps(self, lo: float, hi: float) -> list[float]:
        """Metallicities of the sets' models and both sides of each, where yields may jump."""
        slices = {z for g in self._population.prepared.sets for z in g.metallicities if lo < z < hi}
        return sorted({lo, hi, *(z * (1 + side * ASIDE) for z in slices for side in (-1, 0, 1))})

    def _values(self, z: float, ages: Array) -> Array:
        """What is interpolated, shape (t, quantities)."""
        result = self.at(z).weigh(ages)
        parts = [np.moveaxis(result.cumulative, 0, 1).reshape(len(ages), -1), result.living[:, None]]
        return np.concatenate(parts + [v[:, None] for v in result.events.values()], axis=1)

    def _scale(self, z: float, last: float) -> Array:
        """Largest values at a metallicity, shape (quantities,)."""
        ages = np.geomspace(YOUNGEST, last, 60)
        result = self.at(z).weigh(ages)
        size = np.abs(result.cumulative).max(axis=1)
        columns = result.columns
        size[:, columns.net] = np.maximum(size[:, columns.net], size[:, columns.total])
        for name in ("rest_total", "rest_net", "wind", "remnant"):
            # what little is left over is measured by what it is left over from
            at = columns.account(name)
            size[:, at] = np.maximum(size[:, at], size[:, columns.account("ejected")])
        numbers = [np.abs(v).max() for v in result.events.values()]
        return np.concatenate([size.ravel(), [1.0], numbers]) + FLOOR

    def along_age(self, z: float, ages: Array) -> Array:
        """Largest error in each interval of age at one metallicity."""
        off = self._off(self._values(z, ages), z, ages, CHECKED)
        return off.max(axis=1)

    def _off(self, at_nodes: Array, z: float, ages: Array, places: Array) -> Array:
        true = self._values(z, _between(ages, places).ravel()).reshape(len(ages) - 1, len(places), -1)
        x = places[:, None]
        line = at_nodes[:-1, None] * (1 - x) + at_nodes[1:, None] * x
        return (np.abs(line - true) / self._scale(z, ages[-1])).max(axis=2)

    def _mixed(self, lo: float, hi: float, x: float, ages: Array) -> Array:
        return (1 - x) * self._values(lo, ages) + x * self._values(hi, ages)

    def across(self, lo: float, hi: float, ages: Array, places: Array) -> float:
        """Largest error at the nodes of age between two metallicities."""
        worst = 0.0
        for x in places:
            z = _at(lo, hi, x)
            off = np.abs(self._mixed(lo, hi, x, ages) - self._values(z, ages)) / self._scale(z, ages[-1])
            worst = max(worst, float(off.max()))
        return worst

    def measured(self, lo: float, hi: float, ages: Array) -> float:
        """Largest error of interpolation in both, between two metallicities."""
        worst = 0.0
        for x in (0.0, *MEASURED, 1.0):
            z = hi if x == 1.0 else _at(lo, hi, x)
            worst = max(worst, float(self._off(self._mixed(lo, hi, x, ages), z, ages, MEASURED).max()))
        return worst
