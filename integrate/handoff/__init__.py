"""Yields over metallicity and age in files that other codes read."""

from .grid import Handoff, handoff
from .writing import write_handoff

__all__ = ["Handoff", "handoff", "write_handoff"]
