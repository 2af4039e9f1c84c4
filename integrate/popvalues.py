"""Values of a population file by kind: each is what it should be, or an `InputError` says what it is."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from typing import Any

from steelyard.yields.errors import InputError, nearest
from steelyard.yields.units import plain

#: least and largest size of a number in Msun, yr or per Msun; powers of others would overflow
EXTREMES = (1e-30, 1e30)


@contextmanager
def told(place: str) -> Iterator[None]:
    """Put a place, such as the name of a file, in front of every `InputError` raised inside.

    Parameters
    ----------
    place : str
        Nothing is changed where it is empty.

    Examples
    --------
    >>> with told("mine.toml"):
    ...     raise InputError("the population has no source")
    Traceback (most recent call last):
    ...
    steelyard.yields.errors.InputError: mine.toml: the population has no source
    """
    try:
        yield
    except InputError as error:
        where = ": ".join(part for part in (place, error.where) if part)
        raise InputError(error.what, where=where, mend=error.mend) from None


def as_table(value: Any, what: str, known: Sequence[str]) -> Mapping[str, Any]:
    """Return a table whose keys are all known; `what` names it in errors."""
    if not isinstance(value, Mapping):
        raise InputError(f"{what} is a table, not {short(value)}", mend=f"its keys are {', '.join(known)}")
    place = what if what.startswith("[") or what == "ages" else ""
    for key in value:
        if key not in known:
            raise InputError(f"key {short(key)} isn't known", where=place, mend=nearest(str(key), known))
    return value


def as_tables(value: Any, name: str) -> list[Any]:
    """Return an array of tables."""
    return as_list(value, name, f"head each with [[{name}]]")


def require(table: Mapping[str, Any], keys: Sequence[str], what: str) -> None:
    """Refuse a table that lacks a key."""
    lacking = [key for key in keys if key not in table]
    if lacking:
        raise InputError(f"{what} lacks {' and '.join(lacking)}", mend=f"add {', '.join(lacking)}")


def as_list(value: Any, name: str, example: str) -> list[Any]:
    """Return a list."""
    if not isinstance(value, (list, tuple)):
        raise InputError(f"{name} is a list, not {short(value)}", mend=example)
    return list(value)


def as_word(value: Any, name: str) -> str:
    """Return text."""
    if not isinstance(value, str):
        raise InputError(f"{name} is text, not {short(value)}", mend='write it in quotes: "…"')
    return value


def as_number(value: Any, unit: str, name: str) -> float:
    """Return one number in a unit, read from a number or from text with a unit."""
    # an integer too large for a float can't even be asked whether it is finite
    whole = isinstance(value, int) and abs(value) < 10**300
    if isinstance(value, bool) or not (whole or isinstance(value, (float, str))):
        example = f"1 {unit}".replace("1 1/", "1 / ")
        hint = f'give a number, or text with a unit such as "{example}"' if unit else "give a number"
        raise InputError(f"{name} is one number, not {short(value)}", mend=hint)
    read = plain(value, unit, name)
    if read and not EXTREMES[0] <= abs(read) <= EXTREMES[1]:
        raise InputError(f"{name} is out of all proportion: {short(value)}", mend="check its unit")
    return read


def as_numbers(value: Any, unit: str, name: str) -> list[float]:
    """Return a list of numbers in a unit."""
    example = f'such as ["1 {unit}", "2 {unit}"]' if unit else "such as [1.3, 2.3]"
    return [as_number(one, unit, name) for one in as_list(value, name, example)]


def short(value: Any) -> str:
    """Return a value as an error message can quote it."""
    if isinstance(value, Mapping):
        return "a table"
    if isinstance(value, (list, tuple)):
        return "a list"
    if isinstance(value, int) and not -(10**30) < value < 10**30:
        return "a very large number"
    text = repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."
