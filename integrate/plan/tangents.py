"""How the weights and coefficients of a plan move with each of its free parameters, in closed form.

At a kink (a slice's metallicity, a node of the lifetimes, a limit that a turn-off mass
stands on) the derivative is that to one side: towards higher metallicity where there is
one (see `beside`), and as it holds just after the age.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError

from ..lifetimes import lifetimes
from ..sources import StellarSource
from .coefficients import layout_key, mixture_shares, slice_weights
from .mass_shape import Shape
from .parameters import Parameter
from .state import Ground

if TYPE_CHECKING:
    from .plan import Plan

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Moved:
    """How coefficients move with a parameter.

    Attributes
    ----------
    index : int
        Of the parameter.
    rows, species : slice
        Columns of the weights and species that it moves.
    matrix : ndarray, shape (rows, species)
        Scale factors applied.
    """

    index: int
    rows: slice
    species: slice
    matrix: Array


@dataclass(frozen=True, eq=False)
class Pulled:
    """How the weights of stars move with a parameter.

    Attributes
    ----------
    index : int
        Of the parameter.
    factor : float
        All in proportion.
    own : ndarray, shape (t, columns), optional
        And each by its own amount.
    strips : list of (slice, ndarray of shape (t, e))
        And those of one mass: columns, and by what they move.
    """

    index: int
    factor: float
    own: Array | None
    strips: list[tuple[slice, Array]]


@dataclass(frozen=True, eq=False)
class Tangents:
    """A plan at one theta, and how weights and coefficients move with each parameter.

    Attributes
    ----------
    ground : Ground
    weights : ndarray, shape (t, columns)
    matrix : ndarray, shape (columns, species)
        Scale factors applied.
    stars : list of Pulled
        Parameters that move the weights of stars.
    events : list of (int, int, ndarray)
        Parameters that move the events of one source: index, column, shape (t,).
    moved : list of Moved
        Parameters that move coefficients.
    """

    ground: Ground
    weights: Array
    matrix: Array
    stars: list[Pulled]
    events: list[tuple[int, int, Array]]
    moved: list[Moved]

    @property
    def stellar(self) -> slice:
        """The columns of stars."""
        return slice(0, self.ground.whole * self.ground.ends)


def beside(plan: Plan, theta: Array) -> tuple[int, Array | None]:
    """Return where metallicity stands in theta, and where it is a slice's own, theta just off it.

    There the grid's layout is another than on either side, so metallicity has no derivative
    of its own; the one on the upper side is taken, or the lower where the population refuses
    to go higher. Where it isn't a slice's own, or isn't free, nothing is returned for theta.
    """
    at = next((i for i, p in enumerate(plan.parameters) if p.kind == "metallicity"), -1)
    if at < 0:
        return at, None
    there = _kept(plan.ground(theta), "beside", lambda: _next_layout(plan, float(theta[at])))
    return at, None if there is None else np.where(np.arange(len(theta)) == at, there, theta)


def _next_layout(plan: Plan, z: float) -> float | None:
    own = layout_key(plan.population, z)
    for towards in (1.0, 0.0):
        there = float(np.nextafter(z, towards))
        try:
            return there if layout_key(plan.population, there) != own else None
        except InputError:
            # beyond the sets, where the population refuses to go: try the other side
            continue
    return None


def _kept(ground: Ground, name: str, work: Callable[[], Any]) -> Any:
    """What a ground keeps under a name, worked out at the first asking."""
    if name not in ground.kept:
        ground.kept[name] = work()
    return ground.kept[name]


def tangents(plan: Plan, theta: Array) -> Tangents:
    """Work out how weights and coefficients move with each free parameter.

    Raises
    ------
    InputError
        A parameter has no closed derivative.
    """
    ground, thetas = plan.ground(theta), theta[None]
    slopes = plan.slopes(thetas)
    weights, log_a = ground.weights(slopes)
    at = _Point(plan, theta, ground, ground.family.shape(slopes[0]), weights[0], log_a[0], slopes[0])
    timed = [clock.derivatives(theta) for clock in plan.clocks]
    happened = np.array([events for events, _ in timed]).reshape(len(timed), len(plan.ages))
    full = ground.spread(weights, happened)[0]
    stars: list[tuple[int, Pull]] = []
    events: list[tuple[int, int, Array]] = []
    moved: list[Moved] = []
    for i, p in enumerate(plan.parameters):
        if p.kind in _BY_STARS:
            stars.append((i, _BY_STARS[p.kind](at, p)))
        if p.kind == "scale":
            rows, o = plan.block(ground, p.source), plan.species.index(p.key)
            moved.append(Moved(i, rows, slice(o, o + 1), ground.matrix[rows, o : o + 1]))
        elif p.kind in _BY_COEFFICIENTS:
            unscaled = _kept(ground, p.name, partial(_BY_COEFFICIENTS[p.kind], at, p))
            scaled = plan.scale(unscaled, thetas, ground)[0] if plan.scaled else unscaled
            moved.append(Moved(i, slice(0, len(scaled)), slice(0, len(plan.species)), scaled))
    for column, (_, by) in enumerate(timed, start=len(ground.matrix) - len(timed)):
        events += [(i, column, moved_events) for i, moved_events in by.items()]
    matrix = plan.scale(ground.matrix, thetas, ground)[0]
    return Tangents(ground, full, matrix, _laid_out(ground, stars), events, moved)


@dataclass(frozen=True, eq=False)
class Pull:
    """How a parameter pulls at stars, before it is laid out by age and column.

    Attributes
    ----------
    factor : float
        All in proportion.
    intervals : ndarray, shape (i, e), optional
        Each interval by its own amount.
    scattered : tuple of ndarray, optional
        Ages, columns, and what is added there.
    strips : sequence of (slice, ndarray of shape (t, e))
        As in `Pulled`.
    """

    factor: float = 0.0
    intervals: Array | None = None
    scattered: tuple[NDArray[np.int_], NDArray[np.int_], Array] | None = None
    strips: tuple[tuple[slice, Array], ...] = ()


def _laid_out(ground: Ground, pulls: list[tuple[int, Pull]]) -> list[Pulled]:
    own = {i: p.intervals for i, p in pulls if p.intervals is not None}
    spread = dict(zip(own, ground.spread(np.array(list(own.values())), 0.0), strict=True)) if own else {}
    for i, p in pulls:
        if p.scattered:
            ages, columns, value = p.scattered
            spread[i] = np.zeros((len(ground.geometry.place), len(ground.matrix)))
            spread[i][ages, columns] = value
    return [Pulled(i, p.factor, spread.get(i), list(p.strips)) for i, p in pulls]


@dataclass(frozen=True, eq=False)
class _Point:
    """A plan at one theta: what parameters of the mass function and of the turn-off act on."""

    plan: Plan
    theta: Array
    ground: Ground
    shape: Shape
    weights: Array
    log_a: Array
    slopes: Array

    def shifted(self, shift: Array, mass: float) -> tuple[float, Array | None]:
        """Weights times the shift of log phi on their pieces, less the change of the whole mass.

        Where all intervals lie in one piece of the mass function, that is one factor for all.
        """
        intervals = self.ground.geometry.intervals
        by_piece = shift - mass / self.shape.mass
        if len(intervals.present) > 1:
            return 0.0, self.weights * by_piece[intervals.piece][:, None]
        return sum(float(by_piece[k]) for k in intervals.present), None

    def strip(
        self, mass: float, place: int, sign: float, dead: NDArray[np.bool_]
    ) -> list[tuple[slice, Array]]:
        """Stars of one mass, in a piece, at the ages at which they are dead, if they eject anything."""
        if not self.ground.geometry.kept[place]:
            return []
        first = int(self.ground.number[place]) * self.ground.ends
        star = np.array([mass])
        one = self.ground.basis_at(star, np.array([place])) * (self.shape(star) / self.shape.mass)
        return [(slice(first, first + self.ground.ends), sign * dead[:, None] * one)]


def _by_slope(at: _Point, p: Parameter) -> Pull:
    j = at.plan.power_pieces[p.index]
    shift = at.shape.slope_shift(j)
    mass = float(shift @ at.shape.masses) - float(at.shape.masses_of_log[j])
    factor, by_interval = at.shifted(shift, mass)
    intervals = at.ground.geometry.intervals
    if j in intervals.present:
        pulled = intervals.slope_weights(at.log_a, at.slopes, j)
        by_interval = pulled if by_interval is None else by_interval + pulled
    return Pull(factor, by_interval)


def _by_break(at: _Point, p: Parameter) -> Pull:
    # phi is continuous there, so nothing comes from the edge itself
    shift = at.shape.break_shift(p.index)
    return Pull(*at.shifted(shift, float(shift @ at.shape.masses)))


def _by_limit(at: _Point, p: Parameter) -> Pull:
    geometry = at.ground.geometry
    end, place, sign = (0, 0, -1.0) if p.index == 0 else (-1, len(geometry.parent) - 1, 1.0)
    mass = float(geometry.edge[end])
    phi = float(at.shape(np.array([mass]))[0])
    dead = geometry.turnoff <= mass if p.index == 0 else geometry.turnoff < mass
    factor, by_interval = at.shifted(np.zeros(len(at.slopes)), sign * mass * phi)
    return Pull(factor, by_interval, strips=tuple(at.strip(mass, place, sign, dead)))


def _by_turnoff(at: _Point, p: Parameter) -> Pull:
    ages, columns, mass, value = _kept(at.ground, "turn-off", lambda: _turning_off(at))
    if not len(ages):
        return Pull()
    return Pull(scattered=(ages[:, None], columns, value * (at.shape(mass) / at.shape.mass)[:, None]))


def _turning_off(at: _Point) -> tuple[NDArray[np.int_], NDArray[np.int_], Array, Array]:
    """Ages, columns, masses of the stars that turn off, and how their weights move per star."""
    ground, plan = at.ground, at.plan
    geometry = ground.geometry
    ages = np.flatnonzero(geometry.alive & geometry.kept[geometry.place])
    mass, place, age = geometry.turnoff[ages], geometry.place[ages], plan.ages[ages]
    columns = ground.number[place][:, None] * ground.ends + np.arange(ground.ends)
    # the star that turns off is the one whose lifetime stays the age
    by_z = lifetimes(plan.population.lifetimes).metallicity_slope(
        mass, plan.metallicity(plan.values(at.theta))
    )
    moves = -by_z * age * ground.curve.turnoff_slope(age)
    return ages, columns, mass, ground.basis_at(mass, place) * -moves[:, None]


def _by_lowest_collapse(at: _Point, p: Parameter) -> Pull:
    geometry, mass = at.ground.geometry, float(at.theta[at.plan.free.index(p.name)])
    inside = any(lo < mass < hi for lo, hi, *_ in at.ground.layout.passing)
    if not inside or not geometry.edge[0] < mass < geometry.edge[-1]:
        return Pull()
    above = int(np.searchsorted(geometry.edge, mass))
    dead = geometry.turnoff < mass
    return Pull(strips=(*at.strip(mass, above - 1, 1.0, dead), *at.strip(mass, above, -1.0, dead)))


_BY_STARS: dict[str, Callable[[_Point, Parameter], Pull]] = {
    "slope": _by_slope,
    "break": _by_break,
    "limit": _by_limit,
    "metallicity": _by_turnoff,
    "events_from": _by_lowest_collapse,
}


def _coefficients_along(at: _Point, d_weights: Array, d_birth: Array) -> Array:
    """How the columns of stars move along a change of slice weights or of birth composition."""
    plan, ground = at.plan, at.ground
    values = plan.values(at.theta)
    z = plan.metallicity(values)
    weights, _, _ = slice_weights(plan.population, z, plan.shares(values))
    return ground.flat(ground.layout.along(weights, plan.birth.at(z), d_weights, d_birth))


def _by_metallicity(at: _Point, p: Parameter) -> Array:
    plan, ground = at.plan, at.ground
    values = plan.values(at.theta)
    z = plan.metallicity(values)
    _, by_z, _ = slice_weights(plan.population, z, plan.shares(values))
    d_birth = plan.birth.slope(z)
    out = np.zeros(ground.matrix.shape)
    stellar = ground.whole * ground.ends
    out[:stellar] = _coefficients_along(at, by_z, d_birth)
    out[stellar:] = plan.rows(values, d_birth) - plan.rows(values, np.zeros(len(d_birth)))
    return out


def _by_share(at: _Point, p: Parameter) -> Array:
    plan, ground = at.plan, at.ground
    values = plan.values(at.theta)
    source = plan.population.sources[p.source]
    out = np.zeros(ground.matrix.shape)
    if isinstance(source, StellarSource):
        shares = plan.shares(values)
        _, _, by_share = slice_weights(plan.population, plan.metallicity(values), shares)
        key = (plan.stellar.index(source), p.key)
        out[: ground.whole * ground.ends] = _coefficients_along(
            at, by_share[key], np.zeros(len(plan.species))
        )
    else:
        _, by = mixture_shares(source.sets[0], plan.delayed_shares(source, values))
        rows = plan.event_rows(source, plan.birth.at(plan.metallicity(values)))
        out[plan.block(ground, p.source)] = by[p.key] @ rows
    return out


_BY_COEFFICIENTS = {"metallicity": _by_metallicity, "share": _by_share}
