"""Mass-function integrals of the interpolation basis: population = weights x coefficients.

The range of initial mass is a row of segments; on each, every quantity is a line or a
cubic in Hermite form between its values (and slopes) at the two ends. The integral of
a basis polynomial over those stars of a segment that are dead at an age is a weight;
it knows nothing of species, so one matrix product gives all of them at all ages.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.curve import Curve

from .imf import MassFunction
from .span import Span

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Segments:
    """Adjoining segments of initial mass and their coefficients.

    Attributes
    ----------
    edge : ndarray, shape (s + 1,)
        Ends of the segments, Msun.
    coefficients : ndarray, shape (s, e, q)
        e = 2: values at the lower and upper end; e = 4: then slopes there times the
        segment's width.
    share : ndarray, shape (s, 2, k)
        How much of each end value is each published model's.
    owner : ndarray of int, shape (s,)
        Stellar source that the ejecta count for.
    collapse : ndarray of bool, shape (s,)
        Core-collapse events.
    implodes : ndarray, shape (s,)
        The share of them that implodes.
    remnants : ndarray, shape (s, e, 3)
        Remnant mass by kind (white dwarf, neutron star, black hole), as `coefficients`.
    """

    edge: Array
    coefficients: Array
    share: Array
    owner: NDArray[np.int_]
    collapse: NDArray[np.bool_]
    implodes: Array
    remnants: Array

    @property
    def lo(self) -> Array:
        """Lower ends, Msun."""
        return self.edge[:-1]

    @property
    def width(self) -> Array:
        """Widths, Msun."""
        return np.diff(self.edge)


def segments(
    spans: Sequence[Span], cubic: bool, remnant_column: int, neutron_star_limit: float | None
) -> Segments:
    """Turn spans into segments, cut where a remnant becomes a black hole.

    Parameters
    ----------
    spans : sequence of Span
        Adjoining, in order of mass.
    cubic : bool
        Whether any span has slopes.
    remnant_column : int
        Column that holds the remnant mass.
    neutron_star_limit : float or None
        Heaviest neutron star, Msun; None where nobody asks which remnant is which.

    Returns
    -------
    Segments
    """
    edge, blocks, remnants, shares = [spans[0].lo], [], [], []
    owner, collapse, implodes = [], [], []
    for span in spans:
        limit = neutron_star_limit if span.collapse else None
        nodes = span.curve.mass
        if limit is not None:
            for _, part in span.parts:
                nodes = np.union1d(nodes, _cut_at(part, remnant_column, limit).mass)
        curve = span.curve if len(nodes) == len(span.curve.mass) else span.curve.resample(nodes)
        blocks.append(_ends(curve, cubic))
        remnants.append(np.zeros((*blocks[-1].shape[:2], 3)))
        for share, part in span.parts:
            part = part.resample(nodes)
            mass = _ends(part, cubic)[..., remnant_column]
            kind = np.zeros(len(mass), dtype=int)
            if limit is not None:
                kind = np.where(_middles(part)[:, remnant_column] > limit, 2, 1)
            remnants[-1][np.arange(len(mass)), :, kind] += share * mass
        shares.append(np.stack([curve.share[:-1], curve.share[1:]], axis=1))
        n = len(nodes) - 1
        edge += nodes[1:].tolist()
        owner += [span.owner] * n
        collapse += [span.collapse] * n
        implodes += [span.implodes] * n
    return Segments(
        np.array(edge),
        np.concatenate(blocks),
        np.concatenate(shares),
        np.array(owner),
        np.array(collapse),
        np.array(implodes),
        np.concatenate(remnants),
    )


def _ends(curve: Curve, cubic: bool) -> Array:
    """Coefficients of a curve's segments, shape (s, e, q)."""
    ends = [curve.values[:-1], curve.values[1:]]
    if cubic and curve.slopes is None:
        rise = np.diff(curve.values, axis=0)
        ends += [rise, rise]
    elif cubic:
        width = np.diff(curve.mass)[:, None]
        ends += [curve.slopes[:-1] * width, curve.slopes[1:] * width]
    return np.stack(ends, axis=1)


def _middles(curve: Curve) -> Array:
    return curve.resample(0.5 * (curve.mass[:-1] + curve.mass[1:])).values


