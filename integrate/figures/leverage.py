"""Which initial masses make a yield, and which published models stand behind them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.figures.style import COLUMN, GREY, MSUN, PAGE, SMALL, TEXT, label, legend, looks, style
from steelyard.yields.nuclides import parse

from ..leverage import Leverage, Profile
from ..results import Convention
from ..sources import EDGE_ABOVE, EDGE_BELOW, JOIN_POLICIES
from .canvas import canvas
from .over_time import CHOICE

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

#: opacity of areas under a density
AREA = 0.28

#: what serves a range of mass that no set does
BETWEEN = {*JOIN_POLICIES, *EDGE_BELOW, *EDGE_ABOVE}

#: shares below this of the yield are not written
LEAST = 0.005


def contribution_by_mass(
    found: Leverage,
    species: Sequence[str] | None = None,
    age: int = -1,
    convention: Convention = "total",
) -> Figure:
    """Draw which initial masses make a yield, a panel for each species.

    The height is the share of the yield made per dex of initial mass, so that areas are
    shares. Marks are the published models; where two metallicities have one at the same mass,
    they share a mark. Joins and edges are pale and dashed. What returns at birth composition,
    and so belongs to no model, is hatched. Beside each panel's name stand the shares of the
    sources, those of delayed events included, which have no initial mass.

    Parameters
    ----------
    found : Leverage
    species : sequence of str, optional
        Default: elements of every nucleosynthetic family that the result has.
    age : int
        Position among the result's ages.
    convention : {"total", "net"}

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        The result hasn't a species, or none of it is made by then.
    """
    result = found.result
    chosen = list(species) if species is not None else _choice(result.species)
    if not chosen:
        raise InputError("there is no species to draw", mend="name at least one")
    profiles = {one: found.profile(one, age, convention) for one in chosen}
    shown = [one for one in chosen if result.get(one, None, convention)[age] != 0]
    if not shown:
        raise InputError(
            f"nothing of {', '.join(chosen)} is made up to {result.ages[age]:.3g} yr",
            mend="choose an older age, such as 1 Gyr",
        )
    columns = {1: 1, 2: 2, 4: 2}.get(len(shown), 3)
    rows = -(-len(shown) // columns)
    # where anything happens in any of the panels, so that they have one axis
    busy = np.concatenate([p.mass[p.density != 0] for p in profiles.values()])
    limits = (float(busy.min()), float(busy.max())) if busy.size else found.population.imf.limits
    with style():
        height = 0.85 + (1.75 * rows if rows > 1 else 2.3)
        figure = canvas(PAGE if columns > 1 else COLUMN, height, result, "Contribution by initial mass")
        panels = figure.subplots(rows, columns, squeeze=False, sharex=True)
        for k, panel in enumerate(panels.flat):
            if k < len(shown):
                _panel(panel, found, shown[k], profiles[shown[k]], age, convention, limits)
            else:
                panel.remove()
        for j in range(columns):
            panels[(len(shown) - 1 - j) // columns, j].tick_params(labelbottom=True)
        figure.supxlabel(f"Initial mass [{MSUN}]")
        break_ = "\n" if rows == 1 else " "
        figure.supylabel(
            f"Share of the {convention} yield up to {duration(result.ages[age])},"
            f"{break_}per dex of initial mass",
            multialignment="center",
        )
        _legend(figure, found, columns, convention == "total")
    return figure


def _choice(species: Sequence[str]) -> list[str]:
    if len(species) <= len(CHOICE):
        return list(species)
    symbols = {parse(one).symbol for one in species}
    return [one for one in CHOICE if one in symbols] or list(species[: len(CHOICE)])


def _panel(
    panel: Axes,
    found: Leverage,
    species: str,
    profile: Profile,
    age: int,
    convention: Convention,
    limits: tuple[float, float],
) -> None:
    result = found.result
    whole = float(result.get(species, None, convention)[age])
    per_dex = np.log(10) / whole
    density, printed = profile.density * per_dex, profile.printed * per_dex
    drawn = looks(result.sources)
    for one in result.ranges:
        look, mine = drawn[one["source"]], (profile.mass >= one["from"]) & (profile.mass <= one["to"])
        joined = one["served_by"] in BETWEEN
        # the ends of the range as they are on its own side
        inner = np.flatnonzero(mine)[1:-1]
        mass, own = profile.mass[inner], density[inner]
        if not own.any():
            continue
        panel.fill_between(mass, own, color=look.colour, alpha=AREA * (0.45 if joined else 1), lw=0, zorder=2)
        panel.plot(mass, own, color=look.colour, lw=1.1, ls=(0, (2, 1.2)) if joined else "-", zorder=3)
        if convention == "total":
            _hatched(panel, mass, printed[inner], own)
    _models(panel, found, species, profile, density, age)
    panel.axhline(0, color=GREY, lw=0.6, zorder=1)
    panel.set_xscale("log")
    panel.set_xlim(limits[0] / 1.06, limits[1] * 1.06)
    top, bottom = max(float(density.max()), 0.0), min(float(density.min()), 0.0)
    span = (top - bottom) or 1.0
    panel.set_ylim(bottom - (0.08 * span if bottom < 0 else 0.0), top + 0.26 * span)
    _ticks(panel, limits)
    panel.set_title(parse(species).name, loc="left", weight="bold", fontsize=TEXT, pad=3)
    _shares(panel, found, species, whole, age, convention)
    _heaviest(panel, found, species, profile, density, age, convention)


def _hatched(panel: Axes, mass: Array, lower: Array, upper: Array) -> None:
    """The part at birth composition, lying on what the models' printed figures make."""
    low = np.clip(lower, 0.0, np.maximum(upper, 0.0))
    panel.fill_between(
        mass,
        low,
        upper,
        where=upper > low,
        facecolor="none",
        edgecolor=GREY,
        hatch="//////",
        lw=0,
        zorder=2.5,
    )


