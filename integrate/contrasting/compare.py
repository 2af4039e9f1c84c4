"""Contrast: how far each choice of tables and laws moves the yields of a population, in dex."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.composition import abundance_ratio
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.nuclides import parse

from ..population import Population
from ..results import Convention, PopulationYields
from .design import Design, design, served
from .footing import notes
from .weighing import WHOLLY, followed_by_any, weigh_all

if TYPE_CHECKING:
    import pandas as pd

Array = NDArray[np.float64]

#: why there is no number, in place of one
MARKS = ("", "lacks", "base lacks", "+ to -", "- to +", "zero", "from zero")
_LACKS, _BASE_LACKS, _FALLS, _RISES, _ZERO, _FROM_ZERO = range(1, len(MARKS))

#: populations that are weighed at most; a larger factorial is sampled
MOST = 10_000

OVER = "Fe"

_OTHER = {"total": "net", "net": "total"}


@dataclass(frozen=True, eq=False)
class Contrast:
    """Yields of populations that differ in their ingredients, against a base.

    Attributes
    ----------
    design : Design
    at : ndarray of int, shape (n, factors)
        Which choice of each factor; the base, all zeros, is the first.
    sampled : bool
        Whether `at` is a sample of a factorial that is too large to weigh whole.
    full : bool
        Whether choices are combined, or swapped one at a time.
    convention : {"total", "net"}
    yields : ndarray, shape (n, t, species)
        Sum over sources, Msun per Msun formed.
    dex : ndarray, shape (n, t, species)
        log10 of each yield over that of the base; NaN where there is no such number.
    marks : ndarray of int, shape (n, t, species)
        Why there is none: positions in `MARKS`.
    ratio : ndarray, shape (n, t, species)
        [X/Fe] of the ejecta over the sources that follow both elements, dex; NaN where
        those sources aren't the ones of the base, or a yield isn't positive.
    ratio_marks : ndarray of int, shape (n, t, species)
    followed : ndarray of bool, shape (sources, species)
        In the base: False where a source doesn't follow a species.
    ratio_sources : mapping
        The sources over which the [X/Fe] of each species is taken.
    base : PopulationYields
        The base as it is weighed at the same ages.
    ranges : mapping
        Of each source of stars, by what is swapped: the masses that its sets serve.
    notes : tuple of str
        What the choices cover differently.
    """

    design: Design
    at: NDArray[np.int_]
    sampled: bool
    full: bool
    convention: Convention
    yields: Array
    dex: Array
    marks: NDArray[np.int_]
    ratio: Array
    ratio_marks: NDArray[np.int_]
    followed: NDArray[np.bool_]
    ratio_sources: Mapping[str, tuple[str, ...]]
    base: PopulationYields
    ranges: Mapping[str, Mapping[str, list[tuple[float, float, str]]]]
    notes: tuple[str, ...]

    @property
    def species(self) -> tuple[str, ...]:
        """What is compared."""
        return self.design.species

    @property
    def ages(self) -> Array:
        """Ages, shape (t,), yr."""
        return np.array(self.design.ages)

    @property
    def labels(self) -> list[dict[str, str]]:
        """What differs from the base in each row, by ingredient."""
        return [self.design.labels(row) for row in self.at.tolist()]

    @property
    def lacking(self) -> dict[str, list[str]]:
        """Species that each source of the base doesn't follow, so that sums are without it."""
        return {
            source: [s for s, has in zip(self.species, row, strict=True) if not has]
            for source, row in zip(self.base.sources, self.followed, strict=True)
            if not row.all()
        }

    def values(self, ratio: bool = False) -> Array:
        """Return what is spread over the choices, shape (n, t, species): dex against the base, or [X/Fe]."""
        return self.ratio if ratio else self.dex

    def range(self, ratio: bool = False) -> Array:
        """Return the largest less the smallest value over base and choices, shape (t, species), dex."""
        values = self.values(ratio)
        return _over(values, np.max) - _over(values, np.min)

    def deviation(self, ratio: bool = False) -> Array:
        """Return the standard deviation over base and choices, shape (t, species), dex."""
        return _over(self.values(ratio), np.std)

    def by_factor(self, name: str) -> NDArray[np.int_]:
        """Return the rows in which at most this factor is swapped, the base first.

        Raises
        ------
        InputError
            Nothing of that name is swapped.
        """
        names = [f.name for f in self.design.factors]
        if name not in names:
            raise InputError(f"{name!r} isn't swapped", mend=nearest(name, names))
        others = np.delete(self.at, names.index(name), axis=1)
        return np.flatnonzero(~others.any(axis=1))

    def position(self, species: str) -> int:
        """Return where a species stands along the last axis.

        Raises
        ------
        InputError
            It isn't compared.
        """
        name = parse(species).name
        if name not in self.species:
            raise InputError(f"species {species!r} isn't compared", mend=nearest(name, self.species))
        return self.species.index(name)

    def to_pandas(self) -> pd.DataFrame:
        """Return a row for each age, population and species.

        Returns
        -------
        pandas.DataFrame
            Columns age_yr, one for each ingredient, species, base and yield (Msun per Msun
            formed), dex, mark, ratio ([X/Fe], dex).
        """
        import pandas as pd

        rows, ages, species = self.yields.shape
        n, t, s = (a.ravel() for a in np.indices((rows, ages, species)))
        frame = pd.DataFrame({"age_yr": self.ages[t]})
        for k, factor in enumerate(self.design.factors):
            frame[factor.name] = np.array(factor.labels)[self.at[n, k]]
        frame["species"] = np.array(self.species)[s]
        frame["base"] = self.yields[0][t, s]
        frame["yield"] = self.yields[n, t, s]
        frame["dex"] = self.dex[n, t, s]
        frame["mark"] = np.array(MARKS)[self.marks[n, t, s]]
        frame["ratio"] = self.ratio[n, t, s]
        return frame.sort_values(["age_yr"], kind="stable", ignore_index=True)

    def to_dict(self) -> dict[str, Any]:
        """Return everything as plain values, in the layout of ``steelyard contrast --json``."""

        def table(values: Array) -> dict[str, list[Any]]:
            return {s: _plain(values[:, j]) for j, s in enumerate(self.species)}

        def words(codes: NDArray[np.int_]) -> dict[str, list[str]]:
            found = np.array(MARKS)[codes]
            return {s: found[:, j].tolist() for j, s in enumerate(self.species) if found[:, j].any()}

        return {
            "convention": self.convention,
            "ages_yr": self.ages.tolist(),
            "species": list(self.species),
            "full": self.full,
            "sampled": self.sampled,
            "factors": {f.name: list(f.labels) for f in self.design.factors},
            "base": {"yield": table(self.yields[0]), "ratio": table(self.ratio[0]), "lacking": self.lacking},
            "choices": [
                {
                    "swapped": self.labels[i],
                    "yield": table(self.yields[i]),
                    "dex": table(self.dex[i]),
                    "mark": words(self.marks[i]),
                    "ratio": table(self.ratio[i]),
                }
                for i in range(1, len(self.at))
            ],
            "range": {"dex": table(self.range()), "ratio": table(self.range(True))},
            "deviation": {"dex": table(self.deviation()), "ratio": table(self.deviation(True))},
            "ratio_sources": {s: list(sources) for s, sources in self.ratio_sources.items()},
            "served": {
                kind: {label: [[lo, hi, id] for lo, hi, id in ranges] for label, ranges in by_label.items()}
                for kind, by_label in self.ranges.items()
            },
            "notes": list(self.notes),
        }


