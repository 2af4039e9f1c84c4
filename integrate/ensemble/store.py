"""The HDF5 file of an ensemble: laid out whole at the beginning, so that no kill can leave it torn.

Its datasets have their places before the first result is worked out, and results are
written straight to them. The structure of the file then never changes, and a chunk counts
as finished only with the checksum of what it holds.
"""

from __future__ import annotations

import zlib
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.units import plain

from ..files.labelled import Entry, attach, beside, label, put
from ..files.labelled import plain as plain_value
from ..provenance import attributes
from .summary import Summary, summarise

if TYPE_CHECKING:
    from ..plan import Plan

Array = NDArray[np.float64]

FORMAT = "steelyard ensemble"
FORMAT_VERSION = 1

#: the dimension scales of a file
SCALES = {
    "time": Entry(("time",), "yr", "age of the population"),
    "species": Entry(("species",), "1", "elements such as C, nuclides such as C12"),
    "parameter": Entry(("parameter",), "1", "free parameters; masses in Msun, times in yr"),
    "source": Entry(("source",), "1", "who ejects"),
}
_THETA = Entry(("member", "parameter"), "1", "values of the free parameters")
_CHECKSUM = Entry(("chunk",), "1", "CRC-32 of theta and yields of each chunk")
_FINISHED = Entry(("chunk",), "1", "1 where a chunk is written")

_MEND = "give a file that an ensemble was written to"

#: quantiles of a summary: the median, and the middle 68.3 and 95.4 % as of one and two standard deviations
LEVELS = (0.0228, 0.1587, 0.5, 0.8413, 0.9772)


