"""`steelyard sets`: the yield sets there are."""

from __future__ import annotations

import warnings
from typing import Any

import typer

from steelyard.scripts import terminal
from steelyard.yields import YieldSet, load
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.library import catalogue
from steelyard.yields.store import LibraryWarning


def command(
    kind: str = typer.Option(
        "", help="Only sets of this kind: agb, core-collapse or thermonuclear.", metavar="KIND"
    ),
    figure: str = typer.Option(
        "", metavar="FILE", help="Draw at which initial masses and metallicities the sets have models."
    ),
    json: bool = typer.Option(False, "--json", help="Print JSON: a list with one object for each set."),
) -> None:
    """List the yield sets there are, with the range of their models.

    Masses are initial masses in Msun, Z is the mass fraction of metals at birth. "lists" says which
    yields the paper prints: total (all that is ejected), net (less what was there at birth) or both;
    what it does not print follows from the composition at birth. A set of single events has neither
    masses nor Z.

    \b
    Examples:
      steelyard sets --kind core-collapse
      steelyard sets --figure coverage.pdf
      steelyard sets --json
    """
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always", LibraryWarning)
        grids = [load(one) for one in catalogue()]
    for one in caught:
        terminal.complain(str(one.message))
    kinds = sorted({g.kind for g in grids})
    if kind and kind not in kinds:
        raise InputError(f"there are no sets of kind {kind!r}", where="--kind", mend=nearest(kind, kinds))
    chosen = [g for g in grids if not kind or g.kind == kind]
    if figure:
        from steelyard.yields.figures import coverage_map, save

        save(coverage_map(chosen), figure)
    if json:
        terminal.print_json([about(g) for g in chosen])
        return
    made = terminal.table("set", "masses", "Z", "species", "lists", "paper", gap=1)
    for column in made.columns[:5]:
        column.no_wrap = True
    for column in made.columns[4:]:
        column.justify = "left"
    for one in [k for k in kinds if any(g.kind == k for g in chosen)]:
        made.add_row(one, style="bold")
        for grid in (g for g in chosen if g.kind == one):
            facts = about(grid)
            made.add_row(
                grid.id,
                terminal.extent(facts["masses"]),
                terminal.extent(facts["metallicities"]),
                str(len(grid.species)),
                "both" if not grid.derived else facts["convention"],
                "; ".join(p["reference"] for p in papers(grid)),
            )
        made.add_section()
    terminal.console().print(made)
    if figure:
        print(f"\nwritten: {figure}")


def about(grid: YieldSet) -> dict[str, Any]:
    """What the JSON says of a set."""
    return {
        "id": grid.id,
        "kind": grid.kind,
        "masses": [] if grid.event else list(grid.masses),
        "metallicities": [] if grid.event else list(grid.metallicities),
        "species": list(grid.species),
        "convention": convention(grid),
        "source": "; ".join(citation(p) for p in papers(grid)),
    }


def convention(grid: YieldSet) -> str:
    """Which yields the paper prints: net, total, or both."""
    return " and ".join(c for c in ("net", "total") if c not in grid.derived)


def papers(grid: YieldSet) -> list[dict[str, Any]]:
    """The papers that published a set."""
    given = grid.info.get("paper", [])
    return [given] if isinstance(given, dict) else list(given)


def citation(paper: dict[str, Any]) -> str:
    """Authors, year, journal, table and DOI of a paper."""
    text = f"{paper['authors']} {paper['year']}, {paper['reference']}"
    return f"{text}, doi:{paper['doi']}" if "doi" in paper else text
