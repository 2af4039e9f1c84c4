"""Figures of yield sets, and the style of all figures."""

from .style import save

__all__ = ["save"]
