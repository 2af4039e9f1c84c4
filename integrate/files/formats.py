"""The formats of files of population yields, a line each."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

from steelyard.yields.errors import InputError, nearest

from .columns import refuse_errors
from .hdf5 import read_hdf5, write_stored
from .layout import StoredYields
from .long import read_ecsv, read_long_csv, write_ecsv, write_long_csv
from .netcdf import read_netcdf, write_netcdf
from .wide import read_fits, read_votable, write_fits, write_votable

#: by name: how a file is written, how it is read, and what it begins with
FORMATS: dict[str, tuple[Callable[[StoredYields, Any], None], Callable[[Any], StoredYields], bytes]] = {
    "hdf5": (write_stored, read_hdf5, b"\x89HDF\r\n\x1a\n"),
    "netcdf": (write_netcdf, read_netcdf, b"CDF\x02"),
    "fits": (write_fits, read_fits, b"SIMPLE  ="),
    "votable": (write_votable, read_votable, b"<?xml"),
    "ecsv": (write_ecsv, read_ecsv, b"# %ECSV"),
    "csv": (write_long_csv, read_long_csv, b"# {"),
}


def format_of(path: str | Path) -> str:
    """Return the format that a file begins like, or an empty text.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    str
        A name in `FORMATS`, whatever the ending of the file's name.
    """
    if not Path(path).is_file():  # a pipe could not be read a second time
        return ""
    try:
        with Path(path).open("rb") as file:
            head = file.read(16)
    except OSError:
        return ""
    return next((name for name, (_, _, start) in FORMATS.items() if head.startswith(start)), "")


def read_stored(path: str | Path) -> StoredYields:
    """Read a file of population yields in any of the formats.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    StoredYields

    Raises
    ------
    InputError
        It is none.
    """
    # a file of none of them gets the message of the first
    return FORMATS[format_of(path) or "hdf5"][1](path)


def write_as(held: StoredYields, path: str | Path, form: str) -> None:
    """Write what a file holds, whole or not at all.

    Parameters
    ----------
    held : StoredYields
    path : str or Path
        A file there is replaced.
    form : str
        A name in `FORMATS`.

    Raises
    ------
    InputError
        A form that isn't known, or a file that can't be written.
    """
    if form not in FORMATS:
        raise InputError(f"format {form!r} isn't known", mend=nearest(form, FORMATS))
    if form not in ("hdf5", "netcdf"):
        refuse_errors(held, path)
    FORMATS[form][0](held, path)
