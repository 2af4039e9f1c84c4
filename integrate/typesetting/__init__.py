"""Yields as tables of papers: LaTeX, machine-readable, CDS, CSV, with their notes and papers."""

from .bibtex import bibtex
from .latex import booktabs, deluxetable
from .machine import cds, csv, mrt
from .table import Cell, PaperTable, Row, paper_table

__all__ = [
    "Cell",
    "PaperTable",
    "Row",
    "bibtex",
    "booktabs",
    "cds",
    "csv",
    "deluxetable",
    "mrt",
    "paper_table",
]
