"""What calls of a plan are made of: free numbers, the ground they leave alone, weights, coefficients."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from steelyard.yields.errors import InputError

from ..imf import AnalyticIMF
from ..lifetimes import lifetimes
from ..population import Population, read_ages
from ..sources import DelayedSource, Source, StellarSource
from ..tracks import event_row
from .coefficients import Birth, Coefficients, birth, coefficients, layout_key, mixture_shares, slice_weights
from .delayed import Clock, Timing
from .geometry import geometry
from .mass_shape import family
from .parameters import Parameter, parameters
from .state import Ground

Array = NDArray[np.float64]


class Workings:
    """A population taken apart into what its free parameters move; the arguments are those of `Plan`."""

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
        if population.laws and "metallicity" in free:
            raise InputError(
                f"metallicity can't be free where {', '.join(population.laws)} depends on it by a law",
                mend="fix the metallicity, or give plain numbers in place of the law",
            )
        self.population = population
        self.convention = convention
        self.by_source = by_source
        self.ages = np.array(population.ages if ages is None else read_ages(ages))
        self.species = population.prepared.columns.species
        self.sources = population.kinds
        self.parameters: tuple[Parameter, ...] = parameters(free, population, self.species)
        self.start = np.array([p.value for p in self.parameters])
        self.stellar = [s for s in population.sources if isinstance(s, StellarSource)]
        self._delayed = [s for s in population.sources if isinstance(s, DelayedSource)]
        order = [*self.stellar, *self._delayed]
        self._block_of = [next(k for k, o in enumerate(order) if o is s) for s in population.sources]
        self.clocks = tuple(self._clock(s) for s in self._delayed)
        pieces = population.imf.pieces
        self.power_pieces = [i for i, p in enumerate(pieces) if not p.curvature]
        self._declared_slopes = np.array([p.slope for p in pieces])
        self._free_slopes = [(at, self.power_pieces[p.index]) for at, p in self._of("slope")]
        self.scaled = [(at, p.source, self.species.index(p.key)) for at, p in self._of("scale")]
        kinds = ("metallicity", "break", "limit", "share", "events_from")
        self.ground_columns = [at for at, _ in self._of(*kinds)]
        self._layouts: dict[Any, Coefficients] = {}
        self._kept: tuple[tuple[float, ...], Ground] | None = None

    def _of(self, *kinds: str) -> list[tuple[int, Parameter]]:
        return [(at, p) for at, p in enumerate(self.parameters) if p.kind in kinds]

    def clock(self, source: int) -> Clock:
        """Return the number and timing of a delayed source's events, by its position in the population."""
        return self.clocks[self._block_of[source] - len(self.stellar)]

    def _clock(self, source: DelayedSource) -> Clock:
        here = [(at, p) for at, p in self._of("number", "delay") if p.source == self.position(source)]
        number = next((at for at, p in here if p.kind == "number"), None)
        moved = [(at, (p.key, p.index)) for at, p in here if p.kind == "delay"]
        timing = Timing(source.delay, tuple(k for _, k in moved), self.ages)
        return Clock(timing, [at for at, _ in moved], source.number, number)

    @property
    def free(self) -> tuple[str, ...]:
        """Names of the free parameters, in the order of theta."""
        return tuple(p.name for p in self.parameters)

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of a result: (t, species), or (sources, t, species)."""
        inner = (len(self.ages), len(self.species))
        return (len(self.sources), *inner) if self.by_source else inner

    def check(self, theta: ArrayLike, axes: int) -> Array:
        """Return theta, or many of them, as an array.

        Parameters
        ----------
        theta : array_like, shape (p,) or (n, p)
        axes : {1, 2}

        Raises
        ------
        InputError
            Another shape, or a value that isn't finite.
        """
        theta = np.asarray(theta, dtype=float)
        if theta.ndim != axes or theta.shape[-1] != len(self.parameters):
            wanted = f"({len(self.parameters)},)" if axes == 1 else f"(n, {len(self.parameters)})"
            raise InputError(
                f"theta has shape {theta.shape}, not {wanted}",
                mend=f"give {', '.join(self.free)}" if self.free else "nothing is free in this plan",
            )
        if not np.isfinite(theta).all():
            at = np.argwhere(~np.isfinite(theta))[0]
            row = f" in row {at[0]}" if axes == 2 else ""
            raise InputError(f"theta{row} holds a value that isn't finite, for {self.free[at[-1]]}")
        return theta

    def fill(self, thetas: Array, ground: Ground, out: Array) -> None:
        """Write the results of many sets of values that share their ground.

        Parameters
        ----------
        thetas : ndarray, shape (n, p)
        ground : Ground
        out : ndarray, shape (n, *shape)
        """
        weights, _ = ground.weights(self.slopes(thetas))
        matrix = self.scale(ground.matrix, thetas, ground) if self.scaled else ground.matrix
        self.multiply(ground.spread(weights, self.events(thetas)), matrix, ground, out)

    def multiply(self, weights: Array, matrix: Array, ground: Ground, out: Array) -> None:
        """Write weights times coefficients, by source where the plan keeps them apart.

        Parameters
        ----------
        weights : ndarray, shape (n, t, columns)
        matrix : ndarray, shape (columns, species) or (n, columns, species)
        ground : Ground
        out : ndarray, shape (n, *shape)
        """
        if not self.by_source:
            np.matmul(weights, matrix, out=out)
            return
        for i in range(len(self.sources)):
            block = self.block(ground, i)
            np.matmul(weights[..., block], matrix[..., block, :], out=out[:, i])

    def scale(self, matrix: Array, thetas: Array, ground: Ground) -> Array:
        """Return coefficients with the scale factors of many sets of values, shape (n, columns, species)."""
        out = np.repeat(matrix[None], len(thetas), axis=0)
        for at, source, species in self.scaled:
            out[:, self.block(ground, source), species] *= thetas[:, at, None]
        return out

    def block(self, ground: Ground, source: int) -> slice:
        """Return the columns of a source, by its position in the population."""
        return ground.blocks[self._block_of[source]]

    def slopes(self, thetas: Array) -> Array:
        """Return the slopes of all pieces of the mass function, shape (n, pieces)."""
        out = np.repeat(self._declared_slopes[None], len(thetas), axis=0)
        for at, piece in self._free_slopes:
            out[:, piece] = thetas[:, at]
        return out

    def events(self, thetas: Array) -> Array:
        """Return the events of delayed sources up to each age, shape (n, delayed sources, t), per Msun."""
        out = np.empty((len(thetas), len(self.clocks), len(self.ages)))
        for i, clock in enumerate(self.clocks):
            np.multiply(clock.timing.fractions(thetas[:, clock.columns]), clock.number(thetas), out=out[:, i])
        return out

    def values(self, theta: Array) -> dict[str, float]:
        """Return the values of the free parameters by name."""
        return dict(zip(self.free, theta.tolist(), strict=True))

    def ground(self, theta: Array) -> Ground:
        """Return what calls work on that share their metallicity, limits, breaks and shares with theta."""
        key = tuple(theta[self.ground_columns].tolist())
        kept = self._kept
        if kept is None or kept[0] != key:
            kept = self._kept = (key, self._prepare(self.values(theta)))
        return kept[1]

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
            (self.stellar.index(self.population.sources[p.source]), p.key): values[p.name]
            for p in self.parameters
            if p.kind == "share" and isinstance(self.population.sources[p.source], StellarSource)
        }

    def boundary(self, values: Mapping[str, float], layout: Coefficients) -> tuple[float, int, int] | None:
        """Return where ejecta in a join pass to the core-collapse source, and the two sources."""
        for lo, hi, below, above in layout.passing:
            source = self.stellar[above]
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

    @cached_property
    def birth(self) -> Birth:
        """Mass fractions at birth by metallicity."""
        return birth(self.species, self.population.solar)

    def _prepare(self, values: Mapping[str, float]) -> Ground:
        edges = [(p.kind, p.index, values[p.name]) for _, p in self._of("break", "limit")]
        mass_functions = family(self.population.imf, edges)
        z = self.metallicity(values)
        layout = self.layout(z)
        fixed = self.population.lifetimes == "sets"
        curve = self.population.prepared.curve if fixed else lifetimes(self.population.lifetimes).at(z)
        weights, _, _ = slice_weights(self.population, z, self.shares(values))
        birth = self.birth.at(z)
        all_coefficients = layout.at(weights, birth)
        turnoff = np.asarray(curve.turnoff(self.ages))
        place = geometry(
            layout.edge,
            layout.owner,
            mass_functions,
            turnoff,
            all_coefficients.shape[1],
            all_coefficients.any(axis=(1, 2)),
            self.boundary(values, layout),
        )
        rows = self.rows(values, birth)
        return Ground(layout, mass_functions, place, curve, all_coefficients, rows, len(self.stellar))

    def rows(self, values: Mapping[str, float], birth: Array) -> Array:
        """Return what one event of each delayed source ejects, shape (delayed sources, species)."""
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
        dry, wet = self._events_of[self.position(source)]
        return dry + wet * birth

    @cached_property
    def _events_of(self) -> dict[int, tuple[Array, Array]]:
        """For each delayed source what an event of each set ejects: a part, and one per birth fraction."""
        count = len(self.species)
        half = slice(0, count) if self.convention == "total" else slice(count, 2 * count)
        out = {}
        for source in self._delayed:
            grids = source.sets[0].load(self.population.solar)
            dry, full = (
                np.array([event_row(g, self.species, np.full(count, x))[0][half] for g in grids])
                for x in (0.0, 1.0)
            )
            out[self.position(source)] = (dry, full - dry)
        return out
