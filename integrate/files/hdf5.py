"""Population yields in HDF5, for any code that can read HDF5."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from steelyard.yields.errors import InputError

from ..results import PopulationYields
from .labelled import Entry, attach, in_memory, plain, put
from .layout import DATASETS, ERRORS, SCALES, StoredYields, check_origin, gathered, stored

if TYPE_CHECKING:
    import h5py

    from ..spread import YieldErrors

#: bytes; more in one dataset isn't a population's
LARGEST = 2**31


def write_hdf5(
    results: PopulationYields | Sequence[PopulationYields],
    path: str | Path,
    errors: YieldErrors | None = None,
) -> None:
    """Write a result to an HDF5 file, or several of one population at different metallicities.

    The same result gives the same bytes. Text is of fixed length, padded with nulls, ASCII
    where it can be: C reads it into an array of char, Fortran into ``character(len=n)``,
    neither needs to free memory that the library allotted.

    Parameters
    ----------
    results : PopulationYields, or sequence of PopulationYields
        Several are at increasing metallicities and the same ages.
    path : str or Path
        A file there is replaced, whole or not at all.
    errors : YieldErrors, optional
        Errors of the one result, kept with it.

    Raises
    ------
    InputError
        The file can't be written, or the results don't belong together.

    Examples
    --------
    >>> import tempfile
    >>> from steelyard.integrate import Population, StellarSource
    >>> result = Population(0.02, [StellarSource("agb", ["karakas-2010"])]).weigh(["1 Gyr"])
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     write_hdf5(result, f"{folder}/agb.h5")
    ...     held = read_hdf5(f"{folder}/agb.h5")
    >>> bool((held.arrays["net"][0, 0, 0] == result.net[0, 0]).all())
    True
    """
    write_stored(stored(results, errors), path)


def write_stored(held: StoredYields, path: str | Path) -> None:
    """Write what a file holds, see `write_hdf5`."""
    with in_memory(path) as file:
        for name, value in held.attributes.items():
            attach(file, name, value)
        for name, values in (held.scales | held.arrays).items():
            put(file, name, values, SCALES.get(name) or held.entries[name])


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
            told = {name: plain(value) for name, value in file.attrs.items()}
            check_origin(told, where)
            scales = {name: _dataset(file, name, entry, {}, where) for name, entry in SCALES.items()}
            lengths = {name: len(values) for name, values in scales.items()}
            wanted = {**DATASETS, **(ERRORS if "spread" in told else {})}
            arrays = {name: _dataset(file, name, entry, lengths, where) for name, entry in wanted.items()}
    except InputError:
        raise
    except (OSError, KeyError, ValueError, TypeError, RuntimeError, MemoryError) as error:
        raise InputError(f"the file can't be read: {str(error)[:200]}", where=where, mend=mend) from None
    return gathered(told, scales, arrays, where)


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
    values = plain(held[()]) if text and held.dtype.kind in "SO" else held[()]
    if not (text and all(isinstance(one, str) for one in values)) and (text or held.dtype.kind not in "fiu"):
        wanted = "names" if text else "numbers"
        raise InputError(f"dataset {name!r} holds no {wanted}: {held.dtype}", where=where, mend=mend)
    return values
