"""Yields over metallicity and age in files that other codes read."""

from .grid import Handoff, handoff
from .hdf5 import write_handoff
from .tables import write_table

__all__ = ["Handoff", "handoff", "write_handoff", "write_table"]
