"""`steelyard audit`: what in a yield set contradicts itself, its siblings or its units."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any

import typer

from steelyard.scripts import terminal
from steelyard.yields import YieldSet, load
from steelyard.yields.audit import SEVERITIES, Finding, at_least, audit
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.library import DEFAULT_SOLAR

#: status when something of the severity asked for was found
FOUND = 1


def command(
    what: Annotated[
        list[str],
        typer.Argument(
            metavar="SET|FILE...",
            help="Id of a yield set, or the files that make up one.",
            autocompletion=terminal.set_ids,
        ),
    ],
    layout: str = typer.Option(
        "", metavar="NAME|FILE", help="How the files are laid out; an exported set needs none."
    ),
    severity: str = typer.Option(
        "warning",
        metavar="LEVEL",
        help="Show, and answer 1 for, findings of this weight: note, warning, error.",
    ),
    figure: str = typer.Option(
        "", metavar="PATH", help="Draw the models and species with the findings, as .png, .pdf or .svg."
    ),
    json: bool = typer.Option(False, "--json", help="Print JSON: a list with one object for each finding."),
) -> None:
    """Look for what is wrong or odd in a yield set: budgets, signs, units, order, breaks in its runs, gaps.

    A note is good to know, a warning is to be looked at before use, a model with an error is not to
    be used as it stands. Exit status is 1 if something of the severity asked for was found, 0 if not.

    \b
    Examples:
      steelyard audit doherty-2014
      steelyard audit karakas-2010 --severity note --figure karakas.png
      steelyard audit kobayashi-2006 --severity error --json
    """
    if severity not in SEVERITIES:
        raise InputError(
            f"{severity!r} isn't a severity", where="--severity", mend=nearest(severity, SEVERITIES)
        )
    with terminal.slow("auditing"):
        sets = _sets(what, layout)
    if figure and len(sets) > 1:
        raise InputError(
            f"{len(sets)} sets don't fit in one picture", where="--figure", mend="audit one at a time"
        )
    shown = [(grid, at_least(findings, severity)) for grid, findings in sets]
    if figure:
        from steelyard.yields.audit.figure import save

        for grid, findings in shown:
            save(grid, findings, figure)
    if json:
        terminal.print_json([f.to_dict() for _, findings in shown for f in findings])
    else:
        for (grid, findings), (_, everything) in zip(shown, sets, strict=True):
            _print(grid, findings, len(everything) - len(findings))
    if any(findings for _, findings in shown):
        raise typer.Exit(FOUND)


def _sets(what: list[str], layout: str) -> list[tuple[YieldSet, tuple[Finding, ...]]]:
    """The sets asked for, with all that was found."""
    if not layout and not any(Path(w).is_file() for w in what):
        grids = [load(one) for one in what]
        return [(grid, audit(grid)) for grid in grids]
    if layout:
        from steelyard.yields import layouting

        chosen = layouting.layout(layout)
        name = "" if chosen.id else Path(what[0]).name.split(".")[0]
        readings: list[Any] = list(layouting.read_sets(what, chosen, id=name))
    else:
        readings = [_exported(one) for one in what]
    made = []
    for reading in readings:
        grid = reading.grid(DEFAULT_SOLAR)
        made.append((grid, audit(grid, reading.printed())))
    return made


def _exported(path: str) -> Any:
    """A set that was exported from a library."""
    from steelyard.yields import store

    if Path(path).suffix != store.SUFFIX:
        raise InputError(
            "the layout of this file isn't known",
            where=path,
            mend="name it with --layout; `steelyard admit FILE --guess` proposes one",
        )
    from steelyard.yields.readers import open_source

    return store.decode(open_source(path).data, path)[1]


def _print(grid: YieldSet, findings: list[Finding], lighter: int) -> None:
    counts = [(s, sum(f.severity == s for f in findings)) for s in reversed(SEVERITIES)]
    said = ", ".join(f"{n} {s}{'s' if n > 1 else ''}" for s, n in counts if n) or "nothing found"
    if lighter:
        said += f" ({lighter} lighter not shown)"
    made = terminal.table("", "check", "model", "finding and advice", left=4, title=f"{grid.id}: {said}")
    for column in made.columns[:3]:
        column.no_wrap = True
    for finding in findings:
        text = f"{finding.explanation}. {finding.advice[:1].upper()}{finding.advice[1:]}."
        made.add_row(finding.severity, finding.check, finding.model, text)
    console = terminal.console()
    if findings:
        console.print(made)
    else:
        console.print(f"{grid.id}: {said}")
