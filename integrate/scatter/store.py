"""Populations drawn, in files: HDF5 for other codes to draw from, CSV of their statistics."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..files.labelled import Entry, attach, beside, put
from ..provenance import attributes, provenance
from ..tidy import write_tidy
from .result import LEVELS, ScatteredYields

if TYPE_CHECKING:
    import h5py

#: what a file is called in its own attributes
FORMAT = "steelyard scattered populations"
FORMAT_VERSION = 1

_CELL = ("population", "time", "source")
_LAW = ("time", "species")

#: the dimension scales of a file
SCALES = {
    "time": Entry(("time",), "yr", "age of the population"),
    "source": Entry(("source",), "1", "who ejects"),
    "species": Entry(("species",), "1", "elements such as C, nuclides such as C12"),
    "event": Entry(("event",), "1", "kind of event"),
    "quantile": Entry(("quantile",), "1", "cumulative probability"),
}

#: the datasets of a file
DATASETS = {
    "yields": Entry((*_CELL, "species"), "Msun", "{convention} yield of each population up to an age"),
    "ejected": Entry(_CELL, "Msun", "all mass ejected by each population up to an age, rest included"),
    "remnants": Entry(_CELL[:2], "Msun", "mass in remnants"),
    "living": Entry(_CELL[:2], "Msun", "mass in living stars"),
    "events": Entry((*_CELL[:2], "event"), "1", "number of events up to an age"),
    "born": Entry(_CELL[:1], "Msun", "mass of the stars born; living + remnants + ejected = born"),
    "stars": Entry(_CELL[:1], "1", "number of the stars born"),
    "followed": Entry(
        ("source", "species"), "1", "1 where the source follows the species; 0: missing, not zero"
    ),
    "mean": Entry(_LAW, "Msun", "exact mean of the yields summed over sources"),
    "covariance": Entry((*_LAW, "species"), "Msun2", "exact covariance of the yields summed over sources"),
    "skewness": Entry(_LAW, "1", "exact skewness of the yields summed over sources"),
    "quantiles": Entry(("quantile", *_LAW), "Msun", "quantiles of the populations in this file"),
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
    # too large to be put together in memory as smaller results are
    with beside(path) as file:
        _fill(file, drawn)


def _fill(file: h5py.File, drawn: ScatteredYields) -> None:
    told = attributes(drawn.population.weigh(drawn.ages)) | {"format": FORMAT, "notes": drawn.notes}
    told |= {"format_version": FORMAT_VERSION, "mass": drawn.mass}
    told |= {name: getattr(drawn, name) for name in ("mode", "convention", "count", "seed")}
    for name, value in told.items():
        attach(file, name, value)
    for name, values in scales(drawn).items():
        if len(values):
            put(file, name, values, SCALES[name])
    held = arrays(drawn)
    for name, entry in DATASETS.items():
        if name not in held:
            continue
        values = held[name]
        how: dict[str, Any] = {}
        if entry.dims[0] == "population" and values.ndim > 1:
            row = values[:1].size * values.itemsize
            block = max(1, min(len(values), 2**20 // row))
            how = {"chunks": (block, *values.shape[1:]), "compression": "gzip", "compression_opts": 1}
            how["shuffle"] = True
        told_of = entry.description.format(convention=drawn.convention)
        put(file, name, values, replace(entry, description=told_of), **how)


def scales(drawn: ScatteredYields) -> dict[str, Any]:
    """Return what the dimensions of the datasets run over, by name: numbers, or names."""
    return {
        "time": drawn.ages,
        "source": tuple(drawn.sources),
        "species": tuple(drawn.species),
        "event": tuple(drawn.event_kinds),
        "quantile": np.array(LEVELS),
    }


def arrays(drawn: ScatteredYields) -> dict[str, Any]:
    """Return every dataset of the file that isn't empty, by name."""
    found = {
        "yields": np.moveaxis(drawn.yields, 1, 2),
        "ejected": np.moveaxis(drawn.ejected, 1, 2),
        "remnants": drawn.remnants,
        "living": drawn.living,
        "events": drawn.events,
        "born": drawn.born,
        "stars": drawn.stars,
        "followed": drawn.population.weigh(drawn.ages).followed.astype(np.uint8),
        "mean": drawn.law.mean,
        "covariance": drawn.law.covariance,
        "skewness": drawn.law.skewness,
        "quantiles": drawn.quantiles(),
    }
    return {name: values for name, values in found.items() if values is not None and values.size}


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
    lines = provenance(drawn.population.weigh(drawn.ages))
    drawn_of = f"{FORMAT}: {drawn.count} of {drawn.mass!r} Msun, mode {drawn.mode}, seed {drawn.seed}"
    heads = ["exact_mean", "exact_sigma", "exact_skewness", "gaussian", "sample_mean"]
    law, sample, quantiles = drawn.law, drawn.sample_mean(), drawn.quantiles()

    def rows() -> Iterator[list[Any]]:
        for t, age in enumerate(drawn.ages.tolist()):
            for i, species in enumerate(drawn.species):
                exact = [float(one[t, i]) for one in (law.mean, law.sigma, law.skewness)]
                drawn_here = [float(sample[t, i]), *map(float, quantiles[:, t, i])]
                yield [age, species, *exact, int(law.gaussian[t, i]), *drawn_here]

    header = ["age_yr", "species", *heads, *(f"quantile_{q:g}" for q in LEVELS)]
    write_tidy(path, [drawn_of, *lines[1:2], *lines[4:]], header, rows())
