"""Commands whose outputs say how they were made, and an output made again and compared."""

from __future__ import annotations

import io
import shlex
from collections.abc import Iterator
from contextlib import redirect_stderr, redirect_stdout
from contextvars import ContextVar
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

#: the two files of the CDS: the second tells of the first
DATA, README = "yields.dat", "ReadMe"

#: signs of a command in a file
LONGEST = 100_000

#: the command that is made again, as its output tells it
_TOLD: ContextVar[str] = ContextVar("told", default="")


class RecordedCommand(TyperCommand):
    """A command that is told of in its outputs, see `steelyard.integrate.provenance.made_by`."""

    def invoke(self, ctx: Any) -> Any:
        """Run it."""
        with made_by(_TOLD.get() or shlex.join(self._words(ctx))):
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
    from steelyard.scripts.main import RECORDED, single

    record = read_record(path)
    words = _checked(record, path)
    with TemporaryDirectory() as name:
        folder = Path(name)
        (folder / POPULATION).write_text(record.population, encoding="utf-8")
        (folder / SPREAD).write_text(record.spread, encoding="utf-8")
        out = folder / "out"
        out.mkdir()
        # a table's description names its own file
        target = out if RECORDED[words[0]] or "cds" in words else out / path.name
        places = {POPULATION: str(folder / POPULATION), SPREAD: str(folder / SPREAD)}
        words = [*(places.get(word, word) for word in words), "--output", str(target)]
        if not is_figure(path) and any(
            "--no-figures" in one.secondary_opts for one in single(words[0]).params
        ):
            words.append("--no-figures")
        failed = _run(words, record.command)
        if failed:
            return False, f"{path}: can't be made again: {failed.replace(f'{folder}/', '')}"
        made = sorted(one for one in out.iterdir() if is_figure(one) == is_figure(path))
        if is_figure(path):
            return _pictured(path, [one for one in made if one.suffix == path.suffix.casefold()])
        pairs = [(path, _counterpart(path, [one for one in made if one.suffix != ".h5"]))]
        beside = path.with_name(DATA)
        if pairs[0][1].name == README and beside.is_file():
            pairs.append((beside, out / DATA))
        return _compared(pairs)


def _compared(pairs: list[tuple[Path, Path]]) -> tuple[bool, str]:
    """Compare files with the same made again; the least that is to be said of any."""
    from steelyard.scripts.comparing import compared, kind_of

    told = []
    for path, fresh in pairs:
        text, new = read_text(path), read_text(fresh)
        same, message = compared(text, new, kind_of(new, fresh.name))
        if text == new and path.read_bytes() != fresh.read_bytes():
            message = "it agrees but for how its lines end"
        renamed = "" if path.name == fresh.name else f" as {fresh.name}"
        told.append((same, text == new, f"{path}: made again{renamed}, {message}"))
    same, _, message = min(told, key=lambda one: one[:2])
    return same, message


def _counterpart(path: Path, made: list[Path]) -> Path:
    """Which of the files that a command makes this is: by its name, or if it got another by its lines."""
    lines = set(read_text(path).split("\n"))

    def alike(fresh: Path) -> tuple[bool, bool, int]:
        shared = len(lines.intersection(read_text(fresh).split("\n")))
        return fresh.name == path.name, fresh.suffix == path.suffix, shared

    return max(made, key=alike)


def _pictured(path: Path, made: list[Path]) -> tuple[bool, str]:
    """Compare a figure with those that its command draws."""
    if not made:
        raise InputError(
            f"its command draws no {path.suffix}", where=str(path), mend="give the file as steelyard wrote it"
        )
    named = [one for one in made if one.name == path.name] or made
    fresh = next((one for one in named if one.read_bytes() == path.read_bytes()), None)
    if fresh is not None:
        renamed = "" if path.name == fresh.name else f" as {fresh.name}"
        return True, f"{path}: drawn again{renamed}, it agrees to the last byte"
    from matplotlib import __version__

    other = "" if named[0].name == path.name else f" from {', '.join(one.name for one in named)}"
    why = f"perhaps it was drawn by another matplotlib than {__version__}"
    return False, f"{path}: drawn again, the picture differs{other}; {why}"


def _checked(record: Record, path: Path) -> list[str]:
    """The words of a command from a file, which may say anything."""
    from steelyard.scripts.main import RECORDED, single

    mend = "give the file as steelyard wrote it"
    if len(record.command) > LONGEST:
        raise InputError(f"its command is longer than {LONGEST} signs", where=str(path), mend=mend)
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


def _run(words: list[str], command: str) -> str:
    """Run a command in this process, told of as it was; what it complains of, empty where it doesn't."""
    from steelyard.scripts.main import app

    told = io.StringIO()
    token = _TOLD.set(command)
    try:
        with redirect_stdout(io.StringIO()), redirect_stderr(told):
            status = app(words, prog_name="steelyard", standalone_mode=False)
    finally:
        _TOLD.reset(token)
    return told.getvalue().strip().removeprefix("steelyard: ") if status else ""
