"""Yields along initial mass: piecewise polynomials that a mass function can be integrated against exactly.

A `Curve` holds, at increasing nodes in initial mass, the values (and for cubics the
slopes) of every column at once. Between two nodes each column is a straight line or a
cubic in Hermite form. Curves of neighbouring metallicities, or of the sets of a
mixture, combine linearly on the union of their nodes without loss.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from .errors import InputError
from .grid import Convention, Slice, YieldSet

Array = NDArray[np.float64]
Method = Literal["linear", "cubic"]

METHODS: tuple[str, ...] = ("linear", "cubic")

#: columns that follow the species' totals and net yields in every block of values; rest is what
#: belongs to none of those species
ACCOUNTS = ("rest_total", "rest_net", "ejected", "remnant", "wind")


@dataclass(frozen=True, eq=False)
class Curve:
    """Values along initial mass.

    Attributes
    ----------
    mass : ndarray, shape (n,)
        Nodes, Msun, increasing.
    values : ndarray, shape (n, q)
        One column a quantity.
    slopes : ndarray, shape (n, q), optional
        Derivatives at the nodes; without them the curve is piecewise linear.
    share : ndarray, shape (n, k)
        ``values = share @ models`` where the curve is linear in k published models:
        how much each model counts at each node.
    """

    mass: Array
    values: Array
    slopes: Array | None
    share: Array

    @property
    def span(self) -> tuple[float, float]:
        """Lowest and highest mass served, Msun."""
        return float(self.mass[0]), float(self.mass[-1])

    def resample(self, mass: Array) -> Curve:
        """Return the same curve with other nodes inside its span.

        Parameters
        ----------
        mass : ndarray, shape (m,)
            New nodes, Msun; exact where they include the old ones that lie between.

        Returns
        -------
        Curve
        """
        if len(self.mass) == 1:
            one = np.ones((len(mass), 1))
            return Curve(mass, one @ self.values, None, one @ self.share)
        i = np.clip(np.searchsorted(self.mass, mass, side="right") - 1, 0, len(self.mass) - 2)
        h = self.mass[i + 1] - self.mass[i]
        x = ((mass - self.mass[i]) / h)[:, None]
        share = (1 - x) * self.share[i] + x * self.share[i + 1]
        if self.slopes is None:
            return Curve(mass, (1 - x) * self.values[i] + x * self.values[i + 1], None, share)
        h = h[:, None]
        y0, y1, d0, d1 = self.values[i], self.values[i + 1], self.slopes[i] * h, self.slopes[i + 1] * h
        rise = y1 - y0
        values = y0 + x * (d0 + x * (3 * rise - 2 * d0 - d1 + x * (d0 + d1 - 2 * rise)))
        slopes = (d0 + x * (2 * (3 * rise - 2 * d0 - d1) + x * 3 * (d0 + d1 - 2 * rise))) / h
        return Curve(mass, values, slopes, share)

    def between(self, lo: float, hi: float) -> Curve:
        """Return the part of the curve from `lo` to `hi` Msun (inside its span)."""
        inside = self.mass[(self.mass > lo) & (self.mass < hi)]
        return self.resample(np.concatenate(([lo], inside, [hi])))


def blend(curves: Sequence[Curve], weights: Sequence[float]) -> Curve:
    """Combine curves linearly on the masses that all of them serve.

    Parameters
    ----------
    curves : sequence of Curve
        With the same columns.
    weights : sequence of float
        One a curve.

    Returns
    -------
    Curve
        On the union of the nodes within the common span; its `share` columns are
        those of the curves side by side.

    Raises
    ------
    InputError
        The curves have no mass in common.
    """
    lo = max(c.span[0] for c in curves)
    hi = min(c.span[1] for c in curves)
    if lo > hi:
        spans = ", ".join(f"{a:g}-{b:g}" for a, b in (c.span for c in curves))
        raise InputError(f"the models to combine have no mass in common ({spans} Msun)")
    nodes = np.unique(np.concatenate([c.mass for c in curves]))
    nodes = nodes[(nodes >= lo) & (nodes <= hi)]
    parts = [c.resample(nodes) for c in curves]
    values = sum(w * p.values for w, p in zip(weights, parts, strict=True))
    share = np.hstack([w * p.share for w, p in zip(weights, parts, strict=True)])
    slopes = None
    if all(p.slopes is not None for p in parts):
        slopes = sum(w * p.slopes for w, p in zip(weights, parts, strict=True))
    return Curve(nodes, values, slopes, share)


def slice_curve(
    one: Slice,
    projection: Array,
    method: Method = "linear",
    primary: Convention = "total",
    winds: Literal["birth", "rest"] = "birth",
) -> Curve:
    """Return the curve of one slice, in the block layout [totals, net yields, accounts].

    Parameters
    ----------
    one : Slice
    projection : ndarray, shape (s, o)
        Sums the slice's species into the o wanted ones (`YieldSet.projection`).
    method : {"linear", "cubic"}
        Straight lines between models, or monotone cubics (Fritsch & Butland 1984,
        SIAM J. Sci. Stat. Comput. 5, 300, as in scipy's PCHIP). With cubics the
        primary yields, species by species, the remnant and the wind are interpolated
        and all others follow from them, so that budgets still close.
    primary : {"total", "net"}
        Which yields the cubics run through without overshoot: those published.
    winds : {"birth", "rest"}
        Whether totals hold the wind that the paper doesn't list, at birth composition.

    Returns
    -------
    Curve
        Values of shape (n, 2 o + 5).
    """
    _known(method)
    total = one.total if winds == "birth" else one.listed
    values = _block(total, one.net, one.ejected, one.remnant, one.wind, one.mass, projection)
    slopes = None
    if method == "cubic" and len(one.mass) > 1:
        remnant, wind = _slopes(one.mass, one.remnant), _slopes(one.mass, one.wind)
        ejected = 1.0 - remnant
        processed = (ejected - wind)[:, None] * one.initial
        if primary == "total":
            listed = _slopes(one.mass, one.listed)
            net = listed - processed
        else:
            net = _slopes(one.mass, one.net)
            listed = net + processed
        total = listed + wind[:, None] * one.initial if winds == "birth" else listed
        slopes = _block(total, net, ejected, remnant, wind, np.ones_like(one.mass), projection)
    return Curve(one.mass, values, slopes, np.eye(len(one.mass)))


def imploded_curve(
    one: Slice, projection: Array, method: Method = "linear", winds: Literal["birth", "rest"] = "birth"
) -> Curve:
    """Return the curve of a slice whose stars eject nothing but the wind that the paper doesn't list.

    Parameters and result as in `slice_curve`.
    """
    _known(method)

    def block(wind: Array, mass: Array) -> Array:
        lost = wind[:, None] * one.initial * (winds == "birth")
        return _block(lost, np.zeros_like(lost), wind, mass - wind, wind, mass, projection)

    slopes = None
    if method == "cubic" and len(one.mass) > 1:
        slopes = block(_slopes(one.mass, one.wind), np.ones_like(one.mass))
    return Curve(one.mass, block(one.wind, one.mass), slopes, np.eye(len(one.mass)))


def _known(method: str) -> None:
    if method not in METHODS:
        raise InputError(f"interpolation {method!r} isn't known", mend=f"choose one of {', '.join(METHODS)}")


def _slopes(mass: Array, values: Array) -> Array:
    """Derivatives of the monotone cubics at their nodes."""
    from scipy.interpolate import PchipInterpolator

    return PchipInterpolator(mass, values, axis=0)(mass, 1)


def _block(
    total: Array, net: Array, ejected: Array, remnant: Array, wind: Array, mass: Array, projection: Array
) -> Array:
    wanted = projection.any(axis=1)
    rest_total = mass - remnant - total[:, wanted].sum(axis=1)
    accounts = np.column_stack([rest_total, -net[:, wanted].sum(axis=1), ejected, remnant, wind])
    return np.hstack([total @ projection, net @ projection, accounts])


@dataclass(frozen=True)
class Bracket:
    """The slices that serve a metallicity.

    Attributes
    ----------
    slices : tuple of int
        Positions of one or two slices in the set.
    weights : tuple of float
        Convex weights.
    note : str
        Empty, or that an edge slice is held.
    """

    slices: tuple[int, ...]
    weights: tuple[float, ...]
    note: str = ""


def bracket(grid: YieldSet, metallicity: float, edge: str = "hold") -> Bracket:
    """Find the neighbouring slices of a metallicity and their weights.

    Linear in log10 Z, or in Z next to a Z = 0 slice.

    Parameters
    ----------
    grid : YieldSet
    metallicity : float
        Mass fraction of metals.
    edge : {"hold", "refuse"}
        Outside the covered range hold the edge slice and say so, or raise.

    Returns
    -------
    Bracket

    Raises
    ------
    InputError
        The metallicity lies outside and `edge` is "refuse".

    Examples
    --------
    >>> from steelyard.yields import load
    >>> bracket(load("karakas-2010"), 0.02)
    Bracket(slices=(3,), weights=(1.0,), note='')
    """
    z = np.array(grid.metallicities)
    if metallicity < z[0] or metallicity > z[-1]:
        if edge == "refuse":
            raise InputError(
                f"metallicity {metallicity:g} lies outside the set's {z[0]:g} to {z[-1]:g}",
                where=grid.id,
                mend='choose a metallicity inside, or edges.metallicity = "hold"',
            )
        i = 0 if metallicity < z[0] else len(z) - 1
        note = f"{grid.id}: its models are of Z = {z[0]:g} to {z[-1]:g}; the slice at {z[i]:g} is held beyond"
        return Bracket((i,), (1.0,), note)
    i = int(np.searchsorted(z, metallicity))
    if z[i] == metallicity:
        return Bracket((i,), (1.0,))
    lo, hi = z[i - 1], z[i]
    x = (metallicity - lo) / (hi - lo) if lo == 0 else np.log(metallicity / lo) / np.log(hi / lo)
    return Bracket((i - 1, i), (float(1 - x), float(x)))
