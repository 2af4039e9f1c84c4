"""A broken mass function as a function of its free slopes, breaks and limits, with its derivatives.

Up to normalisation phi is written with log_a = 0 on the lowest piece and continuity at
the breaks. A `Family` has its breaks and limits fixed and serves many sets of slopes at
once; a `Shape` is one of it, and knows how the logarithm of phi on each piece moves with
each parameter.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from itertools import pairwise
from math import log

import numpy as np
from numpy.typing import NDArray
from scipy.special import exprel

from steelyard.yields.errors import InputError

from ..imf import AnalyticIMF
from ..moments import Piece
from .special import exprel_slope

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Family:
    """Mass functions that differ in their slopes only.

    Attributes
    ----------
    pieces : tuple of Piece
        Adjoining, with the declared slopes; their log_a doesn't count.
    """

    pieces: tuple[Piece, ...]

    @cached_property
    def edges(self) -> Array:
        """Limits and breaks, Msun, increasing."""
        return np.array([self.pieces[0].lo, *(p.hi for p in self.pieces)])

    @cached_property
    def slopes(self) -> Array:
        """The declared slopes, shape (pieces,)."""
        return np.array([p.slope for p in self.pieces])

    @cached_property
    def _logs(self) -> tuple[Array, Array, Array]:
        """Logarithms of the pieces' lower ends and of the breaks, and the pieces' widths in them."""
        x = np.log(self.edges)
        return x[:-1], x[1:-1], np.diff(x)

    @cached_property
    def _bends(self) -> Array:
        """What lognormal factors add to the step of log_a at each break."""
        return np.array(
            [
                0.5 * b.curvature * (log(b.lo) - b.centre) ** 2
                - 0.5 * a.curvature * (log(b.lo) - a.centre) ** 2
                for a, b in pairwise(self.pieces)
            ]
        )

    @cached_property
    def _lognormal(self) -> tuple[tuple[int, float], ...]:
        """Lognormal pieces and their masses where log_a is 0."""
        flat = [(i, replace(p, log_a=0.0)) for i, p in enumerate(self.pieces) if p.curvature]
        return tuple((i, float(p.moments(p.lo, p.hi, 0.0, 1.0, 1)[1, 0])) for i, p in flat)

    def at(self, slopes: Array) -> tuple[Array, Array]:
        """Return amplitudes that make phi continuous, and the masses of the pieces.

        Parameters
        ----------
        slopes : ndarray, shape (n, pieces)

        Returns
        -------
        log_a : ndarray, shape (n, pieces)
            0 on the lowest piece.
        masses : ndarray, shape (n, pieces)
            Int m phi dm over each.
        """
        start, inner, width = self._logs
        log_a = np.zeros(slopes.shape)
        if len(self.pieces) > 1:
            steps = (slopes[:, 1:] - slopes[:, :-1]) * inner
            steps += self._bends
            np.add.accumulate(steps, axis=1, out=log_a[:, 1:])
        q = 2.0 - slopes
        masses = np.exp(log_a + q * start)
        masses *= exprel(q * width)
        masses *= width
        for i, whole in self._lognormal:
            masses[:, i] = np.exp(log_a[:, i]) * whole
        return log_a, masses

    def shape(self, slopes: Array) -> Shape:
        """Return one mass function, of slopes of shape (pieces,)."""
        log_a, masses = self.at(slopes[None])
        numbers = zip(self.pieces, slopes.tolist(), log_a[0].tolist(), strict=True)
        return Shape(tuple(replace(p, slope=s, log_a=a) for p, s, a in numbers), masses[0])


@dataclass(frozen=True, eq=False)
class Shape:
    """An unnormalised, continuous mass function.

    Attributes
    ----------
    pieces : tuple of Piece
        Adjoining; log_a of the first is 0.
    masses : ndarray, shape (pieces,)
        Int m phi dm over each.
    """

    pieces: tuple[Piece, ...]
    masses: Array

    @property
    def edges(self) -> Array:
        """Limits and breaks, Msun, increasing."""
        return np.array([self.pieces[0].lo, *(p.hi for p in self.pieces)])

    @cached_property
    def mass(self) -> float:
        """Int m phi dm over the limits."""
        return float(self.masses.sum())

    def __call__(self, mass: Array) -> Array:
        """Return phi at masses inside the limits, not normalised."""
        which = np.clip(np.searchsorted(self.edges, mass, side="right") - 1, 0, len(self.pieces) - 1)
        out = np.empty(mass.shape)
        for i, piece in enumerate(self.pieces):
            inside = which == i
            if inside.any():
                out[inside] = piece(mass[inside])
        return out

    def slope_shift(self, j: int) -> Array:
        """D log_a / d slope of piece j, for every piece (beside the -ln m of piece j itself)."""
        out = np.zeros(len(self.pieces))
        if j > 0:
            out[j:] = log(self.pieces[j].lo)
        out[j + 1 :] -= log(self.pieces[j].hi) if j + 1 < len(self.pieces) else 0.0
        return out

    def break_shift(self, i: int) -> Array:
        """D log_a / d break i (between pieces i and i + 1), for every piece."""
        out = np.zeros(len(self.pieces))
        below, above = self.pieces[i], self.pieces[i + 1]
        at = above.lo
        out[i + 1 :] = (_log_slope(below, at) - _log_slope(above, at)) / at
        return out

    @cached_property
    def masses_of_log(self) -> Array:
        """Int ln(m) m phi dm over each power-law piece: the derivative of its mass to -slope."""
        start = np.log([p.lo for p in self.pieces])
        width = np.log([p.hi for p in self.pieces]) - start
        q = np.array([2.0 - p.slope for p in self.pieces])
        log_a = np.array([p.log_a for p in self.pieces])
        # int m^(q-1) ln m dm = lo^q (ln lo I_0 + I_1), I_k = int_0^width x^k e^(q x) dx
        return start * self.masses + np.exp(log_a + q * start) * width**2 * exprel_slope(q * width)


def _log_slope(piece: Piece, mass: float) -> float:
    """D ln phi / d ln m."""
    return -piece.slope - piece.curvature * (log(mass) - piece.centre)


def family(base: AnalyticIMF, changes: Sequence[tuple[str, int, float]]) -> Family:
    """Return the family of a mass function with some breaks and limits changed.

    Parameters
    ----------
    base : AnalyticIMF
    changes : sequence of (str, int, float)
        ``"break"`` or ``"limit"``, index, value.

    Returns
    -------
    Family

    Raises
    ------
    InputError
        Breaks and limits out of order.
    """
    edges = [base.pieces[0].lo, *(p.hi for p in base.pieces)]
    for kind, index, value in changes:
        edges[index + 1 if kind == "break" else -index] = value
    if not all(b > a for a, b in pairwise(edges)) or edges[0] <= 0:
        listed = ", ".join(f"{e:g}" for e in edges)
        raise InputError(
            f"limits and breaks of the mass function are out of order: {listed} Msun",
            mend="keep free breaks and limits apart",
        )
    return Family(
        tuple(replace(p, lo=a, hi=b) for p, (a, b) in zip(base.pieces, pairwise(edges), strict=True))
    )
