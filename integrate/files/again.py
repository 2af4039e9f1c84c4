"""A file of population yields, weighed again from the population that it carries."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from .formats import read_stored
from .layout import SCALES, Array, StoredYields, error_arrays, stored

#: digits agree where they differ by less than this of the value, or `NOISE` of the dataset's largest
SAME = 1e-12
NOISE = 1e-15


def agrees(path: str | Path) -> tuple[bool, str]:
    """Weigh again the population that a file carries, and compare the digits.

    Parameters
    ----------
    path : str or Path
        A file of yields in any of the formats that are written here.

    Returns
    -------
    same : bool
        Whether every figure agrees to 1e-12, which leaves room for another machine's rounding.
    message : str
        One line: how well they agree, or where they don't and what may be the reason.

    Raises
    ------
    InputError
        The file can't be read.
    """
    held = read_stored(path)
    try:
        fresh = _weighed(held)
    except (ValueError, RecursionError) as error:
        return False, f"{path}: can't be weighed again: {' '.join(str(error).split())}"
    why = changes(held.attributes, fresh.attributes)
    because = f" ({'; '.join(why)})" if why else ""
    for name in ("source", "species", "remnant_kind", "event"):
        if fresh.scales[name] != held.scales[name]:
            return False, f"{path}: weighed again, it has another list of {name}{because}"
    found = compare(fresh.arrays, held.arrays)
    if found.worst > SAME:
        place = _place(held, found.name, found.at)
        return False, f"{path}: the digits differ, most in {place}: {found.worst:.1e} of it{because}"
    how = "to the last bit" if found.exact else f"to {SAME:g}"
    return True, f"{path}: weighed again, the digits agree {how}{because}"


@dataclass(frozen=True)
class Apart:
    """How far arrays lie apart: the largest difference of any figure, in units of itself, and where it is."""

    exact: bool = True
    worst: float = 0.0
    name: str = ""
    at: tuple[int, ...] = ()


def compare(fresh: Mapping[str, Array], held: Mapping[str, Array]) -> Apart:
    """Compare arrays by name; a NaN agrees with nothing, rounding of the smallest figures counts for none.

    Examples
    --------
    >>> compare({"a": np.array([1.0, 2.0])}, {"a": np.array([1.0, 2.5])})
    Apart(exact=False, worst=0.2, name='a', at=(1,))
    """
    worst = Apart()
    for name, values in held.items():
        again = fresh[name]
        exact = worst.exact and np.array_equal(again, values)
        worst = replace(worst, exact=exact)
        floor = NOISE * np.max(np.abs(again), initial=0.0)
        size = np.maximum(np.abs(again), np.abs(values))
        with np.errstate(invalid="ignore", divide="ignore"):
            apart = np.abs(again.astype(float) - values)
            off = np.where(apart <= floor, 0.0, np.nan_to_num(apart / size, nan=np.inf))
        if off.size and off.max() > worst.worst:
            at = np.unravel_index(int(off.argmax()), off.shape)
            worst = Apart(exact, float(off.max()), name, tuple(int(i) for i in at))
    return worst


def _weighed(held: StoredYields) -> StoredYields:
    from ..popfile import population_from_dict

    population = population_from_dict(tomllib.loads(held.population), "its population")
    results = [replace(population, metallicity=float(z)).weigh(held.ages) for z in held.metallicity]
    fresh = stored(results)
    if "spread" in held.attributes:
        from ..spread.file import spread_from_dict

        spread = spread_from_dict(tomllib.loads(held.attributes["spread"]), "its spread")
        fresh.arrays.update(error_arrays(spread.propagate(results[0])))
    return fresh


def changes(then: Mapping[str, Any], now: Mapping[str, Any]) -> list[str]:
    """Return what is not as it was when a file was written, from its attributes and those of now."""
    told = []
    if then.get("steelyard_version") != now["steelyard_version"]:
        told.append(
            f"written by steelyard {then.get('steelyard_version')}, this is {now['steelyard_version']}"
        )
    before = dict(zip(then.get("sets", ()), then.get("set_checksums", ()), strict=False))
    for id, checksum in zip(now["sets"], now["set_checksums"], strict=True):
        if before.get(id) != checksum:
            told.append(f"the figures of {id} aren't those it was written with")
    return told


def _place(held: StoredYields, name: str, at: Sequence[Any]) -> str:
    scales: Mapping[str, Any] = held.scales
    parts = [
        f"{scales[dim][i]:g} {SCALES[dim].units}" if dim == "time" else f"{scales[dim][i]}"
        for dim, i in zip(held.entries[name].dims, at, strict=True)
        if dim != "metallicity" or len(held.metallicity) > 1
    ]
    return f"{name} ({', '.join(parts)})"