def _cut_at(curve: Curve, column: int, level: float) -> Curve:
    """Add nodes where a column crosses a level."""
    extra = []
    for i in range(len(curve.mass) - 1):
        a, h = curve.mass[i], curve.mass[i + 1] - curve.mass[i]
        y0, y1 = curve.values[i, column] - level, curve.values[i + 1, column] - level
        if curve.slopes is None:
            roots = [y0 / (y0 - y1)] if y0 * y1 < 0 else []
        else:
            d0, d1 = curve.slopes[i, column] * h, curve.slopes[i + 1, column] * h
            cubic = [d0 + d1 - 2 * (y1 - y0), 3 * (y1 - y0) - 2 * d0 - d1, d0, y0]
            found = np.roots(cubic)
            roots = found[np.isreal(found)].real.tolist()
        extra += [a + x * h for x in roots if 1e-12 < x < 1 - 1e-12]
    if not extra:
        return curve
    return curve.resample(np.unique(np.concatenate([curve.mass, extra])))


def basis(moments: Array) -> Array:
    """Return integrals of the basis polynomials from moments in the local coordinate.

    Parameters
    ----------
    moments : ndarray, shape (2 or 4, p)
        int x^k phi dm, x from 0 to 1 across the segment.

    Returns
    -------
    ndarray, shape (p, 2 or 4)
        For lines 1 - x and x; for cubics the Hermite polynomials of the two values
        and the two slopes.
    """
    if len(moments) == 2:
        return np.stack([moments[0] - moments[1], moments[1]], axis=-1)
    one, x, x2, x3 = moments
    upper = 3 * x2 - 2 * x3
    return np.stack([one - upper, upper, x - 2 * x2 + x3, x3 - x2], axis=-1)


def dead_weights(imf: MassFunction, parts: Segments, turnoff: Array) -> Array:
    """Return the weights of the stars that are dead at each turn-off mass.

    Parameters
    ----------
    imf : MassFunction
    parts : Segments
        Tiling the mass function's limits.
    turnoff : ndarray, shape (t,)
        Turn-off masses, Msun, in any order.

    Returns
    -------
    ndarray, shape (t, s, e)
        Stars per Msun formed, times the basis.
    """
    return dead_integrals(imf, parts, turnoff, parts.coefficients.shape[1] - 1, basis)


def dead_integrals(
    imf: MassFunction, parts: Segments, turnoff: Array, order: int, form: Callable[[Array], Array]
) -> Array:
    """Return integrals of polynomials over the stars that are dead at each turn-off mass.

    Parameters
    ----------
    imf : MassFunction
    parts : Segments
        Tiling the mass function's limits.
    turnoff : ndarray, shape (t,)
        Turn-off masses, Msun, in any order.
    order : int
        Highest power.
    form : callable
        Takes moments, shape (order + 1, p): int x^k phi dm over p intervals, x from 0 to 1
        across the segment; gives the integrals wanted, shape (p, ...).

    Returns
    -------
    ndarray, shape (t, s, ...)
    """
    if np.any(turnoff[1:] > turnoff[:-1]):
        falling = np.argsort(-turnoff, kind="stable")
        sorted_ones = dead_integrals(imf, parts, turnoff[falling], order, form)
        return sorted_ones[np.argsort(falling, kind="stable")]
    lo, hi = imf.limits
    inside = turnoff[(turnoff > lo) & (turnoff < hi)]
    cuts = np.unique(np.concatenate([parts.edge, imf.breaks, inside]))
    cuts = cuts[(cuts >= lo) & (cuts <= hi)]
    a, b = cuts[:-1], cuts[1:]
    which = np.searchsorted(parts.edge, b, side="left") - 1
    integrals = form(imf.moments(a, b, parts.lo[which], parts.width[which], order))
    when = np.searchsorted(-turnoff, -a, side="left")
    added = np.zeros((len(turnoff) + 1, len(parts.lo), *integrals.shape[1:]))
    np.add.at(added, (when, which), integrals)
    return np.cumsum(added[:-1], axis=0)


def dying_basis(parts: Segments, turnoff: Array) -> tuple[NDArray[np.int_], Array]:
    """Return the segment that each turn-off mass lies in and the basis there.

    Parameters
    ----------
    parts : Segments
    turnoff : ndarray, shape (t,)
        Msun; just after the age, so that at a node the segment below counts.

    Returns
    -------
    which : ndarray of int, shape (t,)
    values : ndarray, shape (t, e)
    """
    which = np.clip(np.searchsorted(parts.edge, turnoff, side="left") - 1, 0, len(parts.lo) - 1)
    x = (turnoff - parts.lo[which]) / parts.width[which]
    ends = parts.coefficients.shape[1]
    return which, basis(np.stack([x**k for k in range(ends)]))
