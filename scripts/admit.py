"""`steelyard admit`: bring a published table into the library."""

from __future__ import annotations

import shlex
from pathlib import Path
from typing import Annotated, Any

import numpy as np
import typer

from steelyard.scripts import terminal
from steelyard.yields import YieldSet, store
from steelyard.yields.errors import InputError
from steelyard.yields.exchange import recognise
from steelyard.yields.layouting import Reading, layout, read_sets
from steelyard.yields.library import DEFAULT_SOLAR

#: a miss in a model's budget beyond rounding, as a share of its initial mass
WORRYING = 0.01

#: what the printed figures take in
COVERS = {"life": "of the whole life", "explosion": "of the explosion without the winds before it"}


def command(
    files: Annotated[
        list[str],
        typer.Argument(
            metavar="FILE...", help="All files of one yield set, compressed or not; or an exported set."
        ),
    ],
    by: str = typer.Option(
        "", "--layout", "-l", metavar="NAME|FILE", help="What stands where: a shipped layout, or your TOML."
    ),
    id: str = typer.Option("", "--id", metavar="ID", help="Id of the set, such as author-2026."),
    format: str = typer.Option(
        "",
        "--format",
        metavar="FORMAT",
        help="mrt, cds, ecsv, csv, text, latex, votable, fits, hdf5 or block. Default: told from the file.",
    ),
    guess: bool = typer.Option(
        False, "--guess", help="Propose a layout for FILE, print it for editing, keep nothing."
    ),
    dry_run: bool = typer.Option(False, "--dry-run", help="Read and report, keep nothing."),
    replace: bool = typer.Option(False, "--replace", help="Replace an admitted set of the same id."),
    json: bool = typer.Option(False, "--json", help="Print JSON: a list with one object for each set."),
) -> None:
    """Bring a published table into your library, beside the shipped sets.

    A layout says where masses, metallicities, species and yields stand. Start with --guess, edit what
    it prints, try it with --dry-run, then admit. Shipped layouts: wide, long, transposed, block, and
    those of single papers. A set exported with `steelyard library --export` needs no layout.

    \b
    Examples:
      steelyard admit table2.txt --guess > table2.toml
      steelyard admit table2.txt --layout table2.toml --id author-2026 --dry-run
      steelyard admit datafile1.txt --layout kobayashi-2006 --id my-kobayashi
      steelyard admit tablea2.dat tablea3.dat --layout cds-j-mnras-403-1413
    """
    if guess:
        _guess(files, by, format)
        return
    with terminal.slow("reading"):
        readings = _read(files, by, id, format)
        # everything is laid on the grid before anything is kept, so that no set is kept in part
        grids = [one.grid(DEFAULT_SOLAR) for one in readings]
    for one in readings:
        store.check_id(one.id, replace=replace or dry_run)
    kept: list[Path | None] = [None for _ in readings]
    if not dry_run:
        kept = [store.keep(one, replace=replace) for one in readings]
    if json:
        terminal.print_json([_dict(*three) for three in zip(readings, grids, kept, strict=True)])
        return
    for one, grid, path in zip(readings, grids, kept, strict=True):
        _print(one, grid, path)


def _guess(files: list[str], by: str, format: str) -> None:
    from steelyard.yields.layouting.guess import guess

    if len(files) != 1 or by:
        raise InputError("--guess takes one file and no layout", mend="name the table to propose one for")
    print(guess(files[0], format), end="")


def _read(files: list[str], by: str, id: str, format: str) -> tuple[Reading, ...]:
    if by:
        return read_sets(files, layout(by), id=id, format=format)
    known = recognise(files[0]) if len(files) == 1 else None
    if known is None:
        raise InputError(
            "nothing says what stands where in it",
            where=files[0],
            mend=f"give --layout NAME|FILE; `steelyard admit {shlex.quote(files[0])} --guess` proposes one",
        )
    return (known.renamed(id) if id else known,)


