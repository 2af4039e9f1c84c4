"""Delay-time distributions by name, from a mapping or from a function.

A new form is a class (see `delay_forms`) and a line in `FORMS`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, fields
from functools import cached_property
from typing import Any, ClassVar

import numpy as np

from steelyard.yields.errors import InputError, nearest

from .forms import (
    BrokenPowerLawDelay,
    Delay,
    ExponentialDelay,
    PowerLawDelay,
    TabulatedDelay,
    log_ratio,
    read_limits,
)

_NODES, _SHARES = np.polynomial.legendre.leggauss(16)
_NODES, _SHARES = (_NODES + 1.0) / 2.0, _SHARES / 2.0


@dataclass(frozen=True)
class FunctionDelay(Delay):
    """A user's function of the delay, integrated numerically.

    Gauss-Legendre of 16 points on pieces in log delay, which are halved until the halves
    agree with the whole to 1e-13 of all events, 24 times at most. What disagreement is
    left, summed, is `error`.

    Attributes
    ----------
    function : callable
        ``function(delay)``, one delay in yr at a time, gives the density in any unit.
    limits : tuple of float
        First and last delay, yr; the first above 0.

    Raises
    ------
    InputError
        Limits that are impossible, or a density that is negative or not finite.

    Examples
    --------
    >>> late = FunctionDelay(lambda delay: 1 / delay, ["0.1 Gyr", "10 Gyr"])
    >>> float(round(late.fraction("1 Gyr"), 12)), late.error < 1e-12
    (0.5, True)
    """

    form: ClassVar[str] = "function"
    function: Callable[[float], float]
    limits: tuple[float, float]

    def __post_init__(self) -> None:
        if not callable(self.function):
            raise InputError(f"function can't be called: {self.function!r}", mend="give a function of yr")
        self._keep(limits=read_limits(self.limits, above=True))
        if not self._pieces[2] > 0:
            raise InputError("the density is 0 all over its limits", mend="give one above 0 somewhere")

    @property
    def error(self) -> float:
        """Estimated error of fractions."""
        return self._pieces[3]

    def _call(self, age: np.ndarray) -> np.ndarray:
        value = np.vectorize(self.function, otypes=[float])(age)
        wrong = ~(np.isfinite(value) & (value >= 0))
        if np.any(wrong):
            raise InputError(
                f"density at {age[wrong][0]:g} yr is {value[wrong][0]}",
                where="delay function",
                mend="return finite densities of 0 or more between the limits",
            )
        return value

    def _integral(self, start: np.ndarray, length: np.ndarray) -> np.ndarray:
        """Integrate over log delay, `length` on from the delay `start`."""
        age = start[..., None] * np.exp(length[..., None] * _NODES)
        return length * (self._call(age) * age @ _SHARES)

    @cached_property
    def _pieces(self) -> tuple[np.ndarray, np.ndarray, float, float]:
        """Starts of pieces (yr), integrals up to each, the whole, the error relative to it."""
        first, last = self.limits
        edges = np.geomspace(first, last, 17)
        start, length = edges[:-1], log_ratio(edges[1:], edges[:-1])
        value = self._integral(start, length)
        done: list[tuple[np.ndarray, ...]] = []
        for depth in range(24, -1, -1):
            half = length / 2.0
            middle = start * np.exp(half)
            low, high = self._integral(start, half), self._integral(middle, half)
            miss = np.abs(low + high - value)
            whole = sum(float(d[1].sum()) for d in done) + float((low + high).sum())
            settled = miss <= 1e-13 * whole if depth else np.ones_like(miss, dtype=bool)
            done.append((start[settled], (low + high)[settled], miss[settled]))
            again = ~settled
            if not np.any(again):
                break
            start = np.stack([start[again], middle[again]], axis=-1).ravel()
            length = np.repeat(half[again], 2)
            value = np.stack([low[again], high[again]], axis=-1).ravel()
        start, value, miss = (np.concatenate(parts) for parts in zip(*done, strict=True))
        order = np.argsort(start)
        before = np.concatenate([[0.0], np.cumsum(value[order])])
        whole = float(before[-1])
        return start[order], before[:-1], whole, float(miss.sum()) / whole if whole else 0.0

    def _fraction(self, age: np.ndarray) -> np.ndarray:
        start, before, whole, _ = self._pieces
        k = np.clip(np.searchsorted(start, age, side="right") - 1, 0, start.size - 1)
        part = self._integral(start[k], log_ratio(age, start[k]))
        return np.where(age == self.limits[1], 1.0, np.minimum((before[k] + part) / whole, 1.0))

    def _density(self, age: np.ndarray) -> np.ndarray:
        return self._call(age) / self._pieces[2]


#: forms by the name a population file calls them
FORMS: dict[str, type[Delay]] = {
    cls.form: cls
    for cls in (PowerLawDelay, ExponentialDelay, BrokenPowerLawDelay, TabulatedDelay, FunctionDelay)
}

#: published distributions: Maoz & Graur (2017, ApJ 848, 25), with 1.3e-3 events per Msun in all
PRESETS: dict[str, dict[str, Any]] = {
    "maoz-graur-2017": {"form": "power-law", "slope": -1.1, "limits": ["40 Myr", "13.8 Gyr"]},
}


def delay(spec: Mapping[str, Any] | str | Delay, where: str = "") -> Delay:
    """Return the delay-time distribution that a mapping describes.

    Parameters
    ----------
    spec : mapping, str or Delay
        ``{"form": ..., ...}`` with the attributes of that form as further keys, all of
        them needed; the name of a preset, in place of a form too, whose keys can then
        be given anew; or a distribution itself.
    where : str
        Where it stands, for error messages.

    Returns
    -------
    Delay

    Raises
    ------
    InputError
        A form or key that isn't known, a key that lacks, or values the form refuses.

    Examples
    --------
    >>> late = delay({"form": "power-law", "slope": -1.1, "limits": ["40 Myr", "13.8 Gyr"]})
    >>> late == delay("maoz-graur-2017") == delay(late.to_dict())
    True
    >>> float(round(late.fraction("1 Gyr"), 4))
    0.6219
    """
    if isinstance(spec, Delay):
        return spec
    if isinstance(spec, str):
        spec = {"form": spec}
    if not isinstance(spec, Mapping):
        raise InputError(
            f"delay is not a mapping: {spec!r}", where=where, mend='give { form = "power-law", ... }'
        )
    keys = dict(spec)
    form = keys.pop("form", None)
    if form in PRESETS:
        keys = {**PRESETS[form], **keys}
        form = keys.pop("form")
    if form is None or form not in FORMS:
        what = "delay has no form" if form is None else f"delay form {form!r} isn't known"
        raise InputError(what, where=where, mend=nearest(str(form), [*FORMS, *PRESETS]))
    names = [f.name for f in fields(FORMS[form])]
    for key in keys:
        if key not in names:
            raise InputError(
                f"key {key!r} isn't known in a {form} delay", where=where, mend=nearest(key, names)
            )
    lacking = [name for name in names if name not in keys]
    if lacking:
        raise InputError(
            f"a {form} delay lacks {' and '.join(lacking)}", where=where, mend=f"give {', '.join(names)}"
        )
    try:
        return FORMS[form](**keys)
    except InputError as error:
        inside = ", ".join(part for part in (where, error.where) if part)
        raise InputError(error.what, where=inside, mend=error.mend) from None
