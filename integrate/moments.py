"""Closed-form integrals of polynomials against power laws and lognormals in mass.

Every analytic mass function here is, piece by piece,

    phi(m) = exp(log_a - slope ln m - curvature (ln m - centre)^2 / 2),

a power law where the curvature is 0 and a lognormal elsewhere. Wanted are the moments

    M_k = int_a^b ((m - c) / h)^k phi(m) dm,    k = 0 ... order,

in which c and h are the left node and the width of the interpolation interval, so that
they combine into integrals of lines and cubics without loss of digits.

On narrow intervals phi is expanded about the middle; the series converges
geometrically and is summed to rounding. On wide ones the antiderivative is used, in
forms (exprel, erf or erfc) that hold for every exponent, -1 included.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import comb, log

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import erf, erfc, exprel

Array = NDArray[np.float64]

#: half-widths (b - a) / (b + a), times 1 + local slope, up to which the series is used: beyond, its
#: terms would grow before they fall
_NARROW = 4.0

#: and the half-width itself: the series' terms fall at least as this to the n-th power
_WIDEST = 0.34

_ROUNDING = 2.0**-56


@dataclass(frozen=True)
class Piece:
    """One analytic piece of a mass function.

    Attributes
    ----------
    lo, hi : float
        Range in mass, Msun.
    log_a : float
        Logarithm of the amplitude.
    slope : float
        alpha in m^-alpha.
    centre, curvature : float
        mu and 1/sigma^2 of the lognormal factor, in natural logarithms of mass.
    """

    lo: float
    hi: float
    log_a: float
    slope: float
    centre: float = 0.0
    curvature: float = 0.0

    def __call__(self, mass: ArrayLike) -> Array:
        """Return phi, stars per Msun of stellar mass, at masses in Msun."""
        x = np.log(np.asarray(mass, dtype=float))
        exponent = self.log_a - self.slope * x
        if self.curvature:
            exponent = exponent - 0.5 * self.curvature * (x - self.centre) ** 2
        return np.exp(exponent)

    def moments(self, a: ArrayLike, b: ArrayLike, c: ArrayLike, h: ArrayLike, order: int = 1) -> Array:
        """Return moments over intervals inside the piece.

        Parameters
        ----------
        a, b : array_like, shape (p,)
            Ends of the intervals, Msun.
        c, h : array_like, shape (p,)
            Origin and unit of the polynomial, Msun.
        order : int
            Highest power.

        Returns
        -------
        ndarray, shape (order + 1, p)
            Stars (for k = 0) per Msun of normalisation.

        Examples
        --------
        >>> Piece(1.0, 4.0, 0.0, 2.0).moments([1.0], [4.0], [0.0], [1.0])[:, 0].round(12)
        array([0.75      , 1.38629436])
        """
        a, b, c, h = np.broadcast_arrays(*(np.atleast_1d(np.asarray(v, dtype=float)) for v in (a, b, c, h)))
        delta = (b - a) / (b + a)
        steep = 1 + abs(self.slope)
        if self.curvature:
            middle = np.log(0.5 * (a + b))
            steep = steep + self.curvature * (abs(middle - self.centre) + delta)
        narrow = (delta * steep <= _NARROW) & (delta <= _WIDEST)
        if narrow.all():
            return self._series(a, b, c, h, order)
        out = np.empty((order + 1, len(a)))
        for mask, formula in ((narrow, self._series), (~narrow, self._closed)):
            if mask.any():
                out[:, mask] = formula(a[mask], b[mask], c[mask], h[mask], order)
        return out

    def _series(self, a: Array, b: Array, c: Array, h: Array, order: int) -> Array:
        middle = 0.5 * (a + b)
        delta = (b - a) / (b + a)
        d2 = delta * delta
        steepest = abs(self.slope)
        if self.curvature:
            local = self.slope + self.curvature * (np.log(middle) - self.centre)
            steepest = float(abs(local).max(initial=0.0)) + self.curvature**0.5
        terms = _terms(float(delta.max(initial=0.0)), steepest, self.curvature > 0)
        if self.curvature:
            taylor = _lognormal_taylor(local, self.curvature, terms)
        else:
            taylor = _power_taylor(self.slope, terms)
        # int_-1^1 v^j phi(middle (1 + delta v)) / phi(middle) dv: only even powers of v survive
        half = terms // 2
        powers = np.ones((half, len(delta)))
        powers[1:] = d2
        np.multiply.accumulate(powers, axis=0, out=powers)
        even = 2.0 * np.arange(half)
        spread = []
        for j in range(order + 1):
            first = j % 2
            factors = 2.0 / (even + first + j + 1)
            if self.curvature:
                total = np.einsum("n,np,np->p", factors, np.array(taylor[first::2]), powers)
            else:
                total = (factors * np.array(taylor[first::2])) @ powers
            spread.append(total * delta if first else total)
        scale = self(middle) * 0.5 * (b - a)
        # (a - c) and (b - c) are exact where the middle itself is rounded
        shift, stretch = 0.5 * ((a - c) + (b - c)) / h, 0.5 * (b - a) / h
        return np.stack(
            [
                scale * sum(comb(k, j) * shift ** (k - j) * stretch**j * spread[j] for j in range(k + 1))
                for k in range(order + 1)
            ]
        )

    def _closed(self, a: Array, b: Array, c: Array, h: Array, order: int) -> Array:
        raw = [self._monomial(j, a, b) for j in range(order + 1)]
        return np.stack(
            [
                sum(comb(k, j) * (-c) ** (k - j) * raw[j] for j in range(k + 1)) / h**k
                for k in range(order + 1)
            ]
        )

    def _monomial(self, power: int, a: Array, b: Array) -> Array:
        """int_a^b m^power phi dm."""
        p = power + 1 - self.slope
        if not self.curvature:
            width = np.log(b / a)
            return np.exp(self.log_a + p * np.log(a)) * width * exprel(p * width)
        sigma = self.curvature**-0.5
        peak = self.centre + p * sigma**2
        za = (np.log(a) - peak) / (sigma * 2**0.5)
        zb = (np.log(b) - peak) / (sigma * 2**0.5)
        tail = np.where(za > 0, erfc(abs(za)) - erfc(abs(zb)), erfc(abs(zb)) - erfc(abs(za)))
        difference = np.where(za * zb > 0, tail, erf(zb) - erf(za))
        factor = np.exp(self.log_a + p * self.centre + 0.5 * (p * sigma) ** 2)
        return factor * sigma * (np.pi / 2) ** 0.5 * difference


def _terms(delta: float, slope: float, lognormal: bool) -> int:
    """Number of Taylor terms after which the series stands to rounding, an even number above 4."""
    if delta < 1e-8:
        return 4
    growth = 4.0 if lognormal else 1.0
    size, n = growth, 0
    while size > _ROUNDING and n < 400:
        n += 1
        size *= delta * (abs(slope) + growth * 1.5 + n) / n
    return max(4, n + n % 2 + 2)


def _power_taylor(slope: float, terms: int) -> list[float]:
    """Coefficients of (1 + u)^-slope."""
    out = [1.0]
    for n in range(1, terms):
        out.append(out[-1] * (1 - slope - n) / n)
    return out


def _lognormal_taylor(slope: Array, curvature: float, terms: int) -> list[Array]:
    """Coefficients of f = exp(-slope l - curvature l^2 / 2), l = ln(1 + u).

    From (1 + u) f' = -(slope + curvature l) f.
    """
    out = [np.ones_like(slope)]
    for n in range(1, terms):
        pulled = sum(((-1) ** (j + 1) / j) * out[n - 1 - j] for j in range(1, n))
        out.append((-(slope + n - 1) * out[n - 1] - curvature * pulled) / n)
    return out


def power_piece(lo: float, hi: float, slope: float, amplitude: float = 1.0) -> Piece:
    """Return amplitude * m^-slope on [lo, hi]."""
    return Piece(lo, hi, log(amplitude), slope)


def lognormal_piece(lo: float, hi: float, centre: float, sigma: float, amplitude: float = 1.0) -> Piece:
    """Return (amplitude / m) exp(-(log10 m - log10 centre)^2 / (2 sigma^2)), sigma in dex."""
    return Piece(lo, hi, log(amplitude), 1.0, log(centre), 1.0 / (sigma * log(10.0)) ** 2)
