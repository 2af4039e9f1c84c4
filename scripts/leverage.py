"""`steelyard leverage`: which published models, masses and parameters yields rest on."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Annotated, Any

import numpy as np
import typer

from steelyard.integrate.leverage import BIRTH, Leverage, leverage
from steelyard.integrate.leverage.telling import sentence, to_dict, write_csv
from steelyard.integrate.popfile import told
from steelyard.integrate.population import Population
from steelyard.integrate.results import Convention
from steelyard.scripts import given, terminal
from steelyard.yields.errors import InputError
from steelyard.yields.nuclides import parse

#: elements where neither the command line nor the file names any
CHOICE = ("C", "N", "O", "Mg", "Si", "Ca", "Mn", "Fe", "Ni")

UNIT = "Msun per Msun formed"


def command(
    file: str = given.POPULATION,
    element: Annotated[
        list[str] | None,
        typer.Option(
            *given.LISTED,
            metavar="LIST",
            help="Elements or nuclides, such as O,Mg,Fe; may be given again. Default: the file's list,"
            f" or {','.join(CHOICE)}.",
            show_default=False,
        ),
    ] = None,
    ages: str = typer.Option(
        "", metavar="LIST", help='Ages such as "10 Myr, 1 Gyr". Default: the oldest of the file.'
    ),
    net: bool = typer.Option(False, "--net", help="Of net yields: less what was there at birth."),
    top: int = typer.Option(3, metavar="N", help="How many models to list for each element."),
    changes: list[str] = given.WITH,
    output: str = typer.Option(
        "", "--output", "-o", metavar="DIR", help="Folder for the files. Default: the current one."
    ),
    figures: bool = typer.Option(True, "--figures/--no-figures", help="Draw the two figures, or don't."),
    json: bool = typer.Option(
        False, "--json", help="Print JSON only; files are written only where --output says so."
    ),
) -> None:
    """Tell what the yields of a population rest on: models, ranges of initial mass, parameters.

    A model makes its weight times what its paper prints for it. The rest is birth composition, which
    no table prints: winds that a set doesn't list, and what stars return unchanged. All parts sum to
    the yield. x2 and x1/2 say how far the yield moves, in dex, where one model's figure is wrong by a
    factor of 2. Writes leverage.csv (every part by source) and, as .png and .pdf, leverage-by-mass
    and mass-function-and-weights: how many stars each model stands for.

    \b
    Examples:
      steelyard leverage --elements O,Fe --output results
      steelyard leverage --elements Mn --ages "100 Myr, 13.8 Gyr" --net --top 5 --no-figures
      steelyard leverage --elements O --json
    """
    if top < 1:
        raise InputError(f"{top} models can't be listed", where="--top", mend="give 1 or more")
    population = given.population(file, changes, ages=ages)
    names = _elements(population, element or [])
    wanted = population.ages if ages else (max(population.ages),)
    with told(file), terminal.slow("weighing"):
        found = leverage(replace(population, species=names, ages=wanted))
    convention: Convention = "net" if net else "total"
    written = []
    undrawn: list[str] = []
    if output or not json:
        with terminal.slow("writing"):
            written, undrawn = _write(found, names, convention, Path(output or "."), figures)
    if json:
        terminal.print_json(to_dict(found, names, convention, top))
        return
    with terminal.slow("differentiating"):
        _print(found, names, convention, top)
    print()
    print("written: " + ", ".join(str(path) for path in written))
    for why in undrawn:
        print(f"not drawn: {why}")


def _elements(population: Population, asked: Sequence[str]) -> list[str]:
    if asked:
        return given.names(",".join(asked))
    if not isinstance(population.species, str):
        return [parse(one).name for one in population.species]
    symbols = {parse(one).symbol for one in population.prepared.columns.species}
    return [one for one in CHOICE if one in symbols] or sorted(symbols)


def _write(
    found: Leverage, names: Sequence[str], convention: Convention, where: Path, figures: bool
) -> tuple[list[Path], list[str]]:
    """Write all files; the paths of those written, and why a figure isn't among them."""
    drawn, undrawn = _draw(found, names, convention) if figures else ({}, [])
    where = terminal.folder(where)
    written = [where / "leverage.csv"]
    write_csv(found, written[0], names, convention)
    for name, figure in drawn.items():
        from steelyard.integrate.figures import save

        for suffix in (".png", ".pdf"):
            written.append(where / f"{name}{suffix}")
            save(figure, written[-1])
    return written, undrawn


