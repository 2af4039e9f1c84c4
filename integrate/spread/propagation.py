"""Stated errors of published yields, carried through to the yields of a population.

An error is a lognormal factor on what a paper prints for a model, its median 1. In dex it is
sigma times a standard normal z; over the models of a set and the elements it covers, z has
the correlation

    corr(z of model k and element i, z of model l and element j)
        = rho_ij (c + (1 - c) exp(-|log10 m_k - log10 m_l| / L)),

with a common mode c, a correlation length L and a correlation between elements rho. It
doesn't depend on metallicity: two metallicities' models of one mass err together, so errors
don't shrink where a population lies between two metallicities of a set. Different sets, and
different entries of one set, err independently. A yield is linear in the factors, with the
contributions of `nodes` as coefficients, so its mean and covariance are closed form:

    cov(E_i, E_j) = sum_kl a_ki a_lj exp((s_i^2 + s_j^2) / 2) (exp(s_i s_j corr) - 1),

s = sigma ln 10 (the covariance of lognormals; any textbook of probability). A printed net
yield that is negative keeps its sign. What returns at birth composition has no error, so
errors and their covariance are the same for total and net yields. Errors of elements don't
conserve the mass of a star.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError, nearest
from steelyard.yields.nuclides import parse

from ..leverage.nodes import nodes, positions
from ..population import Population
from ..results import Convention, PopulationYields
from .stated import StatedError

Array = NDArray[np.float64]

#: dex, of `assumed`
ASSUMED = {"sigma": 0.15, "correlation_length": 0.1, "common": 0.5, "between": 0.0}

#: draws at a time: what is drawn doesn't depend on memory
_BLOCK = 1024


@dataclass(frozen=True)
class Spread:
    """All errors that a user states.

    Attributes
    ----------
    errors : sequence of StatedError

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O", "Fe"])
    >>> stated = Spread([StatedError(0.15, set="kobayashi-2006")])
    >>> found = stated.propagate(stars.weigh(["1 Gyr"]))
    >>> found.covariance.shape
    (1, 2, 2)
    >>> float((found.get("O") / stars.weigh(["1 Gyr"]).get("O"))[0].round(3))
    0.308
    """

    errors: Sequence[StatedError]

    def __post_init__(self) -> None:
        object.__setattr__(self, "errors", tuple(self.errors))
        if not self.errors:
            raise InputError("no error is stated", mend="add [[spread]] with set, elements and sigma")

    def propagate(self, result: PopulationYields) -> YieldErrors:
        """Carry the errors through to a result.

        Parameters
        ----------
        result : PopulationYields

        Returns
        -------
        YieldErrors

        Raises
        ------
        InputError
            An error is of a set, source or element that the population hasn't, or two
            errors cover the same.

        Notes
        -----
        Exact with lines between models. With cubics, first order in the factors.
        """
        found = nodes(result.population)
        whole = found.at(result.ages).contribution
        symbols = [parse(s).symbol for s in result.species]
        terms = []
        for error, set_ in self._assigned(result.population):
            models = [
                k for k, m in enumerate(found.models) if m.set == set_ and error.source in ("", m.source)
            ]
            columns = [i for i, s in enumerate(symbols) if error.covers(s)]
            part = whole[:, :, models][..., columns]
            if part.any():
                kappa = error.model_correlation([found.models[k] for k in models])
                rho = error.element_correlation([symbols[i] for i in columns])
                terms.append(_Term(error.sigma * np.log(10), part, np.array(columns), kappa, rho))
        return YieldErrors(self, result, tuple(terms))

    def _assigned(self, population: Population) -> list[tuple[StatedError, str]]:
        """Each error with each set that it is of."""
        out: list[tuple[StatedError, str]] = []
        grids = {
            (s.kind, g.id): g for s in population.sources for e in s.sets for g in e.load(population.solar)
        }
        taken: dict[tuple[str, str, str], StatedError] = {}
        for error in self.errors:
            if error.source and error.source not in population.kinds:
                raise InputError(
                    "the population has no such source",
                    where=error.where,
                    mend=nearest(error.source, population.kinds),
                )
            mine = {k: g for k, g in grids.items() if k[1] == error.set or k[0] == error.source}
            if not mine:
                ids = sorted({id for _, id in grids})
                raise InputError(
                    "the population has no such set", where=error.where, mend=nearest(error.set, ids)
                )
            followed = {p.symbol for g in mine.values() for p in g.parsed}
            unknown = [] if isinstance(error.elements, str) else sorted({*error.elements} - followed)
            if unknown:
                raise InputError(
                    f"{', '.join(unknown)} isn't followed", where=error.where, mend="leave it out of elements"
                )
            for kind, id in mine:
                for symbol in sorted(followed):
                    if error.covers(symbol) and (kind, id, symbol) in taken:
                        raise InputError(
                            f"{symbol} of {id} has an error already: {taken[kind, id, symbol].where}",
                            where=error.where,
                            mend="state each error once",
                        )
                    if error.covers(symbol):
                        taken[kind, id, symbol] = error
            out += [(error, id) for id in dict.fromkeys(id for _, id in mine)]
        return out

    def to_toml(self) -> str:
        """Return the errors as a file of ``[[spread]]`` tables."""
        import tomli_w

        return tomli_w.dumps({"spread": [one.to_dict() for one in self.errors]})


@dataclass(frozen=True, eq=False)
class _Term:
    """One error on one set: s, contributions (sources, t, k, columns), and correlations."""

    s: float
    part: Array
    columns: NDArray[np.int_]
    kappa: Array
    rho: Array


@dataclass(frozen=True, eq=False)
class YieldErrors:
    """Errors of a population's yields, the same for total and net yields.

    Attributes
    ----------
    spread : Spread
        What was stated.
    result : PopulationYields
        The yields that the errors are of.
    """

    spread: Spread
    result: PopulationYields
    _terms: tuple[_Term, ...]

    @cached_property
    def covariance(self) -> Array:
        """Covariance of the yields of all sources, shape (t, species, species), (Msun per Msun formed)^2."""
        return self._covariance(None)

    def _covariance(self, source: int | None) -> Array:
        n = len(self.result.species)
        out = np.zeros((len(self.result.ages), n, n))
        for term in self._terms:
            part = term.part.sum(axis=0) if source is None else term.part[source]
            block = np.zeros((len(part), len(term.columns), len(term.columns)))
            for value in np.unique(term.rho):
                g = np.exp(term.s**2) * np.expm1(term.s**2 * value * term.kappa)
                block += (term.rho == value) * (part.transpose(0, 2, 1) @ (g @ part))
            out[:, term.columns[:, None], term.columns] += 0.5 * (block + block.transpose(0, 2, 1))
        return out

    @cached_property
    def by_source(self) -> Array:
        """Standard deviations of each source's yields, shape (sources, t, species), Msun per Msun formed."""
        out = np.zeros((len(self.result.sources), len(self.result.ages), len(self.result.species)))
        for term in self._terms:
            g = np.exp(term.s**2) * np.expm1(term.s**2 * term.kappa)
            out[..., term.columns] += (term.part * (g @ term.part)).sum(axis=-2)
        return np.sqrt(out.clip(min=0.0))

    @cached_property
    def shift(self) -> Array:
        """Mean of the yields less the yields themselves, shape (t, species), Msun per Msun formed.

        The printed figures are the medians of the lognormals; their means are larger.
        """
        out = np.zeros((len(self.result.ages), len(self.result.species)))
        for term in self._terms:
            out[:, term.columns] += np.expm1(0.5 * term.s**2) * term.part.sum(axis=(0, 2))
        return out

    def get(self, species: str, source: str | None = None) -> Array:
        """Return the standard deviation of a yield, shape (t,), Msun per Msun formed.

        Parameters
        ----------
        species : str
            One of the result's, or an element of which nuclides were weighed (their sum).
        source : str, optional
            Default: of the sum over sources.

        Raises
        ------
        InputError
            The species or source isn't in the result.
        """
        at = positions(self.result.species, species)
        if source is None:
            covariance = self.covariance
        elif source not in self.result.sources:
            mend = nearest(source, self.result.sources)
            raise InputError(f"source {source!r} isn't in the result", mend=mend)
        elif len(at) == 1:
            return self.by_source[self.result.sources.index(source), :, at[0]]
        else:
            covariance = self._covariance(self.result.sources.index(source))
        return np.sqrt(covariance[:, at][:, :, at].sum(axis=(1, 2)).clip(min=0.0))

    def ratio(self, a: str, b: str, convention: Convention = "total") -> Array:
        """Return the standard deviation of [a/b] of the ejecta of all sources.

        That of two lognormals with the mean and covariance of the two yields (after Fenton 1960,
        IRE Trans. Commun. Syst. 8, 57, from memory); for small errors it is the delta method's.

        Parameters
        ----------
        a, b : str
        convention : {"total", "net"}

        Returns
        -------
        ndarray, shape (t,)
            dex; NaN where a mean yield isn't positive. Against sampling it is within some 3 % for
            errors of 0.15 dex, and some 10 % too large for 0.3 dex.
        """
        species, c = self.result.species, self.covariance
        at = [positions(species, name) for name in (a, b)]
        mean = []
        for name, columns in zip((a, b), at, strict=True):
            whole = self.result.get(name, None, convention) + self.shift[:, columns].sum(axis=1)
            mean.append(np.where(whole > 0, whole, np.nan))

        def in_log(i: int, j: int) -> Array:
            shared = c[:, at[i]][:, :, at[j]].sum(axis=(1, 2)) / (mean[i] * mean[j])
            return np.log1p(np.where(shared > -1, shared, np.nan))

        variance = in_log(0, 0) + in_log(1, 1) - 2 * in_log(0, 1)
        # a/a leaves a rounding error
        return np.sqrt(variance.clip(min=0.0)) / np.log(10)

    def draw(self, count: int, seed: int = 0) -> Array:
        """Draw yields with errors, for what mean and covariance don't tell, such as quantiles.

        Parameters
        ----------
        count : int
        seed : int
            Of 0 or more. With one seed, fewer draws are the first of more.

        Returns
        -------
        ndarray, shape (count, t, species)
            What is to be added to the total or net yields of all sources, Msun per Msun formed.
        """
        out = np.zeros((count, len(self.result.ages), len(self.result.species)))
        for number, term in enumerate(self._terms):
            random = np.random.default_rng([seed, number])
            symbols = [parse(self.result.species[i]).symbol for i in term.columns]
            names, at, of = np.unique(symbols, return_index=True, return_inverse=True)
            by_model, by_element = _root(term.kappa), _root(term.rho[np.ix_(at, at)])
            part = term.part.sum(axis=0)
            for first in range(0, count, _BLOCK):
                normal = random.standard_normal((min(_BLOCK, count - first), len(by_model), len(names)))
                z = (by_model @ normal @ by_element.T)[..., of]
                rows = slice(first, first + len(normal))
                out[rows, :, term.columns] += np.einsum(
                    "nki,tki->nti", np.expm1(term.s * z), part, optimize=True
                )
        return out

    def to_dict(self) -> dict[str, Any]:
        """Return the errors as plain lists, as ``steelyard weigh --spread --json`` prints them."""
        result = self.result
        deviation = np.sqrt(np.einsum("tii->ti", self.covariance).clip(min=0.0))

        def table(values: Array) -> dict[str, list[float]]:
            return {s: values[:, i].tolist() for i, s in enumerate(result.species)}

        return {
            "stated": [one.to_dict() for one in self.spread.errors],
            "standard_deviation": {
                **{source: table(self.by_source[i]) for i, source in enumerate(result.sources)},
                "sum": table(deviation),
            },
            "mean_shift": table(self.shift),
            "covariance": self.covariance.tolist(),
        }


def assumed(population: Population) -> Spread:
    """Return errors for a user who has none to state: an assumption, published by nobody.

    0.15 dex on every metal of every set, half of the variance common to all models of a set, the
    rest correlated over 0.1 dex of initial mass, elements independent of each other.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> assumed(Population(0.02, [StellarSource("agb", ["karakas-2010"])])).errors[0].sigma
    0.15
    """
    return Spread([StatedError(source=kind, elements="metals", **ASSUMED) for kind in population.kinds])


def _root(correlation: Array) -> Array:
    """A matrix R with R R^T = correlation, which may be singular."""
    values, vectors = np.linalg.eigh(correlation)
    return vectors * np.sqrt(values.clip(min=0.0))
