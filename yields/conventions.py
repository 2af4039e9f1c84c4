"""Figures of models from one way of stating yields to another: net, total, production factor."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import InputError
from .units import plain

Array = NDArray[np.float64]


def net_from_total(total: ArrayLike, initial: ArrayLike, ejected: ArrayLike) -> Array:
    """Return net yields, net = total - X0 * ejected.

    Parameters
    ----------
    total : array_like, shape (n, s)
        Total yields, Msun.
    initial : array_like, shape (s,)
        Mass fractions at birth, X0.
    ejected : array_like, shape (n,)
        All mass ejected, Msun.

    Returns
    -------
    ndarray, shape (n, s)
        Msun.

    Raises
    ------
    InputError
        A value isn't finite or has the wrong dimension, or the shapes don't match.

    Examples
    --------
    >>> net_from_total([[0.05]], [0.01], [4.0])
    array([[0.01]])
    """
    total, initial, ejected = _model_arrays("total", total, initial, ejected)
    return total - ejected[:, None] * initial


def total_from_net(net: ArrayLike, initial: ArrayLike, ejected: ArrayLike) -> Array:
    """Return total yields, total = net + X0 * ejected; the inverse of `net_from_total`.

    Parameters
    ----------
    net : array_like, shape (n, s)
        Net yields, Msun.
    initial : array_like, shape (s,)
        Mass fractions at birth, X0.
    ejected : array_like, shape (n,)
        All mass ejected, Msun.

    Returns
    -------
    ndarray, shape (n, s)
        Msun.

    Raises
    ------
    InputError
        A value isn't finite or has the wrong dimension, or the shapes don't match.

    Examples
    --------
    >>> total_from_net([[0.01]], [0.01], [4.0])
    array([[0.05]])
    """
    net, initial, ejected = _model_arrays("net", net, initial, ejected)
    return net + ejected[:, None] * initial


def factor_from_total(total: ArrayLike, reference: ArrayLike, ejected: ArrayLike) -> Array:
    """Return production factors: mass fraction in the ejecta over a reference mass fraction.

    Parameters
    ----------
    total : array_like, shape (n, s)
        Total yields, Msun.
    reference : array_like, shape (s,)
        Mass fractions to compare with: those at birth, or the Sun's.
    ejected : array_like, shape (n,)
        All mass ejected, Msun.

    Returns
    -------
    ndarray, shape (n, s)
        P = (total / ejected) / reference; NaN where the reference has none of the species or
        nothing is ejected.

    Raises
    ------
    InputError
        A value isn't finite or has the wrong dimension, or the shapes don't match.

    Notes
    -----
    With solar mass fractions this is the production factor of Woosley & Weaver 1995, ApJS 101, 181
    (from memory); with those at birth it is the overabundance that papers on AGB stars print, mostly
    as its log10.

    Examples
    --------
    >>> factor_from_total([[0.05]], [0.01], [4.0])
    array([[1.25]])
    """
    total, reference, ejected = _model_arrays("total", total, reference, ejected)
    below = ejected[:, None] * reference
    return np.divide(total, below, out=np.full(total.shape, np.nan), where=below > 0)


def total_from_factor(factor: ArrayLike, reference: ArrayLike, ejected: ArrayLike) -> Array:
    """Return total yields from production factors; the inverse of `factor_from_total`.

    Parameters
    ----------
    factor : array_like, shape (n, s)
        P = (total / ejected) / reference.
    reference : array_like, shape (s,)
        The mass fractions that the factors were taken against.
    ejected : array_like, shape (n,)
        All mass ejected, Msun.

    Returns
    -------
    ndarray, shape (n, s)
        Msun.

    Raises
    ------
    InputError
        A value isn't finite or has the wrong dimension, the shapes don't match, or the reference has none
        of a species: then its factor tells nothing about its yield.

    Examples
    --------
    >>> total_from_factor([[1.25]], [0.01], [4.0])
    array([[0.05]])
    """
    factor, reference, ejected = _model_arrays("factor", factor, reference, ejected)
    if np.any(reference <= 0):
        column = int(np.argmax(reference <= 0))
        raise InputError(
            f"column {column + 1} has a production factor, but a reference mass fraction of 0",
            mend="give the yield of that species itself",
        )
    return factor * ejected[:, None] * reference


def _model_arrays(
    name: str, values: ArrayLike, fractions: ArrayLike, ejected: ArrayLike
) -> tuple[Array, Array, Array]:
    unit = "" if name == "factor" else "Msun"
    table = np.atleast_2d(np.asarray(plain(values, unit, name), dtype=float))
    shares = np.atleast_1d(np.asarray(plain(fractions, "", "mass fractions"), dtype=float))
    mass = np.atleast_1d(np.asarray(plain(ejected, "Msun", "ejected"), dtype=float))
    if table.shape != (mass.size, shares.size):
        raise InputError(
            f"{name} has shape {table.shape} for {mass.size} models and {shares.size} species",
            mend="give a row a model and a column a species",
        )
    return table, shares, mass
