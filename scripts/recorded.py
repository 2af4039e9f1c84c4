"""Commands whose outputs say how they were made, and an output made again and compared."""

from __future__ import annotations

import io
import re
import shlex
from collections.abc import Iterator
from contextlib import redirect_stderr, redirect_stdout
from difflib import SequenceMatcher
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

from typer.core import TyperCommand

from steelyard.integrate.provenance import made_by
from steelyard.integrate.record import Record, is_figure, read_record, read_text
from steelyard.scripts.given import ASSUMED
from steelyard.yields.errors import InputError

POPULATION, SPREAD = "population.toml", "spread.toml"

#: options that an output doesn't depend on, or that are in its population already
_APART = frozenset(
    {"output", "bibtex", "json", "markdown", "methods", "explained", "schema", "workers", "changes"}
)

#: digits agree where figures differ by less than this of their value
SAME = 1e-12

#: lines that tell their own story where they differ
_SET = re.compile(r"[#%\s]*set (\S+) sha256\b")
_VERSION = re.compile(r"steelyard \d[\w.]*")
_FIGURE = re.compile(r"(?<![A-Za-z0-9_.])[-+]?\d+(?:\.\d+)?(?:[eE][-+]?\d+)?(?![A-Za-z0-9_])")

#: lines of a file that are compared by their likeness where some were added or taken out
_MOST = 20_000


class RecordedCommand(TyperCommand):
    """A command that is told of in its outputs, see `steelyard.integrate.provenance.made_by`."""

    def invoke(self, ctx: Any) -> Any:
        """Run it."""
        with made_by(shlex.join(self._words(ctx))):
            return super().invoke(ctx)

    def _words(self, ctx: Any) -> Iterator[str]:
        yield str(self.name)
        yield POPULATION
        for one in self.params:
            asked = ctx.get_parameter_source(one.name)
            if one.name in _APART or asked is None or asked.name != "COMMANDLINE":
                continue
            value = ctx.params[one.name]
            if one.param_type_name == "argument":
                continue
            option = max(one.opts, key=len)
            if one.is_flag:
                yield option if value else max(one.secondary_opts, key=len)
                continue
            for each in value if isinstance(value, list | tuple) else [value]:
                yield option
                yield SPREAD if one.name == "spread" and each != ASSUMED else str(each)


def again(path: Path) -> tuple[bool, str]:
    """Make an output again by the command that it tells of, and compare the two.

    Parameters
    ----------
    path : Path
        A table or page that `weigh`, `typeset`, `contrast`, `leverage`, `scatter` or `report` wrote.

    Returns
    -------
    same : bool
        Whether every figure agrees to 1e-12.
    message : str
        One line: how well they agree, or where they don't.

    Raises
    ------
    InputError
        It doesn't say how it was made, or what it says isn't a command that makes tables.
    """
    from steelyard.scripts.main import RECORDED

    record = read_record(path)
    words = _checked(record, path)
    with TemporaryDirectory() as name:
        folder = Path(name)
        (folder / POPULATION).write_text(record.population, encoding="utf-8")
        (folder / SPREAD).write_text(record.spread, encoding="utf-8")
        out = folder / "out"
        out.mkdir()
        # a table's description names its own file
        target = out if RECORDED[words[0]] or path.name == "ReadMe" else out / path.name
        places = {POPULATION: str(folder / POPULATION), SPREAD: str(folder / SPREAD)}
        failed = _run([places.get(word, word) for word in words] + ["--output", str(target)])
        if failed:
            return False, f"{path}: can't be made again: {failed}"
        fresh = out / path.name
        if not fresh.is_file():
            made = ", ".join(sorted(one.name for one in out.iterdir() if one.suffix == path.suffix))
            raise InputError(
                f"its command makes no file of this name, but {made}",
                where=str(path),
                mend="give it the name that it was written by",
            )
        if is_figure(path):
            return _pictured(path, fresh)
        same, message = compared(read_text(path), read_text(fresh))
        beside = path.with_name("yields.dat")
        if same and path.name == "ReadMe" and beside.is_file():
            same, message = compared(read_text(beside), read_text(out / beside.name))
    return same, f"{path}: made again, {message}"


def _pictured(path: Path, fresh: Path) -> tuple[bool, str]:
    if path.read_bytes() == fresh.read_bytes():
        return True, f"{path}: drawn again, it agrees to the last byte"
    from matplotlib import __version__

    why = f"perhaps it was drawn by another matplotlib than {__version__}"
    return False, f"{path}: drawn again, the picture differs; {why}"


