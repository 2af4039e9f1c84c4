"""Lifetimes of stars over initial mass at one metallicity, with their exact inverse.

A curve never rises with mass. Where it is flat or jumps, the turn-off mass is the lowest
mass whose lifetime doesn't exceed the age, so it stands still while the age crosses a jump.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from steelyard.yields.errors import InputError
from steelyard.yields.units import plain

#: factor in mass over which tabulated lifetimes hand over to the curve used outside them
HANDOVER = 1.25


@dataclass(frozen=True, kw_only=True)
class LifetimeCurve(ABC):
    """Lifetime as a function of initial mass at one metallicity.

    Attributes
    ----------
    law : str
        Which law the curve comes from.
    metallicity : float
        Mass fraction of metals at birth that was asked for.
    valid : tuple of float
        Range of initial masses (Msun) for which the law was published; beyond it
        values are continued.
    notes : tuple of str
        What was done that the law itself doesn't say, such as a metallicity held at
        the edge of its range.
    """

    law: str
    metallicity: float
    valid: tuple[float, float]
    notes: tuple[str, ...] = ()

    @property
    @abstractmethod
    def breaks(self) -> tuple[float, ...]:
        """Initial masses (Msun, rising) at which the curve has a kink or a jump."""

    @abstractmethod
    def _lifetime(self, mass: np.ndarray) -> np.ndarray: ...

    @abstractmethod
    def _turnoff(self, age: np.ndarray) -> np.ndarray: ...

    @abstractmethod
    def _elasticity(self, age: np.ndarray, mass: np.ndarray) -> np.ndarray:
        """Give d ln m_t / d ln t towards later ages."""

    def lifetime(self, mass: Any) -> Any:
        """Return the time from birth to death.

        Parameters
        ----------
        mass : float or array_like
            Initial mass, Msun; shape (...).

        Returns
        -------
        float or numpy.ndarray
            yr, in the shape of `mass`.

        Raises
        ------
        InputError
            A mass that is not above 0.
        """
        mass = np.asarray(plain(mass, "Msun", "mass"))
        if np.any(mass <= 0):
            raise InputError(f"mass is not above 0: {mass.min():g} Msun", mend="give masses above 0")
        with np.errstate(over="ignore"):
            return self._lifetime(mass)[()]

    def turnoff(self, age: Any) -> Any:
        """Return the lowest initial mass that has died by an age.

        Parameters
        ----------
        age : float or array_like
            Age of the population, yr; shape (...).

        Returns
        -------
        float or numpy.ndarray
            Msun, in the shape of `age`; ``inf`` at age 0 and wherever no star, however
            massive, has died.

        Raises
        ------
        InputError
            A negative age.
        """
        age = _ages(age)
        with np.errstate(over="ignore"):
            mass = self._turnoff(np.where(age > 0, age, 1.0))
        return np.where(age > 0, mass, np.inf)[()]

    def turnoff_slope(self, age: Any) -> Any:
        """Return the rate at which the turn-off mass falls, towards later ages at a kink.

        Parameters
        ----------
        age : float or array_like
            Age of the population, yr; shape (...).

        Returns
        -------
        float or numpy.ndarray
            dm_t/dt in Msun/yr, never positive, in the shape of `age`; 0 where the
            turn-off mass stands still, is infinite (age 0 included) or has reached 0.

        Raises
        ------
        InputError
            A negative age.
        """
        age = _ages(age)
        later = np.where(age > 0, age, 1.0)
        with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
            mass = self._turnoff(later)
            slope = mass * self._elasticity(later, mass) / later
        return np.where((age > 0) & np.isfinite(mass) & (mass > 0), slope, 0.0)[()]

    def notes_at(self, ages: Any, limits: tuple[float, float] = (0.0, np.inf)) -> tuple[str, ...]:
        """Return the notes that apply to these ages.

        Parameters
        ----------
        ages : float or array_like
            Ages of the population, yr.
        limits : tuple of float
            Lowest and highest initial mass in the population, Msun; turn-off masses
            beyond them don't matter.

        Returns
        -------
        tuple of str
            `notes`, and one more if a turn-off mass lies outside `valid`.
        """
        mass = np.clip(np.atleast_1d(self.turnoff(ages)), *limits)
        low, high = self.valid
        beyond = mass[(mass < low) | (mass > high)]
        if beyond.size == 0:
            return self.notes
        return (
            *self.notes,
            f"{self.law} lifetimes, given for {low:g} to {high:g} Msun, are continued "
            f"to turn-off masses of {beyond.min():.4g} to {beyond.max():.4g} Msun",
        )


def _ages(age: Any) -> np.ndarray:
    age = np.asarray(plain(age, "yr", "age"))
    if np.any(age < 0):
        raise InputError(f"age is negative: {age.min():g} yr", mend="give ages of 0 or more")
    return age


@dataclass(frozen=True, kw_only=True)
class LogLogCurve(LifetimeCurve):
    """Straight lines in log lifetime over log mass; the end lines are continued outside.

    Attributes
    ----------
    masses, lifetimes : tuple of float
        Nodes, Msun (rising) and yr (not rising).
    """

    masses: tuple[float, ...]
    lifetimes: tuple[float, ...]

    @property
    def breaks(self) -> tuple[float, ...]:
        """Initial masses of the nodes, Msun."""
        return self.masses

    @cached_property
    def _arrays(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        mass, time = np.array(self.masses), np.array(self.lifetimes)
        # a flat line has the elasticity -inf: the turn-off mass jumps over it
        with np.errstate(divide="ignore"):
            elasticity = -np.log(mass[1:] / mass[:-1]) / np.log(time[:-1] / time[1:])
        return mass, time, elasticity

    def _segment(self, age: np.ndarray) -> np.ndarray:
        time = self._arrays[1]
        return np.clip(np.searchsorted(-time, -age, side="left") - 1, 0, time.size - 2)

    def _lifetime(self, mass: np.ndarray) -> np.ndarray:
        masses, time, elasticity = self._arrays
        k = np.clip(np.searchsorted(masses, mass, side="right") - 1, 0, masses.size - 2)
        return time[k] * (mass / masses[k]) ** (1.0 / elasticity[k])

    def _turnoff(self, age: np.ndarray) -> np.ndarray:
        masses, time, elasticity = self._arrays
        k = self._segment(age)
        return masses[k] * (age / time[k]) ** elasticity[k]

    def _elasticity(self, age: np.ndarray, mass: np.ndarray) -> np.ndarray:
        return self._arrays[2][self._segment(age)]


@dataclass(frozen=True, kw_only=True)
class SplicedCurve(LifetimeCurve):
    """One curve inside a range of masses, another outside it; both agree at its ends.

    Attributes
    ----------
    inner : LogLogCurve
        Used between its own end nodes.
    outer : LifetimeCurve
        Used beyond them.
    """

    inner: LogLogCurve
    outer: LifetimeCurve

    @property
    def breaks(self) -> tuple[float, ...]:
        """Initial masses of the inner nodes and of the outer curve's breaks beyond them, Msun."""
        low, high = self.inner.masses[0], self.inner.masses[-1]
        outside = [m for m in self.outer.breaks if m < low or m > high]
        return tuple(sorted([*outside, *self.inner.masses]))

    def _inside(self, age: np.ndarray) -> np.ndarray:
        return (age < self.inner.lifetimes[0]) & (age >= self.inner.lifetimes[-1])

    def _lifetime(self, mass: np.ndarray) -> np.ndarray:
        inside = (mass >= self.inner.masses[0]) & (mass <= self.inner.masses[-1])
        return np.where(inside, self.inner._lifetime(mass), self.outer._lifetime(mass))

    def _turnoff(self, age: np.ndarray) -> np.ndarray:
        return np.where(self._inside(age), self.inner._turnoff(age), self.outer._turnoff(age))

    def _elasticity(self, age: np.ndarray, mass: np.ndarray) -> np.ndarray:
        return np.where(
            self._inside(age), self.inner._elasticity(age, mass), self.outer._elasticity(age, mass)
        )


