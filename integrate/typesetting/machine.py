"""A table for machines: AAS machine-readable, CDS, CSV."""

from __future__ import annotations

import csv as csv_module
import io
import re
import unicodedata
from collections.abc import Iterator
from textwrap import wrap as fold
from typing import TYPE_CHECKING, Any

import numpy as np

from steelyard.integrate.citations import Citation
from steelyard.integrate.provenance import provenance

from . import digits as rounding
from .table import PaperTable
from .wording import Text

if TYPE_CHECKING:
    from astropy.table import Table

#: bytes of a line of a heading
WIDTH = 80

_RULE, _DOUBLE = "-" * WIDTH, "=" * WIDTH

_LETTERS = {"α": "alpha", "±": "+-", "≤": "<=", "≥": ">=", "–": "-", "×": "x", "…": "..."}


def csv(table: PaperTable) -> str:
    """Return a table as CSV, its notes and its origin in lines that begin with ``#``.

    Parameters
    ----------
    table : PaperTable

    Returns
    -------
    str
        A row for each age and species: age_yr, species, for each source its yield, where errors are
        stated its error (``e_``), where there are marks their letters (``f_``). An empty cell is
        missing, not zero.
    """
    text = io.StringIO()
    for line in (f"{table.caption}, {table.unit}", *_told(table), *_references(table), *_origin(table)):
        text.write(f"# {line}".rstrip() + "\n")
    out = csv_module.writer(text, lineterminator="\n")
    layout = _columns(table)
    out.writerow(["age_yr", "species", *layout])
    for i, row in enumerate(table.rows):
        out.writerow([repr(row.age), row.species, *(one[i] for one in layout.values())])
    return text.getvalue()


def mrt(table: PaperTable, name: str = "yields.txt") -> str:
    """Return a table in the machine-readable form of the AAS journals.

    Parameters
    ----------
    table : PaperTable
    name : str
        Of the file.

    Returns
    -------
    str
        ASCII. Title and authors of the paper are left open.
    """
    description, data = _written(table, name)
    lines = [
        "Title:",
        "Authors:",
        *_wrap(f"Table: {table.caption}, {table.unit}", after="    "),
        _DOUBLE,
        description,
        *_numbered(table),
        _RULE,
        data,
    ]
    return "\n".join(lines)


def cds(table: PaperTable, name: str = "yields.dat") -> tuple[str, str]:
    """Return a table in the form of the CDS: its data, and the ReadMe that describes them.

    Parameters
    ----------
    table : PaperTable
    name : str
        Of the file of data.

    Returns
    -------
    data, readme : str
        ASCII. Catalogue number, authors and abstract of the paper are left open.
    """
    description, data = _written(table, name)
    rows = data.splitlines()
    longest = max(map(len, rows))
    files = [f"{'ReadMe':<14}{WIDTH:>5}{'.':>10}   This file"]
    files.append(f"{name:<14}{longest:>5}{len(rows):>10}   Yields")
    readme = [
        *_wrap(table.caption, after="    "),
        _DOUBLE,
        "Abstract:",
        "",
        "Description:",
        *_wrap(f"{table.caption}, {table.unit}.", "    ", "    "),
        "",
        "File Summary:",
        _RULE,
        " FileName      Lrecl   Records   Explanations",
        _RULE,
        *files,
        _RULE,
        "",
        description,
        *_numbered(table),
        _RULE,
        "",
        "(End)",
    ]
    return data, "\n".join(readme) + "\n"


def ascii_text(text: str) -> str:
    """Return text in ASCII: accents taken off, Greek spelt out where it is usual.

    Examples
    --------
    >>> ascii_text("Pérez, α ± 1")
    'Perez, alpha +- 1'
    """
    spelt = "".join(_LETTERS.get(c, c) for c in text)
    bare = "".join(c for c in unicodedata.normalize("NFKD", spelt) if not unicodedata.combining(c))
    return bare.encode("ascii", "replace").decode()


def prose(text: Text) -> str:
    """Return a text with papers as authors, year and journal."""
    return "".join(one.line if isinstance(one, Citation) else one for one in text)


def _told(table: PaperTable) -> list[str]:
    """Notes and marks, a line each."""
    marks = [f"{letter}: {text}" for letter, text in table.marks]
    return [*(" ".join(prose(text).split()) for text in table.notes), *marks]


def _references(table: PaperTable) -> list[str]:
    return [
        f"{p.authors} {p.year}, {p.title}, {p.reference}{f', doi:{p.doi}' if p.doi else ''}"
        for p in table.papers
    ]


def _origin(table: PaperTable) -> list[str]:
    lines = provenance(table.result)
    if table.errors is not None:
        lines += ["errors:", *(f"    {line}" for line in table.errors.spread.to_toml().splitlines())]
    return [part for line in lines for part in line.splitlines() or [""]]


