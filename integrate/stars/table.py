"""The table itself: which cell of age and metallicity a star particle is in, and what it ejects there.

Cells are bounded in age by the deaths of the same initial masses at every metallicity, so
that the kinks of the cumulative yields (models, breaks of the mass function and of the
lifetimes) fall on bounds everywhere, though the ages at which they happen move with
metallicity. Within a cell the yields are a parabola in log age.

Between the metallicities of the sets' models lie panels of four rows each, interpolated with
the functions 1, log Z, Z and Z log Z: yields are linear in log Z there, birth compositions
in Z, so these are the functions that occur.
"""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from steelyard.yields.errors import InputError, nearest
from steelyard.yields.units import plain

from .lookup import Lookup, Metallicities

Array = NDArray[np.float64]
Whole = NDArray[np.int_]

#: bytes of results that are worked on at once: they stay in the cache that the cores share
WORKED_AT_ONCE = 2**22

#: particles under which work isn't shared among threads
FEW = 50_000


@dataclass(frozen=True, eq=False)
class Late:
    """A delayed source in the table.

    Attributes
    ----------
    log_age : ndarray, shape (n,)
        Natural log of ages in yr, increasing.
    fraction : ndarray, shape (n,)
        Events up to each, in units of all of them; 0 at the first.
    rows : ndarray, shape (rows of metallicity or 1, columns)
        What all events of 1 Msun formed eject; one row where it is the same at every metallicity.
    """

    log_age: Array
    fraction: Array
    rows: Array


