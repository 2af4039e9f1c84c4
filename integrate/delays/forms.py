"""Delay-time distributions: when, after their birth, the events of a delayed source happen.

Each is normalised over its own limits, ``[first, last]``. Sums run over positive terms only
and differences of powers go through exprel, so fractions keep their relative accuracy next
to ``first`` and at any slope.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable
from dataclasses import dataclass, fields
from functools import cached_property
from typing import Any, ClassVar

import numpy as np
from scipy.special import exprel

from steelyard.yields.errors import InputError
from steelyard.yields.units import plain


class Delay(ABC):
    """Distribution of delays, normalised to 1 over its own limits.

    Attributes
    ----------
    form : str
        Its name in a population file.
    limits : tuple of float
        First and last delay, yr.
    """

    form: ClassVar[str]
    limits: tuple[float, float]

    @property
    def error(self) -> float:
        """Estimated error of fractions; 0 for closed forms."""
        return 0.0

    @abstractmethod
    def _fraction(self, age: np.ndarray) -> np.ndarray: ...

    @abstractmethod
    def _density(self, age: np.ndarray) -> np.ndarray: ...

    def fraction(self, age: Any) -> Any:
        """Return the share of all events that has happened by an age.

        Parameters
        ----------
        age : float or array_like
            Time since birth, yr; shape (...).

        Returns
        -------
        float or numpy.ndarray
            0 up to the first delay, 1 from the last on, in the shape of `age`.
        """
        return self._inside(age, self._fraction, 1.0)

    def density(self, age: Any) -> Any:
        """Return the share of all events that happens per year at an age.

        Parameters
        ----------
        age : float or array_like
            Time since birth, yr; shape (...).

        Returns
        -------
        float or numpy.ndarray
            1/yr, in the shape of `age`; 0 outside the limits, which count as inside.
        """
        return self._inside(age, self._density, 0.0)

    def to_dict(self) -> dict[str, Any]:
        """Return the mapping that `delay` reads back to an equal distribution."""
        plain_fields = {f.name: getattr(self, f.name) for f in fields(self) if f.init}
        return {
            "form": self.form,
            **{k: list(v) if isinstance(v, tuple) else v for k, v in plain_fields.items()},
        }

    def _inside(self, age: Any, function: Callable[[np.ndarray], np.ndarray], after: float) -> Any:
        age = np.asarray(plain(age, "yr", "age"))
        first, last = self.limits
        with np.errstate(under="ignore"):
            value = function(np.clip(age, first, last))
        return np.where(age < first, 0.0, np.where(age > last, after, value))[()]

    def _keep(self, **values: Any) -> None:
        for name, value in values.items():
            object.__setattr__(self, name, value)


def read_limits(value: Any, *, above: bool) -> tuple[float, float]:
    """Read the first and last delay, yr, and refuse impossible ones.

    Parameters
    ----------
    value : pair of float or str
        As given by the user.
    above : bool
        Whether the first must be above 0.
    """
    value = np.atleast_1d(plain(value, "yr", "limits"))
    mend = "give the first and the last delay, such as ['40 Myr', '13.8 Gyr']"
    if value.shape != (2,):
        raise InputError(f"limits are {value.size} values instead of 2", mend=mend)
    first, last = value.tolist()
    if first < 0 or (above and first == 0):
        raise InputError(f"the first delay is not above 0: {first:g} yr", mend=mend)
    if last <= first:
        raise InputError(f"the last delay, {last:g} yr, is not after the first, {first:g} yr", mend=mend)
    return first, last


def log_ratio(age: np.ndarray, start: Any) -> np.ndarray:
    """Give log(age / start), accurate next to `start` too."""
    # age - start is exact where the two are near
    return np.log1p((age - start) / start)


def _log_power_integral(slope: Any, length: np.ndarray) -> np.ndarray:
    """Give the log of the integral of e^(slope x) over x from 0 to `length`."""
    z = slope * length
    with np.errstate(divide="ignore"):
        # exprel(z) = e^z exprel(-z), so the exponent stays below 0 and can't overflow
        return np.log(length) + np.maximum(z, 0.0) + np.log(exprel(-np.abs(z)))


@dataclass(frozen=True)
class BrokenPowerLawDelay(Delay):
    """Power laws of the delay, one after the other and equal where they meet.

    Attributes
    ----------
    slopes : tuple of float
        Exponent of each piece, earliest first; any real numbers.
    breaks : tuple of float
        Delays at which they meet, yr, rising and inside `limits`; one fewer than slopes.
    limits : tuple of float
        First and last delay, yr.

    Raises
    ------
    InputError
        Numbers that don't fit together, or limits that are impossible.

    Examples
    --------
    >>> late = BrokenPowerLawDelay([-0.5, -1.1], ["400 Myr"], ["40 Myr", "13.8 Gyr"])
    >>> float(round(late.fraction("400 Myr"), 4))
    0.3144
    """

    form: ClassVar[str] = "broken-power-law"
    slopes: tuple[float, ...]
    breaks: tuple[float, ...]
    limits: tuple[float, float]

    def __post_init__(self) -> None:
        limits = read_limits(self.limits, above=True)
        slopes = np.atleast_1d(plain(self.slopes, "", "slopes"))
        breaks = np.atleast_1d(plain(self.breaks, "yr", "breaks"))
        if slopes.size != breaks.size + 1:
            raise InputError(
                f"{slopes.size} slopes and {breaks.size} breaks don't fit together",
                mend="give one break fewer than slopes",
            )
        if np.any(np.diff([limits[0], *breaks, limits[1]]) <= 0):
            raise InputError(
                f"breaks don't rise inside the limits: {', '.join(f'{b:g}' for b in breaks)} yr",
                mend=f"give rising delays between {limits[0]:g} and {limits[1]:g} yr",
            )
        self._keep(limits=limits, slopes=tuple(slopes.tolist()), breaks=tuple(breaks.tolist()))

    @cached_property
    def _pieces(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Starts, slopes, log densities at the starts (per first delay), fractions there."""
        edges = np.array([self.limits[0], *self.breaks, self.limits[1]])
        slopes = np.array(self.slopes)
        length = log_ratio(edges[1:], edges[:-1])
        level = np.concatenate([[0.0], np.cumsum(slopes * length)[:-1]])
        share = level + np.log(edges[:-1] / edges[0]) + _log_power_integral(slopes + 1.0, length)
        total = np.logaddexp.reduce(share)
        before = np.concatenate([[0.0], np.cumsum(np.exp(share - total))[:-1]])
        return edges[:-1], slopes, level - total, before

    def _place(self, age: np.ndarray) -> tuple[np.ndarray, ...]:
        start, slopes, level, before = self._pieces
        k = np.searchsorted(np.array(self.breaks), age, side="right")
        return start[k], slopes[k], level[k], before[k], log_ratio(age, start[k])

    def _fraction(self, age: np.ndarray) -> np.ndarray:
        start, slope, level, before, x = self._place(age)
        part = np.exp(level + np.log(start / self.limits[0]) + _log_power_integral(slope + 1.0, x))
        return np.where(age == self.limits[1], 1.0, np.minimum(before + part, 1.0))

    def _density(self, age: np.ndarray) -> np.ndarray:
        _, slope, level, _, x = self._place(age)
        return np.exp(level + slope * x) / self.limits[0]


