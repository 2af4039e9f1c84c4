"""What calls of a plan work on while metallicity, limits, breaks and shares stay the same."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..lifetimes import LifetimeCurve
from ..weights import basis
from .coefficients import Coefficients
from .geometry import Geometry
from .mass_shape import Family

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Ground:
    """A plan at one metallicity, one set of limits, breaks, shares and lowest collapse mass.

    Attributes
    ----------
    layout : Coefficients
    family : Family
        Mass functions with these limits and breaks.
    geometry : Geometry
    curve : LifetimeCurve
    coefficients : ndarray, shape (s, e, o)
        Of the layout's segments.
    rows : ndarray, shape (delayed sources, o)
        What one event ejects.
    sources : int
        Number of stellar sources.
    kept : dict
        Derivatives that stay the same too, once they have been asked for.
    """

    layout: Coefficients
    family: Family
    geometry: Geometry
    curve: LifetimeCurve
    coefficients: Array
    rows: Array
    sources: int
    kept: dict[str, Any] = field(default_factory=dict)

    @property
    def ends(self) -> int:
        """Basis functions of a segment."""
        return self.coefficients.shape[1]

    @cached_property
    def matrix(self) -> Array:
        """Coefficients of the kept pieces, then what events eject, shape (columns, o)."""
        return np.concatenate([self.flat(self.coefficients), self.rows])

    def flat(self, coefficients: Array) -> Array:
        """Return segments' coefficients laid out for the kept pieces, shape (pieces * e, o)."""
        kept = self.geometry.parent[self.geometry.kept]
        return coefficients[kept].reshape(-1, coefficients.shape[2])

    @cached_property
    def blocks(self) -> tuple[slice, ...]:
        """Columns of each stellar source, then of each delayed one."""
        owner = self.geometry.owner[self.geometry.kept]
        out = []
        for i in range(self.sources):
            # a source serves one range of mass, wherever it stands in the population's list
            mine = np.flatnonzero(owner == i)
            out.append(
                slice(int(mine[0]) * self.ends, (int(mine[-1]) + 1) * self.ends) if len(mine) else slice(0, 0)
            )
        last = len(owner) * self.ends
        return (*out, *(slice(last + i, last + i + 1) for i in range(len(self.rows))))

    @cached_property
    def whole(self) -> int:
        """How many pieces are kept."""
        return int(self.geometry.kept.sum())

    @cached_property
    def over(self) -> Array:
        """1 where a kept piece lies wholly above a turn-off mass, else 0; shape (pieces * e, t)."""
        kept = np.flatnonzero(self.geometry.kept)
        above = kept[:, None] > self.geometry.place[None, :]
        return np.repeat(above, self.ends, axis=0).astype(float)

    @cached_property
    def partial(self) -> NDArray[np.int_]:
        """Where, in weights of shape (columns, t) laid flat, those of pieces with a turn-off mass go."""
        ages = self.geometry.inside
        columns = self.number[self.geometry.place[ages]][:, None] * self.ends + np.arange(self.ends)
        return (columns * len(self.geometry.place) + ages[:, None]).ravel()

    @cached_property
    def number(self) -> NDArray[np.int_]:
        """Position of each piece among those kept, where it is; shape (p,)."""
        return np.cumsum(self.geometry.kept) - 1

    def weights(self, slopes: Array) -> tuple[Array, Array]:
        """Return the weights of the intervals for mass functions normalised to 1 Msun.

        Parameters
        ----------
        slopes : ndarray, shape (n, pieces)

        Returns
        -------
        weights : ndarray, shape (n, i, e)
        log_a : ndarray, shape (n, pieces)
            Amplitudes of the normalised mass functions.
        """
        log_a, masses = self.family.at(slopes)
        log_a -= np.log(np.add.reduce(masses, axis=1, keepdims=True))
        return self.geometry.intervals.weights(log_a, slopes), log_a

    def spread(self, weights: Array, events: Array | float) -> Array:
        """Lay interval weights and events out by age and column.

        Parameters
        ----------
        weights : ndarray, shape (n, i, e)
            Of the geometry's intervals.
        events : ndarray, shape (n, delayed sources, t), or 0
            Events up to each age.

        Returns
        -------
        ndarray, shape (n, t, columns)
            The yields are this times `matrix`.
        """
        # ages run fastest: the long axis of the products that fill it
        count, stellar = len(weights), self.whole * self.ends
        out = np.empty((count, len(self.matrix), len(self.geometry.place)))
        np.multiply(self.over, weights[:, : self.whole].reshape(count, stellar, 1), out=out[:, :stellar])
        flat = out.reshape(count, out.shape[1] * out.shape[2])
        flat[:, self.partial] = weights[:, self.whole :].reshape(count, len(self.partial))
        out[:, stellar:] = events
        return np.swapaxes(out, 1, 2)

    def basis_at(self, mass: Array, place: NDArray[np.int_]) -> Array:
        """Return the basis polynomials at given masses in given pieces, shape (n, e)."""
        edge, parent = self.layout.edge, self.geometry.parent[place]
        x = (mass - edge[parent]) / (edge[parent + 1] - edge[parent])
        return basis(np.stack([x**k for k in range(self.ends)]))
