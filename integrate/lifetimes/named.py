"""Lifetime laws by name."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from steelyard.yields.errors import InputError, nearest

from .function import FunctionLifetimes
from .law import LifetimeLaw
from .padovani import PadovaniMatteucci1993
from .portinari import Portinari1998
from .raiteri import Raiteri1996

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
