"""Units of columns and scales of metallicity, as papers write them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..build import YEARS
from ..composition import mixture
from ..errors import InputError
from ..library import DEFAULT_SOLAR
from ..units import plain
from .declared import Layout

Array = NDArray[np.float64]

#: units as byte-by-byte descriptions and papers write them
ALIASES = {
    "solMass": "Msun",
    "Msol": "Msun",
    "msun": "Msun",
    "M_sun": "Msun",
    "M_Sun": "Msun",
    "Msolar": "Msun",
    "solar mass": "Msun",
    "a": "yr",
    "Gyr": "Gyr",
}
NO_UNIT = ("", "---", "--", "-", "1", "dimensionless")


def metallicities(numbers: Array, scale: str, solar: float | None, layout: Layout) -> Array:
    """Return mass fractions of metals from figures on another scale."""
    sun = solar if solar is not None else mixture(layout.birth.get("mixture", DEFAULT_SOLAR)).Z
    if scale == "[Fe/H]":
        numbers = sun * 10.0**numbers
    elif scale == "Z/Zsun":
        numbers = sun * numbers
    if numbers.min() < 0 or numbers.max() >= 0.5:
        worst = numbers.min() if numbers.min() < 0 else numbers.max()
        raise InputError(
            f"metallicity {worst:g} is no mass fraction",
            where=f"{layout.name} [model] metallicity",
            mend='say scale = "[Fe/H]" or "Z/Zsun", or log10 = true',
        )
    return numbers


def factor_of(given: str, declared: str, unit: str, what: str, warnings: list[str]) -> float:
    """Return how many `unit` one unit of a column is; the layout's word goes before the file's."""
    chosen = given or declared.strip()
    if chosen in NO_UNIT:
        return 1.0
    if not given and chosen.startswith("["):
        warnings.append(
            f"{what} stands in {declared}: brackets mean a logarithm, which log10 = true would undo"
        )
        return 1.0
    chosen = ALIASES.get(chosen, chosen)
    if chosen in (unit, "M☉", "M⊙") or (unit == "yr" and chosen in YEARS):
        return YEARS.get(chosen, 1.0) if unit == "yr" else 1.0
    try:
        return float(plain(f"1 {chosen}", unit, what))
    except InputError as error:
        if given or "dimension" in error.what:
            raise
    warnings.append(f"the file's unit {declared!r} of {what} isn't known; taken as {unit}")
    return 1.0
