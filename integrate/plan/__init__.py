"""Populations prepared for many calls: plans, batches, derivatives."""

from .parameters import Parameter, candidates
from .plan import Plan, theta_from

__all__ = ["Parameter", "Plan", "candidates", "theta_from"]
