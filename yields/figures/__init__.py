"""Figures of yield sets, and the style of all figures."""

from .against import set_against_set
from .coverage import coverage_map
from .style import save

__all__ = ["coverage_map", "save", "set_against_set"]