@dataclass(frozen=True)
class PowerLawDelay(Delay):
    """One power law of the delay.

    Attributes
    ----------
    slope : float
        Exponent; any real number.
    limits : tuple of float
        First and last delay, yr.

    Raises
    ------
    InputError
        Limits that are impossible or a slope that isn't a number.

    Examples
    --------
    >>> float(round(PowerLawDelay(-1, ["0.1 Gyr", "10 Gyr"]).fraction("1 Gyr"), 12))
    0.5
    """

    form: ClassVar[str] = "power-law"
    slope: float
    limits: tuple[float, float]

    def __post_init__(self) -> None:
        self._keep(limits=read_limits(self.limits, above=True), slope=plain(self.slope, "", "slope"))

    @cached_property
    def _law(self) -> BrokenPowerLawDelay:
        return BrokenPowerLawDelay((self.slope,), (), self.limits)

    def _fraction(self, age: np.ndarray) -> np.ndarray:
        return self._law._fraction(age)

    def _density(self, age: np.ndarray) -> np.ndarray:
        return self._law._density(age)


@dataclass(frozen=True)
class ExponentialDelay(Delay):
    """Exponential decline from the first delay on.

    Attributes
    ----------
    timescale : float
        Time in which the density falls by e, yr.
    limits : tuple of float
        First and last delay, yr.

    Raises
    ------
    InputError
        Limits that are impossible or a timescale that isn't above 0.

    Examples
    --------
    >>> float(round(ExponentialDelay("1 Gyr", ["0 yr", "13.8 Gyr"]).fraction("1 Gyr"), 4))
    0.6321
    """

    form: ClassVar[str] = "exponential"
    timescale: float
    limits: tuple[float, float]

    def __post_init__(self) -> None:
        timescale = plain(self.timescale, "yr", "timescale")
        if not timescale > 0:
            raise InputError(f"timescale is not above 0: {timescale:g} yr", mend="give yr above 0")
        self._keep(limits=read_limits(self.limits, above=False), timescale=timescale)

    def _fraction(self, age: np.ndarray) -> np.ndarray:
        first, last = self.limits
        return np.expm1((first - age) / self.timescale) / np.expm1((first - last) / self.timescale)

    def _density(self, age: np.ndarray) -> np.ndarray:
        first, last = self.limits
        whole = -self.timescale * np.expm1((first - last) / self.timescale)
        return np.exp((first - age) / self.timescale) / whole


