"""Columns of text with white space between them, under a line of names."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from ..errors import InputError
from ..nuclides import parse
from .common import Options, ascii_table, from_table
from .sheet import Sheet, is_figure
from .source import Source

# comments are taken off before the library sees the lines; no line holds this
NO_COMMENT = "\0"


def read(source: Source, options: Options) -> list[Sheet]:
    """Read a table whose cells are separated by white space.

    Parameters
    ----------
    source : Source
        Lines that begin with ``#`` are comments; the last of them above the data that has a word
        for each column is the line of names, where the data have none. Where every line begins
        with ``#``, the mark is taken off.
    options : Options
        `columns` names the columns, `skip` leaves out lines at the top.

    Returns
    -------
    list of Sheet
        One.

    Raises
    ------
    InputError
    """
    numbers, names, lines = names_and_data(source, options, str.split)
    header = " ".join(_quoted(name) for name in names)
    table = ascii_table([header, *lines], source.name, format="basic", delimiter=r"\s", comment=NO_COMMENT)
    return [from_table(table, source, columns=options.columns, lines=numbers)]


def names_and_data(
    source: Source, options: Options, split: Callable[[str], list[str]]
) -> tuple[tuple[int, ...], list[str], list[str]]:
    """Find the names of the columns and the lines of data.

    Returns
    -------
    numbers : tuple of int
        Line number of every line of data.
    names : list of str
    lines : list of str
    """
    numbered = [(i + 1, line) for i, line in enumerate(source.lines) if i >= options.skip and line.strip()]
    if numbered and all(_is_comment(line) for _, line in numbered):
        numbered = [(i, _bare(line)) for i, line in numbered if _bare(line)]
    data = [(i, line) for i, line in numbered if not _is_comment(line)]
    if not data:
        raise InputError("the file holds no data", where=source.name, mend="name the right file")
    first = split(data[0][1])
    above = [split(_bare(line)) for i, line in numbered if _is_comment(line) and i < data[0][0]]
    above = [names for names in above if len(names) == len(first)]
    if _are_names(first):
        names, data = first, data[1:]
    elif options.columns:
        names = list(options.columns)
    elif above:
        names = above[-1]
    else:
        raise InputError(
            "no line of column names",
            where=source.name,
            mend="name the columns in [read] columns = [...]",
        )
    if not data:
        raise InputError("a line of names, but no data", where=source.name, mend="name the right file")
    for i, line in data:
        if '"' not in line and len(split(line)) != len(names):
            raise InputError(
                f"{len(split(line))} cells for {len(names)} columns",
                where=f"{source.name} line {i}",
                mend="give every row a cell for each column, '...' where there is no value",
            )
    return tuple(i for i, _ in data), names, [line for _, line in data]


def _are_names(cells: Sequence[str]) -> bool:
    """Whether a line names columns; ``species 13 15 20`` does, ``C12 1e-3 2e-3`` doesn't."""
    if not cells or is_figure(cells[0]):
        return False
    if not any(is_figure(cell) for cell in cells):
        return True
    try:
        parse(cells[0])
    except InputError:
        return True
    return False


def _is_comment(line: str) -> bool:
    return line.lstrip().startswith("#")


def _bare(line: str) -> str:
    return line.lstrip().lstrip("#").strip()


def _quoted(name: str) -> str:
    return '"' + name.replace('"', "'") + '"'
