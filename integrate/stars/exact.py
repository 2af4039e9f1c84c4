"""The exact cumulative yields of a population at one metallicity, in the columns of a star table."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from ..lifetimes import LifetimeCurve
from ..population import Population, Prepared
from ..sources import DelayedSource, StellarSource
from ..weights import dead_weights

Array = NDArray[np.float64]

#: relative distance to either side of a mass at which a jump of the lifetimes is looked for
BESIDE = 1e-9


class Exact:
    """A population at one metallicity.

    Parameters
    ----------
    population : Population
    metallicity : float
    convention : {"total", "net"}

    Attributes
    ----------
    curve : LifetimeCurve
    stellar : tuple of StellarSource
    events : tuple of str
        Kinds of events that are counted.
    late : ndarray, shape (delayed sources, columns)
        What all events of 1 Msun formed eject.
    delays : tuple of Delay
    """

    def __init__(self, population: Population, metallicity: float, convention: str) -> None:
        one = replace(population, metallicity=metallicity)
        ready: Prepared = one.prepared
        self.imf = one.imf
        self.curve: LifetimeCurve = ready.curve
        self.stellar = tuple(s for s in one.sources if isinstance(s, StellarSource))
        delayed = [s for s in one.sources if isinstance(s, DelayedSource)]
        self._parts = ready.segments
        self._spans = ready.spans
        columns = ready.columns
        wanted = columns.total if convention == "total" else columns.net
        counts = {s.kind: self._parts.collapse for s in self.stellar if s.kind == "core-collapse"}
        if any(s.implode for s in self.stellar):
            counts["imploded"] = self._parts.implodes
        self.events = (*counts, *(s.kind for s in delayed))
        # an event counts 1 wherever between its ends a star lies, so its slopes are 0
        ends = self._parts.coefficients.shape[1]
        one = np.array([1.0, 1.0, 0.0, 0.0][:ends])
        flags = [flag[:, None, None] * one[:, None] for flag in counts.values()]
        none = np.zeros((len(self._parts.owner), ends, len(delayed)))
        ejected = columns.account("ejected")
        self._coefficients = np.concatenate(
            [
                self._parts.coefficients[..., wanted],
                self._parts.coefficients[..., ejected : ejected + 1],
                *flags,
                none,
            ],
            axis=2,
        )
        late = np.zeros((len(delayed), self._coefficients.shape[2]))
        for i, source in enumerate(delayed):
            row = ready.events[i]
            late[i] = np.concatenate([row[wanted], row[ejected : ejected + 1], np.zeros(len(self.events))])
            late[i, late.shape[1] - len(delayed) + i] = 1.0
            late[i] *= source.number
        self.late = late
        self.delays = tuple(s.delay for s in delayed)

    @property
    def kinks(self) -> Array:
        """Initial masses at which yields, mass function or lifetimes change their course, Msun."""
        lo, hi = self.imf.limits
        ends = np.concatenate([s.curve.mass for s in self._spans])
        breaks = np.array(self.curve.breaks)
        mass = np.unique(np.concatenate([ends, self.imf.breaks, breaks, self._jumps(breaks), [lo, hi]]))
        return mass[(mass >= lo) & (mass <= hi)]

    def _jumps(self, breaks: Array) -> Array:
        """Masses just beside those at which lifetimes jump."""
        beside = np.array([breaks * (1 - BESIDE), breaks * (1 + BESIDE)])
        time = self.curve.lifetime(beside) if len(breaks) else beside
        return beside[:, time[0] > time[1] * (1 + 1e-6)].ravel()

    @property
    def barren(self) -> float:
        """Initial mass up to which nothing is ejected or counted, Msun."""
        busy = np.flatnonzero(self._coefficients.any(axis=(1, 2)))
        return float(self._parts.edge[busy[0]] if len(busy) else self._parts.edge[-1])

    def until(self, turnoff: Array) -> Array:
        """Return what has been ejected when the turn-off mass has come down to some masses.

        Parameters
        ----------
        turnoff : ndarray, shape (n,)
            Msun, decreasing.

        Returns
        -------
        ndarray, shape (stellar sources, n, columns)
            Per Msun formed.
        """
        return self._by_source(dead_weights(self.imf, self._parts, turnoff))

    def steps(self, mass: Array) -> tuple[Array, NDArray[np.int_]]:
        """Return what stars between successive masses eject, and whose they are.

        Parameters
        ----------
        mass : ndarray, shape (k,)
            Msun, decreasing, the kinks among them.

        Returns
        -------
        step : ndarray, shape (k - 1, columns)
        owner : ndarray of int, shape (k - 1,)
            Stellar source.
        """
        # differences of weights, not of yields: a step is then accurate beside its own segment only
        weights = np.diff(dead_weights(self.imf, self._parts, mass), axis=0)
        step = weights.reshape(len(weights), -1) @ self._coefficients.reshape(-1, self._coefficients.shape[2])
        middle = 0.5 * (mass[:-1] + mass[1:])
        segment = np.clip(np.searchsorted(self._parts.edge, middle) - 1, 0, len(self._parts.owner) - 1)
        return step, self._parts.owner[segment]

    def _by_source(self, weights: Array) -> Array:
        width = self._coefficients.shape[2]
        out = np.empty((len(self.stellar), len(weights), width))
        for i in range(len(out)):
            mine = self._parts.owner == i
            flat = self._coefficients[mine].reshape(-1, width)
            np.matmul(weights[:, mine].reshape(len(weights), -1), flat, out=out[i])
        return out
