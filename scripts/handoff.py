"""`steelyard handoff`: yields over metallicity and age, in a file for another code."""

from __future__ import annotations

from pathlib import Path

import typer

from steelyard.integrate.provenance import FORMAT
from steelyard.scripts import given, terminal
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.units import plain

FORMATS = ("hdf5", "netcdf", "fits", "votable", "ecsv", "csv")

#: what a file's ending says of its form
ENDINGS = {
    ".nc": "netcdf",
    ".fits": "fits",
    ".vot": "votable",
    ".xml": "votable",
    ".ecsv": "ecsv",
    ".csv": "csv",
}


def command(
    file: str = given.POPULATION,
    lowest: str = typer.Option(
        "1e-4", "--from", metavar="Z", help="Lowest metallicity, 0 too; nodes are chosen."
    ),
    highest: str = typer.Option("0.03", "--to", metavar="Z", help="Highest metallicity."),
    metallicities: str = typer.Option("", metavar="LIST", help="Metallicities in place of chosen ones."),
    ages: str = typer.Option("", metavar="LIST", help="Ages in place of chosen ones."),
    error: float = typer.Option(1e-2, metavar="E", help="Bound on the error of linear interpolation."),
    species: str = given.SPECIES,
    changes: list[str] = given.WITH,
    form: str = typer.Option(
        "", "--format", metavar="|".join(FORMATS), help="Form of the file. Default: by its ending, else hdf5."
    ),
    output: str = typer.Option(..., "--output", "-o", metavar="FILE", help="File to write."),
) -> None:
    """Write yields over metallicity, age, source and species to a file for another code.

    Metallicities and ages are chosen so that interpolation linear in log10 of both stays within the
    error asked for; the file says so, with the largest error found between the nodes.

    \b
    Examples:
      steelyard handoff --species O,Fe --error 0.05 -o yields.h5
      steelyard handoff --metallicities 0.004,0.02 --ages "10 Myr, 1 Gyr" -o yields.csv
      steelyard handoff --species O,Fe --error 0.05 --format netcdf -o yields.nc
    """
    from steelyard.integrate.handoff import handoff, write_handoff

    path = Path(output)
    form = form or ENDINGS.get(path.suffix.casefold(), "hdf5")
    if form not in FORMATS:
        raise InputError(f"format {form!r} isn't known", where="--format", mend=nearest(form, FORMATS))
    # before the work, not after
    if not path.parent.is_dir():
        raise InputError(f"there is no folder {path.parent}", where=output, mend="make it first")
    terminal.refuse_foreign(path, FORMAT)
    population = given.population(file, changes, species=species)
    nodes = given.read_given_ages(ages) if ages else None
    if metallicities:
        zs = plain(terminal.words(metallicities, "--metallicities"), "", "--metallicities")
    else:
        zs = [plain(lowest, "", "--from"), plain(highest, "", "--to")]
    with terminal.slow("weighing"):
        made = handoff(population, zs, nodes, error, chosen=not metallicities)
    with terminal.slow("writing"):
        write_handoff(made, path, form)
    print(
        f"{len(made.results)} metallicities, {len(made.ages)} ages, {len(made.results[0].sources)} sources,"
        f" {len(made.results[0].species)} species; error of interpolation {made.checked:.2e}"
    )
    print(f"written: {output}, {path.stat().st_size / 1e6:.3g} MB; `steelyard weigh {output}` checks it")
