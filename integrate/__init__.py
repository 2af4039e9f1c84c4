"""What a stellar population makes of published yields."""

from .delays import delay
from .imf import from_function, imf
from .lifetimes import lifetimes
from .plan import Plan
from .population import Population
from .results import PopulationYields
from .sources import DelayedSource, Edges, Join, StellarSource

__all__ = [
    "DelayedSource",
    "Edges",
    "Join",
    "Plan",
    "Population",
    "PopulationYields",
    "StellarSource",
    "delay",
    "from_function",
    "imf",
    "lifetimes",
]
