"""A population's report: one HTML page that needs nothing beside it."""

from .gathering import Report, report
from .page import to_html, write_html

__all__ = ["Report", "report", "to_html", "write_html"]
