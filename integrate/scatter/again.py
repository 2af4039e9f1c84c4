"""A file of populations drawn star by star, drawn again from the population and the seed that it carries."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import TYPE_CHECKING, Any

from steelyard.yields.errors import InputError

from ..files.again import SAME, changes, compare
from ..files.labelled import plain
from ..provenance import attributes
from .run import scatter
from .store import DATASETS, FORMAT, FORMAT_VERSION, SCALES, arrays, scales

if TYPE_CHECKING:
    import h5py

_MEND = "give a file as `steelyard scatter` wrote it"

#: bytes of a file's datasets
LARGEST = 2**33

_ASKED = {
    "mass": float,
    "count": int,
    "seed": int,
    "mode": str,
    "convention": str,
    "population": str,
    "sets": tuple,
    "set_checksums": tuple,
}


def is_scatter(path: str | Path) -> bool:
    """Return whether a file is an HDF5 file of populations drawn star by star."""
    import h5py

    try:
        if not Path(path).is_file() or not h5py.is_hdf5(path):
            return False
        with h5py.File(path, "r") as file:
            return plain(file.attrs.get("format")) == FORMAT
    except (OSError, RuntimeError, ValueError):
        return False


def agrees(path: str | Path) -> tuple[bool, str]:
    """Draw the populations of a file again, and compare the digits.

    Parameters
    ----------
    path : str or Path
        A file that `write_scatter` wrote.

    Returns
    -------
    same : bool
    message : str
        One line, as of `steelyard.integrate.files.agrees`.

    Raises
    ------
    InputError
        The file can't be read.
    """
    from ..popfile import population_from_dict

    told, held = _read(path)
    try:
        population = population_from_dict(tomllib.loads(told["population"]), "its population")
        asked = [told[name] for name in ("mass", "count", "seed", "mode")]
        more = {"convention": told["convention"], "survivors": "born" in held}
        drawn = scatter(population, *asked, ages=held["time"].tolist(), **more)
        fresh = arrays(drawn)
    except (ValueError, RecursionError) as error:
        return False, f"{path}: can't be drawn again: {' '.join(str(error).split())}"
    why = changes(told, attributes(drawn.population.weigh(drawn.ages)))
    because = f" ({'; '.join(why)})" if why else ""
    names, numbers = {}, {}
    for name, values in scales(drawn).items():
        (names if isinstance(values, tuple) else numbers)[name] = values
    for name, values in names.items():
        if held.get(name, ()) != values:
            return False, f"{path}: drawn again, it has another list of {name}{because}"
    fresh |= numbers
    for name, values in fresh.items():
        if name not in held:
            return False, f"{path}: drawn again, it has {name}, which the file lacks{because}"
        if isinstance(held[name], tuple) or values.shape != held[name].shape:
            return False, f"{path}: drawn again, {name} has another shape{because}"
    found = compare(fresh, {name: held[name] for name in fresh})
    if found.worst > SAME:
        return False, f"{path}: the digits differ, most in {found.name}: {found.worst:.1e} of it{because}"
    how = "to the last bit" if found.exact else f"to {SAME:g}"
    return True, f"{path}: drawn again, the digits agree {how}{because}"


def _read(path: str | Path) -> tuple[dict[str, Any], dict[str, Any]]:
    """Read attributes, and datasets: arrays of numbers, tuples of names."""
    import h5py

    where = str(path)
    try:
        with h5py.File(path, "r") as file:
            told = {name: plain(value) for name, value in file.attrs.items()}
            held = _datasets(file, where)
    except (OSError, KeyError, ValueError, TypeError, RuntimeError, MemoryError) as error:
        if isinstance(error, InputError):
            raise
        raise InputError(f"the file can't be read: {str(error)[:200]}", where=where, mend=_MEND) from None
    if told.get("format") != FORMAT or told.get("format_version") != FORMAT_VERSION:
        raise InputError("this file holds no populations drawn", where=where, mend=_MEND)
    lacks = [name for name, kind in _ASKED.items() if not isinstance(told.get(name), kind)]
    lacks += [name for name in ("time", "yields", "ejected") if isinstance(held.get(name, ()), tuple)]
    if lacks:
        raise InputError(f"{lacks[0]!r} is missing, or of another kind", where=where, mend=_MEND)
    return told, held


def _datasets(file: h5py.File, where: str) -> dict[str, Any]:
    import h5py

    known = {name: file[name] for name in (*SCALES, *DATASETS) if name in file}
    found = {
        name: one for name, one in known.items() if isinstance(one, h5py.Dataset) and one.shape is not None
    }
    if sum(one.size * one.dtype.itemsize for one in found.values()) > LARGEST:
        raise InputError(f"its datasets hold more than {LARGEST >> 30} GiB", where=where, mend=_MEND)
    out = {}
    for name, one in found.items():
        values = plain(one[()]) if one.dtype.kind in "SO" and name in SCALES else one[()]
        named = isinstance(values, tuple) and all(isinstance(each, str) for each in values)
        if not named and one.dtype.kind not in "fiu":
            raise InputError(f"{name!r} holds neither numbers nor names", where=where, mend=_MEND)
        out[name] = values
    return out
