"""Where the turn-off masses of a plan's ages lie among the segments.

Segments are cut further, at breaks of the mass function and so that none is wide; each
age adds one interval, from its turn-off mass to the top of the piece it lies in. A
yield is then the sum over whole pieces above, plus that part.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from .intervals import WIDEST_RATIO, Intervals
from .mass_shape import Family

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Geometry:
    """Pieces of initial mass and the place of each age's turn-off mass among them.

    Attributes
    ----------
    edge : ndarray, shape (p + 1,)
        Ends of the pieces, Msun, from the lower to the upper limit.
    parent : ndarray of int, shape (p,)
        Segment that a piece is part of.
    owner : ndarray of int, shape (p,)
        Stellar source.
    turnoff : ndarray, shape (t,)
        Clipped to the limits, Msun.
    place : ndarray of int, shape (t,)
        Piece that the turn-off mass lies in.
    alive : ndarray of bool, shape (t,)
        Whether stars of the turn-off mass are dying.
    kept : ndarray of bool, shape (p,)
        Pieces that eject anything.
    intervals : Intervals
        The kept pieces, then the parts above the turn-off masses that lie in one.
    """

    edge: Array
    parent: NDArray[np.int_]
    owner: NDArray[np.int_]
    turnoff: Array
    place: NDArray[np.int_]
    alive: NDArray[np.bool_]
    kept: NDArray[np.bool_]
    intervals: Intervals

    @property
    def inside(self) -> NDArray[np.int_]:
        """Ages whose turn-off mass lies in a kept piece."""
        return np.flatnonzero(self.kept[self.place])


def geometry(
    edge: Array,
    owner: NDArray[np.int_],
    mass_functions: Family,
    turnoff: Array,
    ends: int,
    ejecting: NDArray[np.bool_],
    boundary: tuple[float, int, int] | None = None,
) -> Geometry:
    """Cut the segments to the limits and place the turn-off masses.

    Parameters
    ----------
    edge : ndarray, shape (s + 1,)
        Ends of the segments, Msun.
    owner : ndarray of int, shape (s,)
    mass_functions : Family
    turnoff : ndarray, shape (t,)
        Msun.
    ends : int
        Basis functions of a segment.
    ejecting : ndarray of bool, shape (s,)
        Segments with a coefficient that isn't 0.
    boundary : (float, int, int), optional
        A mass inside the join of two sources, with the lower and the upper of them,
        where the ejecta pass from one to the other.

    Returns
    -------
    Geometry
    """
    shape_edges = mass_functions.edges
    lo, hi = shape_edges[0], shape_edges[-1]
    cuts = np.concatenate([edge, shape_edges, [boundary[0]] if boundary else []])
    cuts = np.unique(cuts[(cuts >= lo) & (cuts <= hi)])
    pieces = [cuts[:1]]
    for a, b in pairwise(cuts):
        count = max(1, int(np.ceil(np.log(b / a) / np.log(WIDEST_RATIO) - 1e-12)))
        inner = a * (b / a) ** (np.arange(1, count) / count)
        pieces.append(np.concatenate([inner, [b]]))
    ends_of = np.concatenate(pieces)
    middle = 0.5 * (ends_of[:-1] + ends_of[1:])
    parent = np.clip(np.searchsorted(edge, middle) - 1, 0, len(owner) - 1)
    owned = owner[parent]
    if boundary:
        mass, below, above = boundary
        between = (owned == below) | (owned == above)
        owned = np.where(between, np.where(middle < mass, below, above), owned)
    inside = np.clip(turnoff, lo, hi)
    place = np.clip(np.searchsorted(ends_of, inside, side="left") - 1, 0, len(owned) - 1)
    origin, unit = edge[:-1][parent], np.diff(edge)[parent]
    imf_piece = np.clip(np.searchsorted(shape_edges, middle) - 1, 0, len(shape_edges) - 2)
    kept = ejecting[parent]
    at = place[kept[place]]
    intervals = Intervals(
        np.concatenate([ends_of[:-1][kept], inside[kept[place]]]),
        np.concatenate([ends_of[1:][kept], ends_of[1:][at]]),
        np.concatenate([origin[kept], origin[at]]),
        np.concatenate([unit[kept], unit[at]]),
        np.concatenate([imf_piece[kept], imf_piece[at]]),
        ends,
        mass_functions.pieces,
    )
    alive = (turnoff > lo) & (turnoff <= hi)
    return Geometry(ends_of, parent, owned, inside, place, alive, kept, intervals)
