"""The population file: TOML read into a `Population`, strictly, and written again.

Whatever is wrong in a file is an `InputError` that names the file, the table and the key.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np

from steelyard.yields.composition import mixture
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.library import DEFAULT_SOLAR, catalogue
from steelyard.yields.nuclides import parse

from ..laws import number_law
from ..lifetimes import LAWS
from ..population import DEFAULT_AGES, Population
from ..population import read_ages as checked
from ..popvalues import as_list, as_number, as_numbers, as_table, as_tables, as_word, require, short, told
from ..sources import (
    REMNANTS,
    STELLAR_KINDS,
    DelayedSource,
    Edges,
    Join,
    Source,
    StellarSource,
)
from .forms import read_delay, read_failures, read_imf, read_mixture
from .text import FUNCTION, SETS

#: bytes; a population file is a page of text
LARGEST_FILE = 1_000_000

MOST_AGES = 10_000

_TOP = (
    "metallicity",
    "solar",
    "species",
    "ages",
    "interpolation",
    "imf",
    "lifetimes",
    "source",
    "join",
    "edges",
)
_AGB = ("kind", "sets", "limits", "winds")
_COLLAPSE = (*_AGB, "events_from", "implode", "neutron_star_limit")
#: keys of a mixture beside its sets
_WINDOW = ("from", "to", "metallicities")
_DELAYED = ("kind", "sets", "number", "delay", "consumes")


def read_population(path: str | Path) -> Population:
    """Read a population file.

    Parameters
    ----------
    path : str or Path
        A TOML file; `template` gives one with every key.

    Returns
    -------
    Population

    Raises
    ------
    InputError
        The file can't be read, isn't TOML, or holds a key or value that isn't known.

    Examples
    --------
    >>> read_population("nowhere.toml")
    Traceback (most recent call last):
    ...
    steelyard.yields.errors.InputError: nowhere.toml: there is no such file; ...
    """
    return population_from_dict(_parsed(_text(Path(path)), str(path)), where=str(path))


def default_population() -> Population:
    """Return the population that is weighed when none is given: that of `template`.

    Examples
    --------
    >>> default_population().kinds
    ('agb', 'core-collapse', 'thermonuclear')
    """
    return population_from_dict(tomllib.loads(template()), where="population.toml")


def template() -> str:
    """Return a population file with every key and what it means.

    Examples
    --------
    >>> print(template().splitlines()[0])
    # A population for `steelyard weigh`: stars born together, and the events that follow from them.
    """
    return files("steelyard.integrate.popfile").joinpath("population.toml").read_text(encoding="utf-8")


def population_from_dict(data: Mapping[str, Any], where: str = "population") -> Population:
    """Return the population that the tables of a population file describe.

    Parameters
    ----------
    data : mapping
        As parsed from TOML. Only ``metallicity`` and ``source`` must be there.
    where : str
        What stands in front of error messages.

    Returns
    -------
    Population

    Raises
    ------
    InputError
        A key that isn't known or lacks, or a value that can't be used.

    Examples
    --------
    >>> stars = {"kind": "agb", "sets": ["karakas-2010"]}
    >>> population_from_dict({"metallicity": 0.02, "source": [stars]}).kinds
    ('agb',)
    >>> population_from_dict({"metalicity": 0.02, "source": [stars]})
    Traceback (most recent call last):
    ...
    steelyard.yields.errors.InputError: population: key 'metalicity' isn't known; did you mean metallicity?
    """
    with told(where):
        table = as_table(data, "a population", _TOP)
        require(table, ("metallicity", "source"), "the population")
        return Population(
            metallicity=as_number(table["metallicity"], "", "metallicity"),
            sources=_sources(table["source"]),
            imf=read_imf(table.get("imf")),
            lifetimes=_lifetimes(table.get("lifetimes", {})),
            joins=_joins(table.get("join", [])),
            edges=_edges(table.get("edges", {})),
            solar=mixture(as_word(table.get("solar", DEFAULT_SOLAR), "solar")).id,
            species=_species(table.get("species", "elements")),
            ages=read_ages(table.get("ages", list(DEFAULT_AGES))),
            interpolation=as_word(table.get("interpolation", "linear"), "interpolation"),
        )


def _text(path: Path) -> str:
    try:
        with path.open("rb") as file:
            data = file.read(LARGEST_FILE + 1)
    except FileNotFoundError:
        raise InputError(
            "there is no such file",
            where=str(path),
            mend="`steelyard weigh --template` writes one to begin with",
        ) from None
    except IsADirectoryError:
        raise InputError("this is a folder", where=str(path), mend="name a population file in it") from None
    except OSError as error:
        raise InputError(f"can't be read: {error.strerror}", where=str(path)) from None
    if len(data) > LARGEST_FILE:
        raise InputError(
            "the file is larger than 1 MB", where=str(path), mend="a population file is a page of text"
        )
    if not data.strip():
        raise InputError(
            "the file is empty", where=str(path), mend="`steelyard weigh --template` writes one to begin with"
        )
    try:
        # editors on Windows put a byte-order mark in front
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data[: error.start].count(b"\n") + 1
        raise InputError(
            f"line {line} isn't text in UTF-8", where=str(path), mend="give a population file in TOML"
        ) from None


def _parsed(text: str, where: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        match = re.fullmatch(r"(.*) \(at (?:line (\d+), column (\d+)|end of document)\)", str(error), re.S)
        if match is None:
            raise InputError(f"this isn't TOML: {short(str(error))}", where=where) from None
        place = (
            f"line {match[2]} column {match[3]}" if match[2] else f"line {len(text.splitlines())}, the last"
        )
        raise InputError(
            f"this isn't TOML: {match[1][:1].lower()}{match[1][1:]}",
            where=f"{where}: {place}",
            mend='a line of TOML is such as metallicity = 0.014 or solar = "asplund-2009"',
        ) from None
    except RecursionError:
        raise InputError("arrays or tables are nested too deeply", where=where) from None
    except ValueError as error:  # an integer of thousands of digits
        raise InputError(f"a value can't be read: {short(str(error))}", where=where) from None


def _sources(value: Any) -> list[Source]:
    tables = as_tables(value, "source")
    if not tables:
        raise InputError("there is no source", mend='add a [[source]] with kind = "agb" or "core-collapse"')
    return [_source(i, one) for i, one in enumerate(tables, start=1)]


def _source(number: int, value: Any) -> Source:
    kind = value.get("kind") if isinstance(value, Mapping) else None
    named = isinstance(kind, str) and kind
    try:
        with told(f"source {number} ({short(kind)[1:-1]})" if named else f"source {number}"):
            if not isinstance(value, Mapping):
                raise InputError(f"a source is a table, not {short(value)}", mend="head it with [[source]]")
            require(value, ("kind",), "the source")
            return _stellar(value) if as_word(kind, "kind") in STELLAR_KINDS else _delayed(value)
    except InputError as error:
        # the core says `source agb` where the file's place, with its number, stands already
        what = error.what.removeprefix(f"source {kind}: ")
        raise InputError(what, where=error.where.removesuffix(f": source {kind}"), mend=error.mend) from None


def _stellar(value: Mapping[str, Any]) -> StellarSource:
    table = as_table(
        value, f"a source of kind {value['kind']}", _AGB if value["kind"] == "agb" else _COLLAPSE
    )
    require(table, ("sets",), "the source")
    given: dict[str, Any] = {}
    if table.get("limits", SETS) != SETS:
        given["limits"] = as_numbers(table["limits"], "Msun", "limits")
    for key in ("events_from", "neutron_star_limit"):
        if key in table:
            given[key] = as_number(table[key], "Msun", key)
    if isinstance(table.get("implode"), Mapping):
        given["implode"] = read_failures(table["implode"])
    elif "implode" in table:
        windows = as_list(table["implode"], "implode", 'such as [["20 Msun", "25 Msun"]]')
        given["implode"] = [as_numbers(w, "Msun", "implode") for w in windows]
    if "winds" in table:
        given["winds"] = as_word(table["winds"], "winds")
    return StellarSource(table["kind"], _sets(table["sets"]), **given)


def _delayed(value: Mapping[str, Any]) -> DelayedSource:
    kind = value["kind"]
    if not {"number", "delay"} & set(value):
        hint = nearest(kind, (*STELLAR_KINDS, "thermonuclear"))
        raise InputError(
            f"kind {short(kind)} isn't agb or core-collapse, so it needs number and delay", mend=hint
        )
    table = as_table(value, f"a source of kind {short(kind)}", _DELAYED)
    require(table, ("sets", "number", "delay"), "the source")
    consumes = as_word(table.get("consumes", REMNANTS[0]), "consumes")
    number = table["number"]
    number = (
        number_law(number, "number") if isinstance(number, Mapping) else as_number(number, "1/Msun", "number")
    )
    return DelayedSource(kind, _sets(table["sets"]), number, read_delay(table["delay"]), consumes)


def _sets(value: Any) -> list[Any]:
    example = 'such as ["kobayashi-2006"]'
    entries = []
    for entry in as_list(value, "sets", example):
        if isinstance(entry, Mapping):
            entries.append(read_mixture(entry))
        else:
            entries.append(as_word(entry, "an entry of sets"))
        for name in entry if isinstance(entry, Mapping) else [entry]:
            if name not in catalogue() and name not in _WINDOW:
                raise InputError(f"yield set {short(name)} isn't known", mend=nearest(name, catalogue()))
    return entries


def _lifetimes(value: Any) -> str:
    table = as_table(value, "[lifetimes]", ("table",))
    law = as_word(table.get("table", "portinari-1998"), "lifetimes.table")
    if law == FUNCTION:
        raise InputError(
            "the lifetimes were a function, which a file can't hold", mend="weigh it from Python"
        )
    if law not in (*LAWS, SETS):
        raise InputError(f"lifetimes.table {short(law)} isn't known", mend=nearest(law, (*LAWS, SETS)))
    return law


def _joins(value: Any) -> list[Join]:
    joins = []
    for number, one in enumerate(as_tables(value, "join"), start=1):
        with told(f"join {number}"):
            table = as_table(one, "a join", ("between", "policy"))
            require(table, ("between",), "the join")
            names = as_list(table["between"], "between", 'such as ["agb", "core-collapse"]')
            between = tuple(as_word(n, "an entry of between") for n in names)
            joins.append(Join(between, as_word(table.get("policy", "bridge"), "policy")))
    return joins


def _edges(value: Any) -> Edges:
    known = ("below", "above", "metallicity")
    table = as_table(value, "[edges]", known)
    return Edges(**{key: as_word(one, f"edges.{key}") for key, one in table.items()})


def _species(value: Any) -> str | list[str]:
    choices = ("elements", "nuclides")
    if isinstance(value, str):
        if value not in choices:
            raise InputError(
                f"species {short(value)} isn't a choice", mend='write "elements", "nuclides", or a list'
            )
        return value
    with told("species"):
        return [
            parse(as_word(one, "an entry")).name for one in as_list(value, "species", 'such as ["O", "Mg"]')
        ]


def read_ages(value: Any) -> tuple[float, ...]:
    """Return the ages that a population file gives: a list, or steps of the logarithm.

    Parameters
    ----------
    value : sequence or mapping
        Numbers (yr) and text; or ``from``, ``to`` and ``steps``.

    Returns
    -------
    tuple of float
        yr.

    Raises
    ------
    InputError
        No age, too many, a negative one, or one that isn't an age.

    Examples
    --------
    >>> read_ages({"from": "1 Myr", "to": "100 Myr", "steps": 3})
    (1000000.0, 10000000.0, 100000000.0)
    """
    if not isinstance(value, Mapping):
        ages = as_numbers(value, "yr", "ages")
        if len(ages) > MOST_AGES:
            raise InputError(f"ages are {len(ages)}", mend=f"give at most {MOST_AGES}")
        return checked(ages)
    keys = ("from", "to", "steps")
    table = as_table(value, "ages", keys)
    require(table, keys, "ages")
    first, last = as_number(table["from"], "yr", "ages.from"), as_number(table["to"], "yr", "ages.to")
    steps = table["steps"]
    if isinstance(steps, bool) or not isinstance(steps, int) or not 2 <= steps <= MOST_AGES:
        raise InputError(f"ages.steps isn't a whole number from 2 to {MOST_AGES}: {short(steps)}")
    if not 0 < first < last:
        raise InputError(
            f"ages can't go from {first:g} to {last:g} yr in steps of the logarithm",
            mend='such as { from = "3 Myr", to = "13.8 Gyr", steps = 100 }',
        )
    return tuple(np.geomspace(first, last, steps).tolist())
