"""Making a star table: bounds of cells at every kink, more of them until the error is met everywhere."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.units import plain

from ..population import Population
from ..provenance import attributes
from ..sources import DelayedSource, StellarSource
from .exact import Exact
from .lookup import YOUNGEST, rows_between
from .table import Late, StarTable

Array = NDArray[np.float64]

#: where in a cell errors are looked for: next to the peaks of what a parabola leaves of a smooth curve
CHECKED = np.array([0.1, 0.25, 0.5, 0.75, 0.9])

#: where in a panel: next to the peaks of what four rows leave, at 0.11, 0.5 and 0.89
ACROSS = (0.1, 0.3, 0.5, 0.7, 0.9)

#: largest error at the points checked, in units of the bound
SAFE = 0.6

#: of which along age alone
ALONG_AGE = 0.3

#: relative distance from a metallicity at which its neighbourhood is taken
ASIDE = 1e-9

#: cells, and panels, after which no more are made
MOST = 2000

#: metallicities at which lifetimes by law have kinks; errors are met without, but with more panels
KINKS = {"portinari-1998": (0.0004, 0.004, 0.008, 0.02, 0.05), "raiteri-1996": (7e-5, 0.03)}

#: Msun per Msun formed under which nobody cares for the error of a species
FLOOR = 1e-12

#: metallicities served where none are given, if the population holds the edges of its sets
WIDEST = (0.0, 0.05)


def star_table(
    population: Population,
    metallicities: Any = None,
    until: Any = None,
    error: float = 1e-3,
    convention: str = "total",
) -> StarTable:
    """Tabulate a population over metallicity and age, for look-up by star particles.

    Parameters
    ----------
    population : Population
        Its own metallicity and ages don't matter.
    metallicities : pair of float, optional
        Lowest and highest served; default: 0 to 0.05, or, if the population refuses to
        leave its sets, what all of them cover.
    until : float, optional
        Oldest age served, yr; default: the population's last.
    error : float
        Bound on the error, 1e-6 to 0.1.
    convention : {"total", "net"}

    Returns
    -------
    StarTable

    Raises
    ------
    InputError
        Values that make no table, or a bound that isn't met with 2000 cells or panels.

    Notes
    -----
    The bound: for every source, species, metallicity Z and age t served, the yield E up to
    that age obeys ``|table - E| <= error * (V + 1e-12)``, where V(Z) is all that the source
    moves of the species up to the last age, the sum of |dE|. For total yields V is the last E
    itself. Net yields may be negative or cancel: V then is gains plus losses, so no bound is
    promised relative to what is left over. What is ejected between two ages is off by twice
    the bound at most, however long the time. The mass returned and the numbers of events obey
    the same bound.

    Where the lifetimes let a range of masses die at one age, E jumps, and the bound holds
    at ages further from that one than a factor ``1 + error``.

    How it is met: cells end where yields, mass function and lifetimes have kinks, panels where
    a set has models, and both are halved until the error against the exact integral is below
    0.6 of the bound at five places in each cell, at five metallicities in each panel. What the
    interpolation leaves of a smooth curve peaks within 3 % of what is seen there; the rest of the
    margin is for curves that aren't.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> stars = Population(0.01, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O", "Fe"])
    >>> table = star_table(stars, metallicities=(0.004, 0.02), until="100 Myr")
    >>> oxygen, iron = table.eject([5e6, 1e7], metallicity=[0.01, 0.02], dt=1e6, mass=1e4).T
    >>> exact = Population(0.01, stars.sources, species=["O"]).weigh([5e6, 6e6]).get("O")
    >>> bool(abs(oxygen[0] - 1e4 * (exact[1] - exact[0])) < 2e-3 * 1e4 * stars.weigh([1e8]).get("O")[0])
    True
    """
    if convention not in ("total", "net"):
        raise InputError(f"convention {convention!r} isn't known", mend="choose total or net")
    if population.laws:
        raise InputError(
            f"{', '.join(population.laws)} depends on metallicity by a law, which star tables don't follow",
            mend="give plain numbers in place of the law",
        )
    error = plain(error, "", "error")
    if not 1e-6 <= error <= 0.1:
        raise InputError(f"error {error:g} isn't between 1e-6 and 0.1", mend="such as 1e-3")
    last = max(population.ages) if until is None else plain(until, "yr", "until")
    if last <= YOUNGEST:
        raise InputError(f"until is not above {YOUNGEST:g} yr: {last:g} yr", mend='such as "13.8 Gyr"')
    return _Draft(population, _range(population, metallicities), float(last), error, convention).refined()


def _range(population: Population, given: Any) -> tuple[float, float]:
    zs = [g.metallicities for g in _grids(population)]
    if given is None:
        covered = (max(z[0] for z in zs), min(z[-1] for z in zs))
        given = WIDEST if population.edges.metallicity == "hold" else covered
    pair = np.atleast_1d(plain(given, "", "metallicities"))
    if pair.shape != (2,) or not 0 <= pair[0] < pair[1] < 0.5:
        raise InputError(
            "metallicities needs the lowest and the highest mass fraction of metals",
            mend="such as (1e-4, 0.03)",
        )
    return float(pair[0]), float(pair[1])


def _grids(population: Population) -> list[Any]:
    stellar = [s for s in population.sources if isinstance(s, StellarSource)]
    return [g for s in stellar for entry in s.sets for g in entry.load(population.solar)]


class _Draft:
    """A table in the making."""

    def __init__(
        self,
        population: Population,
        span: tuple[float, float],
        until: float,
        error: float,
        convention: str,
    ) -> None:
        self.population, self.until, self.error, self.convention = population, until, error, convention
        self._exact: dict[float, Exact] = {}
        self.attributes = attributes(population.weigh([until]))
        law = population.lifetimes if isinstance(population.lifetimes, str) else ""
        slices = {z for g in _grids(population) for z in g.metallicities}
        inside = (z for z in slices.union(KINKS.get(law, ())) if span[0] < z < span[1])
        self.edge = [span[0], *sorted(inside), span[1]]
        self.slices = slices
        exacts = [self.exact(z) for a, b in pairwise(self.edge) for z in self._worked_at(a, b)]
        exacts += [self.exact(z) for z in self.edge]
        lowest = min(float(e.curve.turnoff(until)) for e in exacts)
        lowest = max(lowest, min(e.barren for e in exacts))
        kinks = np.unique(np.concatenate([e.kinks for e in exacts]))
        # kinks that differ by rounding are one
        kinks = kinks[np.concatenate([[True], np.diff(kinks) > 1e-12 * kinks[1:]])]
        self.mass = np.unique(np.concatenate([[min(lowest, kinks[-1])], kinks[kinks > lowest]]))[::-1]
        self.late = self._late()

    def exact(self, metallicity: float) -> Exact:
        """The population at a metallicity."""
        if metallicity not in self._exact:
            one = Exact(self.population, metallicity, self.convention)
            if self._exact and one.delays != next(iter(self._exact.values())).delays:
                raise InputError(
                    "a delay that changes with metallicity can't be tabulated",
                    where="star_table",
                    mend="fix the delay, or make a table for each range of metallicities",
                )
            self._exact[metallicity] = one
        return self._exact[metallicity]

    @staticmethod
    def _worked_at(lo: float, hi: float) -> list[float]:
        """Metallicities at which a panel's rows are worked out: the ends a little inside."""
        z = rows_between(lo, hi)[0]
        return [lo + ASIDE * (lo or hi), float(z[1]), float(z[2]), hi * (1 - ASIDE)]

    def refined(self) -> StarTable:
        """Add cells and panels until the errors are safe."""
        for z in self.edge:
            self._add_cells(z)
        done: dict[tuple[float, float], float] = {}
        while len(done) < len(self.edge) - 1:
            for a, b in pairwise(self.edge):
                if (a, b) not in done:
                    for z in self._worked_at(a, b):
                        self._add_cells(z)
            table = self._table(0.0)
            for a, b in pairwise(self.edge.copy()):
                if (a, b) in done:
                    continue
                size = max(self._error_at(table, z) for z in _across(a, b))
                if size <= SAFE:
                    done[a, b] = size
                else:
                    self.edge.append(_across(a, b)[len(ACROSS) // 2])
            self.edge.sort()
            if len(self.edge) > MOST:
                raise self._unmet("panels of metallicity")
        return self._table(max(done.values()) * self.error)

    def _unmet(self, of_what: str) -> InputError:
        return InputError(
            f"an error of {self.error:g} isn't met with {MOST} {of_what}",
            where="star_table",
            mend="allow a larger error, or narrow the metallicities",
        )

    def _add_cells(self, metallicity: float) -> None:
        """Add masses until each cell's parabola is near enough at one metallicity."""
        exact = self.exact(metallicity)
        while True:
            bounds = np.log(exact.curve.lifetime(self.mass))
            ages = _ages(bounds)
            step, owner = exact.steps(self.mass)
            bend = self._bend(exact, step)
            true = exact.until(np.asarray(exact.curve.turnoff(ages.ravel())))
            bad = np.zeros(len(step), dtype=bool)
            x = CHECKED[:, None]
            for i in range(len(true)):
                mine = (owner == i)[:, None]
                moved = step * mine
                start = np.cumsum(moved, axis=0) - moved
                line = start[:, None] + x * moved[:, None] + x * (1 - x) * (bend * mine)[:, None]
                off = np.abs(line - true[i].reshape(line.shape)) / (np.abs(moved).sum(axis=0) + FLOOR)
                bad |= off.max(axis=(1, 2)) > ALONG_AGE * self.error
            bad &= np.diff(bounds) > self.error * 1e-3
            bad &= bounds[:-1] < np.log(self.until)
            if not bad.any():
                return
            middle = exact.curve.turnoff(np.exp(0.5 * (bounds[:-1] + bounds[1:])[bad]))
            self.mass = np.unique(np.concatenate([self.mass, middle]))[::-1]
            if len(self.mass) > MOST:
                raise self._unmet("cells")

    def _bend(self, exact: Exact, step: Array) -> Array:
        """Q of each cell, from what has been ejected in the middle of its log age."""
        bounds = np.log(exact.curve.lifetime(self.mass))
        middle = np.asarray(exact.curve.turnoff(np.exp(0.5 * (bounds[:-1] + bounds[1:]))))
        inside = np.clip(middle, self.mass[1:], self.mass[:-1])
        early = exact.steps(np.stack([self.mass[:-1], inside], axis=1).ravel())[0][::2]
        bend = 4.0 * (early - 0.5 * step)
        # with totals the slope may not change its sign in a cell: nobody takes matter back
        return np.clip(bend, -np.abs(step), np.abs(step)) if self.convention == "total" else bend

    def _error_at(self, table: StarTable, metallicity: float) -> float:
        """Largest error of a table at a metallicity, in units of the bound."""
        exact = self.exact(metallicity)
        bounds = np.log(exact.curve.lifetime(table.mass))
        # a range of masses that dies at one age is seen from both sides
        flat = np.diff(bounds) < 1e-9
        beside = np.exp(np.concatenate([bounds[:-1][flat] - self.error, bounds[:-1][flat] + self.error]))
        ages = np.concatenate([_ages(bounds)[~flat].ravel(), beside, [self.until]])
        ages = np.sort(ages[ages <= self.until])
        true = exact.until(np.asarray(exact.curve.turnoff(ages)))
        step, owner = exact.steps(table.mass)
        worst = 0.0
        for i, source in enumerate(exact.stellar):
            found = table.eject(0.0, metallicity, ages, source=source.kind, accounts=True)
            whole = np.abs(step * (owner == i)[:, None]).sum(axis=0) + FLOOR
            worst = max(worst, float((np.abs(found - true[i]) / whole).max()))
        for late, delay, (kind, *_) in zip(exact.late, exact.delays, self.late, strict=True):
            found = table.eject(0.0, metallicity, self.until, source=kind, accounts=True)[0]
            true_late = late * delay.fraction(self.until)
            worst = max(worst, float((np.abs(found - true_late) / (np.abs(late) + FLOOR)).max()))
        return worst / self.error

    def _late(self) -> list[tuple[str, Array, Array]]:
        out = []
        for source in self.population.sources:
            if isinstance(source, DelayedSource):
                out.append((source.kind, *_fractions(source, self.until, ALONG_AGE * self.error)))
        return out

    def _table(self, checked: float) -> StarTable:
        pairs = list(pairwise(self.edge))
        labels = [z for a, b in pairs for z in rows_between(a, b)[0].tolist()]
        worked = [z for a, b in pairs for z in self._worked_at(a, b)]
        point = np.full(len(self.edge), -1)
        for i, z in enumerate(self.edge):
            beside = ([worked[4 * i - 1]] if i else []) + ([worked[4 * i]] if i < len(pairs) else [])
            if z in self.slices and not all(self._same(z, other) for other in beside):
                point[i] = len(worked)
                labels.append(z)
                worked.append(z)
        exacts = [self.exact(z) for z in worked]
        columns = exacts[0].late.shape[1]
        step, bend = np.zeros((2, len(worked), len(self.mass) + 1, columns))
        owner = np.zeros(step.shape[:2], dtype=np.int64)
        kinds = self.population.kinds
        for r, exact in enumerate(exacts):
            step[r, 1:-1], position = exact.steps(self.mass)
            bend[r, 1:-1] = self._bend(exact, step[r, 1:-1])
            owner[r, 1:-1] = np.array([kinds.index(s.kind) for s in exact.stellar])[position]
        late = {}
        for i, (kind, log_age, fraction) in enumerate(self.late):
            ejected = np.array([exact.late[i] for exact in exacts])
            late[kind] = Late(log_age, fraction, ejected[:1] if np.all(ejected == ejected[0]) else ejected)
        return StarTable(
            species=self.population.prepared.columns.species,
            sources=kinds,
            events=exacts[0].events,
            convention=self.convention,
            error=self.error,
            checked=checked,
            until=self.until,
            metallicity=np.array(labels),
            edge=np.array(self.edge),
            straight=np.array([rows_between(a, b)[1] for a, b in pairs]),
            point=point,
            mass=self.mass,
            log_age=np.log([exact.curve.lifetime(self.mass) for exact in exacts]),
            step=step,
            bend=bend,
            owner=owner,
            late=late,
            attributes=self.attributes,
        )

    def _same(self, z: float, beside: float) -> bool:
        """Whether the answer is the same at and beside a metallicity."""
        (one, whose), (other, whose_other) = (self.exact(x).steps(self.mass) for x in (z, beside))
        near = np.abs(one - other).sum(axis=0) <= 1e-6 * np.abs(one).sum(axis=0) + 1e-16
        return bool(np.all(near)) and np.array_equal(whose, whose_other)


def _ages(bounds: Array) -> Array:
    return np.exp(bounds[:-1, None] + CHECKED * np.diff(bounds)[:, None])


def _across(lo: float, hi: float) -> list[float]:
    """Metallicities in a panel at which errors are looked for."""
    straight = rows_between(lo, hi)[1]
    return [lo + x * (hi - lo) if straight else lo * (hi / lo) ** x for x in ACROSS]


def _fractions(source: DelayedSource, until: float, error: float) -> tuple[Array, Array]:
    """Log ages between which the fraction of a source's events is a straight line, and that fraction."""
    delay = source.delay
    first, last = delay.limits
    if first < YOUNGEST or delay.fraction(first) > 0:
        # no straight line in log age begins at age 0; what falls before a start is under the error
        first = last
        while first > YOUNGEST and delay.fraction(first) > 0.25 * error:
            first /= 2.0
    kinks: Sequence[float] = [*getattr(delay, "breaks", ()), *getattr(delay, "ages", ()), last]
    log_age = np.log(np.unique([first, *(k for k in kinks if k > first)]))
    if len(log_age) == 1:
        return log_age, np.zeros(1)
    while True:
        fraction = np.array(delay.fraction(np.exp(log_age)))
        fraction[0] = 0.0
        fraction[-1] = 1.0
        place = log_age[:-1, None] + CHECKED * np.diff(log_age)[:, None]
        line = fraction[:-1, None] + CHECKED * np.diff(fraction)[:, None]
        bad = np.abs(line - delay.fraction(np.exp(place))).max(axis=1) > error
        bad &= log_age[:-1] < np.log(until)
        if not bad.any() or len(log_age) > MOST:
            return log_age, fraction
        middle = 0.5 * (log_age[:-1] + log_age[1:])[bad]
        log_age = np.sort(np.concatenate([log_age, middle]))