def contrast(
    population: Population | Design,
    swaps: Mapping[str, Any] | None = None,
    *,
    ages: Any = None,
    species: Sequence[str] | str | None = None,
    convention: Convention = "total",
    full: bool = False,
    common_range: bool = False,
    most: int = MOST,
    seed: int = 0,
    progress: Callable[[Iterable[Any]], Iterable[Any]] = iter,
) -> Contrast:
    """Swap ingredients of a population and compare what comes out.

    Parameters
    ----------
    population : Population or Design
        The base; or a design, which holds swaps, ages, species and the common range already.
    swaps, ages, species, common_range
        As `design` takes them.
    convention : {"total", "net"}
    full : bool
        All combinations of the choices, instead of one swap at a time.
    most : int
        Combinations that are weighed at most; of a larger factorial that many are drawn at random.
    seed : int
        Of the draw.
    progress : callable
        Wrapped around the loop over combinations.

    Returns
    -------
    Contrast

    Raises
    ------
    InputError
        A choice that can't be used, or nothing to compare.

    Examples
    --------
    >>> from steelyard.integrate.popfile import default_population
    >>> found = contrast(default_population(), {"imf": ["salpeter-1955", "kroupa-1993"]}, species=["O"])
    >>> found.dex.shape
    (3, 1, 1)
    >>> bool(found.dex[2, 0, 0] < found.dex[1, 0, 0] < 0)
    True
    """
    if convention not in ("total", "net"):
        raise InputError(f"convention {convention!r} isn't known", mend="choose total or net")
    if isinstance(population, Design):
        made = population
    else:
        made = design(population, swaps or {}, ages, species, common_range)
    sampled = full and made.size > most
    if most < 2:
        raise InputError(f"most is {most}", mend="give 2 or more")
    at = made.one_at_a_time if not full else made.sample(most, seed) if sampled else made.full()
    names = made.species if OVER in made.species else (*made.species, OVER)
    found = weigh_all(made, at, convention, names, progress)
    count = len(made.species)
    yields, coverage = found.yields[..., :count], found.coverage[..., :count]
    total = yields.sum(axis=1)
    dex, marks = _dex(total, coverage)
    iron = names.index(OVER)
    masks = (coverage == WHOLLY) & (found.coverage[..., iron, None] == WHOLLY)
    numerator = np.einsum("nkts,nks->nts", yields, masks)
    denominator = np.einsum("nkt,nks->nts", found.yields[..., iron], masks)
    solar = [made.population(row).solar for row in at.tolist()] if _swaps_solar(made) else None
    ratio, ratio_marks = _ratio(made, numerator, denominator, masks, solar)
    populations = [made.population(row) for row in made.one_at_a_time]
    return Contrast(
        made,
        at,
        sampled,
        full,
        convention,
        total,
        dex,
        marks,
        ratio,
        ratio_marks,
        coverage[0] == WHOLLY,
        {
            s: tuple(k for k, has in zip(made.base.kinds, masks[0, :, j], strict=True) if has)
            for j, s in enumerate(made.species)
        },
        populations[0].weigh(made.ages),
        _ranges(made, populations),
        tuple(
            note
            for note in notes(made, [_narrowed(p, names) for p in populations])
            if f"{_OTHER[convention]} yields derived" not in note
        ),
    )


