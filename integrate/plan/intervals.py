"""Basis weights of a changing mass function over fixed intervals, as one small matrix product.

With the intervals fixed, the expansion of a power law about the middle of each (see
`steelyard.integrate.moments`) separates: a table of the intervals, prepared once, times
the Taylor coefficients of (1 + u)^-slope, a handful of numbers for each call.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property, lru_cache
from math import comb

import numpy as np
from numpy.typing import NDArray

from ..moments import Piece
from ..weights import basis

Array = NDArray[np.float64]

_COUNT = np.arange(512.0)

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
    index : ndarray of int, shape (g,), or slice
        Which intervals.
    log_middle : ndarray, shape (g,)
    table : ndarray, shape (n, g * e)
        ``weights = taylor @ table``, times `scale`.
    """

    piece: int
    index: NDArray[np.int_] | slice
    log_middle: Array
    table: Array

    def scale(self, log_a: Array, slope: Array) -> Array:
        """Return the mass function in the middle of the intervals, shape (n, g, 1), of (n, 1) each."""
        out = self.log_middle * slope
        np.subtract(log_a, out, out=out)
        return np.exp(out, out=out)[:, :, None]

    def basis(self, taylor: Array) -> Array:
        """Return integrals over the intervals per `scale`, shape (n, g, e), of (n, terms)."""
        # one small product a row: a row's digits don't depend on the rows beside it
        return np.matmul(taylor[:, None, :], self.table).reshape(
            len(taylor), len(self.log_middle), self.table.shape[1] // len(self.log_middle)
        )

    @property
    def terms(self) -> int:
        """How many Taylor coefficients the table takes."""
        return len(self.table)


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
    pieces : tuple of Piece
        Of the mass function; the slopes and amplitudes of power laws don't count.
    """

    lo: Array
    hi: Array
    origin: Array
    unit: Array
    piece: NDArray[np.int_]
    ends: int
    pieces: tuple[Piece, ...]

    @cached_property
    def present(self) -> list[int]:
        """Pieces of the mass function that hold intervals."""
        return np.unique(self.piece).tolist()

    @cached_property
    def groups(self) -> tuple[Group, ...]:
        """The intervals by power-law piece of the mass function, with their tables."""
        return self._grouped(STEEPEST)

    def _grouped(self, steepest: float) -> tuple[Group, ...]:
        order = self.ends - 1
        out = []
        for piece in self.present:
            if self.pieces[piece].curvature:
                continue
            index = np.flatnonzero(self.piece == piece)
            a, b, c, h = (v[index] for v in (self.lo, self.hi, self.origin, self.unit))
            delta = (b - a) / (b + a)
            n = np.arange(_terms(float(delta.max(initial=0.0)), steepest))
            shift, stretch = 0.5 * ((a - c) + (b - c)) / h, 0.5 * (b - a) / h
            powers = np.zeros((order + 1, len(n), len(index)))
            for k in range(order + 1):
                for j in range(k + 1):
                    even = np.where((n + j) % 2 == 0, 2.0 / (n + j + 1), 0.0)
                    powers[k] += even[:, None] * (comb(k, j) * shift ** (k - j) * stretch**j)
            powers *= 0.5 * (b - a) * delta ** n[:, None]
            table = basis(powers).reshape(len(n), -1)
            where = slice(None) if len(index) == len(self.lo) else index
            out.append(Group(piece, where, np.log(0.5 * (a + b)), table))
        return tuple(out)

    @cached_property
    def _lognormal(self) -> tuple[tuple[int, NDArray[np.int_], Array], ...]:
        """Lognormal pieces, their intervals and the weights of those where log_a is 0."""
        out = []
        for piece in self.present:
            if self.pieces[piece].curvature:
                i = np.flatnonzero(self.piece == piece)
                at = (self.lo[i], self.hi[i], self.origin[i], self.unit[i])
                flat = replace(self.pieces[piece], log_a=0.0)
                out.append((piece, i, basis(flat.moments(*at, self.ends - 1))))
        return tuple(out)

    def weights(self, log_a: Array, slopes: Array) -> Array:
        """Return the integrals of the basis against mass functions.

        Parameters
        ----------
        log_a, slopes : ndarray, shape (n, pieces)

        Returns
        -------
        ndarray, shape (n, i, e)
        """
        if np.maximum.reduce(np.abs(slopes), axis=None) > STEEPEST:
            return self._steep(log_a, slopes, abs(slopes).max(axis=1) > STEEPEST)
        return self._weights(log_a, slopes, self.groups)

    def _steep(self, log_a: Array, slopes: Array, steep: NDArray[np.bool_]) -> Array:
        out = np.empty((len(slopes), len(self.lo), self.ends))
        out[~steep] = self._weights(log_a[~steep], slopes[~steep], self.groups)
        for i in np.flatnonzero(steep):
            groups = self._grouped(float(abs(slopes[i]).max()))
            out[i] = self._weights(log_a[i : i + 1], slopes[i : i + 1], groups)[0]
        return out

    def _weights(self, log_a: Array, slopes: Array, groups: tuple[Group, ...]) -> Array:
        out = None
        for group in groups:
            at = slice(group.piece, group.piece + 1)
            part = group.basis(taylor_coefficients(slopes[:, group.piece], group.terms))
            part *= group.scale(log_a[:, at], slopes[:, at])
            if isinstance(group.index, slice):
                return part
            out = np.empty((len(slopes), len(self.lo), self.ends)) if out is None else out
            out[:, group.index] = part
        out = np.empty((len(slopes), len(self.lo), self.ends)) if out is None else out
        for piece, index, flat in self._lognormal:
            out[:, index] = np.exp(log_a[:, piece])[:, None, None] * flat
        return out

    def slope_weights(self, log_a: Array, slopes: Array, position: int) -> Array:
        """Return their part -int ln(m) ... of one power-law piece, shape (i, e); 0 in the others.

        Parameters
        ----------
        log_a, slopes : ndarray, shape (pieces,)
            Of one mass function.
        position : int
            Of the piece.
        """
        out = np.zeros((len(self.lo), self.ends))
        steep = float(abs(slopes).max())
        for group in self.groups if steep <= STEEPEST else self._grouped(steep):
            if group.piece == position:
                slope = slopes[position : position + 1]
                taylor = taylor_coefficients(slope, group.terms)
                value, moved = group.basis(np.concatenate([taylor, taylor_slopes(taylor)]))
                scale = group.scale(log_a[None, position : position + 1], slope[None])[0]
                out[group.index] = (moved - group.log_middle[:, None] * value) * scale
        return out


def _terms(delta: float, slope: float) -> int:
    """Terms after which the expansion stands to rounding."""
    size, n = 1.0, 0
    while size > 2.0**-58 and n < 400:
        n += 1
        size *= delta * (slope + n) / n
    return n + 2


def taylor_coefficients(slope: Array, count: int) -> Array:
    """Return the coefficients of (1 + u)^-slope, shape (n, count) for n slopes."""
    out = np.empty((len(slope), count))
    out[:, 0] = 1.0
    factors = out[:, 1:]
    np.divide((1.0 - slope)[:, None], _COUNT[1:count], out=factors)
    factors -= 1.0
    np.multiply.accumulate(factors, axis=1, out=factors)
    return out


def taylor_slopes(value: Array) -> Array:
    """Return the derivatives of those to the slope, the coefficients of -ln(1 + u) (1 + u)^-slope."""
    return value @ _logarithm(value.shape[1])


@lru_cache(maxsize=8)
def _logarithm(count: int) -> Array:
    """What multiplies a series by that of -ln(1 + u): (-1)^(n - k) / (n - k) in row k and column n > k."""
    step = _COUNT[None, :count] - _COUNT[:count, None]
    return np.where(step > 0, (-1.0) ** step / np.where(step > 0, step, 1.0), 0.0)
