"""Yield sets against each other along initial mass, a panel for each species."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..against import Against
from ..errors import InputError
from .style import COLUMN, GREY, MSUN, PAGE, SMALL, TEXT, canvas, distinct, legend, style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

#: panels that a page has room for
MOST = 12


def set_against_set(found: Against) -> Figure:
    """Draw yields of several sets against initial mass.

    Marks are models; lines between them are what interpolation gives. The axis of a species is
    logarithmic unless one of its yields isn't above 0.

    Parameters
    ----------
    found : Against

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        More than 12 species.

    Examples
    --------
    >>> from steelyard.yields import load
    >>> from steelyard.yields.against import against
    >>> pair = [load("kobayashi-2006"), load("limongi-chieffi-2018-R-v000")]
    >>> len(set_against_set(against(pair, ["O", "Fe"], 0.02)).axes)
    2
    """
    count = len(found.species)
    if count > MOST:
        raise InputError(f"{count} species don't fit on a page", mend=f"name {MOST} or fewer")
    columns = {1: 1, 2: 2, 4: 2}.get(count, 3)
    rows = -(-count // columns)
    with style():
        told = "\n".join(f"{one} sha256 {sha}" for one, sha in zip(found.sets, found.checksums, strict=True))
        title = f"Yield sets against each other at Z = {found.metallicity:g}"
        height = 0.75 + 0.16 * len(found.sets) + 1.7 * rows
        figure = canvas(PAGE if columns > 1 else COLUMN, height, title, told)
        panels = figure.subplots(rows, columns, squeeze=False, sharex=True)
        for i, panel in enumerate(panels.flat):
            if i < count:
                _panel(panel, found, i)
            else:
                panel.remove()
        for j in range(columns):
            panels[(count - 1 - j) // columns, j].tick_params(labelbottom=True)
        figure.supxlabel(f"Initial mass [{MSUN}]")
        figure.supylabel(f"{found.convention.capitalize()} yield [{MSUN}]")
        drawn = distinct(len(found.sets))
        entries = []
        for k, one in enumerate(found.sets):
            look = drawn[k]
            (handle,) = panels.flat[0].plot(
                [], [], color=look.colour, ls=look.line, marker=look.marker, ms=3.5, lw=1.1
            )
            derived = "; derived" if found.derived[k] else ""
            entries.append((handle, f"{one} ({found.used[k]}{derived})"))
        legend(figure, entries, 1)
    return figure


def _panel(panel: Axes, found: Against, i: int) -> None:
    lacks = []
    followed = []
    for k, (one, look) in enumerate(zip(found.sets, distinct(len(found.sets)), strict=True)):
        values = found.values[k, :, i]
        inside = ~np.isnan(values)
        if not inside.any():
            lacks.append(one)
            continue
        followed.append(values[inside])
        nodes, own = found.mass[inside], found.model[k] & inside
        # straight in mass, and so bent on these axes
        fine = np.unique(np.concatenate([nodes, np.geomspace(nodes[0], nodes[-1], 200)]))
        drawn = {"color": look.colour, "lw": 1.1}
        panel.plot(fine, np.interp(fine, nodes, values[inside]), ls=look.line, zorder=2, **drawn)
        panel.plot(found.mass[own], values[own], ls="", marker=look.marker, ms=3.5, zorder=3, **drawn)
    panel.set_xscale("log")
    ticks = (1, 2, 3, 5, 8, 13, 20, 30, 40, 60, 80, 120, 200, 300)
    lo, hi = found.mass[0] / 1.1, found.mass[-1] * 1.1
    shown = [m for m in ticks if lo <= m <= hi]
    panel.set_xticks(shown, [f"{m:g}" for m in shown])
    panel.set_xticks([], minor=True)
    panel.set_xlim(lo, hi)
    if all((values > 0).all() for values in followed):
        panel.set_yscale("log")
    else:
        panel.axhline(0, color=GREY, lw=0.6, zorder=1)
        panel.ticklabel_format(axis="y", style="sci", scilimits=(-2, 2))
    panel.set_title(found.species[i], loc="left", fontsize=TEXT, fontweight="bold", pad=3)
    if lacks:
        told = f"not followed by {', '.join(lacks)}"
        panel.set_title(told, loc="right", fontsize=SMALL - 1, color=GREY, pad=3)