@dataclass(frozen=True)
class TabulatedDelay(Delay):
    """Densities at given delays, straight lines between them.

    Attributes
    ----------
    ages : tuple of float
        Delays, yr, rising; the first and the last are the limits.
    densities : tuple of float
        Density at each, in any unit; only ratios count.

    Raises
    ------
    InputError
        Lists that don't fit together, ages that don't rise, a negative density or none
        above 0.

    Examples
    --------
    >>> float(TabulatedDelay(["0 Gyr", "1 Gyr", "2 Gyr"], [0, 1, 0]).fraction("0.5 Gyr"))
    0.125
    """

    form: ClassVar[str] = "tabulated"
    ages: tuple[float, ...]
    densities: tuple[float, ...]

    def __post_init__(self) -> None:
        ages = np.atleast_1d(plain(self.ages, "yr", "ages"))
        densities = np.atleast_1d(plain(self.densities, "", "densities"))
        if ages.shape != densities.shape or ages.ndim != 1 or ages.size < 2:
            raise InputError(
                f"{ages.size} ages and {densities.size} densities don't fit together",
                mend="give two lists of one length, with two ages at least",
            )
        if ages[0] < 0 or np.any(np.diff(ages) <= 0):
            raise InputError("ages don't rise from 0 or more", mend="give rising ages in yr")
        if np.any(densities < 0) or not np.any(densities > 0):
            raise InputError(
                "a density is negative" if np.any(densities < 0) else "no density is above 0",
                mend="give densities of 0 or more, one above 0",
            )
        self._keep(ages=tuple(ages.tolist()), densities=tuple(densities.tolist()))

    @property
    def limits(self) -> tuple[float, float]:  # type: ignore[override]
        """First and last delay, yr."""
        return self.ages[0], self.ages[-1]

    @cached_property
    def _pieces(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
        """Ages, densities, their integral up to each age, the whole of it."""
        ages = np.array(self.ages)
        # only ratios count, and their square mustn't overflow
        density = np.array(self.densities) / max(self.densities)
        before = np.concatenate([[0.0], np.cumsum(np.diff(ages) * (density[1:] + density[:-1]) / 2.0)])
        return ages, density, before, float(before[-1])

    def _place(self, age: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        ages, density, _, _ = self._pieces
        k = np.clip(np.searchsorted(ages, age, side="right") - 1, 0, ages.size - 2)
        width = ages[k + 1] - ages[k]
        here = (density[k] * (ages[k + 1] - age) + density[k + 1] * (age - ages[k])) / width
        return k, age - ages[k], here

    def _fraction(self, age: np.ndarray) -> np.ndarray:
        _, density, before, total = self._pieces
        k, step, here = self._place(age)
        return (before[k] + step * (density[k] + here) / 2.0) / total

    def _density(self, age: np.ndarray) -> np.ndarray:
        return self._place(age)[2] / self._pieces[3]
