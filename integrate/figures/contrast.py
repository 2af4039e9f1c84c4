"""How far choices move each element: a strip of marks, and [X/Fe] of the ejecta with its envelope."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.figures.style import GREY, PAGE, SMALL, TEXT, looks, style

from ..contrasting import Contrast
from ..contrasting.compare import OVER
from ..contrasting.telling import singles
from ..contrasting.writing import origin

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

#: Okabe & Ito (2008), those that sources haven't; yellow is too light for marks
COLOURS = ("#CC79A7", "#E69F00", "#56B4E9", "#000000")
_SOURCES = ("agb", "core-collapse", "thermonuclear")

#: one for each choice of an ingredient
MARKERS = ("o", "s", "^", "D", "v", "P", "X", "<", ">", "p", "*", "h", "d", "8")

CLOUD = "#999999"

#: share of the distance of two elements over which marks are laid out
WIDTH = 0.8

#: elements side by side before the figure is cut into rows of them
ROW = 16

#: elements whose width a panel has at least, so that few aren't drawn out
FEWEST = 4

#: choices a legend names
NAMED = 28


def colours(names: Sequence[str]) -> list[str]:
    """Return the colour of each ingredient: of sources as in all figures, of others by their order.

    Examples
    --------
    >>> colours(["imf", "agb", "delay"])
    ['#CC79A7', '#D55E00', '#E69F00']
    """
    known = looks(_SOURCES)
    others = [name for name in names if name not in known]
    return [known[n].colour if n in known else COLOURS[others.index(n) % len(COLOURS)] for n in names]


def strip_chart(found: Contrast, age: int = -1) -> Figure:
    """Draw how far each choice moves each element against the base.

    Marks of one colour are the choices of one ingredient, each with a shape of its own. Where
    choices are combined, all combinations are drawn as points under them. A small hollow mark
    at the foot stands for a choice that doesn't follow the element, or has no ratio to the base;
    elements of which that holds for all choices are left out.

    Parameters
    ----------
    found : Contrast
    age : int
        Position among the ages.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        No element has a value to draw.
    """
    alone = singles(found)
    values = found.dex[:, age]
    shown = np.flatnonzero(np.isfinite(values[1:]).any(axis=0)).tolist()
    if not shown:
        raise InputError("no choice has a value to draw", mend="compare other elements, choices or ages")
    with style():
        figure, panels = _canvas(found, "Contrast of choices", 0.19 * _named(found) + 0.5, shown)
        low, high = _limits(values[:, shown])
        for panel, columns in panels:
            panel.axhline(0, color="black", lw=0.8, zorder=2)
            for x, j in enumerate(columns):
                if x % 2:
                    panel.axvspan(x - 0.5, x + 0.5, color="#f2f2f2", zorder=0, lw=0)
                if found.full:
                    _cloud(panel, x, values[:, j])
                for i, row in enumerate(alone):
                    here = x + _aside(i, len(alone))
                    look = _look(found, row)
                    if np.isfinite(values[row, j]):
                        panel.plot(here, values[row, j], zorder=4, **look)
                    else:
                        panel.plot(
                            here, 0.025, transform=panel.get_xaxis_transform(), zorder=3, **_hollow(look)
                        )
            panel.set_ylim(low, high)
            panel.set_ylabel("Yield against the base [dex]")
            _names(panel, [found.species[j] for j in columns])
        _title(panels[0][0], found, age)
        _legend(figure, found)
    return figure


def abundance_envelope(found: Contrast, age: int = -1) -> Figure:
    """Draw [X/Fe] of the ejecta of the base, and how far choices move it.

    Bars of one colour reach from the least to the largest value over the choices of one
    ingredient swapped alone; the grey box from the least to the largest of all populations.

    Parameters
    ----------
    found : Contrast
    age : int
        Position among the ages.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        The base has no [X/Fe].
    """
    values = found.ratio[:, age]
    shown = [j for j, name in enumerate(found.species) if name != OVER and np.isfinite(values[0, j])]
    if not shown:
        raise InputError(f"the base has no [X/{OVER}] to draw", mend="compare other elements or ages")
    with style():
        figure, panels = _canvas(
            found, f"[X/{OVER}] of the ejecta over choices", 0.3 * (len(found.design.factors) + 2), shown
        )
        low, high = _limits(values[:, shown])
        factors = found.design.factors
        paint = colours([f.name for f in factors])
        for panel, columns in panels:
            panel.axhline(0, color=GREY, lw=0.7, ls=(0, (4, 2)), zorder=1)
            for x, j in enumerate(columns):
                whole = values[np.isfinite(values[:, j]), j]
                panel.bar(
                    x, np.ptp(whole), 0.86, whole.min(), color="#d9d9d9", edgecolor=GREY, lw=0.4, zorder=2
                )
                panel.plot([x - 0.43, x + 0.43], [values[0, j]] * 2, color="black", lw=1.4, zorder=5)
                for k, factor in enumerate(factors):
                    own = values[found.by_factor(factor.name), j]
                    own = own[np.isfinite(own)]
                    here = x + _aside(k, len(factors), 0.66)
                    panel.plot(
                        [here, here],
                        [own.min(), own.max()],
                        color=paint[k],
                        lw=1.0,
                        zorder=3,
                        solid_capstyle="butt",
                    )
                    panel.plot(
                        [here] * len(own),
                        own,
                        ls="",
                        marker=MARKERS[k % len(MARKERS)],
                        ms=3.2,
                        mfc=paint[k],
                        mec="white",
                        mew=0.3,
                        zorder=4,
                    )
            panel.set_ylim(low, high)
            panel.set_ylabel(f"[X/{OVER}] of the ejecta [dex]")
            _names(panel, [found.species[j] for j in columns])
        _title(panels[0][0], found, age)
        _envelope_legend(figure, found)
    return figure


def _canvas(
    found: Contrast, title: str, legend_height: float, columns: list[int]
) -> tuple[Any, list[tuple[Any, list[int]]]]:
    from matplotlib.figure import Figure

    rows = [columns[i : i + ROW] for i in range(0, len(columns), ROW)]
    figure = Figure(
        figsize=(PAGE, max(2.9 * len(rows) if len(rows) > 1 else 3.4, legend_height)), layout="constrained"
    )
    figure.provenance = (title, "\n".join(origin(found)))
    panels = figure.subplots(len(rows), 1, squeeze=False)[:, 0]
    out = list(zip(panels, rows, strict=True))
    for panel, row in out:
        middle, slots = (len(row) - 1) / 2, max(len(row), FEWEST)
        panel.set_xlim(middle - slots / 2, middle + slots / 2)
        if len(rows) > 1:
            panel.set_xlim(-0.5, ROW - 0.5)
    return figure, out


def _named(found: Contrast) -> int:
    return min(len(singles(found)), NAMED) + len(found.design.factors)


def _limits(values: Array) -> tuple[float, float]:
    finite = values[np.isfinite(values)]
    low, high = min(float(finite.min()), 0.0), max(float(finite.max()), 0.0)
    margin = 0.1 * max(high - low, 0.05)
    return low - 1.3 * margin, high + margin


def _aside(i: int, count: int, width: float = WIDTH) -> float:
    return width * ((i + 0.5) / count - 0.5)


def _cloud(panel: Axes, x: int, values: Array) -> None:
    """All combinations, spread aside evenly."""
    values = values[np.isfinite(values)]
    shift = WIDTH * ((np.arange(len(values)) * 0.6180339887498949) % 1 - 0.5)
    panel.plot(x + shift, values, ls="", marker=".", ms=2.0, color=CLOUD, mew=0, zorder=1, rasterized=True)


def _look(found: Contrast, row: int) -> dict[str, Any]:
    k = int(np.flatnonzero(found.at[row])[0])
    paint = colours([f.name for f in found.design.factors])
    marker = MARKERS[(int(found.at[row, k]) - 1) % len(MARKERS)]
    return {"ls": "", "marker": marker, "ms": 4.2, "mfc": paint[k], "mec": "white", "mew": 0.35}


def _hollow(look: dict[str, Any]) -> dict[str, Any]:
    return {**look, "ms": 2.8, "mfc": "white", "mec": look["mfc"], "mew": 0.6}


def _names(panel: Axes, names: list[str]) -> None:
    panel.set_xticks(range(len(names)), names)
    panel.tick_params(axis="x", length=0, labelsize=TEXT)
    panel.minorticks_off()


def _title(panel: Axes, found: Contrast, age: int) -> None:
    years = found.ages[age]
    text = next(
        (f"{years / s:.4g} {u}" for u, s in (("Gyr", 1e9), ("Myr", 1e6)) if years >= s), f"{years:.4g} yr"
    )
    z = found.design.base.metallicity
    panel.set_title(
        f"{found.convention} yields, Z = {z:g}, {text} after birth",
        fontsize=SMALL,
        loc="right",
        color=GREY,
        pad=3,
    )


def _legend(figure: Figure, found: Contrast) -> None:
    """Beside the panels, ingredients as headings over their choices."""
    from matplotlib.lines import Line2D

    handles: list[Any] = []
    texts: list[str] = []
    blank = Line2D([], [], ls="")
    alone = singles(found)
    before = -1
    for row in alone[:NAMED]:
        k = int(np.flatnonzero(found.at[row])[0])
        if k != before:
            handles.append(blank)
            texts.append(found.design.factors[k].name)
            before = k
        handles.append(Line2D([], [], **_look(found, row)))
        texts.append(found.design.factors[k].labels[int(found.at[row, k])])
    if len(alone) > NAMED:
        handles.append(blank)
        texts.append(f"and {len(alone) - NAMED} more")
    if found.full:
        handles.append(Line2D([], [], ls="", marker=".", ms=3.0, color=CLOUD, mew=0))
        texts.append("all combinations")
    if (found.marks[alone] > 0).any():
        grey = {"ls": "", "marker": "o", "mfc": GREY}
        handles.append(Line2D([], [], **_hollow(grey)))
        texts.append("at the foot: no value")
    headings = {f.name for f in found.design.factors}
    made = figure.legend(
        handles,
        [_plain(t) for t in texts],
        loc="outside right upper",
        fontsize=SMALL,
        handlelength=1.0,
        labelspacing=0.35,
    )
    for handle, text in zip(handles, made.get_texts(), strict=True):
        if handle is blank and text.get_text() in headings:
            text.set_weight("bold")


def _envelope_legend(figure: Figure, found: Contrast) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    handles: list[Any] = [Line2D([], [], color="black", lw=1.4)]
    texts = ["the base"]
    paint = colours([f.name for f in found.design.factors])
    for k, factor in enumerate(found.design.factors):
        handles.append(
            Line2D(
                [],
                [],
                color=paint[k],
                lw=1.0,
                marker=MARKERS[k % len(MARKERS)],
                ms=3.6,
                mec="white",
                mew=0.3,
            )
        )
        texts.append(f"{factor.name}: {len(factor)} choices")
    handles.append(Patch(facecolor="#d9d9d9", edgecolor=GREY, lw=0.4))
    texts.append("all combinations" if found.full else "all choices")
    figure.legend(
        handles, [_plain(t) for t in texts], loc="outside right upper", fontsize=SMALL, handlelength=1.6
    )


def _plain(text: str) -> str:
    text = text if len(text) <= 40 else f"{text[:39]}…"
    return text.replace("$", r"\$")
