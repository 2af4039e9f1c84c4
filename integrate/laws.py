"""What depends on the metallicity that stars are born with: laws, and the values they give.

A population takes a law wherever it takes a number, shares, a delay or a mass function that
may depend on metallicity, and puts in its place what the law gives at its own metallicity.
The value remembers its law, so that a copy of the population at another metallicity gets
another value, and files can hold the law.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from copy import copy
from dataclasses import dataclass
from typing import Any

import numpy as np

from steelyard.yields.errors import InputError, nearest
from steelyard.yields.units import plain


class Given(float):
    """A number that a law gave at a metallicity.

    Examples
    --------
    >>> rate = Given(2e-3, NumberLaw(1e-3, 0.5, 0.014))
    >>> float(rate), rate.law.power
    (0.002, 0.5)
    """

    law: Any

    def __new__(cls, value: float, law: Any) -> Given:
        """Return the number with its law."""
        made = super().__new__(cls, value)
        made.law = law
        return made

    def __getnewargs__(self) -> tuple[float, Any]:
        return float(self), self.law


class GivenShares(tuple):
    """Shares of a mixture that a law gave at a metallicity."""

    law: Any

    def __new__(cls, values: Sequence[float], law: Any) -> GivenShares:
        """Return the shares with their law."""
        made = super().__new__(cls, values)
        made.law = law
        return made

    def __getnewargs__(self) -> tuple[tuple[float, ...], Any]:
        return tuple(self), self.law


def law_of(value: Any) -> Any:
    """Return the law that gave a value, or None."""
    return getattr(value, "law", None)


def with_law(value: Any, law: Any) -> Any:
    """Return a copy of a value that remembers its law."""
    made = copy(value)
    object.__setattr__(made, "law", law)
    return made


def named(law: Any) -> str:
    """Return a law's name for messages."""
    return getattr(law, "__qualname__", None) or type(law).__qualname__


def _dex(metallicity: float, reference: float) -> float:
    if metallicity <= 0:
        raise InputError(
            "a law in log Z gives nothing at metallicity 0",
            mend="choose a metallicity above 0, or plain numbers",
        )
    return float(np.log10(metallicity / reference))


def _keep(law: Any, unit: str, names: Sequence[str]) -> None:
    for name in names:
        object.__setattr__(law, name, plain(getattr(law, name), unit if name == "value" else "", name))
    if law.reference <= 0:
        raise InputError(f"reference {law.reference:g} isn't a metallicity above 0", mend="such as 0.014")


@dataclass(frozen=True)
class SlopeLaw:
    """A slope that is linear in log Z.

    Attributes
    ----------
    value : float
        At the reference metallicity.
    per_dex : float
        What is added for a factor of ten in metallicity.
    reference : float
        Mass fraction of metals.

    Examples
    --------
    >>> round(SlopeLaw(2.3, 0.3, 0.02)(0.002), 12)
    2.0
    """

    value: Any
    per_dex: Any
    reference: Any

    def __post_init__(self) -> None:
        _keep(self, "", ("value", "per_dex", "reference"))

    def __call__(self, metallicity: float) -> float:
        """Return the slope at a metallicity."""
        return self.value + self.per_dex * _dex(metallicity, self.reference)

    def to_dict(self) -> dict[str, float]:
        """Return the law as a population file holds it."""
        return {"value": self.value, "per_dex": self.per_dex, "reference": self.reference}


@dataclass(frozen=True)
class NumberLaw:
    """Numbers of events that go with a power of the metallicity.

    Attributes
    ----------
    value : float
        Per Msun formed, at the reference metallicity.
    power : float
        Exponent of Z / reference: dex per dex.
    reference : float
        Mass fraction of metals.

    Examples
    --------
    >>> round(NumberLaw("1e-3 / Msun", -0.5, 0.02)(0.0002), 12)
    0.01
    """

    value: Any
    power: Any
    reference: Any

    def __post_init__(self) -> None:
        _keep(self, "1/Msun", ("value", "power", "reference"))
        if self.value < 0:
            raise InputError(f"number is negative: {self.value:g} per Msun")

    def __call__(self, metallicity: float) -> float:
        """Return the number at a metallicity, per Msun formed."""
        return self.value * 10.0 ** (self.power * _dex(metallicity, self.reference))

    def to_dict(self) -> dict[str, float]:
        """Return the law as a population file holds it."""
        return {"value": self.value, "power": self.power, "reference": self.reference}