def _narrowed(population: Population, names: Sequence[str]) -> Population:
    """A population that tells only of species that are compared."""
    have = followed_by_any(population.sources, names, population.solar)
    return replace(population, species=[names[j] for j in have]) if have else population


def _swaps_solar(made: Design) -> bool:
    return any(f.name == "solar" for f in made.factors)


def _dex(total: Array, coverage: NDArray[np.int_]) -> tuple[Array, NDArray[np.int_]]:
    """log10 against the base, and the marks where there is none."""
    base = total[:1]
    marks = np.zeros(total.shape, dtype=int)
    marks[(base == 0) & (total != 0)] = _FROM_ZERO
    marks[(total == 0) & (base != 0)] = _ZERO
    marks[(base == 0) & (total == 0)] = _ZERO
    marks[(base > 0) & (total < 0)] = _FALLS
    marks[(base < 0) & (total > 0)] = _RISES
    lacks = np.broadcast_to(_lacks(coverage), marks.shape)
    marks = np.where(lacks > 0, lacks, marks)
    with np.errstate(divide="ignore", invalid="ignore"):
        dex = np.log10(total / base)
    return np.where(marks > 0, np.nan, dex), marks


def _lacks(coverage: NDArray[np.int_]) -> NDArray[np.int_]:
    """Marks where sources follow a species otherwise than in the base, shape (n, 1, species)."""
    base = coverage[:1]
    codes = np.where((coverage > base).any(axis=1), _BASE_LACKS, 0)
    codes = np.where((coverage < base).any(axis=1), _LACKS, codes)
    # what no source of base and choice follows can't be compared either
    codes = np.where(~coverage.any(axis=1), _LACKS, codes)
    return codes[:, None]


def _ratio(
    made: Design, a: Array, b: Array, masks: NDArray[np.bool_], solar: list[str] | None
) -> tuple[Array, NDArray[np.int_]]:
    """[X/Fe], and the marks where there is none."""
    out = np.full(a.shape, np.nan)
    scales = np.array(solar if solar is not None else [made.base.solar] * len(a))
    for scale in dict.fromkeys(scales.tolist()):
        rows = scales == scale
        for j, name in enumerate(made.species):
            try:
                out[rows, :, j] = abundance_ratio(a[rows, :, j], b[rows, :, j], name, OVER, scale)
            except InputError:  # the Sun has no such species
                continue
    codes = np.broadcast_to(_lacks(masks.astype(int)), out.shape).copy()
    codes[(codes == 0) & np.isnan(out)] = _ZERO
    return np.where(codes > 0, np.nan, out), codes


def _ranges(
    made: Design, populations: Sequence[Population]
) -> dict[str, dict[str, list[tuple[float, float, str]]]]:
    """The masses that the sets of each source serve, by what is swapped in it."""
    out: dict[str, dict[str, list[tuple[float, float, str]]]] = {}
    for at, population in zip(made.one_at_a_time.tolist(), populations, strict=True):
        for kind, ranges in served(population).items():
            label = ", ".join(made.labels(at).values()) or "base"
            by_label = out.setdefault(kind, {})
            if ranges not in by_label.values():
                by_label[label] = ranges
    return out


def _over(values: Array, reduce: Callable[..., Any]) -> Array:
    """Reduce over the populations that have a number; NaN where only one has."""
    out = np.full(values.shape[1:], np.nan)
    for place in np.ndindex(out.shape):
        column = values[(slice(None), *place)]
        column = column[np.isfinite(column)]
        if len(column) > 1:
            out[place] = reduce(column)
    return out


def _plain(values: Array) -> list[float | None]:
    return [float(v) if np.isfinite(v) else None for v in values]
