"""`steelyard typeset`: the yields of a population as a table for a paper."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import typer

from steelyard.integrate.popfile import told
from steelyard.integrate.population import Population
from steelyard.integrate.provenance import FORMAT
from steelyard.scripts import given, terminal
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.whole import replace_file

if TYPE_CHECKING:
    from steelyard.integrate.typesetting import PaperTable

#: formats, and what cites a paper in them; nothing where papers are named in full
CITES = {"deluxetable": "citet", "booktabs": "cite", "mrt": "", "cds": "", "csv": ""}

#: the two files of the CDS
DATA, README = "yields.dat", "ReadMe"


def command(
    file: str = given.POPULATION,
    format: str = typer.Option(
        "booktabs",
        "--format",
        "-f",
        metavar="|".join(CITES),
        help="LaTeX for the AAS journals or for any class; machine-readable for the AAS or for the CDS; CSV.",
    ),
    elements: str = typer.Option(
        "", *given.LISTED, metavar="LIST", help="Elements or nuclides, such as O,Mg,Fe, in this order."
    ),
    ages: str = typer.Option(
        "", metavar="LIST", help='Ages such as "100 Myr, 13.8 Gyr". Default: the oldest of the file.'
    ),
    sources: str = typer.Option(
        "", metavar="LIST", help='Columns, such as "agb,sum". Default: every source and their sum.'
    ),
    net: bool = typer.Option(False, "--net", help="Net yields: less what was there at birth."),
    log: bool = typer.Option(False, "--log", help="log10 of the yields."),
    digits: int = typer.Option(
        3, metavar="N", help="Significant digits (decimals with --log) where no error is stated."
    ),
    spread: str = typer.Option(
        "",
        metavar=f"FILE|{given.ASSUMED}",
        help="Errors of the published figures (TOML): yields get theirs, to one or two digits of it;"
        f" {given.ASSUMED}: 0.15 dex on all metals, which no paper states.",
    ),
    changes: list[str] = given.WITH,
    output: str = typer.Option(
        "",
        "--output",
        "-o",
        metavar="FILE",
        help=f"File of the table; for cds the folder of {DATA} and {README}.",
    ),
    bibtex: str = typer.Option("", metavar="FILE", help="Write the papers the figures rest on as BibTeX."),
    methods: bool = typer.Option(
        False, "--methods", help="Print a paragraph for the text of the paper in place of the table."
    ),
) -> None:
    """Make a paper's table of IMF-weighted yields, with notes, citations and a paragraph on methods.

    Prints the table, or writes it with -o and then prints the paragraph. The notes say what the
    population is made of: mass function, sets, joins, lifetimes, delays, and who follows which species.
    LaTeX is to be read with \\input. Files are replaced only where steelyard wrote them.

    \b
    Examples:
      steelyard typeset --elements C,O,Fe
      steelyard typeset --format deluxetable --spread assumed -o yields.tex --bibtex yields.bib
      steelyard typeset --format mrt --ages "100 Myr, 13.8 Gyr" -o yields.txt
      steelyard typeset --elements O,Fe --net --log --format csv
      steelyard typeset --methods
    """
    if format not in CITES:
        raise InputError(f"format {format!r} isn't known", where="--format", mend=nearest(format, CITES))
    if format == "cds" and not (output or methods):
        raise InputError(
            "the CDS wants two files, data and ReadMe", where="--format cds", mend="name a folder with -o"
        )
    if output and bibtex and Path(output).resolve() == Path(bibtex).resolve():
        raise InputError("table and BibTeX can't go to one file", where="--bibtex", mend="name another file")
    population = _narrowed(given.population(file, changes, ages=ages), elements, ages)
    with told(file), terminal.slow("weighing"):
        result = population.weigh()
        errors = given.errors(result, spread) if spread else None
    from steelyard.integrate.typesetting import paper_table

    chosen = terminal.words(sources, "--sources") if sources else ()
    table = paper_table(
        result,
        sources=chosen,
        convention="net" if net else "total",
        log=log,
        digits=digits,
        errors=errors,
    )
    texts = {} if methods and not output else _texts(table, format, Path(output) if output else None)
    files = {path: text for path, text in texts.items() if path is not None}
    if bibtex:
        from steelyard.integrate.typesetting import bibtex as entries

        files[Path(bibtex)] = entries(table.papers, result)
    for path in files:
        # the data of the CDS say nothing of themselves
        telling = path.with_name(README) if path.name == DATA and path.with_name(README).exists() else path
        terminal.refuse_foreign(telling, f"{FORMAT}, steelyard")
    if output and format == "cds":
        terminal.folder(Path(output))
    for path, text in files.items():
        replace_file(path, text.encode())
    if None in texts:
        print(texts[None], end="")
    if methods or output:
        print(_methods(table, format))
    if output:
        print("\nwritten: " + ", ".join(str(path) for path in files))


def _narrowed(population: Population, elements: str, ages: str) -> Population:
    """The population with the species and ages of the table only."""
    wanted = population.ages if ages else (max(population.ages),)
    species = given.names(elements) or population.species
    return replace(population, ages=wanted, species=species)


def _texts(table: PaperTable, format: str, output: Path | None) -> dict[Path | None, str]:
    """What goes into which file; None is the terminal."""
    from steelyard.integrate import typesetting

    if format == "cds" and output:
        data, readme = typesetting.cds(table, DATA)
        return {output / DATA: data, output / README: readme}
    if format == "mrt":
        return {output: typesetting.mrt(table, output.name if output else "yields.txt")}
    make = {"deluxetable": typesetting.deluxetable, "booktabs": typesetting.booktabs, "csv": typesetting.csv}
    return {output: make[format](table)}


def _methods(table: PaperTable, format: str) -> str:
    from steelyard.integrate.typesetting import latex, machine

    if CITES[format]:
        return latex.prose(table.methods, CITES[format])
    return machine.prose(table.methods)
