"""Which stars implode: windows of initial mass, or a probability in steps along it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from steelyard.yields.errors import InputError, nearest
from steelyard.yields.units import plain


@dataclass(frozen=True)
class FailureTable:
    """The probability that an explosion fails, in steps along initial mass.

    Within a step it is constant, so that mean yields stay straight lines (or cubics)
    between models and their integrals exact; more steps follow a curve more closely.

    Attributes
    ----------
    masses : tuple of float
        Ends of the steps, Msun, increasing.
    probability : tuple of float
        Within each step, 0 to 1; one fewer than masses. Outside of them it is 0.

    Raises
    ------
    InputError
        Lists that don't fit together, masses that don't increase, or a value outside 0 to 1.

    Examples
    --------
    >>> FailureTable(["15 Msun", "20 Msun", "40 Msun"], [0.2, 0.6]).probability
    (0.2, 0.6)
    """

    masses: Any
    probability: Any

    def __post_init__(self) -> None:
        masses = np.atleast_1d(plain(self.masses, "Msun", "masses"))
        probability = np.atleast_1d(plain(self.probability, "", "probability"))
        if masses.ndim != 1 or probability.shape != (len(masses) - 1,) or len(masses) < 2:
            raise InputError(
                f"{masses.size} masses and {probability.size} probabilities don't fit together",
                mend="give one probability for each step between masses",
            )
        if masses[0] <= 0 or np.any(np.diff(masses) <= 0):
            raise InputError("masses don't increase from above 0", mend="list them from low to high, in Msun")
        if probability.min() < 0 or probability.max() > 1:
            raise InputError(
                f"a probability is {probability[(probability < 0) | (probability > 1)][0]:g}",
                mend="give probabilities from 0 to 1",
            )
        object.__setattr__(self, "masses", tuple(masses.tolist()))
        object.__setattr__(self, "probability", tuple(probability.tolist()))

    def to_dict(self) -> dict[str, list[float]]:
        """Return the table as the population file holds it."""
        return {"masses": list(self.masses), "probability": list(self.probability)}


def mass_range(value: Any, name: str) -> tuple[float, float]:
    """Read a pair of masses, Msun, the lower first.

    Raises
    ------
    InputError
        Not two masses, negative, or not in order.
    """
    array = plain(value, "Msun", name)
    if getattr(array, "shape", ()) != (2,):
        raise InputError(f"{name} needs two masses", mend='such as ["13 Msun", "40 Msun"]')
    lo, hi = float(array[0]), float(array[1])
    if lo <= 0:
        raise InputError(f"{name}: mass isn't positive: {lo:g} Msun", mend="give masses above 0")
    if lo >= hi:
        raise InputError(f"{name}: {lo:g} isn't below {hi:g} Msun", mend="write the lower mass first")
    return lo, hi


def implosions(value: Any, where: str) -> tuple[tuple[float, float], ...] | FailureTable:
    """Read windows of mass, or a table of probabilities."""
    if isinstance(value, FailureTable):
        return value
    if not isinstance(value, Mapping):
        return tuple(mass_range(w, where) for w in value)
    known = ("masses", "probability")
    for key in (*value, *known):
        if key not in known:
            raise InputError(f"key {key!r} isn't known", where=where, mend=nearest(str(key), known))
        if key not in value:
            raise InputError(f"{key} is missing", where=where, mend="give masses and probability")
    try:
        return FailureTable(value["masses"], value["probability"])
    except InputError as error:
        inside = ": ".join(part for part in (where, error.where) if part)
        raise InputError(error.what, where=inside, mend=error.mend) from None
