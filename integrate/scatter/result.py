"""Populations drawn: what each has ejected, and their statistics beside the exact law."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.composition import abundance_ratio
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.nuclides import parse

from .law import ScatterLaw

if TYPE_CHECKING:
    from ..population import Population

Array = NDArray[np.float64]

#: cumulative probabilities of the quantiles told: the median, one and two sigma of a Gaussian
LEVELS = (0.025, 0.16, 0.5, 0.84, 0.975)


@dataclass(frozen=True, eq=False)
class ScatteredYields:
    """Populations of finite mass, drawn star by star.

    Attributes
    ----------
    population : Population
    mass : float
        Nominal mass of each, Msun.
    count, seed : int
    mode : {"poisson", "number", "mass"}
    convention : {"total", "net"}
    ages : ndarray, shape (t,)
        yr, increasing.
    species, sources : tuple of str
    yields : ndarray, shape (n, sources, t, species)
        What each population has ejected up to each age, Msun.
    ejected : ndarray, shape (n, sources, t)
        All mass ejected, Msun.
    remnants : ndarray, shape (n, t)
        Msun.
    living : ndarray, shape (n, t), or None
        Mass of stars alive, Msun; None where survivors weren't drawn, as `born` and `stars`.
        Always: living + remnants + ejected = born.
    born, stars : ndarray, shape (n,), or None
        Mass, Msun, and number of the stars drawn.
    event_kinds : tuple of str
    events : ndarray, shape (n, t, kinds)
        Numbers of events up to each age.
    law : ScatterLaw
        The exact mean, covariance and third cumulant of what is drawn.
    notes : tuple of str
    """

    population: Population
    mass: float
    count: int
    seed: int
    mode: str
    convention: str
    ages: Array
    species: tuple[str, ...]
    sources: tuple[str, ...]
    yields: Array
    ejected: Array
    remnants: Array
    living: Array | None
    born: Array | None
    stars: Array | None
    event_kinds: tuple[str, ...]
    events: Array
    law: ScatterLaw
    notes: tuple[str, ...]

    def get(self, species: str, source: str | None = None) -> Array:
        """Return what each population has ejected of a species.

        Parameters
        ----------
        species : str
            One of `species`.
        source : str, optional
            One of `sources`; default: all together.

        Returns
        -------
        ndarray, shape (n, t)
            Msun.

        Raises
        ------
        InputError
            The species or source isn't there.
        """
        name = parse(species).name
        if name not in self.species:
            raise InputError(f"species {species!r} isn't in the result", mend=nearest(name, self.species))
        values = self.yields[..., self.species.index(name)]
        if source is None:
            return values.sum(axis=1)
        if source not in self.sources:
            raise InputError(f"source {source!r} isn't in the result", mend=nearest(source, self.sources))
        return values[:, self.sources.index(source)]

    def ratio(self, a: str, b: str, source: str | None = None) -> Array:
        """Return [a/b] of the ejecta of each population.

        Parameters
        ----------
        a, b : str
            Two of `species`.
        source : str, optional

        Returns
        -------
        ndarray, shape (n, t)
            dex; NaN where a population has ejected nothing of one of them.
        """
        return abundance_ratio(self.get(a, source), self.get(b, source), a, b, self.population.solar)

    def sample_mean(self) -> Array:
        """Return the mean of the populations drawn, shape (t, species), Msun."""
        return np.stack([self.get(s).mean(axis=0) for s in self.species], axis=-1)

    def sample_covariance(self) -> Array:
        """Return the covariance of the populations drawn, shape (t, species, species), Msun squared.

        Raises
        ------
        InputError
            There is one population only.
        """
        if self.count < 2:
            raise InputError("one population has no covariance", mend="draw two at least")
        out = np.empty((len(self.ages), len(self.species), len(self.species)))
        for t in range(len(self.ages)):
            apart = self.yields[:, :, t].sum(axis=1)
            apart = apart - apart.mean(axis=0)
            out[t] = apart.T @ apart / (self.count - 1)
        return out

    def quantiles(self, levels: Sequence[float] = LEVELS) -> Array:
        """Return quantiles of the populations drawn.

        Parameters
        ----------
        levels : sequence of float
            Cumulative probabilities.

        Returns
        -------
        ndarray, shape (levels, t, species)
            Msun.
        """
        out = np.empty((len(levels), len(self.ages), len(self.species)))
        for i, species in enumerate(self.species):
            out[:, :, i] = np.quantile(self.get(species), levels, axis=0)
        return out

    def to_dict(self) -> dict[str, Any]:
        """Return the statistics as plain lists, in the layout of ``steelyard scatter --json``."""

        def table(values: Any) -> dict[str, list[Any]]:
            return {s: values[:, i].tolist() for i, s in enumerate(self.species)}

        law = self.law
        several = self.count > 1
        deviation = np.sqrt(np.einsum("tii->ti", self.sample_covariance())) if several else None
        sample: dict[str, Any] = {"mean": table(self.sample_mean())}
        if deviation is not None:
            sample["sigma"] = table(deviation)
        quantiles = self.quantiles()
        sample["quantiles"] = {f"{q:g}": table(v) for q, v in zip(LEVELS, quantiles, strict=True)}
        return {
            "mass": self.mass,
            "count": self.count,
            "seed": self.seed,
            "mode": self.mode,
            "convention": self.convention,
            "ages_yr": self.ages.tolist(),
            "species": list(self.species),
            "sources": list(self.sources),
            "exact": {
                "born": law.born,
                "stars": law.stars,
                "mean": table(law.mean),
                "sigma": table(law.sigma),
                "skewness": table(law.skewness),
                "gaussian": table(law.gaussian),
            },
            "sample": sample,
            "born": None if self.born is None else float(self.born.mean()),
            "events": {
                kind: self.events[:, :, k].mean(axis=0).tolist() for k, kind in enumerate(self.event_kinds)
            },
            "notes": list(self.notes),
        }
