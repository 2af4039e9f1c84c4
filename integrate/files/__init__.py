"""Population yields on disk, a file a format: for other codes, for people, and for weighing again.

Every file carries the population that made it, and is replaced whole or not at all.
"""

from ..provenance import policies, provenance, summary
from .again import agrees
from .csv import write_csv
from .formats import FORMATS, format_of, read_stored, write_as
from .hdf5 import read_hdf5, write_hdf5
from .layout import StoredYields, stored

__all__ = [
    "FORMATS",
    "StoredYields",
    "agrees",
    "format_of",
    "policies",
    "provenance",
    "read_hdf5",
    "read_stored",
    "stored",
    "summary",
    "write_as",
    "write_csv",
    "write_hdf5",
]
