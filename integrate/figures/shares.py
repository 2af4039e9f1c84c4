"""Stacked shares: what the spread of each element is due to."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from steelyard.yields.errors import InputError
from steelyard.yields.figures.style import GREY, PAGE, SMALL, TEXT, looks, style

from ..contrasting.writing import origin
from ..shares import Shares
from .contrast import FEWEST, colours

if TYPE_CHECKING:
    from matplotlib.figure import Figure

#: of ingredients that aren't sources; the two looks below are of interactions
HATCHES = ("xxxx", "----", "\\\\\\\\", "||||", "oo")
PAIRS, HIGHER = ("#bfbfbf", "++++"), ("#7f7f7f", "")


def stacked_shares(*found: Shares, age: int = -1) -> Figure:
    """Draw the shares of the variance that ingredients have in each element, stacked to 1.

    Parameters
    ----------
    *found : Shares
        A panel for each, such as of yields and of [X/Fe].
    age : int
        Position among the ages.

    Returns
    -------
    matplotlib.figure.Figure
        The number over each bar is the standard deviation over all combinations, in dex.

    Raises
    ------
    InputError
        Nothing varies.
    """
    from matplotlib.figure import Figure as Made
    from matplotlib.patches import Patch

    shown = [[j for j in range(one.variance.shape[1]) if np.isfinite(one.parts[0, age, j])] for one in found]
    found = tuple(one for one, columns in zip(found, shown, strict=True) if columns)
    shown = [columns for columns in shown if columns]
    if not found:
        raise InputError("no element varies, so there are no shares to draw", mend="swap other ingredients")
    with style():
        figure = Made(figsize=(PAGE, 0.4 + 2.1 * len(found)), layout="constrained")
        figure.provenance = ("Shares of the variance", "\n".join(origin(found[0].contrast)))
        panels = figure.subplots(len(found), 1, squeeze=False)[:, 0]
        for panel, one, columns in zip(panels, found, shown, strict=True):
            base = np.zeros(len(columns))
            for look, values in _layers(one, age):
                heights = np.clip(values[columns], 0, None)
                panel.bar(np.arange(len(columns)), heights, 0.78, bottom=base, **look)
                base = base + heights
            names = [one.contrast.species[j] for j in columns]
            size = TEXT if len(names) <= 20 else 5.0
            if one.ratio:
                names = [f"[{n}/Fe]" for n in names] if len(names) <= 12 else names
            panel.set_xticks(range(len(names)), names)
            panel.tick_params(axis="x", length=0, labelsize=size, top=False)
            middle, slots = (len(names) - 1) / 2, max(len(names), 2 * FEWEST)
            panel.set_xlim(middle - slots / 2 - 0.1, middle + slots / 2 + 0.1)
            panel.set_ylim(0, 1)
            panel.set_ylabel("Share of the variance")
            if len(names) <= 24:
                for x, j in enumerate(columns):
                    spread = float(np.sqrt(one.variance[age, j]))
                    panel.text(x, 1.02, f"{spread:.2f}", ha="center", va="bottom", fontsize=SMALL, color=GREY)
            of = "[X/Fe] of the ejecta" if one.ratio else f"log$_{{10}}$ of {one.contrast.convention} yields"
            panel.set_title(
                f"{of}; above each bar its standard deviation [dex]",
                fontsize=SMALL,
                loc="left",
                color=GREY,
                pad=12,
            )
        looks = [look for look, _ in _layers(found[0], age)]
        texts = [*found[0].factors, "pairs", "higher"][: len(looks)]
        handles = [Patch(**look) for look in looks]
        figure.legend(
            handles[::-1],
            texts[::-1],
            loc="outside right upper",
            fontsize=SMALL,
            handlelength=1.8,
            handleheight=1.1,
        )
    return figure


def _layers(one: Shares, age: int) -> list[tuple[dict[str, Any], Any]]:
    """Looks and heights from the foot up."""
    out = []
    known = looks(("agb", "core-collapse", "thermonuclear"))
    others = [name for name in one.factors if name not in known]
    for name, face, values in zip(one.factors, colours(one.factors), one.main[:, age], strict=True):
        hatch = known[name].hatch if name in known else HATCHES[others.index(name) % len(HATCHES)]
        out.append((_look(face, hatch), values))
    if len(one.factors) > 1:
        out.append((_look(*PAIRS), np.nansum(one.pairs[:, age], axis=0)))
    if len(one.factors) > 2:
        out.append((_look(*HIGHER), np.nan_to_num(one.higher[age])))
    return out


def _look(face: str, hatch: str) -> dict[str, Any]:
    return {"facecolor": face, "edgecolor": "white", "hatch": hatch, "linewidth": 0.3}
