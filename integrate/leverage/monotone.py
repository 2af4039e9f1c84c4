"""Slopes of monotone cubics at their nodes, with their derivatives to the nodes' values."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def monotone_slopes(mass: Array, values: Array) -> tuple[Array, Array]:
    """Return slopes of monotone cubics at their nodes, and their derivatives to the nodes' values.

    Parameters
    ----------
    mass : ndarray, shape (n,)
        Nodes, at least two.
    values : ndarray, shape (n, s)

    Returns
    -------
    slopes : ndarray, shape (n, s)
        As in scipy's PCHIP (Fritsch & Butland 1984, SIAM J. Sci. Stat. Comput. 5, 300).
    derivatives : ndarray, shape (n, n, s)
        Of the slope at the first index to the value at the second; one-sided (0) where two
        neighbouring values are equal.

    Examples
    --------
    >>> slopes, derivatives = monotone_slopes(np.array([0.0, 1.0, 3.0]), np.array([[0.0], [1.0], [5.0]]))
    >>> slopes[1].round(4)
    array([1.2857])
    >>> bool(np.allclose(np.einsum("jks,ks->js", derivatives, [[0.0], [1.0], [5.0]]), slopes))
    True
    """
    n, s = values.shape
    h = np.diff(mass)[:, None]
    rise = np.diff(values, axis=0) / h
    by_rise = np.zeros((n, n - 1, s))
    if n == 2:
        slopes = np.repeat(rise, 2, axis=0)
        by_rise[:] = 1.0
    else:
        slopes = np.zeros((n, s))
        a, b = rise[:-1], rise[1:]
        w1, w2 = 2 * h[1:] + h[:-1], h[1:] + 2 * h[:-1]
        alike = a * b > 0
        safe_a, safe_b = np.where(alike, a, 1.0), np.where(alike, b, 1.0)
        mean = np.where(alike, (w1 + w2) / (w1 / safe_a + w2 / safe_b), 0.0)
        slopes[1:-1] = mean
        inner = np.arange(1, n - 1)
        by_rise[inner, inner - 1] = mean**2 * w1 / ((w1 + w2) * safe_a**2)
        by_rise[inner, inner] = mean**2 * w2 / ((w1 + w2) * safe_b**2)
        for node, first, second in ((0, 0, 1), (n - 1, n - 2, n - 3)):
            h0, h1, m0, m1 = h[first, 0], h[second, 0], rise[first], rise[second]
            by0, by1 = (2 * h0 + h1) / (h0 + h1), -h0 / (h0 + h1)
            free = by0 * m0 + by1 * m1
            flat = np.sign(free) != np.sign(m0)
            steep = ~flat & (np.sign(m0) != np.sign(m1)) & (abs(free) > 3 * abs(m0))
            slopes[node] = np.where(flat, 0.0, np.where(steep, 3 * m0, free))
            by_rise[node, first] = np.where(flat, 0.0, np.where(steep, 3.0, by0))
            by_rise[node, second] = np.where(flat | steep, 0.0, by1)
    per = by_rise / h[None]
    derivatives = np.zeros((n, n, s))
    derivatives[:, 1:] += per
    derivatives[:, :-1] -= per
    return slopes, derivatives
