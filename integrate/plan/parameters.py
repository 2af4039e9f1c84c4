"""Names of what may vary between two calls of a plan, and where in the population they act.

======================================  =====================================================
``metallicity``                         mass fraction of metals at birth
``imf.slopes[i]``                       slope of the i-th power-law piece inside the limits
``imf.breaks[i]``                       mass of the i-th break inside the limits, Msun
``imf.limits[0]``, ``imf.limits[1]``    limits of the mass function, Msun
``SOURCE.number``                       events of a delayed source per Msun formed
``SOURCE.delay.KEY``                    a number of its delay: slope, slopes[i], timescale,
                                        limits[i], breaks[i]
``SOURCE.events_from``                  lowest mass of core-collapse events, Msun
``SOURCE.share[SET]``                   share of a set in the source's mixture; the sets that
                                        aren't free fill the rest in their own proportions
``scale[SOURCE, SPECIES]``              factor on a source's yield of a species
======================================  =====================================================

An index may be negative, as in Python: ``imf.slopes[-1]`` is the slope of the most massive stars.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from steelyard.yields.errors import InputError, nearest
from steelyard.yields.nuclides import parse

from ..imf import AnalyticIMF
from ..population import Population
from ..sources import DelayedSource, StellarSource, set_id

_INDEXED = re.compile(r"(?P<key>[\w.-]+)\[(?P<index>-?\d+)\]")
_SHARE = re.compile(r"(?P<source>[\w-]+)\.share\[(?P<set>[^\]]+)\]")
_SCALE = re.compile(r"scale\[\s*(?P<source>[^,\]]+?)\s*,\s*(?P<species>[^\]]+?)\s*\]")


@dataclass(frozen=True)
class Parameter:
    """One free number of a plan.

    Attributes
    ----------
    name : str
        As the caller wrote it.
    kind : str
        metallicity, slope, break, limit, number, delay, events_from, share or scale.
    value : float
        What the population itself has.
    source : int
        Position of the source it belongs to, or -1.
    key : str
        Of a delay its attribute, of a share the set, of a scale the species.
    index : int
        In a list of slopes, breaks or limits.
    """

    name: str
    kind: str
    value: float
    source: int = -1
    key: str = ""
    index: int = 0


def parameters(names: Sequence[str], population: Population, species: Sequence[str]) -> tuple[Parameter, ...]:
    """Find what names of free parameters stand for.

    Parameters
    ----------
    names : sequence of str
    population : Population
    species : sequence of str
        Of the plan's results.

    Returns
    -------
    tuple of Parameter

    Raises
    ------
    InputError
        A name isn't known, stands for nothing in this population, or is there twice.
    """
    if isinstance(names, str):
        raise InputError("free parameters must be a list of names", mend=f'such as ["{names}"]')
    twice = sorted({n for n in names if list(names).count(n) > 1})
    if twice:
        raise InputError(f"free parameter {twice[0]!r} is named twice")
    return tuple(_find(name, population, species) for name in names)


def _find(name: str, population: Population, species: Sequence[str]) -> Parameter:
    if name == "metallicity":
        return Parameter(name, "metallicity", population.metallicity)
    scale, share = _SCALE.fullmatch(name), _SHARE.fullmatch(name)
    if scale:
        at = _source(scale["source"], population, name)
        one = parse(scale["species"]).name
        if one not in species:
            raise InputError(f"{name}: {one} isn't in the plan", mend=nearest(one, species))
        return Parameter(name, "scale", 1.0, at, one)
    if share:
        return _share(name, share["source"], share["set"], population)
    if name.startswith("imf."):
        return _imf(name, population)
    head, _, key = name.partition(".")
    if not key:
        raise InputError(f"free parameter {name!r} isn't known", mend=nearest(name, candidates(population)))
    at = _source(head, population, name)
    source = population.sources[at]
    if key == "events_from" and isinstance(source, StellarSource) and source.kind == "core-collapse":
        entries = [m.name for m in source.sets]
        own = min(s.lo for s in population.prepared.spans if s.how in entries)
        if any(lo < own for lo, *_ in source.implosions):
            raise InputError(
                f"{name} can't be free where stars that implode stand below the source's models",
                mend=f"let implode begin at {own:g} Msun",
            )
        return Parameter(name, "events_from", source.events_from, at)
    if isinstance(source, DelayedSource):
        if key == "number":
            return Parameter(name, "number", source.number, at)
        if key.startswith("delay."):
            return _delay(name, at, key.removeprefix("delay."), source)
    raise InputError(f"free parameter {name!r} isn't known", mend=nearest(name, candidates(population)))


def _source(kind: str, population: Population, name: str) -> int:
    if kind not in population.kinds:
        raise InputError(f"{name}: there is no source {kind!r}", mend=nearest(kind, population.kinds))
    return population.kinds.index(kind)


def _imf(name: str, population: Population) -> Parameter:
    mass_function = population.imf
    if not isinstance(mass_function, AnalyticIMF):
        raise InputError(f"{name}: a mass function given as a function has no free parameters")
    lists = {
        "imf.slopes": [p.slope for p in mass_function.pieces if not p.curvature],
        "imf.breaks": list(mass_function.breaks),
        "imf.limits": list(mass_function.limits),
    }
    found = _INDEXED.fullmatch(name)
    if not found or found["key"] not in lists:
        raise InputError(f"free parameter {name!r} isn't known", mend=nearest(name, candidates(population)))
    at = _index(name, int(found["index"]), lists[found["key"]])
    kind = found["key"].removeprefix("imf.").removesuffix("s")
    return Parameter(name, kind, float(lists[found["key"]][at]), key="imf", index=at)


def _delay(name: str, at: int, key: str, source: DelayedSource) -> Parameter:
    values = {k: v for k, v in source.delay.to_dict().items() if k != "form"}
    found = _INDEXED.fullmatch(key)
    stem = found["key"] if found else key
    if stem not in values:
        raise InputError(f"{name}: the delay has no {stem!r}", mend=nearest(stem, values))
    value: Any = values[stem]
    if not found:
        if isinstance(value, (list, tuple)):
            raise InputError(f"{name} is a list", mend=f"say which, such as {name}[0]")
        return Parameter(name, "delay", float(value), at, stem, -1)
    index = _index(name, int(found["index"]), value)
    return Parameter(name, "delay", float(value[index]), at, stem, index)


def _share(name: str, kind: str, id: str, population: Population) -> Parameter:
    at = _source(kind, population, name)
    mixtures = [m for m in population.sources[at].sets if len(m.sets) > 1]
    known = [set_id(s) for m in mixtures for s in m.sets]
    if known.count(id) > 1:
        raise InputError(f"{name}: {id} is in two mixtures of the source")
    for mixture in mixtures:
        for one, value in zip(mixture.sets, mixture.shares, strict=True):
            if set_id(one) == id:
                return Parameter(name, "share", value, at, id)
    mend = nearest(id, known) if known else "write its sets with shares, { a = 0.5, b = 0.5 }"
    raise InputError(f"{name}: {id} isn't in a mixture of {kind}", mend=mend)


def _index(name: str, index: int, values: Sequence[float]) -> int:
    if not -len(values) <= index < len(values):
        raise InputError(f"{name}: there are only {len(values)}", mend="count from 0")
    return index % len(values)


def candidates(population: Population) -> list[str]:
    """Return the names that can be freed in a population, but for scale factors and shares.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> candidates(Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])]))[:3]
    ['metallicity', 'imf.slopes[0]', 'imf.slopes[1]']
    """
    out = ["metallicity"]
    mass_function = population.imf
    if isinstance(mass_function, AnalyticIMF):
        slopes = [p for p in mass_function.pieces if not p.curvature]
        out += [f"imf.slopes[{i}]" for i in range(len(slopes))]
        out += [f"imf.breaks[{i}]" for i in range(len(mass_function.breaks))]
        out += ["imf.limits[0]", "imf.limits[1]"]
    for source in population.sources:
        if isinstance(source, DelayedSource):
            out.append(f"{source.kind}.number")
            for key, value in source.delay.to_dict().items():
                if isinstance(value, (list, tuple)):
                    out += [f"{source.kind}.delay.{key}[{i}]" for i in range(len(value))]
                elif isinstance(value, float):
                    out.append(f"{source.kind}.delay.{key}")
        elif source.kind == "core-collapse":
            out.append(f"{source.kind}.events_from")
    return out
