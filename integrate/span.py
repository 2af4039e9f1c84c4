"""A range of initial mass that is served in one way, and what its stars leave."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.curve import Curve

from .tracks import Columns

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Span:
    """A range of initial mass served in one way.

    Attributes
    ----------
    lo, hi : float
        Msun.
    owner : int
        Position of the stellar source that the ejecta count for.
    how : str
        Id of the set, or the policy of the join or edge.
    curve : Curve
        From lo to hi; columns as in `Columns`.
    collapse : bool
        Whether the stars that die here are core-collapse events.
    implodes : float
        The share of them that implodes.
    outcomes : tuple of Curve
        Where only a share implodes: what those that explode leave, and those that
        implode. `curve` is their mean.
    """

    lo: float
    hi: float
    owner: int
    how: str
    curve: Curve
    collapse: bool = False
    implodes: float = 0.0
    outcomes: tuple[Curve, ...] = ()

    @property
    def parts(self) -> tuple[tuple[float, Curve], ...]:
        """The ways in which stars of these masses may end: the share of each, and its curve."""
        if not self.outcomes:
            return ((1.0, self.curve),)
        return tuple(zip((1.0 - self.implodes, self.implodes), self.outcomes, strict=True))


@dataclass(frozen=True, eq=False)
class Ground:
    """What the joins and edges need to know of the population.

    Attributes
    ----------
    columns : Columns
    birth : ndarray, shape (species,)
        Mass fractions at birth.
    limits : pair of float
        Limits of the mass function, Msun.
    """

    columns: Columns
    birth: Array
    limits: tuple[float, float]

    def row(self, mass: float, remnant: float) -> Array:
        """Return the row of a star that ejects ``mass - remnant`` at birth composition."""
        ejected = mass - remnant
        listed = float(self.birth[self.columns.apart].sum())
        accounts = [ejected * (1 - listed), 0.0, ejected, remnant, 0.0]
        return np.concatenate([ejected * self.birth, np.zeros(len(self.birth)), accounts])
