"""A plan: a population prepared once, for calls with a few free numbers."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from steelyard.yields.composition import birth_composition
from steelyard.yields.errors import InputError
from steelyard.yields.units import plain

from ..imf import AnalyticIMF
from ..lifetimes import lifetimes
from ..population import Population, read_ages
from ..sources import DelayedSource, Source, StellarSource
from ..tracks import event_row
from .coefficients import Coefficients, coefficients, layout_key, mixture_shares, slice_weights
from .delayed import fractions
from .geometry import geometry
from .mass_shape import Shape, shape
from .parameters import Parameter, parameters
from .state import Ground, State

Array = NDArray[np.float64]


class Plan:
    """A population prepared for many calls with a few free parameters.

    Parameters
    ----------
    population : Population
        Its mass function must be analytic (not a callable).
    free : sequence of str
        Names of free parameters, see `steelyard.integrate.plan.parameters`.
    ages : array_like, optional
        yr, increasing or not; default: the population's own.
    convention : {"total", "net"}
    by_source : bool
        Keep sources apart in the results.

    Attributes
    ----------
    species, sources : tuple of str
    ages : ndarray, shape (t,)
        yr.
    start : ndarray, shape (p,)
        The population's own values of the free parameters.

    Raises
    ------
    InputError
        A free parameter isn't known, or the population can't be planned.

    Examples
    --------
    >>> from steelyard.integrate import Plan, Population, StellarSource
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O", "Fe"])
    >>> plan = Plan(stars, free=["imf.slopes[-1]"], ages=["30 Myr"])
    >>> steep, flat = plan([2.7]), plan([2.3])
    >>> bool(np.all(steep < flat))
    True
    """

    def __init__(
        self,
        population: Population,
        free: Sequence[str] = (),
        ages: Any = None,
        convention: str = "total",
        by_source: bool = False,
    ) -> None:
        if convention not in ("total", "net"):
            raise InputError(f"convention {convention!r} isn't known", mend="choose total or net")
        if not isinstance(population.imf, AnalyticIMF):
            raise InputError(
                "a plan needs an analytic mass function",
                mend="use a power law or lognormal, or Population.weigh",
            )
        if population.lifetimes == "sets" and "metallicity" in free:
            raise InputError(
                'metallicity can\'t be free with lifetimes = "sets"',
                mend="choose a law, such as portinari-1998, or fix the metallicity",
            )
        self.population = population
        self.convention = convention
        self.by_source = by_source
        self.ages = np.array(population.ages if ages is None else read_ages(ages))
        self.species = population.prepared.columns.species
        self.sources = population.kinds
        self.parameters: tuple[Parameter, ...] = parameters(free, population, self.species)
        self.start = np.array([p.value for p in self.parameters])
        self._stellar = [s for s in population.sources if isinstance(s, StellarSource)]
        self._delayed = [s for s in population.sources if isinstance(s, DelayedSource)]
        order = [*self._stellar, *self._delayed]
        self._block_of = [next(k for k, o in enumerate(order) if o is s) for s in population.sources]
        self._layouts: dict[Any, Coefficients] = {}
        self._grounds: dict[tuple[float, ...], Ground] = {}

    @property
    def free(self) -> tuple[str, ...]:
        """Names of the free parameters, in the order of theta."""
        return tuple(p.name for p in self.parameters)

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of a result: (t, species), or (sources, t, species)."""
        inner = (len(self.ages), len(self.species))
        return (len(self.sources), *inner) if self.by_source else inner

    def __call__(self, theta: ArrayLike = (), out: Array | None = None) -> Array:
        """Weigh the population at values of the free parameters.

        Parameters
        ----------
        theta : array_like, shape (p,)
            In the order of `free`; masses in Msun, times in yr.
        out : ndarray, optional
            Buffer of the result's shape to write into.

        Returns
        -------
        ndarray, shape (t, species) or (sources, t, species)
            Msun per Msun formed.

        Raises
        ------
        InputError
            Wrong number of values, or values that make no population.
        """
        state = self.state(theta)
        if out is None:
            out = np.empty(self.shape)
        elif out.shape != self.shape:
            raise InputError(f"out has shape {out.shape}, not {self.shape}")
        return self.contract(state.weights, state, out)

    def contract(self, weights: Array, state: State, out: Array, matrix: Array | None = None) -> Array:
        """Write ``weights @ matrix``, by source where the plan keeps them apart, scale factors applied.

        Parameters
        ----------
        weights : ndarray, shape (t, columns)
        state : State
        out : ndarray
            Of the plan's shape.
        matrix : ndarray, shape (columns, species), optional
            Default: the state's own.
        """
        matrix = state.ground.matrix if matrix is None else matrix
        scales = [p for p in self.parameters if p.kind == "scale"]
        if scales:
            matrix = matrix.copy()
            for p in scales:
                matrix[self._block(state, p.source), self.species.index(p.key)] *= state.values[p.name]
        if not self.by_source:
            return np.matmul(weights, matrix, out=out)
        for i in range(len(self.sources)):
            block = self._block(state, i)
            np.matmul(weights[:, block], matrix[block], out=out[i])
        return out

    def _block(self, state: State, source: int) -> slice:
        return state.ground.blocks[self._block_of[source]]

    def state(self, theta: ArrayLike) -> State:
        """Return what a call at theta works on."""
        theta = np.atleast_1d(np.asarray(theta, dtype=float))
        if theta.shape != (len(self.parameters),):
            raise InputError(
                f"theta has shape {theta.shape} for {len(self.parameters)} free parameters",
                mend=f"give {', '.join(self.free) or 'none'}",
            )
        if not np.all(np.isfinite(theta)):
            raise InputError(f"theta holds a value that isn't finite: {theta.tolist()}")
        values = dict(zip(self.free, theta.tolist(), strict=True))
        changes = [
            (p.kind, p.index, values[p.name])
            for p in self.parameters
            if p.kind in ("slope", "break", "limit")
        ]
        form = shape(self.population.imf, changes)
        events = np.empty((len(self._delayed), len(self.ages)))
        for i, source in enumerate(self._delayed):
            number, part = self.event_numbers(source, values)
            np.multiply(part, number, out=events[i])
        return State(values, self._ground(values, form), form, events)

    @cached_property
    def _ground_names(self) -> tuple[str, ...]:
        kinds = ("metallicity", "break", "limit", "share", "events_from")
        return tuple(p.name for p in self.parameters if p.kind in kinds)

    def _ground(self, values: Mapping[str, float], form: Shape) -> Ground:
        key = tuple(values[n] for n in self._ground_names)
        if key not in self._grounds:
            if len(self._grounds) >= 8:
                self._grounds.pop(next(iter(self._grounds)))
            self._grounds[key] = self._prepare(values, form)
        return self._grounds[key]

    def position(self, source: Source) -> int:
        """Return the position of a source in the population."""
        return next(i for i, s in enumerate(self.population.sources) if s is source)

    def metallicity(self, values: Mapping[str, float]) -> float:
        """Return the metallicity among the values, or the population's own."""
        z = values.get("metallicity", self.population.metallicity)
        if not 0 <= z < 0.5:
            raise InputError(f"metallicity {z:g} isn't a mass fraction of metals")
        return z

    def layout(self, z: float) -> Coefficients:
        """Return the layout that serves a metallicity."""
        key = layout_key(self.population, z)
        if key not in self._layouts:
            self._layouts[key] = coefficients(self.population, z, self.species, self.convention)
        return self._layouts[key]

    def shares(self, values: Mapping[str, float]) -> dict[tuple[int, str], float]:
        """Return the free shares of stellar sources, by stellar source and set."""
        return {
            (self._stellar.index(self.population.sources[p.source]), p.key): values[p.name]
            for p in self.parameters
            if p.kind == "share" and isinstance(self.population.sources[p.source], StellarSource)
        }

    def boundary(self, values: Mapping[str, float], layout: Coefficients) -> tuple[float, int, int] | None:
        """Return where ejecta in a join pass to the core-collapse source, and the two sources."""
        for lo, hi, below, above in layout.passing:
            source = self._stellar[above]
            name = next(
                (
                    p.name
                    for p in self.parameters
                    if p.kind == "events_from" and self.population.sources[p.source] is source
                ),
                None,
            )
            mass = values[name] if name else source.events_from
            return min(max(mass, lo), hi), below, above
        return None

    def birth(self, z: float) -> Array:
        """Return the mass fractions at birth, shape (species,)."""
        return birth_composition(self.species, z, self.population.solar)

    def _prepare(self, values: Mapping[str, float], form: Shape) -> Ground:
        z = self.metallicity(values)
        layout = self.layout(z)
        fixed = self.population.lifetimes == "sets"
        curve = self.population.prepared.curve if fixed else lifetimes(self.population.lifetimes).at(z)
        weights, _, _ = slice_weights(self.population, z, self.shares(values))
        birth = self.birth(z)
        all_coefficients = layout.at(weights, birth)
        turnoff = np.asarray(curve.turnoff(self.ages))
        place = geometry(
            layout.edge,
            layout.owner,
            form.edges,
            turnoff,
            all_coefficients.shape[1],
            all_coefficients.any(axis=(1, 2)),
            self.boundary(values, layout),
        )
        rows = self._rows(values, birth)
        return Ground(layout, place, curve, all_coefficients, rows, len(self._stellar))

    def _rows(self, values: Mapping[str, float], birth: Array) -> Array:
        out = np.zeros((len(self._delayed), len(self.species)))
        for i, source in enumerate(self._delayed):
            shares, _ = mixture_shares(source.sets[0], self.delayed_shares(source, values))
            out[i] = shares @ self.event_rows(source, birth)
        return out

    def delayed_shares(self, source: DelayedSource, values: Mapping[str, float]) -> dict[str, float]:
        """Return the free shares of a delayed source's mixture, by set."""
        return {
            p.key: values[p.name]
            for p in self.parameters
            if p.kind == "share" and self.population.sources[p.source] is source
        }

    def event_rows(self, source: DelayedSource, birth: Array) -> Array:
        """Return what one event of each set of a delayed source ejects, shape (sets, species)."""
        half = slice(0, len(birth)) if self.convention == "total" else slice(len(birth), 2 * len(birth))
        grids = source.sets[0].load(self.population.solar)
        return np.array([event_row(g, self.species, birth)[0][half] for g in grids])

    def event_numbers(self, source: DelayedSource, values: Mapping[str, float]) -> tuple[float, Array]:
        """Return the number of a delayed source's events per Msun, and their fraction up to each age."""
        at = self.position(source)
        mine = [p for p in self.parameters if p.source == at]
        number = next((values[p.name] for p in mine if p.kind == "number"), source.number)
        moved = {(p.key, p.index): np.array([values[p.name]]) for p in mine if p.kind == "delay"}
        return number, fractions(source.delay, moved, self.ages)[0]


def theta_from(plan: Plan, values: Mapping[str, Any]) -> Array:
    """Return theta with some parameters set by name, the others at the population's own values.

    Parameters
    ----------
    plan : Plan
    values : mapping
        From a free parameter's name to a number, text or Quantity.

    Returns
    -------
    ndarray, shape (p,)

    Raises
    ------
    InputError
        A name isn't free.
    """
    theta = plan.start.copy()
    units = {"break": "Msun", "limit": "Msun", "events_from": "Msun", "number": "1/Msun"}
    for name, value in values.items():
        if name not in plan.free:
            raise InputError(f"{name!r} isn't free", mend=f"free are {', '.join(plan.free)}")
        p = plan.parameters[plan.free.index(name)]
        timed = p.kind == "delay" and p.key in ("limits", "timescale", "breaks")
        theta[plan.free.index(name)] = plain(value, "yr" if timed else units.get(p.kind, ""), name)
    return theta
