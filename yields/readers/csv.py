"""Comma-separated text, or text with semicolons, tabs or bars between the cells."""

from __future__ import annotations

import csv
from collections import Counter

from ..errors import InputError
from .common import Options, ascii_table, from_table
from .sheet import Sheet
from .source import Source
from .text import NO_COMMENT, names_and_data

DELIMITERS = (",", ";", "\t", "|")


def read(source: Source, options: Options) -> list[Sheet]:
    """Read separated text.

    Parameters
    ----------
    source : Source
        Comments and the line of names as in white-space text.
    options : Options
        `delimiter` where it isn't the most frequent of ``, ; tab |``; `columns`, `skip`.

    Returns
    -------
    list of Sheet
        One.

    Raises
    ------
    InputError
    """
    delimiter = options.delimiter or likely_delimiter(source.lines) or ","
    if len(delimiter) != 1:
        raise InputError(
            f"delimiter {delimiter!r} isn't one character", where="[read]", mend="use format = 'text'"
        )

    def split(line: str) -> list[str]:
        try:
            return [cell.strip() for cell in next(csv.reader([line], delimiter=delimiter))]
        except (csv.Error, StopIteration):
            return line.split(delimiter)

    numbers, names, lines = names_and_data(source, options, split)
    header = delimiter.join('"' + name.replace('"', '""') + '"' for name in names)
    # "basic", unlike "csv", refuses rows that are too short; "tab" keeps an empty last cell
    how = {"format": "tab"} if delimiter == "\t" else {"format": "basic", "delimiter": delimiter}
    table = ascii_table([header, *lines], source.name, comment=NO_COMMENT, fast_reader=False, **how)
    return [from_table(table, source, columns=options.columns, lines=numbers)]


def likely_delimiter(lines: list[str]) -> str:
    """The separator that stands equally often in nearly every line; empty where none does."""
    full = [line for line in lines if line.strip()]
    # where every line is commented out, all of them are data
    data = ([line for line in full if not line.lstrip().startswith("#")] or full)[:200]
    for delimiter in DELIMITERS:
        counts = Counter(line.strip("\n").count(delimiter) for line in data)
        number, times = counts.most_common(1)[0] if counts else (0, 0)
        if number and times >= 0.8 * len(data):
            return delimiter
    return ""
