"""`steelyard report`: one page on a population, for whoever has to judge its yields."""

from __future__ import annotations

import shlex
from pathlib import Path
from typing import Any

import typer

from steelyard.integrate.popfile import default_population, read_population, told
from steelyard.integrate.population import Population
from steelyard.integrate.provenance import FORMAT
from steelyard.scripts import terminal
from steelyard.yields.errors import InputError
from steelyard.yields.nuclides import parse

#: the page
PAGE = "report.html"

#: in place of a file that states errors
ASSUMED = "assumed"

SWAP = typer.Option(
    [],
    "--swap",
    "-s",
    metavar="INGREDIENT=CHOICE,...",
    help="What to contrast, as `steelyard contrast` takes it; may be given often. Default: other published"
    " choices of mass function, sets, lifetimes and joins.",
    show_default=False,
)


def command(
    file: str = typer.Argument(
        "",
        metavar="POPULATION",
        help="Population file (TOML). Default: the population that `steelyard weigh --template` writes.",
        show_default=False,
    ),
    elements: str = typer.Option(
        "",
        "--elements",
        "-e",
        metavar="LIST",
        help="Elements or nuclides to tell of, such as O,Mg,Fe. Default: the list in the file, or"
        " C,N,O,Mg,Si,Ca,Mn,Fe,Ni.",
    ),
    spread: str = typer.Option(
        ASSUMED,
        metavar=f"FILE|{ASSUMED}",
        help=f"Errors of the published figures (TOML); {ASSUMED}: 0.15 dex on all metals, which no paper"
        " states.",
    ),
    swap: list[str] = SWAP,
    output: str = typer.Option(
        "", "--output", "-o", metavar="DIR", help=f"Folder for {PAGE}. Default: the current one."
    ),
) -> None:
    """Make a page that tells all of a population: choices, yields, errors, what they rest on, papers.

    Writes report.html: one file that needs no other and no network, to read, print or hand to a
    referee. It holds what was weighed, the masses that each set serves, yields with their errors, what
    other published choices would do, the models that matter most, the audit of every set, the papers
    to cite, and how to make it again. A page there is replaced only where steelyard wrote it.

    \b
    Examples:
      steelyard report -o results
      steelyard report --elements C,O,Fe --swap imf=salpeter-1955,chabrier-2003
    """
    population = read_population(file) if file else default_population()
    path = Path(output or ".") / PAGE
    _refuse_foreign(path)
    names = _elements(elements)
    swaps = _swaps(swap, population)
    from steelyard.integrate.reporting import report, write_html

    stated = _spread(spread)
    with terminal.slow("weighing, contrasting and auditing"), told(file):
        found = report(population, names, stated, swaps, _again(elements, spread, swap))
    if output:
        terminal.folder(Path(output))
    with terminal.slow("drawing"):
        write_html(found, path)
    print(f"written: {path}")


def _elements(text: str) -> list[str]:
    if not text:
        return []
    with told("--elements"):
        return [parse(one).name for one in terminal.words(text, "--elements")]


def _spread(name: str) -> Any:
    if name == ASSUMED:
        return None
    from steelyard.integrate.spread.file import read_spread

    return read_spread(name)


def _swaps(texts: list[str], population: Population) -> dict[str, list[Any]] | None:
    from steelyard.integrate.contrasting import read_swap

    swaps: dict[str, list[Any]] = {}
    for text in texts:
        with told("--swap"):
            name, choices = read_swap(text, population)
        swaps.setdefault(name, []).extend(choices)
    return swaps or None


def _again(elements: str, spread: str, swaps: list[str]) -> str:
    """The command line that makes the page again of the files that stand in it."""
    words = ["steelyard", "report", "population.toml"]
    words += ["--elements", elements] if elements else []
    words += ["--spread", "spread.toml"] if spread != ASSUMED else []
    return shlex.join([*words, *(word for text in swaps for word in ("--swap", text))])


def _refuse_foreign(path: Path) -> None:
    """Refuse to replace a page that nothing here has written."""
    if path.is_dir():
        raise InputError("this is a folder", where=str(path), mend="name another folder with -o")
    try:
        known = FORMAT.encode() in path.read_bytes()
    except (FileNotFoundError, NotADirectoryError):
        return
    except OSError as error:
        raise InputError(f"can't be read: {error.strerror}", where=str(path)) from None
    if not known:
        raise InputError(
            "this is no page of steelyard's, and isn't replaced",
            where=str(path),
            mend="name another folder with -o",
        )
