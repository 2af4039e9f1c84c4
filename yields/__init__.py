"""Published stellar yields in one internal grid: sets, species, compositions, interpolation."""

from .composition import Mixture, birth_composition, mixture
from .errors import InputError
from .grid import Slice, YieldSet
from .library import load, shipped
from .nuclides import Species, parse

__all__ = [
    "InputError",
    "Mixture",
    "Slice",
    "Species",
    "YieldSet",
    "birth_composition",
    "load",
    "mixture",
    "parse",
    "shipped",
]
