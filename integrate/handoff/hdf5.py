"""The grid in HDF5: the layout of a single result, with more than one metallicity."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..hdf5 import DATASETS, FORMAT_VERSION, SCALES, _arrays, _attach, _fixed, _scales
from ..provenance import attributes, replace_file
from .grid import Handoff

#: what a file is called in its own attributes
FORMAT = "steelyard yields over metallicity and age"


def told(made: Handoff) -> dict[str, Any]:
    """Return where a grid comes from, by name: as `attributes` of a result, and the interpolation."""
    found = attributes(made.results[-1])
    notes = dict.fromkeys(
        f"Z = {r.population.metallicity:g}: {note}" for r in made.results for note in r.notes
    )
    return found | {
        "format": FORMAT,
        "notes": tuple(notes),
        "interpolation": made.interpolation,
        "policies_at": f"policies are those at Z = {made.metallicities[-1]:g}",
    }


def arrays(made: Handoff) -> dict[str, NDArray[Any]]:
    """Return every dataset by name, dimensions as in `steelyard.integrate.hdf5.DATASETS`."""
    parts = [_arrays(r) for r in made.results]
    return {
        name: np.concatenate([p[name] for p in parts])
        if entry.dims[0] == "metallicity"
        else np.min([p[name] for p in parts], axis=0)
        for name, entry in DATASETS.items()
    }


def write_handoff(made: Handoff, path: str | Path) -> None:
    """Write a grid to an HDF5 file, whole or not at all.

    Parameters
    ----------
    made : Handoff
    path : str or Path

    Raises
    ------
    InputError
        The file can't be written.
    """
    import h5py

    with h5py.File("memory", "w", driver="core", backing_store=False, libver=("v108", "v108")) as file:
        for name, value in told(made).items():
            _attach(file, name, value)
        _attach(file, "format_version", FORMAT_VERSION)
        file.attrs["error_asked"], file.attrs["error_checked"] = made.error, made.checked
        scales: dict[str, Any] = _scales(made.results[0]) | {"metallicity": made.metallicities}
        for name, values in (scales | arrays(made)).items():
            entry = SCALES.get(name) or DATASETS[name]
            data, kind = _fixed(values) if isinstance(values, tuple) else (values, None)
            item = file.create_dataset(name, data=data, dtype=kind, track_times=False)
            _attach(item, "units", entry.units)
            _attach(item, "description", entry.description)
            if name in SCALES:
                item.make_scale(name)
                continue
            for axis, dim in enumerate(entry.dims):
                item.dims[axis].attach_scale(file[dim])
                item.dims[axis].label = dim
        file.flush()
        image = file.id.get_file_image()
    replace_file(path, image)
