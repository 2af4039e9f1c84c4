"""Populations drawn, in files: HDF5 for other codes to draw from, CSV of their statistics."""

from __future__ import annotations

import csv
import io
import os
import secrets
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from steelyard.yields.errors import InputError

from ..hdf5 import _attach, _fixed
from ..provenance import attributes, provenance, replace_file
from .result import LEVELS, ScatteredYields

if TYPE_CHECKING:
    import h5py

#: what a file is called in its own attributes
FORMAT = "steelyard scattered populations"
FORMAT_VERSION = 1

_CELL = ("population", "time", "source")
_LAW = ("time", "species")

#: dimensions, unit and description of each dataset
DATASETS: dict[str, tuple[tuple[str, ...], str, str]] = {
    "yields": ((*_CELL, "species"), "Msun", "{convention} yield of each population up to an age"),
    "ejected": (_CELL, "Msun", "all mass ejected by each population up to an age, rest included"),
    "remnants": (("population", "time"), "Msun", "mass in remnants"),
    "living": (("population", "time"), "Msun", "mass in living stars"),
    "events": (("population", "time", "event"), "1", "number of events up to an age"),
    "born": (("population",), "Msun", "mass of the stars born; living + remnants + ejected = born"),
    "stars": (("population",), "1", "number of the stars born"),
    "followed": (
        ("source", "species"),
        "1",
        "1 where the source follows the species; 0: missing, not zero",
    ),
    "mean": (_LAW, "Msun", "exact mean of the yields summed over sources"),
    "covariance": (
        ("time", "species", "species"),
        "Msun2",
        "exact covariance of the yields summed over sources",
    ),
    "skewness": (_LAW, "1", "exact skewness of the yields summed over sources"),
    "quantiles": (("quantile", *_LAW), "Msun", "quantiles of the populations in this file"),
}


def write_scatter(drawn: ScatteredYields, path: str | Path) -> None:
    """Write populations to an HDF5 file.

    The same draw gives the same bytes. Text is of fixed length, as in the files of
    `steelyard.integrate.files.write_hdf5`; datasets of populations are compressed with
    HDF5's own gzip filter, some populations to a block, so that one can be read without the rest.

    Parameters
    ----------
    drawn : ScatteredYields
    path : str or Path
        A file there is replaced, whole or not at all.

    Raises
    ------
    InputError
        The file can't be written.

    Examples
    --------
    >>> import tempfile, h5py
    >>> from steelyard.integrate import Population, StellarSource
    >>> from steelyard.integrate.scatter import scatter
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O", "Fe"])
    >>> drawn = scatter(stars, "500 Msun", 20, ages=["30 Myr"])
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     write_scatter(drawn, f"{folder}/drawn.h5")
    ...     with h5py.File(f"{folder}/drawn.h5") as file:
    ...         file["yields"].shape
    (20, 1, 1, 2)
    """
    import h5py

    try:
        target = Path(os.path.realpath(path))
        if target.exists() and not target.is_file():
            raise InputError("can't be written: not an ordinary file", where=str(path), mend="name a file")
        beside = target.with_name(f".{target.name[:100]}.{secrets.token_hex(6)}.part")
        try:
            # too large to be put together in memory as smaller results are
            with h5py.File(beside, "w", libver=("v108", "v108")) as file:
                _fill(file, drawn)
            if target.exists():
                beside.chmod(target.stat().st_mode & 0o777)
            os.replace(beside, target)
        except BaseException:
            beside.unlink(missing_ok=True)
            raise
    except OSError as error:
        reason = os.strerror(error.errno) if error.errno else str(error)[:200]
        raise InputError(f"can't be written: {reason}", where=str(path), mend="name another place") from None


