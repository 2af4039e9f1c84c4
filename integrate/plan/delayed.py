"""Fractions of delayed events as functions of their parameters, for many values at once.

The closed forms of `steelyard.integrate.delays`, with derivatives to slope, timescale
and limits.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import exprel

from steelyard.yields.errors import InputError

from ..delay_forms import ExponentialDelay, PowerLawDelay
from ..delays import Delay

Array = NDArray[np.float64]
Key = tuple[str, int]


def changed(base: Delay, values: Mapping[Key, float]) -> Delay:
    """Return a delay with some of its numbers changed; keys are (attribute, index or -1)."""
    update = {}
    for (name, index), value in values.items():
        if index < 0:
            update[name] = value
        else:
            current = list(update.get(name, getattr(base, name)))
            current[index] = value
            update[name] = tuple(current)
    known = {f.name for f in fields(base)}
    return replace(base, **{k: v for k, v in update.items() if k in known})


def fractions(base: Delay, values: Mapping[Key, Array], age: Array) -> Array:
    """Return the fraction of events up to each age for many parameter values.

    Parameters
    ----------
    base : Delay
    values : mapping of (str, int) to ndarray, shape (n,)
        Numbers that change.
    age : ndarray, shape (t,)
        yr.

    Returns
    -------
    ndarray, shape (n, t), or (1, t) where nothing changes
    """
    if not values:
        return np.asarray(base.fraction(age))[None, :]
    count = len(next(iter(values.values())))
    if not isinstance(base, (PowerLawDelay, ExponentialDelay)):
        rows = [
            changed(base, {k: float(v[i]) for k, v in values.items()}).fraction(age) for i in range(count)
        ]
        return np.array(rows)
    rate, first, last = _numbers(base, values)
    _check(rate, first, last, base)
    if isinstance(base, PowerLawDelay):
        p = rate + 1
        length = np.log(np.clip(age, first, last) / first)
        whole = np.log(last / first)
        return length * exprel(p * length) / (whole * exprel(p * whole))
    inside = np.clip(age, first, last) - first
    return np.expm1(-inside / rate) / np.expm1(-(last - first) / rate)


def fraction_slopes(
    base: Delay, values: Mapping[Key, float], age: Array, keys: list[Key]
) -> dict[Key, Array]:
    """Return derivatives of the fraction to some of the delay's numbers.

    Parameters
    ----------
    base : Delay
    values : mapping of (str, int) to float
        Numbers that differ from the base's.
    age : ndarray, shape (t,)
        yr.
    keys : list of (str, int)
        Numbers to differentiate by.

    Returns
    -------
    dict of ndarray, shape (t,)

    Raises
    ------
    InputError
        The form has no closed derivative.
    """
    if not isinstance(base, (PowerLawDelay, ExponentialDelay)):
        raise InputError(
            f"the delay's form {base.form!r} has no closed-form derivative",
            mend="use a power-law or exponential delay, or leave its numbers unfree",
        )
    columns = {k: np.array([v]) for k, v in values.items()}
    rate, first, last = (float(np.ravel(v)[0]) for v in _numbers(base, columns))
    x = np.clip(age, first, last)
    inside = (age > first) & (age < last)
    if isinstance(base, PowerLawDelay):
        p = rate + 1
        part, whole = np.log(x / first), np.log(last / first)
        below = whole * exprel(p * whole)
        fraction = part * exprel(p * part) / below
        by_rate = (part**2 * _exprel_slope(p * part) - fraction * whole**2 * _exprel_slope(p * whole)) / below
        top = np.exp(p * whole) / below
        by_first = (-np.exp(p * part) / below + fraction * top) / first
        by_last = -fraction * top / last
        name = "slope"
    else:
        part, whole = x - first, last - first
        below = -np.expm1(-whole / rate)
        fraction = -np.expm1(-part / rate) / below
        decay, end = np.exp(-part / rate), np.exp(-whole / rate)
        by_rate = (-decay * part + fraction * end * whole) / (rate**2 * below)
        by_first = (-decay + fraction * end) / (rate * below)
        by_last = -fraction * end / (rate * below)
        name = "timescale"
    table = {(name, -1): by_rate, ("limits", 0): by_first, ("limits", 1): by_last}
    return {k: np.where(inside, table[k], 0.0) for k in keys}


def _numbers(base: Delay, values: Mapping[Key, Array]) -> tuple[Array, Array, Array]:
    """Slope or timescale, and limits, as columns."""
    rate = base.slope if isinstance(base, PowerLawDelay) else base.timescale
    name = "slope" if isinstance(base, PowerLawDelay) else "timescale"
    given = ((name, -1), rate), (("limits", 0), base.limits[0]), (("limits", 1), base.limits[1])
    return tuple(np.asarray(values.get(key, np.array([value])))[:, None] for key, value in given)


def _check(rate: Array, first: Array, last: Array, base: Delay) -> None:
    if np.any(first >= last) or np.any(first < 0) or (isinstance(base, PowerLawDelay) and np.any(first <= 0)):
        raise InputError("limits of the delay are out of order", mend="keep the first delay under the last")
    if isinstance(base, ExponentialDelay) and np.any(rate <= 0):
        raise InputError("the delay's timescale isn't positive", mend="keep it above 0")


def _exprel_slope(z: Array) -> Array:
    """Derivative of exprel, (e^z (z - 1) + 1) / z^2."""
    z = np.asarray(z, dtype=float)
    small = abs(z) < 1.0
    safe = np.where(small, 1.0, z)
    out = (np.exp(safe) * (safe - 1) + 1) / safe**2
    return np.where(small, _near_zero(z), out)


def _near_zero(z: Array) -> Array:
    """sum_n z^n / (n! (n + 2))."""
    out, term = np.zeros_like(z), np.ones_like(z)
    for n in range(22):
        out = out + term / (n + 2)
        term = term * z / (n + 1)
    return out
