"""Parts of a population file that take several forms: mass functions, delays, mixtures, failures."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from steelyard.yields.errors import InputError

from ..imf import MassFunction, imf, kroupa_2001
from ..laws import PowerLawIMF, SlopeLaw, slope_law
from ..popvalues import as_list, as_number, as_numbers, as_table, as_word, require, short, told
from ..sources import FailureTable
from .text import FUNCTION


def read_failures(value: Mapping[str, Any]) -> FailureTable:
    """Read the table of a source's ``implode``."""
    known = ("masses", "probability")
    with told("implode"):
        table = as_table(value, "implode", known)
        require(table, known, "the table")
        return FailureTable(
            as_numbers(table["masses"], "Msun", "masses"), as_numbers(table["probability"], "", "probability")
        )


def read_mixture(entry: Mapping[str, Any]) -> dict[str, Any]:
    """Sets with their shares, the masses served, and the metallicities that lists of shares are for."""
    several = "metallicities" in entry
    out: dict[str, Any] = {}
    for name, value in entry.items():
        if name in ("from", "to"):
            out[name] = as_number(value, "Msun", name)
        elif name == "metallicities":
            out[name] = as_numbers(value, "", name)
        elif several and isinstance(value, list):
            out[name] = as_numbers(value, "", f"share of {short(name)}")
        else:
            out[name] = as_number(value, "", f"share of {short(name)}")
    return out


def read_delay(value: Any) -> Any:
    """Read a source's ``delay``: a mapping for `steelyard.integrate.delay`, or the name of a preset."""
    if isinstance(value, str):
        return value
    if not isinstance(value, Mapping):
        raise InputError(f"delay is a table, not {short(value)}", mend='such as { form = "power-law", … }')
    if value.get("form") == FUNCTION:
        raise InputError("the delay was a function, which a file can't hold", mend="weigh it from Python")
    units = {"slope": "", "slopes": "", "densities": "", "timescale": "yr"}
    read: dict[str, Any] = {}
    for key, one in value.items():
        if key == "form":
            read[key] = as_word(one, "delay.form")
        elif key == "slope" and isinstance(one, Mapping):
            read[key] = slope_law(one, "delay.slope")
        elif key == "slopes":
            read[key] = _slopes(one, "delay.slopes")
        else:
            make = as_numbers if isinstance(one, list) else as_number
            read[key] = make(one, units.get(key, "yr"), f"delay.{key}")
            wants_list = key in ("slopes", "breaks", "limits", "ages", "densities")
            if key in (*units, "breaks", "limits", "ages") and wants_list != isinstance(one, list):
                raise InputError(f"delay.{key} {'needs a list' if wants_list else 'is one number'}")
    return read


def read_imf(value: Any) -> MassFunction | PowerLawIMF:
    """Read the ``[imf]`` table."""
    if value is None:
        return kroupa_2001()
    if not isinstance(value, Mapping):
        raise InputError(f"imf is a table, not {short(value)}", mend='head it with [imf], then form = "…"')
    if value.get("form") == FUNCTION:
        raise InputError(
            "the mass function was a function, which a file can't hold", mend="weigh it from Python"
        )
    require(value, ("form",), "[imf]")
    read: dict[str, Any] = {}
    for key, one in value.items():
        if key == "form":
            read[key] = as_word(one, "imf.form")
        elif key == "slopes":
            read[key] = _slopes(one, "imf.slopes")
        elif key in ("limits", "breaks"):
            read[key] = as_numbers(one, "Msun", f"imf.{key}")
        elif key in ("centre", "sigma"):
            read[key] = as_number(one, "" if key == "sigma" else "Msun", f"imf.{key}")
        else:
            read[key] = one  # refused by name below
    laws = [s for s in read.get("slopes", []) if isinstance(s, SlopeLaw)]
    first = (
        {**read, "slopes": [s.value if isinstance(s, SlopeLaw) else s for s in read["slopes"]]}
        if laws
        else read
    )
    try:
        with np.errstate(all="ignore"):
            made = imf(**first)
            formed = float(made.mass(*made.limits))
    except InputError:
        raise
    except (ArithmeticError, ValueError):
        formed = np.nan
    if not abs(formed - 1) < 1e-6:
        raise InputError(
            "the mass function can't be normalised with these numbers", where="imf", mend="check its slopes"
        )
    if laws:
        return PowerLawIMF(**{key: one for key, one in read.items() if key != "form"})
    return made


def _slopes(value: Any, name: str) -> list[Any]:
    """Slopes, each a number or a law of metallicity."""
    found = as_list(value, name, "such as [1.3, 2.3]")
    return [slope_law(one, name) if isinstance(one, Mapping) else as_number(one, "", name) for one in found]
