"""A result as a tidy table in CSV, for people and spreadsheets."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from ..provenance import provenance
from ..results import PopulationYields
from ..tidy import write_tidy


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
    names = ("total", "net", "total_rate", "net_rate")
    values = np.stack([getattr(result, name) for name in names], axis=-1)

    def rows() -> Iterator[list[Any]]:
        for t, age in enumerate(result.ages.tolist()):
            for i, source in enumerate(result.sources):
                figures, followed = values[i, t].tolist(), result.followed[i].tolist()
                for species, row, has in zip(result.species, figures, followed, strict=True):
                    yield [age, source, species, *row, int(has)]

    write_tidy(path, provenance(result), ["age_yr", "source", "species", *names, "followed"], rows())