def _draw(found: Leverage, names: Sequence[str], convention: Convention) -> tuple[dict[str, Any], list[str]]:
    from steelyard.integrate.figures import contribution_by_mass, mass_function_and_weights

    drawn: dict[str, Any] = {}
    undrawn = []
    for name, draw in (
        ("leverage-by-mass", lambda: contribution_by_mass(found, names[:9], _last(found), convention)),
        ("mass-function-and-weights", lambda: mass_function_and_weights(found, _last(found))),
    ):
        try:
            drawn[name] = draw()
        except InputError as error:  # of a young population
            undrawn.append(f"{name}: {error}")
    return drawn, undrawn


def _last(found: Leverage) -> int:
    return int(np.argmax(found.result.ages))


def _print(found: Leverage, names: Sequence[str], convention: Convention, top: int) -> None:
    out, result = terminal.console(), found.result
    for i, years in enumerate(result.ages.tolist()):
        at = f"{convention} yields up to {terminal.duration(years)}"
        if i:
            out.print()
        out.print(_models(found, names, convention, i, top, f"Who makes the {at}"))
        for line in _lacking(found, names):
            out.print(line)
        out.print()
        for name in names:
            out.print(sentence(found, name, i, convention))
        for title, table in (
            (f"Where the {at} are made, % of each", _ranges(found, names, convention, i)),
            (f"How the {at} follow parameters, d ln E / d ln p", _parameters(found, names, convention, i)),
        ):
            if table.row_count:
                out.print()
                out.print(title, style="bold")
                out.print(table)
    out.print()
    out.print(terminal.facts([("notes", list(result.notes))]))


def _models(
    found: Leverage, names: Sequence[str], convention: Convention, i: int, top: int, title: str
) -> Any:
    made = terminal.table("", "model", UNIT, "share", "x2 [dex]", "x1/2 [dex]", left=2, title=title)
    for name in names:
        ranked = found.ranked(name, i, convention, top)
        whole = float(found.result.get(name, None, convention)[i])
        born = sum(c.amount for c in ranked if c.model is None)
        rows = [(str(c.model), c.amount, _dex(c.doubled), _dex(c.halved)) for c in ranked if c.model]
        every = found.contribution(name)[:, i].sum(axis=0)
        others = int(np.count_nonzero(every)) - len(rows)
        if others:
            rest = float(every.sum()) - sum(amount for _, amount, *_ in rows)
            rows.append((f"{others} other model{'s' if others > 1 else ''}", rest, "", ""))
        rows.append((BIRTH, born, "", ""))
        for k, (label, amount, *moves) in enumerate(rows):
            made.add_row("" if k else name, label, terminal.scientific(amount), _share(amount, whole), *moves)
        lacks = terminal.mark("†", "*") if found.result.lacking(name) else ""
        made.add_row("", "sum", f"{terminal.scientific(whole)}{lacks}", _share(whole, whole), "", "")
        made.add_section()
    return made


def _ranges(found: Leverage, names: Sequence[str], convention: Convention, i: int) -> Any:
    made = terminal.table("Msun", "source", "served by", *names, left=3)
    columns = [found.ranges(name, convention) for name in names]
    wholes = [float(found.result.get(name, None, convention)[i]) for name in names]
    for row in zip(*columns, strict=True):
        one = row[0]
        born = "" if one["from"] is None else f"{one['from']:g}-{one['to']:g}"
        shares = [
            _share(float(cell["amount"][i]), whole, False) for cell, whole in zip(row, wholes, strict=True)
        ]
        if any(share not in ("0.0", "-") for share in shares):
            made.add_row(born, one["source"], one["served_by"], *shares)
    return made


def _parameters(found: Leverage, names: Sequence[str], convention: Convention, i: int) -> Any:
    made = terminal.table("parameter", "value", *names)
    for name, (value, total, net) in found.by_parameter.items():
        slopes = (total if convention == "total" else net)[i]
        cells = []
        for species, slope in zip(names, slopes.tolist(), strict=True):
            whole = float(found.result.get(species, None, convention)[i])
            cells.append(f"{round(value * slope / whole, 2) + 0.0:+.2f}" if whole else "-")
        if any(cell not in ("-", "+0.00") for cell in cells):
            made.add_row(name, f"{value:.4g}", *cells)
    return made


def _lacking(found: Leverage, names: Sequence[str]) -> list[str]:
    dagger, out = terminal.mark("†", "*"), []
    for source in found.result.sources:
        lacked = [name for name in names if source in found.result.lacking(name)]
        if lacked:
            out.append(f"{dagger} {source} doesn't follow {', '.join(lacked)}, at some masses at least")
    return out


def _share(amount: float, whole: float, unit: bool = True) -> str:
    if not whole:
        return "-"
    # -0.0 would say that it lies below
    return f"{round(100 * amount / whole, 1) + 0.0:.1f}{' %' if unit else ''}"


def _dex(value: float) -> str:
    return f"{value:+.3f}" if np.isfinite(value) else "-"
