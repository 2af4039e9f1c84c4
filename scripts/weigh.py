"""`steelyard weigh`: the yields of a population, printed, written and drawn."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from json import dumps
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import typer

from steelyard.integrate.popfile import template, told
from steelyard.integrate.results import PopulationYields
from steelyard.scripts import given, terminal
from steelyard.yields.errors import InputError

if TYPE_CHECKING:
    from steelyard.integrate.spread import YieldErrors

TEMPLATE, SCHEMA = "population.toml", "population.schema.json"

#: columns; no table is wider
WIDEST = 10_000

#: rates and amounts, as the headings say
UNITS = {False: "Msun per Msun formed", True: "Msun per yr and Msun formed"}


def command(
    file: str = typer.Argument(
        "",
        metavar="FILE",
        help="Population file (TOML), or any table, page or data file made of one, to weigh again. Default:"
        " the population that --template writes.",
        show_default=False,
    ),
    ages: str = typer.Option(
        "", metavar="LIST", help='Ages in place of the file\'s, such as "10 Myr, 1 Gyr"; all are printed.'
    ),
    metallicity: str = typer.Option(
        "", "--metallicity", "-Z", metavar="Z", help="Metallicity in place of the file's."
    ),
    species: str = given.SPECIES,
    net: bool = typer.Option(False, "--net", help="Print net yields: less what was there at birth."),
    rate: bool = typer.Option(False, "--rate", help="Print yields per year at an age, not up to it."),
    spread: str = typer.Option(
        "",
        metavar=f"FILE|{given.ASSUMED}",
        help="Errors of the published figures (TOML), carried through to every yield and [X/Fe];"
        f" {given.ASSUMED}: 0.15 dex on all metals, which no paper states.",
    ),
    changes: list[str] = given.WITH,
    output: str = typer.Option(
        "", "--output", "-o", metavar="DIR", help="Folder for the files. Default: the current one."
    ),
    figures: bool = typer.Option(True, "--figures/--no-figures", help="Draw the two figures, or don't."),
    json: bool = typer.Option(
        False, "--json", help="Print JSON only; files are written only where --output says so."
    ),
    explained: bool = typer.Option(
        False,
        "--template",
        help=f"Write a population file with every key explained, to FILE (default {TEMPLATE}; - prints it).",
    ),
    schema: bool = typer.Option(
        False,
        "--schema",
        help="Write the JSON Schema of population files, by which editors complete them, to FILE (default"
        f" {SCHEMA}; - prints it).",
    ),
) -> int:
    """Weigh a stellar population: what it ejects by element, source and time, per Msun formed.

    Prints the yields at the last age (or at each of --ages) and what they rest on. Writes yields.h5,
    yields.csv and, as .png and .pdf, yields-over-time and production-pattern. Given any output of an
    earlier run in place of a population file, makes it again and says whether the digits agree (exit
    status 1 where they don't).

    \b
    Examples:
      steelyard weigh --output results
      steelyard weigh --template mine.toml
      steelyard weigh --metallicity 0.004 --ages "100 Myr, 13.8 Gyr" --no-figures
      steelyard weigh --species O,Mg,Fe --json
      steelyard weigh --with core-collapse=limongi-chieffi-2018-R-v150 -o other
      steelyard weigh --species C,O,Mg,Fe --spread assumed --no-figures
      steelyard weigh results/yields.csv
    """
    if explained or schema:
        _write_help(file, output, schema)
        return 0
    if file and _is_earlier(_origin(file)):
        if any((ages, metallicity, species, output, net, rate, spread, changes)):
            raise InputError(
                "an earlier result is weighed again as it was, to compare the digits",
                where=file,
                mend="leave out all options but --json",
            )
        return _again(_origin(file), json)
    if json and rate:
        raise InputError("the JSON holds amounts, no rates", where="--rate", mend="they are in yields.h5")
    if spread and rate:
        raise InputError("errors are of amounts, not of rates", where="--spread", mend="leave out --rate")
    population = given.population(file, changes, ages=ages, species=species, metallicity=metallicity)
    with told(file), terminal.slow("weighing"):
        result = population.weigh()
        errors = given.errors(result, spread) if spread else None
    written, undrawn = [], []
    if output or not json:
        with terminal.slow("writing"):
            written, undrawn = _write(result, Path(output or "."), figures, errors)
    if json:
        terminal.print_json(result.to_dict() | ({"errors": errors.to_dict()} if errors else {}))
    else:
        _print(result, list(range(len(result.ages))) if ages else [_last(result)], net, rate, errors)
        print()
        print("written: " + ", ".join(str(path) for path in written))
        for why in undrawn:
            print(f"not drawn: {why}")
    return 0


def _origin(file: str) -> Path:
    """The file that tells how an output was made: of the two files of the CDS, the one beside the data."""
    path = Path(file)
    readme = path.parent / "ReadMe"
    return readme if path.name == "yields.dat" and readme.is_file() else path


def _is_earlier(path: Path) -> bool:
    """Whether a file is one that was made of a population, not a population file."""
    from steelyard.integrate.files import format_of
    from steelyard.integrate.record import is_output

    return path.suffix in (".h5", ".hdf5") or bool(format_of(path)) or (path.is_file() and is_output(path))


def _again(path: Path, json: bool) -> int:
    """Compare a file with what its population weighs to now: 0 where they agree, 1 where not."""
    from steelyard.integrate import files
    from steelyard.integrate.record import is_output
    from steelyard.integrate.scatter import again as drawn
    from steelyard.scripts.recorded import again

    with terminal.slow("weighing"):
        if is_output(path):
            same, message = again(path)
        elif drawn.is_scatter(path):
            same, message = drawn.agrees(path)
        else:
            same, message = files.agrees(path)
    if json:
        terminal.print_json({"file": str(path), "agrees": same, "message": message})
    else:
        print(message)
    return 0 if same else 1


def _write_help(file: str, output: str, schema: bool) -> None:
    """Write the template of a population file, or its schema."""
    text, name = template(), TEMPLATE
    if schema:
        from steelyard.integrate.popfile.schema import population_schema

        text, name = dumps(population_schema(), indent=2, ensure_ascii=False) + "\n", SCHEMA
    if file == "-":
        print(text, end="")
        return
    path = Path(output or ".") / (file or name)
    if output:
        terminal.folder(Path(output))
    terminal.write_new(path, text)
    more = (
        f"editors use it where a population file begins with #:schema ./{path}"
        if schema
        else f"`steelyard weigh {path}` weighs it"
    )
    print(f"written: {path}; {more}")


def _write(
    result: PopulationYields, where: Path, figures: bool, errors: YieldErrors | None
) -> tuple[list[Path], list[str]]:
    """Write all files; the paths of those written, and why a figure isn't among them."""
    from steelyard.integrate.files import write_csv, write_hdf5

    drawn, undrawn = _draw(result) if figures else ({}, [])
    where = terminal.folder(where)
    written = [where / "yields.h5", where / "yields.csv"]
    write_hdf5(result, written[0], errors)
    write_csv(result, written[1])
    if errors is not None:
        from steelyard.integrate.spread.file import write_errors_csv

        written.append(where / "yields-errors.csv")
        write_errors_csv(errors, written[-1])
    for name, figure in drawn.items():
        from steelyard.integrate.figures import save

        for suffix in (".png", ".pdf"):
            written.append(where / f"{name}{suffix}")
            save(figure, written[-1])
    return written, undrawn


def _draw(result: PopulationYields) -> tuple[dict[str, Any], list[str]]:
    from steelyard.integrate.figures import production_pattern, yields_over_time

    drawn: dict[str, Any] = {}
    undrawn = []
    for name, draw in (("yields-over-time", yields_over_time), ("production-pattern", production_pattern)):
        try:
            drawn[name] = draw(result)
        except InputError as error:  # a young population has nothing to draw, but a table
            undrawn.append(f"{name}: {error}")
    return drawn, undrawn


def _last(result: PopulationYields) -> int:
    return int(np.argmax(result.ages))


def _print(
    result: PopulationYields, at: Sequence[int], net: bool, rate: bool, errors: YieldErrors | None
) -> None:
    out = terminal.console()
    population = result.population
    law = population.lifetimes if isinstance(population.lifetimes, str) else "own"
    lo, hi = population.imf.limits
    out.print(
        f"Population of Z = {population.metallicity:g}; IMF {population.imf.form}, {lo:g}-{hi:g} Msun;"
        f" lifetimes {law}; solar mixture {population.solar}",
        style="bold",
    )
    for i in at:
        out.print()
        made = _table(result, i, "net" if net else "total", rate, errors, wide=True)
        unlimited = out.options.update(width=WIDEST)
        if errors and out.measure(made, options=unlimited).maximum > out.width:
            made = _table(result, i, "net" if net else "total", rate, errors, wide=False)
        out.print(made)
        for line in _lacking(result):
            out.print(line)
        out.print()
        out.print(terminal.facts(_budget(result, i)))
    out.print()
    facts = [("stars", list(_ranges(result))), ("notes", list(result.notes))]
    if errors is not None:
        facts.append(("errors", list(_stated(errors))))
    out.print(terminal.facts(facts))


def _table(
    result: PopulationYields,
    i: int,
    convention: Literal["total", "net"],
    rate: bool,
    errors: YieldErrors | None,
    wide: bool,
) -> Any:
    """Species down, sources across, at one age; beside yields (of sources if wide) their errors."""
    # some nuclides of iron are not iron
    whole_iron = "Fe" in result.species or result.population.species == "nuclides"
    compared = whole_iron and convention == "total"
    sign = [terminal.mark("±", "+-")] if errors else []
    by_source = [head for one in result.sources for head in (one, *(sign if wide else []))]
    whole_heads = [head for one in ("sum", *(["[X/Fe]"] if compared else [])) for head in (one, *sign)]
    at = terminal.duration(float(result.ages[i]))
    title = f"{convention.capitalize()} yields {'at' if rate else 'up to'} {at}, {UNITS[rate]}"
    made = terminal.table("", *by_source, *whole_heads, title=title)
    dagger = terminal.mark("†", "*")
    partly, nothing = _incomplete(result)
    for species in result.species:
        cells = []
        for source in result.sources:
            value = terminal.scientific(float(result.get(species, source, convention, rate)[i]))
            lacks = species in nothing[source]
            cells.append("- " if lacks else value + (dagger if species in partly[source] else " "))
            if errors and wide:
                cells.append("" if lacks else _error(float(errors.get(species, source)[i])))
        whole = terminal.scientific(float(result.get(species, None, convention, rate)[i]))
        cells.append(f"{whole}{dagger if result.lacking(species) else ' '}")
        if errors:
            cells.append(_error(float(errors.get(species)[i])))
        if compared:
            told = _ratio(result, species, rate, i)
            cells.append(f"{told}{dagger if told != '-' and result.lacking(species) else ' '}")
            if errors:
                value = float(errors.ratio(species, "Fe")[i])
                cells.append("" if told == "-" else f"{value:.2f}")
        made.add_row(species, *cells)
    return made


def _error(value: float) -> str:
    """Write a standard deviation in two digits; nothing where no error is stated."""
    return "" if value == 0 else f"{value:.1e}"


def _stated(errors: YieldErrors) -> Iterator[str]:
    """Which errors were stated, and what the columns of errors are."""
    for one in errors.spread.errors:
        covered = one.elements if isinstance(one.elements, str) else ", ".join(one.elements)
        between = f"{one.between:g}" if isinstance(one.between, float) else "a matrix"
        yield (
            f"{one.set or one.source}: {one.sigma:g} dex on {covered}; correlated over"
            f" {one.correlation_length:g} dex in mass, {one.common:g} of the variance common, between"
            f" elements {between}"
        )
    yield "stated or assumed by the user, published by nobody; beside yields stand standard deviations"


def _ratio(result: PopulationYields, species: str, rate: bool, i: int) -> str:
    try:
        value = float(result.ratio(species, "Fe", rate=rate)[i])
    except InputError:  # the Sun has no such nuclide
        return "-"
    # -0.00 would say that it lies below
    return f"{round(value, 2) + 0.0:+.2f}" if np.isfinite(value) else "-"


def _incomplete(result: PopulationYields) -> tuple[dict[str, list[str]], dict[str, list[str]]]:
    """What each source follows at some masses only, and what it doesn't follow at all."""
    partly = {s: [x for x in m if result.get(x, s).any()] for s, m in result.missing.items()}
    return partly, {s: [x for x in m if x not in partly[s]] for s, m in result.missing.items()}


def _lacking(result: PopulationYields) -> Iterator[str]:
    """Who doesn't follow which species, so that sums are without it."""
    dagger = terminal.mark("†", "*")
    partly, nothing = _incomplete(result)
    for source in result.sources:
        if nothing[source]:
            yield f"{dagger} sum without {source}, which doesn't follow {', '.join(nothing[source])}"
        if partly[source]:
            yield f"{dagger} {source} follows {', '.join(partly[source])} at some masses only"


def _budget(result: PopulationYields, i: int) -> Iterator[tuple[str, str]]:
    yield "returned", f"{result.returned[i]:.4f} Msun per Msun formed"
    yield "living", f"{result.living[i]:.4f}"
    kinds = ", ".join(f"{kind}s {mass[i]:.4f}" for kind, mass in result.remnants_by_kind.items())
    yield "remnants", f"{result.remnants[i]:.4f}: {kinds}"
    numbers = ", ".join(f"{kind} {number[i]:.4g}" for kind, number in result.events.items())
    yield "events", f"{numbers} per Msun formed" if numbers else ""


def _ranges(result: PopulationYields) -> Iterator[str]:
    for one in result.ranges:
        yield f"{one['from']:g}-{one['to']:g} Msun: {one['source']}, {one['served_by']}"
