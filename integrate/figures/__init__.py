"""Figures for print: a file a figure, and one style for all."""

from steelyard.yields.figures.style import save

from .contrast import abundance_envelope, strip_chart
from .leverage import contribution_by_mass
from .mass_function import mass_function_and_weights
from .over_time import yields_over_time
from .pattern import production_pattern
from .shares import stacked_shares

__all__ = [
    "abundance_envelope",
    "contribution_by_mass",
    "mass_function_and_weights",
    "production_pattern",
    "save",
    "stacked_shares",
    "strip_chart",
    "yields_over_time",
]
