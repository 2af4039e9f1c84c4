"""The derivative of exprel, in which integrals of powers move with their exponents."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

_NODES, _SHARES = np.polynomial.legendre.leggauss(9)
_NODES, _SHARES = 0.5 * (_NODES + 1), 0.25 * (_NODES + 1) * _SHARES


def exprel_slope(z: ArrayLike) -> NDArray[np.float64]:
    """Return the derivative of exprel(z) = (e^z - 1) / z.

    It is int_0^1 x e^(z x) dx = (e^z (z - 1) + 1) / z^2; near 0, where that loses digits, nine
    points of Gauss-Legendre give the integral to rounding.

    Examples
    --------
    >>> exprel_slope([0.0, 1.0]).round(15)
    array([0.5, 1. ])
    """
    z = np.asarray(z, dtype=float)
    small = abs(z) < 1.0
    near = np.exp(np.multiply.outer(np.where(small, z, 0.0), _NODES)) @ _SHARES
    safe = np.where(small, 1.0, z)
    return np.where(small, near, (np.exp(safe) * (safe - 1) + 1) / safe**2)