def budget(reading: Reading, grid: YieldSet) -> dict[str, tuple[float, float]]:
    """By how much the masses of the worst model miss each other, in Msun and as a share of its mass.

    Only what the table itself lets check.
    """
    misses = {}
    mass, z, remnant = (_column(reading, name) for name in ("mass", "metallicity", "remnant"))
    sums = {c: reading.tables[c].figures.sum(axis=1) for c in ("net", "total") if c in reading.tables}
    if "net" in sums:
        misses["sum of net yields"] = sums["net"]
    if mass is not None and z is not None:
        ejected, wind = np.zeros(len(mass)), np.zeros(len(mass))
        for i, (one, metallicity) in enumerate(zip(mass, z, strict=True)):
            part = grid.at(metallicity)
            at = int(np.argmin(np.abs(part.mass - one)))
            ejected[i], wind[i] = part.ejected[at], part.wind[at]
        if remnant is not None and reading.info["ejected"] != "mass - remnant":
            misses["mass - remnant - ejected"] = mass - remnant - ejected
        if "total" in sums and reading.info["ejected"] != "sum of total":
            misses["ejected - sum of total yields"] = ejected - wind - sums["total"]
    sizes = {name: np.abs(miss) for name, miss in misses.items()}
    share = np.inf if mass is None else mass
    return {name: (float(size.max()), float((size / share).max())) for name, size in sizes.items()}


def _column(reading: Reading, name: str) -> np.ndarray | None:
    models = reading.tables["models"]
    return models.figures[:, models.columns.index(name)] if name in models.columns else None


def remarks(reading: Reading, grid: YieldSet) -> list[str]:
    """What somebody should look at before using the set."""
    found = list(reading.warnings)
    for part in grid.slices:
        row, column = np.unravel_index(int(np.argmin(part.total)), part.total.shape)
        worst = float(part.total[row, column])
        if worst < -1e-10:
            count = int((part.total < -1e-10).sum())
            found.append(
                f"{count} total yields at Z = {part.metallicity:g} are negative, {grid.species[column]} of"
                f" {part.mass[row]:g} Msun most: {worst:.2e} Msun"
            )
    for name, (size, share) in budget(reading, grid).items():
        if share > WORRYING:
            found.append(f"{name} is up to {size:.3g} Msun: check units, convention and remnants")
    return found


def _print(reading: Reading, grid: YieldSet, path: Path | None) -> None:
    out = terminal.console()
    rest = reading.info.get("ignore", {}).get("columns", [])
    masses = (
        []
        if grid.event
        else [f"{len(s.mass)} at Z = {s.metallicity:g}: {_masses(s.mass)}" for s in grid.slices]
    )
    species = f"{len(grid.species)}: {', '.join(grid.species[:6])}" + (
        " ..." if len(grid.species) > 6 else ""
    )
    out.print(
        terminal.facts(
            [
                ("set", grid.id),
                ("kind", grid.kind),
                ("from", [f"{name}  sha256 {digest[:16]}..." for name, digest in reading.sources]),
                ("models", masses or "one event"),
                ("species", species + (f"; to rest: {', '.join(rest[:8])}" if rest else "")),
                ("lists", f"{reading.info['yields']} yields, {COVERS[reading.info['covers']]}"),
                ("ejected", reading.info["ejected"]),
                ("misses", [f"{k}: up to {size:.2g} Msun" for k, (size, _) in budget(reading, grid).items()]),
                ("notes", list(grid.notes[: len(grid.notes) - len(reading.warnings)])),
                ("check", remarks(reading, grid)),
                ("kept", str(path) if path else "no (--dry-run)"),
            ]
        )
    )


def _masses(mass: np.ndarray) -> str:
    shown = [f"{m:g}" for m in mass]
    return f"{', '.join(shown)} Msun" if len(shown) <= 12 else f"{shown[0]} to {shown[-1]} Msun"


def _dict(reading: Reading, grid: YieldSet, path: Path | None) -> dict[str, Any]:
    return {
        "id": grid.id,
        "kind": grid.kind,
        "models": sum(len(s.mass) for s in grid.slices),
        "masses": [] if grid.event else list(grid.masses),
        "metallicities": [] if grid.event else list(grid.metallicities),
        "species": list(grid.species),
        "convention": reading.info["yields"],
        "budget_Msun": {name: size for name, (size, _) in budget(reading, grid).items()},
        "warnings": remarks(reading, grid),
        "checksum": grid.checksum,
        "kept": str(path) if path else None,
    }
