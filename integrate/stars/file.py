"""A star table in HDF5: written whole or not at all, checked when it is read."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path
from typing import Any

import numpy as np

from steelyard.yields.errors import InputError

from ..files.labelled import attach, in_memory, plain
from .table import Late, StarTable

FORMAT = "steelyard star table"
FORMAT_VERSION = 1

#: datasets of a file: name, unit, what they hold
DATASETS = {
    "metallicity": ("1", "mass fraction of metals of the rows: four for each panel, then one for each point"),
    "edge": ("1", "metallicities between which the panels lie"),
    "straight": ("1", "1 where a panel is interpolated with 1, Z, Z^2, Z^3; else with 1, log Z, Z, Z log Z"),
    "point": ("1", "row that holds at an edge itself, -1 where the panels meet there"),
    "mass": ("Msun", "initial masses whose deaths bound the cells"),
    "log_age": ("1", "natural log of the lifetimes of these masses in yr, by row"),
    "step": (
        "Msun/Msun",
        "D by row, cell, column: a share x of a cell's log age ejects D x + Q x (1 - x)",
    ),
    "bend": ("Msun/Msun", "Q by row, cell and column"),
    "owner": ("1", "position in the list of sources of who ejects, by row and cell"),
}
LATE = {
    "log_age": ("1", "natural log of ages in yr between which the fraction is a straight line"),
    "fraction": ("1", "fraction of the events up to them"),
    "rows": ("Msun/Msun", "what all events of 1 Msun formed eject, by row (or the same for all) and column"),
}
_NAMES = ("species", "sources", "events")
_NUMBERS = ("error", "checked", "until")
_MEND = "give a file that a star table was saved to"


def write_table(table: StarTable, path: str | Path) -> None:
    """Write a star table, see `StarTable.save`."""
    arrays = _arrays(table)
    told = table.attributes | {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "convention": table.convention,
        "late": tuple(table.late),
        "checksum": _checksum(table, arrays),
    }
    told |= {name: getattr(table, name) for name in (*_NUMBERS, *_NAMES)}
    with in_memory(path) as file:
        for name, value in told.items():
            attach(file, name, value)
        for name, values in arrays.items():
            unit, description = (LATE if "/" in name else DATASETS)[name.rpartition("/")[2]]
            dataset = file.create_dataset(name, data=values, track_times=False)
            attach(dataset, "units", unit)
            attach(dataset, "description", description)


def read_table(path: str | Path) -> StarTable:
    """Read a star table, see `StarTable.load`."""
    import h5py

    where = str(path)
    if not Path(path).is_file():
        raise InputError("there is no such file", where=where, mend=_MEND)
    try:
        with h5py.File(path, "r") as file:
            held = {name: plain(value) for name, value in file.attrs.items()}
            if held.get("format") != FORMAT:
                raise InputError("this HDF5 file holds no star table", where=where, mend=_MEND)
            if held["format_version"] != FORMAT_VERSION:
                raise InputError(
                    f"format_version is {held['format_version']!r}, not {FORMAT_VERSION}",
                    where=where,
                    mend="read it with the version of steelyard that wrote it, or make it again",
                )
            arrays = {name: file[name][()] for name in DATASETS}
            late = {
                one: Late(*(file[f"late/{i}/{name}"][()] for name in LATE))
                for i, one in enumerate(held.pop("late"))
            }
        numbers = {name: float(held.pop(name)) for name in _NUMBERS}
        names = {name: held.pop(name) for name in _NAMES}
        checksum, convention = held.pop("checksum"), held.pop("convention")
        for name in ("format", "format_version"):
            held.pop(name)
        arrays["straight"] = arrays["straight"].astype(bool)
        table = StarTable(**names, **numbers, **arrays, convention=convention, late=late, attributes=held)
        fits = _checksum(table, _arrays(table)) == checksum
    except InputError:
        raise
    except (OSError, KeyError, ValueError, TypeError, RuntimeError, IndexError) as error:
        raise InputError(f"the file can't be read: {str(error)[:200]}", where=where, mend=_MEND) from None
    if not fits:
        raise InputError("the figures don't match their checksum", where=where, mend="make the table again")
    return table


def _arrays(table: StarTable) -> dict[str, np.ndarray[Any, Any]]:
    found = {name: np.asarray(getattr(table, name)) for name in DATASETS}
    found["straight"] = found["straight"].astype(np.uint8)
    for i, late in enumerate(table.late.values()):
        found |= {f"late/{i}/{name}": getattr(late, name) for name in LATE}
    return found


def _checksum(table: StarTable, arrays: dict[str, np.ndarray[Any, Any]]) -> str:
    """SHA-256 over the figures, their shapes, and what their columns are."""
    told = {name: list(getattr(table, name)) for name in _NAMES}
    told |= {name: getattr(table, name) for name in _NUMBERS}
    told |= {"convention": table.convention, "late": list(table.late)}
    digest = hashlib.sha256(json.dumps(told, sort_keys=True).encode())
    for name in sorted(arrays):
        values = np.ascontiguousarray(arrays[name])
        digest.update(f"{name} {values.shape} {values.dtype.str} ".encode())
        digest.update(values.tobytes())
    return digest.hexdigest()
