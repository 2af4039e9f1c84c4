"""What of a population can be swapped, by name: the value it has, and the population with another one.

============================================  ====================================================
``agb``, ``core-collapse``, ``thermonuclear``  the yield sets of a source, by its kind
``KIND.limits``, ``KIND.winds``,              further keys of a source of stars
``KIND.events_from``, ``KIND.implode``
``delay``, ``number``                         of the delayed source, or ``KIND.delay``, ``KIND.number``
``imf``, ``imf.limits``                       the mass function; a form by name keeps the limits
``lifetimes``                                 the lifetime law
``join``                                      policy of all joins that are declared
``edges.below``, ``edges.above``,             what is done beyond the sets
``edges.metallicity``
``interpolation``, ``metallicity``, ``solar``  as in the population file
============================================  ====================================================
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from fnmatch import fnmatchcase
from typing import Any

from steelyard.yields.composition import mixture
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.grid import YieldSet
from steelyard.yields.library import catalogue, load
from steelyard.yields.units import plain

from ..imf import AnalyticIMF, imf
from ..lifetimes import LAWS, lifetimes
from ..population import Population
from ..sources import DelayedSource, Mixed, StellarSource, mass_range, mixed, set_id

#: in what order swaps are made: a form of the mass function before its limits, sets before their keys
_ORDER = ("metallicity", "solar", "imf", "imf.limits", "lifetimes", "interpolation")


@dataclass(frozen=True)
class Ingredient:
    """One thing of a population that can be swapped.

    Attributes
    ----------
    name : str
    swap : callable
        ``swap(population, value)`` gives the population with another value.
    tell : callable
        ``tell(population)`` gives the value it has, as text.
    stars, events : bool
        Whether it moves what stars eject when they die, and what delayed events do.
    """

    name: str
    swap: Callable[[Population, Any], Population]
    tell: Callable[[Population], str]
    stars: bool = True
    events: bool = False


def ingredients(population: Population) -> dict[str, Ingredient]:
    """Return what can be swapped in a population, by name, in the order in which it is.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> list(ingredients(Population(0.02, [StellarSource("agb", ["karakas-2010"])])))[:3]
    ['metallicity', 'solar', 'imf']
    """
    found = [
        Ingredient("metallicity", _metallicity, lambda p: f"{p.metallicity:g}", events=True),
        Ingredient("solar", _solar, lambda p: p.solar, events=True),
        Ingredient("imf", _imf, _imf_text),
        Ingredient("imf.limits", _imf_limits, lambda p: _range_text(p.imf.limits)),
        Ingredient("lifetimes", _lifetimes, _law_text),
        Ingredient(
            "interpolation", lambda p, v: replace(p, interpolation=_word(v)), lambda p: p.interpolation
        ),
    ]
    delayed = [s.kind for s in population.sources if isinstance(s, DelayedSource)]
    for source in population.sources:
        kind = source.kind
        late = isinstance(source, DelayedSource)
        found.append(Ingredient(kind, _sets(kind), _sets_text(kind), stars=not late, events=late))
        for key in ("delay", "number") if late else _STELLAR_KEYS[kind]:
            made = (_source_key(kind, key), _key_text(kind, key), not late, late)
            found.append(Ingredient(f"{kind}.{key}", *made))
            if late and len(delayed) == 1:
                found.append(Ingredient(key, *made))
    if population.joins:
        found.append(Ingredient("join", _join, _join_text))
    for key in ("below", "above", "metallicity"):
        found.append(Ingredient(f"edges.{key}", _edge(key), lambda p, key=key: getattr(p.edges, key)))
    return {one.name: one for one in found}


def ingredient(population: Population, name: str) -> Ingredient:
    """Return one ingredient of a population by its name.

    Raises
    ------
    InputError
        The population has no such ingredient.
    """
    known = ingredients(population)
    if name not in known:
        raise InputError(f"ingredient {name!r} isn't known", mend=nearest(name, known))
    return known[name]


_STELLAR_KEYS = {
    "agb": ("limits", "winds"),
    "core-collapse": ("limits", "winds", "events_from", "implode"),
}


def _word(value: Any) -> str:
    if not isinstance(value, str):
        raise InputError(f"{value!r} isn't a name", mend="give text")
    return value


def _metallicity(population: Population, value: Any) -> Population:
    return replace(population, metallicity=plain(value, "", "metallicity"))


def _solar(population: Population, value: Any) -> Population:
    return replace(population, solar=mixture(_word(value)).id)


def _imf(population: Population, value: Any) -> Population:
    if isinstance(value, str):
        value = {"form": value}
    if isinstance(value, Mapping):
        if "form" not in value:
            raise InputError("a mass function needs its form", mend='such as {form = "salpeter-1955"}')
        # only what is swapped may differ: the limits stay, or the mass formed would be another one
        value = imf(**{"limits": population.imf.limits, **value})
    return replace(population, imf=value)


def _imf_limits(population: Population, value: Any) -> Population:
    given = population.imf
    if not isinstance(given, AnalyticIMF):
        raise InputError("a mass function given as a function has its own limits")
    kept = {k: v for k, v in given.to_dict().items() if k != "limits"}
    return replace(population, imf=imf(**kept, limits=mass_range(_pair(value), "imf.limits")))


def _imf_text(population: Population) -> str:
    given = population.imf.to_dict()
    more = [f"{k}={_number_text(v)}" for k, v in given.items() if k not in ("form", "limits")]
    return " ".join([given["form"], *more])


def _lifetimes(population: Population, value: Any) -> Population:
    if isinstance(value, str) and value != "sets" and value not in LAWS:
        raise InputError(f"lifetimes {value!r} isn't known", mend=nearest(value, (*LAWS, "sets")))
    if value != "sets":
        lifetimes(value)
    return replace(population, lifetimes=value)


def _law_text(population: Population) -> str:
    given = population.lifetimes
    return given if isinstance(given, str) else getattr(given, "__qualname__", type(given).__name__)


def _join(population: Population, value: Any) -> Population:
    return replace(population, joins=tuple(replace(j, policy=_word(value)) for j in population.joins))


def _join_text(population: Population) -> str:
    return ", ".join(dict.fromkeys(j.policy for j in population.joins))


def _edge(key: str) -> Callable[[Population, Any], Population]:
    return lambda p, value: replace(p, edges=replace(p.edges, **{key: _word(value)}))


def _sets(kind: str) -> Callable[[Population, Any], Population]:
    def swap(population: Population, value: Any) -> Population:
        entries = series(value)
        for entry in entries:
            entry.load(population.solar)
        changed = _changed(population, kind, sets=entries)
        # a join between two sets of the old series has nothing to join in the new one
        names = {*population.kinds, *(e.name for s in changed.sources for e in s.sets)}
        return replace(changed, joins=tuple(j for j in population.joins if set(j.between) <= names))

    return swap


def _sets_text(kind: str) -> Callable[[Population], str]:
    return lambda p: "+".join(_entry_text(entry) for entry in _source(p, kind).sets)


def _entry_text(entry: Mixed) -> str:
    if len(entry.sets) == 1:
        return set_id(entry.sets[0])
    return "/".join(f"{set_id(one)}:{share:g}" for one, share in zip(entry.sets, entry.shares, strict=True))


def _source_key(kind: str, key: str) -> Callable[[Population, Any], Population]:
    def swap(population: Population, value: Any) -> Population:
        if key == "limits":
            value = None if value == "sets" else _pair(value)
        elif key == "implode":
            value = [] if value in ("none", []) else _windows(value)
        return _changed(population, kind, **{key: value})

    return swap


def _key_text(kind: str, key: str) -> Callable[[Population], str]:
    def tell(population: Population) -> str:
        value = getattr(_source(population, kind), key)
        if key == "delay":
            given = value.to_dict()
            more = [f"{k}={_number_text(v)}" for k, v in given.items() if k != "form"]
            return " ".join([given["form"], *more])
        if key == "limits":
            return "sets" if value is None else _range_text(value)
        if key == "implode":
            return ", ".join(_range_text(w) for w in value) or "none"
        return value if isinstance(value, str) else f"{value:g}"

    return tell


def _source(population: Population, kind: str) -> StellarSource | DelayedSource:
    return next(s for s in population.sources if s.kind == kind)


def _changed(population: Population, kind: str, **given: Any) -> Population:
    return replace(
        population, sources=tuple(replace(s, **given) if s.kind == kind else s for s in population.sources)
    )


def _pair(value: Any) -> Any:
    """Two masses, also as text such as 13-40."""
    if isinstance(value, str):
        return [part.strip() for part in value.split("-")]
    return value


def _windows(value: Any) -> Any:
    """Windows of mass: one as text, or a list of pairs."""
    return [_pair(value)] if isinstance(value, str) else value


def _range_text(value: Sequence[float]) -> str:
    return f"{value[0]:g}-{value[1]:g}"


def _number_text(value: Any) -> str:
    if isinstance(value, (list, tuple)):
        return ",".join(_number_text(one) for one in value)
    return f"{value:g}" if isinstance(value, float) else str(getattr(value, "__qualname__", value))


def series(value: Any) -> tuple[Mixed, ...]:
    """Read the yield sets of a source: one, or several in series, as text or as they are.

    Parameters
    ----------
    value : str, YieldSet, mapping or sequence
        In text ``+`` parts sets in series and ``/`` the sets of a mixture, each with ``:`` and
        its share: ``"karakas-2010+doherty-2014"``, ``"iwamoto-1999-W7:0.7/iwamoto-1999-WDD2:0.3"``.

    Returns
    -------
    tuple of Mixed

    Raises
    ------
    InputError
        A set isn't known, or shares don't sum to 1.

    Examples
    --------
    >>> [one.name for one in series("karakas-2010+doherty-2014")]
    ['karakas-2010', 'doherty-2014']
    >>> series("iwamoto-1999-W7:0.7/iwamoto-1999-WDD2:0.3")[0].shares
    (0.7, 0.3)
    """
    if isinstance(value, (YieldSet, Mapping, Mixed)):
        value = [value]
    if not isinstance(value, str):
        return tuple(mixed(one) for one in value)
    if value in catalogue():  # a set of one's own may have a plus in its id
        return (mixed(value),)
    return tuple(_mixture(part.strip()) for part in value.split("+"))


def _mixture(text: str) -> Mixed:
    parts = [part.rpartition(":") for part in text.split("/")] if ":" in text else [("", "", text)]
    for name, _, rest in parts:
        known = name.strip() or rest
        if known not in catalogue():
            raise InputError(
                f"yield set {known!r} isn't known" if known else "a yield set lacks its name",
                mend=nearest(known, catalogue()),
            )
    if ":" not in text:
        return mixed(text)
    for name, _, rest in parts:
        if not name:
            raise InputError(f"{rest} has no share in the mixture", mend=f"write {rest}:0.5")
    return mixed({name.strip(): plain(share, "", f"share of {name}") for name, _, share in parts})


def matching(pattern: str, kind: str) -> list[str]:
    """Return the ids of all yield sets of a kind that match a pattern with ``*`` or ``?``.

    Raises
    ------
    InputError
        There is none.

    Examples
    --------
    >>> matching("limongi-chieffi-2018-R-*", "core-collapse")[0]
    'limongi-chieffi-2018-R-v000'
    """
    found = [one for one in catalogue() if fnmatchcase(one, pattern)]
    fit = [one for one in found if load(one).kind == kind] or found
    if not fit:
        raise InputError(f"no yield set matches {pattern!r}", mend=nearest(pattern, catalogue()))
    return fit
