"""The range of initial mass, cut into the spans that sets, joins and edges serve.

Every star that is born belongs to exactly one span, so that budgets close.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.curve import Curve
from steelyard.yields.errors import InputError
from steelyard.yields.nuclides import parse

from .collapse import events
from .sources import Edges, Join, StellarSource
from .span import Ground, Span
from .tracks import Track

Array = NDArray[np.float64]


def spans(
    sources: Sequence[StellarSource],
    tracks: Sequence[Sequence[Track]],
    joins: Sequence[Join],
    edges: Edges,
    ground: Ground,
) -> tuple[list[Span], list[str]]:
    """Cut the range of initial mass into spans.

    Parameters
    ----------
    sources : sequence of StellarSource
    tracks : sequence of sequence of Track
        The entries of each source, in series.
    joins : sequence of Join
    edges : Edges
    ground : Ground

    Returns
    -------
    spans : list of Span
        Adjoining, in order of mass, from the lower to the upper limit of the mass function.
    notes : list of str
        What a reader of the result has to know.

    Raises
    ------
    InputError
        Sources overlap, or there is a gap between them without a join.
    """
    notes: list[str] = []
    policy = {j.between: j.policy for j in joins}
    if len(policy) < len(joins):
        twice = next(j.between for j in joins if [k.between for k in joins].count(j.between) > 1)
        raise InputError(f"the join between {' and '.join(twice)} is declared twice", mend="keep one of them")
    served: list[list[Span]] = []
    at = 0
    for i, (source, entries) in enumerate(zip(sources, tracks, strict=True)):
        total = sum(len(t.models) for ts in tracks for t in ts)
        own, at = _series(i, source, entries, policy, ground, at, total, notes)
        served.append(own)
    order = sorted(range(len(sources)), key=lambda i: served[i][0].lo)
    out: list[Span] = []
    for i in order:
        if out:
            out += _between(out[-1], served[i][0], sources, tracks, policy, ground, notes)
        out += served[i]
    out = _edges(out, edges, ground)
    _check_joins(joins, sources, tracks, order)
    return events(out, sources, tracks, order, ground, notes), notes


def _series(
    owner: int,
    source: StellarSource,
    entries: Sequence[Track],
    policy: dict[tuple[str, str], str],
    ground: Ground,
    at: int,
    total: int,
    notes: list[str],
) -> tuple[list[Span], int]:
    """The spans of one source: each entry where it has models and none before it has."""
    taken: list[Span] = []
    for declared, entry in zip(source.sets, entries, strict=True):
        share = np.zeros((len(entry.curve.mass), total))
        share[:, at : at + len(entry.models)] = entry.curve.share
        at += len(entry.models)
        curve = replace(entry.curve, share=share)
        lo, hi = curve.span
        for low, high in (source.limits or (None, None), declared.limits):
            lo, hi = lo if low is None else max(lo, low), hi if high is None else min(hi, high)
        for a, b in _free(lo, hi, [(s.lo, s.hi) for s in taken]):
            taken.append(Span(a, b, owner, entry.name, curve.between(a, b)))
    taken.sort(key=lambda s: s.lo)
    if not taken:
        spans_text = ", ".join(f"{t.curve.span[0]:g}-{t.curve.span[1]:g}" for t in entries)
        raise InputError(
            f"no set has models inside its limits (they reach {spans_text} Msun)",
            where=f"source {source.kind}",
            mend="widen limits, or name other sets",
        )
    out = [taken[0]]
    for span in taken[1:]:
        before = out[-1]
        if span.lo > before.hi:
            chosen = policy.get((before.how, span.how), "bridge")
            out.append(Span(before.hi, span.lo, owner, chosen, _joined(chosen, before, span, ground)))
        out.append(span)
    if len(entries) > 1:
        unused = [t.name for t in entries if t.name not in {s.how for s in taken}]
        notes += [f"{source.kind}: {name} serves no mass that the sets before it don't" for name in unused]
    return out, at


def _free(lo: float, hi: float, taken: list[tuple[float, float]]) -> list[tuple[float, float]]:
    """The parts of (lo, hi) that no range of `taken` covers."""
    parts = [(lo, hi)] if hi > lo else []
    for a, b in taken:
        parts = [piece for c, d in parts for piece in ((c, min(d, a)), (max(c, b), d)) if piece[1] > piece[0]]
    return parts


def _between(
    lower: Span,
    upper: Span,
    sources: Sequence[StellarSource],
    tracks: Sequence[Sequence[Track]],
    policy: dict[tuple[str, str], str],
    ground: Ground,
    notes: list[str],
) -> list[Span]:
    """The join between two neighbouring sources, its ejecta shared out at the first collapse mass."""
    a, b = sources[lower.owner], sources[upper.owner]
    if upper.lo < lower.hi:
        raise InputError(
            f"sources {a.kind} and {b.kind} overlap: {a.kind} serves up to {lower.hi:g} Msun,"
            f" {b.kind} from {upper.lo:g}",
            mend="set limits of the sources so that they don't",
        )
    if upper.lo == lower.hi:
        return []
    chosen = policy.get((a.kind, b.kind))
    if chosen is None:
        raise InputError(
            f"there is a gap without a join: {lower.hi:g}-{upper.lo:g} Msun between {a.kind} and {b.kind}",
            mend=f'add [[join]] between = ["{a.kind}", "{b.kind}"] with policy = "bridge" or another',
        )
    lower, upper = _filled(chosen, lower, upper, tracks, ground, notes)
    curve = _joined(chosen, lower, upper, ground)
    edge = min(max(b.events_from, lower.hi), upper.lo) if b.kind == "core-collapse" else upper.lo
    out = []
    if edge > lower.hi:
        out.append(Span(lower.hi, edge, lower.owner, chosen, curve.between(lower.hi, edge)))
    if edge < upper.lo:
        out.append(Span(edge, upper.lo, upper.owner, chosen, curve.between(edge, upper.lo)))
    return out


def _filled(
    policy: str,
    lower: Span,
    upper: Span,
    tracks: Sequence[Sequence[Track]],
    ground: Ground,
    notes: list[str],
) -> tuple[Span, Span]:
    """The two ends of a join, each lent birth composition for elements that only the other follows."""
    c = ground.columns
    below, above = _serving(lower, tracks, True), _serving(upper, tracks, False)
    ends = []
    for span, row, own, other, used in (
        (lower, -1, below, above, ("bridge", "reach-up")),
        (upper, 0, above, below, ("bridge", "reach-down")),
    ):
        lent = np.array([parse(s).symbol not in own.elements for s in c.species], dtype=bool) & other.followed
        if policy not in used or not lent.any():
            ends.append(span)
            continue
        values = span.curve.values.copy()
        added = np.where(lent, ground.birth * other.cover * values[row, c.account("ejected")], 0.0)
        values[row, c.total] += added
        values[row, c.account("rest_total")] -= added[c.apart].sum()
        names = ", ".join(dict.fromkeys(parse(s).symbol for s, x in zip(c.species, lent, strict=True) if x))
        notes.append(
            f"join {lower.hi:g}-{upper.lo:g} Msun: {span.how} doesn't follow {names};"
            " its end is taken at birth composition"
        )
        ends.append(replace(span, curve=replace(span.curve, values=values)))
    return ends[0], ends[1]


def _serving(span: Span, tracks: Sequence[Sequence[Track]], last: bool) -> Track:
    """The entry whose models a span ends with."""
    own = [t for t in tracks[span.owner] if t.name == span.how]
    return own[0] if own else tracks[span.owner][-1 if last else 0]


def _joined(policy: str, lower: Span, upper: Span, ground: Ground) -> Curve:
    """The curve of a join, a straight line in mass."""
    lo, hi = lower.hi, upper.lo
    below, above = lower.curve.values[-1], upper.curve.values[0]
    share = np.zeros((2, lower.curve.share.shape[1]))
    if policy == "bridge":
        share[0], share[1] = lower.curve.share[-1], upper.curve.share[0]
        values = np.stack([below, above])
    elif policy == "reach-up":
        share[0], share[1] = lower.curve.share[-1], lower.curve.share[-1] * hi / lo
        values = np.stack([below, below * (hi / lo)])
    elif policy == "reach-down":
        share[0], share[1] = upper.curve.share[0] * lo / hi, upper.curve.share[0]
        values = np.stack([above * (lo / hi), above])
    elif policy == "return-only":
        remnant = ground.columns.account("remnant")
        values = np.stack([ground.row(lo, below[remnant]), ground.row(hi, above[remnant])])
    else:
        values = np.stack([ground.row(lo, lo), ground.row(hi, hi)])
    return Curve(np.array([lo, hi]), values, None, share)


def _edges(inner: list[Span], edges: Edges, ground: Ground) -> list[Span]:
    """Add what lies beyond the sources, and cut all to the mass function's limits."""
    lo, hi = ground.limits
    out = list(inner)
    first, last = inner[0], inner[-1]
    if lo < first.lo:
        out.insert(0, _outer(edges.below, lo, first.lo, first, ground, -1))
    if hi > last.hi:
        out.append(_outer(edges.above, last.hi, hi, last, ground, +1))
    cut = [(s, max(s.lo, lo), min(s.hi, hi)) for s in out]
    return [replace(s, lo=a, hi=b, curve=s.curve.between(a, b)) for s, a, b in cut if b > a]


