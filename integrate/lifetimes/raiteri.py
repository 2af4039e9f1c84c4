"""Lifetimes of Raiteri, Villata & Navarro (1996): a parabola in log mass."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from .curves import LifetimeCurve
from .law import LifetimeLaw, fraction_of_metals, hold


@dataclass(frozen=True, kw_only=True)
class ParabolaCurve(LifetimeCurve):
    """Parabola of log10 lifetime (yr) in log10 mass (Msun), held from its least value on.

    Attributes
    ----------
    coefficients : tuple of float
        a0, a1, a2 of a0 + a1 x + a2 x², with a1 < 0 < a2.
    """

    coefficients: tuple[float, float, float]

    @property
    def breaks(self) -> tuple[float, ...]:
        """Initial mass at which the parabola has its least lifetime, Msun."""
        return (self.mass_of_least,)

    @property
    def mass_of_least(self) -> float:
        """Initial mass with the least lifetime, Msun."""
        _, a1, a2 = self.coefficients
        return 10.0 ** (-a1 / (2.0 * a2))

    @property
    def least(self) -> float:
        """Least lifetime, yr."""
        a0, a1, a2 = self.coefficients
        return 10.0 ** (a0 - a1**2 / (4.0 * a2))

    def _lifetime(self, mass: np.ndarray) -> np.ndarray:
        a0, a1, a2 = self.coefficients
        x = np.log10(np.minimum(mass, self.mass_of_least))
        return np.maximum(10.0 ** (a0 + x * (a1 + x * a2)), self.least)

    def _root(self, age: np.ndarray) -> np.ndarray:
        a0, a1, a2 = self.coefficients
        return np.sqrt(np.maximum(a1**2 - 4.0 * a2 * (a0 - np.log10(age)), 0.0))

    def _turnoff(self, age: np.ndarray) -> np.ndarray:
        a0, a1, _ = self.coefficients
        # the falling branch, in the form of the root that has no cancellation near 1 Msun
        mass = 10.0 ** (2.0 * (a0 - np.log10(age)) / (self._root(age) - a1))
        return np.where(age < self.least, np.inf, np.minimum(mass, self.mass_of_least))

    def _elasticity(self, age: np.ndarray, mass: np.ndarray) -> np.ndarray:
        return -1.0 / self._root(age)


@dataclass(frozen=True)
class Raiteri1996(LifetimeLaw):
    """Raiteri, Villata & Navarro (1996, A&A 315, 105): a parabola in log mass, coefficients in log Z.

    log10 t = a0 + a1 log10 m + a2 (log10 m)², fitted for 0.6 to 120 Msun and
    Z = 7e-5 to 0.03; outside that range of Z its edge holds. The parabola has its least
    lifetime at 100 to 132 Msun, by metallicity: from there on every star lives that long,
    where the parabola would rise again.

    Examples
    --------
    >>> float(round(Raiteri1996().at(0.02).turnoff("1 Gyr"), 4))
    2.0417
    """

    _COVERED: ClassVar[tuple[float, float]] = (7e-5, 0.03)
    _FIT: ClassVar[tuple[tuple[float, float, float], ...]] = (
        (10.13, 0.07547, -0.008084),
        (-4.424, -0.7939, -0.1187),
        (1.262, 0.3385, 0.05417),
    )

    def at(self, metallicity: Any) -> ParabolaCurve:
        """Return the curve at one metallicity; see `LifetimeLaw.at`."""
        asked = fraction_of_metals(metallicity)
        z, notes = hold("raiteri-1996", asked, *self._COVERED)
        x = np.log10(z)
        coefficients = tuple(a + b * x + c * x**2 for a, b, c in self._FIT)
        return ParabolaCurve(
            law="raiteri-1996",
            metallicity=asked,
            valid=(0.6, 120.0),
            notes=notes,
            coefficients=tuple(float(a) for a in coefficients),
        )

    def metallicity_slope(self, mass: Any, metallicity: Any) -> np.ndarray:
        """Return d ln t / dZ; see `LifetimeLaw.metallicity_slope`."""
        z = fraction_of_metals(metallicity)
        if not self._COVERED[0] <= z < self._COVERED[1]:
            return np.zeros(np.shape(mass))
        x = np.log10(z)
        # from the mass of least lifetime on, log10 m stays, and the parabola is level there
        at = np.log10(np.minimum(mass, self.at(z).mass_of_least))
        return sum((b + 2 * c * x) * at**n for n, (_, b, c) in enumerate(self._FIT)) / z
