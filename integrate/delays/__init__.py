"""Delay-time distributions by name, from a mapping or from a function."""

from .named import (
    FORMS,
    PRESETS,
    BrokenPowerLawDelay,
    Delay,
    ExponentialDelay,
    FunctionDelay,
    PowerLawDelay,
    TabulatedDelay,
    delay,
)

__all__ = [
    "FORMS",
    "PRESETS",
    "BrokenPowerLawDelay",
    "Delay",
    "ExponentialDelay",
    "FunctionDelay",
    "PowerLawDelay",
    "TabulatedDelay",
    "delay",
]
