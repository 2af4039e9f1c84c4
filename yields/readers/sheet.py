"""What every reader returns: a table whose cells are still text, and how such a text becomes a figure."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, field

from ..errors import InputError

#: cells that mean "no value"
BLANKS = frozenset(
    {"", "-", "--", "---", "–", "—", "...", "..", "…", "....", "nan", "n/a", "na", "null", "none"}
    | {"\\nodata", "\\ldots", "\\dots", "\\cdots", "…", "--.--", "\\--", "\\---"}
)

_MINUS = str.maketrans({"\u2212": "-", "\u2010": "-", "\u2011": "-", "\u2013": "-", "\u00d7": "x"})
_SUPERSCRIPT = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻⁺", "0123456789-+")
# what nearly every cell is, and can't overflow
_PLAIN = re.compile(r"[+-]?(\d{1,40}\.?\d{0,40}|\.\d{1,40})([eE][+-]?\d\d?)?")
_FIGURE = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d{1,4})?")
# 1.23-104, as Fortran prints an exponent of three digits; 13-40 without a point would be a range
_BARE = re.compile(r"([+-]?(?:\d+\.\d*|\.\d+))([+-]\d{1,3})")
_FORTRAN = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+))[dDqQ]([+-]?\d{1,4})")
_TIMES = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+))(?:x|\\times|\\cdot|\*)10(?:\^|\*\*)?\(?([+-]?\d{1,4})\)?")
_PARENTHESIS = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+))\(([+-]\d{1,3})\)")
_TYPESETTING = re.compile(r"[${}\s~]|\\,|\\;|\\!|\\(?:phn|phm|phd|phs)(?![a-z])|\\tablenotemark\{[^}]*\}")


@dataclass(frozen=True)
class Sheet:
    """One table of a file, its cells as printed.

    Attributes
    ----------
    columns : tuple of str
        Names of the columns, each once.
    rows : tuple of tuple of str
        A cell a column; an empty text where nothing stands.
    where : str
        File, and table inside it, for messages.
    file : str
        Name of the file, without folders and without .gz or its like.
    lines : tuple of int
        Line of the file at which each row stands; empty where the format has none.
    units, notes : mapping
        Unit and explanation that the file itself gives for a column.
    heading : str
        The line above a block of block text, the name or title of a table elsewhere.
    meta : mapping
        What else the file says of itself.
    """

    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    where: str
    file: str = ""
    lines: tuple[int, ...] = ()
    units: Mapping[str, str] = field(default_factory=dict)
    notes: Mapping[str, str] = field(default_factory=dict)
    heading: str = ""
    meta: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        twice = sorted({c for c in self.columns if self.columns.count(c) > 1}) if self.columns else []
        if twice:
            raise InputError(
                f"column {twice[0]!r} stands there twice",
                where=self.where,
                mend="name the columns in [read] columns = [...]",
            )
        for i, row in enumerate(self.rows):
            if len(row) != len(self.columns):
                raise InputError(
                    f"{len(row)} cells for {len(self.columns)} columns",
                    where=self.at(i),
                    mend="give every row a cell for each column, '...' where there is no value",
                )

    def at(self, row: int) -> str:
        """Say where a row stands: file and line, or file and row.

        Examples
        --------
        >>> Sheet(("a",), (("1",),), "x.txt", lines=(7,)).at(0)
        'x.txt line 7'
        """
        return f"{self.where} line {self.lines[row]}" if self.lines else f"{self.where} row {row + 1}"


def figure(text: str) -> str | None:
    r"""Read a printed number as text that `float` takes, with the printed digits.

    Parameters
    ----------
    text : str
        ``1.23E-04``, ``1.23D-04``, ``1.23-4``, ``1.23(-4)``, ``$1.23\times10^{-4}$``, a Unicode
        minus; or a sign of no value, such as ``...``, ``--``, ``\nodata`` and the empty cell.

    Returns
    -------
    str or None
        None where the cell holds no value.

    Raises
    ------
    ValueError
        It is neither a number nor a sign of no value.

    Examples
    --------
    >>> figure("1.230D-04"), figure("−1.23-4"), figure(r"$1.2\times10^{-4}$"), figure("...")
    ('1.230E-04', '-1.23E-4', '1.2E-4', None)
    """
    if _PLAIN.fullmatch(text):
        return text
    bare = text.strip()
    if bare.casefold() in BLANKS:
        return None
    bare = _TYPESETTING.sub("", bare.translate(_MINUS).translate(_SUPERSCRIPT))
    if bare.casefold() in BLANKS:
        return None
    if _FIGURE.fullmatch(bare):
        return _finite(bare)
    for form in (_BARE, _FORTRAN, _TIMES, _PARENTHESIS):
        if match := form.fullmatch(bare):
            return _finite(f"{match[1]}E{match[2]}")
    raise ValueError(text)


def _finite(text: str) -> str:
    if not math.isfinite(float(text)):
        raise ValueError(text)
    return text


def is_figure(text: str) -> bool:
    """Say whether a cell holds a number.

    Examples
    --------
    >>> is_figure("1.2E-3"), is_figure("..."), is_figure("C12")
    (True, False, False)
    """
    try:
        return figure(text) is not None
    except ValueError:
        return False
