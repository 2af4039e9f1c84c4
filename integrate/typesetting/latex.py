r"""A table as LaTeX, to be read by a paper's own file with \input."""

from __future__ import annotations

from collections.abc import Callable, Iterator

from steelyard.integrate.citations import Citation
from steelyard.integrate.provenance import provenance

from . import digits as rounding
from .table import Cell, PaperTable
from .tex import comment, escape, nuclide, power
from .wording import Text

LABEL = "tab:yields"

#: rows that a page holds
PAGE = 45


def deluxetable(table: PaperTable) -> str:
    r"""Return a table in the ``deluxetable`` environment of the AAS journals.

    Parameters
    ----------
    table : PaperTable

    Returns
    -------
    str
        LaTeX for the class aastex631; papers are cited with natbib's ``\citet``.
    """
    lines = [
        rf"\begin{{deluxetable}}{{l{'r' * len(table.columns)}}}",
        rf"\tablecaption{{{_caption(table)}\label{{{LABEL}}}}}",
        r"\tablehead{",
        r"\colhead{Species} & " + " & ".join(rf"\colhead{{{escape(h)}}}" for h in table.headings),
        "}",
        r"\startdata",
        *_body(table, _delux_mark, lambda at: rf"\cutinhead{{{at}}}"),
        r"\enddata",
        *(rf"\tablenotetext{{{letter}}}{{{escape(text)}}}" for letter, text in table.marks),
        r"\tablecomments{" + _notes(table, "citet") + "}",
        r"\end{deluxetable}",
    ]
    if len(table.rows) > PAGE:
        lines.insert(0, r"\startlongtable")
    return _origin(table, "aastex631", "") + "\n".join(lines) + "\n"


def booktabs(table: PaperTable) -> str:
    r"""Return a table with the rules of the package booktabs, for any class.

    Parameters
    ----------
    table : PaperTable

    Returns
    -------
    str
        LaTeX; papers are cited with ``\cite``. A table that is longer than a page is set with the
        package longtable.
    """
    count = len(table.columns) + 1
    columns = f"l{'r' * (count - 1)}"
    heading = ["Species & " + " & ".join(map(escape, table.headings)) + r" \\"]
    caption = rf"\caption{{{_caption(table)}}}\label{{{LABEL}}}"

    def block(at: str) -> str:
        return rf"\midrule \multicolumn{{{count}}}{{c}}{{{at}}} \\ \midrule"

    body = list(_body(table, _plain_mark, block))
    if not body[0].startswith(r"\midrule"):
        body.insert(0, r"\midrule")
    below = [f"{_plain_mark(letter)} {escape(text)}" for letter, text in table.marks]
    below.append(_notes(table, "cite"))
    small = [r"\footnotesize", *(rf"\par\noindent {text}" for text in below)]
    if len(table.rows) > PAGE:
        head = [r"\toprule", *heading]
        lines = [
            *(rf"\begin{{longtable}}{{{columns}}}", caption + r" \\"),
            *(*head, r"\endfirsthead", *head, r"\midrule", r"\endhead", r"\bottomrule", r"\endfoot"),
            *(*body, r"\end{longtable}", "{", *small, r"\par}"),
        ]
    else:
        lines = [
            *(r"\begin{table}", r"\centering", caption, rf"\begin{{tabular}}{{{columns}}}", r"\toprule"),
            *(*heading, *body, r"\bottomrule", r"\end{tabular}"),
            *(r"\par\smallskip", r"\begin{minipage}{\linewidth}", *small, r"\end{minipage}", r"\end{table}"),
        ]
    packages = "booktabs, longtable" if len(table.rows) > PAGE else "booktabs"
    return _origin(table, "any class", packages) + "\n".join(lines) + "\n"


def prose(text: Text, command: str = "citet") -> str:
    """Return a text as LaTeX.

    Parameters
    ----------
    text : Text
    command : str
        That cites a paper.
    """
    return "".join(rf"\{command}{{{one.key}}}" if isinstance(one, Citation) else _spaced(one) for one in text)


def _spaced(text: str) -> str:
    """Text with the spaces at its ends, which `escape` takes off."""
    body = escape(text)
    if not body:
        return " " if text else ""
    return (" " if text[0].isspace() else "") + body + (" " if text[-1].isspace() else "")


def _caption(table: PaperTable) -> str:
    unit = escape(table.unit).replace("log10", r"$\log_{10}$")
    return f"{escape(table.caption)} ({unit})"


def _notes(table: PaperTable, command: str) -> str:
    return "\n".join(prose(text, command) for text in table.notes)


def _body(table: PaperTable, mark: Callable[[str], str], block: Callable[[str], str]) -> Iterator[str]:
    """Rows, under the age of their block where there is more than one."""
    before = None
    for row in table.rows:
        if row.age != before and len(table.ages) > 1:
            yield block(escape(f"Up to {rounding.age(row.age)}"))
        before = row.age
        cells = (_cell(cell, table.log) + (mark(cell.marks) if cell.marks else "") for cell in row.cells)
        yield rf"{nuclide(row.species)} & {' & '.join(cells)} \\"


def _cell(cell: Cell, log: bool) -> str:
    if cell.value is None:
        return r"\ldots"
    if log:
        error = rf" \pm {rounding.decimals(cell.error, cell.last)}" if cell.error else ""
        return f"${rounding.decimals(cell.value, cell.last)}{error}$"
    if not cell.value and not cell.error:
        return "0"
    value, error, exponent = rounding.scaled(cell.value, cell.error, cell.last)
    return power(rf"({value} \pm {error})" if error else value, exponent)


def _delux_mark(letters: str) -> str:
    return rf"\tablenotemark{{{','.join(letters)}}}"


def _plain_mark(letters: str) -> str:
    return rf"\rlap{{$^{{{','.join(letters)}}}$}}"


def _origin(table: PaperTable, document: str, packages: str) -> str:
    needs = f"for {document}{f' with {packages}' if packages else ''}; papers are in the BibTeX file"
    lines = [needs, *provenance(table.result)]
    if table.errors is not None:
        lines += ["errors:", *(f"    {line}" for line in table.errors.spread.to_toml().splitlines())]
    return comment(lines)
