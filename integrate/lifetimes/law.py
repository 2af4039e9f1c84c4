"""What a lifetime law is: at each metallicity, a curve of lifetime over initial mass."""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import Any

import numpy as np

from steelyard.yields.errors import InputError
from steelyard.yields.units import plain

from .curves import LifetimeCurve


@dataclass(frozen=True)
class LifetimeLaw(ABC):
    """Lifetimes of stars over initial mass and metallicity."""

    @abstractmethod
    def at(self, metallicity: Any) -> LifetimeCurve:
        """Return the curve at one metallicity.

        Parameters
        ----------
        metallicity : float
            Mass fraction of metals at birth.

        Returns
        -------
        LifetimeCurve

        Raises
        ------
        InputError
            A metallicity outside 0 to 1.
        """

    def metallicity_slope(self, mass: Any, metallicity: Any) -> np.ndarray:
        """Return how the logarithm of a lifetime moves with metallicity, towards higher ones at a kink.

        The laws by name have closed forms. For a function it is a five-point difference over
        0.2 % of the metallicity to either side (at 0, upwards from it over 4e-6).

        Parameters
        ----------
        mass : float or array_like
            Initial mass, Msun.
        metallicity : float
            Mass fraction of metals at birth.

        Returns
        -------
        numpy.ndarray
            d ln t / dZ, in the shape of `mass`.

        Examples
        --------
        >>> from steelyard.integrate.lifetimes import Portinari1998
        >>> Portinari1998().metallicity_slope([1.0, 20.0], 0.01).round(2)
        array([ 21.48, -10.78])
        """
        z = fraction_of_metals(metallicity)
        h = 1e-3 * z if z > 0 else 1e-6
        shares = {-2: 1, -1: -8, 1: 8, 2: -1} if z > 0 else {0: -25, 1: 48, 2: -36, 3: 16, 4: -3}
        return sum(w * np.log(self.at(z + k * h).lifetime(mass)) for k, w in shares.items()) / (12 * h)


def fraction_of_metals(value: Any) -> float:
    """Return a metallicity as a plain number, or refuse it."""
    value = plain(value, "", "metallicity")
    if np.ndim(value) or not 0 <= value < 1:
        raise InputError(
            f"metallicity is not between 0 and 1: {value}",
            mend="give the mass fraction of metals, e.g. 0.014",
        )
    return value


def hold(law: str, value: float, low: float, high: float) -> tuple[float, tuple[str, ...]]:
    """Return a metallicity held inside what a law covers, and a note where that moved it."""
    held = min(max(value, low), high)
    if held == value:
        return held, ()
    return held, (f"{law} lifetimes cover Z = {low:g} to {high:g}; those of Z = {held:g} are held beyond",)
