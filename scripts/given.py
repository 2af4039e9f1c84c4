"""What several commands are given: a population and changes to it, ages, species, stated errors."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import typer

from steelyard.integrate.popfile import default_population, read_ages, read_population, told
from steelyard.integrate.population import Population
from steelyard.scripts import terminal
from steelyard.yields.nuclides import parse

if TYPE_CHECKING:
    from steelyard.integrate.results import PopulationYields
    from steelyard.integrate.spread import Spread, YieldErrors

#: in place of a file that states errors
ASSUMED = "assumed"

POPULATION = typer.Argument(
    "",
    metavar="FILE",
    help="Population file (TOML). Default: the population that `steelyard weigh --template` writes.",
    show_default=False,
)

#: what a list of species is called: the trade says either
LISTED = ("--species", "--elements", "-e")

SPECIES = typer.Option(
    "",
    *LISTED,
    metavar="LIST",
    help="elements, nuclides, or a list such as O,Mg,Al26, in place of the file's.",
)

WITH = typer.Option(
    [],
    "--with",
    metavar="INGREDIENT=CHOICE",
    help="Take another yield set, mass function ... than the file's, named as `steelyard contrast` does;"
    " may be given often.",
    show_default=False,
)


def population(
    file: str, changes: Iterable[str] = (), *, ages: str = "", species: str = "", metallicity: str = ""
) -> Population:
    """Return the population of a file, or the default one, with what the command line gives in its place.

    Raises
    ------
    InputError
        The file or one of the texts can't be used.
    """
    found = read_population(file) if file else default_population()
    for text in changes:
        from steelyard.integrate.contrasting import swapped

        with told("--with"):
            found = swapped(found, text)
    given: dict[str, Any] = {}
    if ages:
        given["ages"] = read_given_ages(ages)
    if metallicity:
        from steelyard.yields.units import plain

        given["metallicity"] = plain(metallicity, "", "--metallicity")
    if species in ("elements", "nuclides"):
        given["species"] = species
    elif species:
        given["species"] = names(species, "--species")
    return replace(found, **given) if given else found


def read_given_ages(text: str) -> tuple[float, ...]:
    """Read the list of `--ages`, yr."""
    with told("--ages"):
        return read_ages(terminal.words(text, "--ages"))


def names(text: str, option: str = "--elements") -> list[str]:
    """Read a list of elements or nuclides, each once; nothing where there is no text."""
    if not text:
        return []
    with told(option):
        return list(dict.fromkeys(parse(one).name for one in terminal.words(text, option)))


def errors(result: PopulationYields, stated: str) -> YieldErrors:
    """Carry the errors of a file, or the assumed ones, through to a result."""
    made = spread(stated, result.population)
    with told(stated):
        return made.propagate(result)


def spread(stated: str, of: Population) -> Spread:
    """Return the errors of a file, or those assumed for a population."""
    if stated == ASSUMED:
        from steelyard.integrate.spread import assumed

        return assumed(of)
    from steelyard.integrate.spread.file import read_spread

    return read_spread(stated)
