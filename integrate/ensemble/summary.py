"""Mean, covariance and quantiles of more results than memory holds, in an order that fixes the digits."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Summary:
    """What the members of an ensemble have in common.

    Attributes
    ----------
    members : int
    mean : ndarray, shape (*shape)
        Of a plan's result: (t, species) or (sources, t, species).
    covariance : ndarray, shape (*shape, species)
        Between species at the same age (and of the same source), with n - 1; 0 for one member.
    levels : tuple of float
    quantiles : ndarray, shape (levels, *shape)
        Exact, straight between order statistics as in `numpy.quantile`.
    """

    members: int
    mean: Array
    covariance: Array
    levels: tuple[float, ...]
    quantiles: Array

    @property
    def deviation(self) -> Array:
        """Standard deviation, shape (*shape)."""
        return np.sqrt(np.einsum("...ss->...s", self.covariance))


@dataclass(frozen=True, eq=False)
class Moments:
    """Count, mean and sums of products of deviations of some rows.

    Attributes
    ----------
    count : int
    mean : ndarray, shape (l, s)
    products : ndarray, shape (l, s, s)
    """

    count: int
    mean: Array
    products: Array

    @classmethod
    def of(cls, values: Array) -> Moments:
        """Return those of values of shape (n, l, s)."""
        mean = values.mean(axis=0)
        off = np.moveaxis(values - mean, 0, 1)
        return cls(len(values), mean, np.swapaxes(off, 1, 2) @ off)

    def __add__(self, other: Moments) -> Moments:
        """Join two (Chan, Golub & LeVeque 1983, The American Statistician 37, 242)."""
        count = self.count + other.count
        apart = other.mean - self.mean
        mean = self.mean + apart * (other.count / count)
        between = apart[:, :, None] * apart[:, None, :] * (self.count * other.count / count)
        return Moments(count, mean, self.products + other.products + between)


def merged(parts: Iterable[Moments]) -> Moments:
    """Join moments in pairs, those in pairs, and so on, so that rounding grows with the log of their number.

    Parameters
    ----------
    parts : iterable of Moments
        At least one; their order alone fixes the digits.
    """
    held: list[tuple[int, Moments]] = []
    for part in parts:
        level = 0
        while held and held[-1][0] == level:
            part = held.pop()[1] + part
            level += 1
        held.append((level, part))
    total = held.pop()[1]
    while held:
        total = held.pop()[1] + total
    return total


def summarise(values: Array, rows: int, levels: Sequence[float], memory: float) -> Summary:
    """Summarise members that stand in a file.

    Parameters
    ----------
    values : ndarray, shape (n, ..., s)
        May be mapped from a file.
    rows : int
        How many are read at once for the moments.
    levels : sequence of float
        Of the quantiles, 0 to 1.
    memory : float
        Byte for the columns whose quantiles are sought at the same time.

    Returns
    -------
    Summary
    """
    n, *shape = values.shape
    species = shape[-1]

    def chunks() -> Iterator[Array]:
        for start in range(0, n, rows):
            yield np.asarray(values[start : start + rows], dtype=float).reshape(-1, int(np.prod(shape)))

    found = merged(Moments.of(part.reshape(len(part), -1, species)) for part in chunks())
    width = int(np.prod(shape))
    quantiles = np.empty((len(levels), width))
    many = max(1, int(memory // (8 * n)))
    for first in range(0, width, many):
        columns = slice(first, min(first + many, width))
        # a row for each column: then each is sorted in one stretch of memory
        block = np.empty((columns.stop - first, n))
        at = 0
        for part in chunks():
            block[:, at : at + len(part)] = part[:, columns].T
            at += len(part)
        for i, column in enumerate(block):
            quantiles[:, first + i] = np.quantile(column, levels, overwrite_input=True)
    return Summary(
        members=n,
        mean=found.mean.reshape(shape),
        covariance=(found.products / max(found.count - 1, 1)).reshape(*shape, species),
        levels=tuple(float(one) for one in levels),
        quantiles=quantiles.reshape(len(levels), *shape),
    )
