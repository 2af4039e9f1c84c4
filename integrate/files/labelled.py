"""HDF5 files whose datasets say what they hold: units, descriptions, dimensions, text of fixed length."""

from __future__ import annotations

import os
import secrets
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.whole import replace_file

if TYPE_CHECKING:
    import h5py

#: format 1.8 (2008) and later: older ones can't hold attributes over 64 kB, such as a long population
_VERSIONS = ("v108", "v108")


@dataclass(frozen=True)
class Entry:
    """A dataset of a file: its dimensions, its unit, and what it holds."""

    dims: tuple[str, ...]
    units: str
    description: str


@contextmanager
def in_memory(path: str | Path) -> Iterator[h5py.File]:
    """Give an HDF5 file to fill, and write it whole when it is full; the same content gives the same bytes.

    Raises
    ------
    InputError
        The file can't be written.
    """
    import h5py

    with h5py.File("memory", "w", driver="core", backing_store=False, libver=_VERSIONS) as file:
        yield file
        file.flush()
        image = file.id.get_file_image()
    replace_file(path, image)


@contextmanager
def beside(path: str | Path) -> Iterator[h5py.File]:
    """Give an HDF5 file beside a path to fill, and put it in place when it is full: for large ones.

    Raises
    ------
    InputError
        The file can't be written.
    """
    import h5py

    try:
        target = Path(os.path.realpath(path))
        if target.exists() and not target.is_file():
            raise InputError("can't be written: not an ordinary file", where=str(path), mend="name a file")
        part = target.with_name(f".{target.name[:100]}.{secrets.token_hex(6)}.part")
        try:
            with h5py.File(part, "w", libver=_VERSIONS) as file:
                yield file
            if target.exists():
                part.chmod(target.stat().st_mode & 0o777)
            os.replace(part, target)
        except BaseException:
            part.unlink(missing_ok=True)
            raise
    except OSError as error:
        reason = os.strerror(error.errno) if error.errno else str(error)[:200]
        raise InputError(f"can't be written: {reason}", where=str(path), mend="name another place") from None


def put(file: h5py.File, name: str, values: Any, entry: Entry, **how: Any) -> None:
    """Make a dataset, or a dimension scale where its only dimension is itself.

    Parameters
    ----------
    file : h5py.File
        Scales of the dimensions are attached where they are in it already.
    name : str
    values : array_like, or tuple of str
    entry : Entry
    **how
        As `h5py.Group.create_dataset` takes it.
    """
    data, kind = fixed(values) if isinstance(values, tuple) else (values, None)
    label(file.create_dataset(name, data=data, dtype=kind, track_times=False, **how), entry)


def label(item: h5py.Dataset, entry: Entry) -> None:
    """Attach its unit, description and dimensions to a dataset."""
    attach(item, "units", entry.units)
    attach(item, "description", entry.description)
    if entry.dims == (item.name[1:],):
        item.make_scale(item.name[1:])
        return
    for axis, dim in enumerate(entry.dims):
        item.dims[axis].label = dim
        if dim in item.file:
            item.dims[axis].attach_scale(item.file[dim])


def fixed(values: Sequence[str]) -> tuple[NDArray[Any], Any]:
    """Return text as an array of fixed length, and its HDF5 type."""
    import h5py

    encoded = [value.encode() for value in values]
    length = max([1, *map(len, encoded)])
    encoding = "ascii" if all(value.isascii() for value in values) else "utf-8"
    kind = h5py.string_dtype(encoding, length)
    return np.array(encoded, dtype=kind), kind


def attach(item: h5py.File | h5py.Dataset, name: str, value: Any) -> None:
    """Attach a number, text or a tuple of text, which C and Fortran read without freeing memory."""
    if isinstance(value, int | float):
        item.attrs[name] = value
        return
    data, kind = fixed((value,) if isinstance(value, str) else value)
    item.attrs.create(name, data[0] if isinstance(value, str) else data, dtype=kind)


def plain(value: Any) -> Any:
    """Return an attribute or a list of names as text, tuple of text, or number."""
    if isinstance(value, bytes):
        return value.decode("utf-8")
    if isinstance(value, np.ndarray) and value.dtype.kind in "SO":
        return tuple(plain(one) for one in value.tolist())
    if isinstance(value, np.ndarray):
        return value.tolist()
    return value.item() if isinstance(value, np.generic) else value
