"""What yields rest on, told: in a sentence, in JSON, in CSV."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from ..provenance import provenance
from ..results import Convention
from ..tidy import write_tidy
from .nodes import positions
from .ranking import BIRTH, Contributor, Leverage, share_of


def sentence(found: Leverage, species: str, age: int = -1, convention: Convention = "total") -> str:
    """Return in words how far a yield moves where its weightiest model is wrong by a factor of 2.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> from steelyard.integrate.leverage.ranking import leverage
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O"])
    >>> print(sentence(leverage(stars, ["1 Gyr"]), "O"))
    If the model of 40 Msun at Z = 0.02 of kobayashi-2006 is wrong by a factor of 2 in O, the total yield
    of O moves by +0.106 dex (twice as much) or -0.065 dex (half as much).
    """
    models = [c for c in found.ranked(species, age, convention, top=1) if c.model]
    if not models:
        return f"{species}: no published model makes any of it by then."
    one = models[0]
    event = one.model.mass is None
    where = "event" if event else f"model of {one.model.mass:g} Msun at Z = {one.model.metallicity:g}"
    ways = [
        f"{move:+.3f} dex ({way})" if np.isfinite(move) else f"below zero ({way})"
        for move, way in ((one.doubled, "twice as much"), (one.halved, "half as much"))
    ]
    return (
        f"If the {where} of {one.model.set} is wrong by a factor of 2 in {species},"
        f" the {convention} yield of {species} moves by {' or '.join(ways)}."
    )


def to_dict(
    found: Leverage, species: Sequence[str], convention: Convention = "total", top: int | None = None
) -> dict[str, Any]:
    """Return everything as plain lists, in the layout of ``steelyard leverage --json``.

    Parameters
    ----------
    species : sequence of str
    convention : {"total", "net"}
    top : int, optional
        How many models to rank.

    Returns
    -------
    dict
        ``contribution`` holds all models in the order of ``models``, by source, species and age.
    """
    result = found.result
    at = range(len(result.ages))
    parameters = {}
    for name, (value, total, net) in found.by_parameter.items():
        slope = total if convention == "total" else net
        by = {s: slope[:, positions(result.species, s)].sum(axis=1).tolist() for s in species}
        parameters[name] = {"value": value, "derivative": by}
    return {
        "metallicity": found.population.metallicity,
        "convention": convention,
        "ages_yr": result.ages.tolist(),
        "species": list(species),
        "sources": list(result.sources),
        "yield": {s: result.get(s, None, convention).tolist() for s in species},
        "models": [
            {"set": m.set, "metallicity": m.metallicity, "mass": m.mass, "source": m.source}
            for m in found.models
        ],
        "contribution": {
            source: {s: found.contribution(s)[i].tolist() for s in species}
            for i, source in enumerate(result.sources)
        },
        "birth_composition": {
            source: {s: found.birth(s, convention)[i].tolist() for s in species}
            for i, source in enumerate(result.sources)
        },
        "ranked": {s: [[_told(c) for c in found.ranked(s, t, convention, top)] for t in at] for s in species},
        "ranges": {
            s: [one | {"amount": one["amount"].tolist()} for one in found.ranges(s, convention)]
            for s in species
        },
        "parameters": parameters,
        "sentences": {s: [sentence(found, s, t, convention) for t in at] for s in species},
        "notes": list(result.notes),
    }


def write_csv(
    found: Leverage, path: str | Path, species: Sequence[str], convention: Convention = "total"
) -> None:
    """Write every contribution as a tidy table, its origin in comment lines above it.

    Parameters
    ----------
    path : str or Path
        A file there is replaced, whole or not at all.
    species : sequence of str
    convention : {"total", "net"}

    Raises
    ------
    InputError
        The file can't be written.

    Notes
    -----
    A row for each age, species, contributor and source that its ejecta count for: age_yr,
    species, set, metallicity, mass, source, amount (Msun per Msun formed), share (of the
    yield of all sources), printed (Msun). Birth composition has no metallicity, mass and
    printed figure; events have no metallicity and mass. The amounts sum to the yield.
    """
    heads = ["age_yr", "species", "set", "metallicity", "mass", "source", f"amount_{convention}", "share"]
    rows = (row for name in species for row in _rows(found, name, convention))
    write_tidy(path, provenance(found.result), [*heads, "printed"], rows)


def _rows(found: Leverage, name: str, convention: Convention) -> Iterator[list[Any]]:
    result = found.result
    whole = result.get(name, None, convention)
    amounts, births = found.contribution(name), found.birth(name, convention)
    printed = found.nodes.printed[:, positions(result.species, name)].sum(axis=1)
    for t, age in enumerate(result.ages.tolist()):
        for i, source in enumerate(result.sources):
            for k in np.flatnonzero(amounts[i, t]):
                m, amount = found.models[k], float(amounts[i, t, k])
                share = share_of(amount, float(whole[t]))
                row = [m.set, m.metallicity, m.mass, source, amount, share, float(printed[k])]
                yield [age, name, *("" if v is None else v for v in row)]
            if births[i, t]:
                amount = float(births[i, t])
                yield [age, name, BIRTH, "", "", source, amount, share_of(amount, float(whole[t])), ""]


def _told(one: Contributor) -> dict[str, Any]:
    """A contributor as JSON can hold it."""
    values = {
        "name": one.name,
        "set": one.model.set if one.model else None,
        "metallicity": one.model.metallicity if one.model else None,
        "mass": one.model.mass if one.model else None,
        "source": one.source,
        "amount": one.amount,
        "share": one.share,
        "printed": one.printed,
        "derivative": one.derivative,
        "doubled_dex": one.doubled,
        "halved_dex": one.halved,
    }
    return {k: None if isinstance(v, float) and not np.isfinite(v) else v for k, v in values.items()}
