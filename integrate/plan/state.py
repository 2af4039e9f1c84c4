"""What one call of a plan works on: the mass function, segments and events at one set of parameters."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from ..lifetimes import LifetimeCurve
from ..weights import basis
from .coefficients import Coefficients
from .geometry import Geometry
from .mass_shape import Shape

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Ground:
    """What stays the same while metallicity, limits, breaks and shares do.

    Attributes
    ----------
    layout : Coefficients
    geometry : Geometry
    curve : LifetimeCurve
    coefficients : ndarray, shape (s, e, o)
        Of the layout's segments.
    rows : ndarray, shape (delayed sources, o)
        What one event ejects.
    sources : int
        Number of stellar sources.
    """

    layout: Coefficients
    geometry: Geometry
    curve: LifetimeCurve
    coefficients: Array
    rows: Array
    sources: int

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
        ends = self.coefficients.shape[1]
        owner = self.geometry.owner[self.geometry.kept]
        starts = np.searchsorted(owner, np.arange(self.sources + 1)) * ends
        stellar = [slice(int(a), int(b)) for a, b in pairwise(starts)]
        last = len(owner) * ends
        return (*stellar, *(slice(last + i, last + i + 1) for i in range(len(self.rows))))

    @cached_property
    def over(self) -> Array:
        """1 where a kept piece lies wholly above a turn-off mass, else 0; shape (t, pieces * e)."""
        kept = np.flatnonzero(self.geometry.kept)
        above = kept[None, :] > self.geometry.place[:, None]
        return np.repeat(above, self.coefficients.shape[1], axis=1).astype(float)

    @cached_property
    def partial(self) -> tuple[NDArray[np.int_], NDArray[np.int_]]:
        """Rows and columns of the weights that belong to the pieces turn-off masses lie in."""
        ends = self.coefficients.shape[1]
        number = np.cumsum(self.geometry.kept) - 1
        ages = self.geometry.inside
        first = number[self.geometry.place[ages]] * ends
        return np.repeat(ages, ends), (first[:, None] + np.arange(ends)).ravel()

    def spread(self, weights: Array, out: Array) -> Array:
        """Lay interval weights out by age and column.

        Parameters
        ----------
        weights : ndarray, shape (..., e, i)
            Of the geometry's intervals.
        out : ndarray, shape (..., t, columns)
            The stellar columns are written; others are left alone.
        """
        whole = int(self.geometry.kept.sum())
        by_piece = np.swapaxes(weights, -1, -2)
        columns = self.over.shape[1]
        flat = by_piece[..., :whole, :].reshape(*weights.shape[:-2], 1, columns)
        np.multiply(self.over, flat, out=out[..., :columns])
        rows, at = self.partial
        out[..., rows, at] = by_piece[..., whole:, :].reshape(*weights.shape[:-2], -1)
        return out

    def yields_at(self, mass: Array, place: NDArray[np.int_]) -> Array:
        """Return the yields of stars of given masses in given pieces, shape (n, o), Msun."""
        edge, parent = self.layout.edge, self.geometry.parent[place]
        x = (mass - edge[parent]) / (edge[parent + 1] - edge[parent])
        ends = self.coefficients.shape[1]
        return np.einsum(
            "ne,neo->no", basis(np.stack([x**k for k in range(ends)])), self.coefficients[parent]
        )


@dataclass(frozen=True, eq=False)
class State:
    """A plan at one set of parameters.

    Attributes
    ----------
    values : mapping
        By parameter name.
    ground : Ground
    shape : Shape
        Mass function, not normalised.
    events : ndarray, shape (delayed sources, t)
        Events per Msun formed up to each age.
    """

    values: Mapping[str, float]
    ground: Ground
    shape: Shape
    events: Array

    @cached_property
    def weights(self) -> Array:
        """Weights of all columns at all ages, shape (t, columns): the yields are weights @ matrix."""
        ground = self.ground
        stellar = ground.over.shape[1]
        out = np.empty((len(ground.geometry.place), stellar + len(self.events)))
        ground.spread(ground.geometry.intervals.weights(self.shape) / self.shape.mass, out)
        out[:, stellar:] = self.events.T
        return out
