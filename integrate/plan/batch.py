"""A plan at many sets of parameters: in blocks that stay in cache, on threads, in bounded memory."""

from __future__ import annotations

import os
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.units import plain

if TYPE_CHECKING:
    from .plan import Plan

Rows = slice | NDArray[np.int_]

#: working arrays of a block, byte: few enough for the processor's cache, enough for threads to be worth it
BLOCK = 2**23

#: what threads and their bookkeeping take, byte
_ASIDE = 2**18


def batch(
    plan: Plan, thetas: ArrayLike, out: NDArray[Any] | None, dtype: Any, memory: Any, threads: int | None
) -> NDArray[Any]:
    """Weigh a plan at many sets of values; see `Plan.batch`."""
    thetas = plan.check(thetas, 2)
    shape = (len(thetas), *plan.shape)
    budget = plain(memory, "byte", "memory") - _ASIDE
    dtype = np.dtype(dtype if out is None else out.dtype)
    if dtype not in (np.float64, np.float32):
        raise InputError(f"dtype {dtype} isn't float64 or float32")
    if out is None:
        budget -= int(np.prod(shape)) * dtype.itemsize
    elif out.shape != shape:
        raise InputError(f"out has shape {out.shape}, not {shape}")
    threads = _cores() if threads is None else int(threads)
    if threads < 1:
        raise InputError(f"threads is {threads}", mend="give 1 or more")
    if not len(thetas):
        return np.empty(shape, dtype) if out is None else out
    row = _working(plan, thetas[0])
    threads = min(threads, int(budget // row))
    if threads < 1:
        raise InputError(
            f"memory of {plain(memory, 'byte', 'memory'):.4g} byte has no room for {len(thetas)} results",
            mend="give more, split thetas, ask for float32, or pass out, such as a memory-mapped array",
        )
    block = max(1, min(BLOCK, int(budget // threads)) // row)
    out = np.empty(shape, dtype) if out is None else out

    def work(rows: Rows) -> None:
        here = thetas[rows]
        ground = plan.ground(here[0])
        if isinstance(rows, slice) and dtype == np.float64:
            plan.fill(here, ground, out[rows])
            return
        result = np.empty((len(here), *plan.shape))
        plan.fill(here, ground, result)
        out[rows] = result

    blocks = _blocks(thetas, plan.ground_columns, block)
    if threads == 1 or len(thetas) <= block:
        for rows in blocks:
            work(rows)
    else:
        with ThreadPoolExecutor(threads) as pool:
            for _ in pool.map(work, blocks):
                pass
    return out


def _blocks(thetas: NDArray[np.float64], columns: list[int], size: int) -> Iterator[Rows]:
    """Rows that share what a plan keeps fixed between calls, `size` at most."""
    if not columns:
        yield from (slice(a, min(a + size, len(thetas))) for a in range(0, len(thetas), size))
        return
    _, group = np.unique(thetas[:, columns], axis=0, return_inverse=True)
    order = np.argsort(group.ravel(), kind="stable")
    starts = np.flatnonzero(np.diff(group.ravel()[order], prepend=-1))
    for a, b in zip(starts, [*starts[1:], len(order)], strict=True):
        yield from (order[i : min(i + size, b)] for i in range(a, b, size))


def _working(plan: Plan, theta: NDArray[np.float64]) -> int:
    """Byte of the arrays that one row takes while it is worked out."""
    ground = plan.ground(theta)
    ages, species = len(plan.ages), len(plan.species)
    numbers = ages * len(ground.matrix) + 4 * ground.geometry.intervals.lo.size * ground.ends
    numbers += 4 * ages * len(plan.clocks) + int(np.prod(plan.shape))
    return 8 * (numbers + (len(ground.matrix) * species if plan.scaled else 0))


def _cores() -> int:
    affinity = getattr(os, "sched_getaffinity", None)
    return len(affinity(0)) if affinity else os.cpu_count() or 1
