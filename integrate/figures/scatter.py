"""The scatter of abundance ratios among populations, against their mass."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from math import log, log10
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.figures.style import COLUMN, GREY, MSUN, PAGE, SMALL, TEXT, legend, style
from steelyard.yields.nuclides import parse
from steelyard.yields.units import plain

from ..population import Population
from ..results import PopulationYields
from ..scatter import ScatterLaw, scatter
from .canvas import canvas

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Array = NDArray[np.float64]

#: ratios shown where none are named, as far as the population has their elements
CHOICE = (("O", "Fe"), ("Mg", "Fe"), ("Si", "Fe"), ("C", "O"), ("N", "O"), ("Mn", "Fe"))

#: masses drawn, Msun, and how much in all at each: from few populations to many
MASSES = tuple(float(m) for m in np.geomspace(30.0, 1e5, 12))
DRAWN, FEWEST, MOST = 5e6, 400, 4000

#: standard deviation of a yield, relative to its mean, up to which a logarithm is a straight line
SMALL_ENOUGH = 0.3

_BANDS = ((0.025, 0.975, 0.22), (0.16, 0.84, 0.45))
_BLUE, _ORANGE = "#0072B2", "#D55E00"


def ratio_scatter(
    population: Population,
    ratios: Sequence[tuple[str, str]] | None = None,
    age: Any = None,
    masses: Any = MASSES,
    seed: int = 1,
) -> Any:
    """Draw how far abundance ratios scatter among populations of equal mass, against that mass.

    Bands hold 68 and 95 % of populations drawn star by star, whose numbers of stars are
    Poisson; the line is their median. Dashed: one standard deviation to either side of the
    infinite population, by the exact covariance and the straight line through the logarithm
    (delta method), where both yields scatter by less than 30 %.

    Parameters
    ----------
    population : Population
    ratios : sequence of (str, str), optional
        One panel for each [a/b]; default: up to six that the population has.
    age : float, optional
        yr; default: the population's last age.
    masses : array_like
        Msun, increasing.
    seed : int

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        There is no such element, or nothing is ejected by that age.
    """
    when = max(population.ages) if age is None else plain(age, "yr", "age")
    chosen = list(ratios) if ratios is not None else _choice(population)
    if not chosen:
        raise InputError("there is no ratio to draw", mend='name one, such as ("Mg", "Fe")')
    sizes = np.atleast_1d(plain(masses, "Msun", "masses"))
    names = list(dict.fromkeys(parse(one).name for pair in chosen for one in pair))
    narrowed = replace(population, species=names)
    whole = narrowed.weigh([when])
    for a, b in chosen:
        if not np.isfinite(whole.ratio(a, b)[0]):
            raise InputError(
                f"[{a}/{b}] of the ejecta isn't defined at {when:.3g} yr", mend="choose an older age"
            )
    bands: dict[tuple[str, str], list[Array]] = {pair: [] for pair in chosen}
    undefined: dict[tuple[str, str], list[float]] = {pair: [] for pair in chosen}
    laws: list[ScatterLaw] = []
    levels = [0.5, *(q for low, high, _ in _BANDS for q in (low, high))]
    for k, mass in enumerate(sizes):
        count = int(np.clip(DRAWN / mass, FEWEST, MOST))
        drawn = scatter(narrowed, mass, count, seed=seed + k, ages=[when], survivors=False)
        laws.append(drawn.law)
        for pair in chosen:
            values = drawn.ratio(*pair)[:, 0]
            good = values[np.isfinite(values)]
            undefined[pair].append(1 - len(good) / len(values))
            # where half the populations have no ratio, quantiles of the rest say little
            enough = len(good) > 0.5 * len(values)
            bands[pair].append(np.quantile(good, levels) if enough else np.full(len(levels), np.nan))
    with style():
        columns = min(len(chosen), 3)
        rows = -(-len(chosen) // columns)
        figure = canvas(
            PAGE if columns > 1 else COLUMN,
            0.9 + 1.75 * rows if columns > 1 else 3.0,
            whole,
            "Scatter of abundance ratios",
        )
        panels = figure.subplots(rows, columns, squeeze=False, sharex=True)
        for k, panel in enumerate(panels.flat):
            if k < len(chosen):
                _panel(panel, whole, chosen[k], sizes, np.array(bands[chosen[k]]), laws)
                _told(panel, undefined[chosen[k]], sizes)
            else:
                panel.remove()
        for j in range(columns):
            panels[(len(chosen) - 1 - j) // columns, j].tick_params(labelbottom=True)
        figure.supxlabel(f"Mass of the population [{MSUN}]")
        break_ = "\n" if rows == 1 else " "
        figure.supylabel(
            f"[a/b] of what is ejected{break_}within {_age(when)}  [dex]", multialignment="center"
        )
        _legend(figure, columns)
    return figure


def _choice(population: Population) -> list[tuple[str, str]]:
    has = {parse(one).symbol for one in population.prepared.columns.species}
    return [pair for pair in CHOICE if has.issuperset(pair)]


def delta_sigma(law: ScatterLaw, a: str, b: str) -> tuple[float, bool]:
    """Return the standard deviation of [a/b] at the first age, and whether the method holds.

    Parameters
    ----------
    law : ScatterLaw
    a, b : str

    Returns
    -------
    sigma : float
        dex, from the straight line through the logarithm at the mean.
    holds : bool
        Whether both yields scatter by less than 30 %.
    """
    i, j = law.species.index(a), law.species.index(b)
    mean, covariance = law.mean[0], law.covariance[0]
    relative = covariance / np.outer(mean, mean)
    variance = relative[i, i] + relative[j, j] - 2 * relative[i, j]
    return float(np.sqrt(max(variance, 0.0)) / log(10)), bool(
        max(relative[i, i], relative[j, j]) < SMALL_ENOUGH**2
    )


def _panel(
    panel: Axes,
    whole: PopulationYields,
    pair: tuple[str, str],
    sizes: Array,
    bands: Array,
    laws: Sequence[ScatterLaw],
) -> None:
    a, b = (parse(one).name for one in pair)
    centre = float(whole.ratio(a, b)[0])
    for k, (_, _, opacity) in enumerate(_BANDS):
        panel.fill_between(
            sizes,
            bands[:, 1 + 2 * k],
            bands[:, 2 + 2 * k],
            color=_BLUE,
            alpha=opacity,
            lw=0,
            zorder=2,
        )
    panel.plot(sizes, bands[:, 0], color=_BLUE, lw=1.3, zorder=4)
    panel.axhline(centre, color="black", lw=0.7, zorder=3)
    told = [delta_sigma(law, a, b) for law in laws]
    spread = np.array([sigma if holds else np.nan for sigma, holds in told])
    for sign in (-1, 1):
        panel.plot(sizes, centre + sign * spread, color=_ORANGE, lw=1.3, ls=(0, (4, 1.6)), zorder=5)
    panel.set_xscale("log")
    panel.set_xlim(sizes[0], sizes[-1])
    panel.set_title(f"[{a}/{b}]", loc="left", weight="bold", fontsize=TEXT, pad=3)
    shown = bands[np.isfinite(bands).all(axis=1)]
    low, high = float(shown.min()), float(shown.max())
    margin = 0.08 * max(high - low, 0.1)
    panel.set_ylim(low - margin, high + margin)


def _told(panel: Axes, undefined: Sequence[float], sizes: Array) -> None:
    """Say from which mass on a ratio is always there."""
    some = [m for m, share in zip(sizes, undefined, strict=True) if share > 0.01]
    if some:
        worst = max(undefined)
        text = f"undefined: {100 * worst:.0f}% at {sizes[int(np.argmax(undefined))]:.2g} {MSUN}"
        panel.set_title(text, loc="right", fontsize=SMALL, color=GREY, pad=3)


def _age(years: float) -> str:
    unit, size = ("Gyr", 1e9) if log10(years) >= 9 else ("Myr", 1e6)
    return f"{years / size:.4g} {unit}"


def _legend(figure: Any, columns: int) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    (_, _, wide), (_, _, narrow) = _BANDS
    entries = [
        (Patch(color=_BLUE, alpha=1 - (1 - narrow) * (1 - wide), lw=0), "68 % of populations"),
        (Patch(color=_BLUE, alpha=wide, lw=0), "95 %"),
        (Line2D([], [], color=_BLUE, lw=1.3), "median"),
        (Line2D([], [], color="black", lw=0.7), "infinite population"),
        (Line2D([], [], color=_ORANGE, lw=1.3, ls=(0, (4, 1.6))), r"exact $\pm 1\sigma$, delta method"),
    ]
    legend(figure, entries, len(entries) if columns > 1 else 2)
