"""Lifetimes of Portinari, Chiosi & Bressan (1998): a table."""

from __future__ import annotations

import csv
import hashlib
import io
import tomllib
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files
from typing import Any

import numpy as np

from steelyard.yields.errors import InputError

from .curves import LogLogCurve
from .law import LifetimeLaw, fraction_of_metals, hold


@dataclass(frozen=True)
class Portinari1998(LifetimeLaw):
    """Portinari, Chiosi & Bressan (1998, A&A 334, 505): lifetimes for 0.6 to 120 Msun.

    Log lifetime runs straight in log mass between rows and straight in log Z between
    columns. Outside Z = 0.0004 to 0.05 the edge column holds; outside 0.6 to 120 Msun the
    end lines are continued. At Z = 0.05 the table gives stars of 100 and of 120 Msun the
    same lifetime, so there they, and all above, die together.

    Examples
    --------
    >>> float(round(Portinari1998().at(0.02).turnoff("10 Myr"), 9))
    18.679092629
    """

    def at(self, metallicity: Any) -> LogLogCurve:
        """Return the curve at one metallicity; see `LifetimeLaw.at`."""
        asked = fraction_of_metals(metallicity)
        columns, masses, table = _portinari()
        z, notes = hold("portinari-1998", asked, columns[0], columns[-1])
        k = min(int(np.searchsorted(columns, z, side="right")) - 1, columns.size - 2)
        share = np.log(z / columns[k]) / np.log(columns[k + 1] / columns[k])
        times = table[:, k] ** (1.0 - share) * table[:, k + 1] ** share
        return LogLogCurve(
            law="portinari-1998",
            metallicity=asked,
            valid=(float(masses[0]), float(masses[-1])),
            notes=notes,
            masses=tuple(masses.tolist()),
            lifetimes=tuple(times.tolist()),
        )

    def metallicity_slope(self, mass: Any, metallicity: Any) -> np.ndarray:
        """Return d ln t / dZ; see `LifetimeLaw.metallicity_slope`."""
        z, columns = fraction_of_metals(metallicity), _portinari()[0]
        if not columns[0] <= z < columns[-1]:
            return np.zeros(np.shape(mass))
        k = int(np.searchsorted(columns, z, side="right")) - 1
        low, high = (np.log(self.at(c).lifetime(mass)) for c in columns[k : k + 2].tolist())
        return (high - low) / np.log(columns[k + 1] / columns[k]) / z


@lru_cache(maxsize=1)
def _portinari() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    folder = files("steelyard.tables").joinpath("portinari-1998-lifetimes")
    data = folder.joinpath("lifetimes.csv").read_bytes()
    declared = tomllib.loads(folder.joinpath("set.toml").read_text(encoding="utf-8"))["checksums"]
    if hashlib.sha256(data).hexdigest() != declared["lifetimes.csv"]:
        raise InputError(
            "the figures don't match their checksum",
            where="tables/portinari-1998-lifetimes/lifetimes.csv",
            mend="restore the file as shipped, or correct the checksum in set.toml if the change is meant",
        )
    head, *rows = csv.reader(io.StringIO(data.decode("utf-8")))
    table = np.array(rows, dtype=float)
    return np.array(head[1:], dtype=float), table[:, 0], table[:, 1:]
