"""Figures for print: a file a figure, and one style for all."""

from steelyard.yields.figures.style import save

from .contrast import abundance_envelope, strip_chart
from .leverage import contribution_by_mass
from .over_time import yields_over_time
from .pattern import production_pattern
from .shares import stacked_shares

__all__ = [
    "abundance_envelope",
    "contribution_by_mass",
    "production_pattern",
    "save",
    "stacked_shares",
    "strip_chart",
    "yields_over_time",
]
