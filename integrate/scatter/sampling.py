"""Stellar masses drawn from a mass function by inverting its cumulative number.

Exact on power laws (closed form) and lognormals (inverse of the normal distribution),
piece by piece; a mass function given as a function is inverted from a fine table.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise
from math import log

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri

from ..mass_function import AnalyticIMF, MassFunction
from ..moments import Piece

Array = NDArray[np.float64]

#: steps per factor e in mass of the table that inverts a function
STEPS = 600


@dataclass(frozen=True, eq=False)
class MassSampler:
    """Draws masses of stars born between two masses.

    Attributes
    ----------
    lo, hi : float
        Msun.
    number : float
        Stars born between them, per Msun formed.
    edges : ndarray, shape (p + 1,)
        Share of those stars below the lower end of each piece; then 1.
    inverses : tuple of callable
        For each piece, the mass at a share of the piece's own stars.
    """

    lo: float
    hi: float
    number: float
    edges: Array
    inverses: tuple[Callable[[Array], Array], ...]

    def draw(self, random: np.random.Generator, count: int) -> Array:
        """Return masses, Msun, shape (count,).

        Parameters
        ----------
        random : numpy.random.Generator
        count : int
        """
        return self.at(random.random(count))

    def at(self, share: Array) -> Array:
        """Return the masses below which given shares of the stars are born.

        Parameters
        ----------
        share : ndarray, shape (n,)
            0 to 1.

        Returns
        -------
        ndarray, shape (n,)
            Msun.
        """
        if len(self.inverses) == 1:
            mass = self.inverses[0](share)
        else:
            which = np.searchsorted(self.edges[1:-1], share, side="right")
            mass = np.empty(share.shape)
            for i, inverse in enumerate(self.inverses):
                mine = which == i
                below, above = self.edges[i], self.edges[i + 1]
                mass[mine] = inverse((share[mine] - below) / (above - below))
        return np.clip(mass, self.lo, self.hi, out=mass)


def mass_sampler(imf: MassFunction, lo: float, hi: float) -> MassSampler:
    """Return a sampler of the stars born between two masses.

    Parameters
    ----------
    imf : MassFunction
    lo, hi : float
        Msun; cut to the limits of the mass function.

    Returns
    -------
    MassSampler
        Of no stars where nothing is left between the masses.

    Examples
    --------
    >>> from steelyard.integrate import imf
    >>> stars = mass_sampler(imf("salpeter-1955"), 1, 100)
    >>> [round(float(m), 4) for m in stars.at(np.array([0.0, 0.5, 0.9]))]
    [1.0, 1.6686, 5.4327]
    """
    lo, hi = max(lo, imf.limits[0]), min(hi, imf.limits[1])
    if not lo < hi:
        return MassSampler(hi, hi, 0.0, np.array([0.0, 1.0]), (lambda u: np.full(u.shape, hi),))
    if isinstance(imf, AnalyticIMF):
        pieces = [(p, max(p.lo, lo), min(p.hi, hi)) for p in imf.pieces if p.lo < hi and p.hi > lo]
        numbers = np.array([float(imf.number(a, b)) for _, a, b in pieces])
        inverses = tuple(_lognormal(p, a, b) if p.curvature else _power(p, a, b) for p, a, b in pieces)
        has = numbers > 0
        numbers, inverses = numbers[has], tuple(i for i, x in zip(inverses, has, strict=True) if x)
    else:
        numbers, inverses = np.array([float(imf.number(lo, hi))]), (_table(imf, lo, hi),)
    edges = np.concatenate([[0.0], np.cumsum(numbers) / numbers.sum()])
    edges[-1] = 1.0
    return MassSampler(lo, hi, float(numbers.sum()), edges, inverses)


def _power(piece: Piece, a: float, b: float) -> Callable[[Array], Array]:
    power, width = 1.0 - piece.slope, log(b / a)
    if abs(power * width) < 1e-9:
        return lambda share: a * np.exp(share * width)
    whole = np.expm1(power * width)
    return lambda share: a * np.exp(np.log1p(share * whole) / power)


def _lognormal(piece: Piece, a: float, b: float) -> Callable[[Array], Array]:
    sigma = piece.curvature**-0.5
    peak = piece.centre + (1.0 - piece.slope) * sigma**2
    za, zb = (log(a) - peak) / sigma, (log(b) - peak) / sigma
    if za > 0:
        # in the upper tail the normal distribution keeps its digits from the other side only
        top, bottom = ndtr(-za), ndtr(-zb)
        return lambda share: np.exp(peak - sigma * ndtri(top - share * (top - bottom)))
    bottom, top = ndtr(za), ndtr(zb)
    return lambda share: np.exp(peak + sigma * ndtri(bottom + share * (top - bottom)))


def _table(imf: MassFunction, lo: float, hi: float) -> Callable[[Array], Array]:
    """Exact at nodes; between them, 1/600 of ln m apart, the density runs straight."""
    ends = np.array([lo, *(b for b in imf.breaks if lo < b < hi), hi])
    nodes = np.unique(
        np.concatenate([np.geomspace(a, b, 2 + int(STEPS * log(b / a))) for a, b in pairwise(ends)])
    )
    inside = np.asarray(imf.number(nodes[:-1], nodes[1:]), dtype=float)
    below = np.concatenate([[0.0], np.cumsum(inside) / inside.sum()])
    step = np.diff(nodes)
    # just inside each step, since the density may jump at a break
    left, right = (np.asarray(imf(nodes[:-1] + x * step), dtype=float) for x in (1e-6, 1 - 1e-6))
    tilt = np.divide(right - left, right + left, out=np.zeros(len(step)), where=right + left > 0)

    def inverse(share: Array) -> Array:
        i = np.clip(np.searchsorted(below, share, side="right") - 1, 0, len(step) - 1)
        gap = below[i + 1] - below[i]
        u = np.divide(share - below[i], gap, out=np.zeros(share.shape), where=gap > 0)
        t = tilt[i]
        # (1 - t) x + t x^2 = u
        x = 2 * u / ((1 - t) + np.sqrt((1 - t) ** 2 + 4 * t * u) + 1e-300)
        return nodes[i] + np.minimum(x, 1.0) * step[i]

    return inverse
