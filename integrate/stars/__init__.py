"""Ejecta of star particles by look-up in a table over metallicity and age, with a certified error."""

from .build import star_table
from .table import StarTable

__all__ = ["StarTable", "star_table"]
