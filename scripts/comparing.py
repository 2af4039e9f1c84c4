"""An output and the same made again, compared: a table row by row, what stands about it as text."""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator, Mapping, Sequence
from difflib import SequenceMatcher
from math import isfinite

from steelyard.integrate.files.again import NOISE, SAME

#: lines that tell their own story where they differ
_SET = re.compile(
    r"[#%\s]*set (?P<set>\S+) sha256\b|<tr><th scope=\"row\">(?P<on_page>[^<]+)</th><td>[0-9a-f]{64}</td>"
)
_VERSION = re.compile(r"steelyard \d[\w.]*")
_CHECKSUM = re.compile(r"\b[0-9a-f]{64}\b")

_FIGURE = re.compile(r"(?<![A-Za-z0-9_.])[-+]?\d+(?:\.\d+)?(?:[eE][-+]?\d+)?(?![A-Za-z0-9_])")
_TEX_COMMAND = re.compile(r"\\[A-Za-z]+")
_TEX_COMMENT = re.compile(r"(?<!\\)%.*")

#: what parts the cells of a row, by the kind of an output
_BETWEEN = {"latex": re.compile(r"(?<!\\)&"), "page": re.compile(r"<t[dh]\b")}

#: lines that are compared by their likeness where some were added or taken out
_MOST = 20_000

#: a line of an output and its number
Line = tuple[int, str]


def kind_of(fresh: str, name: str) -> str:
    """Return how an output is laid out, from its text as made now and the name of its file.

    Examples
    --------
    >>> kind_of("# a comment\\nage_yr,species,total\\n", "yields.csv")
    'csv'
    """
    if fresh.startswith("<!DOCTYPE html>"):
        return "page"
    if name == "yields.dat":
        return "columns"
    if "\nByte-by-byte Description of file:" in fresh:
        return "text" if name == "ReadMe" else "described columns"
    return "latex" if fresh.startswith("%") else "csv"


def compared(text: str, fresh: str, kind: str = "text") -> tuple[bool, str]:
    """Compare an output with the same made again.

    Rows of a table have to hold the same figures in the same cells, in CSV and in columns of bytes the
    same words too. In what stands about a table lines may be added, and words edited.

    Parameters
    ----------
    text, fresh : str
    kind : str
        As `kind_of` gives it.

    Returns
    -------
    same : bool
        Whether all figures agree to 1e-12, rounded ones in all their digits.
    message : str
        How well, or where they differ first.

    Examples
    --------
    >>> compared("O 1.67e-03", "O 1.68e-03")
    (False, 'the digits differ: line 1 has 1.67e-03, not 1.68e-03')
    >>> compared("Our table: O 1.67e-03", "O 1.67e-03")
    (True, 'the digits agree; text was edited, first in line 1')
    >>> compared("# ours\\nO,0.2\\nO,0.3", "# theirs\\nO,0.2", "csv")
    (False, 'the digits differ: line 3 is none of the table: O,0.3')
    """
    if text == fresh:
        return True, "it agrees to the last byte"
    rows, about = _parted(text, kind)
    new_rows, new_about = _parted(fresh, kind)
    in_rows, edited_row = _compared_rows(rows, new_rows, kind)
    in_text, edited_text, reasons = _compared_text(about, new_about)
    if in_rows or in_text:
        because = f" ({'; '.join(reasons)})" if reasons else ""
        return False, f"the digits differ: line {in_rows or in_text}{because}"
    edited = min((at for at in (edited_row, edited_text) if at), default=0)
    told = [f"text was edited, first in line {edited}"] if edited else []
    return True, "; ".join(["the digits agree", *told, *reasons])