def _numbered(table: PaperTable) -> Iterator[str]:
    """Notes as both forms have them; then the references, and the population as its file."""
    notes = _told(table)
    for i, text in enumerate(notes, start=1):
        yield from _wrap(f"Note ({i}): {text}", after="    ")
    yield f"Note ({len(notes) + 1}): References:"
    for text in _references(table):
        yield from _wrap(text, "    ", "        ")
    yield f"Note ({len(notes) + 2}): Origin, long lines folded after \\:"
    for line in _origin(table):
        yield from _folded(ascii_text(line))


def _folded(line: str) -> Iterator[str]:
    """A line of the origin, which is read again: folded where there is a blank, and told so."""
    inside = f"    {line}".rstrip()
    while len(inside) > WIDTH:
        at = inside.rfind(" ", 13, WIDTH - 1)
        if at < 0:
            break  # one long word
        yield f"{inside[:at]} \\"
        inside = f"            {inside[at + 1 :]}"
    yield inside


def _wrap(text: str, before: str = "", after: str = "") -> list[str]:
    """ASCII lines that are no longer than a heading may have."""
    return fold(
        ascii_text(text), WIDTH, initial_indent=before, subsequent_indent=after, break_on_hyphens=False
    )


def _columns(table: PaperTable) -> dict[str, list[str]]:
    """Figures, errors and marks by the name of their column; empty where there are none.

    All figures of a column have the same digits: as many as the one that asks for most.
    """
    out: dict[str, list[str]] = {}
    for k, source in enumerate(table.columns):
        cells = [row.cells[k] for row in table.rows]
        label = re.sub(r"[^A-Za-z0-9]+", "_", source)
        while label in out:
            label += "_"
        form = _form([(c.value, c.error, c.last) for c in cells if c.value is not None], table.log)
        out[label] = ["" if c.value is None else format(c.value + 0.0, form) for c in cells]
        if any(c.error for c in cells):
            errors = [(c.error, 0.0, c.last) for c in cells if c.error]
            form = _form(errors, table.log)
            out[f"e_{label}"] = [format(c.error, form) if c.error else "" for c in cells]
        if any(c.marks for c in cells):
            out[f"f_{label}"] = [c.marks for c in cells]
    return out


def _form(figures: list[tuple[float, float, int]], log: bool) -> str:
    if log:
        return f".{max((max(0, -last) for *_, last in figures), default=0)}f"
    after = [rounding.scaled(value, error, last)[2] - last for value, error, last in figures if value]
    return f".{max(after, default=0)}e"


def _written(table: PaperTable, name: str) -> tuple[str, str]:
    """The byte-by-byte description and the data, as astropy writes both."""
    from astropy.io import ascii

    text = io.StringIO()
    built, formats = _astropy(table)
    ascii.write(built, text, format="mrt", formats=formats)
    whole = text.getvalue()
    start = whole.index("Byte-by-byte Description")
    description, data = whole[start:].split("\nNotes:\n" + _RULE + "\n")
    return description.replace("table.dat", name, 1), data


def _astropy(table: PaperTable) -> tuple[Table, dict[str, str]]:
    from astropy import units
    from astropy.table import Column, MaskedColumn, Table

    built, formats = Table(), {}
    ages = [row.age for row in table.rows]
    formats["Age"] = f".{_digits_of(ages)}e"
    built["Age"] = Column(ages, unit=units.yr, description="Age of the population")
    built["Species"] = Column([row.species for row in table.rows], description="Element or nuclide")
    for label, texts in _columns(table).items():
        empty = np.array([not text for text in texts])
        of = label[2:] if label[:2] in ("e_", "f_") else label
        if label.startswith("f_"):
            values: Any = np.array(texts)
            description = f"Marks of {of}, see the notes"
        else:
            values = np.array([float(text or "1") for text in texts])
            formats[label] = _form_of(texts)
            unit = "log10 of Msun per Msun formed" if table.log else "Msun per Msun formed"
            what = (
                "Standard deviation" if label.startswith("e_") else f"{table.convention.capitalize()} yield"
            )
            description = f"{what}, {of}; {'dex' if what[0] == 'S' and table.log else unit}"
        made = MaskedColumn if empty.any() else Column
        built[label] = made(values, description=description, **({"mask": empty} if empty.any() else {}))
    return built, formats


def _form_of(texts: list[str]) -> str:
    """The format in which figures are written already."""
    one = next((text for text in texts if text), "0")
    after = one.partition(".")[2].partition("e")[0]
    return f".{len(after)}{'e' if 'e' in one else 'f'}"


def _digits_of(values: list[float]) -> int:
    """Digits after the point that it takes to read ages back exactly."""
    return next(n for n in range(17) if n == 16 or all(float(f"{v:.{n}e}") == v for v in values))
