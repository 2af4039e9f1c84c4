r"""LaTeX source: ``tabular`` and its kin, and the ``deluxetable`` of the AAS journals."""

from __future__ import annotations

import re

from ..errors import InputError
from .common import Options, ascii_table, from_table
from .sheet import Sheet
from .source import Source

_BODY = re.compile(
    r"\\begin\{(tabular\*?|tabularx|longtable|supertabular|array|deluxetable\*?|longdeluxetable)\}(.*?)\\end\{\1\}",
    re.DOTALL,
)
_COMMENT = re.compile(r"(?<!\\)%.*")
_RULES = re.compile(
    r"\\(?:hline|toprule|midrule|bottomrule|tableline|noalign\{[^{}]*\}|endhead|endfirsthead|endfoot|endlastfoot"
    r"|cline\{[^{}]*\}|cmidrule(?:\([^()]*\))?\{[^{}]*\}|cutinhead\{[^{}]*\}|sidehead\{[^{}]*\}|vspace\{[^{}]*\})"
)
_MARKS = re.compile(
    r"\\(?:tablenotemark|tnote|footnotemark|label|caption|tablecaption)(?:\[[^\]]*\])?\{[^{}]*\}"
)
_WRAPPERS = re.compile(
    r"\\(?:colhead|multicolumn\{\d+\}\{[^{}]*\}|textbf|textit|textrm|text|mathrm|mathbf|rm)\{"
)
_NEWLINE = re.compile(r"\\\\(?:\*)?(?:\[[^\]]*\])?|\\tablebreak|\\tabularnewline|\\nl\b")


def read(source: Source, options: Options) -> list[Sheet]:
    r"""Read the tables of a LaTeX file.

    Parameters
    ----------
    source : Source
        Rows end in ``\\`` and may run over lines; the first row of a ``tabular``, or of a
        ``\tablehead``, names the columns; rows without a figure under it (units) are left out.
    options : Options
        `table` picks one by its number from 1; `columns` names the columns.

    Returns
    -------
    list of Sheet
        One for each table.

    Raises
    ------
    InputError
    """
    text = "\n".join(_COMMENT.sub("", line) for line in source.lines)
    found = [m for m in _BODY.finditer(text)]
    if not found:
        raise InputError(
            r"no \begin{tabular} or \begin{deluxetable}", where=source.name, mend="give the whole table"
        )
    sheets = []
    for number, match in enumerate(found, start=1):
        if options.table and options.table != str(number):
            continue
        where = source.name if len(found) == 1 else f"{source.name} table {number}"
        sheets.append(_sheet(match[1], match[2], source, options, where))
    if not sheets:
        raise InputError(
            f"no table {options.table!r}", where=source.name, mend=f"it has tables 1 to {len(found)}"
        )
    return sheets


def _sheet(environment: str, body: str, source: Source, options: Options, where: str) -> Sheet:
    if "deluxetable" in environment:
        head = _argument(body, r"\tablehead")
        data = body.partition(r"\startdata")[2].partition(r"\enddata")[0]
        names, rows = (_rows(head) or [[]])[0], _rows(data)
    else:
        rows = _rows(_without_arguments(body, 2 if environment in ("tabular*", "tabularx") else 1))
        names, rows = (rows[0], rows[1:]) if rows and not _has_figure(rows[0]) else ([], rows)
    rows = [row for row in rows if _has_figure(row)]
    names = list(options.columns) or names
    if not rows or not names:
        what = "no data in the table" if not rows else "no names of columns"
        raise InputError(what, where=where, mend="name the columns in [read] columns = [...]")
    lines = [r"\begin{tabular}", *(" & ".join(cells) + r" \\" for cells in [names, *rows]), r"\end{tabular}"]
    return from_table(ascii_table(lines, where, format="latex"), source, where=where, columns=options.columns)


def _rows(text: str) -> list[list[str]]:
    text = _MARKS.sub("", _RULES.sub("", text))
    rows = []
    for row in _NEWLINE.split(text):
        cells = [_cell(cell) for cell in re.split(r"(?<!\\)&", row)]
        if any(cells):
            rows.append(cells)
    return rows


def _cell(text: str) -> str:
    while match := _WRAPPERS.search(text):
        inside, end = _braced(text, match.end() - 1)
        text = text[: match.start()] + inside + text[end:]
    text = " ".join(text.split())
    if text.startswith("{") and text.endswith("}") and text.count("{") == 1:
        text = text[1:-1].strip()
    return text


def _has_figure(cells: list[str]) -> bool:
    from .sheet import is_figure

    return any(is_figure(cell) for cell in cells)


def _braced(text: str, start: int) -> tuple[str, int]:
    """The text inside the braces that open at `start`, and where it goes on behind them."""
    depth = 0
    for i in range(start, len(text)):
        depth += (text[i] == "{") - (text[i] == "}")
        if depth == 0:
            return text[start + 1 : i], i + 1
    return text[start + 1 :], len(text)


def _argument(text: str, command: str) -> str:
    start = text.find(command + "{")
    return _braced(text, start + len(command))[0] if start >= 0 else ""


def _without_arguments(body: str, count: int) -> str:
    r"""Take off the column types that follow ``\begin{tabular}``, and an optional position before them."""
    body = body.lstrip()
    for _ in range(count):
        if body.startswith("["):
            body = body.partition("]")[2].lstrip()
        if body.startswith("{"):
            body = body[_braced(body, 0)[1] :].lstrip()
    return body
