"""Population yields in ECSV and CSV: a row for each metallicity, age, source and species.

The accounts of a source, and of the whole population, are repeated on every row they belong to.
"""

from __future__ import annotations

import io
import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from steelyard.yields.errors import InputError
from steelyard.yields.whole import replace_file

from .columns import NAMES, ROWS, UNITS, as_text, filled, from_text, unreadable
from .layout import DATASETS, SCALES, Array, StoredYields, gathered

if TYPE_CHECKING:
    from astropy.table import Table

#: dimensions that are a row each
_LONG = (*ROWS, "source", "species")


def write_ecsv(held: StoredYields, path: str | Path) -> None:
    """Write a long table in ECSV, its origin in the header.

    Raises
    ------
    InputError
        The file can't be written.
    """
    table, text = _long(held), io.StringIO()
    table.meta = {name: list(v) if isinstance(v, tuple) else v for name, v in held.attributes.items()}
    table.meta |= {dim: list(held.scales[dim]) for dim in NAMES}
    table.write(text, format="ascii.ecsv")
    replace_file(path, text.getvalue().encode())


def write_long_csv(held: StoredYields, path: str | Path) -> None:
    """Write a long table in CSV, its origin as JSON in comment lines above it.

    Raises
    ------
    InputError
        The file can't be written.
    """
    told = json.dumps(as_text(held) | {dim: held.scales[dim] for dim in NAMES}, indent=1)
    text = io.StringIO()
    text.writelines(f"# {line}\n" for line in told.splitlines())
    _long(held).to_pandas().to_csv(text, index=False, lineterminator="\n")
    replace_file(path, text.getvalue().encode())


def read_ecsv(path: str | Path) -> StoredYields:
    """Read a file that `write_ecsv` wrote.

    Raises
    ------
    InputError
        It isn't one.
    """
    from astropy.table import Table

    try:
        table = Table.read(path, format="ascii.ecsv")
        told = {name: tuple(v) if isinstance(v, list) else v for name, v in table.meta.items()}
        return _from_long(table, told, str(path))
    except InputError:
        raise
    except Exception as error:  # astropy raises what its parts raise
        raise unreadable(error, path) from None


def read_long_csv(path: str | Path) -> StoredYields:
    """Read a file that `write_long_csv` wrote.

    Raises
    ------
    InputError
        It isn't one.
    """
    from astropy.table import Table

    try:
        told = []
        with Path(path).open(encoding="utf-8") as file:
            for line in file:
                if not line.startswith("# "):
                    break
                told.append(line[2:])
        table = Table.read(path, format="ascii.csv", comment="#")
        return _from_long(table, from_text(json.loads("".join(told))), str(path))
    except InputError:
        raise
    except Exception as error:  # astropy raises what its parts raise
        raise unreadable(error, path) from None


def _long(held: StoredYields) -> Table:
    """A row for each metallicity, age, source and species."""
    from astropy.table import Table

    shape = held.arrays["total"].shape
    table = Table()

    def add(name: str, values: Array, dims: tuple[str, ...], units: str) -> None:
        spread = tuple(shape[i] if dim in dims else 1 for i, dim in enumerate(_LONG))
        table[name] = np.broadcast_to(values.reshape(spread), shape).ravel()
        table[name].unit = UNITS.get(units)

    for dim in _LONG:
        add(dim, np.asarray(held.scales[dim]), (dim,), SCALES[dim].units)
    for name, entry in DATASETS.items():
        last = entry.dims[-1]
        if last in _LONG:
            add(name, held.arrays[name], entry.dims, entry.units)
        else:
            for k, kind in enumerate(held.scales[last]):
                add(_column(name, kind), held.arrays[name][..., k], entry.dims, entry.units)
    return table


def _from_long(table: Table, told: dict[str, Any], where: str) -> StoredYields:
    names = {dim: tuple(told.pop(dim)) for dim in NAMES}
    z, t = (np.unique(np.asarray(table[name], dtype=float)) for name in ROWS)
    shape = (len(z), len(t), len(names["source"]), len(names["species"]))

    def taken(name: str, dims: tuple[str, ...]) -> Array:
        at = tuple(slice(None) if dim in dims else 0 for dim in _LONG)
        return np.asarray(table[name]).reshape(shape)[at]

    arrays: dict[str, Array] = {}
    for name, entry in DATASETS.items():
        last = entry.dims[-1]
        if last in _LONG:
            kind = float if entry.dims[0] == "metallicity" else np.uint8
            arrays[name] = taken(name, entry.dims).astype(kind)
        elif names[last]:
            parts = [taken(_column(name, one), entry.dims) for one in names[last]]
            arrays[name] = np.stack(parts, axis=-1).astype(float)
    return gathered(told, {"metallicity": z, "time": t} | names, filled(arrays, z, t, names), where)


def _column(name: str, kind: str) -> str:
    return f"{name}_{kind}".replace(" ", "_").replace("-", "_")
