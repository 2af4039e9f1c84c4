"""Enhanced CSV, astropy's text form of a table with units and descriptions."""

from __future__ import annotations

import warnings
from dataclasses import replace

from ..errors import InputError
from .common import Options, ascii_table, from_table, unreadable
from .sheet import Sheet
from .source import Source
from .text import NO_COMMENT


def read(source: Source, options: Options) -> list[Sheet]:
    """Read an ECSV table; its cells stay as they are printed.

    Parameters
    ----------
    source : Source
    options : Options
        `columns` renames.

    Returns
    -------
    list of Sheet
        One; text in the table's own metadata goes to `meta`.

    Raises
    ------
    InputError
    """
    from astropy.table import Table

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            # only for what the header declares: here the library checks names, types and units
            whole = Table.read(source.lines, format="ascii.ecsv")
    except Exception as error:  # YAML, units and types each raise their own kinds
        raise unreadable(error, source.name, "ecsv") from None
    body = [(i + 1, line) for i, line in enumerate(source.lines) if line.strip() and not line.startswith("#")]
    comma = any("delimiter: ','" in line for line in source.lines if line.startswith("#"))
    table = ascii_table(
        [line for _, line in body],
        source.name,
        format="basic",
        delimiter="," if comma else " ",
        comment=NO_COMMENT,
        fast_reader=False,
    )
    if table.colnames != whole.colnames:
        raise InputError(
            "its columns don't stand as its header says", where=source.name, mend="use plain columns"
        )
    for name in table.colnames:
        table[name].unit, table[name].description = whole[name].unit, whole[name].description
    meta = {str(k): v for k, v in whole.meta.items() if isinstance(v, str)}
    sheet = from_table(table, source, columns=options.columns, lines=tuple(i for i, _ in body[1:]))
    return [replace(sheet, meta=meta)]