def _models(panel: Axes, found: Leverage, species: str, profile: Profile, density: Array, age: int) -> None:
    """A mark on the density at each mass that a published model of the source stands for."""
    made = found.contribution(species)[:, age].any(axis=0)
    for i, (source, look) in enumerate(looks(found.result.sources).items()):
        masses = sorted(
            {
                m.mass
                for m, has in zip(found.models, made, strict=True)
                if has and m.source == source and m.mass
            }
        )
        mine = profile.source == i
        if not masses or not mine.any():
            continue
        own = profile.mass[mine]
        inside = np.array([m for m in masses if own[0] <= m <= own[-1]])
        panel.plot(
            inside,
            _on_curve(inside, own, density[mine]),
            ls="",
            marker=look.marker,
            ms=3.4,
            mfc="white",
            mec=look.colour,
            mew=0.8,
            zorder=4,
        )


def _on_curve(at: Array, mass: Array, density: Array) -> Array:
    """The density at a mass, where it jumps that of the higher side."""
    sides = np.stack([np.interp(at * (1 + side * 1e-9), mass, density) for side in (-1, 1)])
    return np.take_along_axis(sides, abs(sides).argmax(axis=0)[None], axis=0)[0]


def _heaviest(
    panel: Axes,
    found: Leverage,
    species: str,
    profile: Profile,
    density: Array,
    age: int,
    convention: Convention,
) -> None:
    """Name the stars whose models make most: the mass, and its share over all metallicities."""
    amounts: dict[float, float] = {}
    for model, amount in zip(found.models, found.contribution(species)[:, age].sum(axis=0), strict=True):
        if model.mass is not None:
            amounts[model.mass] = amounts.get(model.mass, 0.0) + float(amount)
    if not amounts:
        return
    mass = max(amounts, key=lambda m: abs(amounts[m]))
    share = amounts[mass] / float(found.result.get(species, None, convention)[age])
    if abs(share) < LEAST:
        return
    at = float(_on_curve(np.array([mass]), profile.mass, density)[0])
    low, high = np.log10(panel.get_xlim())
    right = (np.log10(mass) - low) / (high - low) > 0.55
    panel.annotate(
        f"{mass:g} {MSUN}: {share:.0%}",
        (mass, at),
        xytext=(0.97 if right else 0.03, 0.955),
        textcoords="axes fraction",
        ha="right" if right else "left",
        va="top",
        fontsize=SMALL,
        arrowprops={"arrowstyle": "-", "lw": 0.5, "color": GREY, "shrinkA": 1, "shrinkB": 3},
        zorder=5,
    )


def _shares(
    panel: Axes, found: Leverage, species: str, whole: float, age: int, convention: Convention
) -> None:
    """The shares of the sources, in their colours, at the right above the panel."""
    from matplotlib.offsetbox import AnchoredOffsetbox, HPacker, TextArea

    texts = []
    for source, look in looks(found.result.sources).items():
        share = float(found.result.get(species, source, convention)[age]) / whole
        if abs(share) >= LEAST:
            texts.append(
                TextArea(
                    f"{share:.0%}", textprops={"color": look.colour, "fontsize": SMALL, "weight": "bold"}
                )
            )
    packed = HPacker(children=texts, pad=0, sep=5)
    box = AnchoredOffsetbox(
        "lower right", child=packed, pad=0, borderpad=0, frameon=False,
        bbox_to_anchor=(1.0, 1.02), bbox_transform=panel.transAxes,
    )  # fmt: skip
    panel.add_artist(box)


def duration(years: float) -> str:
    """Return an age in the unit that suits it."""
    for unit, size in (("Gyr", 1e9), ("Myr", 1e6)):
        if years >= size:
            return f"{years / size:.4g} {unit}"
    return f"{years:.4g} yr"


def _ticks(panel: Axes, limits: tuple[float, float]) -> None:
    from matplotlib.ticker import FixedLocator, MaxNLocator, NullFormatter

    ticks = [m for m in (0.1, 0.3, 1, 3, 10, 30, 100) if limits[0] / 1.06 <= m <= limits[1] * 1.06]
    panel.xaxis.set_major_locator(FixedLocator(ticks))
    panel.set_xticks(ticks, [f"{m:g}" for m in ticks])
    panel.xaxis.set_minor_formatter(NullFormatter())
    panel.yaxis.set_major_locator(MaxNLocator(4))


def _legend(figure: Figure, found: Leverage, columns: int, hatched: bool) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    entries: list[tuple[Any, str]] = []
    delayed = {s.kind for s in found.population.sources} & {m.source for m in found.models if m.mass is None}
    for source, look in looks(found.result.sources).items():
        box = Patch(facecolor=look.colour, alpha=AREA, lw=0)
        if source in delayed:
            entries.append((Patch(facecolor=look.colour, lw=0), label(source)))
            continue
        mark = Line2D([], [], color=look.colour, lw=1.1, marker=look.marker, ms=3.4, mfc="white", mew=0.8)
        entries.append(((box, mark), label(source)))
    if any(one["served_by"] in BETWEEN - {"swallow"} for one in found.result.ranges):
        pale = Patch(facecolor=GREY, alpha=0.45 * AREA, lw=0)
        entries.append(((pale, Line2D([], [], color=GREY, lw=1.1, ls=(0, (2, 1.2)))), "join or edge"))
    if hatched:
        entries.append((Patch(facecolor="none", edgecolor=GREY, hatch="//////", lw=0), "birth composition"))
    legend(figure, entries, len(entries) if columns > 1 else 2)
