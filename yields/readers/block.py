"""Block text: a line for each model that holds its mass and metallicity, then a line for each species."""

from __future__ import annotations

from ..errors import InputError
from .common import Options
from .sheet import BLANKS, Sheet, is_figure
from .source import Source


def read(source: Source, options: Options) -> list[Sheet]:
    """Read block text.

    Parameters
    ----------
    source : Source
        A block begins with a heading, which names no species; the names of the columns follow, then
        rows with a cell for each column. Where only the first block names the columns, the others
        have the same.
    options : Options
        `columns` names the columns of all blocks, `skip` leaves out lines at the top.

    Returns
    -------
    list of Sheet
        One for each block, with its heading.

    Raises
    ------
    InputError
        A row has more or fewer cells than there are columns.

    Notes
    -----
    In a line of data the first cell is a word, and of the others more than two thirds are figures or
    signs of no value. A heading is a line that is neither data nor names; of several the last one
    above the names counts. Rules and lines of units in brackets are passed over.
    """
    sheets: list[Sheet] = []
    names: tuple[str, ...] = tuple(options.columns)
    heading, waiting = "", []
    rows: list[tuple[str, ...]] = []
    lines: list[int] = []

    def close() -> None:
        if rows:
            if not names:
                raise InputError(
                    "no names of columns above the first block",
                    where=f"{source.name} line {lines[0]}",
                    mend="name the columns in [read] columns = [...]",
                )
            sheets.append(Sheet(names, tuple(rows), source.name, source.name, tuple(lines), heading=heading))
            rows.clear()
            lines.clear()

    for number, line in enumerate(source.lines, start=1):
        if number <= options.skip or not line.strip():
            continue
        bare = line.strip()
        cells = tuple(bare.lstrip("#").split())
        if _is_data(cells):
            if waiting:
                heading, found = _heading(waiting, len(cells), bool(options.columns))
                names = found or names
                waiting = []
            rows.append(cells)
            lines.append(number)
            continue
        close()
        waiting.append(" ".join(bare.lstrip("#").split()))
    close()
    if not sheets:
        raise InputError(
            "no block of a heading and rows of figures", where=source.name, mend="check its format"
        )
    return sheets


def _is_data(cells: tuple[str, ...]) -> bool:
    if len(cells) < 2 or "=" in cells or is_figure(cells[0]):
        return False
    figures = sum(is_figure(cell) or cell.casefold() in BLANKS for cell in cells[1:])
    return 3 * figures > 2 * (len(cells) - 1)


def _heading(waiting: list[str], width: int, named: bool) -> tuple[str, tuple[str, ...]]:
    """Of the lines above a block, the heading and the names of its columns."""
    waiting = [line for line in waiting if not _is_furniture(line)] or waiting
    names: tuple[str, ...] = ()
    last = tuple(waiting[-1].split())
    if len(last) == width and (len(waiting) > 1 or "=" not in waiting[-1]):
        names, waiting = last, waiting[:-1]
    return (waiting[-1] if waiting else ""), () if named else names


def _is_furniture(line: str) -> bool:
    cells = line.split()
    return not any(c.isalnum() for c in line) or all(c[0] in "([" and c[-1] in ")]" for c in cells)
