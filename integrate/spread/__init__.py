"""Stated errors of published yields, carried through to the yields of a population."""

from .propagation import Spread, YieldErrors, assumed

__all__ = ["Spread", "YieldErrors", "assumed"]