def _parted(text: str, kind: str) -> tuple[list[Line], list[Line]]:
    """The rows of a table, and the other lines."""
    lines = text.split("\n")
    if kind == "csv":
        rows = [bool(line) and not line.startswith("#") for line in lines]
    elif kind == "latex":
        rows = [bool(_BETWEEN[kind].search(_TEX_COMMENT.sub("", line))) for line in lines]
    elif kind == "page":
        rows = ["<td" in line and not _CHECKSUM.search(line) for line in lines]
    elif kind == "columns":
        rows = [bool(line) for line in lines]
    elif kind == "described columns":
        last = max((i for i, line in enumerate(lines) if line.startswith("-----")), default=len(lines))
        rows = [i > last and bool(line) for i, line in enumerate(lines)]
    else:
        rows = [False] * len(lines)
    numbered = list(enumerate(lines, start=1))
    chosen = [one for one, row in zip(numbered, rows, strict=True) if row]
    return chosen, [one for one, row in zip(numbered, rows, strict=True) if not row]


def _compared_rows(mine: Sequence[Line], new: Sequence[Line], kind: str) -> tuple[str, int]:
    """Where the rows of two tables differ, empty where they don't; the first whose words were edited."""
    edited = 0
    rounding = _rounding(new) if kind == "csv" else {}
    names = {name for _, line in new for name in _names(line, kind)} if kind in _BETWEEN else set()
    for (at, a), (_, b) in zip(mine, new, strict=False):
        if a == b:
            continue
        if kind == "csv":
            why = _csv_row_differs(a, b, rounding)
        elif kind in _BETWEEN:
            why = _row_differs(a, b, kind, names)
            edited = edited or (at if _bare(a) != _bare(b) else 0)
        else:
            why = _figures_differ(a, b)
            if not why and _bare(a).rstrip() != _bare(b).rstrip():
                why = f"has other words or blanks: {_short(a)}"
        if why:
            return f"{at} {why}", edited
    if len(mine) > len(new):
        at, line = mine[len(new)]
        return f"{at} is none of the table: {_short(line)}", edited
    if len(mine) < len(new):
        return f"{mine[-1][0] + 1 if mine else 1} is missing: {_short(new[len(mine)][1])}", edited
    return "", edited


def _csv_row_differs(mine: str, new: str, rounding: Mapping[int, float]) -> str:
    a, b = _cells(mine), _cells(new)
    if len(a) != len(b):
        return f"has {len(a)} cells, not {len(b)}"
    for k, (x, y) in enumerate(zip(a, b, strict=True)):
        if x != y and not _close(x, y, rounding.get(k, 0.0)):
            return f"has {_short(x)}, not {_short(y)}"
    return ""


def _cells(line: str) -> list[str]:
    try:
        return next(csv.reader([line]), [])
    except csv.Error:  # a cell that is too long, or a sign that isn't text
        return []


def _rounding(rows: Sequence[Line]) -> dict[int, float]:
    """What counts as rounding in each column: a part of its largest figure, as in files of data."""
    largest: dict[int, float] = {}
    for _, line in rows:
        for k, cell in enumerate(_cells(line)):
            value = abs(_number(cell))
            if isfinite(value):
                largest[k] = max(largest.get(k, 0.0), value)
    return {k: NOISE * value for k, value in largest.items()}


def _row_differs(mine: str, new: str, kind: str, names: set[str]) -> str:
    """How rows differ whose words may be edited, but not exchanged with those of another cell."""
    a, b = _parts(mine, kind), _parts(new, kind)
    if len(a) != len(b):
        return f"has {len(a)} cells, not {len(b)}"
    for x, y in zip(a, b, strict=True):
        found, wanted = _figures(x), _figures(y)
        if len(found) != len(wanted):
            return f"has {_listed(found)} in place of {_listed(wanted)}"
        for one, other in zip(found, wanted, strict=True):
            if not _close(one, other):
                return f"has {one}, not {other}"
        if not wanted and x != y and x in names:
            return f"has {_short(x)}, not {_short(y)}"
    return ""


def _parts(line: str, kind: str) -> list[str]:
    if kind == "latex":
        line = _TEX_COMMENT.sub("", line).rstrip().removesuffix("\\\\")
    return [part.strip() for part in _BETWEEN[kind].split(line)]


