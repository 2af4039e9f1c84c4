"""Which initial masses and metallicities yield sets have models at, all sets in one picture."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from ..errors import InputError
from ..grid import YieldSet
from .style import GREY, MSUN, PAGE, SMALL, Look, canvas, label, looks, style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

#: of a set's band, what its metallicities take up
_FILLED = 0.72

#: between the ends of a gap in initial mass, where it is shaded
_WIDE = 1.08

_TICKS = (0.5, 0.8, 1, 1.5, 2, 3, 4, 5, 6.5, 8, 10, 13, 20, 30, 40, 60, 80, 120, 200, 300)


def coverage_map(grids: Sequence[YieldSet]) -> Figure:
    """Draw where yield sets have models, a band for each set and a line in it for each metallicity.

    Initial mass runs to the right; in a band, metallicity rises. Shaded are ranges of initial
    mass where no set has a model on either side in one line. Sets of single events, which have
    no initial mass, are named below.

    Parameters
    ----------
    grids : sequence of YieldSet

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        No set has models of stars.

    Examples
    --------
    >>> from steelyard.yields import load
    >>> figure = coverage_map([load("kobayashi-2006"), load("karakas-2010")])
    >>> [text.get_text() for text in figure.axes[0].get_yticklabels()]
    ['karakas-2010', 'kobayashi-2006']
    """
    stars = [grid for grid in grids if not grid.event]
    if not stars:
        raise InputError("none of the sets has models of stars", mend="name one of AGB or core collapse")
    kinds = sorted({grid.kind for grid in stars}, key=lambda kind: min(_lowest(g, kind) for g in stars))
    rows = [g for kind in kinds for g in sorted(stars, key=lambda g: (g.masses[0], g.id)) if g.kind == kind]
    events = [grid.id for grid in grids if grid.event]
    with style():
        told = "\n".join(f"{grid.id} sha256 {grid.checksum}" for grid in grids)
        height = 0.9 + 0.3 * len(rows) + (0.2 if events else 0)
        figure = canvas(PAGE, height, "Models of yield sets", told)
        axes = figure.subplots()
        drawn = looks(kinds)
        _gaps(axes, rows)
        for k, grid in enumerate(rows):
            _band(axes, k, grid, drawn[grid.kind])
        axes.set_yticks(range(len(rows)), [grid.id for grid in rows])
        axes.set_ylim(len(rows) - 0.4, -0.6)
        axes.tick_params(axis="y", length=0, right=False)
        _mass_axis(axes, [m for grid in rows for m in grid.masses])
        _metallicities(axes, rows)
        handles = [axes.plot([], [], marker=drawn[k].marker, color=drawn[k].colour, lw=1)[0] for k in kinds]
        figure.legend(handles, [label(k) for k in kinds], loc="outside upper left", ncols=len(kinds))
        if events:
            told = f"Sets of single events, without initial mass: {_shortened(events)}"
            figure.supxlabel(told, fontsize=SMALL, color=GREY)
    return figure


def _lowest(grid: YieldSet, kind: str) -> float:
    return grid.masses[0] if grid.kind == kind else float("inf")


def _band(axes: Axes, k: int, grid: YieldSet, look: Look) -> None:
    count = len(grid.slices)
    step = _FILLED / max(count, 2)
    size = min(2.6, 11 * step)
    for i, one in enumerate(grid.slices):
        # metallicity rises upwards, and so against the axis
        y = k + step * ((count - 1) / 2 - i)
        drawn = {"color": look.colour, "marker": look.marker, "ms": size, "mew": 0}
        axes.plot(one.mass, [y] * len(one.mass), lw=0.6, zorder=3, **drawn)


def _gaps(axes: Axes, rows: Sequence[YieldSet]) -> None:
    """Shade what no set of any line reaches over."""
    spans = sorted((float(one.mass[0]), float(one.mass[-1])) for grid in rows for one in grid.slices)
    reach = spans[0][1]
    for lo, hi in spans[1:]:
        if lo > reach * _WIDE:
            axes.axvspan(reach, lo, color="0.92", lw=0, zorder=0)
            middle = (reach * lo) ** 0.5
            axes.text(middle, -0.5, "no models", ha="center", va="top", fontsize=SMALL, color=GREY)
        reach = max(reach, hi)


def _mass_axis(axes: Axes, masses: Sequence[float]) -> None:
    lo, hi = min(masses) / 1.12, max(masses) * 1.12
    axes.set_xscale("log")
    axes.set_xlim(lo, hi)
    ticks = [m for m in _TICKS if lo <= m <= hi]
    axes.set_xticks(ticks, [f"{m:g}" for m in ticks])
    axes.set_xticks([], minor=True)
    axes.grid(axis="x", color="0.9", lw=0.5, zorder=-1)
    axes.set_axisbelow(True)
    axes.set_xlabel(f"Initial mass of the models [{MSUN}]")


def _metallicities(axes: Axes, rows: Sequence[YieldSet]) -> None:
    """Say at the right of each band how many metallicities it has, and which."""
    right = axes.secondary_yaxis("right")
    texts = []
    for grid in rows:
        z = [f"{one:.2g}" for one in grid.metallicities]
        texts.append(f"Z = {z[0]}" if len(z) == 1 else f"{len(z)}: Z = {z[0]} to {z[-1]}")
    right.set_yticks(range(len(rows)), texts)
    right.tick_params(length=0, labelsize=SMALL, labelcolor=GREY)
    right.spines["right"].set_visible(False)


def _shortened(names: Sequence[str]) -> str:
    """Names with those of one paper drawn together."""
    papers: dict[str, list[str]] = {}
    for name in names:
        parts = name.split("-")
        cut = next((i for i, part in enumerate(parts) if part.isdigit()), len(parts) - 1) + 1
        papers.setdefault("-".join(parts[:cut]), []).append("-".join(parts[cut:]))
    return "; ".join(
        f"{paper}-({', '.join(rest)})" if len(rest) > 1 else "-".join(filter(None, (paper, rest[0])))
        for paper, rest in papers.items()
    )
