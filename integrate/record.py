"""How an output was made, read back from its text: the command, the population, the stated errors."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from html import unescape
from html.parser import HTMLParser
from pathlib import Path

from steelyard.yields.errors import InputError

from .provenance import MADE_BY

#: byte; more isn't a table or a page
LARGEST = 2**28

_POPULATION, _ERRORS = "population file:", "errors:"


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
    marked = any(f"{sign} {_POPULATION}\n".encode() in head for sign in ("#", "%", "   "))
    return marked or (head.startswith(b"<!DOCTYPE html>") and b"steelyard" in head)


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
        found = _Page()
        found.feed(text)
        commands = found.blocks.get("Commands", "").splitlines()
        command = commands[-1].removeprefix("steelyard ") if commands else ""
        record = Record(
            command, found.blocks.get("Population file", ""), found.blocks.get("Stated errors", "")
        )
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
    where = str(path)
    try:
        if Path(path).stat().st_size > LARGEST:
            raise InputError("the file is too large", where=where, mend=f"give one under {LARGEST >> 20} MiB")
        return Path(path).read_text(encoding="utf-8")
    except UnicodeDecodeError as error:
        raise InputError(
            f"byte {error.start} isn't text in UTF-8", where=where, mend="give it as steelyard wrote it"
        ) from None
    except OSError as error:
        raise InputError(f"can't be read: {error.strerror}", where=where, mend="check its name") from None


def _of_png(path: str | Path) -> str:
    from PIL import Image, UnidentifiedImageError

    try:
        with Image.open(path) as image:
            return str(image.info.get("Description", ""))
    except (OSError, UnidentifiedImageError, ValueError, SyntaxError) as error:
        raise _no_picture(path, error) from None


def _of_svg(path: str | Path) -> str:
    found = re.search(r"<dc:description>(.*?)</dc:description>", read_text(path), re.DOTALL)
    return unescape(found[1]) if found else ""


def _of_pdf(path: str | Path) -> str:
    """The subject of a PDF as matplotlib writes it: text in parentheses, or UTF-16 with its mark."""
    try:
        data = Path(path).read_bytes()
    except OSError as error:
        raise _no_picture(path, error) from None
    found = re.search(rb"/Subject \(((?:[^()\\]|\\.)*)\)", data, re.DOTALL)
    if not found:
        return ""
    signs = {b"n": b"\n", b"r": b"\r", b"t": b"\t"}
    text = re.sub(rb"\\(.)", lambda m: signs.get(m[1], m[1]), found[1], flags=re.DOTALL)
    return text.decode("utf-16") if text.startswith(b"\xfe\xff") else text.decode("latin-1")


def _no_picture(path: str | Path, error: Exception) -> InputError:
    why = " ".join(str(error).split())[:200]
    return InputError(
        f"the picture can't be read: {why}", where=str(path), mend="give it as steelyard wrote it"
    )


#: figures, whose description says how they were made
_DESCRIBED = {".png": _of_png, ".svg": _of_svg, ".pdf": _of_pdf}


def is_figure(path: str | Path) -> bool:
    """Return whether a file is a picture by its ending."""
    return Path(path).suffix.casefold() in _DESCRIBED


def _unfolded(lines: Sequence[str]) -> Iterator[str]:
    """Lines with those joined that were folded after a backslash."""
    held = ""
    for line in lines:
        whole = f"{held} {line.strip()}" if held else line
        if whole.endswith(" \\"):
            held = whole[:-2]
            continue
        held = ""
        yield whole


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
    return "\n".join(out)


class _Page(HTMLParser):
    """The blocks of code of a page, by their names."""

    def __init__(self) -> None:
        super().__init__()
        self.blocks: dict[str, str] = {}
        self._name = ""

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        if tag == "pre":
            self._name = dict(attrs).get("aria-label") or ""
            self.blocks[self._name] = ""

    def handle_endtag(self, tag: str) -> None:
        if tag == "pre":
            self._name = ""

    def handle_data(self, data: str) -> None:
        if self._name:
            self.blocks[self._name] += data
