"""Lifetimes of stars over initial mass and metallicity, a file a published law."""

from .curves import LifetimeCurve, LogLogCurve, SplicedCurve, tabulated
from .function import FunctionLifetimes
from .law import LifetimeLaw
from .named import LAWS, lifetimes
from .padovani import PadovaniMatteucci1993
from .portinari import Portinari1998
from .raiteri import Raiteri1996

__all__ = [
    "LAWS",
    "FunctionLifetimes",
    "LifetimeCurve",
    "LifetimeLaw",
    "LogLogCurve",
    "PadovaniMatteucci1993",
    "Portinari1998",
    "Raiteri1996",
    "SplicedCurve",
    "lifetimes",
    "tabulated",
]
