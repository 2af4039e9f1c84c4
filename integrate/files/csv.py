"""A result as a tidy table in CSV, for people and spreadsheets."""

from __future__ import annotations

import csv
import io
from pathlib import Path

import numpy as np

from steelyard.yields.whole import replace_file

from ..provenance import provenance
from ..results import PopulationYields


def write_csv(result: PopulationYields, path: str | Path) -> None:
    """Write the yields of a result as a tidy table, its origin in comment lines above it.

    Parameters
    ----------
    result : PopulationYields
    path : str or Path
        A file there is replaced, whole or not at all.

    Raises
    ------
    InputError
        The file can't be written.

    Notes
    -----
    A row for each age, source and species, with columns age_yr, source, species, total, net
    (Msun per Msun formed, up to the age), total_rate, net_rate (Msun per yr and Msun formed)
    and followed (0 where the source doesn't follow the species: missing, not zero). Numbers
    have as many digits as it takes to read them back exactly.
    """
    text = io.StringIO()
    for line in provenance(result):
        text.write(f"# {line}".rstrip() + "\n")
    table = csv.writer(text, lineterminator="\n")
    names = ("total", "net", "total_rate", "net_rate")
    table.writerow(["age_yr", "source", "species", *names, "followed"])
    values = np.stack([getattr(result, name) for name in names], axis=-1)
    for t, age in enumerate(result.ages.tolist()):
        for i, source in enumerate(result.sources):
            rows = values[i, t].tolist()
            for species, row, has in zip(result.species, rows, result.followed[i].tolist(), strict=True):
                table.writerow([repr(age), source, species, *map(repr, row), int(has)])
    replace_file(path, text.getvalue().encode())
