"""Published laws for the lifetimes of stars, each a class that gives a curve at a metallicity.

A new law is a class with an ``at`` and a line in `LAWS`.
"""

from __future__ import annotations

import csv
import hashlib
import io
import tomllib
from abc import ABC, abstractmethod
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files
from typing import Any, ClassVar

import numpy as np

from steelyard.yields.errors import InputError, nearest
from steelyard.yields.units import plain

from .lifetime_curves import HANDOVER, LifetimeCurve, LogLogCurve, SplicedCurve, require_falling, tabulated

__all__ = [
    "HANDOVER",
    "LAWS",
    "FunctionLifetimes",
    "LifetimeCurve",
    "LifetimeLaw",
    "LogLogCurve",
    "PadovaniMatteucci1993",
    "Portinari1998",
    "Raiteri1996",
    "SplicedCurve",
    "lifetimes",
    "tabulated",
]


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
        >>> Portinari1998().metallicity_slope([1.0, 20.0], 0.01).round(2)
        array([ 21.48, -10.78])
        """
        z = _metallicity(metallicity)
        h = 1e-3 * z if z > 0 else 1e-6
        shares = {-2: 1, -1: -8, 1: 8, 2: -1} if z > 0 else {0: -25, 1: 48, 2: -36, 3: 16, 4: -3}
        return sum(w * np.log(self.at(z + k * h).lifetime(mass)) for k, w in shares.items()) / (12 * h)


def _metallicity(value: Any) -> float:
    value = plain(value, "", "metallicity")
    if np.ndim(value) or not 0 <= value < 1:
        raise InputError(
            f"metallicity is not between 0 and 1: {value}",
            mend="give the mass fraction of metals, e.g. 0.014",
        )
    return value


def _hold(law: str, value: float, low: float, high: float) -> tuple[float, tuple[str, ...]]:
    held = min(max(value, low), high)
    if held == value:
        return held, ()
    return held, (
        f"{law} lifetimes cover Z = {low:g} to {high:g}; those of Z = {held:g} stand for Z = {value:g}",
    )


@dataclass(frozen=True)
class Portinari1998(LifetimeLaw):
    """Portinari, Chiosi & Bressan (1998, A&A 334, 505): lifetimes for 0.6 to 120 Msun.

    Log lifetime runs straight in log mass between rows and straight in log Z between
    columns. Outside Z = 0.0004 to 0.05 the edge column holds; outside 0.6 to 120 Msun the
    end lines are continued. At Z = 0.05 the table gives stars of 100 and of 120 Msun the
    same lifetime, so there they, and all above, die together.

    Examples
    --------
    >>> float(round(Portinari1998().at(0.02).turnoff("10 Myr"), 9))
    18.679092629
    """

    def at(self, metallicity: Any) -> LogLogCurve:
        """Return the curve at one metallicity; see `LifetimeLaw.at`."""
        asked = _metallicity(metallicity)
        columns, masses, table = _portinari()
        z, notes = _hold("portinari-1998", asked, columns[0], columns[-1])
        k = min(int(np.searchsorted(columns, z, side="right")) - 1, columns.size - 2)
        share = np.log(z / columns[k]) / np.log(columns[k + 1] / columns[k])
        times = table[:, k] ** (1.0 - share) * table[:, k + 1] ** share
        return LogLogCurve(
            law="portinari-1998",
            metallicity=asked,
            valid=(float(masses[0]), float(masses[-1])),
            notes=notes,
            masses=tuple(masses.tolist()),
            lifetimes=tuple(times.tolist()),
        )

    def metallicity_slope(self, mass: Any, metallicity: Any) -> np.ndarray:
        """Return d ln t / dZ; see `LifetimeLaw.metallicity_slope`."""
        z, columns = _metallicity(metallicity), _portinari()[0]
        if not columns[0] <= z < columns[-1]:
            return np.zeros(np.shape(mass))
        k = int(np.searchsorted(columns, z, side="right")) - 1
        low, high = (np.log(self.at(c).lifetime(mass)) for c in columns[k : k + 2].tolist())
        return (high - low) / np.log(columns[k + 1] / columns[k]) / z


@lru_cache(maxsize=1)
def _portinari() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    folder = files("steelyard.tables").joinpath("portinari-1998-lifetimes")
    data = folder.joinpath("lifetimes.csv").read_bytes()
    declared = tomllib.loads(folder.joinpath("set.toml").read_text(encoding="utf-8"))["checksums"]
    if hashlib.sha256(data).hexdigest() != declared["lifetimes.csv"]:
        raise InputError(
            "the figures don't match their checksum",
            where="tables/portinari-1998-lifetimes/lifetimes.csv",
            mend="restore the file as shipped, or correct the checksum in set.toml if the change is meant",
        )
    head, *rows = csv.reader(io.StringIO(data.decode("utf-8")))
    table = np.array(rows, dtype=float)
    return np.array(head[1:], dtype=float), table[:, 0], table[:, 1:]


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
        asked = _metallicity(metallicity)
        z, notes = _hold("raiteri-1996", asked, *self._COVERED)
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
        z = _metallicity(metallicity)
        if not self._COVERED[0] <= z < self._COVERED[1]:
            return np.zeros(np.shape(mass))
        x = np.log10(z)
        # from the mass of least lifetime on, log10 m stays, and the parabola is level there
        at = np.log10(np.minimum(mass, self.at(z).mass_of_least))
        return sum((b + 2 * c * x) * at**n for n, (_, b, c) in enumerate(self._FIT)) / z


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
            law="padovani-matteucci-1993", metallicity=_metallicity(metallicity), valid=(0.6, 120.0)
        )

    def metallicity_slope(self, mass: Any, metallicity: Any) -> np.ndarray:
        """Return d ln t / dZ, which is 0; see `LifetimeLaw.metallicity_slope`."""
        return np.zeros(np.shape(mass))


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
            metallicity=_metallicity(metallicity),
            valid=(0.1, 120.0),
            function=self.function,
        )


#: laws by the name a population file calls them
LAWS: dict[str, type[LifetimeLaw]] = {
    "portinari-1998": Portinari1998,
    "raiteri-1996": Raiteri1996,
    "padovani-matteucci-1993": PadovaniMatteucci1993,
}


def lifetimes(law: str | Callable[[float, float], Any] | LifetimeLaw) -> LifetimeLaw:
    """Return a lifetime law.

    Parameters
    ----------
    law : str, callable or LifetimeLaw
        A name in `LAWS`, a function of mass (Msun) and metallicity, or a law itself.

    Returns
    -------
    LifetimeLaw

    Raises
    ------
    InputError
        A name that isn't known.

    Examples
    --------
    >>> float(round(lifetimes("portinari-1998").at(0.02).turnoff("1 Gyr"), 10))
    2.193842877
    """
    if isinstance(law, LifetimeLaw):
        return law
    if isinstance(law, str) and law in LAWS:
        return LAWS[law]()
    if callable(law):
        return FunctionLifetimes(law)
    raise InputError(f"lifetimes {law!r} aren't known", mend=nearest(str(law), LAWS))
