"""Swaps as a command line writes them: INGREDIENT=CHOICE,CHOICE."""

from __future__ import annotations

import tomllib
from typing import Any

from steelyard.yields.errors import InputError

from ..population import Population
from .ingredients import ingredient, matching

_OPEN, _CLOSE = "[{", "]}"


def read_swap(text: str, population: Population) -> tuple[str, list[Any]]:
    """Read one swap.

    Parameters
    ----------
    text : str
        ``ingredient=choice,choice``. A choice is a word or number, or TOML where it begins with
        ``[``, ``{`` or a quote. Yield sets may be given by a pattern with ``*``.
    population : Population
        In which to swap.

    Returns
    -------
    name : str
    choices : list
        As `contrast` takes them.

    Raises
    ------
    InputError
        The ingredient isn't known, or the text can't be read.

    Examples
    --------
    >>> from steelyard.integrate.popfile import default_population
    >>> read_swap('imf=salpeter-1955,{form="power-law",slopes=[2.7]}', default_population())
    ('imf', ['salpeter-1955', {'form': 'power-law', 'slopes': [2.7]}])
    """
    name, sign, rest = (part.strip() for part in text.partition("="))
    if not sign or not name or not rest:
        raise InputError(
            f"{text!r} isn't a swap", mend="write INGREDIENT=CHOICE,CHOICE such as imf=salpeter-1955"
        )
    ingredient(population, name)
    out: list[Any] = []
    for part in _parts(rest, text):
        value = _value(part, text)
        if name in population.kinds and isinstance(value, str) and set("*?") & set(value):
            out += matching(value, name)
        else:
            out.append(value)
    return name, out


def swapped(population: Population, text: str) -> Population:
    """Return a population with one swap made.

    Parameters
    ----------
    population : Population
    text : str
        ``ingredient=choice``, as of `read_swap`.

    Raises
    ------
    InputError
        The text names no ingredient, or several choices, or the choice doesn't suit.

    Examples
    --------
    >>> from steelyard.integrate.popfile import default_population
    >>> swapped(default_population(), "imf=salpeter-1955").imf.form
    'salpeter-1955'
    """
    name, choices = read_swap(text, population)
    if len(choices) != 1:
        raise InputError(
            f"{text!r} gives {len(choices)} choices", mend=f"give one, such as {name}={choices[0]}"
        )
    return ingredient(population, name).swap(population, choices[0])


def _parts(rest: str, text: str) -> list[str]:
    """Cut at commas that stand outside of brackets and quotes."""
    parts, depth, quote = [""], 0, ""
    for sign in rest:
        if quote:
            quote = "" if sign == quote else quote
        elif sign in "\"'":
            quote = sign
        elif sign in _OPEN:
            depth += 1
        elif sign in _CLOSE:
            depth -= 1
        if sign == "," and not depth and not quote:
            parts.append("")
        else:
            parts[-1] += sign
    parts = [part.strip() for part in parts]
    if depth or quote or not all(parts):
        what = "a quote or bracket doesn't end" if depth or quote else "a choice is empty"
        raise InputError(f"{what} in {text!r}", mend="write INGREDIENT=CHOICE,CHOICE")
    return parts


def _value(part: str, text: str) -> Any:
    if part[0] not in "[{\"'":
        return part
    try:
        return tomllib.loads(f"value = {part}")["value"]
    except (tomllib.TOMLDecodeError, RecursionError):
        raise InputError(
            f"{part!r} can't be read in {text!r}", mend='such as {form="power-law",slopes=[2.7]}'
        ) from None
