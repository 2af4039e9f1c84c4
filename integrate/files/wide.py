"""Population yields in FITS and VOTable: a row for each metallicity and age, arrays in the cells."""

from __future__ import annotations

import io
import textwrap
import warnings
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from steelyard.yields.errors import InputError
from steelyard.yields.whole import replace_file

from .columns import NAMES, ROWS, UNITS, as_text, filled, from_text, unreadable
from .labelled import Entry
from .layout import DATASETS, SCALES, Array, StoredYields, gathered

if TYPE_CHECKING:
    from astropy.table import Table

_TABLES = ("YIELDS", "AXES", "ORIGIN")


def write_fits(held: StoredYields, path: str | Path) -> None:
    """Write a binary table YIELDS, its names in AXES, and its origin line by line in ORIGIN.

    Raises
    ------
    InputError
        The file can't be written.
    """
    from astropy.io import fits

    units = [fits.PrimaryHDU()]
    for name, table in _tables(held).items():
        units.append(fits.table_to_hdu(table))
        units[-1].name = name
    for i, (_, entry) in enumerate(_columns(held), start=1):
        units[1].header.comments[f"TTYPE{i}"] = _shortened(entry)
    out = io.BytesIO()
    fits.HDUList(units).writeto(out)
    replace_file(path, out.getvalue())


def read_fits(path: str | Path) -> StoredYields:
    """Read a file that `write_fits` wrote.

    Raises
    ------
    InputError
        It isn't one.
    """
    from astropy.io import fits
    from astropy.table import Table

    try:
        # what is cut off or spoilt is told of in the error
        with warnings.catch_warnings(action="ignore"), fits.open(path, memmap=False) as file:
            return _from_tables({name: Table(file[name].data) for name in _TABLES}, str(path))
    except InputError:
        raise
    except Exception as error:  # astropy raises what its parts raise
        raise unreadable(error, path) from None


def write_votable(held: StoredYields, path: str | Path) -> None:
    """Write tables YIELDS, AXES and ORIGIN as `write_fits` does, in BINARY2.

    Raises
    ------
    InputError
        The file can't be written.
    """
    from astropy.io.votable.tree import Resource, TableElement, VOTableFile

    made, resource = VOTableFile(), Resource()
    # the tables' own text is packed
    made.description = f"{held.attributes['format']}, steelyard {held.attributes['steelyard_version']}"
    made.resources.append(resource)
    for name, table in _tables(held).items():
        one = TableElement.from_table(made, table)
        one.name = name
        for field in one.fields:
            # the standard has the index first that runs fastest, astropy 8 writes the slowest first
            if table[field.name].ndim > 2:
                field.arraysize = "x".join(str(n) for n in reversed(table[field.name].shape[1:]))
        resource.tables.append(one)
    for field, (_, entry) in zip(resource.tables[0].fields, _columns(held), strict=True):
        field.description = entry.description
    out = io.BytesIO()
    made.to_xml(out, tabledata_format="binary2")
    replace_file(path, out.getvalue())


def read_votable(path: str | Path) -> StoredYields:
    """Read a file that `write_votable` wrote.

    Raises
    ------
    InputError
        It isn't one.
    """
    from astropy.io.votable import parse

    try:
        with warnings.catch_warnings(action="ignore"):
            found = {table.name: table.to_table() for table in parse(path, verify="ignore").iter_tables()}
        return _from_tables(found, str(path))
    except InputError:
        raise
    except Exception as error:  # astropy raises what its parts raise
        raise unreadable(error, path) from None


def _tables(held: StoredYields) -> dict[str, Table]:
    """The figures, the names along their axes, and where they come from, line by line."""
    from astropy.table import Table

    axes = [(dim, i, _ascii(name)) for dim in NAMES for i, name in enumerate(held.scales[dim])]
    lines = [(name, _ascii(line)) for name, text in as_text(held).items() for line in text.split("\n")]
    return {
        "YIELDS": _wide(held),
        "AXES": Table(rows=axes, names=("axis", "position", "name")),
        "ORIGIN": Table(rows=lines, names=("name", "line")),
    }


def _from_tables(tables: Mapping[str, Table], where: str) -> StoredYields:
    axes, origin = tables["AXES"], tables["ORIGIN"]
    told: dict[str, str] = {}
    for name, line in zip(_words(origin["name"]), _words(origin["line"]), strict=True):
        told[name] = f"{told[name]}\n{line}" if name in told else line
    found = list(zip(_words(axes["axis"]), _words(axes["name"]), strict=True))
    names = {dim: tuple(name for axis, name in found if axis == dim) for dim in NAMES}
    return _from_wide(tables["YIELDS"], from_text(told), names, where)


def _ascii(text: str) -> str:
    """Text as FITS can hold it."""
    return text.encode("unicode_escape").decode("ascii")


def _words(column: Any) -> list[str]:
    return [str(one).encode("ascii").decode("unicode_escape") for one in column.tolist()]


def _columns(held: StoredYields) -> Iterator[tuple[str, Entry]]:
    yield from ((name, SCALES[name]) for name in ROWS)
    yield from ((name, entry) for name, entry in DATASETS.items() if held.arrays[name].size)


def _shortened(entry: Entry) -> str:
    """A description that fits its card."""
    return textwrap.shorten(entry.description.split(";")[0], 47, placeholder="")


def _wide(held: StoredYields) -> Table:
    """A row for each metallicity and age, arrays in the cells."""
    from astropy.table import Table

    rows = len(held.metallicity) * len(held.ages)
    table = Table()
    for name, entry in _columns(held):
        if name in ROWS:
            shape = (-1, 1) if name == "metallicity" else (1, -1)
            values = np.broadcast_to(
                held.scales[name].reshape(shape), (len(held.metallicity), len(held.ages))
            )
            values = values.ravel()
        elif entry.dims[0] == "metallicity":
            values = held.arrays[name].reshape(rows, *held.arrays[name].shape[2:])
        else:
            values = np.broadcast_to(held.arrays[name], (rows, *held.arrays[name].shape)).astype(np.int16)
        table[name] = values
        table[name].unit = UNITS.get(entry.units)
    return table


def _from_wide(table: Table, told: dict[str, Any], names: Mapping[str, Any], where: str) -> StoredYields:
    columns = {name: np.asarray(table[name]) for name in table.colnames}
    z, t = (np.unique(columns[name].astype(float)) for name in ROWS)
    arrays: dict[str, Array] = {}
    for name, entry in DATASETS.items():
        if name in columns:
            shape = (len(z), len(t), *columns[name].shape[1:])
            values = columns[name].reshape(shape)
            by_row = entry.dims[0] == "metallicity"
            arrays[name] = values.astype(float) if by_row else values[0, 0].astype(np.uint8)
    return gathered(told, {"metallicity": z, "time": t} | dict(names), filled(arrays, z, t, names), where)
