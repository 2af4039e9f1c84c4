"""Figures for print: a file a figure, and one style for all."""

from .over_time import yields_over_time
from .pattern import production_pattern
from .style import save

__all__ = ["production_pattern", "save", "yields_over_time"]
