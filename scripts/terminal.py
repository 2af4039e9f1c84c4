"""What the commands share on the terminal: tables, JSON, errors in one line, progress, refusals."""

from __future__ import annotations

import json
import os
import re
import sys
import threading
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

#: columns where the output isn't a terminal: wide enough for every table, so that none is cut
PIPED_WIDTH = 2000

#: seconds that work may last before it is said what is being done
PATIENCE = 2.0

#: characters of an error; a value quoted from a hostile file could be longer
LONGEST_ERROR = 600


def console(stderr: bool = False) -> Console:
    """Return a console that is as wide as the terminal, or wide enough for anything in a pipe."""
    from rich.console import Console

    stream = sys.stderr if stderr else sys.stdout
    settings: dict[str, Any] = {"highlight": False, "markup": False, "emoji": False}
    if not stream.isatty():
        settings["width"] = PIPED_WIDTH
    if os.environ.get("NO_COLOR"):
        # rich would still print bold
        settings["color_system"] = None

    if not stream.isatty():
        stream = _Trimmed(stream)

    class Plain(Console):
        def on_broken_pipe(self) -> None:
            # rich would end the process with status 1
            raise BrokenPipeError

    return Plain(file=stream, **settings)


class _Trimmed:
    """A stream without the blanks that fill up a table's last column."""

    def __init__(self, stream: Any) -> None:
        self._stream = stream

    def write(self, text: str) -> int:
        return int(self._stream.write(re.sub(r" +$", "", text, flags=re.MULTILINE)))

    def __getattr__(self, name: str) -> Any:
        return getattr(self._stream, name)


def table(*headings: str, left: int = 1, title: str = "", gap: int = 2) -> Table:
    """Return an empty table, its first columns set left and the others right."""
    from rich import box
    from rich.table import Table

    made = Table(
        title=title or None,
        title_justify="left",
        title_style="bold",
        box=box.SIMPLE_HEAD,
        padding=(0, gap - 1, 0, 0),
        pad_edge=False,
        show_edge=False,
    )
    for i, heading in enumerate(headings):
        made.add_column(heading, justify="left" if i < left else "right", overflow="fold")
    return made


def facts(rows: Iterable[tuple[str, str | Sequence[str]]]) -> Table:
    """Return names and what is to be said of each: texts one below another, empty ones left out."""
    from rich.table import Table

    made = Table.grid(padding=(0, 2))
    made.add_column(no_wrap=True)
    made.add_column(overflow="fold")
    for name, value in rows:
        lines = [value] if isinstance(value, str) else value
        for i, line in enumerate(line for line in lines if line):
            made.add_row("" if i else name, line)
    return made


def print_json(value: Any) -> None:
    """Print one line of JSON and nothing else."""
    sys.stdout.write(json.dumps(value, allow_nan=False) + "\n")


def scientific(value: float) -> str:
    """Write a yield in four digits."""
    return "0" if value == 0 else f"{value:.3e}"


def duration(years: float) -> str:
    """Write an age in the unit that suits it."""
    for unit, size in (("Gyr", 1e9), ("Myr", 1e6)):
        if years >= size:
            return f"{years / size:.4g} {unit}"
    return f"{years:.4g} yr"


def extent(values: Sequence[float]) -> str:
    """Write the least and the largest of some numbers; nothing for none."""
    if not values:
        return ""
    lo, hi = min(values), max(values)
    return f"{lo:.3g}" if lo == hi else f"{lo:.2g}-{hi:.3g}"


def words(text: str, option: str) -> list[str]:
    """Read a list of names or quantities that commas part."""
    from steelyard.yields.errors import InputError

    found = [part.strip() for part in text.split(",") if part.strip()]
    if not found:
        raise InputError(f"{option} names nothing", mend=f'give a list such as {option} "O,Mg,Fe"')
    return found


def set_ids(incomplete: str) -> list[str]:
    """Return the ids of yield sets that begin so, for the shell to complete."""
    from steelyard.yields.library import catalogue

    return [one for one in catalogue() if one.startswith(incomplete)]


def mark(sign: str, plain: str) -> str:
    """Return a sign, or its plain stand-in where the terminal's encoding lacks it."""
    try:
        sign.encode(getattr(sys.stdout, "encoding", None) or "ascii")
    except (UnicodeEncodeError, LookupError):
        return plain
    return sign


def complain(message: str) -> None:
    """Print an error on one line of standard error."""
    line = " ".join("".join(c if c.isprintable() or c.isspace() else "?" for c in message).split())
    if len(line) > LONGEST_ERROR:
        line = f"{line[: LONGEST_ERROR - 3]}..."
    encoding = getattr(sys.stderr, "encoding", None) or "ascii"
    print(f"steelyard: {line}".encode(encoding, "backslashreplace").decode(encoding), file=sys.stderr)


@contextmanager
def slow(doing: str) -> Iterator[None]:
    """Show on standard error what is being done, once it has lasted `PATIENCE`."""
    if not sys.stderr.isatty():
        yield
        return
    status = console(stderr=True).status(doing)
    timer = threading.Timer(PATIENCE, status.start)
    timer.daemon = True
    timer.start()
    try:
        yield
    finally:
        timer.cancel()
        timer.join()
        status.stop()


def folder(path: Path) -> Path:
    """Make a folder where it isn't there yet.

    Raises
    ------
    InputError
        Something else has its name, or it can't be made or written in.
    """
    from steelyard.yields.errors import InputError

    mend = "name a folder that can be written with -o"
    try:
        path.mkdir(parents=True, exist_ok=True)
    except (FileExistsError, NotADirectoryError):
        raise InputError("this isn't a folder", where=str(path), mend=mend) from None
    except OSError as error:
        raise InputError(f"the folder can't be made: {error.strerror}", where=str(path), mend=mend) from None
    if not os.access(path, os.W_OK | os.X_OK):
        raise InputError("the folder can't be written in", where=str(path), mend=mend)
    return path


def write_new(path: Path, text: str) -> None:
    """Write a text file that isn't there yet, whole or not at all.

    Raises
    ------
    InputError
        The file exists, or can't be written.
    """
    from steelyard.yields.errors import InputError

    beside = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        beside.write_text(text, encoding="utf-8")
        # a link, unlike a rename, never replaces what is there
        os.link(beside, path)
    except FileExistsError:
        raise InputError(
            "this exists already, and isn't overwritten", where=str(path), mend="name another file"
        ) from None
    except OSError as error:
        raise InputError(f"can't be written: {error.strerror}", where=str(path)) from None
    finally:
        beside.unlink(missing_ok=True)


def refuse_foreign(path: Path, own: str) -> None:
    """Refuse to replace a file that nothing here has written: it may be somebody's paper.

    Parameters
    ----------
    path : Path
    own : str
        What every file of ours holds.

    Raises
    ------
    InputError
        There is such a file, or a folder.
    """
    from steelyard.yields.errors import InputError

    if path.is_dir():
        raise InputError("this is a folder", where=str(path), mend="name a file in it")
    try:
        known = own.encode() in path.read_bytes()
    except (FileNotFoundError, NotADirectoryError):
        return  # a missing folder is refused where the file is written
    except OSError as error:
        raise InputError(f"can't be read: {error.strerror}", where=str(path)) from None
    if not known:
        raise InputError(
            "this is no file of steelyard's, and isn't replaced", where=str(path), mend="name another file"
        )
