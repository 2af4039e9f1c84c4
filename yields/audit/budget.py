"""Budgets: what a star was born with is what it ejects and leaves, as a whole and species by species."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from ..grid import YieldSet
from .finding import Finding, Severity, listed
from .printed_figures import Sheet

Array = NDArray[np.float64]

#: of the initial mass: integrating a star's mass loss is no better than this
NUMERICAL = 1e-5

#: of the ejected mass: a miss that rounding explains is still told where it is larger
WORTH_TELLING = 1e-3

#: of the ejected mass: a miss that large is no rounding of any table
GROSS = 1e-2


def printed_masses(sheet: Sheet) -> Iterator[Finding]:
    """Check that ejected and remnant mass make up the initial mass, and that none is impossible."""
    if sheet.event:
        return
    ejected, slack = _ejected(sheet)
    for name in ("remnant", "ejected", "final_mass"):
        if sheet.has(name):
            values = sheet.account(name)
            for row in np.flatnonzero((values < 0) | (values > sheet.mass)):
                yield Finding(
                    "error",
                    "mass budget",
                    sheet.id,
                    f"{name} is {values[row]:g} Msun for a star of {sheet.mass[row]:g} Msun",
                    "check the unit and whether two rows or columns are exchanged",
                    **sheet.model(row),
                    size=float(values[row]),
                    unit="Msun",
                )
    if ejected is None or not sheet.has("remnant"):
        return
    remnant = sheet.account("remnant")
    final = sheet.account("final_mass") if sheet.has("final_mass") else sheet.mass
    miss = ejected + remnant - final
    allowed = slack + sheet.account_rounding("remnant") + 1e-4 * sheet.mass
    for row in np.flatnonzero(np.abs(miss) > allowed):
        yield Finding(
            "error" if abs(miss[row]) > GROSS * sheet.mass[row] else "warning",
            "mass budget",
            sheet.id,
            f"ejected {ejected[row]:.5g} and remnant {remnant[row]:.4g} Msun make"
            f" {ejected[row] + remnant[row]:.5g} Msun, {miss[row]:+.2g} from {final[row]:g};"
            f" rounding allows {allowed[row]:.2g}",
            "look up the model's masses in the paper",
            **sheet.model(row),
            size=float(miss[row]),
            unit="Msun",
        )


def _ejected(sheet: Sheet) -> tuple[Array | None, Array]:
    """Ejected mass that is known apart from the remnant, and how far rounding may have moved it."""
    zeros = np.zeros_like(sheet.mass)
    if sheet.has("ejected"):
        return sheet.account("ejected"), sheet.account_rounding("ejected")
    if sheet.has("birth_hydrogen"):
        _, rows = sheet.initial()
        x = {row["metallicity"]: row.get("H1", 0.0) for row in rows if "mass" not in row}
        born = np.array([x.get(z, 0.0) for z in sheet.metallicity])
        if np.all(born > 0):
            return sheet.account("birth_hydrogen") / born, sheet.account_rounding("birth_hydrogen") / born
    return None, zeros


def printed_totals(sheet: Sheet) -> Iterator[Finding]:
    """Check that total yields sum to the mass ejected."""
    if "total" not in sheet.printed.yields or sheet.info.get("ejected") == "sum of total" or sheet.event:
        return
    if sheet.info.get("covers") == "explosion":
        names, start = ("final_mass", "remnant"), "final_mass - remnant"
        if not all(sheet.has(n) for n in names):
            return
        expected = sheet.account("final_mass") - sheet.account("remnant")
        slack = sheet.account_rounding("final_mass") + sheet.account_rounding("remnant")
    elif sheet.has("ejected"):
        start, expected, slack = "ejected", sheet.account("ejected"), sheet.account_rounding("ejected")
    elif sheet.has("remnant"):
        start, expected = "mass - remnant", sheet.mass - sheet.account("remnant")
        slack = sheet.account_rounding("remnant")
    else:
        return
    total = sheet.yields("total").sum(axis=1)
    miss = total - expected
    if not _follows_light(sheet, "total"):
        miss = np.maximum(miss, 0.0)
    allowed = slack + sheet.rounding("total").sum(axis=1)
    for row in range(len(miss)):
        size, share = abs(miss[row]), abs(miss[row]) / max(expected[row], 1e-3)
        if size <= allowed[row] and share <= WORTH_TELLING:
            continue
        within = size <= allowed[row]
        severity: Severity = "note" if within else "error" if share > GROSS else "warning"
        yield Finding(
            severity,
            "sum of totals",
            sheet.id,
            f"total yields sum to {total[row]:.4g} Msun, {miss[row]:+.2g} from {start} = {expected[row]:.4g};"
            f" rounding of the printed digits allows {allowed[row]:.2g}",
            "nothing to mend: more digits aren't printed; the rest takes up the difference"
            if within
            else "compare the largest yields and the masses with the paper and with the neighbours",
            **sheet.model(row),
            size=float(miss[row]),
            unit="Msun",
        )


def printed_nets(sheet: Sheet) -> Iterator[Finding]:
    """Check that net yields sum to zero: what is made was something else before."""
    if "net" not in sheet.printed.yields or not _follows_light(sheet, "net"):
        return
    net = sheet.yields("net").sum(axis=1)
    ejected, _ = _ejected(sheet)
    if ejected is None and "total" in sheet.printed.yields:
        ejected = sheet.yields("total").sum(axis=1)
    if ejected is None:
        ejected = sheet.mass
    allowed = np.maximum(sheet.rounding("net").sum(axis=1), NUMERICAL * sheet.mass)
    for row in np.flatnonzero(np.abs(net) > allowed):
        yield Finding(
            "error" if abs(net[row]) > GROSS * ejected[row] else "warning",
            "sum of nets",
            sheet.id,
            f"net yields sum to {net[row]:+.2g} Msun instead of 0; rounding and numerics allow"
            f" {allowed[row]:.2g}",
            "compare the largest net yields, H1 and He4 first, with the paper; the rest takes up the sum",
            **sheet.model(row),
            size=float(net[row]),
            unit="Msun",
        )


def printed_metals(sheet: Sheet) -> Iterator[Finding]:
    """Check a printed sum of net metals against the columns."""
    if "net" not in sheet.printed.yields or not sheet.has("metal_net"):
        return
    names = sheet.columns("net")
    metals = [i for i, c in enumerate(names) if c not in ("H", "He", "H1", "H2", "He3", "He4")]
    net = sheet.yields("net")[:, metals]
    summed, stated = net.sum(axis=1), sheet.account("metal_net")
    miss = summed - stated
    digits = sheet.account_rounding("metal_net")
    most = sheet.rounding("net")[:, metals].sum(axis=1) + digits
    # Where most models agree far better than rounding demands, the sum was made of these very digits.
    usual = 20 * np.median(np.abs(miss)) + 1e-14 * np.abs(net).sum(axis=1)
    allowed = np.maximum(digits, np.minimum(most, usual))
    for row in np.flatnonzero(np.abs(miss) > allowed):
        yield Finding(
            "error",
            "sum of nets",
            sheet.id,
            f"net yields of the metals sum to {summed[row]:.6g} Msun, {miss[row]:+.2g} from the printed sum"
            f" {stated[row]:.6g}; {allowed[row]:.2g} is usual here",
            "compare the model's row with the paper: a figure was changed, or two columns shifted",
            **sheet.model(row),
            size=float(miss[row]),
            unit="Msun",
        )


def grid_masses(grid: YieldSet) -> Iterator[Finding]:
    """Check the masses of a set on the grid: none negative, no remnant that its kind can't leave."""
    if grid.event:
        for one in grid.slices:
            if one.ejected[0] <= 0 or one.ejected[0] > 10:
                yield Finding(
                    "error",
                    "mass budget",
                    grid.id,
                    f"one event ejects {one.ejected[0]:.3g} Msun",
                    "check the unit of the yields",
                    size=float(one.ejected[0]),
                    unit="Msun",
                )
        return
    for one in grid.slices:
        accounts = {"ejected mass": one.ejected, "remnant": one.remnant, "wind": one.wind}
        for name, values in accounts.items():
            for row in np.flatnonzero(values < -1e-6 * one.mass):
                yield Finding(
                    "error",
                    "mass budget",
                    grid.id,
                    f"{name} is {values[row]:.4g} Msun for a star of {one.mass[row]:g} Msun",
                    "check the unit, and whether two models or columns are exchanged",
                    one.metallicity,
                    float(one.mass[row]),
                    size=float(values[row]),
                    unit="Msun",
                )
        if grid.kind != "agb":
            continue
        # Chandrasekhar mass; the lightest core that burns helium in a single star of this age of the Universe
        for row in np.flatnonzero((one.remnant > 1.46) | (one.remnant < 0.4)):
            if one.remnant[row] >= 0:
                yield Finding(
                    "warning",
                    "mass budget",
                    grid.id,
                    f"a remnant of {one.remnant[row]:.3g} Msun is no white dwarf of a single star of"
                    f" {one.mass[row]:g} Msun (0.4 to 1.46)",
                    "check the model's mass and what it ejects",
                    one.metallicity,
                    float(one.mass[row]),
                    size=float(one.remnant[row]),
                    unit="Msun",
                )


