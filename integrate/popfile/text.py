"""A population as the text of its file, whole: what every output carries to say how it was made."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
import tomli_w

from steelyard.yields.grid import YieldSet
from steelyard.yields.library import catalogue, load

from ..imf import CallableIMF
from ..laws import law_of, named
from ..lifetimes import LAWS
from ..sources import DelayedSource, Mixed, Source, StellarSource, set_id

if TYPE_CHECKING:
    from ..population import Population

#: stands for a choice that is left to the yield sets
SETS = "sets"

#: form of a function, which a file names but can't hold
FUNCTION = "function"


def population_to_toml(population: Population) -> str:
    """Write a population as a population file with every key.

    Parameters
    ----------
    population : Population

    Returns
    -------
    str
        TOML; read back, it weighs to the same digits. What a file can't hold (a function,
        a yield set that isn't shipped) is named in a comment on top, and reading the file
        is then refused.

    Examples
    --------
    >>> from steelyard.integrate.popfile.reading import default_population, population_from_dict
    >>> import tomllib
    >>> population = default_population()
    >>> again = population_from_dict(tomllib.loads(population_to_toml(population)))
    >>> again.ages == population.ages
    True
    """
    tables: dict[str, Any] = {
        "metallicity": population.metallicity,
        "solar": population.solar,
        "species": population.species
        if isinstance(population.species, str)
        else [str(s) for s in population.species],
        "ages": list(population.ages),
        "interpolation": population.interpolation,
        "imf": _imf(population),
        "lifetimes": {"table": _lifetimes(population)},
        "source": [_source(s, population.solar) for s in population.sources],
        "join": [j.to_dict() for j in population.joins],
        "edges": population.edges.to_dict(),
    }
    if not tables["join"]:
        del tables["join"]
    comments = "".join(
        f"# not held by this file: {' '.join(what.split())}\n" for what in _left_out(population)
    )
    return comments + "".join(_lines(tables))


def _lines(tables: Mapping[str, Any]) -> Iterator[str]:
    """Top-level values first, then tables, arrays of tables each under its own heading."""
    yield tomli_w.dumps(
        {k: v for k, v in tables.items() if k not in ("imf", "lifetimes", "source", "join", "edges")}
    )
    for name, value in tables.items():
        if isinstance(value, Mapping):
            yield f"\n[{name}]\n{_flat(value)}"
        elif name in ("source", "join"):
            for one in value:
                yield f"\n[[{name}]]\n{_flat(one)}"


def _flat(table: Mapping[str, Any]) -> str:
    return "".join(f"{key} = {_value(one)}\n" for key, one in table.items())


def _value(value: Any) -> str:
    """A value on one line: tomli_w's own writing of scalars, lists and inline tables around it."""
    if isinstance(value, Mapping):
        inner = ", ".join(f"{_value_key(k)} = {_value(v)}" for k, v in value.items())
        return f"{{ {inner} }}"
    if isinstance(value, (list, tuple)):
        return f"[{', '.join(_value(v) for v in value)}]"
    return tomli_w.dumps({"_": value}).removeprefix("_ = ").rstrip("\n")


def _value_key(key: str) -> str:
    return tomli_w.dumps({key: 0}).rstrip("\n").removesuffix(" = 0")


def _imf(population: Population) -> dict[str, Any]:
    law = law_of(population.imf)
    table = law.to_dict() if hasattr(law, "to_dict") else population.imf.to_dict()
    return table | {"form": FUNCTION} if isinstance(population.imf, CallableIMF) else table


def _lifetimes(population: Population) -> str:
    given = population.lifetimes
    if isinstance(given, str):
        return given
    return next((name for name, law in LAWS.items() if isinstance(given, law)), FUNCTION)


def _entry(entry: Mixed, solar: str) -> Any:
    names = [
        f"{one.id} (own)" if isinstance(one, YieldSet) and not _shipped(one, solar) else set_id(one)
        for one in entry.sets
    ]
    return entry.to_entry(names)


def _source(source: Source, solar: str) -> dict[str, Any]:
    table = source.to_dict()
    table["sets"] = [_entry(entry, solar) for entry in source.sets]
    if isinstance(source, DelayedSource):
        table["delay"] = {
            key: getattr(value, "__qualname__", repr(value)) if callable(value) else value
            for key, value in table["delay"].items()
        }
        return table
    rest = {key: value for key, value in table.items() if key not in ("kind", "sets")}
    always = {"limits": SETS, "winds": source.winds}
    return {"kind": source.kind, "sets": table["sets"], **always, **rest}


def _left_out(population: Population) -> Iterator[str]:
    if isinstance(population.imf, CallableIMF):
        yield f"the mass function, {population.imf.to_dict()['function']}"
    elif own := _own_law(population.imf):
        yield f"how the mass function depends on metallicity, {own}; here as at {population.metallicity:g}"
    if _lifetimes(population) == FUNCTION:
        yield f"the lifetimes, {getattr(population.lifetimes, '__qualname__', repr(population.lifetimes))}"
    for source in population.sources:
        if not isinstance(source, StellarSource) and source.delay.form == FUNCTION:
            yield f"the delay of source {source.kind}"
        for name in ("number", "delay"):
            if own := _own_law(getattr(source, name, None)):
                what = f"how the {name} of source {source.kind} depends on metallicity"
                yield f"{what}, {own}; here as at {population.metallicity:g}"
        for entry in source.sets:
            for one in entry.sets:
                if isinstance(one, YieldSet) and not _shipped(one, population.solar):
                    yield f"the yield set {one.id}, which isn't the shipped one"


def _own_law(value: Any) -> str:
    """Name of the law that gave a value, where a file can't hold it."""
    law = law_of(value)
    return named(law) if law and not hasattr(law, "to_dict") else ""


def _shipped(one: YieldSet, solar: str) -> bool:
    """Whether loading the set's id gives these very figures."""
    if one.id not in catalogue():
        return False
    held = load(one.id, solar)
    return held is one or (
        (held.species, held.metallicities) == (one.species, one.metallicities)
        and all(
            np.array_equal(getattr(a, name), getattr(b, name))
            for a, b in zip(held.slices, one.slices, strict=True)
            for name in ("mass", "ejected", "wind", "total", "net", "initial")
        )
    )
