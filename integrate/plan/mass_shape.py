"""A broken mass function as a function of its free slopes, breaks and limits, with its derivatives.

Up to normalisation phi is written with log_a = 0 on the lowest piece and continuity at
the breaks; `Shape` holds the pieces of that form, its integral N = int m phi dm, and how
the logarithm of phi on each piece moves with each parameter.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from itertools import pairwise
from math import exp, expm1, log

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError

from ..imf import AnalyticIMF
from ..moments import Piece

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Shape:
    """An unnormalised, continuous mass function.

    Attributes
    ----------
    pieces : tuple of Piece
        Adjoining; log_a of the first is 0.
    """

    pieces: tuple[Piece, ...]

    @property
    def edges(self) -> Array:
        """Limits and breaks, Msun, increasing."""
        return np.array([self.pieces[0].lo, *(p.hi for p in self.pieces)])

    @cached_property
    def mass(self) -> float:
        """Int m phi dm over the limits."""
        return float(sum(p.moments(p.lo, p.hi, 0.0, 1.0, 1)[1, 0] for p in self.pieces))

    def __call__(self, mass: Array) -> Array:
        """Return phi at masses inside the limits, not normalised."""
        which = np.clip(np.searchsorted(self.edges, mass, side="right") - 1, 0, len(self.pieces) - 1)
        out = np.empty(mass.shape)
        for i, piece in enumerate(self.pieces):
            inside = which == i
            if inside.any():
                out[inside] = piece(mass[inside])
        return out

    @cached_property
    def power_pieces(self) -> tuple[int, ...]:
        """Positions of the power-law pieces, low mass first."""
        return tuple(i for i, p in enumerate(self.pieces) if not p.curvature)

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

    def mass_of_log(self, j: int) -> float:
        """Int ln(m) m phi dm over piece j, a power law: the derivative of its mass to -slope."""
        p = self.pieces[j]
        q = 2.0 - p.slope
        width = log(p.hi / p.lo)
        # int m^(q-1) ln m dm = lo^q (ln lo * I0 + I1), I_k = int_0^width x^k e^(q x) dx
        i0, i1 = exponential_moments(q, width)
        return exp(p.log_a + q * log(p.lo)) * (log(p.lo) * i0 + i1)

    def mass_of(self, i: int) -> float:
        """Return int m phi dm over piece i."""
        p = self.pieces[i]
        if p.curvature:
            return float(p.moments(p.lo, p.hi, 0.0, 1.0, 1)[1, 0])
        q = 2.0 - p.slope
        width = log(p.hi / p.lo)
        z = q * width
        return exp(p.log_a + q * log(p.lo)) * (expm1(z) / q if abs(z) > 1e-300 else width)


def _log_slope(piece: Piece, mass: float) -> float:
    """D ln phi / d ln m."""
    return -piece.slope - piece.curvature * (log(mass) - piece.centre)


def exponential_moments(q: float, width: float) -> tuple[float, float]:
    """Return int_0^width e^(q x) dx and int_0^width x e^(q x) dx, for every q."""
    z = q * width
    if abs(z) > 0.5:
        i0 = expm1(z) / q
        return i0, (width * exp(z) - i0) / q
    terms = [1.0]
    for n in range(1, 24):
        terms.append(terms[-1] * z / n)
    i0 = width * sum(t / (n + 1) for n, t in enumerate(terms))
    i1 = width**2 * sum(t / (n + 2) for n, t in enumerate(terms))
    return i0, i1


def shape(base: AnalyticIMF, changes: Sequence[tuple[str, int, float]]) -> Shape:
    """Return the mass function with some slopes, breaks and limits changed.

    Parameters
    ----------
    base : AnalyticIMF
    changes : sequence of (str, int, float)
        ``"slope"`` (index among power-law pieces), ``"break"`` or ``"limit"``, index, value.

    Returns
    -------
    Shape

    Raises
    ------
    InputError
        Breaks and limits out of order.
    """
    pieces = list(base.pieces)
    edges = [pieces[0].lo, *(p.hi for p in pieces)]
    powers = [i for i, p in enumerate(pieces) if not p.curvature]
    for kind, index, value in changes:
        if kind == "slope":
            pieces[powers[index]] = replace(pieces[powers[index]], slope=value)
        elif kind == "break":
            edges[index + 1] = value
        else:
            edges[0 if index == 0 else -1] = value
    if not all(b > a for a, b in pairwise(edges)) or edges[0] <= 0:
        listed = ", ".join(f"{e:g}" for e in edges)
        raise InputError(
            f"limits and breaks of the mass function are out of order: {listed} Msun",
            mend="keep free breaks and limits apart",
        )
    out: list[Piece] = []
    for piece, lo, hi in zip(pieces, edges, edges[1:], strict=False):
        flat = replace(piece, lo=lo, hi=hi, log_a=0.0)
        if out:
            x = log(lo)
            target = _log_phi(out[-1], x)
            flat = replace(flat, log_a=target - _log_phi(flat, x))
        out.append(flat)
    return Shape(tuple(out))


def _log_phi(piece: Piece, x: float) -> float:
    return piece.log_a - piece.slope * x - 0.5 * piece.curvature * (x - piece.centre) ** 2