@dataclass(frozen=True, eq=False)
class Ensemble:
    """Members of an ensemble in their file, read when they are asked for.

    Attributes
    ----------
    path : Path
    members, chunk : int
        How many, and how many were worked out at a time.
    free, species, sources : tuple of str
        Free parameters in the order of theta; sources are empty where they are summed.
    ages : ndarray, shape (t,)
        yr.
    digest : str
        Of the plan that made them.
    attributes : dict
        Where they come from: population as TOML, sets with checksums, policies, version.
    offsets : dict
        Where each dataset begins in the file, byte.
    """

    path: Path
    members: int
    chunk: int
    free: tuple[str, ...]
    species: tuple[str, ...]
    sources: tuple[str, ...]
    ages: Array
    digest: str
    attributes: dict[str, Any] = field(repr=False)
    offsets: dict[str, int] = field(repr=False)

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of one member: (t, species) or (sources, t, species)."""
        inner = (len(self.ages), len(self.species))
        return (len(self.sources), *inner) if self.sources else inner

    @property
    def chunks(self) -> int:
        """Number of chunks."""
        return -(-self.members // self.chunk)

    @property
    def theta(self) -> Array:
        """Free parameters of all members, shape (members, p), mapped from the file."""
        return self._mapped("theta", np.float64, (self.members, len(self.free)))

    @property
    def values(self) -> Array:
        """Results of all members, shape (members, *shape), Msun per Msun formed, mapped from the file."""
        return self._mapped("yields", np.float64, (self.members, *self.shape))

    @property
    def finished(self) -> NDArray[np.bool_]:
        """Which chunks are written, shape (chunks,)."""
        return self._mapped("finished", np.uint8, (self.chunks,)) == 1

    def rows(self, chunk: int) -> slice:
        """Return the members of a chunk."""
        return slice(chunk * self.chunk, min((chunk + 1) * self.chunk, self.members))

    def intact(self, chunk: int) -> bool:
        """Whether a chunk is written, and holds what was written."""
        if not self.finished[chunk]:
            return False
        rows = self.rows(chunk)
        checksum = self._mapped("checksum", np.uint32, (self.chunks,))[chunk]
        return bool(_crc(self.theta[rows], self.values[rows]) == checksum)

    def write(self, chunk: int, theta: Array, values: Array) -> None:
        """Write a chunk, then its checksum, then that it is finished."""
        first = self.rows(chunk).start
        width = int(np.prod(self.shape))
        theta, values = (np.ascontiguousarray(v, dtype="<f8") for v in (theta, values))
        with self.path.open("r+b", buffering=0) as file:
            for name, data, item, at in (
                ("theta", theta, 8 * len(self.free), first),
                ("yields", values, 8 * width, first),
                ("checksum", np.array([_crc(theta, values)], dtype="<u4"), 4, chunk),
                ("finished", np.array([1], dtype="u1"), 1, chunk),
            ):
                if data.nbytes:
                    file.seek(self.offsets[name] + at * item)
                    view = memoryview(data).cast("B")
                    while view:
                        view = view[file.write(view) :]

    def summary(self, levels: Sequence[float] = LEVELS, memory: Any = "256 MiB") -> Summary:
        """Summarise the members without holding them all.

        Parameters
        ----------
        levels : sequence of float
            Of the quantiles, between 0 and 1.
        memory : int or str
            Byte for the quantiles: as many columns as fit are gone through at once, so the file
            is read (members x columns x 8 / memory) times.

        Returns
        -------
        Summary
            The digits depend on the members and the chunk only.

        Raises
        ------
        InputError
            The ensemble isn't finished, or a level is outside 0 to 1.
        """
        levels = np.atleast_1d(plain(levels, "", "levels"))
        if np.any((levels < 0) | (levels > 1)):
            raise InputError("levels of quantiles are between 0 and 1", mend="such as (0.16, 0.5, 0.84)")
        if not self.finished.all():
            done = int(self.finished.sum())
            raise InputError(
                f"{done} of {self.chunks} chunks are finished", where=str(self.path), mend="run it again"
            )
        return summarise(self.values, self.chunk, levels.tolist(), plain(memory, "byte", "memory"))

    def _mapped(self, name: str, dtype: Any, shape: tuple[int, ...]) -> NDArray[Any]:
        if 0 in shape:
            return np.empty(shape, dtype)
        little = np.dtype(dtype).newbyteorder("<")
        return np.memmap(self.path, mode="r", dtype=little, offset=self.offsets[name], shape=shape)


def _crc(theta: Array, values: Array) -> int:
    return zlib.crc32(np.ascontiguousarray(values), zlib.crc32(np.ascontiguousarray(theta)))


def create(path: Path, plan: Plan, members: int, chunk: int, digest: str) -> None:
    """Lay out the file of an ensemble, whole or not at all.

    Raises
    ------
    InputError
        The file can't be written.
    """
    shape = (members, *plan.shape)
    chunks = -(-members // chunk)
    scales: dict[str, Any] = {"time": plan.ages, "species": plan.species, "parameter": plan.free}
    if plan.by_source:
        scales["source"] = plan.sources
    dims = ("member", *(("source",) if plan.by_source else ()), "time", "species")
    told = f"{plan.convention} yields up to an age, per Msun formed"
    room = {
        "theta": ((members, len(plan.free)), "<f8", _THETA),
        "yields": (shape, "<f8", Entry(dims, "Msun/Msun", told)),
        "checksum": ((chunks,), "<u4", _CHECKSUM),
        "finished": ((chunks,), "u1", _FINISHED),
    }
    with beside(path) as file:
        origin = attributes(plan.population.weigh(plan.ages)) | {
            "format": FORMAT,
            "format_version": FORMAT_VERSION,
            "convention": plan.convention,
            "digest": digest,
            "members": members,
            "chunk": chunk,
        }
        for name, value in origin.items():
            attach(file, name, value)
        for name, values in scales.items():
            if len(values):
                put(file, name, values, SCALES[name])
        file.create_dataset("at_start", data=plan(plan.start), track_times=False)
        for name, (size, dtype, entry) in room.items():
            label(_room(file, name, size, dtype, zeroed=name == "finished"), entry)


def _room(file: Any, name: str, shape: tuple[int, ...], dtype: str, zeroed: bool) -> Any:
    """A dataset in one stretch of the file, which is taken at once but not filled."""
    import h5py

    how = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
    how.set_layout(h5py.h5d.CONTIGUOUS)
    how.set_alloc_time(h5py.h5d.ALLOC_TIME_EARLY)
    how.set_fill_time(h5py.h5d.FILL_TIME_ALLOC if zeroed else h5py.h5d.FILL_TIME_NEVER)
    how.set_obj_track_times(False)
    kind, space = h5py.h5t.py_create(np.dtype(dtype)), h5py.h5s.create_simple(shape)
    return h5py.Dataset(h5py.h5d.create(file.id, name.encode(), kind, space, how))


def open_ensemble(path: str | Path) -> Ensemble:
    """Open the file of an ensemble, finished or not.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    Ensemble

    Raises
    ------
    InputError
        There is no such file, or it is none of these.
    """
    return _opened(Path(path))[0]


def _opened(path: Path) -> tuple[Ensemble, Array]:
    """An ensemble, and its plan's result at its population's own values."""
    import h5py

    if not path.is_file():
        raise InputError("there is no such file", where=str(path), mend=_MEND)
    try:
        with h5py.File(path, "r") as file:
            held = {name: plain_value(value) for name, value in file.attrs.items()}
            if held.pop("format", None) != FORMAT:
                raise InputError("this HDF5 file holds no ensemble", where=str(path), mend=_MEND)
            version = held.pop("format_version")
            if version != FORMAT_VERSION:
                raise InputError(
                    f"format_version is {version!r}, not {FORMAT_VERSION}",
                    where=str(path),
                    mend="read it with the version of steelyard that wrote it",
                )
            names = {
                name: plain_value(file[name][()]) if name in file else ()
                for name in ("parameter", "species", "source")
            }
            offsets = {
                name: file[name].id.get_offset() or 0 for name in ("theta", "yields", "checksum", "finished")
            }
            opened = Ensemble(
                path=path,
                members=held.pop("members"),
                chunk=held.pop("chunk"),
                free=names["parameter"],
                species=names["species"],
                sources=names["source"],
                ages=file["time"][()],
                digest=held.pop("digest"),
                attributes=held,
                offsets=offsets,
            )
            return opened, file["at_start"][()]
    except InputError:
        raise
    except (OSError, KeyError, ValueError, TypeError, RuntimeError) as error:
        raise InputError(f"the file can't be read: {str(error)[:200]}", where=str(path), mend=_MEND) from None


def opened_for(path: Path, plan: Plan, members: int, chunk: int | None, digest: str) -> Ensemble:
    """Open the file of an ensemble begun earlier, and refuse it if it is another one's.

    Raises
    ------
    InputError
        It was made by another plan, of another number of members, or in other chunks.
    """
    found, at_start = _opened(path)
    mend = "name another file, or remove this one"
    if found.digest != digest or not np.allclose(at_start, plan(plan.start), rtol=1e-10, atol=0):
        raise InputError("the file was made by another plan", where=str(path), mend=mend)
    if found.members != members:
        raise InputError(f"the file has {found.members} members, not {members}", where=str(path), mend=mend)
    if chunk is not None and found.chunk != chunk:
        raise InputError(
            f"the file is in chunks of {found.chunk}, not {chunk}",
            where=str(path),
            mend=f"leave chunk out, or {mend}",
        )
    return found
