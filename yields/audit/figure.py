"""A picture of an audit: the grid of models with what was found, and the species that are followed."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..figures.style import GREY, MSUN, PAGE, SMALL, TEXT, canvas, style
from ..figures.style import save as write
from ..grid import YieldSet
from ..nuclides import Species, is_stable, symbols
from .finding import SEVERITIES, Finding, Severity
from .species import missing_between

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

#: colour and marker of a severity; told apart without colour too
LOOK: dict[Severity, tuple[str, str]] = {
    "error": ("#D55E00", "s"),
    "warning": ("#CC79A7", "D"),
    "note": ("#0072B2", "o"),
}
FOLLOWED, RADIOACTIVE = GREY, "#E69F00"

#: findings that get a line under the picture; the others are counted
MOST_LINES = 16

_LETTERS = 125


def draw(grid: YieldSet, findings: Sequence[Finding]) -> Figure:
    """Draw the grid of a set's models with findings marked, and its coverage of species.

    Parameters
    ----------
    grid : YieldSet
    findings : sequence of Finding

    Returns
    -------
    matplotlib.figure.Figure
        Not shown, and unknown to pyplot.
    """
    numbered = list(enumerate(findings, start=1))
    shown = numbered[:MOST_LINES]
    lines: list[tuple[str, str, str]] = [line for n, f in shown for line in _lines(n, f)]
    if len(numbered) > len(shown):
        lines.append(
            ("", f"… and {len(numbered) - len(shown)} more, numbered on in the list of the audit", GREY)
        )
    models = 0.9 + 0.34 * max(len(grid.slices), 2)
    height = 0.9 + 0.085 * (grid.parsed[-1].Z + 2)
    chart = 1.5 if grid.follows_elements else max(height, 1.7)
    text = 0.15 * max(len(lines), 1) + 0.2
    with style():
        figure = canvas(
            PAGE, models + chart + text + 0.9, f"Audit of {grid.id}", f"{grid.id} sha256 {grid.checksum}"
        )
        top, middle, bottom = figure.subplots(3, 1, height_ratios=[models, chart, text])
        figure.suptitle(f"Audit of {grid.id}", x=0.012, ha="left", fontsize=TEXT + 1, fontweight="bold")
        _models(top, grid, numbered)
        if grid.follows_elements:
            _elements(middle, grid)
        else:
            _nuclides(middle, grid)
        _texts(bottom, lines)
    return figure


def save(grid: YieldSet, findings: Sequence[Finding], path: str | Path) -> Path:
    """Write the picture of an audit to a file, PNG, PDF or SVG by its ending.

    Parameters
    ----------
    grid : YieldSet
    findings : sequence of Finding
    path : path-like

    Returns
    -------
    Path

    Raises
    ------
    InputError
        The ending isn't one of these, or the file can't be written.
    """
    write(draw(grid, findings), path)
    return Path(path)


def _models(axes: Axes, grid: YieldSet, numbered: Sequence[tuple[int, Finding]]) -> None:
    """Models as dots, a line a metallicity, each finding as a numbered mark above its model."""
    if grid.event:
        axes.set_axis_off()
        axes.text(0, 0.5, "one event of a delayed source: no initial masses", va="center", fontsize=TEXT)
        return
    for k, one in enumerate(grid.slices):
        axes.plot(one.mass, [k] * len(one.mass), ".", color=GREY, ms=6, zorder=2)
        axes.axhline(k, color="0.9", lw=0.8, zorder=0)
    level = {z: k for k, z in enumerate(grid.metallicities)}
    at: dict[tuple[float, float], list[tuple[int, Finding]]] = {}
    for n, f in numbered:
        if f.metallicity in level and f.mass is not None:
            at.setdefault((f.mass, f.metallicity), []).append((n, f))
    for (mass, z), here in at.items():
        worst = max((f.severity for _, f in here), key=SEVERITIES.index)
        colour, marker = LOOK[worst]
        axes.plot([mass], [level[z]], marker, mfc="none", mec=colour, ms=10, mew=1.6, zorder=3)
        axes.annotate(
            ",".join(str(n) for n, _ in here),
            (mass, level[z]),
            xytext=(0, 10),
            textcoords="offset points",
            ha="center",
            fontsize=SMALL,
            color=colour,
        )
    for severity, (colour, marker) in LOOK.items():
        count = sum(f.severity == severity for _, f in numbered)
        name = severity if count == 1 else f"{severity}s"
        axes.plot([], [], marker, mfc="none", mec=colour, mew=1.6, ms=8, label=f"{count} {name}")
    axes.legend(
        ncols=3, loc="lower right", bbox_to_anchor=(1, 1), frameon=False, fontsize=SMALL, borderpad=0.1
    )
    axes.set_xscale("log")
    axes.set_xlim(min(grid.masses) / 1.08, max(grid.masses) * 1.08)
    axes.set_ylim(-0.6, len(grid.slices) - 0.25)
    axes.set_yticks(range(len(grid.slices)), [f"{z:.4g}" for z in grid.metallicities])
    _mass_ticks(axes, grid.masses)
    axes.set_xlabel(f"Initial mass [{MSUN}]")
    axes.set_ylabel("Metallicity Z")
    axes.spines[["top", "right"]].set_visible(False)
    axes.tick_params(top=False, right=False, which="both")


def _mass_ticks(axes: Axes, masses: Sequence[float]) -> None:
    """Label as many masses of models as there is room for on a logarithmic axis."""
    import math

    room = math.log10(max(masses) / min(masses) * 1.17) / 22
    kept: list[float] = []
    for mass in masses:
        if not kept or math.log10(mass / kept[-1]) > room:
            kept.append(mass)
    axes.set_xticks(kept, [f"{m:g}" for m in kept])
    axes.set_xticks([], minor=True)


def _nuclides(axes: Axes, grid: YieldSet) -> None:
    """Chart of the nuclides: neutrons to the right, protons up."""
    from matplotlib.patches import Rectangle

    groups = _groups(grid)
    for species, face, edge, _ in groups:
        for one in species:
            n = one.A - one.Z
            axes.add_patch(
                Rectangle((n - 0.42, one.Z - 0.42), 0.84, 0.84, facecolor=face, edgecolor=edge, lw=0.7)
            )
    drawn = [one for species, *_ in groups for one in species]
    z = sorted({one.Z for one in drawn})
    axes.set_xlim(-1.5, max(one.A - one.Z for one in drawn) + 1.5)
    axes.set_ylim(-1, max(z) + 1.5)
    for one in z:
        left = min(s.A - s.Z for s in drawn if s.Z == one)
        symbol = symbols()[one - 1] if one else "n"
        axes.text(left - 0.7, one, symbol, ha="right", va="center", fontsize=6, color=GREY)
    axes.set_xlabel("Neutrons")
    axes.set_ylabel("Protons")
    axes.spines[["top", "right"]].set_visible(False)
    axes.tick_params(top=False, right=False, which="both")
    _key(axes, groups, "lower right")


def _elements(axes: Axes, grid: YieldSet) -> None:
    """Elements in rows, in order of atomic number."""
    from matplotlib.patches import Rectangle

    groups = _groups(grid)
    width = 24
    drawn = sorted((one, face, edge) for species, face, edge, _ in groups for one in species)
    for i, (one, face, edge) in enumerate(drawn):
        x, y = i % width, -(i // width)
        axes.add_patch(Rectangle((x + 0.05, y + 0.08), 0.9, 0.84, facecolor=face, edgecolor=edge, lw=0.7))
        colour = "0.35" if face == "white" else "white"
        axes.text(x + 0.5, y + 0.5, one.name, ha="center", va="center", fontsize=SMALL, color=colour)
    axes.set_xlim(0, width)
    axes.set_ylim(-(len(drawn) - 1) // width - 0.1, 1.75)
    axes.set_axis_off()
    _key(axes, groups, "upper left")


def _groups(grid: YieldSet) -> list[tuple[list[Species], str, str, str]]:
    """Species with their look: followed and stable, followed and radioactive, stable but not followed."""
    own = [s for s in grid.parsed if grid.follows_elements or not s.is_element]
    stable = [s for s in own if is_stable(s)]
    unstable = [s for s in own if not is_stable(s)]
    lacking = missing_between(grid)
    groups = [
        (stable, FOLLOWED, FOLLOWED, f"{len(stable)} followed, stable"),
        (unstable, RADIOACTIVE, RADIOACTIVE, f"{len(unstable)} followed, radioactive"),
        (lacking, "white", "0.55", f"{len(lacking)} stable between them, not followed"),
    ]
    return [group for group in groups if group[0]]


def _key(axes: Axes, groups: Sequence[tuple[Any, str, str, str]], place: str) -> None:
    from matplotlib.patches import Patch

    handles = [Patch(facecolor=face, edgecolor=edge, label=label) for _, face, edge, label in groups]
    axes.legend(
        handles=handles, loc=place, frameon=False, fontsize=SMALL, ncols=1 if place == "lower right" else 3
    )


def _lines(n: int, finding: Finding) -> list[tuple[str, str, str]]:
    """Number, text and colour of the number, a line of print each."""
    import textwrap

    text = f"{finding.model}: {finding.explanation}"
    colour = LOOK[finding.severity][0]
    wrapped = textwrap.wrap(text, _LETTERS, max_lines=2, placeholder=" …")
    return [(str(n) if not i else "", line, colour) for i, line in enumerate(wrapped)]


def _texts(axes: Axes, lines: Sequence[tuple[str, str, str]]) -> None:
    axes.set_axis_off()
    if not lines:
        lines = [("", "nothing found", GREY)]
    step = 1 / len(lines)
    for i, (number, line, colour) in enumerate(lines):
        place = {"va": "center", "fontsize": SMALL, "transform": axes.transAxes}
        y = 1 - (i + 0.5) * step
        axes.text(-0.05, y, number, color=colour, fontweight="bold", ha="right", **place)
        axes.text(-0.04, y, line, color="0.2", **place)
