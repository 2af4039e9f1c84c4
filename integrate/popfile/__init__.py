"""The population file: TOML read into a `Population`, strictly, and written again."""

from .reading import (
    default_population,
    population_from_dict,
    read_ages,
    read_population,
    template,
    told,
)
from .text import population_to_toml

__all__ = [
    "default_population",
    "population_from_dict",
    "population_to_toml",
    "read_ages",
    "read_population",
    "template",
    "told",
]
