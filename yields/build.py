"""From printed figures to the grid: masses, birth composition, net and total yields of every model."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .composition import birth_composition, mixture
from .errors import InputError
from .grid import Slice, YieldSet
from .nuclides import parse

Array = NDArray[np.float64]
Row = Mapping[str, str]

YEARS = {"yr": 1.0, "Myr": 1e6, "Gyr": 1e9}

#: columns of a yield table that name the model instead of a species
MODEL_COLUMNS = ("metallicity", "mass", "variant")

#: ways in which a paper lets the ejected mass be known
EJECTED_RULES = ("printed", "mass - remnant", "sum of total", "birth hydrogen")


@dataclass(frozen=True)
class Printed:
    """The figures of one yield set as its CSV files hold them.

    Attributes
    ----------
    models : sequence of mapping
        A row a model: metallicity, mass, and what is printed of variant, remnant,
        ejected, final_mass, lifetime, birth_hydrogen.
    yields : mapping
        Rows of ``"total"`` and/or ``"net"``, in the order of `models`.
    initial : sequence of mapping, optional
        Mass fractions at birth, a row a metallicity.
    """

    models: Sequence[Row]
    yields: Mapping[str, Sequence[Row]]
    initial: Sequence[Row] | None = None


def build(id: str, info: Mapping[str, Any], printed: Printed, solar: str, checksum: str = "") -> YieldSet:
    """Lay printed figures on the grid.

    Parameters
    ----------
    id : str
    info : mapping
        As in a set.toml: kind, how the ejected mass is known, what the totals cover,
        columns to ignore, birth composition, units.
    printed : Printed
    solar : str
        Mixture for birth compositions that the set itself doesn't give.
    checksum : str

    Returns
    -------
    YieldSet

    Raises
    ------
    InputError
        A column is missing, a figure isn't a number, models don't match.

    Notes
    -----
    net = total - X0 * ejected, whichever of the two is printed.
    """
    if not printed.models or not printed.yields:
        raise InputError("there are no models", where=id, mend="give a row for each model and its yields")
    for convention, rows in printed.yields.items():
        _same_models(id, convention, printed.models, rows)
    printed_columns = [c for c in next(iter(printed.yields.values()))[0] if c not in MODEL_COLUMNS]
    ignored = set(info.get("ignore", {}).get("columns", ()))
    order = sorted((c for c in printed_columns if c not in ignored), key=parse)
    species = tuple(parse(c).name for c in order)
    figures = {c: table(rows, printed_columns, f"{id} {c}.csv") for c, rows in printed.yields.items()}
    at = [printed_columns.index(c) for c in order]

    event = "mass" not in printed.models[0]
    if event:
        metallicity = np.full(len(printed.models), mixture(solar).Z)
    else:
        metallicity = column(printed.models, "metallicity", f"{id} models.csv")
    slices, assumed = [], set()
    for z in np.unique(metallicity):
        rows = np.flatnonzero(metallicity == z)
        rows = rows if event else rows[np.argsort(column([printed.models[i] for i in rows], "mass", id))]
        models = [printed.models[i] for i in rows]
        all_columns = {c: values[rows] for c, values in figures.items()}
        some = {c: values[:, at] for c, values in all_columns.items()}
        birth, how = _birth(id, info, printed.initial, float(z), species, solar)
        assumed.add(how)
        slices.append(_slice(id, info, float(z), models, all_columns, some, birth, species))
    derived = frozenset({"total", "net"} - set(printed.yields))
    notes = []
    if info.get("covers") == "explosion" and not event:
        notes.append(f"{id}: lists the explosion only; the wind before it is returned at birth composition")
    if derived and "printed" not in assumed and not event:
        notes.append(f"{id}: {', '.join(derived)} yields derived with birth composition {', '.join(assumed)}")
    return YieldSet(id, info["kind"], species, tuple(slices), derived, tuple(notes), info, checksum, event)


def _slice(
    id: str,
    info: Mapping[str, Any],
    z: float,
    models: Sequence[Row],
    all_columns: Mapping[str, Array],
    figures: Mapping[str, Array],
    birth: Array | None,
    species: Sequence[str],
) -> Slice:
    where = f"{id} models.csv"
    rule = info["ejected"]
    if rule not in EJECTED_RULES:
        raise InputError(f"ejected = {rule!r} isn't known", where=id, mend=f"use {', '.join(EJECTED_RULES)}")
    if rule == "sum of total":
        ejected = all_columns["total"].sum(axis=1)
    elif rule == "printed":
        ejected = column(models, "ejected", where)
    elif rule == "birth hydrogen":
        if birth is None:
            raise InputError("'birth hydrogen' needs initial compositions", where=id, mend="add initial.csv")
        ejected = column(models, "birth_hydrogen", where) / birth[species.index("H1")]
    else:
        ejected = column(models, "mass", where) - column(models, "remnant", where)
    event = "mass" not in models[0]
    mass = ejected.copy() if event else column(models, "mass", where)
    wind = np.zeros_like(mass)
    if info.get("covers") == "explosion" and not event:
        wind = mass - column(models, "final_mass", where)

    if birth is None:
        birth = (figures["total"] - figures["net"]).sum(axis=0) / ejected.sum()
    in_wind, at_birth = np.outer(wind, birth), np.outer(ejected, birth)
    total = figures["total"] + in_wind if "total" in figures else figures["net"] + at_birth
    net = figures["net"] if "net" in figures else total - at_birth
    lifetime = None
    if "lifetime" in models[0]:
        lifetime = column(models, "lifetime", where) * YEARS[info["units"]["lifetime"]]
    return Slice(z, mass, ejected, wind, total, net, birth, lifetime)


def _birth(
    id: str,
    info: Mapping[str, Any],
    initial: Sequence[Row] | None,
    z: float,
    species: Sequence[str],
    solar: str,
) -> tuple[Array | None, str]:
    """Mass fractions at birth (None: to be had from total - net) and how they are known."""
    if initial is not None:
        where = f"{id} initial.csv"
        rows = [r for r in initial if math.isclose(float(r["metallicity"]), z, rel_tol=1e-9)]
        if not rows:
            raise InputError(f"no row for metallicity {z:g}", where=where)
        names = {parse(c).name: c for c in rows[0] if c != "metallicity" and c not in _ignored(info)}
        lacking = [s for s in species if s not in names]
        if lacking:
            raise InputError(
                f"there is no column for {', '.join(lacking)}",
                where=where,
                mend="add the mass fraction at birth",
            )
        return np.array([number(rows[0][names[s]], where) for s in species]), "printed"
    if info["yields"] == "net and total":
        return None, "printed"
    declared = info.get("birth", {})
    enhancement = declared.get("enhancement") if z < declared.get("below", math.inf) else None
    name = declared.get("mixture", solar)
    return birth_composition(species, z, mixture(name), enhancement), f"scaled from {name}"


def _ignored(info: Mapping[str, Any]) -> set[str]:
    return set(info.get("ignore", {}).get("columns", ()))


def _same_models(id: str, convention: str, models: Sequence[Row], rows: Sequence[Row]) -> None:
    where = f"{id} {convention}.csv"
    if len(rows) != len(models):
        raise InputError(f"{len(rows)} rows for {len(models)} models", where=where)
    for i, (a, b) in enumerate(zip(models, rows, strict=True)):
        for key in MODEL_COLUMNS:
            if key in b and a.get(key) != b[key]:
                raise InputError(
                    f"{key} is {b[key]!r}, but {a.get(key)!r} in models.csv",
                    where=f"{where} row {i + 2}",
                    mend="keep the rows in the same order",
                )


def number(text: str, where: str) -> float:
    """Read one printed figure, refusing what isn't a finite number.

    Parameters
    ----------
    text : str
    where : str
        File and row, for the error.

    Returns
    -------
    float
    """
    try:
        value = float(text)
    except (TypeError, ValueError):
        value = math.nan
    if not math.isfinite(value):
        raise InputError(
            f"{text!r} isn't a number", where=where, mend="give a finite figure or drop the model"
        )
    return value


def column(rows: Sequence[Row], name: str, where: str) -> Array:
    """Read one column of rows as an array, shape (n,)."""
    if name not in rows[0]:
        raise InputError(f"column {name!r} is missing", where=where, mend="name it in the header line")
    return np.array([number(r[name], f"{where} row {i + 2} column {name}") for i, r in enumerate(rows)])


def table(rows: Sequence[Row], columns: Sequence[str], where: str) -> Array:
    """Read columns of rows as an array, shape (rows, columns)."""
    return np.column_stack([column(rows, c, where) for c in columns])
