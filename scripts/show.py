"""`steelyard show`: one yield set, what is known of it and its figures."""

from __future__ import annotations

import csv
import sys
from collections.abc import Sequence
from typing import Any, Literal

import numpy as np
import typer

from steelyard.scripts import given, terminal
from steelyard.scripts.sets import about, citation, convention, papers
from steelyard.yields import Slice, YieldSet, load
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.nuclides import parse
from steelyard.yields.units import plain

#: elements shown when none is asked for, as far as the set follows them
USUAL = ("C", "N", "O", "Mg", "Si", "S", "Ca", "Fe")

ACCOUNTS = ("ejected", "remnant", "wind", "rest")

Convention = Literal["total", "net"]

OTHERS = typer.Option(
    [],
    "--against",
    metavar="SET",
    help="Another set, to stand beside this one at the metallicity named; may be given often.",
    show_default=False,
    autocompletion=terminal.set_ids,
)


def command(
    set: str = typer.Argument(
        ...,
        metavar="SET",
        help="Id of a yield set; `steelyard sets` lists them.",
        autocompletion=terminal.set_ids,
    ),
    metallicity: str = typer.Option(
        "", "--metallicity", "-Z", metavar="Z", help="Only models of this metallicity."
    ),
    species: str = typer.Option(
        "",
        *given.LISTED,
        metavar="LIST",
        help="Species to show, such as O,Mg24,Fe; all with elements or nuclides. Default: C, N, O, Mg,"
        " Si, S, Ca, Fe as far as they are followed; all in JSON and CSV.",
    ),
    convention: str = typer.Option(
        "", metavar="total|net", help="Total or net yields. Default: what the paper prints."
    ),
    others: list[str] = OTHERS,
    figure: str = typer.Option("", metavar="FILE", help="Draw the sets against each other."),
    json: bool = typer.Option(False, "--json", help="Print everything as JSON."),
    csv: bool = typer.Option(False, "--csv", help="Print the yields as CSV, a line a model."),
) -> None:
    """Show a yield set: paper, provenance, gaps, models and yields, all in Msun.

    M is the initial mass, "ejected" all mass lost until death, "wind" the part of it that the paper
    doesn't list, "rest" the part that belongs to no species the set follows.

    With --against, prints what each set says of stars of the same initial mass and metallicity, and
    the difference in dex. A tilde marks values between a set's models; outside them there are none.

    \b
    Examples:
      steelyard show karakas-2010
      steelyard show kobayashi-2006 --metallicity 0.02 --species O,Mg,Fe56
      steelyard show doherty-2014 --convention net --csv
      steelyard show karakas-2010 --against marigo-2001 -Z 0.008 --species C,N
    """
    grid = load(set)
    if json and csv:
        raise InputError("--json and --csv exclude each other", mend="choose one")
    chosen = _convention(grid, convention)
    if others:
        from steelyard.scripts import against

        against.command(set, others, metallicity, species, convention or "total", figure, json, csv)
        return
    if figure:
        raise InputError("one set is not drawn", where="--figure", mend="name another one with --against")
    slices = grid.slices if not metallicity else (_slice(grid, plain(metallicity, "", "--metallicity")),)
    names = _names(grid, species, everything=json or csv)
    if json:
        terminal.print_json(_dict(grid, slices, names, chosen))
    elif csv:
        _csv(grid, slices, names, chosen)
    else:
        _print(grid, slices, names, chosen)


def _convention(grid: YieldSet, asked: str) -> Convention:
    if asked not in ("", "total", "net"):
        raise InputError(f"{asked!r} isn't a convention", where="--convention", mend="choose total or net")
    return asked or ("net" if "total" in grid.derived else "total")


def _slice(grid: YieldSet, metallicity: float) -> Slice:
    if grid.event:
        raise InputError("lists single events, which have no metallicity", where=grid.id, mend="leave it out")
    return grid.at(metallicity)


def _names(grid: YieldSet, asked: str, everything: bool) -> list[str]:
    if asked == "elements":
        return list(dict.fromkeys(s.symbol for s in grid.parsed))
    if asked == "nuclides" or (not asked and everything):
        return list(grid.species)
    if not asked:
        return [e for e in USUAL if grid.columns(e)] or list(grid.species[:8])
    names = [parse(one).name for one in terminal.words(asked, "--species")]
    for one in names:
        if not grid.columns(one):
            known = [*grid.species, *dict.fromkeys(s.symbol for s in grid.parsed)]
            raise InputError(f"{one} isn't followed", where=grid.id, mend=nearest(one, known))
    return list(dict.fromkeys(names))


