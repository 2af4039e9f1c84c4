"""Ensembles: a plan at many sets of parameters, streamed to a file that can be gone on with."""

from __future__ import annotations

import hashlib
import json
import sys
import time
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from steelyard.yields.errors import InputError, nearest

from ..plan import Plan
from ..population import Population
from . import store
from .work import run

if TYPE_CHECKING:
    from collections.abc import Callable

    from rich.progress import Progress

Array = NDArray[np.float64]
Thetas = ArrayLike | Mapping[str, ArrayLike] | Iterable[ArrayLike]

#: byte of results in a chunk where none is asked for
CHUNK_BYTES = 2**23

#: seconds after which progress is shown
PATIENCE = 2.0


def ensemble(
    plan: Plan | Population,
    thetas: Thetas,
    path: str | Path,
    executor: Any = None,
    chunk: int | None = None,
    members: int | None = None,
    progress: bool = True,
) -> store.Ensemble:
    """Weigh a plan at many sets of parameters, on many workers, into a file.

    Parameters
    ----------
    plan : Plan or Population
        Of a population, which parameters are free follows from `thetas`, which are then a mapping.
    thetas : array_like, mapping or iterable
        Shape (n, p) in the order of the plan's free parameters; or the values of each by name,
        shape (n,); or an iterable of arrays of shape (any, p), with `members` in all, for more
        than memory holds.
    path : str or Path
        HDF5. If the file is there already, what is finished in it is kept.
    executor : concurrent.futures.Executor or dask.distributed.Client, optional
        Default: this process, all its cores.
    chunk : int, optional
        Members that are worked out at a time; default: about 8 MiB of results.
    members : int, optional
        How many an iterable has in all.
    progress : bool
        Tell on standard error, if it is a terminal and the work takes above two seconds.

    Returns
    -------
    Ensemble

    Raises
    ------
    InputError
        Parameters that don't fit the plan or make no population (telling which member), or a
        file there that is another ensemble's.

    Notes
    -----
    Every member's digits are those of ``plan(theta)``, so they don't depend on executor, chunk or
    interruptions. A chunk whose worker is lost is sent out again, three times at most. Workers
    need steelyard; the plan is sent to each of them once.

    Examples
    --------
    >>> import tempfile
    >>> from steelyard.integrate import Population, StellarSource
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O", "Fe"])
    >>> slopes = np.random.default_rng(1).normal(2.3, 0.1, 1000)
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     many = ensemble(stars, {"imf.slopes[-1]": slopes}, f"{folder}/slopes.h5")
    ...     summary = many.summary()
    >>> many.shape, summary.mean.shape, summary.covariance.shape
    ((7, 2), (7, 2), (7, 2, 2))
    """
    path = Path(path)
    plan, thetas = _named(plan, thetas)
    given, members = _given(plan, thetas, members)
    if chunk is not None and (chunk != int(chunk) or chunk < 1):
        raise InputError(f"chunk is {chunk}", mend="give 1 or more members")
    key = _digest(plan)
    if path.exists():
        target = store.opened_for(path, plan, members, chunk, key)
    else:
        many = max(1, CHUNK_BYTES // (8 * int(np.prod(plan.shape)))) if chunk is None else int(chunk)
        store.create(path, plan, members, min(many, members), key)
        target = store.open_ensemble(path)
    finished = target.finished.copy()

    def wanted() -> Iterator[tuple[int, Array]]:
        for number, theta in enumerate(_chunks(given, target.chunk, members, len(plan.free))):
            if finished[number] and not np.array_equal(target.theta[target.rows(number)], theta):
                raise InputError(
                    f"chunk {number} was made with other parameters",
                    where=str(path),
                    mend="name another file, or remove this one",
                )
            if not target.intact(number):
                yield number, theta
            else:
                told()

    if isinstance(given, np.ndarray):
        # before anything is worked out
        for number in np.flatnonzero(finished):
            rows = target.rows(int(number))
            if not np.array_equal(target.theta[rows], given[rows]):
                raise InputError(
                    f"the file was made with other parameters, as of member {rows.start}",
                    where=str(path),
                    mend="name another file, or remove this one",
                )

    def done(number: int, theta: Array, outcome: tuple[str, Any]) -> None:
        if outcome[0] == "refused":
            row, what, mend = outcome[1]
            raise InputError(what, where=f"member {number * target.chunk + row}", mend=mend)
        target.write(number, theta, outcome[1])
        told()

    with _progress(target.chunks, progress) as told:
        run(executor, plan, key, wanted(), done)
    return target


def _named(plan: Plan | Population, thetas: Thetas) -> tuple[Plan, Any]:
    """A plan, and thetas in its order if they came by name."""
    if isinstance(plan, Population):
        if not isinstance(thetas, Mapping):
            raise InputError(
                "a population needs thetas by name", mend='such as {"imf.slopes[-1]": [2.2, 2.3, 2.4]}'
            )
        plan = Plan(plan, free=list(thetas))
    if not isinstance(thetas, Mapping):
        return plan, thetas
    for name in thetas:
        if name not in plan.free:
            raise InputError(f"{name!r} isn't free", mend=nearest(name, plan.free))
    lacking = [name for name in plan.free if name not in thetas]
    if lacking:
        raise InputError(f"thetas lacks {lacking[0]}", mend=f"give {', '.join(plan.free)}")
    columns = [np.atleast_1d(np.asarray(thetas[name], dtype=float)) for name in plan.free]
    if len({c.shape for c in columns}) != 1 or columns[0].ndim != 1:
        raise InputError("thetas by name must be lists of one length")
    return plan, np.stack(columns, axis=1)


def _given(plan: Plan, thetas: Any, members: int | None) -> tuple[Array | Iterable[Any], int]:
    if hasattr(thetas, "__array__") or isinstance(thetas, (list, tuple)):
        array = np.ascontiguousarray(thetas, dtype=float)
        if array.ndim != 2 or array.shape[1] != len(plan.free) or not len(array):
            raise InputError(
                f"thetas have shape {array.shape}",
                mend=f"give a row a member, with {', '.join(plan.free) or 'nothing'} in each",
            )
        if members not in (None, len(array)):
            raise InputError(f"thetas have {len(array)} members, not {members}")
        return array, len(array)
    if members is None or members < 1:
        raise InputError("an iterable of thetas needs members, their number in all")
    return thetas, int(members)


def _chunks(given: Array | Iterable[Any], size: int, members: int, width: int) -> Iterator[Array]:
    """Parameters in chunks of one size, but for the last, from arrays of any."""
    if isinstance(given, np.ndarray):
        yield from (given[a : a + size] for a in range(0, members, size))
        return
    held: list[Array] = []
    count = seen = 0
    for part in given:
        array = np.asarray(part, dtype=float)
        if array.ndim != 2 or array.shape[1] != width:
            raise InputError(f"thetas have a part of shape {array.shape}", mend=f"give (any, {width})")
        held.append(array)
        count, seen = count + len(array), seen + len(array)
        if seen > members:
            raise InputError(f"thetas have more than {members} members", mend="correct members")
        while count >= size:
            whole = np.concatenate(held)
            yield np.ascontiguousarray(whole[:size])
            held, count = [whole[size:]], count - size
    if seen < members:
        raise InputError(f"thetas have {seen} members, not {members}", mend="correct members")
    if count:
        yield np.ascontiguousarray(np.concatenate(held))


def _digest(plan: Plan) -> str:
    """SHA-256 of all that a plan's results follow from, but for functions, of which only names are known."""
    from importlib.metadata import version

    from ..popfile.text import population_to_toml

    told = {
        "population": population_to_toml(plan.population),
        "free": plan.free,
        "ages": plan.ages.tolist(),
        "species": plan.species,
        "sources": plan.sources,
        "convention": plan.convention,
        "by_source": plan.by_source,
        "version": version("steelyard"),
    }
    digest = hashlib.sha256(json.dumps(told, sort_keys=True).encode())
    for grid in plan.population.prepared.sets:
        digest.update(grid.id.encode())
        for one in grid.slices:
            for array in (one.mass, one.ejected, one.wind, one.total, one.net, one.initial):
                digest.update(np.ascontiguousarray(array).tobytes())
    return digest.hexdigest()


@contextmanager
def _progress(chunks: int, wanted: bool) -> Iterator[Callable[[], None]]:
    """Count chunks on standard error, once that has lasted two seconds."""
    if not wanted or not sys.stderr.isatty():
        yield lambda: None
        return
    began, count = time.monotonic(), 0
    shown: Progress | None = None

    def told() -> None:
        nonlocal count, shown
        count += 1
        if shown is None and time.monotonic() - began > PATIENCE:
            from rich.console import Console
            from rich.progress import Progress

            shown = Progress(console=Console(stderr=True), transient=True)
            shown.start()
            shown.add_task("ensemble", total=chunks)
        if shown is not None:
            shown.update(shown.task_ids[0], completed=count)

    try:
        yield told
    finally:
        if shown is not None:
            shown.stop()
