"""`steelyard show SET --against SET`: yield sets side by side."""

from __future__ import annotations

import csv
import sys
from collections.abc import Sequence
from typing import Any

import numpy as np

from steelyard.scripts import given, terminal
from steelyard.yields import load
from steelyard.yields.against import Against, against
from steelyard.yields.errors import InputError

#: elements shown where none is asked for, as far as any of the sets follows them
USUAL = ("C", "N", "O", "Mg", "Si", "Ca", "Fe")


def command(
    set: str,
    others: Sequence[str],
    metallicity: str,
    species: str,
    convention: Any,
    figure: str,
    as_json: bool,
    as_csv: bool,
) -> None:
    """Print sets against the first one, and draw them; arguments as `steelyard show` has them."""
    grids = [load(one) for one in (set, *others)]
    if not metallicity:
        raise InputError(
            "sets are compared at one metallicity", where="--metallicity", mend="such as -Z 0.02"
        )
    names = given.names(species, "--species") or [e for e in USUAL if any(g.columns(e) for g in grids)]
    found = against(grids, names, metallicity, convention)
    if figure:
        from steelyard.yields.figures import save, set_against_set

        save(set_against_set(found), figure)
    if as_json:
        terminal.print_json(found.to_dict())
    elif as_csv:
        _csv(found)
    else:
        _print(found)
        if figure:
            print(f"\nwritten: {figure}")


def _csv(found: Against) -> None:
    out = csv.writer(sys.stdout, lineterminator="\n")
    out.writerow(["species", "mass", "set", "model", "yield", "dex"])
    for i, name in enumerate(found.species):
        for m, mass in enumerate(found.mass.tolist()):
            for k, one in enumerate(found.sets):
                value, dex = float(found.values[k, m, i]), float(found.dex[k, m, i])
                if not np.isnan(value):
                    held = [repr(value), "" if np.isnan(dex) else repr(dex)]
                    out.writerow([name, repr(mass), one, int(found.model[k, m]), *held])


def _print(found: Against) -> None:
    out = terminal.console()
    told = [
        (one, f"{used}{'; derived' if derived else ''}")
        for one, used, derived in zip(found.sets, found.used, found.derived, strict=True)
    ]
    title = f"{found.convention.capitalize()} yields at Z = {found.metallicity:g}, Msun; dex: over the first"
    out.print(title, style="bold")
    out.print(terminal.facts(told))
    heads = [found.sets[0], *(head for one in found.sets[1:] for head in (one, "dex"))]
    for i, name in enumerate(found.species):
        made = terminal.table("M", *heads, left=0, title=name)
        for m, mass in enumerate(found.mass.tolist()):
            cells = []
            for k in range(len(found.sets)):
                cells.append(_cell(float(found.values[k, m, i]), bool(found.model[k, m])))
                dex = float(found.dex[k, m, i])
                cells += ["" if np.isnan(dex) else f"{dex:+.2f}"] if k else []
            made.add_row(f"{mass:g}", *cells)
        out.print()
        out.print(made)
    lacks = [
        f"{one} doesn't follow {', '.join(n for i, n in enumerate(found.species) if none[i])}"
        for one, none in zip(found.sets, np.isnan(found.values).all(axis=1), strict=True)
        if none.any()
    ]
    for line in lacks:
        out.print(line)


def _cell(value: float, model: bool) -> str:
    if np.isnan(value):
        return "- "
    return f"{terminal.scientific(value)}{' ' if model else '~'}"