def _names(line: str, kind: str) -> Iterator[str]:
    yield from (part for part in _parts(line, kind) if part and not _figures(part))


def _compared_text(mine: Sequence[Line], new: Sequence[Line]) -> tuple[str, int, list[str]]:
    """Where figures in text differ, the first line that was edited, and why a digit may be another."""
    differs, edited = "", 0
    reasons: dict[str, None] = {}
    for at, a, b in _differing(mine, new):
        own_set = _SET.match(a or "")
        if own_set and _SET.match(b or ""):
            of = _short(own_set["set"] or own_set["on_page"])
            reasons[f"the figures of {of} aren't those it was made with"] = None
            continue
        if a and b and _VERSION.search(a) and _VERSION.sub("", a) == _VERSION.sub("", b):
            reasons[f"written by {_short(_VERSION.search(a)[0])}"] = None  # type: ignore[index]
            continue
        why = _figures_differ(a, b)
        differs = differs or (f"{at} {why}" if why else "")
        edited = edited or (at if _bare(a or "") != _bare(b or "") else 0)
    return differs, edited, list(reasons)


def _differing(mine: Sequence[Line], new: Sequence[Line]) -> Iterator[tuple[int, str | None, str | None]]:
    """Lines that differ, by the number of the file's own line; None where one has no such line."""
    a, b = [line for _, line in mine], [line for _, line in new]
    # what begins and ends alike needs no search
    head = next((i for i, (x, y) in enumerate(zip(a, b, strict=False)) if x != y), min(len(a), len(b)))
    rest = min(len(a), len(b)) - head
    tail = next((i for i in range(rest) if a[-1 - i] != b[-1 - i]), rest)
    a, b = a[head : len(a) - tail], b[head : len(b) - tail]
    if len(a) == len(b) or max(len(a), len(b)) > _MOST:
        blocks = [("replace", 0, len(a), 0, len(b))]
    else:
        blocks = SequenceMatcher(None, a, b).get_opcodes()
    for tag, i, j, k, m in blocks:
        for n in range(max(j - i, m - k)) if tag != "equal" else ():
            at = head + i + n
            number = mine[at][0] if at < len(mine) else (mine[-1][0] + 1 if mine else 1)
            pair = (a[i + n] if i + n < j else None, b[k + n] if k + n < m else None)
            if pair[0] != pair[1]:
                yield number, *pair


def _figures_differ(mine: str | None, new: str | None) -> str:
    """How the figures of two lines differ; empty where they don't."""
    if new is None:
        return ""  # a line that was added
    wanted = _figures(new)
    if mine is None:
        return f"is missing: {_short(new)}" if wanted else ""
    found = _figures(mine)
    if len(found) < len(wanted):
        return f"has {_listed(found)} in place of {_listed(wanted)}"
    # what was added to a line, such as a title, stands before or after its figures
    for a, b in zip(found[: len(wanted)], wanted, strict=True):
        if not _close(a, b):
            return f"has {a}, not {b}"
    return ""


def _close(mine: str, new: str, rounding: float = 0.0) -> bool:
    """Whether two texts are one figure."""
    a, b = _number(mine), _number(new)
    return isfinite(a) and isfinite(b) and abs(a - b) <= max(SAME * max(abs(a), abs(b)), rounding)


def _number(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        return float("nan")


def _figures(line: str) -> list[str]:
    # pages print the sign that is as wide as a plus
    return _FIGURE.findall(_TEX_COMMAND.sub(" ", line).replace("\N{MINUS SIGN}", "-"))


def _bare(text: str) -> str:
    """Text without its figures, versions and checksums."""
    return _FIGURE.sub("0", _VERSION.sub("", _CHECKSUM.sub("", text)))


def _listed(figures: Sequence[str]) -> str:
    return _short(", ".join(figures[:10])) if figures else "no figure"


def _short(text: str) -> str:
    """Text from a file for a message: it may hold anything."""
    shown = "".join(c if c.isprintable() or c.isspace() else "?" for c in text[:300])
    return " ".join(shown.split())[:60]
