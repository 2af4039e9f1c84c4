"""Chunks on an executor: sent out, sent out again where a worker is lost, handed back as they come."""

from __future__ import annotations

import pickle
import threading
from collections.abc import Callable, Iterator
from concurrent.futures import FIRST_COMPLETED, Executor, Future, wait
from concurrent.futures import BrokenExecutor as Broken
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError

if TYPE_CHECKING:
    from ..plan import Plan

Array = NDArray[np.float64]

#: how often a chunk is sent out before its failure is the ensemble's
TRIES = 4

#: chunks under way for each worker, so that none waits for the next
AHEAD = 2

#: plans that a worker keeps
KEPT = 4

_held = threading.local()


def work(key: str, packed: bytes | None, theta: Array) -> tuple[str, Any]:
    """Work out a chunk in a worker.

    Parameters
    ----------
    key : str
        Of the plan.
    packed : bytes or None
        The plan, pickled; not sent where the worker is thought to have it.
    theta : ndarray, shape (n, p)

    Returns
    -------
    status : {"done", "send", "refused"}
    what : ndarray, None, or (row, what, mend)
        The results; nothing, where the plan must be sent; which row makes no population.
    """
    plans: dict[str, Plan] = _held.__dict__.setdefault("plans", {})
    if key not in plans:
        if packed is None:
            return "send", None
        while len(plans) >= KEPT:
            plans.pop(next(iter(plans)))
        plans[key] = pickle.loads(packed)
    return worked_out(plans[key], theta, threads=1)


def worked_out(plan: Plan, theta: Array, threads: int | None) -> tuple[str, Any]:
    """Work out a chunk, see `work`."""
    try:
        return "done", plan.batch(theta, threads=threads)
    except InputError:
        for row, one in enumerate(theta):
            try:
                plan(one)
            except InputError as error:
                return "refused", (row, error.what, error.mend)
        raise


def run(
    executor: Any,
    plan: Plan,
    key: str,
    chunks: Iterator[tuple[int, Array]],
    done: Callable[[int, Array, tuple[str, Any]], None],
) -> None:
    """Work out chunks on an executor.

    Parameters
    ----------
    executor : None, concurrent.futures.Executor or dask.distributed.Client
        None: in this process.
    plan : Plan
    key : str
        Names the plan among those that workers hold.
    chunks : iterator of (int, ndarray)
        Number of a chunk and its parameters.
    done : callable
        Takes a chunk's number, parameters and outcome, in the order in which they come.

    Raises
    ------
    InputError
        It is none of these.
    Exception
        That of a chunk that failed four times.
    """
    if executor is None:
        for number, theta in chunks:
            done(number, theta, worked_out(plan, theta, threads=None))
        return
    packed = pickle.dumps(plan)
    pool, workers = _pool(executor)
    under_way: dict[Future[Any], tuple[int, Array, int]] = {}

    def send(number: int, theta: Array, tries: int, with_plan: bool) -> None:
        future = pool.submit(work, key, packed if with_plan else None, theta)
        under_way[future] = (number, theta, tries)

    try:
        while True:
            while len(under_way) < AHEAD * max(workers(), 1):
                found = next(chunks, None)
                if found is None:
                    break
                send(*found, tries=1, with_plan=False)
            if not under_way:
                return
            for future in wait(under_way, return_when=FIRST_COMPLETED).done:
                number, theta, tries = under_way.pop(future)
                try:
                    outcome = future.result()
                except Broken as error:
                    error.add_note("the executor lost its workers; finished chunks are kept: run it again")
                    raise
                except Exception:
                    if tries >= TRIES:
                        raise
                    send(number, theta, tries + 1, with_plan=True)
                    continue
                if outcome[0] == "send":
                    send(number, theta, tries, with_plan=True)
                else:
                    done(number, theta, outcome)
    finally:
        for future in under_way:
            future.cancel()


def _pool(executor: Any) -> tuple[Executor, Callable[[], int]]:
    """An executor of the standard library's kind, and how many workers it has now."""
    if isinstance(executor, Executor):
        # the standard executors tell by this name only
        many = getattr(executor, "_max_workers", AHEAD)
        return executor, lambda: many
    if hasattr(executor, "get_executor") and hasattr(executor, "nthreads"):
        return executor.get_executor(pure=False), lambda: sum(executor.nthreads().values())
    raise InputError(
        f"executor {type(executor).__name__} can't be used",
        mend="give a concurrent.futures.Executor or a dask.distributed.Client",
    )
