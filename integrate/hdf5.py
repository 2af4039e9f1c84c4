"""A result in HDF5: written for other codes to read, read back, and weighed again to compare digits."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError

from .provenance import FORMAT, attributes, replace_file
from .results import PopulationYields

if TYPE_CHECKING:
    import h5py

    from .spread import YieldErrors

Array = NDArray[Any]

FORMAT_VERSION = 1

#: digits agree where they differ by less than this of the value, or `NOISE` of the dataset's largest
SAME = 1e-12
NOISE = 1e-15

_ATTRIBUTES = {"population": str, "sets": tuple, "set_checksums": tuple, "policies": tuple, "notes": tuple}

#: bytes; more in one dataset isn't a population's
LARGEST = 2**31


@dataclass(frozen=True)
class Entry:
    """A dataset of the file: its dimensions, its unit, and what it holds."""

    dims: tuple[str, ...]
    units: str
    description: str


_BY_SPECIES = ("metallicity", "time", "source", "species")
_BY_SOURCE = _BY_SPECIES[:3]
_BY_TIME = _BY_SPECIES[:2]

#: the dimension scales of a file, in the order they are written
SCALES: Mapping[str, Entry] = {
    "metallicity": Entry(("metallicity",), "1", "mass fraction of metals at birth"),
    "time": Entry(("time",), "yr", "age of the population"),
    "source": Entry(("source",), "1", "who ejects"),
    "species": Entry(("species",), "1", "elements such as C, nuclides such as C12"),
    "remnant_kind": Entry(("remnant_kind",), "1", "kind of remnant"),
    "event": Entry(("event",), "1", "kind of event"),
}

#: the datasets of a file
DATASETS: Mapping[str, Entry] = {
    "total": Entry(_BY_SPECIES, "Msun/Msun", "total yield up to an age, per Msun formed"),
    "net": Entry(_BY_SPECIES, "Msun/Msun", "net yield up to an age, per Msun formed; may be negative"),
    "total_rate": Entry(_BY_SPECIES, "Msun/Msun/yr", "total yield per time at an age, per Msun formed"),
    "net_rate": Entry(_BY_SPECIES, "Msun/Msun/yr", "net yield per time at an age, per Msun formed"),
    "followed": Entry(
        ("source", "species"), "1", "1 where the source follows the species; 0: missing, not zero"
    ),
    "rest_total": Entry(_BY_SOURCE, "Msun/Msun", "ejected mass of no species that the sets follow"),
    "rest_net": Entry(_BY_SOURCE, "Msun/Msun", "net yield of no species that the sets follow"),
    "ejected": Entry(_BY_SOURCE, "Msun/Msun", "all mass ejected up to an age, rest included"),
    "ejected_rate": Entry(_BY_SOURCE, "Msun/Msun/yr", "all mass ejected per time at an age"),
    "living": Entry(_BY_TIME, "Msun/Msun", "mass in living stars; living + remnants + returned = 1"),
    "returned": Entry(_BY_TIME, "Msun/Msun", "mass returned up to an age: ejected over sources"),
    "remnants": Entry((*_BY_TIME, "remnant_kind"), "Msun/Msun", "mass in remnants"),
    "events": Entry((*_BY_TIME, "event"), "1/Msun", "number of events up to an age, per Msun formed"),
    "event_rates": Entry((*_BY_TIME, "event"), "1/Msun/yr", "number of events per time at an age"),
}

#: further datasets of a file with errors, whose attribute ``spread`` states them
ERRORS: Mapping[str, Entry] = {
    "covariance": Entry(
        ("time", "species", "species"),
        "(Msun/Msun)^2",
        "covariance of yields over all sources, from the errors stated in attribute spread; the same for"
        " total and net",
    ),
    "error": Entry(
        ("time", "source", "species"), "Msun/Msun", "standard deviation of a source's yield; total and net"
    ),
    "mean_shift": Entry(
        ("time", "species"), "Msun/Msun", "mean of the yields over all sources less the yields themselves"
    ),
}


@dataclass(frozen=True, eq=False)
class StoredYields:
    """A result as its HDF5 file holds it.

    Attributes
    ----------
    population : str
        The population file it was made from, TOML.
    metallicity : ndarray, shape (z,)
    ages : ndarray, shape (t,)
        yr.
    species, sources, remnant_kinds, events : tuple of str
    arrays : dict of ndarray
        By name; dimensions and units as in `DATASETS`, and in `ERRORS` where the file has errors.
    attributes : dict
        Attributes of the file: text, numbers, tuples of text.
    """

    population: str
    metallicity: Array
    ages: Array
    species: tuple[str, ...]
    sources: tuple[str, ...]
    remnant_kinds: tuple[str, ...]
    events: tuple[str, ...]
    arrays: dict[str, Array]
    attributes: dict[str, Any]


def write_hdf5(result: PopulationYields, path: str | Path, errors: YieldErrors | None = None) -> None:
    """Write a result to an HDF5 file.

    The same result gives the same bytes. Text is of fixed length, padded with nulls, ASCII
    where it can be: C reads it into an array of char, Fortran into ``character(len=n)``,
    neither needs to free memory that the library allotted.

    Parameters
    ----------
    result : PopulationYields
    path : str or Path
        A file there is replaced, whole or not at all.
    errors : YieldErrors, optional
        Errors of the result, kept with it as `ERRORS`.

    Raises
    ------
    InputError
        The file can't be written.

    Examples
    --------
    >>> import tempfile
    >>> from steelyard.integrate import Population, StellarSource
    >>> result = Population(0.02, [StellarSource("agb", ["karakas-2010"])]).weigh(["1 Gyr"])
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     write_hdf5(result, f"{folder}/agb.h5")
    ...     stored = read_hdf5(f"{folder}/agb.h5")
    >>> bool(np.all(stored.arrays["net"][0, 0, 0] == result.net[0, 0]))
    True
    """
    import h5py

    # format 1.8 (2008) and later: older ones can't hold attributes over 64 kB, such as a long population
    with h5py.File("memory", "w", driver="core", backing_store=False, libver=("v108", "v108")) as file:
        for name, value in attributes(result).items():
            _attach(file, name, value)
        _attach(file, "format_version", FORMAT_VERSION)
        scales, arrays = _scales(result), _arrays(result)
        if errors is not None:
            _attach(file, "spread", errors.spread.to_toml())
            arrays |= _error_arrays(errors)
        for name, entry in {**SCALES, **DATASETS, **(ERRORS if errors else {})}.items():
            values = scales[name] if name in SCALES else arrays[name]
            if name in SCALES and isinstance(values, tuple):
                data, kind = _fixed(values)
                dataset = file.create_dataset(name, data=data, dtype=kind, track_times=False)
            else:
                dataset = file.create_dataset(name, data=values, track_times=False)
            _attach(dataset, "units", entry.units)
            _attach(dataset, "description", entry.description)
            if name in SCALES:
                dataset.make_scale(name)
            else:
                for axis, dim in enumerate(entry.dims):
                    dataset.dims[axis].attach_scale(file[dim])
                    dataset.dims[axis].label = dim
        file.flush()
        image = file.id.get_file_image()
    replace_file(path, image)


def read_hdf5(path: str | Path) -> StoredYields:
    """Read a file that `write_hdf5` wrote.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    StoredYields

    Raises
    ------
    InputError
        There is no such file, or it is none of these.
    """
    import h5py

    where = str(path)
    mend = "give a file written by `steelyard weigh`"
    if not Path(path).is_file():
        what = "this is not a file" if Path(path).exists() else "there is no such file"
        raise InputError(what, where=where, mend=mend)
    try:
        if not h5py.is_hdf5(path):
            raise InputError("this is not an HDF5 file", where=where, mend=mend)
        with h5py.File(path, "r") as file:
            if _plain(file.attrs.get("format")) != FORMAT:
                raise InputError("this HDF5 file holds no population yields", where=where, mend=mend)
            version = _plain(file.attrs.get("format_version"))
            if version != FORMAT_VERSION:
                raise InputError(
                    f"format_version is {version!r}, not {FORMAT_VERSION}",
                    where=where,
                    mend="read it with the version of steelyard that wrote it, or weigh again",
                )
            held = {name: _plain(value) for name, value in file.attrs.items()}
            for name, kind in _ATTRIBUTES.items():
                if not isinstance(held.get(name), kind):
                    raise InputError(f"attribute {name!r} is missing", where=where, mend=mend)
            scales = {name: _dataset(file, name, entry, {}, where) for name, entry in SCALES.items()}
            lengths = {name: len(values) for name, values in scales.items()}
            if not isinstance(held.get("spread", ""), str):
                raise InputError("attribute 'spread' holds no text", where=where, mend=mend)
            wanted = {**DATASETS, **(ERRORS if "spread" in held else {})}
            arrays = {name: _dataset(file, name, entry, lengths, where) for name, entry in wanted.items()}
    except InputError:
        raise
    except (OSError, KeyError, ValueError, TypeError, RuntimeError, MemoryError) as error:
        raise InputError(f"the file can't be read: {str(error)[:200]}", where=where, mend=mend) from None
    return StoredYields(
        held["population"],
        scales["metallicity"],
        scales["time"],
        *(scales[name] for name in ("species", "source", "remnant_kind", "event")),
        arrays=arrays,
        attributes=held,
    )


def agrees(path: str | Path) -> tuple[bool, str]:
    """Weigh again the population that a file carries, and compare the digits.

    Parameters
    ----------
    path : str or Path
        A file that `write_hdf5` wrote.

    Returns
    -------
    same : bool
        Whether every figure agrees to 1e-12, which leaves room for another machine's rounding.
    message : str
        One line: how well they agree, or where they don't and what may be the reason.

    Raises
    ------
    InputError
        The file can't be read.
    """
    from .popfile import population_from_dict

    stored = read_hdf5(path)
    try:
        population = population_from_dict(tomllib.loads(stored.population), "its population")
        again = population.weigh(stored.ages)
        fresh_arrays = _arrays(again)
        if "spread" in stored.attributes:
            from .spread.file import spread_from_dict

            spread = spread_from_dict(tomllib.loads(stored.attributes["spread"]), "its spread")
            fresh_arrays |= _error_arrays(spread.propagate(again))
    except (ValueError, RecursionError) as error:
        return False, f"{path}: can't be weighed again: {' '.join(str(error).split())}"
    why = _changes(stored, again)
    because = f" ({'; '.join(why)})" if why else ""
    scales = _scales(again)
    named = (stored.species, stored.sources, stored.remnant_kinds, stored.events)
    for name, values in zip(("species", "source", "remnant_kind", "event"), named, strict=True):
        if scales[name] != values:
            return False, f"{path}: weighed again, it has another list of {name}{because}"
    worst, place, exact = 0.0, "", True
    for name, fresh in fresh_arrays.items():
        held = stored.arrays[name]
        exact = exact and np.array_equal(fresh, held)
        floor = NOISE * np.max(np.abs(fresh), initial=0.0)
        size = np.maximum(np.abs(fresh), np.abs(held))
        with np.errstate(invalid="ignore", divide="ignore"):
            apart = np.abs(fresh.astype(float) - held)
            # a NaN in the file agrees with nothing
            off = np.where(apart <= floor, 0.0, np.nan_to_num(apart / size, nan=np.inf))
        if off.size and off.max() > worst:
            at = np.unravel_index(int(off.argmax()), off.shape)
            worst, place = float(off.max()), _place(name, at, scales)
    if worst > SAME:
        return False, f"{path}: the digits differ, most in {place}: {worst:.1e} of it{because}"
    how = "to the last bit" if exact else f"to {SAME:g}"
    return True, f"{path}: weighed again, the digits agree {how}{because}"


def _scales(result: PopulationYields) -> dict[str, Any]:
    return {
        "metallicity": np.array([result.population.metallicity]),
        "time": np.asarray(result.ages, dtype=float),
        "source": tuple(result.sources),
        "species": tuple(result.species),
        "remnant_kind": tuple(result.remnants_by_kind),
        "event": tuple(result.events),
    }


def _arrays(result: PopulationYields) -> dict[str, Array]:
    """Every dataset of the file; one metallicity long."""
    t, columns = len(result.ages), result.columns

    def kinds(parts: Mapping[str, Array]) -> Array:
        return np.stack([*parts.values()], axis=-1) if parts else np.zeros((t, 0))

    by_source = {
        "total": result.total,
        "net": result.net,
        "total_rate": result.total_rate,
        "net_rate": result.net_rate,
        "rest_total": result.cumulative[..., columns.account("rest_total")],
        "rest_net": result.cumulative[..., columns.account("rest_net")],
        "ejected": result.ejected,
        "ejected_rate": result.rates[..., columns.account("ejected")],
    }
    by_time = {
        "living": result.living,
        "returned": result.returned,
        "remnants": kinds(result.remnants_by_kind),
        "events": kinds(result.events),
        "event_rates": kinds(result.event_rates),
    }
    found = {name: np.moveaxis(values, 0, 1)[None] for name, values in by_source.items()}
    found |= {name: values[None] for name, values in by_time.items()}
    return found | {"followed": result.followed.astype(np.uint8)}


def _error_arrays(errors: YieldErrors) -> dict[str, Array]:
    by_source = np.moveaxis(errors.by_source, 0, 1)
    return {"covariance": errors.covariance, "error": by_source, "mean_shift": errors.shift}


def _changes(stored: StoredYields, again: PopulationYields) -> list[str]:
    """What is not as it was when a file was written."""
    now, then = attributes(again), stored.attributes
    told = []
    if then.get("steelyard_version") != now["steelyard_version"]:
        told.append(
            f"written by steelyard {then.get('steelyard_version')}, this is {now['steelyard_version']}"
        )
    before = dict(zip(then.get("sets", ()), then.get("set_checksums", ()), strict=False))
    for id, checksum in zip(now["sets"], now["set_checksums"], strict=True):
        if before.get(id) != checksum:
            told.append(f"the figures of {id} aren't those it was written with")
    return told


def _place(name: str, at: Sequence[Any], scales: Mapping[str, Any]) -> str:
    parts = [
        f"{scales[dim][i]:g} yr" if dim == "time" else str(scales[dim][i])
        for dim, i in zip({**DATASETS, **ERRORS}[name].dims, at, strict=True)
        if dim != "metallicity"
    ]
    return f"{name} ({', '.join(parts)})"


def _fixed(values: Sequence[str]) -> tuple[Array, Any]:
    """Text as an array of fixed length and its HDF5 type."""
    import h5py

    encoded = [value.encode() for value in values]
    length = max([1, *map(len, encoded)])
    encoding = "ascii" if all(value.isascii() for value in values) else "utf-8"
    kind = h5py.string_dtype(encoding, length)
    return np.array(encoded, dtype=kind), kind


def _attach(item: h5py.File | h5py.Dataset, name: str, value: Any) -> None:
    if isinstance(value, int):
        item.attrs[name] = value
        return
    data, kind = _fixed((value,) if isinstance(value, str) else value)
    item.attrs.create(name, data[0] if isinstance(value, str) else data, dtype=kind)


def _plain(value: Any) -> Any:
    """An attribute or a list of names as text, tuple of text, or number."""
    if isinstance(value, bytes):
        return value.decode("utf-8")
    if isinstance(value, np.ndarray) and value.dtype.kind in "SO":
        return tuple(_plain(one) for one in value.tolist())
    if isinstance(value, np.ndarray):
        return value.tolist()
    return value.item() if isinstance(value, np.generic) else value


def _dataset(file: h5py.File, name: str, entry: Entry, lengths: Mapping[str, int], where: str) -> Any:
    import h5py

    held = file.get(name)
    mend = "give a file as `steelyard weigh` wrote it"
    if not isinstance(held, h5py.Dataset):
        raise InputError(f"dataset {name!r} is missing", where=where, mend=mend)
    shape = tuple(lengths[dim] for dim in entry.dims) if lengths else held.shape
    if held.shape != shape or len(held.shape or ()) != len(entry.dims):
        raise InputError(f"dataset {name!r} has shape {held.shape}, not {shape}", where=where, mend=mend)
    if held.size * held.dtype.itemsize > LARGEST:
        raise InputError(f"dataset {name!r} is too large: {held.shape}", where=where, mend=mend)
    text = name in SCALES and name not in ("metallicity", "time")
    values = _plain(held[()]) if text and held.dtype.kind in "SO" else held[()]
    if not (text and all(isinstance(one, str) for one in values)) and (text or held.dtype.kind not in "fiu"):
        wanted = "names" if text else "numbers"
        raise InputError(f"dataset {name!r} holds no {wanted}: {held.dtype}", where=where, mend=mend)
    return values
