"""VOTable, the XML form of the virtual observatory."""

from __future__ import annotations

import io
import re
import warnings

from ..errors import InputError
from .common import Options, unreadable
from .numbers import sheet_of_arrays
from .sheet import Sheet
from .source import Source

# what could reach outside the file, or blow up inside it
_REFUSED = (
    (re.compile(rb"<!\s*(DOCTYPE|ENTITY)", re.IGNORECASE), "a document type or entities"),
    (
        re.compile(rb"<[\w:]*STREAM\b[^>]*\b(href|encoding\s*=\s*.gzip)", re.IGNORECASE),
        "a stream from elsewhere",
    ),
    (re.compile(rb"\x00"), "an encoding other than UTF-8"),
)


def read(source: Source, options: Options) -> list[Sheet]:
    """Read the tables of a VOTable.

    Parameters
    ----------
    source : Source
    options : Options
        `table` picks one by its ID, name, or number from 1; `columns` renames.

    Returns
    -------
    list of Sheet
        One for each table. Cells are the shortest text that gives back the number.

    Raises
    ------
    InputError
        Damaged, or with entities or links to other places, which are refused.
    """
    for pattern, what in _REFUSED:
        if pattern.search(source.data):
            raise InputError(
                f"a VOTable with {what} is refused", where=source.name, mend="save it as TABLEDATA"
            )
    from astropy.io.votable import parse

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            tables = [
                (one.ID or "", one.name or "", one.to_table(use_names_over_ids=True))
                for one in parse(io.BytesIO(source.data), verify="ignore").iter_tables()
            ]
    except Exception as error:  # XML, units and types each raise their own kinds
        raise unreadable(error, source.name, "votable") from None
    sheets = []
    for number, (id, name, table) in enumerate(tables, start=1):
        if options.table and options.table not in (id, name, str(number)):
            continue
        where = source.name if len(tables) == 1 else f"{source.name} table {name or id or number}"
        sheets.append(sheet_of_arrays(table, source, where, options, heading=name or id))
    if not sheets:
        what = f"no table {options.table!r}" if options.table else "no table"
        names = ", ".join(name or id or str(i) for i, (id, name, _) in enumerate(tables, 1))
        raise InputError(what, where=source.name, mend=f"it has {names}" if tables else "check the file")
    return sheets
