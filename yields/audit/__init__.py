"""The audit of a yield set: what in its figures contradicts itself, its siblings or its units.

A check is a function from a set (`checks on the grid`) or from the figures as printed (`checks on
print`) to findings; each file holds those of one idea, and `run` holds their list.
"""

from .finding import SEVERITIES, Finding, at_least
from .run import audit, audit_printed

__all__ = ["SEVERITIES", "Finding", "at_least", "audit", "audit_printed"]
