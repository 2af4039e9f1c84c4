"""Species left out between others, species still radioactive, elements against their isotopes."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from ..errors import InputError
from ..grid import YieldSet
from ..nuclides import Species, is_stable, isotopes, parse, symbols
from .finding import Finding, listed
from .printed_figures import Sheet


def gaps(grid: YieldSet) -> Iterator[Finding]:
    """Name the stable nuclides (or elements) missing between the lightest and heaviest followed."""
    lacking = missing_between(grid)
    if not lacking:
        return
    names = tuple(s.name for s in lacking)
    what = "elements" if grid.follows_elements else "nuclides"
    yield Finding(
        "note",
        "species gap",
        grid.id,
        f"{len(names)} stable {what} between {grid.species[0]} and {grid.species[-1]} aren't followed:"
        f" {listed(names, 12)}",
        "missing isn't zero: take these from another set, or leave them out of sums",
        species=names,
        size=float(len(names)),
    )


def missing_between(grid: YieldSet) -> list[Species]:
    """Return what is stable, lies between the first and last species, and isn't followed."""
    first, last = grid.parsed[0], grid.parsed[-1]
    followed = set(grid.parsed)
    whole = {s.symbol for s in grid.parsed if s.is_element}
    found: list[Species] = []
    for symbol in symbols()[max(first.Z, 1) - 1 : last.Z]:
        stable = [s for s in isotopes(symbol) if is_stable(s)]
        if not stable or symbol in whole:
            continue
        if grid.follows_elements:
            found.append(Species(symbol))
        else:
            found += [s for s in stable if first < s < last and s not in followed]
    return found


def undecayed(grid: YieldSet) -> Iterator[Finding]:
    """Name the radioactive nuclides that stand in the tables."""
    share = [
        (max(float((one.total[:, k] / np.maximum(one.ejected, 1e-3)).max()) for one in grid.slices), s)
        for k, s in enumerate(grid.parsed)
        if not s.is_element and s.Z > 0 and not is_stable(s)
    ]
    if not share:
        return
    share.sort(key=lambda pair: -pair[0])
    names = tuple(s.name for _, s in share)
    yield Finding(
        "note",
        "undecayed",
        grid.id,
        f"{listed(names, 12)}: radioactive; {names[0]} is up to {share[0][0]:.2g} of what a model ejects",
        "let them decay before elements are summed or compared with stars",
        species=names,
        size=share[0][0],
    )


def printed_elements(sheet: Sheet) -> Iterator[Finding]:
    """Check a printed element against the sum of its printed isotopes, where all of them are there."""
    for convention in sheet.printed.yields:
        names = sheet.columns(convention)
        parsed = [_parsed(name) for name in names]
        for k, element in enumerate(parsed):
            if element is None or not element.is_element:
                continue
            parts = [i for i, s in enumerate(parsed) if s and not s.is_element and s.symbol == element.symbol]
            present = {parsed[i] for i in parts}
            if not parts or not all(s in present for s in isotopes(element.symbol)):
                continue
            figures, rounding = sheet.yields(convention), sheet.rounding(convention)
            whole, summed = figures[:, k], figures[:, parts].sum(axis=1)
            slack = rounding[:, k] + rounding[:, parts].sum(axis=1)
            for row in np.flatnonzero(np.abs(whole - summed) > slack):
                yield Finding(
                    "error",
                    "isotopes and element",
                    sheet.id,
                    f"{element.name} is {whole[row]:.4g} Msun, its isotopes sum to {summed[row]:.4g};"
                    f" rounding allows {slack[row]:.2g}",
                    "compare the element and its isotopes with the paper",
                    **sheet.model(row),
                    species=(element.name, *(names[i] for i in parts)),
                    size=float(summed[row] - whole[row]),
                    unit="Msun",
                )


def _parsed(name: str) -> Species | None:
    """A column as a species; None for a lump."""
    try:
        return parse(name)
    except InputError:
        return None
