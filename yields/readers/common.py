"""What several readers share: options, cleaning of lines, and calls into astropy that keep cells as text."""

from __future__ import annotations

import re
import warnings
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from ..errors import InputError
from .sheet import Sheet
from .source import Source


@dataclass(frozen=True)
class Options:
    """What a layout says about reading, where the file itself doesn't.

    Attributes
    ----------
    columns : tuple of str
        Names of the columns, where the file has no line of names or one that can't be used.
    bytes : mapping
        From column to its first and last byte, counted from 1, in a fixed-width file.
    table : str
        Which table of a file that holds several: name or path in it, or its number from 1.
    readme : str
        Path of the ReadMe of a CDS data file; the one beside it is taken otherwise.
    skip : int
        Lines at the top that don't belong to the table.
    delimiter : str
        What stands between the cells of a CSV file, where it can't be told from the file.
    """

    columns: tuple[str, ...] = ()
    bytes: Mapping[str, tuple[int, int]] = field(default_factory=dict)
    table: str = ""
    readme: str = ""
    skip: int = 0
    delimiter: str = ""


def uncommented(lines: Sequence[str]) -> list[str]:
    """Take a leading ``#`` off every line that has one, for tables whose every line was commented out.

    Examples
    --------
    >>> uncommented(["# Title: x", "#", "1.0 2.0"])
    ['Title: x', '', '1.0 2.0']
    """
    return [re.sub(r"^\s*#+ ?", "", line) if line.lstrip().startswith("#") else line for line in lines]


def ascii_table(lines: Sequence[str], where: str, **how: Any) -> Any:
    """Read lines with ``astropy.io.ascii``, every cell as text.

    Parameters
    ----------
    lines : sequence of str
    where : str
        File, for the error.
    **how
        As ``astropy.io.ascii.read`` takes them.

    Returns
    -------
    astropy.table.Table

    Raises
    ------
    InputError
        The library can't read the lines.
    """
    import numpy as np
    from astropy.io import ascii
    from astropy.io.ascii import core

    def as_text(cells: Sequence[str]) -> np.ndarray:
        return np.array(cells, dtype=str)

    kinds = (core.FloatType, core.IntType, core.StrType)
    how = {"guess": False, "fill_values": [], "converters": {"*": [(as_text, k) for k in kinds]}} | how
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return ascii.read(list(lines), **how)
    except InputError:
        raise
    except Exception as error:  # the library raises a dozen unrelated kinds on damaged files
        raise unreadable(error, where, str(how.get("format", "text"))) from None


def unreadable(error: Exception, where: str, format: str) -> InputError:
    """Make one line of whatever a library raised on a damaged file."""
    reason = " ".join((str(error) or type(error).__name__).split())
    return InputError(
        f"can't be read as {format}: {reason[:160]}",
        where=where,
        mend="name the right format with --format, or mend the file",
    )


def from_table(
    table: Any, source: Source, *, where: str = "", columns: Sequence[str] = (), **more: Any
) -> Sheet:
    """Make a Sheet of an astropy table whose cells are text."""
    where = where or source.name
    names = renamed(tuple(table.colnames), columns, where)
    cells = [[_cell(c) for c in table[name].tolist()] for name in table.colnames]
    units = {
        new: str(table[old].unit) for new, old in zip(names, table.colnames, strict=True) if table[old].unit
    }
    notes = {
        new: " ".join(str(table[old].description).split())
        for new, old in zip(names, table.colnames, strict=True)
        if table[old].description
    }
    rows = tuple(zip(*cells, strict=True)) if cells else ()
    return Sheet(names, rows, where, source.name, units=units, notes=notes, **more)


def renamed(names: tuple[str, ...], columns: Sequence[str], where: str) -> tuple[str, ...]:
    """Put the layout's names in place of the file's, if it gives any."""
    if not columns:
        return tuple(n.strip() for n in names)
    if len(columns) != len(names):
        raise InputError(
            f"{len(names)} columns, but [read] columns names {len(columns)}",
            where=where,
            mend=f"name each of them once; the file's own names are {', '.join(names[:8])}",
        )
    return tuple(columns)


def _cell(value: Any) -> str:
    return "" if value is None else str(value).strip()
