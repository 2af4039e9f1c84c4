"""What a mass function is: pieces with limits and breaks, and moments between any two masses."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from math import log
from typing import Any, Protocol, runtime_checkable

import numpy as np
from numpy.typing import ArrayLike, NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.units import plain

from .moments import Piece

Array = NDArray[np.float64]


@runtime_checkable
class MassFunction(Protocol):
    """What a population asks of a mass function: its limits, its breaks, and moments between them."""

    @property
    def limits(self) -> tuple[float, float]:
        """Lowest and highest mass, Msun."""

    @property
    def breaks(self) -> tuple[float, ...]:
        """Masses where one piece gives way to the next, Msun."""

    def __call__(self, mass: ArrayLike) -> Array:
        """Return stars per Msun of stellar mass and Msun formed."""

    def moments(self, a: ArrayLike, b: ArrayLike, c: ArrayLike, h: ArrayLike, order: int = 1) -> Array:
        """Return int_a^b ((m - c)/h)^k phi dm, shape (order + 1, p)."""

    def number(self, lo: ArrayLike, hi: ArrayLike) -> Array:
        """Return stars born between two masses, per Msun formed."""

    def mass(self, lo: ArrayLike, hi: ArrayLike) -> Array:
        """Return the mass born between two masses, per Msun formed."""

    def to_dict(self) -> dict[str, Any]:
        """Return the ``[imf]`` table of a population file."""


class _Integrals:
    """Counts and masses between any two masses, from the moments of whole pieces."""

    def __repr__(self) -> str:
        lo, hi = self.limits
        return f"{type(self).__name__}({self.form!r}, {lo:g}-{hi:g} Msun)"

    def _between(self, lo: ArrayLike, hi: ArrayLike, power: int) -> Array:
        lo, hi = np.broadcast_arrays(np.asarray(lo, dtype=float), np.asarray(hi, dtype=float))
        edges = np.array([self.limits[0], *self.breaks, self.limits[1]])
        total = np.zeros(lo.shape)
        for left, right in pairwise(edges):
            a, b = np.clip(lo, left, right).ravel(), np.clip(hi, left, right).ravel()
            full = b > a
            if full.any():
                part = np.zeros(a.shape)
                part[full] = self.moments(a[full], b[full], 0.0, 1.0, power)[power]
                total = total + part.reshape(lo.shape)
        return total

    def number(self, lo: ArrayLike, hi: ArrayLike) -> Array:
        """Return stars born between two masses, per Msun formed.

        Parameters
        ----------
        lo, hi : array_like
            Msun; clipped to the limits of the mass function.

        Returns
        -------
        ndarray
            Broadcast shape of `lo` and `hi`.

        Examples
        --------
        >>> from steelyard.integrate import imf
        >>> float(imf("salpeter-1955", limits=(0.1, 100)).number(8, 40).round(7))
        0.0068015
        """
        return self._between(plain(lo, "Msun", "mass"), plain(hi, "Msun", "mass"), 0)

    def mass(self, lo: ArrayLike, hi: ArrayLike) -> Array:
        """Return the mass born in stars between two masses, per Msun formed.

        Parameters
        ----------
        lo, hi : array_like
            Msun; clipped to the limits of the mass function.

        Returns
        -------
        ndarray
            Broadcast shape of `lo` and `hi`.
        """
        return self._between(plain(lo, "Msun", "mass"), plain(hi, "Msun", "mass"), 1)


@dataclass(frozen=True, eq=False, repr=False)
class AnalyticIMF(_Integrals):
    """A mass function of power-law and lognormal pieces, integrated in closed form.

    Attributes
    ----------
    form : str
        Its name in a population file.
    parameters : mapping
        The parameters it was made with, beside the limits.
    pieces : tuple of Piece
        Adjoining, normalised to 1 Msun over the limits.
    """

    form: str
    parameters: Mapping[str, Any]
    pieces: tuple[Piece, ...]

    @property
    def limits(self) -> tuple[float, float]:
        """Lowest and highest mass of stars born, Msun."""
        return self.pieces[0].lo, self.pieces[-1].hi

    @property
    def breaks(self) -> tuple[float, ...]:
        """Masses at which one piece gives way to the next, Msun."""
        return tuple(p.lo for p in self.pieces[1:])

    @cached_property
    def _edges(self) -> Array:
        return np.array([self.limits[0], *self.breaks, self.limits[1]])

    def __call__(self, mass: ArrayLike) -> Array:
        """Return phi(m), stars per Msun of stellar mass and Msun formed; 0 outside the limits."""
        mass = np.asarray(mass, dtype=float)
        flat = np.atleast_1d(mass)
        out = np.zeros(flat.shape)
        which = np.searchsorted(self._edges, flat, side="right") - 1
        which[flat == self.limits[1]] = len(self.pieces) - 1
        for i, piece in enumerate(self.pieces):
            inside = which == i
            if inside.any():
                out[inside] = piece(flat[inside])
        return out.reshape(mass.shape)

    def moments(self, a: ArrayLike, b: ArrayLike, c: ArrayLike, h: ArrayLike, order: int = 1) -> Array:
        """Return int_a^b ((m - c)/h)^k phi dm for k = 0 ... order.

        Parameters
        ----------
        a, b : array_like, shape (p,)
            Intervals in Msun, each inside one piece (`breaks`).
        c, h : array_like, shape (p,)
            Origin and unit of the polynomial, Msun.
        order : int
            Highest power.

        Returns
        -------
        ndarray, shape (order + 1, p)
            Stars per Msun formed.
        """
        a, b, c, h = np.broadcast_arrays(*(np.atleast_1d(np.asarray(v, dtype=float)) for v in (a, b, c, h)))
        which = np.clip(np.searchsorted(self._edges, 0.5 * (a + b)) - 1, 0, len(self.pieces) - 1)
        out = np.empty((order + 1, len(a)))
        for i, piece in enumerate(self.pieces):
            inside = which == i
            if inside.any():
                out[:, inside] = piece.moments(a[inside], b[inside], c[inside], h[inside], order)
        return out

    def to_dict(self) -> dict[str, Any]:
        """Return the mass function as the population file's ``[imf]`` table."""
        return {"form": self.form, **self.parameters, "limits": list(self.limits)}


