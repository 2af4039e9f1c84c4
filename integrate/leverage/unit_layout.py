"""A population's segments as a function of what its models print: joins, edges and series included."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.curve import Curve

from ..population import Population
from ..ranges import spans
from ..sources import StellarSource
from ..span import Ground
from ..tracks import Columns, Strand, braid
from ..weights import Segments, segments

Array = NDArray[np.float64]


def unit_layout(
    population: Population,
    stellar: Sequence[StellarSource],
    taken: Sequence[Sequence[Sequence[Strand]]],
    at: Mapping[int, slice],
    count: int,
) -> Segments:
    """Lay out a population with unit vectors in place of yields.

    Parameters
    ----------
    population : Population
    stellar : sequence of StellarSource
    taken : sequence
        The strands of each entry of each source.
    at : mapping
        From a strand (its `id`) to the positions of its models among all.
    count : int
        Models in all.

    Returns
    -------
    Segments
        Its "species" are the population's own, without yields but lent what is returned at
        birth composition, then one for each model: in the block of totals the model's value is
        1, in that of net yields the slope at its node is.
    """
    ready = population.prepared
    names = (*ready.columns.species, *("H" for _ in range(count)))
    columns = Columns(names)
    n, half = len(ready.columns.species), len(names)

    def unit(strand: Strand) -> Strand:
        own = at[id(strand)]
        rows = np.arange(own.stop - own.start)

        def block(accounts: Array, first: int) -> Array:
            made = np.zeros((len(rows), columns.width))
            made[:, 2 * half :] = accounts
            if first >= 0:
                made[rows, first + own.start + rows] = 1.0
            return made

        curve, lost = strand.curve, strand.imploded
        slopes = None if curve.slopes is None else block(curve.slopes[:, 2 * n :], half + n)
        values = block(curve.values[:, 2 * n :], n)

        def wind(given: Array) -> Array:
            made = block(given[:, 2 * n :], -1)
            made[:, :n], made[:, half : half + n] = given[:, :n], given[:, n : 2 * n]
            return made

        lost_slopes = None if lost.slopes is None else wind(lost.slopes)
        return replace(
            strand,
            curve=Curve(curve.mass, values, slopes, curve.share),
            imploded=Curve(lost.mass, wind(lost.values), lost_slopes, lost.share),
        )

    tracks = [
        [
            braid(entry.name, [unit(p) for p in parts], names)
            for entry, parts in zip(source.sets, rows, strict=True)
        ]
        for source, rows in zip(stellar, taken, strict=True)
    ]
    birth = np.concatenate([ready.birth, np.zeros(count)])
    ground = Ground(columns, birth, population.imf.limits)
    cover, _ = spans(stellar, tracks, population.joins, population.edges, ground)
    cubic = any(s.curve.slopes is not None for s in cover)
    return segments(cover, cubic, columns.account("remnant"), None)
