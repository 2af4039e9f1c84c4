"""Figures of populations carry the population that they show."""

from __future__ import annotations

from typing import TYPE_CHECKING

from steelyard.yields.figures import style

from ..provenance import provenance

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from ..results import PopulationYields


def canvas(width: float, height: float, result: PopulationYields, title: str) -> Figure:
    """Return an empty figure, in inches, that knows which result it shows."""
    return style.canvas(width, height, title, "\n".join(provenance(result)))
