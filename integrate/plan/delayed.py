"""Fractions of delayed events as functions of their parameters, for many values at once.

The closed forms of `steelyard.integrate.delays`, with derivatives to slope, timescale
and limits.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.special import exprel

from steelyard.yields.errors import InputError

from ..delays import Delay
from ..delays.forms import ExponentialDelay, PowerLawDelay, log_ratio
from .special import exprel_slope

Array = NDArray[np.float64]
Key = tuple[str, int]

FIRST, LAST = ("limits", 0), ("limits", 1)


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


@dataclass(frozen=True, eq=False)
class Timing:
    """When a source's events happen, with some numbers of the delay free.

    Attributes
    ----------
    base : Delay
    keys : tuple of (str, int)
        The numbers that are free: (attribute, index or -1).
    age : ndarray, shape (t,)
        yr.
    """

    base: Delay
    keys: tuple[Key, ...]
    age: Array

    def fractions(self, values: Array) -> Array:
        """Return the fraction of events up to each age for many values of the free numbers.

        Parameters
        ----------
        values : ndarray, shape (n, keys)

        Returns
        -------
        ndarray, shape (n, t), or (1, t) where nothing is free

        Raises
        ------
        InputError
            Values that make no distribution.
        """
        if not self.keys:
            return self._declared
        if not isinstance(self.base, (PowerLawDelay, ExponentialDelay)):
            rows = (dict(zip(self.keys, row, strict=True)) for row in values.tolist())
            return np.array([changed(self.base, row).fraction(self.age) for row in rows])
        free = {k: values[:, i, None] for i, k in enumerate(self.keys)}
        return self._closed(free, self._stretch(free))

    def _stretch(self, free: Mapping[Key, Array]) -> Array:
        if FIRST in free or LAST in free:
            return self._stretches(free.get(FIRST, self._limits[0]), free.get(LAST, self._limits[1]))
        return self._declared_stretches

    def _closed(self, free: Mapping[Key, Array], stretch: Array) -> Array:
        if isinstance(self.base, PowerLawDelay):
            integral = exprel((free.get(("slope", -1), self.base.slope) + 1.0) * stretch)
            integral *= stretch
        else:
            timescale = np.asarray(free.get(("timescale", -1), self.base.timescale))
            if (timescale <= 0).any():
                raise InputError("the delay's timescale isn't positive", mend="keep it above 0")
            integral = np.expm1(-stretch / timescale)
        return integral[:, :-1] / integral[:, -1:]

    def slopes(self, values: Array) -> tuple[Array, Array]:
        """Return the fraction up to each age and its derivatives to each free number, later ages at a limit.

        Parameters
        ----------
        values : ndarray, shape (keys,)

        Returns
        -------
        fraction : ndarray, shape (t,)
        slopes : ndarray, shape (keys, t)

        Raises
        ------
        InputError
            The form has no closed derivative.
        """
        if not isinstance(self.base, (PowerLawDelay, ExponentialDelay)):
            raise InputError(
                f"the delay's form {self.base.form!r} has no closed-form derivative",
                mend="use a power-law or exponential delay, or leave its numbers unfree",
            )
        free = dict(zip(self.keys, values.tolist(), strict=True))
        first, last = free.get(FIRST, self._limits[0]), free.get(LAST, self._limits[1])
        both = self._stretch(free)
        fraction, stretch = self._closed(free, both)[0], both[0]
        part, whole = stretch[:-1], stretch[-1]
        if isinstance(self.base, PowerLawDelay):
            p = free.get(("slope", -1), self.base.slope) + 1.0
            below = whole * exprel(p * whole)
            here, end = np.exp(p * part) / (first * below), np.exp(p * whole) / below
            by_p = stretch**2 * exprel_slope(p * stretch)
            by_rate = (by_p[:-1] - fraction * by_p[-1]) / below
            by_first, by_last = fraction * end / first - here, -fraction * end / last
            rate = ("slope", -1)
        else:
            timescale = free.get(("timescale", -1), self.base.timescale)
            below = -timescale * np.expm1(-whole / timescale)
            here, end = np.exp(-part / timescale) / below, np.exp(-whole / timescale) / below
            by_rate = (fraction * end * whole - here * part) / timescale
            by_first, by_last = fraction * end - here, -fraction * end
            rate = ("timescale", -1)
        table = {rate: by_rate, FIRST: by_first, LAST: by_last}
        inside = (self.age >= first) & (self.age < last)
        return fraction, np.array([table[k] for k in self.keys]) * inside

    @cached_property
    def _limits(self) -> tuple[float, float]:
        return self.base.limits

    @cached_property
    def _declared(self) -> Array:
        return np.asarray(self.base.fraction(self.age))[None, :]

    @cached_property
    def _declared_stretches(self) -> Array:
        return self._stretches(*self._limits)

    def _stretches(self, first: Array | float, last: Array | float) -> Array:
        """From the first delay to each age, and to the last delay; in log delay for a power law."""
        first, last = np.atleast_2d(first), np.atleast_2d(last)
        power = isinstance(self.base, PowerLawDelay)
        if (first >= last).any() or first.min() < 0 or (power and first.min() == 0):
            raise InputError(
                "limits of the delay are out of order", mend="keep the first delay under the last"
            )
        ends = np.empty((max(len(first), len(last)), len(self.age) + 1))
        np.maximum(self.age, first, out=ends[:, :-1])
        ends[:, -1:] = last
        np.minimum(ends, last, out=ends)
        return log_ratio(ends, first) if power else ends - first


@dataclass(frozen=True, eq=False)
class Clock:
    """How many events of a delayed source there are, and when, from the free numbers of a plan.

    Attributes
    ----------
    timing : Timing
    columns : list of int
        Where the timing's free numbers stand in theta.
    declared : float
        Events per Msun formed.
    column : int or None
        Where their number stands in theta, if it is free.
    """

    timing: Timing
    columns: list[int]
    declared: float
    column: int | None

    def number(self, thetas: Array) -> Array | float:
        """Return the number of events per Msun, shape (n, 1), or one for all.

        Raises
        ------
        InputError
            A negative number.
        """
        if self.column is None:
            return self.declared
        out = thetas[:, self.column, None]
        if (out < 0).any():
            raise InputError(
                f"number of events is negative: {out.min():g} per Msun", mend="keep it at 0 or more"
            )
        return out

    def derivatives(self, theta: Array) -> tuple[Array, dict[int, Array]]:
        """Return the events up to each age, and how they move with each of their free numbers.

        Parameters
        ----------
        theta : ndarray, shape (p,)

        Returns
        -------
        events : ndarray, shape (t,)
            Per Msun formed.
        derivatives : dict of ndarray, shape (t,)
            By position in theta.

        Raises
        ------
        InputError
            The form of the delay has no closed derivative, or the number is negative.
        """
        number = float(np.ravel(self.number(theta[None]))[0])
        if not self.columns:
            fraction, out = self.timing.fractions(theta[None, []])[0], {}
        else:
            fraction, slopes = self.timing.slopes(theta[self.columns])
            out = dict(zip(self.columns, number * slopes, strict=True))
        if self.column is not None:
            out[self.column] = fraction
        return number * fraction, out
