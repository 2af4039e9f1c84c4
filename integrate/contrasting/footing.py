"""What choices cover differently (masses, winds, metallicities), said, so that differences are read right."""

from __future__ import annotations

from collections.abc import Sequence

from steelyard.yields.grid import YieldSet
from steelyard.yields.nuclides import parse

from ..population import Population
from ..sources import StellarSource
from .design import Design, served

#: what the figures of a set take in, as its set.toml says
_COVERS = {
    "life": "lists all that leaves over the life",
    "explosion": "lists the explosion only",
}


def ranges_text(ranges: Sequence[tuple[float, float, str]]) -> str:
    """Return the masses that sets serve as text.

    Examples
    --------
    >>> ranges_text([(13.0, 40.0, "kobayashi-2006")])
    '13-40 Msun'
    """
    return ", ".join(f"{lo:g}-{hi:g}" for lo, hi, _ in ranges) + " Msun"


def notes(made: Design, populations: Sequence[Population]) -> list[str]:
    """Return what has to be known to compare the choices of a design.

    Parameters
    ----------
    made : Design
    populations : sequence of Population
        Of `made.one_at_a_time`, in its order.

    Returns
    -------
    list of str
    """
    out = [
        f"{kind}: all choices are restricted to the {lo:g}-{hi:g} Msun that each of them serves"
        for kind, (lo, hi) in made.limits.items()
    ]
    rows = list(zip(made.one_at_a_time.tolist(), populations, strict=True))
    for k, factor in enumerate(made.factors):
        own = [(factor.labels[at[k]], p) for at, p in rows if at[k] or not any(at)]
        kind = factor.name
        source = next((s for s in made.base.sources if s.kind == kind), None)
        if source is not None:
            out += _covers(kind, own) if isinstance(source, StellarSource) else []
            out += _nuclides(kind, own, made.species)
        if kind == "solar":
            out.append("solar: the [X/Fe] of each choice is on the scale of its own mixture")
        if kind == "imf":
            out += _limits(own)
    common = populations[0].prepared.notes
    told: list[tuple[str, str]] = []
    for at, p in rows:
        label = ", ".join(made.labels(at).values()) or "base"
        own_notes = [n for n in p.prepared.notes if label == "base" or n not in common]
        told += [(label, note.removeprefix(f"{label}: ")) for note in own_notes]
    by_text: dict[str, list[str]] = {}
    for label, text in told:
        by_text.setdefault(text, []).append(label)
    return [*out, *(f"{braced(labels)}: {text}" for text, labels in by_text.items())]


def braced(labels: Sequence[str]) -> str:
    """Return names as one text, with what they begin with written once.

    Examples
    --------
    >>> braced(["iwamoto-1999-W7", "iwamoto-1999-W70", "iwamoto-1999-WDD1"])
    'iwamoto-1999-{W7, W70, WDD1}'
    """
    parts = [label.split("-") for label in labels]
    same = 0
    while all(len(p) > same + 1 and p[same] == parts[0][same] for p in parts):
        same += 1
    if len(labels) < 2 or not same:
        return ", ".join(labels)
    start = "-".join(parts[0][:same]) + "-"
    return f"{start}{{{', '.join(label.removeprefix(start) for label in labels)}}}"


def _covers(kind: str, own: Sequence[tuple[str, Population]]) -> list[str]:
    """Ranges of mass and treatment of winds that differ between the choices of a source."""
    out = []
    texts = [(label, ranges_text(served(p)[kind])) for label, p in own]
    if len({text for _, text in texts}) > 1:
        out.append(
            f"{kind}: the choices serve different masses: {_grouped(texts)};"
            " beyond them joins and edges decide"
        )
    held = [(label, _winds(_grids(p, kind))) for label, p in own]
    if len({text for _, text in held}) > 1:
        policy = next(s.winds for s in own[0][1].sources if s.kind == kind)
        how = "returned at birth composition" if policy == "birth" else "given to no species"
        out.append(f"{kind}: winds: {_grouped(held)}; where only the explosion is listed, they are {how}")
    return out


def _nuclides(kind: str, own: Sequence[tuple[str, Population]], species: Sequence[str]) -> list[str]:
    """Choices that list elements only, where nuclides are compared."""
    if all(parse(one).is_element for one in species):
        return []
    labels = [label for label, p in own if any(g.follows_elements for g in _grids(p, kind))]
    return [f"{kind}: {braced(labels)}: elements only, so nuclides aren't followed"] if labels else []


def _grids(population: Population, kind: str) -> list[YieldSet]:
    source = next(s for s in population.sources if s.kind == kind)
    return [g for entry in source.sets for g in entry.load(population.solar)]


def _winds(grids: Sequence[YieldSet]) -> str:
    told = dict.fromkeys(_COVERS.get(str(g.info.get("covers")), "doesn't say what it lists") for g in grids)
    return ", then ".join(told)


def _limits(own: Sequence[tuple[str, Population]]) -> list[str]:
    """Whether the mass functions form their 1 Msun between the same limits."""
    limits = [(label, f"{p.imf.limits[0]:g}-{p.imf.limits[1]:g} Msun") for label, p in own]
    if len({text for _, text in limits}) > 1:
        return [f"imf: the choices have different limits: {_grouped(limits)}"]
    return [f"imf: all choices form 1 Msun between {limits[0][1]}"]


def _grouped(pairs: Sequence[tuple[str, str]]) -> str:
    """Labels by what is said of them."""
    by_text: dict[str, list[str]] = {}
    for label, text in pairs:
        by_text.setdefault(text, []).append(label)
    return "; ".join(f"{text} ({braced(labels)})" for text, labels in by_text.items())
