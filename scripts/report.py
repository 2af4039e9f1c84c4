"""`steelyard report`: one page on a population, for whoever has to judge its yields."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import typer

from steelyard.integrate.popfile import told
from steelyard.integrate.population import Population
from steelyard.integrate.provenance import FORMAT
from steelyard.scripts import given, terminal

#: the page
PAGE = "report.html"

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
    file: str = given.POPULATION,
    elements: str = typer.Option(
        "",
        *given.LISTED,
        metavar="LIST",
        help="Elements or nuclides to tell of, such as O,Mg,Fe. Default: the list in the file, or"
        " C,N,O,Mg,Si,Ca,Mn,Fe,Ni.",
    ),
    spread: str = typer.Option(
        given.ASSUMED,
        metavar=f"FILE|{given.ASSUMED}",
        help=f"Errors of the published figures (TOML); {given.ASSUMED}: 0.15 dex on all metals, which no"
        " paper states.",
    ),
    swap: list[str] = SWAP,
    changes: list[str] = given.WITH,
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
    population = given.population(file, changes)
    path = Path(output or ".") / PAGE
    terminal.refuse_foreign(path, FORMAT)
    names = given.names(elements)
    swaps = _swaps(swap, population)
    from steelyard.integrate.reporting import report, write_html

    stated = None if spread == given.ASSUMED else given.spread(spread, population)
    with terminal.slow("weighing, contrasting and auditing"), told(file):
        found = report(population, names, stated, swaps)
    if output:
        terminal.folder(Path(output))
    with terminal.slow("drawing"):
        write_html(found, path)
    print(f"written: {path}")


def _swaps(texts: list[str], population: Population) -> dict[str, list[Any]] | None:
    from steelyard.integrate.contrasting import read_swap

    swaps: dict[str, list[Any]] = {}
    for text in texts:
        with told("--swap"):
            name, choices = read_swap(text, population)
        swaps.setdefault(name, []).extend(choices)
    return swaps or None
