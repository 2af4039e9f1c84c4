"""Populations of finite mass, their stars drawn one by one, beside the exact law of their scatter."""

from .law import ScatterLaw, scatter_law
from .result import ScatteredYields
from .run import MODES, scatter
from .sampling import MassSampler, mass_sampler
from .store import write_scatter, write_statistics

__all__ = [
    "MODES",
    "MassSampler",
    "ScatterLaw",
    "ScatteredYields",
    "mass_sampler",
    "scatter",
    "scatter_law",
    "write_scatter",
    "write_statistics",
]
