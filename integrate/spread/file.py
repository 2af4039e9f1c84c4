"""The file that states errors of published yields: ``[[spread]]`` tables, read strictly."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from steelyard.yields.errors import InputError

from ..popvalues import as_list, as_number, as_table, as_tables, as_word, require, short, told
from ..provenance import provenance
from ..tidy import write_tidy
from .propagation import Spread, YieldErrors
from .stated import StatedError

_KEYS = ("set", "source", "elements", "sigma", "correlation_length", "common", "between")

_EXAMPLE = '[[spread]] with set = "kobayashi-2006", elements = ["O", "Mg"], sigma = 0.15'

#: bytes
LARGEST_FILE = 1_000_000


def read_spread(path: str | Path) -> Spread:
    """Read a file of ``[[spread]]`` tables.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    Spread

    Raises
    ------
    InputError
        The file can't be read, isn't TOML, or holds a key or value that isn't known.

    Notes
    -----
    Keys of a table: ``set`` (id) or ``source`` (kind: every set of it), ``sigma`` (dex), and where
    wanted ``elements`` ("all", "metals" or a list), ``correlation_length`` (dex of initial mass),
    ``common`` (0 to 1), ``between`` (0 to 1, or a matrix in the order of ``elements``).
    """
    where = str(path)
    try:
        with Path(path).open("rb") as file:
            data = file.read(LARGEST_FILE + 1)
    except FileNotFoundError:
        raise InputError("there is no such file", where=where, mend=f"write one: {_EXAMPLE}") from None
    except OSError as error:
        raise InputError(f"can't be read: {error.strerror}", where=where) from None
    if len(data) > LARGEST_FILE:
        raise InputError("this is too large to state errors", where=where, mend="name another file")
    try:
        tables = tomllib.loads(data.decode("utf-8"))
    except (ValueError, RecursionError) as error:
        raise InputError(f"isn't TOML: {' '.join(str(error).split())[:120]}", where=where) from None
    return spread_from_dict(tables, where)


def spread_from_dict(data: Mapping[str, Any], where: str = "spread") -> Spread:
    """Return the errors that tables state.

    Parameters
    ----------
    data : mapping
        As parsed from TOML: ``{"spread": [...]}``.
    where : str
        What stands in front of error messages.

    Returns
    -------
    Spread

    Raises
    ------
    InputError
        A key that isn't known or lacks, or a value that can't be used.

    Examples
    --------
    >>> spread_from_dict({"spread": [{"source": "agb", "sigma": 0.2, "elements": ["C"]}]}).errors[0].sigma
    0.2
    """
    with told(where):
        table = as_table(data, "the file", ("spread",))
        require(table, ("spread",), "the file")
        return Spread([_error(one) for one in as_tables(table["spread"], "spread")])


def _error(value: Any) -> StatedError:
    table = as_table(value, "[[spread]]", _KEYS)
    require(table, ("sigma",), "[[spread]]")
    given: dict[str, Any] = {k: as_word(table[k], k) for k in ("set", "source") if k in table}
    for key in ("sigma", "correlation_length", "common"):
        if key in table:
            given[key] = as_number(table[key], "", key)
    elements = table.get("elements", "all")
    if not isinstance(elements, str):
        listed = as_list(elements, "elements", 'such as ["O", "Mg"]')
        elements = [as_word(one, "elements") for one in listed]
    between = table.get("between", 0.0)
    if isinstance(between, list):
        between = [
            [as_number(x, "", "between") for x in as_list(row, "between", "give rows")] for row in between
        ]
        if len({len(row) for row in between}) > 1:
            raise InputError(f"between has rows of different length: {short(between)}", mend="make it square")
    else:
        between = as_number(between, "", "between")
    return StatedError(elements=elements, between=between, **given)


def write_errors_csv(errors: YieldErrors, path: str | Path) -> None:
    """Write yields with their errors as a tidy table, its origin in comment lines above it.

    Parameters
    ----------
    errors : YieldErrors
    path : str or Path
        A file there is replaced, whole or not at all.

    Raises
    ------
    InputError
        The file can't be written.

    Notes
    -----
    A row for each age, source ("sum" for all) and species, with columns age_yr, source, species,
    total, net, and error (a standard deviation, the same for total and net), Msun per Msun formed.
    Covariances are in the HDF5 file.
    """
    result = errors.result
    stated = ["errors:", *(f"    {line}" for line in errors.spread.to_toml().splitlines())]

    def rows() -> Iterator[list[Any]]:
        for t, age in enumerate(result.ages.tolist()):
            for source in (*result.sources, None):
                for species in result.species:
                    values = [float(result.get(species, source, c)[t]) for c in ("total", "net")]
                    yield [age, source or "sum", species, *values, float(errors.get(species, source)[t])]

    header = ["age_yr", "source", "species", "total", "net", "error"]
    write_tidy(path, [*provenance(result), *stated], header, rows())
