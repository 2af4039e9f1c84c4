"""Lifetimes of Padovani & Matteucci (1993): two branches, the same at every metallicity."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from .curves import LifetimeCurve
from .law import LifetimeLaw, fraction_of_metals


@dataclass(frozen=True, kw_only=True)
class TwoBranchCurve(LifetimeCurve):
    """Padovani & Matteucci (1993): two branches that meet at 6.6 Msun with a small jump.

    Below the mass where the lower branch reaches 160 Gyr every star lives 160 Gyr.
    """

    _JUMP, _LONGEST = 6.6, 160.0

    @property
    def breaks(self) -> tuple[float, ...]:
        """Initial masses at which 160 Gyr is reached and at which the branches meet, Msun."""
        return (float(self._lower_mass(np.array(self._LONGEST))), self._JUMP)

    def _lower(self, mass: Any) -> Any:
        inside = 1.790 - 0.2232 * (7.764 - np.log10(mass))
        # the published branch passes 160 Gyr just above 0.6 Msun, where the constant takes over
        return np.minimum(10.0 ** ((0.334 - np.sqrt(np.maximum(inside, 0.0))) / 0.1116), self._LONGEST)

    def _upper(self, mass: Any) -> Any:
        return 1.2 * mass**-1.85 + 0.003

    def _lower_mass(self, gyr: np.ndarray) -> np.ndarray:
        return 10.0 ** (7.764 - (1.790 - self._lower_elasticity(gyr) ** 2) / 0.2232)

    @staticmethod
    def _lower_elasticity(gyr: np.ndarray) -> np.ndarray:
        return -(0.334 - 0.1116 * np.log10(gyr))

    def _lifetime(self, mass: np.ndarray) -> np.ndarray:
        return 1e9 * np.where(mass <= self._JUMP, self._lower(mass), self._upper(mass))

    def _turnoff(self, age: np.ndarray) -> np.ndarray:
        gyr = age / 1e9
        with np.errstate(divide="ignore"):
            high = (np.maximum(gyr - 0.003, 0.0) / 1.2) ** (-1.0 / 1.85)
        low = np.minimum(self._lower_mass(gyr), self._JUMP)
        mass = np.where(gyr < self._upper(self._JUMP), np.maximum(high, self._JUMP), low)
        return np.where(gyr >= self._LONGEST, 0.0, mass)

    def _elasticity(self, age: np.ndarray, mass: np.ndarray) -> np.ndarray:
        gyr = age / 1e9
        still = np.where(gyr < self._lower(self._JUMP), 0.0, self._lower_elasticity(gyr))
        return np.where(gyr < self._upper(self._JUMP), -gyr / (1.85 * (gyr - 0.003)), still)


@dataclass(frozen=True)
class PadovaniMatteucci1993(LifetimeLaw):
    """Padovani & Matteucci (1993, ApJ 416, 26): lifetimes that don't depend on metallicity.

    In Gyr, 160 at 0.6 Msun and below;
    10^((0.334 - sqrt(1.790 - 0.2232 (7.764 - log10 m))) / 0.1116) up to 6.6 Msun, but no
    more than 160; 1.2 m^-1.85 + 0.003 above, so that no star lives less than 3 Myr. At
    6.6 Msun lifetimes jump down by 1.4 %, and the turn-off mass stands still meanwhile.

    Examples
    --------
    >>> float(round(PadovaniMatteucci1993().at(0.02).turnoff("10 Myr"), 4))
    16.1292
    """

    def at(self, metallicity: Any) -> TwoBranchCurve:
        """Return the curve, the same at every metallicity; see `LifetimeLaw.at`."""
        return TwoBranchCurve(
            law="padovani-matteucci-1993", metallicity=fraction_of_metals(metallicity), valid=(0.6, 120.0)
        )

    def metallicity_slope(self, mass: Any, metallicity: Any) -> np.ndarray:
        """Return d ln t / dZ, which is 0; see `LifetimeLaw.metallicity_slope`."""
        return np.zeros(np.shape(mass))