@dataclass(frozen=True, eq=False, repr=False)
class CallableIMF(_Integrals):
    """A mass function given as a function, integrated by Gauss-Legendre on the same pieces.

    Attributes
    ----------
    function : callable
        phi(m) up to a factor, on arrays of masses in Msun.
    limits : tuple of float
        Msun.
    breaks : tuple of float
        Masses where the function or its slope jumps; the quadrature keeps to their sides.
    scale : float
        Normalisation found.
    error : float
        Largest relative difference between the rule of 32 nodes and that of 24 over
        the normalisation's pieces: an estimate of the error of every integral.
    """

    function: Callable[[Array], Array]
    limits: tuple[float, float]
    breaks: tuple[float, ...]
    scale: float
    error: float

    form = "callable"

    def __call__(self, mass: ArrayLike) -> Array:
        """Return phi(m), stars per Msun of stellar mass and Msun formed; 0 outside the limits."""
        mass = np.asarray(mass, dtype=float)
        inside = (mass >= self.limits[0]) & (mass <= self.limits[1])
        safe = np.where(inside, mass, self.limits[0])
        return np.where(inside, self.scale * self.function(safe), 0.0)

    def moments(self, a: ArrayLike, b: ArrayLike, c: ArrayLike, h: ArrayLike, order: int = 1) -> Array:
        """Return int_a^b ((m - c)/h)^k phi dm for k = 0 ... order, shape (order + 1, p)."""
        a, b, c, h = np.broadcast_arrays(*(np.atleast_1d(np.asarray(v, dtype=float)) for v in (a, b, c, h)))
        return self.scale * gauss(self.function, a, b, c, h, order, 32)

    def to_dict(self) -> dict[str, Any]:
        """Return what can be said of it in a population file; a function can't be written there."""
        name = getattr(self.function, "__qualname__", repr(self.function))
        return {"form": "callable", "function": name, "limits": list(self.limits)}


def gauss(
    function: Callable[[Array], Array], a: Array, b: Array, c: Array, h: Array, order: int, nodes: int
) -> Array:
    """Integrate ((m - c)/h)^k f(m) by Gauss-Legendre in ln m, on stretches of at most a factor 1.5 in mass.

    Returns
    -------
    ndarray, shape (order + 1, p)
    """
    x, w = np.polynomial.legendre.leggauss(nodes)
    parts = np.maximum(1, np.ceil(np.log(b / a) / log(1.5))).astype(int)
    owner = np.repeat(np.arange(len(a)), parts)
    position = np.arange(len(owner)) - np.repeat(np.cumsum(parts) - parts, parts)
    width = (np.log(b / a) / parts)[owner]
    middle = np.log(a)[owner] + (position + 0.5) * width
    m = np.exp(middle[:, None] + 0.5 * width[:, None] * x)
    density = np.asarray(function(m.ravel()), dtype=float)
    if density.shape != (m.size,):
        raise InputError("the mass function doesn't return one value for each mass", where="imf")
    if not np.all(np.isfinite(density)) or np.any(density < 0):
        raise InputError("the mass function is negative or not finite inside its limits", where="imf")
    weight = density.reshape(m.shape) * m * 0.5 * width[:, None] * w
    local = (m - c[owner, None]) / h[owner, None]
    out = np.zeros((order + 1, len(a)))
    for k in range(order + 1):
        np.add.at(out[k], owner, (weight * local**k).sum(axis=1))
    return out
