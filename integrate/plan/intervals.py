"""Basis weights of a changing mass function over fixed intervals, as one small matrix product.

With the intervals fixed, the expansion of a power law about the middle of each (see
`steelyard.integrate.moments`) separates: a table of the intervals, prepared once, times
the Taylor coefficients of (1 + u)^-slope, a handful of numbers for each call.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from math import comb

import numpy as np
from numpy.typing import NDArray

from ..weights import basis
from .mass_shape import Shape

Array = NDArray[np.float64]

#: no interval is wider than this ratio of its ends, so that the expansion converges fast
WIDEST_RATIO = 1.5

#: steepest slope that the prepared tables serve; for a steeper one they are made anew
STEEPEST = 8.0


@dataclass(frozen=True, eq=False)
class Group:
    """The intervals inside one piece of the mass function.

    Attributes
    ----------
    piece : int
    index : ndarray of int, shape (g,)
        Which intervals.
    log_middle, half : ndarray, shape (g,)
    table : ndarray, shape (e, g, n)
        ``weights = scale * table @ taylor``.
    """

    piece: int
    index: NDArray[np.int_]
    log_middle: Array
    half: Array
    table: Array

    def scale(self, log_a: Array | float, slope: Array | float) -> Array:
        """Return the mass function in the middle times half the width, shape (..., g)."""
        return np.exp(log_a - slope * self.log_middle) * self.half

    @property
    def terms(self) -> int:
        """How many Taylor coefficients the table takes."""
        return self.table.shape[2]


@dataclass(frozen=True, eq=False)
class Intervals:
    """Intervals of mass, each inside one piece of the mass function.

    Attributes
    ----------
    lo, hi : ndarray, shape (i,)
        Msun.
    origin, unit : ndarray, shape (i,)
        Of the local coordinate x = (m - origin) / unit, Msun.
    piece : ndarray of int, shape (i,)
    ends : int
        Basis functions: 2 for lines, 4 for cubics.
    """

    lo: Array
    hi: Array
    origin: Array
    unit: Array
    piece: NDArray[np.int_]
    ends: int

    @cached_property
    def groups(self) -> tuple[Group, ...]:
        """The intervals by piece of the mass function, with their tables."""
        return self._grouped(STEEPEST)

    def _grouped(self, steepest: float) -> tuple[Group, ...]:
        order = self.ends - 1
        out = []
        for piece in np.unique(self.piece):
            index = np.flatnonzero(self.piece == piece)
            a, b, c, h = (v[index] for v in (self.lo, self.hi, self.origin, self.unit))
            delta = (b - a) / (b + a)
            n = np.arange(_terms(float(delta.max(initial=0.0)), steepest))
            shift, stretch = 0.5 * ((a - c) + (b - c)) / h, 0.5 * (b - a) / h
            powers = np.zeros((order + 1, len(index), len(n)))
            for k in range(order + 1):
                for j in range(k + 1):
                    even = np.where((n + j) % 2 == 0, 2.0 / (n + j + 1), 0.0)
                    powers[k] += (comb(k, j) * shift ** (k - j) * stretch**j)[:, None] * even
            powers *= delta[:, None] ** n
            table = np.moveaxis(basis(powers), -1, 0)
            middle, half = 0.5 * (a + b), 0.5 * (b - a)
            out.append(Group(int(piece), index, np.log(middle), half, np.ascontiguousarray(table)))
        return tuple(out)

    def weights(self, shape: Shape) -> Array:
        """Return the integrals of the basis against a mass function not normalised, shape (e, i)."""
        out = np.empty((self.ends, len(self.lo)))
        for group in self._groups_for(max(abs(p.slope) for p in shape.pieces)):
            piece = shape.pieces[group.piece]
            if piece.curvature:
                out[:, group.index] = self._lognormal(group, shape)
            else:
                taylor = taylor_coefficients(piece.slope, group.terms)
                out[:, group.index] = (group.table @ taylor) * group.scale(piece.log_a, piece.slope)
        return out

    def slope_weights(self, shape: Shape, position: int) -> Array:
        """Return their part -int ln(m) ... of one power-law piece, shape (e, i); 0 in the others."""
        out = np.zeros((self.ends, len(self.lo)))
        for group in self._groups_for(max(abs(p.slope) for p in shape.pieces)):
            if group.piece == position:
                piece = shape.pieces[position]
                value = group.table @ taylor_coefficients(piece.slope, group.terms)
                moved = group.table @ taylor_slope(piece.slope, group.terms)
                scale = group.scale(piece.log_a, piece.slope)
                out[:, group.index] = (moved - group.log_middle * value) * scale
        return out

    def many(self, log_a: Array, slopes: Array, shape: Shape) -> Array:
        """Return the weights for many slopes at once.

        Parameters
        ----------
        log_a, slopes : ndarray, shape (n, pieces)
            Of every piece of the mass function.
        shape : Shape
            Any of them: for the kinds of the pieces.

        Returns
        -------
        ndarray, shape (n, e, i)
        """
        out = np.empty((len(slopes), self.ends, len(self.lo)))
        for group in self._groups_for(float(abs(slopes).max(initial=0.0))):
            piece, count = shape.pieces[group.piece], len(group.index)
            if piece.curvature:
                ratio = np.exp(log_a[:, group.piece] - piece.log_a)
                out[:, :, group.index] = self._lognormal(group, shape) * ratio[:, None, None]
                continue
            alpha = slopes[:, group.piece]
            taylor = taylor_coefficients(alpha, group.terms)
            flat = taylor @ group.table.reshape(-1, group.terms).T
            scale = group.scale(log_a[:, group.piece, None], alpha[:, None])
            out[:, :, group.index] = flat.reshape(-1, self.ends, count) * scale[:, None, :]
        return out

    def _lognormal(self, group: Group, shape: Shape) -> Array:
        i = group.index
        at = (self.lo[i], self.hi[i], self.origin[i], self.unit[i])
        return basis(shape.pieces[group.piece].moments(*at, self.ends - 1)).T

    def _groups_for(self, steep: float) -> tuple[Group, ...]:
        return self.groups if steep <= STEEPEST else self._grouped(steep)


def _terms(delta: float, slope: float) -> int:
    """Terms after which the expansion stands to rounding."""
    size, n = 1.0, 0
    while size > 2.0**-58 and n < 400:
        n += 1
        size *= delta * (slope + n) / n
    return n + 2


def taylor_coefficients(slope: float | Array, count: int) -> Array:
    """Return the coefficients of (1 + u)^-slope, shape (count,) or (n, count) for n slopes."""
    n = np.arange(1, count)
    factors = (1 - np.asarray(slope, dtype=float)[..., None]) / n - 1
    out = np.ones((*factors.shape[:-1], count))
    np.cumprod(factors, axis=-1, out=out[..., 1:])
    return out


def taylor_slope(slope: float, count: int) -> Array:
    """Return the derivatives of those to the slope, the coefficients of -ln(1 + u) (1 + u)^-slope."""
    value = taylor_coefficients(slope, count)
    out = np.zeros(count)
    for n in range(1, count):
        out[n] = (out[n - 1] * (1 - slope - n) - value[n - 1]) / n
    return out