def _outer(policy: str, lo: float, hi: float, near: Span, ground: Ground, side: int) -> Span:
    """An edge, beside the span it lies next to (side -1 below, +1 above).

    Where only birth composition returns, the remnant keeps the end model's share of the initial mass.
    """
    end = near.curve.values[0 if side < 0 else -1]
    base = near.lo if side < 0 else near.hi
    share = np.zeros((2, near.curve.share.shape[1]))
    if policy in ("reach-up", "reach-down"):
        values = np.stack([end * (lo / base), end * (hi / base)])
        share[:] = np.outer([lo / base, hi / base], near.curve.share[0 if side < 0 else -1])
    elif policy == "return-only":
        held = end[ground.columns.account("remnant")] / base
        values = np.stack([ground.row(lo, held * lo), ground.row(hi, held * hi)])
    else:
        values = np.stack([ground.row(lo, lo), ground.row(hi, hi)])
    return Span(lo, hi, near.owner, policy, Curve(np.array([lo, hi]), values, None, share))


def _check_joins(
    joins: Sequence[Join],
    sources: Sequence[StellarSource],
    tracks: Sequence[Sequence[Track]],
    order: Sequence[int],
) -> None:
    """Refuse a join between names that aren't neighbours."""
    kinds = [sources[i].kind for i in order]
    pairs = set(pairwise(kinds))
    for entries in tracks:
        names = [t.name for t in entries]
        pairs |= {(a, b) for a in names for b in names if a != b}
    for join in joins:
        if join.between not in pairs:
            have = "; ".join(f"{a} and {b}" for a, b in sorted(pairs)) or "none"
            raise InputError(
                f"join between {' and '.join(join.between)}: these aren't neighbours in this order",
                mend=f"neighbours are: {have}",
            )
