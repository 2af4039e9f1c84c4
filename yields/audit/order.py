"""Order and copies: models out of line, or there twice."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from ..grid import YieldSet
from .finding import Finding
from .printed_figures import Sheet

Array = NDArray[np.float64]


def printed_order(sheet: Sheet) -> Iterator[Finding]:
    """Find masses that fall back in a list that otherwise rises (or the other way round)."""
    if sheet.event:
        return
    breaks = np.flatnonzero(np.diff(sheet.metallicity) != 0) + 1
    blocks = np.split(np.arange(len(sheet.mass)), breaks)
    steps = np.concatenate([np.diff(sheet.mass[b]) for b in blocks])
    rising, falling = int((steps > 0).sum()), int((steps < 0).sum())
    if min(rising, falling) * 2 > max(rising, falling):
        return
    sign = 1 if rising >= falling else -1
    for block in blocks:
        for i in _out_of_line(sign * sheet.mass[block]):
            row = int(block[i])
            before = (
                f"follows {sheet.mass[row - 1]:g} Msun"
                if i
                else f"stands before {sheet.mass[row + 1]:g} Msun"
            )
            yield Finding(
                "warning",
                "order",
                sheet.id,
                f"{sheet.mass[row]:g} Msun {before}, against the order of the other models",
                "check whether the masses of two models are exchanged, or one misprinted",
                **sheet.model(row),
                size=float(sheet.mass[row]),
                unit="Msun",
            )
    starts = [float(sheet.metallicity[b[0]]) for b in blocks]
    for z in sorted({z for z in starts if starts.count(z) > 1}):
        yield Finding(
            "warning",
            "order",
            sheet.id,
            f"models of Z = {z:g} stand in {starts.count(z)} places of the list",
            "check the metallicity of the models between",
            z,
            size=float(starts.count(z)),
        )


def printed_copies(sheet: Sheet) -> Iterator[Finding]:
    """Find models that are there twice, and different models with the same figures."""
    n = len(sheet.printed.models)
    variant = [row.get("variant", "") for row in sheet.printed.models]
    for convention, rows in sheet.printed.yields.items():
        names = sheet.columns(convention)
        texts = np.array([[row[c].strip() for c in names] for row in rows])
        codes = np.column_stack([np.unique(one, return_inverse=True)[1] for one in texts.T])
        zero = sheet.yields(convention) == 0
        for a in range(n - 1):
            later = slice(a + 1, n)
            counts = ~(zero[a] & zero[later])
            shared = ((codes[a] == codes[later]) & counts).sum(axis=1)
            wanted = np.full(len(shared), len(names))
            if len(names) > 5:
                wanted = np.maximum(3, counts.sum(axis=1) // 2)
            for i in np.flatnonzero(shared >= wanted):
                yield _copy(sheet, a, a + 1 + int(i), int(shared[i]), len(names), convention)
    seen: dict[tuple[float, float, str], int] = {}
    for row, key in enumerate(zip(sheet.metallicity.tolist(), sheet.mass.tolist(), variant, strict=True)):
        if key in seen and not sheet.event:
            yield Finding(
                "error",
                "duplicate",
                sheet.id,
                f"{key[1]:g} Msun, Z = {key[0]:g} is there twice, as models {seen[key] + 1} and {row + 1}",
                "drop one of them, or give them different variants",
                **sheet.model(row),
                size=2.0,
            )
        seen.setdefault(key, row)


def _copy(sheet: Sheet, a: int, b: int, shared: int, of: int, convention: str) -> Finding:
    models = "two models"
    if not sheet.event:
        models = " and ".join(f"{sheet.mass[i]:g} Msun, Z = {sheet.metallicity[i]:g}" for i in (a, b))
    return Finding(
        "error",
        "duplicate",
        sheet.id,
        f"{models} share {shared} of {of} {convention} figures, digit for digit",
        "compare both with the paper: one is a copy of the other",
        **sheet.model(b),
        size=float(shared),
    )


def lifetimes(grid: YieldSet) -> Iterator[Finding]:
    """Find stars that outlive lighter ones of the same slice."""
    for one in grid.slices:
        if one.lifetime is None:
            continue
        for row in _out_of_line(-one.lifetime):
            other = row - 1 if row else row + 1
            yield Finding(
                "warning",
                "order",
                grid.id,
                f"a star of {one.mass[row]:g} Msun lives {one.lifetime[row]:.4g} yr, one of"
                f" {one.mass[other]:g} Msun {one.lifetime[other]:.4g} yr, against the order of the others",
                "check the lifetimes and their unit, and whether two masses are exchanged",
                one.metallicity,
                float(one.mass[row]),
                size=float(one.lifetime[row]),
                unit="yr",
            )


def _out_of_line(values: Array) -> list[int]:
    """Return the fewest positions to leave out so that the others never fall."""
    # for each position: length of the longest rise that ends there, and the position before it
    best: list[tuple[int, int]] = []
    for i, value in enumerate(values):
        longest = max(((best[j][0], j) for j in range(i) if values[j] <= value), default=(0, -1))
        best.append((longest[0] + 1, longest[1]))
    kept = set()
    at = max(range(len(best)), key=lambda i: best[i][0], default=-1)
    while at >= 0:
        kept.add(at)
        at = best[at][1]
    return [i for i in range(len(values)) if i not in kept]
