"""The bytes of a library file: one yield set in HDF5, its figures both as printed and in Msun."""

from __future__ import annotations

import io
import json
from datetime import UTC, datetime
from importlib.metadata import version
from typing import TYPE_CHECKING, Any

import numpy as np

from .errors import InputError

if TYPE_CHECKING:
    import h5py

    from .layouting import Reading, Table

FORMAT = "steelyard yield set, version 1"


def encode(reading: Reading) -> bytes:
    """Write a reading as the bytes of a library file.

    Parameters
    ----------
    reading : Reading

    Returns
    -------
    bytes
    """
    import h5py

    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as file:
        file.attrs["format"] = FORMAT
        file.attrs["created"] = datetime.now(UTC).isoformat(timespec="seconds")
        file.attrs["version"] = version("steelyard")
        file.attrs["checksum"] = reading.checksum
        file.attrs["id"] = reading.id
        # texts of any length: attributes hold 64 kB at most
        for key, value in (
            ("info", json.dumps(reading.info, sort_keys=True)),
            ("layout", reading.layout),
            ("sources", json.dumps(reading.sources)),
            ("warnings", json.dumps(reading.warnings)),
            ("tables", json.dumps(list(reading.tables))),
        ):
            file.create_dataset(key, data=value, dtype=h5py.string_dtype())
        for name, table in reading.tables.items():
            _write_table(file.create_group(name), table)
    return buffer.getvalue()


def _write_table(group: h5py.Group, table: Table) -> None:
    shape = (len(table.text), len(table.columns))
    text = np.array([[c.encode() for c in row] for row in table.text], dtype=bytes).reshape(shape)
    packing = {"compression": "gzip", "chunks": shape} if text.size else {}
    group.create_dataset("columns", data=np.array([c.encode() for c in table.columns], dtype=bytes))
    group.create_dataset(
        "converted", data=np.array([c in table.converted for c in table.columns], dtype=bool)
    )
    group["columns"].attrs["description"] = "names of the columns"
    group["converted"].attrs["description"] = "whether the figures of a column aren't the printed numbers"
    group.create_dataset("printed", data=text, **packing)
    group["printed"].attrs["description"] = "cells as the source prints them, a row a model"
    group.create_dataset("figures", data=table.figures, **packing)
    group["figures"].attrs["description"] = "the same in Msun, yr and mass fractions; NaN for words"


def _read_table(file: h5py.File, name: str) -> Table:
    import h5py

    from .layouting import Table
    from .readers.hdf5 import checked

    if not isinstance(file.get(name, getlink=True), h5py.HardLink):
        raise ValueError(f"table {name} is missing")
    group = {
        key: checked(file[name], key, name)[()] for key in ("columns", "converted", "printed", "figures")
    }
    columns = tuple(c.decode() for c in group["columns"].tolist())
    text = tuple(tuple(c.decode() for c in row) for row in group["printed"].tolist())
    converted = frozenset(c for c, yes in zip(columns, group["converted"], strict=True) if yes)
    figures = np.asarray(group["figures"], dtype=float)
    if figures.shape != (len(text), len(columns)):
        raise ValueError(f"table {name} has shape {figures.shape}")
    return Table(columns, text, figures, converted)


def _attribute(file: h5py.File, key: str) -> str:
    from .readers.hdf5 import checked

    if key in file.attrs:
        value = file.attrs[key]
        return value.decode() if isinstance(value, bytes) else str(value)
    value = checked(file, key, "")[()]
    return value.decode() if isinstance(value, bytes) else str(value)


def decode(data: bytes, where: str) -> tuple[dict[str, Any], Reading]:
    """Read the bytes of a library file.

    Parameters
    ----------
    data : bytes
    where : str
        Its path, for errors.

    Returns
    -------
    facts : dict
        Checksum, date, version.
    reading : Reading

    Raises
    ------
    InputError
        It is no such file, or its figures don't match its checksum.
    """
    import h5py

    from .layouting import Reading

    mend = "admit the set again, or remove the file"
    try:
        with h5py.File(io.BytesIO(data), "r") as file:
            if _attribute(file, "format") != FORMAT:
                raise InputError("this is no yield set that steelyard kept")
            facts = {key: _attribute(file, key) for key in ("checksum", "created", "version")}
            info = json.loads(_attribute(file, "info"))
            sources = tuple((str(a), str(b)) for a, b in json.loads(_attribute(file, "sources")))
            notes = tuple(str(w) for w in json.loads(_attribute(file, "warnings")))
            tables = {name: _read_table(file, name) for name in json.loads(_attribute(file, "tables"))}
            found = Reading(_attribute(file, "id"), info, tables, sources, _attribute(file, "layout"), notes)
            digest = found.checksum
    except InputError as error:
        raise InputError(error.what, where=where, mend=mend) from None
    except Exception as error:  # damaged files raise half a dozen kinds
        raise InputError(f"damaged: {' '.join(str(error).split())[:120]}", where=where, mend=mend) from None
    if digest != facts["checksum"]:
        raise InputError("the figures don't match their checksum", where=where, mend=mend)
    return facts, found