def require_falling(masses: np.ndarray, lifetimes: np.ndarray, law: str) -> None:
    """Refuse lifetimes that don't fall strictly with mass.

    Raises
    ------
    InputError
        Naming the first two masses out of order.
    """
    wrong = np.flatnonzero(~(np.diff(lifetimes) < 0))
    if wrong.size:
        k = wrong[0]
        raise InputError(
            f"lifetime doesn't fall from {masses[k]:.4g} to {masses[k + 1]:.4g} Msun: "
            f"{lifetimes[k]:.6g} and {lifetimes[k + 1]:.6g} yr",
            where=f"{law} lifetimes",
            mend="leave one of the two masses out or take another law there",
        )


def tabulated(
    masses: Any,
    lifetimes: Any,
    *,
    outside: LifetimeCurve | None = None,
    metallicity: float | None = None,
    law: str = "tabulated",
) -> LifetimeCurve:
    """Make a curve from tabulated lifetimes, straight in log lifetime over log mass.

    Parameters
    ----------
    masses : array_like
        Initial masses, Msun, in any order; shape (n,), n >= 2.
    lifetimes : array_like
        yr, shape (n,).
    outside : LifetimeCurve, optional
        What holds beyond the masses. It takes over a factor 1.25 in mass (`HANDOVER`)
        beyond the last node on each side, with a straight log-log line across. Without
        it the end lines are continued.
    metallicity : float, optional
        Mass fraction of metals of these stars, kept with the curve; by default that
        of `outside`.
    law : str
        Name that notes and errors give the curve.

    Returns
    -------
    LifetimeCurve

    Raises
    ------
    InputError
        Fewer than two nodes, masses or lifetimes that aren't above 0, or lifetimes that
        don't fall strictly with mass, the handover included.

    Examples
    --------
    >>> curve = tabulated([13, 25, 15], ["1.6e7 yr", "7.4 Myr", "1.3e7 yr"])
    >>> float(round(curve.turnoff(1e7), 6))
    19.027824
    """
    mass = np.atleast_1d(plain(masses, "Msun", "masses", where=law))
    time = np.atleast_1d(plain(lifetimes, "yr", "lifetimes", where=law))
    if mass.ndim != 1 or mass.shape != time.shape or mass.size < 2:
        raise InputError(
            f"masses and lifetimes have shapes {mass.shape} and {time.shape}",
            where=law,
            mend="give two lists of one length, with two stars at least",
        )
    if np.any(mass <= 0) or np.any(time <= 0):
        raise InputError("a mass or lifetime is not above 0", where=law, mend="give Msun and yr above 0")
    order = np.argsort(mass, kind="stable")
    mass, time = mass[order], time[order]
    if np.any(np.diff(mass) == 0):
        twice = mass[1:][np.diff(mass) == 0][0]
        raise InputError(f"mass {twice:g} Msun stands twice", where=law, mend="leave one of them out")
    valid = (float(mass[0]), float(mass[-1]))
    if outside is not None:
        ends = np.array([mass[0] / HANDOVER, mass[-1] * HANDOVER])
        mass = np.concatenate([ends[:1], mass, ends[1:]])
        over = outside.lifetime(ends)
        time = np.concatenate([over[:1], time, over[1:]])
        metallicity = outside.metallicity if metallicity is None else metallicity
    require_falling(mass, time, law)
    metallicity = float("nan") if metallicity is None else float(metallicity)
    inner = LogLogCurve(
        law=law,
        metallicity=metallicity,
        valid=valid,
        masses=tuple(mass.tolist()),
        lifetimes=tuple(time.tolist()),
    )
    if outside is None:
        return inner
    return SplicedCurve(
        law=f"{law} and {outside.law}",
        metallicity=metallicity,
        valid=(min(valid[0], outside.valid[0]), max(valid[1], outside.valid[1])),
        notes=(
            f"{law} lifetimes hold for {valid[0]:g} to {valid[1]:g} Msun, "
            f"{outside.law} below {ends[0]:.4g} and above {ends[1]:.4g} Msun",
            *outside.notes,
        ),
        inner=inner,
        outer=outside,
    )
