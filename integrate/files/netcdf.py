"""Population yields in netCDF, the classic format with 64-bit offsets, which every netCDF library reads."""

from __future__ import annotations

import io
from pathlib import Path
from typing import Any

import numpy as np

from steelyard.yields.errors import InputError
from steelyard.yields.whole import replace_file

from .layout import SCALES, StoredYields, gathered

#: lists of text are lines of one attribute
_LISTS = ("sets", "set_checksums", "policies", "notes")


def write_netcdf(held: StoredYields, path: str | Path) -> None:
    """Write what a file holds, whole or not at all.

    Names of sources, species, remnants and events are two-dimensional variables of characters,
    padded with nulls; coordinate variables and their dimensions have the same name.

    Raises
    ------
    InputError
        The file can't be written.
    """
    from scipy.io import netcdf_file

    out = io.BytesIO()
    file = netcdf_file(out, "w", version=2)
    for name, value in held.attributes.items():
        setattr(file, name, _encoded("\n".join(value) if isinstance(value, tuple) else value))
    # a dimension of no length would be one that can grow
    lengths = {name: len(values) for name, values in held.scales.items() if len(values)}
    for name, length in lengths.items():
        file.createDimension(name, length)
    for name, values in (held.scales | held.arrays).items():
        entry = SCALES.get(name) or held.entries[name]
        if any(dim not in lengths for dim in entry.dims):
            continue
        dims, data = entry.dims, np.asarray(values)
        if isinstance(values, tuple):
            encoded = np.array([one.encode() for one in values])
            width = f"{name}_letter"
            file.createDimension(width, encoded.itemsize)
            dims, data = (name, width), encoded.view("S1").reshape(len(values), -1)
        # whole numbers of the classic format are signed
        data = data.astype("i1") if data.dtype == np.uint8 else data
        made = file.createVariable(name, data.dtype, dims)
        made[:] = data
        made.units, made.long_name = _encoded(entry.units), _encoded(entry.description)
    file.flush()
    replace_file(path, out.getvalue())


def read_netcdf(path: str | Path) -> StoredYields:
    """Read a file that `write_netcdf` wrote.

    Raises
    ------
    InputError
        It isn't one.
    """
    from scipy.io import netcdf_file

    where = str(path)
    mend = "give a file as `steelyard handoff` wrote it"
    try:
        with netcdf_file(path, "r", mmap=False) as file:
            told = {name: _decoded(value) for name, value in file._attributes.items()}
            held = {name: np.array(variable[:]) for name, variable in file.variables.items()}
    except (OSError, KeyError, ValueError, TypeError, IndexError, AttributeError, MemoryError) as error:
        raise InputError(f"the file can't be read: {str(error)[:200]}", where=where, mend=mend) from None
    for name in _LISTS:
        if name in told:
            told[name] = tuple(told[name].split("\n")) if told[name] else ()
    scales: dict[str, Any] = {}
    for name in SCALES:
        values = held.pop(name, np.array([]))
        if values.dtype.kind == "S":
            joined = np.ascontiguousarray(values).view(f"S{values.shape[-1]}").ravel()
            scales[name] = tuple(one.decode() for one in joined.tolist())
        else:
            scales[name] = values.astype(float)
    arrays = {
        name: values.astype("u1" if values.dtype.kind == "i" else "f8") for name, values in held.items()
    }
    lengths = {name: len(values) for name, values in scales.items()}
    for name, dim in (("remnants", "remnant_kind"), ("events", "event"), ("event_rates", "event")):
        if not lengths[dim]:
            arrays.setdefault(name, np.zeros((lengths["metallicity"], lengths["time"], 0)))
    return gathered(told, scales, arrays, where)


def _encoded(value: Any) -> Any:
    if isinstance(value, str):
        return value.encode()
    # a plain float would be halved in width
    return np.float64(value) if isinstance(value, float) else value


def _decoded(value: Any) -> Any:
    if isinstance(value, bytes):
        return value.decode("utf-8")
    found = np.asarray(value).ravel()
    return found[0].item() if found.size == 1 else found.tolist()
