"""Lifetimes from a function of the user's, inverted numerically."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from steelyard.yields.errors import InputError
from steelyard.yields.units import plain

from .curves import LifetimeCurve, require_falling
from .law import LifetimeLaw, fraction_of_metals


@dataclass(frozen=True, kw_only=True)
class FunctionCurve(LifetimeCurve):
    """A user's function of mass and metallicity, inverted by a bracketing root search.

    The turn-off mass is found star by star in log mass (Brent's method, to rounding); its
    slope comes from a five-point difference of the function over 0.2 % in mass to either
    side, so a kink that near is smoothed. Masses are sought from 1e-3 to 1e5 Msun.
    """

    function: Callable[[float, float], Any]

    @property
    def breaks(self) -> tuple[float, ...]:
        """Nothing: kinks of a function aren't known."""
        return ()

    def __post_init__(self) -> None:
        masses = np.geomspace(*self.valid, 121)
        require_falling(masses, self._lifetime(masses), self.law)

    def _log_lifetime(self, log_mass: float) -> float:
        mass = float(np.exp(log_mass))
        time = plain(self.function(mass, self.metallicity), "yr", f"{self.law} lifetime of {mass:.4g} Msun")
        if not time > 0:
            raise InputError(
                f"lifetime of {mass:.4g} Msun is not above 0: {time:g} yr",
                where=self.law,
                mend="return lifetimes in yr",
            )
        return float(np.log(time))

    def _lifetime(self, mass: np.ndarray) -> np.ndarray:
        return np.exp(np.vectorize(self._log_lifetime, otypes=[float])(np.log(mass)))

    def _solve(self, age: float) -> float:
        from scipy.optimize import brentq

        target = np.log(age)
        low, high = np.log(self.valid)
        while self._log_lifetime(low) < target:
            low -= 1.0
            if low < np.log(1e-3):
                return 0.0
        while self._log_lifetime(high) > target:
            high += 1.0
            if high > np.log(1e5):
                return np.inf
        root = brentq(lambda x: self._log_lifetime(x) - target, low, high, xtol=1e-15, rtol=1e-15)
        return float(np.exp(root))

    def _turnoff(self, age: np.ndarray) -> np.ndarray:
        return np.vectorize(self._solve, otypes=[float])(age)

    def _elasticity(self, age: np.ndarray, mass: np.ndarray) -> np.ndarray:
        def one(m: float) -> float:
            if not 0 < m < np.inf:
                return 0.0
            x, h = np.log(m), 1e-3
            near, far = (self._log_lifetime(x + k * h) - self._log_lifetime(x - k * h) for k in (1, 2))
            return 12.0 * h / (8.0 * near - far)

        return np.vectorize(one, otypes=[float])(mass)


@dataclass(frozen=True)
class FunctionLifetimes(LifetimeLaw):
    """Lifetimes from a function of the user's.

    Attributes
    ----------
    function : callable
        ``function(mass, metallicity)`` with Msun and a mass fraction, one star at a time,
        gives the lifetime in yr (or text or a Quantity with a unit of time). It must fall
        strictly with mass from 0.1 to 120 Msun.

    Examples
    --------
    >>> curve = FunctionLifetimes(lambda mass, metallicity: 1e10 * mass**-2.5).at(0.014)
    >>> float(round(curve.turnoff(1e10), 12))
    1.0
    """

    function: Callable[[float, float], Any]

    def at(self, metallicity: Any) -> FunctionCurve:
        """Return the curve at one metallicity; see `LifetimeLaw.at`."""
        name = getattr(self.function, "__name__", "function")
        return FunctionCurve(
            law="lifetimes of a function" if name == "<lambda>" else name,
            metallicity=fraction_of_metals(metallicity),
            valid=(0.1, 120.0),
            function=self.function,
        )
