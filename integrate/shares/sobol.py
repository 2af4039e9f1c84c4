"""Sobol indices: which continuous parameter the spread of an answer is due to, over stated ranges."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations
from math import log2
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.composition import abundance_ratio
from steelyard.yields.errors import InputError
from steelyard.yields.units import plain

from ..plan import Plan
from ..population import Population

Array = NDArray[np.float64]
Of = Literal["yield", "log", "ratio"]

#: kinds of parameter in which yields are straight lines, and so products of straight lines in several
_LINEAR = ("number", "share", "scale")

#: parameters of an exact answer at most: all corners of the ranges are weighed
MOST_CORNERS = 12

OVER = "Fe"


@dataclass(frozen=True, eq=False)
class Sobol:
    """Sobol indices of yields.

    Attributes
    ----------
    parameters : tuple of str
    ranges : ndarray, shape (p, 2)
        Parameters are uniform and independent between these.
    species : tuple of str
    ages : ndarray, shape (t,)
        yr.
    of : {"yield", "log", "ratio"}
    exact : bool
        Whether yields are products of straight lines in the parameters, so that nothing is sampled.
    evaluations : int
        Populations weighed.
    variance : ndarray, shape (t, species)
    first, total : ndarray, shape (p, t, species)
        Share of the variance due to each parameter alone, and with all its interactions.
    pairs : ndarray, shape (p (p - 1) / 2, t, species)
        Shares of pairs beyond that, in the order of ``itertools.combinations``.
    first_error, total_error, pairs_error : ndarray
        Half widths of their intervals of 95 %; 0 where exact.
    """

    parameters: tuple[str, ...]
    ranges: Array
    species: tuple[str, ...]
    ages: Array
    of: Of
    exact: bool
    evaluations: int
    variance: Array
    first: Array
    total: Array
    pairs: Array
    first_error: Array
    total_error: Array
    pairs_error: Array


def sobol(
    population: Population,
    ranges: Mapping[str, Sequence[Any]],
    *,
    ages: Any = None,
    of: Of = "log",
    convention: str = "total",
    samples: int = 1024,
    seed: int = 0,
) -> Sobol:
    """Return the Sobol indices of a population's yields over ranges of its parameters.

    Parameters
    ----------
    population : Population
        Its `species` are what is answered for.
    ranges : mapping
        From the name of a parameter (`steelyard.integrate.plan.parameters`) to its lowest and
        highest value; between them all values are equally likely.
    ages : array_like, optional
        yr; default: the oldest of the population.
    of : {"log", "yield", "ratio"}
        Of log10 of yields, of yields themselves, or of [X/Fe] over the sources that follow both.
    convention : {"total", "net"}
    samples : int
        A power of 2; where the answer is sampled, samples x (2 p + 2) populations are weighed.
    seed : int

    Returns
    -------
    Sobol
        Exact for ``of="yield"`` where all parameters are numbers of events, shares of mixtures
        or scale factors; by the sampling of Saltelli et al. (2010, Comput. Phys. Commun. 181,
        259) elsewhere. NaN where a value isn't defined all over the ranges, or doesn't vary.

    Raises
    ------
    InputError
        A parameter or range that can't be used, or SALib isn't there when it is needed.

    Examples
    --------
    >>> from steelyard.integrate.popfile import default_population
    >>> from dataclasses import replace
    >>> stars = replace(default_population(), species=["Fe"])
    >>> found = sobol(
    ...     stars,
    ...     {"thermonuclear.number": (1e-3, 2e-3), "scale[core-collapse, Fe]": (0.5, 2.0)},
    ...     of="yield",
    ... )
    >>> found.exact, bool(abs(found.first.sum() - 1) < 1e-12)
    (True, True)
    """
    if of not in ("log", "yield", "ratio"):
        raise InputError(f"of {of!r} isn't known", mend="choose log, yield or ratio")
    if not ranges:
        raise InputError("no range is given", mend='such as {"imf.slopes[-1]": (2.1, 2.5)}')
    ages = (max(population.ages),) if ages is None else ages
    plan = Plan(population, tuple(ranges), ages, convention, by_source=of == "ratio")
    bounds = np.array(
        [
            _range(name, value, p.kind)
            for (name, value), p in zip(ranges.items(), plan.parameters, strict=True)
        ]
    )
    if of == "ratio" and OVER not in plan.species:
        raise InputError(f"[X/{OVER}] needs {OVER} among the species", mend=f"add {OVER}")
    linear = of == "yield" and all(p.kind in _LINEAR for p in plan.parameters)
    if linear and len(bounds) <= MOST_CORNERS:
        return _exact(plan, bounds)
    return _sampled(plan, bounds, of, samples, seed)


def _range(name: str, value: Sequence[Any], kind: str) -> tuple[float, float]:
    unit = {"limit": "Msun", "break": "Msun", "events_from": "Msun", "number": "1/Msun"}.get(kind, "")
    if kind == "delay" and not any(key in name for key in ("slope", "densities")):
        unit = "yr"
    if not isinstance(value, (list, tuple, np.ndarray)) or len(value) != 2:
        raise InputError(f"range of {name} needs two values", mend="give the lowest and the highest")
    low, high = (plain(v, unit, f"range of {name}") for v in value)
    if not low < high:
        raise InputError(f"range of {name}: {low:g} isn't below {high:g}", mend="write the lower one first")
    return low, high


def _exact(plan: Plan, bounds: Array) -> Sobol:
    """Yields as sums of products of straight lines: all that varies shows at the corners of the ranges."""
    count = len(bounds)
    signs = np.indices((2,) * count).reshape(count, -1).T * 2 - 1
    corners = plan.batch(np.where(signs > 0, bounds[:, 1], bounds[:, 0]))
    # a coefficient for each set of parameters; the mean square of x uniform between -1 and 1 is 1/3
    effects = [[k] for k in range(count)] + [list(pair) for pair in combinations(range(count), 2)]
    squares = np.zeros((2**count, *plan.shape))
    for number in range(1, 2**count):
        own = [k for k in range(count) if number >> k & 1]
        squares[number] = (np.tensordot(signs[:, own].prod(axis=1), corners, axes=1) / len(signs)) ** 2
        squares[number] /= 3.0 ** len(own)
    variance = squares.sum(axis=0)
    # what is left of numbers that cancel isn't a variance
    noise = (1e-14 * np.abs(corners).max(axis=0)) ** 2
    scale = np.where(variance > noise, variance, np.nan)
    single = np.array([squares[sum(1 << k for k in own)] for own in effects]) / scale
    holds = [[number >> k & 1 for number in range(2**count)] for k in range(count)]
    total = np.array([squares[np.array(h, dtype=bool)].sum(axis=0) for h in holds]) / scale
    first, pairs = single[:count], single[count:]
    zero = np.zeros_like
    return Sobol(
        plan.free, bounds, plan.species, plan.ages, "yield", True, len(signs), variance,
        first, total, pairs, zero(first), zero(total), zero(pairs),
    )  # fmt: skip


def _sampled(plan: Plan, bounds: Array, of: Of, samples: int, seed: int) -> Sobol:
    if samples < 2 or samples & (samples - 1):
        raise InputError(
            f"samples is {samples}, not a power of 2",
            mend=f"take {2 ** max(4, round(log2(max(samples, 2))))}",
        )
    try:
        from SALib.analyze.sobol import analyze
        from SALib.sample.sobol import sample
    except ImportError:
        raise InputError(
            "sampled Sobol indices need SALib", mend='install it: pip install "steelyard[sobol]"'
        ) from None
    count = len(bounds)
    problem = {"num_vars": count, "names": list(plan.free), "bounds": bounds.tolist()}
    thetas = sample(problem, samples, calc_second_order=count > 1, seed=seed)
    values = _values(plan, plan.batch(thetas), of)
    shape = values.shape[1:]
    pairs = list(combinations(range(count), 2))
    made = {
        "first": np.full((count, *shape), np.nan),
        "total": np.full((count, *shape), np.nan),
        "pairs": np.full((len(pairs), *shape), np.nan),
    }
    errors = {name: array.copy() for name, array in made.items()}
    variance = values.var(axis=0)
    for place in np.ndindex(shape):
        column = values[(slice(None), *place)]
        size = float(np.abs(column).max()) if np.isfinite(column).all() else np.nan
        # indices of what doesn't vary would be those of rounding
        if not np.ptp(column) > 1e-12 * max(size, 1.0 if of != "yield" else 0.0):
            continue
        found = analyze(problem, column, calc_second_order=count > 1, seed=seed)
        for name, key in (("first", "S1"), ("total", "ST")):
            made[name][(slice(None), *place)] = found[key]
            errors[name][(slice(None), *place)] = found[f"{key}_conf"]
        for k, pair in enumerate(pairs):
            made["pairs"][(k, *place)] = found["S2"][pair]
            errors["pairs"][(k, *place)] = found["S2_conf"][pair]
    return Sobol(
        plan.free, bounds, plan.species, plan.ages, of, False, len(thetas), variance,
        made["first"], made["total"], made["pairs"], errors["first"], errors["total"], errors["pairs"],
    )  # fmt: skip


def _values(plan: Plan, yields: Array, of: Of) -> Array:
    """What is asked of yields, shape (n, t, species); NaN where it isn't defined. Of ratios by source."""
    if of == "yield":
        return yields
    if of == "ratio":
        at, followed = plan.species.index(OVER), plan.population.prepared.followed
        out = np.full((len(yields), *yields.shape[2:]), np.nan)
        for j, name in enumerate(plan.species):
            both = followed[:, j] & followed[:, at]
            ours, iron = (yields[:, both][..., k].sum(axis=1) for k in (j, at))
            try:
                out[..., j] = abundance_ratio(ours, iron, name, OVER, plan.population.solar)
            except InputError:  # the Sun has no such species
                continue
        return out
    return np.log10(yields, out=np.full(yields.shape, np.nan), where=yields > 0)
