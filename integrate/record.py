"""How an output was made, read back from its text: the command, the population, the stated errors."""

from __future__ import annotations

import re
import warnings
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from html import unescape
from pathlib import Path

from steelyard.yields.errors import InputError

from .provenance import MADE_BY

#: byte; more isn't a table or a page
LARGEST = 2**28

_MEND = "give it as steelyard wrote it"

_POPULATION, _ERRORS = "population file:", "errors:"

#: the population's heading as it stands in comments and in indented text
_HEADING = re.compile(rf"^(?:[#%]|   ) {_POPULATION}\r?$".encode(), re.MULTILINE)

#: signs after a backslash in a PDF
_SIGNS = {b"n": b"\n", b"r": b"\r", b"t": b"\t"}


@dataclass(frozen=True)
class Record:
    """How an output was made.

    Attributes
    ----------
    command : str
        As for a shell, without the name of the program; empty where none is told.
    population : str
        The population file, TOML.
    spread : str
        The errors stated, TOML; empty where there are none.
    """

    command: str
    population: str
    spread: str


def is_output(path: str | Path) -> bool:
    """Return whether a file is a table of a population that it carries, or a page of a report."""
    try:
        with Path(path).open("rb") as file:
            head = file.read(2**20)
    except OSError:
        return False
    if Path(path).suffix.casefold() in _DESCRIBED:
        return b"steelyard" in head
    return bool(_HEADING.search(head)) or (head.startswith(b"<!DOCTYPE html>") and b"steelyard" in head)


def read_record(path: str | Path) -> Record:
    """Read how an output was made.

    Parameters
    ----------
    path : str or Path
        A table or a page that a command wrote.

    Returns
    -------
    Record

    Raises
    ------
    InputError
        It can't be read, or doesn't say.
    """
    where = str(path)
    read = _DESCRIBED.get(Path(path).suffix.casefold(), read_text)
    text = read(path)
    if text.startswith("<!DOCTYPE html>"):
        commands = _on_page(text, "Commands").splitlines()
        command = commands[-1].removeprefix("steelyard ") if commands else ""
        record = Record(command, _on_page(text, "Population file"), _on_page(text, "Stated errors"))
    else:
        lines = list(_unfolded(text.split("\n")))
        said = (line.partition(MADE_BY)[2] for line in lines if MADE_BY in line)
        record = Record(next(said, ""), _block(lines, _POPULATION), _block(lines, _ERRORS))
    if not record.population or not record.command:
        lacks = "population" if not record.population else "command"
        raise InputError(
            f"the file doesn't say which {lacks} made it",
            where=where,
            mend="give a table or page as the command line wrote it, or an HDF5 file",
        )
    return record


def read_text(path: str | Path) -> str:
    """Return the text of an output.

    Raises
    ------
    InputError
        It is no file, no text, or too large.
    """
    data = _bytes(path)
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise InputError(f"byte {error.start} isn't text in UTF-8", where=str(path), mend=_MEND) from None
    # other systems end lines, and begin texts, in other ways
    return text.replace("\r\n", "\n").replace("\r", "\n")


def _bytes(path: str | Path) -> bytes:
    where = str(path)
    try:
        with Path(path).open("rb") as file:
            data = file.read(LARGEST + 1)
    except OSError as error:
        raise InputError(f"can't be read: {error.strerror}", where=where, mend="check its name") from None
    if len(data) > LARGEST:
        raise InputError("the file is too large", where=where, mend=f"give one under {LARGEST >> 20} MiB")
    return data


def _of_png(path: str | Path) -> str:
    from PIL import Image, UnidentifiedImageError

    unusable = (OSError, UnidentifiedImageError, ValueError, SyntaxError)
    too_large = (Image.DecompressionBombError, Image.DecompressionBombWarning)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error", Image.DecompressionBombWarning)
            with Image.open(path) as image:
                return str(image.info.get("Description", ""))
    except (*unusable, *too_large) as error:
        why = " ".join(str(error).split())[:200]
        raise InputError(f"the picture can't be read: {why}", where=str(path), mend=_MEND) from None


def _of_svg(path: str | Path) -> str:
    return unescape(_between(read_text(path), "<dc:description>", "</dc:description>"))


def _of_pdf(path: str | Path) -> str:
    """The subject of a PDF as matplotlib writes it: text in parentheses, or UTF-16 with its mark."""
    found = re.search(rb"/Subject \(((?:[^()\\]|\\.)*+)\)", _bytes(path), re.DOTALL)
    if not found:
        return ""
    text = re.sub(rb"\\(.)", lambda m: _SIGNS.get(m[1], m[1]), found[1], flags=re.DOTALL)
    return text.decode("utf-16" if text.startswith(b"\xfe\xff") else "latin-1", errors="replace")


#: figures, whose description says how they were made
_DESCRIBED = {".png": _of_png, ".svg": _of_svg, ".pdf": _of_pdf}


def is_figure(path: str | Path) -> bool:
    """Return whether a file is a picture by its ending."""
    return Path(path).suffix.casefold() in _DESCRIBED


def _unfolded(lines: Sequence[str]) -> Iterator[str]:
    """Lines with those joined that were folded after a backslash."""
    held: list[str] = []
    for line in lines:
        part = line.strip() if held else line
        if part.endswith(" \\"):
            held.append(part[:-2])
            continue
        yield " ".join([*held, part])
        held = []


def _block(lines: Sequence[str], heading: str) -> str:
    """The lines under a heading, with what stands before every one of them taken off."""
    at = next((i for i, line in enumerate(lines) if line.lstrip("#% ") == heading), None)
    if at is None:
        return ""
    before = lines[at][: -len(heading)]
    out = []
    for line in lines[at + 1 :]:
        inside = line.startswith(f"{before}    ") or line.rstrip() == before.rstrip()
        if not inside:
            break
        out.append(line[len(before) + 4 :])
    return "\n".join(out).rstrip("\n")


def _on_page(text: str, name: str) -> str:
    """A block of code of a page, by its name."""
    from .reporting.markup import code

    begin, end = code("\0", name).split("\0")
    return unescape(_between(text, begin, end))


def _between(text: str, begin: str, end: str) -> str:
    """What stands between two marks for the first time; empty where one of them doesn't."""
    inside, closed, _ = text.partition(begin)[2].partition(end)
    return inside if closed else ""