def _columns(grid: YieldSet, one: Slice, names: Sequence[str], chosen: Convention) -> dict[str, Any]:
    """Accounts and yields of all models at one metallicity, by name."""
    values = getattr(one, chosen) @ grid.projection(names)[0]
    accounts = {"ejected": one.ejected}
    if not grid.event:
        accounts |= {"remnant": one.remnant, "wind": one.wind}
    return accounts | {"rest": one.rest(chosen)} | dict(zip(names, values.T, strict=True))


def _dict(
    grid: YieldSet, slices: Sequence[Slice], names: Sequence[str], chosen: Convention
) -> dict[str, Any]:
    models = []
    for one in slices:
        columns = _columns(grid, one, names, chosen)
        for i, mass in enumerate(one.mass.tolist()):
            model: dict[str, Any] = (
                {} if grid.event else {"metallicity": float(one.metallicity), "mass": mass}
            )
            model |= {name: float(columns[name][i]) for name in ACCOUNTS if name in columns}
            models.append(model | {"yields": {name: float(columns[name][i]) for name in names}})
    figures = grid.info.get("figures", {})
    return {
        **{k: v for k, v in about(grid).items() if k != "species"},
        "summary": grid.info.get("summary", ""),
        "figures": dict(figures),
        "decay": grid.info.get("decay", ""),
        "missing": grid.info.get("missing", ""),
        "notes": list(grid.notes),
        "checksum": grid.checksum,
        "shown": chosen,
        "derived": chosen in grid.derived,
        "species": list(names),
        "models": models,
    }


def _csv(grid: YieldSet, slices: Sequence[Slice], names: Sequence[str], chosen: Convention) -> None:
    out = csv.writer(sys.stdout, lineterminator="\n")
    model = [] if grid.event else ["metallicity", "mass"]
    accounts = [a for a in ACCOUNTS if a in _columns(grid, slices[0], [], chosen)]
    out.writerow([*model, *accounts, *names])
    for one in slices:
        columns = _columns(grid, one, names, chosen)
        for i, mass in enumerate(one.mass):
            which = [] if grid.event else [float(one.metallicity), float(mass)]
            out.writerow([repr(v) for v in [*which, *(float(columns[n][i]) for n in (*accounts, *names))]])


def _print(grid: YieldSet, slices: Sequence[Slice], names: Sequence[str], chosen: Convention) -> None:
    out = terminal.console()
    info, figures = grid.info, grid.info.get("figures", {})
    printed = convention(grid)
    birth = info.get("birth", {})
    out.print(f"{grid.id}: {info.get('summary', grid.kind)}", style="bold")
    out.print()
    out.print(
        terminal.facts(
            [
                ("kind", grid.kind),
                ("paper", [citation(p) for p in papers(grid)]),
                ("table", [str(p["table"]) for p in papers(grid) if "table" in p]),
                ("lists", f"{printed} yields of {len(grid.species)} {info.get('species', 'species')}"),
                ("origin", figures.get("origin", "")),
                ("checked", figures.get("checked", "")),
                ("odd", list(figures.get("oddities", []))),
                ("decay", info.get("decay", "")),
                ("missing", info.get("missing", "")),
                ("birth", birth.get("source", "")),
                ("notes", list(grid.notes)),
                ("checksum", grid.checksum),
            ]
        )
    )
    if not grid.event:
        out.print()
        grids = terminal.table("Z", "initial masses of the models, Msun", left=2)
        for one in grid.slices:
            grids.add_row(f"{one.metallicity:g}", " ".join(f"{m:g}" for m in one.mass))
        out.print(grids)
    how = f"{chosen.capitalize()} yields, Msun" + (", derived" if chosen in grid.derived else "")
    for one in slices:
        columns = _columns(grid, one, names, chosen)
        heading = f"{how}, of one event" if grid.event else f"{how}, Z = {one.metallicity:g}"
        for part in _blocks(list(columns), out.width):
            first = [] if grid.event else ["M"]
            made = terminal.table(*first, *part, left=0, title=heading)
            for i, mass in enumerate(one.mass):
                cells = [] if grid.event else [f"{mass:g}"]
                made.add_row(*cells, *(_cell(name, float(columns[name][i])) for name in part))
            out.print()
            out.print(made)
            heading = ""


def _blocks(names: Sequence[str], width: int) -> list[list[str]]:
    """Cut columns into blocks that a terminal can show beside the initial mass."""
    fit = max(1, (width - 6) // 12)
    return [list(part) for part in np.array_split(list(names), -(-len(names) // fit))]


def _cell(name: str, value: float) -> str:
    # subtraction leaves dust of 1e-17 in what is nothing
    return f"{0.0 if abs(value) < 1e-12 else value:.4g}" if name in ACCOUNTS else terminal.scientific(value)
