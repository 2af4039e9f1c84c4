"""Where a result comes from, told beside its figures."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from contextvars import ContextVar
from typing import TYPE_CHECKING, Any

from .results import PopulationYields
from .sources import StellarSource

if TYPE_CHECKING:
    from .population import Population

#: what a result is called in the files that hold one
FORMAT = "steelyard population yields"

#: what stands before the command in an output
MADE_BY = "made by: steelyard "

_COMMAND: ContextVar[str] = ContextVar("command", default="")


@contextmanager
def made_by(command: str) -> Iterator[None]:
    """Say in every output of the block which command makes it, so that it can be made again.

    Parameters
    ----------
    command : str
        As for a shell, without the name of the program, of the population in population.toml and
        errors stated in spread.toml.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> stars = Population(0.02, [StellarSource("agb", ["karakas-2010"])])
    >>> with made_by("weigh population.toml"):
    ...     origin(stars)[0]
    'made by: steelyard weigh population.toml'
    """
    token = _COMMAND.set(command)
    try:
        yield
    finally:
        _COMMAND.reset(token)


def command() -> str:
    """Return the command that is running, as `made_by` was told; empty where there is none."""
    return _COMMAND.get()


def origin(population: Population) -> list[str]:
    """Return what it takes to make an output again, as lines: the command, and the population's file."""
    from .popfile import population_to_toml

    return [
        *([f"{MADE_BY}{command()}"] if command() else []),
        "population file:",
        *(f"    {line}" for line in population_to_toml(population).splitlines()),
    ]


def provenance(result: PopulationYields) -> list[str]:
    """Return where a result comes from, as lines of text.

    Parameters
    ----------
    result : PopulationYields

    Returns
    -------
    list of str
        Version, units, the population in one line and as its file, sets with their
        checksums, policies, notes.
    """
    told = attributes(result)
    sets = [f"set {id} sha256 {sha}" for id, sha in zip(told["sets"], told["set_checksums"], strict=True)]
    return [
        f"{FORMAT}, steelyard {told['steelyard_version']}",
        summary(result.population),
        "total, net: Msun per Msun formed up to the age; rates: Msun per yr and Msun formed",
        "followed 0: the source doesn't follow the species; missing, not zero",
        *sets,
        *(f"policy {line}" for line in told["policies"]),
        *(f"note {line}" for line in told["notes"]),
        *origin(result.population),
    ]


def summary(population: Population) -> str:
    """Return a population in one line.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> summary(Population(0.02, [StellarSource("agb", ["karakas-2010"])]))
    'Z = 0.02; kroupa-2001 0.08-120 Msun; agb: karakas-2010'
    """
    mass_function = population.imf
    lo, hi = mass_function.limits
    form = mass_function.to_dict().get("form", "function")
    parts = [f"Z = {population.metallicity:g}", f"{form} {lo:g}-{hi:g} Msun"]
    for source in population.sources:
        sets = ", ".join(entry.name for entry in source.sets)
        number = "" if isinstance(source, StellarSource) else f", {source.number:g} per Msun"
        parts.append(f"{source.kind}: {sets}{number}")
    return "; ".join(parts)


def policies(result: PopulationYields) -> tuple[str, ...]:
    """Return the policies in force, a line each: what serves each range of mass, and the rest."""
    population = result.population
    laws = (
        population.lifetimes
        if isinstance(population.lifetimes, str)
        else result.population.prepared.curve.law
    )
    lines = [
        f"{one['from']:g}-{one['to']:g} Msun: {one['served_by']}, counted for {one['source']}"
        for one in result.ranges
    ]
    lines += [
        f"between models: {population.interpolation} in initial mass",
        f"beyond the metallicities of a set: {population.edges.metallicity}",
        f"lifetimes: {laws}",
        f"solar mixture: {population.solar}",
    ]
    for source in population.sources:
        if isinstance(source, StellarSource):
            lines.append(f"winds that a set of {source.kind} doesn't list: {source.winds}")
    return tuple(lines)


def attributes(result: PopulationYields) -> dict[str, Any]:
    """Return where a result comes from, by name.

    Parameters
    ----------
    result : PopulationYields

    Returns
    -------
    dict
        ``format``, ``steelyard_version``, ``summary``, ``population`` (its file, TOML): text;
        ``sets``, ``set_checksums`` (one each), ``policies``, ``notes``: tuples of text.
    """
    from importlib.metadata import version

    from .popfile import population_to_toml

    sets = result.population.prepared.sets
    return {
        "format": FORMAT,
        "steelyard_version": version("steelyard"),
        "summary": summary(result.population),
        "population": population_to_toml(result.population),
        "sets": tuple(one.id for one in sets),
        "set_checksums": tuple(one.checksum for one in sets),
        "policies": policies(result),
        "notes": tuple(result.notes),
    }
