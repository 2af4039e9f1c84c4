"""Dividing the variance of values over a factorial: exactly where it is whole, from a sample where not."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations, pairwise

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError

Array = NDArray[np.float64]

#: of the jackknife
GROUPS = 20

#: effects that are fitted to a sample at most, as a share of its size
FILL = 0.4
#: and in number: each group keeps a matrix of their products
MOST_EFFECTS = 800

#: of the products of effects, per sample; 1 where all combinations are equally often there
LEAST_EIGENVALUE = 0.01

#: of a normal distribution, for intervals of 95 %
_TWO_SIGMA = 1.959963984540054

#: spreads that are rounding, dex
ROUNDING = 1e-12


@dataclass(frozen=True, eq=False)
class Parts:
    """The variance of values over a factorial, divided.

    Attributes
    ----------
    variance : ndarray, shape (...)
        Over all combinations, each counted once.
    main : ndarray, shape (factors, ...)
        Shares of the factors alone.
    pairs : ndarray, shape (pairs, ...)
        Of pairs beyond that, in the order of ``itertools.combinations``; empty where a
        sample is too small for them.
    higher : ndarray, shape (...)
        Of all interactions of more factors, and of pairs where those aren't told apart.
    error : ndarray, shape (factors + pairs + 1, ...), optional
        Half width of the intervals of 95 % of main, pairs, higher; none where exact.
    """

    variance: Array
    main: Array
    pairs: Array
    higher: Array
    error: Array | None = None


def decompose(values: Array, factors: int) -> Parts:
    """Divide the variance of values over a full factorial.

    Parameters
    ----------
    values : ndarray, shape (levels of factor 1, levels of factor 2, ..., ...)
    factors : int
        How many of the first axes are factors.

    Returns
    -------
    Parts
        Shares are NaN where nothing varies.

    Examples
    --------
    Of ``a + b`` with steps of 2 and 1, four fifths of the variance are due to ``a``:

    >>> parts = decompose(np.array([[0.0, 1.0], [2.0, 3.0]]), 2)
    >>> parts.main.round(12).tolist(), float(parts.higher)
    ([0.8, 0.2], 0.0)
    """
    axes = tuple(range(factors))

    def mean(keep: Sequence[int]) -> Array:
        return values.mean(axis=tuple(k for k in axes if k not in keep), keepdims=True)

    centre = mean(())
    main = [mean((k,)) - centre for k in axes]
    pairs = [mean((a, b)) - centre - main[a] - main[b] for a, b in combinations(axes, 2)]
    rest = values - centre - sum(main) - (sum(pairs) if pairs else 0.0)

    def part(effect: Array) -> Array:
        return (effect**2).mean(axis=axes)

    variance = part(values - centre)
    shape = values.shape[factors:]
    with np.errstate(divide="ignore", invalid="ignore"):
        scale = np.where(variance > ROUNDING**2, variance, np.nan)
        return Parts(
            variance,
            np.array([part(e) for e in main]) / scale,
            np.array([part(e) for e in pairs]).reshape(len(pairs), *shape) / scale,
            part(rest) / scale,
        )


def decompose_sample(
    at: NDArray[np.int_], levels: Sequence[int], values: Array, groups: int = GROUPS
) -> Parts:
    """Estimate how the variance of values over a factorial divides, from a random sample of it.

    Parameters
    ----------
    at : ndarray of int, shape (n, factors)
        Combinations drawn at random, all equally likely.
    levels : sequence of int
        How many choices each factor has.
    values : ndarray, shape (n, ...)
    groups : int
        Of the jackknife; each is left out once.

    Returns
    -------
    Parts
        Each squared effect is freed of what the noise of the fit adds to it, so that a
        share is right on average, and a share near 0 may come out just below.

    Raises
    ------
    InputError
        The sample is too small even for main effects.
    """
    count = len(at)
    shape = values.shape[1:]
    flat = values.reshape(count, -1)
    # in the order of a draw without order, so that groups are alike
    group = np.arange(count) % groups
    for with_pairs in (True, False):
        basis, blocks = _basis(at, levels, with_pairs)
        most = min(FILL * count, MOST_EFFECTS) if with_pairs else FILL * count
        if basis.shape[1] > most:
            continue
        grams = np.array([basis[group == g].T @ basis[group == g] for g in range(groups)])
        whole_gram = grams.sum(axis=0)
        # where combinations of choices weren't drawn, their effects can't be told
        if min(np.linalg.eigvalsh(whole_gram - gram)[0] for gram in grams) > LEAST_EIGENVALUE * count:
            break
    else:
        raise InputError(
            f"{count} samples are too few for {basis.shape[1]} effects", mend=f"take {4 * basis.shape[1]}"
        )
    factors, pairs = len(levels), len(blocks) - len(levels)
    sides = np.array([basis[group == g].T @ flat[group == g] for g in range(groups)])
    squares = np.array([(flat[group == g] ** 2).sum(axis=0) for g in range(groups)])
    sizes = np.bincount(group, minlength=groups)

    def estimate(gram: Array, side: Array, square: Array, size: int) -> tuple[Array, Array]:
        inverse = np.linalg.inv(gram)
        effects = inverse @ side
        noise = np.maximum(square - (effects * side).sum(axis=0), 0) / (size - len(gram))
        found = effects**2 - np.diag(inverse)[:, None] * noise
        parts = np.array([found[b].sum(axis=0) for b in blocks] + [noise])
        return parts, parts.sum(axis=0)

    whole, variance = estimate(whole_gram, sides.sum(axis=0), squares.sum(axis=0), count)
    with np.errstate(divide="ignore", invalid="ignore"):
        scale = np.where(variance > ROUNDING**2, variance, np.nan)
        shares = whole / scale
        left_out = []
        for g in range(groups):
            keep = np.arange(groups) != g
            parts, total = estimate(
                whole_gram - grams[g],
                sides[keep].sum(axis=0),
                squares[keep].sum(axis=0),
                count - int(sizes[g]),
            )
            left_out.append(parts / np.where(total > ROUNDING**2, total, np.nan))
    spread = np.array(left_out) - np.mean(left_out, axis=0)
    error = _TWO_SIGMA * np.sqrt((groups - 1) / groups * (spread**2).sum(axis=0))
    return Parts(
        variance.reshape(shape),
        shares[:factors].reshape(factors, *shape),
        shares[factors:-1].reshape(pairs, *shape),
        shares[-1].reshape(shape),
        error.reshape(len(shares), *shape),
    )


def _basis(at: NDArray[np.int_], levels: Sequence[int], pairs: bool) -> tuple[Array, list[NDArray[np.int_]]]:
    """Orthonormal contrasts of a sample, the constant first, and which of them belong to each effect."""
    single = []
    for k, count in enumerate(levels):
        # orthonormal under equal weights: columns of mean 0 and mean square 1
        q, _ = np.linalg.qr(np.column_stack([np.ones(count), np.eye(count)[:, 1:]]))
        single.append((q[:, 1:] * np.sqrt(count))[at[:, k]])
    blocks = list(single)
    if pairs:
        for a, b in combinations(range(len(levels)), 2):
            blocks.append((single[a][:, :, None] * single[b][:, None, :]).reshape(len(at), -1))
    edges = np.cumsum([1, *(b.shape[1] for b in blocks)])
    places = [np.arange(i, j) for i, j in pairwise(edges)]
    return np.hstack([np.ones((len(at), 1)), *blocks]), places
