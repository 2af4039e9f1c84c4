"""All checks, run over a set."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from typing import Any

from ..build import Printed
from ..grid import YieldSet
from . import budget, composition_checks, coverage, order, smoothness, species, units
from .finding import SEVERITIES, Finding
from .printed_figures import Sheet

#: checks on the figures as printed
PRINTED: tuple[Callable[[Sheet], Iterable[Finding]], ...] = (
    budget.printed_masses,
    budget.printed_totals,
    budget.printed_nets,
    budget.printed_metals,
    composition_checks.printed_compositions,
    composition_checks.printed_pairs,
    order.printed_order,
    order.printed_copies,
    species.printed_elements,
)

#: checks on the grid
GRID: tuple[Callable[[YieldSet], Iterable[Finding]], ...] = (
    budget.grid_masses,
    budget.species_over_ejecta,
    composition_checks.negative_totals,
    composition_checks.slice_compositions,
    order.lifetimes,
    units.axes,
    units.logarithms,
    smoothness.totals,
    smoothness.nets,
    smoothness.masses,
    species.gaps,
    species.undecayed,
    coverage.ragged,
)


def audit(grid: YieldSet, printed: Printed | None = None) -> tuple[Finding, ...]:
    """Audit a yield set.

    Parameters
    ----------
    grid : YieldSet
    printed : Printed, optional
        The figures it was built from. Those of a set of the library are looked up where its
        checksum is still the library's.

    Returns
    -------
    tuple of Finding
        The heaviest first, then in order of check, metallicity and mass.

    Examples
    --------
    >>> from steelyard.yields import load
    >>> [f.model for f in audit(load("doherty-2014")) if f.check == "sum of nets"]
    ['7.5 Msun, Z = 0.0001', '8 Msun, Z = 0.008']
    """
    info: Mapping[str, Any] = grid.info
    if printed is None:
        info, printed = _library_figures(grid)
    checks = GRID if printed is not None else (*GRID, budget.grid_sums)
    found = [finding for check in checks for finding in check(grid)]
    if printed is not None:
        found += audit_printed(grid.id, info, printed)
    return tuple(sorted(found, key=_weight))


def _library_figures(grid: YieldSet) -> tuple[Mapping[str, Any], Printed | None]:
    from .. import library, store

    known = grid.id in library.shipped() or store.holds(grid.id)
    if known and library.load(grid.id).checksum == grid.checksum:
        return library.printed(grid.id)
    return grid.info, None


def audit_printed(id: str, info: Mapping[str, Any], printed: Printed) -> tuple[Finding, ...]:
    """Audit the figures of a set as its paper prints them.

    Parameters
    ----------
    id : str
    info : mapping
        As in a set.toml.
    printed : Printed

    Returns
    -------
    tuple of Finding

    Raises
    ------
    InputError
        A column is missing or a figure isn't a number.
    """
    sheet = Sheet.of(id, info, printed)
    return tuple(sorted((f for check in PRINTED for f in check(sheet)), key=_weight))


def _weight(finding: Finding) -> tuple[Any, ...]:
    none = float("-inf")
    return (
        -SEVERITIES.index(finding.severity),
        finding.check,
        none if finding.metallicity is None else finding.metallicity,
        none if finding.mass is None else finding.mass,
    )
