"""The production pattern: each element's share of the ejecta against the Sun's, by atomic number."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.composition import mixture
from steelyard.yields.errors import InputError
from steelyard.yields.figures.style import COLUMN, GREY, PAGE, SMALL, SUM, Look, label, legend, looks, style
from steelyard.yields.nuclides import parse
from steelyard.yields.units import plain

from ..results import PopulationYields
from .canvas import canvas

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

#: dex below the highest element, beyond which nothing is shown
DEPTH = 3.5

#: opacity of bars of elements that some source doesn't follow
PALE = 0.45

#: distance of the marks of two sources, in atomic numbers
SIDE = 0.2


def production_pattern(result: PopulationYields, age: Any = -1) -> Figure:
    """Draw the overabundance of each element in the ejecta, and which source makes it.

    Above, log10 of the mass fraction of the element in all that has been ejected up to an
    age, over its mass fraction in the Sun: what all sources eject, and what each does, both
    over the mass that all eject. Below, the share of each source. A mark is open where its
    source doesn't follow the element, that of the sum and the bars where any doesn't.

    Parameters
    ----------
    result : PopulationYields
        Where it has nuclides, their elements are weighed whole.
    age : int, float, str or Quantity
        A whole number is a position in the result's ages; all else is an age, yr.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        There is no such age, or nothing has been ejected by then.

    Notes
    -----
    Total yields: what is ejected unchanged counts. The Sun's lithium is taken at the Sun's
    birth. Elements without a solar value (Tc, Pm) are left out.
    """
    whole = _at(result, age)
    returned = float(whole.returned[0])
    if returned <= 0:
        raise InputError(
            f"nothing is ejected up to {whole.ages[0]:.3g} yr, so there is no pattern",
            mend="choose an older age, such as 1 Gyr",
        )
    solar = _solar(whole.population.solar)
    names = [
        one for one in whole.species if one in solar and whole.total[:, 0, whole.species.index(one)].any()
    ]
    if not names:
        raise InputError("no element of the result has been ejected", mend="weigh other species")
    z = np.array([parse(one).Z for one in names])
    at = [whole.species.index(one) for one in names]
    by_source = whole.total[:, 0, at].clip(min=0.0) / returned / np.array([solar[one] for one in names])
    open_ = ~whole.followed[:, at]
    wide = len(names) > 14 or np.ptp(z) > 20
    with style():
        figure = canvas(
            PAGE if wide else COLUMN, 4.1 if wide else 3.7, whole, "Production pattern of elements"
        )
        above, below = figure.subplots(2, 1, sharex=True, height_ratios=(2.6, 1))
        _overabundance(above, z, by_source, open_, whole.sources)
        _shares(below, z, by_source, open_.any(axis=0), whole.sources)
        _symbols(below, z, names, (PAGE if wide else COLUMN) * 72 - 50)
        above.set_title(
            f"Z = {whole.population.metallicity:g}, {_age(whole.ages[0])} after birth",
            fontsize=SMALL,
            loc="right",
            color=GREY,
            pad=3,
        )
        _legend(figure, whole.sources, bool(open_.any()), wide)
    return figure


def _at(result: PopulationYields, age: Any) -> PopulationYields:
    """The result at one age, in elements."""
    if isinstance(age, (int, np.integer)) and not isinstance(age, bool):
        if not -len(result.ages) <= age < len(result.ages):
            raise InputError(
                f"age {age} is no position among {len(result.ages)} ages",
                mend='give an age as text, such as "1 Gyr"',
            )
        chosen = float(result.ages[age])
    else:
        chosen = plain(age, "yr", "age")
    population = result.population
    symbols = tuple(dict.fromkeys(parse(one).symbol for one in result.species if parse(one).Z))
    return replace(population, species=symbols).weigh([chosen])


def _solar(id: str) -> dict[str, float]:
    sun = mixture(id)
    found = sun.mass_fractions()
    return found | {e: found[e] * 10.0 ** (eps - sun.log_eps[e]) for e, eps in sun.at_birth.items()}


def _overabundance(
    panel: Axes, z: Array, by_source: Array, open_: NDArray[np.bool_], sources: tuple[str, ...]
) -> None:
    with np.errstate(divide="ignore"):
        parts, whole = np.log10(by_source), np.log10(by_source.sum(axis=0))
    top = float(whole.max())
    shown = parts[np.isfinite(parts) & (parts > top - DEPTH)]
    top, bottom = max(top, 0.0), min(float(shown.min()), 0.0)
    span = max(top - bottom, 0.5)
    panel.set_ylim(bottom - 0.08 * span, top + 0.12 * span)
    panel.axhline(0, color=GREY, lw=0.7, zorder=1)
    # no line over elements that are left out
    runs = np.split(np.arange(len(z)), np.flatnonzero(np.diff(z) > 1) + 1)
    for run in runs:
        panel.plot(z[run], whole[run], color=SUM.colour, lw=0.8, alpha=0.5, zorder=2)
    _marks(panel, z, whole, open_.any(axis=0), SUM, 3)
    if len(sources) > 1:
        # side by side, or sources that eject alike would hide each other
        aside = SIDE * (np.arange(len(sources)) - (len(sources) - 1) / 2)
        for look, values, own, shift in zip(looks(sources).values(), parts, open_, aside, strict=True):
            _marks(panel, z + shift, values, own, look, 4)
    panel.set_ylabel(r"log$_{10}$ (X$_{\rm ejecta}$ / X$_\odot$)  [dex]")


def _mark(look: Look, hollow: bool) -> dict[str, Any]:
    """How a mark is drawn; those of sources are small, with a white rim, over those of the sum."""
    size = 6.2 if look is SUM else 4.2
    face, edge = ("white", look.colour) if hollow else (look.colour, look.colour if look is SUM else "white")
    rim = 0.8 if hollow or look is SUM else 0.4
    return {"ls": "", "marker": look.marker, "ms": size, "mfc": face, "mec": edge, "mew": rim}


def _marks(panel: Axes, z: Array, values: Array, open_: NDArray[np.bool_], look: Look, order: float) -> None:
    for hollow in (False, True):
        which = open_ == hollow
        panel.plot(z[which], values[which], zorder=order, **_mark(look, hollow))


def _shares(
    panel: Axes, z: Array, by_source: Array, open_: NDArray[np.bool_], sources: tuple[str, ...]
) -> None:
    shares = by_source / by_source.sum(axis=0)
    base = np.zeros(len(z))
    for source, values in zip(sources, shares, strict=True):
        look = looks(sources)[source]
        bars = panel.bar(
            z,
            values,
            0.78,
            bottom=base,
            color=look.colour,
            edgecolor="white",
            linewidth=0.3,
            hatch=look.hatch,
        )
        for bar, pale in zip(bars, open_, strict=True):
            if pale:
                bar.set_alpha(PALE)
        base = base + values
    panel.set_ylim(0, 1)
    panel.set_ylabel("Share of source")
    panel.set_xlabel("Element, at its atomic number")


def _symbols(panel: Axes, z: Array, names: list[str], points: float) -> None:
    """Write symbols under their atomic numbers, on as many lines as it takes for them to be apart."""
    middle, half = (float(z.min()) + float(z.max())) / 2, max(float(np.ptp(z)) / 2 + 1, 3.5)
    panel.set_xlim(middle - half, middle + half)
    pitch = points / (2 * half)
    need = 13.0 if max(map(len, names)) > 1 else 9.0
    lines = max(1, int(np.ceil(need / pitch)))
    free = [-np.inf] * lines
    panel.set_xticks(z, names)
    panel.minorticks_off()
    panel.tick_params(axis="x", top=False, direction="out", length=2)
    for tick, number in zip(panel.xaxis.get_major_ticks(), z, strict=True):
        x = float(number) * pitch
        line = next((k for k in range(lines) if free[k] + need <= x + 1e-9), int(np.argmin(free)))
        free[line] = x
        # by their baselines, or those with a tail would stand higher
        tick.label1.set_verticalalignment("baseline")
        tick.set_pad(8.0 + line * 1.2 * SMALL)


def _age(years: float) -> str:
    for unit, size in (("Gyr", 1e9), ("Myr", 1e6)):
        if years >= size:
            return f"{years / size:.4g} {unit}"
    return f"{years:.4g} yr"


def _legend(figure: Figure, sources: tuple[str, ...], some_open: bool, wide: bool) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    many = len(sources) > 1
    entries: list[tuple[Any, str]] = []
    for source, look in looks(sources).items():
        box = Patch(facecolor=look.colour, edgecolor="white", hatch=look.hatch, linewidth=0.3)
        entries.append(((Line2D([], [], **_mark(look, False)), box) if many else box, label(source)))
    entries.append((Line2D([], [], **_mark(SUM, False)), "all sources" if many else "the source"))
    if some_open:
        hollow = Line2D([], [], **_mark(SUM, True))
        pale = Patch(facecolor=GREY, alpha=PALE, linewidth=0)
        entries.append(((hollow, pale), "not followed by all" if many else "not followed"))
    legend(figure, entries, 2 if not wide else len(entries) if len(entries) < 6 else 4)
