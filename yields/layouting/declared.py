"""What a layout declares, as objects."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from ..readers import Options
from .template import Template

#: how a value column is turned into Msun, besides the two conventions of the grid
CONVENTIONS = ("net", "total", "mass_fraction", "production_factor", "initial")

FIGURES = ("mass", "metallicity", "remnant", "ejected", "final_mass", "wind", "lifetime", "birth_hydrogen")

SCALES = ("Z", "Z/Zsun", "[Fe/H]")


@dataclass(frozen=True)
class ModelField:
    """Where one figure (or the variant) of every model stands.

    Attributes
    ----------
    name : str
        Which figure: mass, metallicity, remnant, …
    at : str
        A column, or a gap of a template.
    row : str
        Name of the row, as in the column of species, that holds it.
    column : str
        Column in which that row holds it; the value column where empty.
    constant : str
        The same for all models.
    unit : str
        Unit of mass or time; that of the file, or Msun and yr, where empty.
    log10 : bool
    scale : str
        Of a metallicity: one of `SCALES`.
    solar : float or None
        Metallicity of the Sun on that scale; None takes it from the mixture.
    values : mapping
        Texts to be put in place of others.
    """

    name: str
    at: str = ""
    row: str = ""
    column: str = ""
    constant: str = ""
    unit: str = ""
    log10: bool = False
    scale: str = "Z"
    solar: float | None = None
    values: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Value:
    """Where the yields of one convention stand.

    Attributes
    ----------
    convention : str
        One of `CONVENTIONS`.
    columns : tuple of Template
        Columns, or patterns of columns; of several the sum is taken.
    unit : str
        Unit of mass; that of the file, or Msun, where empty.
    log10 : bool
    per_initial_mass : bool
        Whether the figures are fractions of the initial mass.
    """

    convention: str
    columns: tuple[Template, ...]
    unit: str = ""
    log10: bool = False
    per_initial_mass: bool = False


@dataclass(frozen=True)
class Drop:
    """Models left out, and why."""

    where: Mapping[str, str]
    why: str


@dataclass(frozen=True)
class Layout:
    """Where in a paper's table everything stands; ``layouts/README.md`` explains the keys."""

    name: str
    id: str
    kind: str
    model: Mapping[str, ModelField]
    species: str
    yields: tuple[Value, ...]
    covers: str
    ejected: str
    blank: str = "refuse"
    format: str = ""
    options: Options = field(default_factory=Options)
    heading: Template | None = None
    file: Template | None = None
    rename: Mapping[str, str] = field(default_factory=dict)
    rest: tuple[str, ...] = ()
    rest_why: str = ""
    ignore_columns: tuple[str, ...] = ()
    ignore_species: tuple[str, ...] = ()
    ignore_why: str = ""
    drop: tuple[Drop, ...] = ()
    birth: Mapping[str, Any] = field(default_factory=dict)
    default_variant: str = ""
    variant_ids: Mapping[str, str] = field(default_factory=dict)
    about: Mapping[str, Any] = field(default_factory=dict)
    text: str = ""