def grid_sums(grid: YieldSet) -> Iterator[Finding]:
    """Check the sums of species on the grid, where the printed figures aren't at hand."""
    if grid.event:
        return
    light = {"H", "He"} <= {s.symbol for s in grid.parsed}
    for one in grid.slices:
        rest = one.rest()
        digits = int(grid.info.get("rounding", {}).get("digits", 3))
        allowed = np.maximum(NUMERICAL * one.mass, 0.5 * 10.0 ** (1 - digits) * one.total.max(axis=1))
        over = (rest < -allowed) | (light & (rest > np.maximum(GROSS * one.ejected, allowed)))
        for row in np.flatnonzero(over):
            share = abs(rest[row]) / max(one.ejected[row], 1e-3)
            yield Finding(
                "error" if share > GROSS else "warning",
                "sum of totals",
                grid.id,
                f"total yields sum to {one.total[row].sum():.4g} Msun of {one.ejected[row]:.4g} Msun ejected",
                "compare the largest yields and the masses with the paper",
                one.metallicity,
                float(one.mass[row]),
                size=-float(rest[row]),
                unit="Msun",
            )


def species_over_ejecta(grid: YieldSet) -> Iterator[Finding]:
    """Check that no species outweighs all that its star ejects."""
    for one in grid.slices:
        for row in range(len(one.mass)):
            ejected = max(one.ejected[row], 0.0)
            over = np.flatnonzero(one.total[row] > ejected * (1 + GROSS))
            if over.size == 0 or one.ejected[row] < 0:
                continue
            over = over[np.argsort(-one.total[row, over])]
            names = tuple(grid.species[k] for k in over)
            worst = one.total[row, over[0]]
            yield Finding(
                "error",
                "sum of totals",
                grid.id,
                f"{listed(names)}: {worst:.3g} Msun of one species, but {ejected:.3g} Msun ejected in all",
                _unit_hint(worst / max(ejected, 1e-3)),
                None if grid.event else one.metallicity,
                None if grid.event else float(one.mass[row]),
                names,
                float(worst),
                "Msun",
            )


def _unit_hint(ratio: float) -> str:
    power = np.log10(ratio)
    for unit, size in (("g", 33.3), ("kg", 30.3)):
        if size - 9 < power < size + 1:
            return f"the figures look like {unit}: state the unit, for plain yields are Msun"
    return "check the unit and the exponent of the figure"


def _follows_light(sheet: Sheet, convention: str) -> bool:
    """Whether hydrogen and helium are among the columns, so that the sum is that of all mass."""
    names = set(sheet.columns(convention))
    return {"H1", "He4"} <= names or {"H", "He"} <= names
