"""Text as LaTeX: what is special to it escaped, units and nuclides in the usual type."""

from __future__ import annotations

import re
import unicodedata

from steelyard.yields.nuclides import parse

_SPECIAL = {
    "\\": r"\textbackslash{}",
    "{": r"\{",
    "}": r"\}",
    "$": r"\$",
    "&": r"\&",
    "#": r"\#",
    "%": r"\%",
    "_": r"\_",
    "^": r"\textasciicircum{}",
    "~": r"\textasciitilde{}",
    "<": "$<$",
    ">": "$>$",
    "|": "$|$",
    "±": r"$\pm$",
    "×": r"$\times$",
    "≤": r"$\leq$",
    "≥": r"$\geq$",
    "–": "--",
    "…": r"\ldots{}",
}

_PIECES = re.compile(
    r"(?P<unit>\bMsun\b)|(?P<least>>=)|(?P<most><=)|(?P<number>\d(?:\.\d+)?e[+-]\d+)"
    r"|(?P<minus>(?<=[\s(])-(?=\d))|(?P<range>(?<=\d)-(?=\d))|(?P<quote>\")|(?P<letter>.)",
    re.S,
)

_SIGNS = {
    "unit": r"$M_{\odot}$",
    "least": r"$\geq$",
    "most": r"$\leq$",
    "minus": "$-$",
    "range": "--",
    "quote": "''",
}


def escape(text: str) -> str:
    r"""Return text as LaTeX that prints it, on one line.

    Examples
    --------
    >>> print(escape("A&A 100%, 0.08-120 Msun, 1.3e-3, to the -1.1"))
    A\&A 100\%, 0.08--120 $M_{\odot}$, $1.3\times10^{-3}$, to the $-$1.1
    """
    plain = "".join(c if c.isprintable() else " " for c in text)
    return _PIECES.sub(_piece, " ".join(plain.split()))


def _piece(found: re.Match[str]) -> str:
    kind, text = found.lastgroup, found[0]
    if kind == "number":
        return power(*text.split("e"))
    if kind in _SIGNS:
        return _SIGNS[kind]
    return _SPECIAL.get(text, text if text.isascii() else _letter(text))


def _letter(text: str) -> str:
    found = re.fullmatch(r"GREEK SMALL LETTER (\w+)", unicodedata.name(text, ""))
    if not found or found[1] == "OMICRON":
        return text
    return f"$\\{found[1].lower().replace('lamda', 'lambda')}$"


def power(mantissa: str, exponent: str | int) -> str:
    """Return a number with its power of ten, in math mode."""
    return rf"${mantissa}\times10^{{{int(exponent)}}}$"


def nuclide(name: str) -> str:
    """Return a species as chemists write it.

    Examples
    --------
    >>> nuclide("Al26"), nuclide("Fe")
    ('$^{26}$Al', 'Fe')
    """
    one = parse(name)
    return one.symbol if one.is_element else f"$^{{{one.A}{'m' if one.isomer else ''}}}${one.symbol}"


def comment(lines: list[str]) -> str:
    """Return lines as comments."""
    return "".join(f"% {line}".rstrip() + "\n" for text in lines for line in text.splitlines() or [""])
