"""Which stars collapse, and which of them implode and eject their wind only."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise

import numpy as np

from steelyard.yields.curve import Curve, blend

from .sources import StellarSource
from .span import Ground, Span
from .tracks import Track


def events(
    inner: list[Span],
    sources: Sequence[StellarSource],
    tracks: Sequence[Sequence[Track]],
    order: Sequence[int],
    ground: Ground,
    notes: list[str],
) -> list[Span]:
    """Mark the spans that die as core-collapse events, and let windows implode.

    Parameters
    ----------
    inner : list of Span
        In order of mass.
    sources : sequence of StellarSource
    tracks : sequence of sequence of Track
        The entries of each source, in series.
    order : sequence of int
        Positions of the sources, in order of mass.
    ground : Ground
    notes : list of str
        Gets what a reader of the result has to know.

    Returns
    -------
    list of Span
    """
    out = inner
    for i in order:
        source = sources[i]
        if source.kind != "core-collapse":
            continue
        lowest = max(
            source.events_from, max((s.hi for s in out if s.owner != i and s.hi <= _top(out, i)), default=0.0)
        )
        out = [p for s in out for p in _split(s, [lowest])]
        out = [replace(s, collapse=s.owner == i and s.lo >= lowest) for s in out]
        for a, b, probability in source.implosions:
            out = [p for s in out for p in _split(s, [a, b])]
            mine = [s.collapse and a <= s.lo and s.hi <= b for s in out]
            out = [
                _imploded(s, probability, tracks[i], ground) if own else s
                for s, own in zip(out, mine, strict=True)
            ]
            if probability and not any(mine):
                notes.append(
                    f"{source.kind}: no star that collapses is born at {a:g}-{b:g} Msun, which should implode"
                )
        imploding = [s.outcomes[1] if s.outcomes else s.curve for s in out if s.implodes]
        if source.implosions and not any(
            curve.values[:, ground.columns.account("ejected")].any() for curve in imploding
        ):
            notes.append(f"{source.kind}: the sets list no winds apart; stars that implode eject nothing")
    return out


def _top(inner: Sequence[Span], owner: int) -> float:
    return max((s.hi for s in inner if s.owner == owner), default=0.0)


def _split(span: Span, masses: Sequence[float]) -> list[Span]:
    edges = [span.lo, *sorted(m for m in masses if span.lo < m < span.hi), span.hi]
    if len(edges) == 2:
        return [span]
    return [
        replace(
            span,
            lo=a,
            hi=b,
            curve=span.curve.between(a, b),
            outcomes=tuple(one.between(a, b) for one in span.outcomes),
        )
        for a, b in pairwise(edges)
    ]


def _imploded(span: Span, probability: float, entries: Sequence[Track], ground: Ground) -> Span:
    """A span of which a share of stars ejects its wind only; outside the sets' own models, nothing."""
    if not probability:
        return span
    entry = next((e for e in entries if e.name == span.how), None)
    if entry is not None:
        wind = entry.imploded.between(span.lo, span.hi)
    else:
        values = np.stack([ground.row(span.lo, span.lo), ground.row(span.hi, span.hi)])
        wind = Curve(np.array([span.lo, span.hi]), values, None, np.zeros((2, 0)))
    wind = replace(wind, share=np.zeros((len(wind.mass), span.curve.share.shape[1])))
    if probability == 1:
        return replace(span, curve=wind, implodes=1.0)
    both = (span.curve, wind)
    mean = blend(both, (1 - probability, probability))
    # the wind is nobody's: `blend` puts the shares side by side, the exploding stars' first
    mean = replace(mean, share=mean.share[:, : span.curve.share.shape[1]])
    return replace(span, curve=mean, implodes=probability, outcomes=both)
