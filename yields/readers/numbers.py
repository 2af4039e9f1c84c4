"""Binary columns as text: the shortest digits that give back each number."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from ..errors import InputError
from .common import Options, renamed
from .sheet import Sheet
from .source import LARGEST, Source


def cells_of(array: Any, where: str) -> list[str]:
    """Turn a column into text; masked and NaN become empty.

    Parameters
    ----------
    array : array_like, shape (n,)
        Numbers, text, or bytes.
    where : str
        File and column, for the error.

    Returns
    -------
    list of str

    Raises
    ------
    InputError
        The column holds something else, such as Python objects.

    Examples
    --------
    >>> cells_of(np.array([1.5e-4, np.nan]), "x"), cells_of(np.array([0.1], dtype="f4"), "x")
    (['0.00015', ''], ['0.1'])
    """
    masked = np.ma.getmaskarray(array) if np.ma.isMaskedArray(array) else None
    data = np.asarray(np.ma.getdata(array) if masked is not None else array)
    if data.ndim != 1:
        raise InputError(f"holds cells of shape {data.shape[1:]}", where=where, mend="use one figure a cell")
    if data.dtype.kind == "O":
        if not all(isinstance(v, (str, bytes)) or v is None for v in data):
            raise InputError("holds objects, not figures or text", where=where, mend="leave the column out")
        cells = [
            "" if v is None else v.decode("utf-8", "replace") if isinstance(v, bytes) else v for v in data
        ]
    elif data.dtype.kind == "S":
        cells = [v.decode("utf-8", "replace") for v in data.tolist()]
    elif data.dtype.kind in "Uiub":
        cells = [str(v) for v in data.tolist()]
    elif data.dtype.kind == "f":
        # numpy prints the shortest digits for the type, so that a 32-bit 0.1 stays 0.1
        cells = [str(v) if np.isfinite(v) else "" for v in data]
    else:
        raise InputError(f"holds {data.dtype}, not figures or text", where=where, mend="leave it out")
    if masked is not None:
        cells = ["" if m else c for c, m in zip(cells, masked, strict=True)]
    return [c.strip() for c in cells]


def sheet_of_arrays(table: Any, source: Source, where: str, options: Options, heading: str = "") -> Sheet:
    """Make a Sheet of an astropy table that was read from a binary form."""
    names = renamed(tuple(table.colnames), options.columns, where)
    if sum(np.asarray(table[c]).nbytes for c in table.colnames) > LARGEST:
        raise InputError(f"holds more than {LARGEST // 2**20} MB", where=where, mend="cut out the table")
    cells = [cells_of(table[c], f"{where} column {c}") for c in table.colnames]
    sheet = Sheet(names, tuple(zip(*cells, strict=True)), where, source.name, heading=heading)
    pairs = list(zip(names, table.colnames, strict=True))
    units = {new: str(table[old].unit) for new, old in pairs if table[old].unit}
    notes = {new: str(table[old].description) for new, old in pairs if table[old].description}
    return replace(sheet, units=units, notes=notes)
