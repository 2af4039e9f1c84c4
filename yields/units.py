"""Plain numbers are Msun, yr, km/s and mass fractions; here other units become those.

pint is imported only when a unit has to be read, so that importing steelyard stays quick.
"""

from __future__ import annotations

import re
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np

from .errors import InputError

if TYPE_CHECKING:
    import pint

#: kg; IAU 2015 nominal solar mass parameter over CODATA 2018 G
MSUN_KG = 1.988409870698051e30

# pint evaluates expressions; only "number unit", units joined by * and / and with one-digit powers, reach it
_LONGEST = 80
_UNIT = r"[A-Za-z_]{1,24}(\s*(\^|\*\*)\s*[-+]?\d)?"
_QUANTITY = re.compile(
    r"\s*[-+]?(\d+\.?\d*|\.\d+)([eE][-+]?\d{1,3})?\s*([*/]?\s*"
    + _UNIT
    + r"\s*)(\s*[*/\s]\s*"
    + _UNIT
    + r"){0,5}\s*"
)


@lru_cache(maxsize=1)
def registry() -> pint.UnitRegistry:
    """Return steelyard's unit registry: pint's, with ``Msun`` added.

    Returns
    -------
    pint.UnitRegistry

    Examples
    --------
    >>> round(registry()("2 Myr").m_as("yr"))
    2000000
    """
    import pint

    units = pint.UnitRegistry()
    units.define(f"Msun = {MSUN_KG!r} * kilogram = M_sun = solar_mass")
    units.define("Rsun = 6.957e8 * meter")
    return units


def plain(value: Any, unit: str, name: str, *, where: str = "") -> Any:
    """Turn a number, array, text or Quantity into plain numbers of ``unit``.

    Parameters
    ----------
    value : float, array_like, str, pint.Quantity
        Plain numbers are taken to be in ``unit`` already; text such as
        ``"10 Myr"`` and Quantities of any registry are converted.
    unit : str
        The unit of the result, ``""`` for a pure number.
    name : str
        What the value is, for the error message.
    where : str, optional
        Where the value stands (file and key), for the error message.

    Returns
    -------
    float or numpy.ndarray

    Raises
    ------
    InputError
        Text that isn't a quantity, a wrong dimension, or a value that isn't finite.

    Examples
    --------
    >>> plain("10 Myr", "yr", "age")
    10000000.0
    >>> plain(8.0, "Msun", "mass")
    8.0
    """
    hint = f"give {name} as a number or with a unit of {unit}" if unit else f"give {name} as a pure number"
    if isinstance(value, (bool, np.bool_)) or value is None:
        raise InputError(f"{name} is not a number: {value!r}", where=where, mend=hint)
    if isinstance(value, str):
        value = _read(value, unit, name, where, hint)
    elif hasattr(value, "dimensionality") and hasattr(value, "magnitude"):
        magnitude, its_unit = np.asarray(value.magnitude, dtype=float), str(value.units)
        try:
            value = registry().Quantity(magnitude, its_unit)
        except Exception:  # as in _read
            raise InputError(
                f"{name} has a unit that isn't known: {its_unit!r}", where=where, mend=hint
            ) from None
        value = _convert(value, unit, name, where, hint)
    elif hasattr(value, "to_value") and hasattr(value, "unit"):
        value = _from_astropy(value, unit, name, where, hint)
    elif isinstance(value, (list, tuple)) and any(
        isinstance(v, str) or hasattr(v, "dimensionality") or hasattr(v, "to_value") for v in value
    ):
        value = np.array([plain(v, unit, name, where=where) for v in value])
    try:
        array = np.asarray(value, dtype=float)
    except (TypeError, ValueError, OverflowError):
        raise InputError(f"{name} is not a number: {str(value)[:60]}", where=where, mend=hint) from None
    if not np.all(np.isfinite(array)):
        shown = str(value)[:60]
        raise InputError(f"{name} holds a value that isn't finite: {shown}", where=where, mend=hint)
    return float(array) if array.ndim == 0 else array


def _read(text: str, unit: str, name: str, where: str, hint: str) -> float:
    if len(text) > _LONGEST:
        raise InputError(f"{name} is not a quantity: {text[:40]!r} ...", where=where, mend=hint)
    try:
        return float(text)
    except ValueError:
        pass
    if not _QUANTITY.fullmatch(text):
        raise InputError(f"{name} is not a quantity: {text[:60]!r}", where=where, mend=hint)
    try:
        quantity = registry().Quantity(text)
    except Exception:  # pint raises half a dozen unrelated kinds
        raise InputError(f"{name} has a unit that isn't known: {text!r}", where=where, mend=hint) from None
    return _convert(quantity, unit, name, where, hint, text)


def _convert(quantity: pint.Quantity, unit: str, name: str, where: str, hint: str, shown: str = "") -> Any:
    import pint

    try:
        return quantity.m_as(unit or "dimensionless")
    except pint.DimensionalityError:
        raise InputError(
            f"{name} has the wrong dimension: {shown or f'{quantity:~}'} is not a quantity of"
            f" {unit or 'pure number'}",
            where=where,
            mend=hint,
        ) from None


def _from_astropy(value: Any, unit: str, name: str, where: str, hint: str) -> Any:
    try:
        return value.to_value(unit.replace("Msun", "solMass"))
    except Exception:  # astropy's UnitConversionError, which only exists where astropy is loaded
        raise InputError(
            f"{name} has the wrong dimension: {value.unit} is not a unit of {unit or 'pure number'}",
            where=where,
            mend=hint,
        ) from None
