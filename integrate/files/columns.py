"""What tables of population yields share, in whichever format: units, origin as text, and errors."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from steelyard.yields.errors import InputError

from .layout import Array, StoredYields

#: units as the formats write them
UNITS = {"yr": "yr", "Msun/Msun/yr": "yr-1", "1/Msun": "solMass-1", "1/Msun/yr": "solMass-1 yr-1"}

#: dimensions that are a row each in any table
ROWS = ("metallicity", "time")

#: dimensions of names
NAMES = ("source", "species", "remnant_kind", "event")


def unreadable(error: Exception, path: str | Path) -> InputError:
    """Return the error to raise for what astropy raises, which may be anything."""
    why = " ".join(str(error).split())[:200]
    return InputError(
        f"the file can't be read: {why}", where=str(path), mend="give a file as `steelyard handoff` wrote it"
    )


def filled(arrays: dict[str, Array], z: Array, t: Array, names: Mapping[str, Any]) -> dict[str, Array]:
    """Return arrays with those that have no entries, which no table holds."""
    for name, dim in (("remnants", "remnant_kind"), ("events", "event"), ("event_rates", "event")):
        if not len(names[dim]):
            arrays.setdefault(name, np.zeros((len(z), len(t), 0)))
    return arrays


def refuse_errors(held: StoredYields, path: str | Path) -> None:
    """Refuse a result with errors, whose covariances no table has a place for.

    Raises
    ------
    InputError
        It has.
    """
    if "spread" in held.attributes:
        raise InputError("covariances have no place in a table", where=str(path), mend="write HDF5 or netCDF")


def as_text(held: StoredYields) -> dict[str, str]:
    """Return attributes as text: lists as lines, numbers with all their digits."""
    return {
        name: "\n".join(value) if isinstance(value, tuple) else str(value)
        for name, value in held.attributes.items()
    }


def from_text(told: Mapping[str, Any]) -> dict[str, Any]:
    """Return attributes from what `as_text` made of them."""
    out: dict[str, Any] = dict(told)
    for name in ("sets", "set_checksums", "policies", "notes"):
        if name in out:
            out[name] = tuple(out[name].split("\n")) if out[name] else ()
    for name, kind in (("format_version", int), ("error_asked", float), ("error_checked", float)):
        if name in out:
            out[name] = kind(out[name])
    return out
