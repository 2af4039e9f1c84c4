"""Shares: which ingredient the spread of an answer is due to, by analysis of variance over a factorial.

The variance of a value over all combinations of choices, each counted once, is the sum of
what each ingredient does alone (main effects), what pairs of them do beyond that
(interactions), and the rest (higher interactions); see e.g. Saltelli et al. 2008, "Global
Sensitivity Analysis: The Primer", chapter 4. Over a full factorial these are exact. Of a
sampled one, main and pair effects are fitted by least squares on the sample's orthonormal
contrasts, with confidence intervals by a jackknife over groups.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError, nearest

from ..contrasting import MOST, Contrast, Design, contrast
from ..contrasting.compare import OVER
from ..contrasting.variance import decompose, decompose_sample
from ..results import Convention

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Shares:
    """What the spread of an answer over a factorial of choices is due to.

    Attributes
    ----------
    contrast : Contrast
        Over the factorial.
    ratio : bool
        Whether of [X/Fe], or of log10 of the yields.
    variance : ndarray, shape (t, species)
        dex^2; NaN where some combination has no value.
    low, high : ndarray, shape (t, species)
        Least and largest value over the combinations: dex against the base, or [X/Fe].
    main : ndarray, shape (factors, t, species)
    pairs : ndarray, shape (pairs, t, species)
        NaN where a sample is too small to tell them from `higher`.
    higher : ndarray, shape (t, species)
    error : ndarray, shape (factors + pairs + 1, t, species), optional
        As in `Parts`.
    left_out : mapping
        Of each species, the choices that don't follow it, by ingredient: shares are over the others.
    """

    contrast: Contrast
    ratio: bool
    variance: Array
    low: Array
    high: Array
    main: Array
    pairs: Array
    higher: Array
    error: Array | None
    left_out: dict[str, dict[str, list[str]]]

    @property
    def factors(self) -> tuple[str, ...]:
        """Names of the ingredients."""
        return tuple(f.name for f in self.contrast.design.factors)

    @property
    def names(self) -> tuple[str, ...]:
        """Names of all parts: ingredients, pairs, higher."""
        pairs = [f"{a} x {b}" for a, b in combinations(self.factors, 2)]
        return (*self.factors, *pairs, "higher")

    @property
    def parts(self) -> Array:
        """All shares in the order of `names`, shape (parts, t, species); those that are told sum to 1."""
        return np.concatenate([self.main, self.pairs, self.higher[None]])

    def get(self, species: str, part: str) -> Array:
        """Return one share over time.

        Parameters
        ----------
        species : str
        part : str
            One of `names`.

        Returns
        -------
        ndarray, shape (t,)

        Raises
        ------
        InputError
            There is no such species or part.
        """
        if part not in self.names:
            raise InputError(f"part {part!r} isn't known", mend=nearest(part, self.names))
        return self.parts[self.names.index(part)][:, self.contrast.position(species)]

    def to_dict(self) -> dict[str, Any]:
        """Return everything as plain values, in the layout of ``steelyard contrast --full --json``."""
        species = self.contrast.species

        def table(values: Array) -> dict[str, list[float | None]]:
            return {
                s: [float(v) if np.isfinite(v) else None for v in values[:, j]] for j, s in enumerate(species)
            }

        named = dict(zip(self.names, self.parts, strict=True))
        errors = {} if self.error is None else dict(zip(self.names, self.error, strict=True))
        return {
            "of": "[X/Fe]" if self.ratio else "log10 of yields",
            "exact": self.error is None,
            "variance": table(self.variance),
            "low": table(self.low),
            "high": table(self.high),
            "shares": {name: table(values) for name, values in named.items()},
            "error": {name: table(values) for name, values in errors.items()},
            "left_out": self.left_out,
        }


def shares(
    made: Design | Contrast,
    ratio: bool = False,
    *,
    convention: Convention = "total",
    most: int = MOST,
    seed: int = 0,
    progress: Callable[[Iterable[Any]], Iterable[Any]] = iter,
) -> Shares:
    """Divide the variance of log10 yields, or of [X/Fe], among the ingredients of a factorial.

    Parameters
    ----------
    made : Design or Contrast
        A contrast must be over the full factorial, or a sample of it.
    ratio : bool
        Of [X/Fe] instead of log10 of yields.
    convention, most, seed, progress
        As `contrast` takes them, where a design is given.

    Returns
    -------
    Shares
        Exact where the factorial is whole. A choice that doesn't follow a species is left
        out for it, and said in `left_out`.

    Raises
    ------
    InputError
        The contrast swaps one ingredient at a time.

    Notes
    -----
    Every combination counts once: shares depend on which choices are offered, and two near
    copies of one table make the spread of their ingredient smaller.

    Examples
    --------
    >>> from steelyard.integrate.contrasting import design
    >>> from steelyard.integrate.popfile import default_population
    >>> swaps = {"imf": "salpeter-1955", "thermonuclear": "iwamoto-1999-WDD2"}
    >>> found = shares(design(default_population(), swaps, species=["Mn"]), ratio=True)
    >>> found.names
    ('imf', 'thermonuclear', 'imf x thermonuclear', 'higher')
    >>> float(abs(found.parts.sum(axis=0) - 1).max()) < 1e-12
    True
    """
    if isinstance(made, Design):
        made = contrast(made, full=True, convention=convention, most=most, seed=seed, progress=progress)
    if not made.full:
        raise InputError("shares need all combinations of the choices", mend="contrast with full=True")
    values = made.values(ratio)
    levels = made.design.levels
    ages, species = values.shape[1:]
    pairs = len(levels) * (len(levels) - 1) // 2
    names = made.species
    out: dict[str, Any] = {
        "variance": np.full((ages, species), np.nan),
        "low": np.full((ages, species), np.nan),
        "high": np.full((ages, species), np.nan),
        "main": np.full((len(levels), ages, species), np.nan),
        "pairs": np.full((pairs, ages, species), np.nan),
        "higher": np.full((ages, species), np.nan),
    }
    error = np.full((len(levels) + pairs + 1, ages, species), np.nan) if made.sampled else None
    left_out: dict[str, dict[str, list[str]]] = {}
    for j, name in enumerate(names):
        if ratio and name == OVER:
            continue
        keep = _kept(made, j, ratio)
        gone = {
            f.name: [label for label, has in zip(f.labels, kept, strict=True) if not has]
            for f, kept in zip(made.design.factors, keep, strict=True)
            if not kept.all()
        }
        if gone:
            left_out[name] = gone
        rows = np.all([kept[made.at[:, k]] for k, kept in enumerate(keep)], axis=0)
        here = values[rows][..., j]
        good = np.isfinite(here).all(axis=0) & (len(here) > 1)
        if not good.any():
            continue
        counts = [int(kept.sum()) for kept in keep]
        if made.sampled:
            moved = np.stack([(np.cumsum(k) - 1)[made.at[rows, i]] for i, k in enumerate(keep)], axis=1)
            parts = decompose_sample(moved, counts, here[:, good])
        else:
            parts = decompose(here[:, good].reshape(*counts, -1), len(counts))
        out["low"][good, j], out["high"][good, j] = here[:, good].min(axis=0), here[:, good].max(axis=0)
        out["variance"][good, j] = parts.variance
        out["main"][:, good, j] = parts.main
        out["higher"][good, j] = parts.higher
        told = len(parts.pairs) > 0
        if told:
            out["pairs"][:, good, j] = parts.pairs
        if error is not None and parts.error is not None:
            where = np.array([*range(len(levels)), *(range(len(levels), len(error) - 1) if told else ()), -1])
            error[np.ix_(where, np.flatnonzero(good), [j])] = parts.error[..., None]
    return Shares(made, ratio, error=error, left_out=left_out, **out)


def _kept(made: Contrast, species: int, ratio: bool) -> list[NDArray[np.bool_]]:
    """Of each factor, which choices follow a species as the base does: at least that of the base."""
    marks = (made.ratio_marks if ratio else made.marks)[:, :, species]
    lacks = np.isin(marks, [1, 2]).any(axis=1)
    out = []
    for k, count in enumerate(made.design.levels):
        # where every combination with a choice lacks the species, the choice is what lacks it
        has = [not lacks[made.at[:, k] == level].all() for level in range(count)]
        out.append(np.array(has))
    return out