def _fill(file: h5py.File, drawn: ScatteredYields) -> None:
    exact = drawn.population.weigh(drawn.ages)
    told = attributes(exact) | {"format": FORMAT, "notes": drawn.notes}
    for name, value in told.items():
        _attach(file, name, value)
    for name, value in (
        ("format_version", FORMAT_VERSION),
        ("mode", drawn.mode),
        ("convention", drawn.convention),
        ("count", drawn.count),
        ("seed", drawn.seed),
    ):
        _attach(file, name, value)
    file.attrs["mass"] = drawn.mass
    scales: dict[str, tuple[Any, str, str]] = {
        "time": (drawn.ages, "yr", "age of the population"),
        "source": (drawn.sources, "1", "who ejects"),
        "species": (drawn.species, "1", "elements such as C, nuclides such as C12"),
        "event": (drawn.event_kinds, "1", "kind of event"),
        "quantile": (np.array(LEVELS), "1", "cumulative probability"),
    }
    for name, (values, units, description) in scales.items():
        if not len(values):
            continue
        if isinstance(values, tuple):
            data, kind = _fixed(values)
            item = file.create_dataset(name, data=data, dtype=kind, track_times=False)
        else:
            item = file.create_dataset(name, data=values, track_times=False)
        _attach(item, "units", units)
        _attach(item, "description", description)
        item.make_scale(name)
    arrays: dict[str, Any] = {
        "yields": np.moveaxis(drawn.yields, 1, 2),
        "ejected": np.moveaxis(drawn.ejected, 1, 2),
        "remnants": drawn.remnants,
        "living": drawn.living,
        "events": drawn.events,
        "born": drawn.born,
        "stars": drawn.stars,
        "followed": exact.followed.astype(np.uint8),
        "mean": drawn.law.mean,
        "covariance": drawn.law.covariance,
        "skewness": drawn.law.skewness,
        "quantiles": drawn.quantiles(),
    }
    for name, (dims, units, description) in DATASETS.items():
        values = arrays[name]
        if values is None or not values.size:
            continue
        how: dict[str, Any] = {}
        if dims[0] == "population" and values.ndim > 1:
            row = values[:1].size * values.itemsize
            block = max(1, min(len(values), 2**20 // row))
            how = {"chunks": (block, *values.shape[1:]), "compression": "gzip", "compression_opts": 1}
            how["shuffle"] = True
        item = file.create_dataset(name, data=values, track_times=False, **how)
        _attach(item, "units", units)
        _attach(item, "description", description.format(convention=drawn.convention))
        for axis, dim in enumerate(dims):
            item.dims[axis].label = dim
            if dim in file:
                item.dims[axis].attach_scale(file[dim])


def write_statistics(drawn: ScatteredYields, path: str | Path) -> None:
    """Write the statistics of populations as a tidy table, its origin in comment lines above it.

    Parameters
    ----------
    drawn : ScatteredYields
    path : str or Path
        A file there is replaced, whole or not at all.

    Raises
    ------
    InputError
        The file can't be written.

    Notes
    -----
    A row for each age and species: exact mean, standard deviation and skewness, whether a
    Gaussian stands for the law (1 or 0), the mean of the sample, and its quantiles; Msun.
    """
    text = io.StringIO()
    lines = provenance(drawn.population.weigh(drawn.ages))
    text.write(f"# {FORMAT}: {drawn.count} of {drawn.mass!r} Msun, mode {drawn.mode}, seed {drawn.seed}\n")
    for line in lines[1:2] + lines[4:]:
        text.write(f"# {line}".rstrip() + "\n")
    table = csv.writer(text, lineterminator="\n")
    heads = ["exact_mean", "exact_sigma", "exact_skewness", "gaussian", "sample_mean"]
    table.writerow(["age_yr", "species", *heads, *(f"quantile_{q:g}" for q in LEVELS)])
    law, sample, quantiles = drawn.law, drawn.sample_mean(), drawn.quantiles()
    for t, age in enumerate(drawn.ages.tolist()):
        for i, species in enumerate(drawn.species):
            values = [
                law.mean[t, i],
                law.sigma[t, i],
                law.skewness[t, i],
                int(law.gaussian[t, i]),
                sample[t, i],
            ]
            row = [*values, *quantiles[:, t, i]]
            table.writerow([repr(age), species, *(v if isinstance(v, int) else repr(float(v)) for v in row)])
    replace_file(path, text.getvalue().encode())
