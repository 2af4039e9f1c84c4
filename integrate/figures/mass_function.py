"""A mass function, and below it how many stars each published model stands for."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.figures.style import GREY, MSUN, PAGE, SMALL, label, legend, looks, style

from ..leverage import Leverage
from .canvas import canvas
from .leverage import BETWEEN, duration

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

#: steps per dex of the densities
STEPS = 100

#: decades shown below the largest weight
DECADES = 4.5

_TICKS = (0.1, 0.2, 0.5, 1, 2, 5, 8, 13, 20, 40, 60, 120, 300)


def mass_function_and_weights(found: Leverage, age: int = -1) -> Figure:
    """Draw the mass function and the weights that it gives to published models.

    Above: stars, and mass in stars, formed per dex of initial mass. Below: how many stars dead
    at the age each model stands for, per Msun formed, by source; where two metallicities serve
    the population, the higher one's marks are hollow. Pale are masses that no set serves.

    Parameters
    ----------
    found : Leverage
    age : int
        Position among the result's ages.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        No star that a model stands for is dead yet.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> from steelyard.integrate.leverage import leverage
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O"])
    >>> above, below = mass_function_and_weights(leverage(stars)).axes
    >>> below.get_ylabel().startswith("Stars that a model")
    True
    """
    result, imf = found.result, found.population.imf
    when = float(result.ages[age])
    weights = found.nodes.weights([when])[:, 0]
    mass = np.array([np.nan if one.mass is None else one.mass for one in found.models])
    summed = np.where(np.isnan(mass), 0.0, weights.sum(axis=0))
    if not summed.any():
        raise InputError(
            f"no model stands for any star dead at {when:.3g} yr", mend="choose an older age, such as 1 Gyr"
        )
    lo, hi = imf.limits
    edges = np.geomspace(lo, hi, max(int(STEPS * np.log10(hi / lo)), 2) + 1)
    edges = np.unique(np.concatenate([edges, [b for b in imf.breaks if lo < b < hi]]))
    width = np.log10(edges[1:] / edges[:-1])
    number, whole = imf.number(edges[:-1], edges[1:]) / width, imf.mass(edges[:-1], edges[1:]) / width
    with style():
        figure = canvas(PAGE, 4.3, result, "Mass function and weights of models")
        above, below = figure.subplots(2, 1, sharex=True)
        stars, matter = _mass_function(above, edges, number, whole)
        _unserved(below, found)
        told = looks(result.sources)
        entries = [(stars, "stars"), (matter, "mass in stars")]
        entries += _weights(below, found, mass, summed, told)
        top = float(summed.max())
        shown = summed[summed > 0]
        below.set_yscale("log")
        below.set_ylim(max(float(shown.min()) / 2, top / 10**DECADES), top * 2.5)
        below.set_ylabel(f"Stars that a model\nstands for, per {MSUN} formed")
        two = any(
            len({m.metallicity for m in found.models if m.set == s and m.mass}) > 1 for s in _sets(found)
        )
        hollow = "; hollow: the higher of two metallicities" if two else ""
        below.set_title(f"dead at {duration(when)}{hollow}", loc="right", fontsize=SMALL, color=GREY, pad=3)
        below.set_xlabel(f"Initial mass [{MSUN}]")
        below.set_xscale("log")
        below.set_xlim(lo / 1.06, hi * 1.06)
        ticks = [m for m in _TICKS if lo <= m <= hi]
        below.set_xticks(ticks, [f"{m:g}" for m in ticks])
        below.set_xticks([], minor=True)
        legend(figure, entries, len(entries))
    return figure


def _sets(found: Leverage) -> set[str]:
    return {model.set for model in found.models}


def _mass_function(axes: Axes, edges: Array, number: Array, whole: Array) -> tuple[object, object]:
    middle = np.sqrt(edges[1:] * edges[:-1])
    (stars,) = axes.plot(middle, number, color="black", lw=1.2)
    (matter,) = axes.plot(middle, whole, color="black", lw=1.2, ls=(0, (4.5, 1.6)))
    axes.set_yscale("log")
    axes.set_ylabel(f"Formed per dex,\nper {MSUN} [stars; {MSUN}]")
    return stars, matter


def _unserved(axes: Axes, found: Leverage) -> None:
    """Shade what joins and edges serve."""
    lo, hi = found.population.imf.limits
    for one in found.result.ranges:
        if one["served_by"].split(",")[0] in BETWEEN:
            axes.axvspan(max(one["from"], lo), min(one["to"], hi), color="0.93", lw=0, zorder=0)
            middle = (max(one["from"], lo) * min(one["to"], hi)) ** 0.5
            if np.log10(min(one["to"], hi) / max(one["from"], lo)) > 0.14:
                axes.annotate(
                    one["served_by"].split(",")[0],
                    (middle, 0.96),
                    xycoords=("data", "axes fraction"),
                    ha="center",
                    va="top",
                    fontsize=SMALL,
                    color=GREY,
                )


def _weights(
    axes: Axes, found: Leverage, mass: Array, summed: Array, told: dict[str, object]
) -> Sequence[tuple[object, str]]:
    """A stem for each model; those of the higher of two metallicities are hollow."""
    entries = []
    least = 10.0 ** (np.log10(summed.max()) - DECADES - 1)
    for source, look in told.items():
        mine = [
            i
            for i, one in enumerate(found.models)
            if one.source == source and not np.isnan(mass[i]) and summed[i] > 0
        ]
        if not mine:
            continue
        by_set: dict[str, list[float]] = {}
        for i in mine:
            by_set.setdefault(found.models[i].set, []).append(float(found.models[i].metallicity or 0.0))
        for i in mine:
            hollow = found.models[i].metallicity != min(by_set[found.models[i].set])
            axes.plot([mass[i]] * 2, [least, summed[i]], color=look.colour, lw=0.5, alpha=0.5, zorder=2)
            axes.plot(
                [mass[i]],
                [summed[i]],
                ls="",
                marker=look.marker,
                ms=4.2 if hollow else 3.4,
                mfc="none" if hollow else look.colour,
                mec=look.colour,
                mew=0.9,
                zorder=3,
            )
        (handle,) = axes.plot([], [], ls="", marker=look.marker, color=look.colour, ms=3.6)
        entries.append((handle, f"{label(source)}: {', '.join(by_set)}"))
    return entries