def _checked(record: Record, path: Path) -> list[str]:
    """The words of a command from a file, which may say anything."""
    from steelyard.scripts.main import RECORDED, single

    mend = "give the file as steelyard wrote it"
    try:
        words = shlex.split(record.command)
    except ValueError:
        words = []
    if words[:1] not in [[name] for name in RECORDED]:
        raise InputError(f"{record.command[:60]!r} makes no table", where=str(path), mend=mend)
    if words.count(POPULATION) != 1 or words[1] != POPULATION:
        raise InputError("its command is of no population", where=str(path), mend=mend)
    takes = {o: one for one in single(words[0]).params for o in (*one.opts, *one.secondary_opts)}
    rest = iter(words[2:])
    out = words[:2]
    for word in rest:
        one = takes.get(word)
        if one is None or one.name in _APART or one.param_type_name == "argument":
            raise InputError(f"{word[:40]!r} isn't an option of its command", where=str(path), mend=mend)
        value = [] if one.is_flag else [next(rest, "")]
        if one.name == "spread":
            if value not in ([ASSUMED], [SPREAD]):
                raise InputError("its errors aren't stated in it", where=str(path), mend=mend)
            if value == [SPREAD] and not record.spread:
                continue  # an output beside the one with errors
        out += [word, *value]
    return out


def _run(words: list[str]) -> str:
    """Run a command in this process; what it complains of, empty where it doesn't."""
    from steelyard.scripts.main import app

    told = io.StringIO()
    with redirect_stdout(io.StringIO()), redirect_stderr(told):
        status = app(words, prog_name="steelyard", standalone_mode=False)
    return told.getvalue().strip().removeprefix("steelyard: ") if status else ""


def compared(text: str, fresh: str) -> tuple[bool, str]:
    """Compare an output with the same made again.

    Parameters
    ----------
    text, fresh : str

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
    """
    if text == fresh:
        return True, "it agrees to the last byte"
    edited = 0
    reasons: list[str] = []
    for at, mine, new in _differing(text.split("\n"), fresh.split("\n")):
        own_set = _SET.match(mine or "")
        if own_set and _SET.match(new or ""):
            reasons.append(f"the figures of {own_set[1]} aren't those it was made with")
            continue
        if mine and new and _VERSION.search(mine) and _VERSION.sub("", mine) == _VERSION.sub("", new):
            reasons.append(f"written by {_VERSION.search(mine)[0]}")  # type: ignore[index]
            continue
        differ = _figures_differ(mine, new)
        if differ:
            because = f" ({'; '.join(dict.fromkeys(reasons))})" if reasons else ""
            return False, f"the digits differ: line {at} {differ}{because}"
        edited = edited or at
    told = [f"text was edited, first in line {edited}"] if edited and _bare(text) != _bare(fresh) else []
    return True, "; ".join(["the digits agree", *told, *dict.fromkeys(reasons)])


def _differing(mine: list[str], new: list[str]) -> Iterator[tuple[int, str | None, str | None]]:
    """Lines that differ, by the number of the file's own line; None where one has no such line."""
    if len(mine) == len(new) or max(len(mine), len(new)) > _MOST:
        for i in range(max(len(mine), len(new))):
            pair = (mine[i] if i < len(mine) else None, new[i] if i < len(new) else None)
            if pair[0] != pair[1]:
                yield i + 1, *pair
        return
    for tag, a, b, c, d in SequenceMatcher(None, mine, new, autojunk=False).get_opcodes():
        if tag != "equal":
            for k in range(max(b - a, d - c)):
                yield a + k + 1, mine[a + k] if a + k < b else None, new[c + k] if c + k < d else None


def _figures_differ(mine: str | None, new: str | None) -> str:
    """How the figures of two lines differ; empty where they don't."""
    if new is None:
        return ""  # a line that was added
    wanted = _figures(new)
    if mine is None:
        return f"is missing: {new.strip()[:60]}" if wanted else ""
    found = _figures(mine)
    if len(found) < len(wanted):
        return f"has {len(found)} figures, not {len(wanted)}"
    # what was added to a line, such as a title, stands before or after its figures
    for a, b in zip(found[: len(wanted)], wanted, strict=True):
        if a != b and abs(float(a) - float(b)) > SAME * max(abs(float(a)), abs(float(b))):
            return f"has {a}, not {b}"
    return ""


def _figures(line: str) -> list[str]:
    # pages print the sign that is as wide as a plus
    return _FIGURE.findall(line.replace("\N{MINUS SIGN}", "-"))


def _bare(text: str) -> str:
    """Text without its figures, versions and checksums."""
    return _FIGURE.sub("0", _VERSION.sub("", re.sub(r"\b[0-9a-f]{64}\b", "", text)))
