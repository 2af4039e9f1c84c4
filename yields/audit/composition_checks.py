"""Birth compositions, and what can't be ejected for lack of it at birth."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from ..convert import birth_mixture
from ..grid import YieldSet
from ..nuclides import parse
from .finding import Finding, Severity, listed
from .printed_figures import Sheet

#: of the ejected mass: less than this of a species can't matter to anything
NOTHING = 1e-20

#: times what was there at birth: a derived total may be below zero by that, since the mixture is only like
#: the paper's
LIKE_MIXTURE = 0.02

#: factor between slices, at equal metals, that isn't an enhancement of alpha elements
DEPARTS = 5.0


def negative_totals(grid: YieldSet) -> Iterator[Finding]:
    """Find totals below zero, which are net yields below -X0 * ejected."""
    digits = int(grid.info.get("rounding", {}).get("digits", 3))
    derived = "total" in grid.derived
    scaled = derived and birth_mixture(grid) is not None
    for one in grid.slices:
        fractions = one.initial
        if not grid.derived:
            # one bad model would spoil an X0 made of sums, but not the middle one
            ejected = np.where(one.ejected > 0, one.ejected, np.nan)
            fractions = np.nan_to_num(np.nanmedian((one.total - one.net) / ejected[:, None], axis=0))
        birth = one.ejected[:, None] * fractions
        terms = np.abs(one.net) + np.abs(birth)
        slack = 10.0 ** (1 - digits) * terms + (LIKE_MIXTURE * np.abs(birth) if scaled else 0.0)
        slack = slack + NOTHING * np.abs(one.ejected[:, None])
        lowest = np.minimum(one.total, one.net + birth) if not derived else one.total
        for row in np.flatnonzero((lowest < -slack).any(axis=1)):
            below = np.flatnonzero(lowest[row] < -slack[row])
            below = below[np.argsort(lowest[row, below])]
            names = tuple(grid.species[k] for k in below)
            worst, k = lowest[row, below[0]], below[0]
            share = -worst / max(one.ejected[row], 1e-3)
            why = ""
            if one.net[row, k] < 0:
                why = (
                    f", for the net yield {one.net[row, k]:.3g} is below -X0 * ejected = {-birth[row, k]:.3g}"
                )
                if birth[row, k] == 0:
                    why = f", for the net yield is {one.net[row, k]:.3g} and there was none at birth"
            severity: Severity = "note" if share < 1e-9 else "error" if share > 1e-3 else "warning"
            yield Finding(
                severity,
                "negative total",
                grid.id,
                f"{listed(names)}: {worst:.3g} Msun of {names[0]} ejected in total{why}",
                "too small to matter; read it as 0"
                if severity == "note"
                else "check the sign, the convention (net or total) and the composition at birth",
                None if grid.event else one.metallicity,
                None if grid.event else float(one.mass[row]),
                names,
                float(worst),
                "Msun",
            )


def slice_compositions(grid: YieldSet) -> Iterator[Finding]:
    """Find slices whose metals at birth have other proportions than those of their siblings."""
    if len(grid.slices) < 2 or grid.event or birth_mixture(grid) is not None:
        return
    metals = np.array([s.Z > 2 and s.A != 7 for s in grid.parsed])
    shares = []
    for one in grid.slices:
        x = np.where(metals & (one.initial > 0), one.initial, np.nan)
        shares.append(np.log10(x / np.nansum(x)))
    table = np.array(shares)
    # a difference of two printed columns leaves no trustworthy X0 of rare nuclides
    floor = -9.0 if grid.derived else -5.0
    seen = np.isfinite(table).sum(axis=0) > 1
    middle = np.full(table.shape[1], np.nan)
    middle[seen] = np.nanmedian(table[:, seen], axis=0)
    for position, one in enumerate(grid.slices):
        away = table[position] - middle
        off = np.flatnonzero((np.abs(away) > np.log10(DEPARTS)) & (middle > floor))
        if off.size == 0:
            continue
        off = off[np.argsort(-np.abs(away[off]))]
        names = tuple(grid.species[k] for k in off)
        yield Finding(
            "warning",
            "birth composition",
            grid.id,
            f"{listed(names)}: {names[0]} is {10 ** table[position, off[0]]:.3g} of the metals at birth,"
            f" {10 ** middle[off[0]]:.3g} in the slice's siblings",
            "look up the composition at birth of this metallicity in the paper",
            one.metallicity,
            None,
            names,
            float(away[off[0]]),
            "dex",
        )


def printed_compositions(sheet: Sheet) -> Iterator[Finding]:
    """Check printed compositions at birth: sums, metals against Z, models against their slice."""
    names, rows = sheet.initial()
    for row in rows:
        axes = {key: row[key] for key in ("metallicity", "mass") if key in row}
        values = np.array([row[c] for c in names])
        z = row["metallicity"]
        total = float(values.sum())
        species = [c for c in names if c not in sheet.lumps]
        light = {"H1", "He4"} <= set(species) or {"H", "He"} <= set(species)
        if np.any(values < 0) or total > 1.01 or (light and total < 0.97):
            lowest = names[int(np.argmin(values))]
            yield Finding(
                "error",
                "birth composition",
                sheet.id,
                f"mass fractions at birth sum to {total:.4g}"
                + (f", {lowest} is {values.min():.3g}" if values.min() < 0 else ""),
                "mass fractions are positive and sum to 1: check unit and columns",
                **axes,
                species=(lowest,) if values.min() < 0 else (),
                size=total - 1,
            )
        metals = sum(row[c] for c in species if parse(c).Z > 3)
        if light and z > 0 and not 0.5 < metals / z < 2.0:
            yield Finding(
                "error",
                "birth composition",
                sheet.id,
                f"metals at birth are {metals:.3g} by mass, but the metallicity is given as {z:g}",
                "check whether Z is a mass fraction: not Z/Zsun, not a logarithm, not [Fe/H]",
                **axes,
                size=float(np.log10(max(metals, 1e-99) / z)),
                unit="dex",
            )
    yield from _models_against_slice(sheet, names, rows)


def _models_against_slice(sheet: Sheet, names: list[str], rows: list[dict[str, float]]) -> Iterator[Finding]:
    """Find models that start from another composition than the models of their slice do."""
    own = [row for row in rows if "mass" in row]
    for z in sorted({row["metallicity"] for row in own}):
        models = [row for row in own if row["metallicity"] == z]
        if len(models) < 3:
            continue
        table = np.array([[row[c] for c in names] for row in models])
        middle = np.median(table, axis=0)
        off = np.abs(table - middle) > 1e-3 * middle + 1e-15
        for i in np.flatnonzero(off.any(axis=1)):
            which = [k for k in np.flatnonzero(off[i])]
            far = np.abs(np.log10(np.maximum(table[i], 1e-40) / np.maximum(middle, 1e-40)))
            which.sort(key=lambda k: -far[k])
            species = tuple(names[k] for k in which)
            k = which[0]
            yield Finding(
                "warning",
                "birth composition",
                sheet.id,
                f"{listed(species)}: the model starts with {table[i, k]:.3g} of {names[k]} by mass, its"
                f" siblings with {middle[k]:.3g}",
                "its yields of that species start from another seed: leave them out of a run over mass",
                z,
                models[i]["mass"],
                species,
                float(np.log10(max(table[i, k], 1e-40) / max(middle[k], 1e-40))),
                "dex",
            )


def printed_pairs(sheet: Sheet) -> Iterator[Finding]:
    """Check total - net, which is X0 * ejected, where both are printed: one X0 must fit a whole slice."""
    if not {"net", "total"} <= set(sheet.printed.yields) or sheet.event:
        return
    names = [c for c in sheet.columns("total") if c in sheet.columns("net")]
    t = [sheet.columns("total").index(c) for c in names]
    n = [sheet.columns("net").index(c) for c in names]
    ejected = sheet.account("ejected") if sheet.has("ejected") else sheet.yields("total").sum(axis=1)
    ejected = np.where(ejected > 0, ejected, np.nan)[:, None]
    born = (sheet.yields("total")[:, t] - sheet.yields("net")[:, n]) / ejected
    error = (sheet.rounding("total")[:, t] + sheet.rounding("net")[:, n]) / ejected
    for z in np.unique(sheet.metallicity):
        rows = np.flatnonzero(sheet.metallicity == z)
        if rows.size < 3:
            continue
        middle = np.nanmedian(born[rows], axis=0)
        slack = 2 * error[rows] + 2 * np.nanmedian(error[rows], axis=0) + 0.02 * np.abs(middle) + 1e-14
        off = np.abs(born[rows] - middle) > slack
        for i in np.flatnonzero(off.any(axis=1)):
            which = np.flatnonzero(off[i])
            which = which[np.argsort(-np.abs(born[rows[i]] - middle)[which] / slack[i, which])]
            species = tuple(names[k] for k in which)
            k = which[0]
            yield Finding(
                "warning",
                "birth composition",
                sheet.id,
                f"{listed(species)}: (total - net) / ejected is {born[rows[i], k]:.4g} for {names[k]}, but"
                f" {middle[k]:.4g} in the model's siblings",
                "compare net and total of the model with the paper: one of the two is another figure",
                **sheet.model(int(rows[i])),
                species=species,
                size=float(born[rows[i], k] - middle[k]),
            )