@dataclass(frozen=True)
class ShareLaw:
    """Shares of a mixture at given metallicities, linear in Z between and held outside of them.

    Attributes
    ----------
    metallicities : tuple of float
        Increasing.
    shares : tuple of tuple of float
        For each set, its share at each metallicity; they sum to 1 at each.

    Examples
    --------
    >>> ShareLaw([0.0, 0.02], [[0.5, 0.1], [0.5, 0.9]])(0.01)
    (0.3, 0.7)
    """

    metallicities: Any
    shares: Any

    def __post_init__(self) -> None:
        z = np.atleast_1d(plain(self.metallicities, "", "metallicities"))
        if z.ndim != 1 or len(z) < 2 or z[0] < 0 or np.any(np.diff(z) <= 0):
            raise InputError(
                "metallicities of shares don't increase from 0 or more", mend="give two at least"
            )
        rows = [np.atleast_1d(plain(row, "", "shares")) for row in self.shares]
        if any(row.shape != z.shape for row in rows):
            raise InputError(
                "shares and metallicities don't fit together", mend="give each set one share a metallicity"
            )
        table = np.array(rows)
        if table.min() < 0 or np.abs(table.sum(axis=0) - 1).max() > 1e-9:
            at = int(np.argmax(np.abs(table.sum(axis=0) - 1)))
            raise InputError(
                "shares of a mixture must be positive and sum to 1,"
                f" not {table[:, at].sum():g} at Z = {z[at]:g}",
                mend="scale the shares",
            )
        object.__setattr__(self, "metallicities", tuple(z.tolist()))
        object.__setattr__(self, "shares", tuple(tuple(row.tolist()) for row in rows))

    def __call__(self, metallicity: float) -> tuple[float, ...]:
        """Return the shares at a metallicity."""
        return tuple(float(np.interp(metallicity, self.metallicities, row)) for row in self.shares)


@dataclass(frozen=True)
class PowerLawIMF:
    """A broken power law some of whose slopes depend on metallicity.

    Attributes
    ----------
    slopes : tuple of float or SlopeLaw
        From low mass to high.
    breaks : tuple of float
        Msun.
    limits : tuple of float
        Msun.

    Examples
    --------
    >>> steeper = PowerLawIMF([1.3, SlopeLaw(2.3, 0.5, 0.014)], [0.5], (0.08, 120))
    >>> steeper(0.014).pieces[1].slope
    2.3
    """

    slopes: Any
    breaks: Any = ()
    limits: Any = (0.08, 120.0)

    def __post_init__(self) -> None:
        object.__setattr__(self, "slopes", tuple(self.slopes))
        # whatever else is wrong shows at any metallicity
        made = self._with([s.value if isinstance(s, SlopeLaw) else s for s in self.slopes])
        object.__setattr__(self, "breaks", tuple(made.parameters["breaks"]))
        object.__setattr__(self, "limits", made.limits)

    def _with(self, slopes: Sequence[float]) -> Any:
        from .imf import power_law

        return power_law(list(slopes), self.breaks, self.limits)

    def __call__(self, metallicity: float) -> Any:
        """Return the mass function at a metallicity."""
        return self._with([s(metallicity) if isinstance(s, SlopeLaw) else s for s in self.slopes])

    def to_dict(self) -> dict[str, Any]:
        """Return the law as the population file's ``[imf]`` table."""
        return {
            "form": "power-law",
            "slopes": [s.to_dict() if isinstance(s, SlopeLaw) else s for s in self.slopes],
            "breaks": list(self.breaks),
            "limits": list(self.limits),
        }


@dataclass(frozen=True)
class VaryingDelay:
    """A delay some of whose slopes depend on metallicity.

    Attributes
    ----------
    spec : mapping
        As `steelyard.integrate.delay` reads it, with a `SlopeLaw` in place of a slope.

    Examples
    --------
    >>> late = {"form": "power-law", "slope": SlopeLaw(-1.1, 0.1, 0.02), "limits": ["40 Myr", "13.8 Gyr"]}
    >>> round(VaryingDelay(late)(0.002).slope, 12)
    -1.2
    """

    spec: Mapping[str, Any]

    def _with(self, value: Callable[[SlopeLaw], float]) -> Any:
        from .delays import delay

        def read(one: Any) -> Any:
            if isinstance(one, SlopeLaw):
                return value(one)
            return [read(part) for part in one] if isinstance(one, (list, tuple)) else one

        return delay({key: read(one) for key, one in self.spec.items()})

    def __post_init__(self) -> None:
        self._with(lambda law: law.value)

    def __call__(self, metallicity: float) -> Any:
        """Return the delay at a metallicity."""
        return self._with(lambda law: law(metallicity))

    def to_dict(self) -> dict[str, Any]:
        """Return the law as the population file's ``delay``."""
        held = self._with(lambda law: law.value).to_dict()

        def write(key: str, one: Any) -> Any:
            if isinstance(one, SlopeLaw):
                return one.to_dict()
            if isinstance(one, (list, tuple)) and any(isinstance(part, SlopeLaw) for part in one):
                return [write(key, part) for part in one]
            return one if key == "slopes" else held[key]

        return {
            "form": held["form"],
            **{k: write(k, self.spec.get(k, v)) for k, v in held.items() if k != "form"},
        }


def slope_law(value: Any, where: str = "") -> SlopeLaw:
    """Read a slope's law from a table with ``value``, ``per_dex`` and ``reference``."""
    return SlopeLaw(**_known(value, ("value", "per_dex", "reference"), where))


def number_law(value: Any, where: str = "") -> NumberLaw:
    """Read a number's law from a table with ``value``, ``power`` and ``reference``."""
    return NumberLaw(**_known(value, ("value", "power", "reference"), where))


def _known(value: Mapping[str, Any], keys: Sequence[str], where: str) -> Mapping[str, Any]:
    for key in value:
        if key not in keys:
            raise InputError(f"key {key!r} isn't known", where=where, mend=nearest(str(key), keys))
    lacking = [key for key in keys if key not in value]
    if lacking:
        raise InputError(
            f"a law of metallicity lacks {' and '.join(lacking)}", where=where, mend=f"give {', '.join(keys)}"
        )
    return value