@dataclass(frozen=True, eq=False)
class StarTable:
    """What star particles eject between two ages, by look-up.

    Attributes
    ----------
    species, sources : tuple of str
    events : tuple of str
        Kinds of events that are counted.
    convention : {"total", "net"}
    error : float
        Bound on the error of cumulative yields, see `star_table`.
    checked : float
        Largest error found when the table was made, in the same measure.
    until : float
        Oldest age served, yr.
    metallicity : ndarray, shape (r,)
        Of the rows: four for each panel, then one for each point.
    edge : ndarray, shape (p + 1,)
        Metallicities between which the panels lie, increasing.
    straight : ndarray of bool, shape (p,)
        Panels interpolated with 1, Z, Z², Z³ instead: those next to Z = 0, and narrow ones.
    point : ndarray of int, shape (p + 1,)
        The row that holds at an edge itself, where the answer jumps because other models of a set
        serve there; -1 where the panels meet.
    mass : ndarray, shape (k,)
        Initial masses that bound the cells, Msun, decreasing.
    log_age : ndarray, shape (r, k)
        Natural log of the lifetimes of these masses in yr.
    step, bend : ndarray, shape (r, k + 1, columns)
        What dies with the masses between two bounds, per Msun formed, D and Q: up to a share x of
        the cell in log age, D x + Q x (1 - x). 0 in the first cell (nothing has died yet) and in
        the last.
    owner : ndarray of int, shape (r, k + 1)
        Position in `sources` of the source that each cell's stars count for.
    late : dict of Late
        By the name of the delayed source.
    attributes : dict
        Where the table comes from: the population as TOML, sets with checksums, policies.
    """

    species: tuple[str, ...]
    sources: tuple[str, ...]
    events: tuple[str, ...]
    convention: str
    error: float
    checked: float
    until: float
    metallicity: Array
    edge: Array
    straight: NDArray[np.bool_]
    point: Whole
    mass: Array
    log_age: Array
    step: Array
    bend: Array
    owner: Whole
    late: dict[str, Late]
    attributes: dict[str, Any]

    @property
    def columns(self) -> tuple[str, ...]:
        """What the columns are with accounts: species, ``returned``, then kinds of events."""
        return (*self.species, "returned", *(f"events: {kind}" for kind in self.events))

    @property
    def nbytes(self) -> int:
        """Size of the table as it is looked up, bytes."""
        late = sum(one.log_age.nbytes + one.fraction.nbytes + one.rows.nbytes for one in self.late.values())
        return 3 * self.step.nbytes + self.log_age.nbytes + self.owner.nbytes + late

    def save(self, path: str | Path) -> None:
        """Write the table to an HDF5 file, whole or not at all.

        Parameters
        ----------
        path : str or Path

        Raises
        ------
        InputError
            The file can't be written.
        """
        from .file import write_table

        write_table(self, path)

    @classmethod
    def load(cls, path: str | Path) -> StarTable:
        """Read a table that `save` wrote.

        Parameters
        ----------
        path : str or Path

        Returns
        -------
        StarTable

        Raises
        ------
        InputError
            There is no such file, it is none of these, or its checksum doesn't fit its figures.
        """
        from .file import read_table

        return read_table(path)

    def eject(
        self,
        age: ArrayLike,
        metallicity: ArrayLike,
        dt: ArrayLike,
        mass: ArrayLike = 1.0,
        out: NDArray[Any] | None = None,
        source: str | None = None,
        accounts: bool = False,
        threads: int | None = None,
    ) -> NDArray[Any]:
        """Return what star particles eject from an age on for some time.

        Parameters
        ----------
        age : array_like, shape (n,)
            yr, at the beginning.
        metallicity : array_like, shape (n,)
            Mass fraction of metals at birth.
        dt : array_like, shape (n,)
            yr.
        mass : array_like, shape (n,)
            Mass formed, Msun.
        out : ndarray, shape (n, columns), optional
            Buffer to write into, of any floating type.
        source : str, optional
            One of `sources`; default: all together.
        accounts : bool
            Append the mass returned, Msun, and the numbers of events: `columns`.
        threads : int, optional
            How many share the work; default: as many as there are cores, one for few particles.

        Returns
        -------
        ndarray, shape (n, columns)
            Msun; the columns are `species`.

        Raises
        ------
        InputError
            Values outside the table or of shapes that don't fit, or an unknown source.

        Notes
        -----
        Any of the four may be one number for all. What is ejected in successive steps adds
        up to the whole, to rounding, so errors don't grow with the number of steps; and a
        step within one cell is its share of the cell, not a difference of cumulative
        yields, so it has all its digits however short it is.
        """
        given = [
            np.asarray(plain(value, unit, name), dtype=float)
            for value, unit, name in (
                (age, "yr", "age"),
                (metallicity, "", "metallicity"),
                (dt, "yr", "dt"),
                (mass, "Msun", "mass"),
            )
        ]
        n = self._check(*given)
        width = len(self.columns) if accounts else len(self.species)
        lookup = self._lookup(source, width)
        if out is None:
            out = np.empty((n, width))
        elif out.shape != (n, width):
            raise InputError(f"out has shape {out.shape}, not {(n, width)}")
        many = max(256, min(16384, WORKED_AT_ONCE // (8 * width)))

        def work(start: int) -> None:
            part = slice(start, min(start + many, n))
            values = [v if v.ndim == 0 or v.size == 1 else v[part] for v in given]
            values = [np.broadcast_to(v.ravel(), (part.stop - part.start,)) for v in values]
            out[part] = lookup.eject(*values)

        if threads is None:
            threads = 1 if n < FEW else os.cpu_count() or 1
        if threads > 1:
            with ThreadPoolExecutor(threads) as pool:
                list(pool.map(work, range(0, n, many)))
        else:
            for start in range(0, n, many):
                work(start)
        return out

    def _check(self, age: Array, metallicity: Array, dt: Array, mass: Array) -> int:
        named = {"age": age, "metallicity": metallicity, "dt": dt, "mass": mass}
        sizes = {v.size for v in named.values() if v.ndim} - {1} or {1}
        if len(sizes) > 1 or any(v.ndim > 1 for v in named.values()):
            shapes = ", ".join(f"{name} {v.shape}" for name, v in named.items())
            raise InputError(f"shapes don't fit together: {shapes}", mend="give one value a particle, or one")
        n = sizes.pop()
        if n == 0:
            return 0
        lo, hi = self.edge[0], self.edge[-1]
        for name, value in (("age", age), ("dt", dt)):
            if value.min() < 0:
                raise InputError(f"{name} is negative: {value.min():g} yr", mend="give yr from 0")
        if metallicity.min() < lo or metallicity.max() > hi:
            worst = metallicity.min() if metallicity.min() < lo else metallicity.max()
            raise InputError(
                f"metallicity {worst:g} lies outside the table's {lo:g} to {hi:g}",
                mend="make the table with a wider range of metallicities",
            )
        oldest = float(np.max(age + dt))
        # sums of steps may pass the last age by rounding
        if oldest > self.until * (1 + 1e-12):
            raise InputError(
                f"a particle gets {oldest:g} yr old, the table ends at {self.until:g} yr",
                mend="make the table with a later `until`",
            )
        return n

    @cached_property
    def _metallicities(self) -> Metallicities:
        return Metallicities(self)

    @cached_property
    def _lookups(self) -> dict[tuple[str | None, int], Lookup]:
        return {}

    def _lookup(self, source: str | None, width: int) -> Lookup:
        if source is not None and source not in self.sources:
            raise InputError(f"source {source!r} isn't in the table", mend=nearest(source, self.sources))
        if (source, width) not in self._lookups:
            self._lookups[source, width] = Lookup(self, self._metallicities, source, width)
        return self._lookups[source, width]
