"""A contrast as rows of text and as sentences."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from .compare import MARKS, OVER, Contrast
from .footing import braced

if TYPE_CHECKING:
    from ..shares import Shares

#: dex that are written as no movement
LEAST = 0.005

#: shares that are told
SMALL_SHARE = 0.01


@dataclass(frozen=True)
class Row:
    """One row of a table of choices.

    Attributes
    ----------
    factor, label : str
        The ingredient, and the choice that is swapped in; of the last rows, what they are.
    cells : tuple of str
        One a species.
    """

    factor: str
    label: str
    cells: tuple[str, ...]


def signed(value: float, digits: int = 2) -> str:
    """Write dex with their sign; nothing at all as 0.

    Examples
    --------
    >>> signed(-0.001), signed(0.257)
    ('0.00', '+0.26')
    """
    rounded = round(float(value), digits) + 0.0
    return f"{rounded:+.{digits}f}" if rounded else f"{0:.{digits}f}"


def singles(found: Contrast) -> NDArray[np.int_]:
    """Return the rows in which exactly one ingredient is swapped, by ingredient and choice."""
    at = np.flatnonzero((found.at > 0).sum(axis=1) == 1)
    return at[np.lexsort(found.at[at].T)]


def rows(found: Contrast, age: int = -1) -> list[Row]:
    """Return the choices that are swapped one at a time against the base, then range and deviation.

    Parameters
    ----------
    found : Contrast
    age : int
        Position among the ages.

    Returns
    -------
    list of Row
        Dex, or why there are none. Range and deviation are over all populations, the base included.
    """
    out = []
    for i in singles(found):
        ((factor, label),) = found.labels[i].items()
        cells = [
            MARKS[mark] or signed(value)
            for value, mark in zip(found.dex[i, age], found.marks[i, age], strict=True)
        ]
        out.append(Row(factor, label, tuple(cells)))
    for label, values in (("range", found.range()), ("standard deviation", found.deviation())):
        cells = [f"{v:.2f}" if np.isfinite(v) else "-" for v in values[age]]
        out.append(Row("all", label, tuple(cells)))
    return out


def sentences(found: Contrast, age: int = -1) -> Iterator[str]:
    """Say of each [X/Fe] which ingredient moves it how far, when swapped alone.

    Parameters
    ----------
    found : Contrast
    age : int
        Position among the ages.

    Yields
    ------
    str
        A line a species; of its yield where the base has no [X/Fe].
    """
    for j, name in enumerate(found.species):
        ratio = bool(np.isfinite(found.ratio[0, age, j])) and name != OVER
        values = found.values(ratio)[:, age, j]
        if not np.isfinite(values[0]):
            continue
        moves = []
        for factor in found.design.factors:
            at = found.by_factor(factor.name)
            at = at[np.isfinite(values[at])]
            if len(at) > 1:
                low, high = at[np.argmin(values[at])], at[np.argmax(values[at])]
                moves.append((float(values[high] - values[low]), factor.name, low, high))
        moves.sort(key=lambda one: -one[0])
        told = [
            f"{name_} {size:.2f} dex ({_end(found, low, values)} to {_end(found, high, values)})"
            for size, name_, low, high in moves
            if size >= LEAST
        ]
        head = f"[{name}/{OVER}] is {signed(values[0])}; moved by" if ratio else f"{name}: yield moved by"
        lack = [
            label for i in singles(found) if not np.isfinite(values[i]) for label in found.labels[i].values()
        ]
        rest = f"; no value with {braced(lack)}" if lack else ""
        yield f"{head} {'; '.join(told) or 'nothing that is swapped'}{rest}"


def _end(found: Contrast, row: int, values: NDArray[np.float64]) -> str:
    return f"{signed(values[row])} with {', '.join(found.labels[row].values()) or 'the base'}"


def share_sentences(of_ratio: Shares, of_yields: Shares, age: int = -1) -> Iterator[str]:
    """Say of each [X/Fe] how far it spreads over all combinations, and what that is due to.

    Parameters
    ----------
    of_ratio, of_yields : Shares
        Of the same contrast.
    age : int
        Position among the ages.

    Yields
    ------
    str
        A line a species; of its yield where it has no [X/Fe].
    """
    for j, name in enumerate(of_ratio.contrast.species):
        ratio = bool(np.isfinite(of_ratio.variance[age, j])) and name != OVER
        found = of_ratio if ratio else of_yields
        head = f"[{name}/{OVER}]" if ratio else f"{name} yield"
        if not np.isfinite(found.variance[age, j]):
            yield f"{head}: not followed by all choices"
            continue
        low, high = found.low[age, j], found.high[age, j]
        if high - low < LEAST:
            yield f"{head}: nothing that is swapped moves it"
            continue
        least = " at least" if found.contrast.sampled else ""
        spread = f"{signed(low)} to {signed(high)}," if ratio else ""
        parts = _told(found, age, j)
        text = ", ".join(f"{value} from {part}" for value, part in parts)
        yield (
            f"{head}: {spread}{least} {high - low:.2f} dex in all,"
            f" standard deviation {np.sqrt(found.variance[age, j]):.2f}; {text}"
        ).replace(":  ", ": ")


def _told(found: Shares, age: int, j: int) -> list[tuple[str, str]]:
    """The shares of a species that are worth telling, the largest first."""
    count = len(found.factors)
    values = found.parts[:, age, j]
    parts: list[tuple[float, float, str]] = [
        (float(values[k]), 0.0 if found.error is None else float(found.error[k, age, j]), name)
        for k, name in enumerate(found.factors)
    ]
    parts.sort(key=lambda one: -one[0])
    parts.append((float(np.nansum(values[count:])), 0.0, "interactions"))
    return [
        (f"{100 * share:.0f}{f' ± {100 * error:.0f}' if error >= 0.005 else ''} %", name)
        for share, error, name in parts
        if share >= SMALL_SHARE
    ]


def share_rows(found: Shares, age: int = -1) -> list[Row]:
    """Return shares in per cent: of each ingredient, of pairs that reach 1 %, and of the rest.

    Parameters
    ----------
    found : Shares
    age : int
        Position among the ages.

    Returns
    -------
    list of Row
    """
    out = []
    for k, name in enumerate(found.names):
        values = found.parts[k, age]
        error = None if found.error is None else found.error[k, age]
        pair = len(found.factors) <= k < len(found.names) - 1
        if pair and not (np.nan_to_num(values) >= SMALL_SHARE).any():
            continue
        cells = [_percent(v, e) for v, e in _beside(values, error)]
        if k < len(found.factors):
            for j, species in enumerate(found.contrast.species):
                gone = found.left_out.get(species, {}).get(name, [])
                # of one choice there is no spread
                if len(gone) == len(found.contrast.design.factors[k]) - 1:
                    cells[j] = "-"
        out.append(Row("share", name, tuple(cells)))
    spread = (found.high - found.low)[age]
    out.append(Row("dex", "in all", tuple(f"{v:.2f}" if np.isfinite(v) else "-" for v in spread)))
    deviation = np.sqrt(found.variance[age])
    cells = tuple(f"{v:.3f}" if np.isfinite(v) else "-" for v in deviation)
    out.append(Row("dex", "standard deviation", cells))
    return out


def _beside(values: NDArray[np.float64], error: Any) -> Iterator[tuple[float, float]]:
    yield from zip(values, np.zeros(len(values)) if error is None else error, strict=True)


def _percent(value: float, error: float) -> str:
    if not np.isfinite(value):
        return "-"
    text = f"{abs(100 * value) if abs(value) < 5e-4 else 100 * value:.1f}"
    return f"{text} ± {100 * error:.1f}" if error > 0 else text
