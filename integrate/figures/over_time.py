"""Yields of a population against its age, a panel for each species."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.figures.style import (
    COLUMN,
    GREY,
    MSUN,
    PAGE,
    SMALL,
    SUM,
    TEXT,
    label,
    legend,
    looks,
    style,
)
from steelyard.yields.nuclides import parse

from ..results import Convention, PopulationYields
from .canvas import canvas

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

#: one or two of every nucleosynthetic family
CHOICE = ("C", "N", "O", "Mg", "Si", "Ca", "Mn", "Fe", "Ni")

#: fewer ages than this make no curve
ENOUGH_AGES = 30
STEPS = 300

#: decades shown below a panel's largest value
DECADES = 4
#: decades shown on either side of zero where yields are negative
SIGNED_DECADES = 2


def yields_over_time(
    result: PopulationYields, species: Sequence[str] | None = None, convention: Convention = "total"
) -> Figure:
    """Draw yields up to an age against the age, by source and summed.

    Parameters
    ----------
    result : PopulationYields
        Where it has few ages, its population is weighed at more of them up to the oldest.
    species : sequence of str, optional
        A panel for each; default: elements of every nucleosynthetic family that the
        result has, or all of up to nine species.
    convention : {"total", "net"}

    Returns
    -------
    matplotlib.figure.Figure
        Each panel shows four decades below its largest value; where a value is negative,
        both signs, with a linear stretch around zero. A panel says which sources don't
        follow its species; what they eject in part, such as in a join, is drawn pale.

    Raises
    ------
    InputError
        The result hasn't a species, or nothing has been ejected by its oldest age.
    """
    if convention not in ("total", "net"):
        raise InputError(f"convention {convention!r} isn't known", mend="choose total or net")
    chosen = list(species) if species is not None else _choice(result)
    if not chosen:
        raise InputError("there is no species to draw", mend="name at least one")
    for one in chosen:
        result.get(one)
    dense = _dense(result)
    begun = np.flatnonzero(dense.ejected.any(axis=0))
    if not begun.size:
        raise InputError(
            f"nothing is ejected up to {max(result.ages):.3g} yr, so there is nothing to draw",
            mend="weigh at older ages, such as 1 Gyr",
        )
    columns = {1: 1, 2: 2, 4: 2}.get(len(chosen), 3)
    rows = -(-len(chosen) // columns)
    with style():
        width = PAGE if columns > 1 else COLUMN
        figure = canvas(width, 0.75 + (1.6 * rows if rows > 1 else 2.0), result, "Yields over time")
        panels = figure.subplots(rows, columns, squeeze=False, sharex=True)
        for k, panel in enumerate(panels.flat):
            if k < len(chosen):
                _panel(panel, dense, chosen[k], convention, float(dense.ages[begun].min()))
            else:
                panel.remove()
        for j in range(columns):
            panels[(len(chosen) - 1 - j) // columns, j].tick_params(labelbottom=True)
        figure.supxlabel("Age of the population [yr]")
        break_ = "\n" if rows == 1 else " "
        figure.supylabel(
            f"{convention.capitalize()} yield up to that age{break_}[{MSUN} per {MSUN} formed]",
            multialignment="center",
        )
        _legend(figure, dense, columns)
    return figure


def _choice(result: PopulationYields) -> list[str]:
    if len(result.species) <= len(CHOICE):
        return list(result.species)
    symbols = {parse(one).symbol for one in result.species}
    return [one for one in CHOICE if one in symbols] or list(result.species[: len(CHOICE)])


def _dense(result: PopulationYields) -> PopulationYields:
    """The result at enough ages for curves."""
    oldest = float(max(result.ages))
    if oldest <= 0:
        raise InputError("the result has no age above 0", mend="weigh at older ages, such as 1 Gyr")
    if np.count_nonzero(np.asarray(result.ages) > 0) >= ENOUGH_AGES:
        return result
    return result.population.weigh(np.geomspace(min(1e6, oldest / 100), oldest, STEPS))


def _panel(panel: Axes, result: PopulationYields, species: str, convention: Convention, first: float) -> None:
    ages = np.asarray(result.ages)
    order = np.argsort(ages)
    order = order[ages[order] > 0]
    ages = ages[order]
    lacking = result.lacking(species)
    curves = {source: result.get(species, source, convention)[order] for source in result.sources}
    whole = result.get(species, None, convention)[order]
    for source, look in looks(result.sources).items():
        values = curves[source]
        if values.any():
            pale = 0.45 if source in lacking else 1.0
            begin = max(int(np.argmax(values != 0)) - 1, 0)
            panel.plot(
                ages[begin:],
                values[begin:],
                color=look.colour,
                ls=look.line,
                lw=1.3,
                alpha=pale,
                zorder=3,
                label=label(source),
            )
    if len(result.sources) > 1:
        panel.plot(ages, whole, color=SUM.colour, lw=2.4, alpha=0.3, zorder=2, label="sum")
    panel.set_xscale("log")
    panel.set_xlim(0.8 * min(first, 0.99 * ages[-1]), ages[-1])
    _scale(panel, np.array([whole, *curves.values()]))
    # beside the panel, where no curve can be under them
    panel.set_title(parse(species).name, loc="left", weight="bold", fontsize=TEXT, pad=3)
    told = [f"{label(source)} {'in part' if curves[source].any() else 'missing'}" for source in lacking]
    panel.set_title("\n".join(told), loc="right", fontsize=SMALL, color=GREY, pad=3, linespacing=1.05)


def _scale(panel: Axes, values: Array) -> None:
    """Logarithmic where all is positive; on both sides of zero where it isn't."""
    from matplotlib.ticker import FixedLocator, LogFormatterMathtext, NullLocator

    top = float(np.abs(values).max())
    if top == 0:
        panel.set_yticks([0])
        return
    floor = top * 10.0**-DECADES
    if values.min() >= -floor:
        panel.set_yscale("log")
        panel.set_ylim(floor, top * 2)
        return
    least = int(np.floor(np.log10(top))) - SIGNED_DECADES
    near = 10.0**least
    # one decade's height from zero to where the logarithm begins, so that ticks are evenly apart
    panel.set_yscale("symlog", linthresh=near, linscale=0.9)
    low, high = min(2 * values.min(), -0.5 * near), max(2 * values.max(), 0.5 * near)
    panel.set_ylim(low, high)
    decades = [10.0**k for k in range(least, least + SIGNED_DECADES + 2)]
    ticks = [*(-d for d in decades), 0.0, *decades]
    panel.yaxis.set_major_locator(FixedLocator([t for t in ticks if low <= t <= high]))
    panel.yaxis.set_minor_locator(NullLocator())
    panel.yaxis.set_major_formatter(LogFormatterMathtext(linthresh=near))
    panel.axhline(0, color=GREY, lw=0.6, zorder=1)


def _legend(figure: Figure, result: PopulationYields, columns: int) -> None:
    from matplotlib.lines import Line2D

    entries = []
    for source, look in looks(result.sources).items():
        entries.append((Line2D([], [], color=look.colour, ls=look.line, lw=1.3), label(source)))
    if len(result.sources) > 1:
        entries.append((Line2D([], [], color=SUM.colour, lw=2.4, alpha=0.3), "sum"))
    legend(figure, entries, len(entries) if columns > 1 else 2)
