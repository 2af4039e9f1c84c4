"""What is declared about a population: who ejects, where one source gives way to the next."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

from steelyard.yields.curve import METHODS
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.grid import YieldSet
from steelyard.yields.units import plain

from .delays import Delay, delay
from .failures import FailureTable, mass_range
from .failures import implosions as read_implosions
from .laws import (
    Given,
    SlopeLaw,
    VaryingDelay,
    law_of,
    named,
    number_law,
    slope_law,
    with_law,
)
from .mixtures import Mixed, SetChoice, mixed, set_id
from .popvalues import told

__all__ = [
    "EDGE_ABOVE",
    "EDGE_BELOW",
    "JOIN_POLICIES",
    "REMNANTS",
    "STELLAR_KINDS",
    "DelayedSource",
    "Edges",
    "FailureTable",
    "Join",
    "Mixed",
    "SetChoice",
    "Source",
    "StellarSource",
    "interpolation",
    "mass_range",
    "mixed",
    "set_id",
]

#: kinds of source whose stars eject when they die
STELLAR_KINDS = ("agb", "core-collapse")

#: what is done between the top mass of one source (or set) and the bottom of the next
JOIN_POLICIES = ("bridge", "reach-up", "reach-down", "return-only", "swallow")

#: what is done with stars under the lowest or over the highest mass of any source
EDGE_BELOW = ("swallow", "reach-down", "return-only")
EDGE_ABOVE = ("swallow", "reach-up", "return-only")

REMNANTS = ("white dwarf", "neutron star", "black hole")


@dataclass(frozen=True)
class StellarSource:
    """Stars of one kind, ejecting when they die.

    Attributes
    ----------
    kind : {"agb", "core-collapse"}
    sets : sequence
        Set ids, YieldSets or mixtures (mapping of id to share), in series: each
        serves the masses where it has models and the ones before it have none. In a
        mixture, ``from`` and ``to`` (Msun) keep it to some masses, and with
        ``metallicities`` each share is a list, one for each, linear in Z between.
    limits : pair, optional
        Initial masses served, Msun; default: all that the sets cover.
    events_from : float
        Lowest initial mass that dies as a core-collapse event, Msun.
    implode : sequence of pairs, or mapping
        Windows of initial mass that implode and eject their wind only, Msun; or
        ``{"masses": [...], "probability": [...]}``: the probability to implode between each
        mass and the next, one fewer than masses, and 0 outside of them.
    winds : {"birth", "rest"}
        For sets that list only the explosion: whether the wind is returned with
        birth composition, or counted as ejected but given to no species.
    neutron_star_limit : float
        Remnants above this mass are black holes, Msun. Of core-collapse only.
    """

    kind: str
    sets: Sequence[Any]
    limits: Any = None
    events_from: Any = 8.0
    implode: Any = ()
    winds: str = "birth"
    neutron_star_limit: Any = 2.5

    def __post_init__(self) -> None:
        where = f"source {self.kind}"
        if self.kind not in STELLAR_KINDS:
            raise InputError(
                f"kind {self.kind!r} isn't one of {', '.join(STELLAR_KINDS)}",
                where=where,
                mend="a source of another kind needs a delay and a number",
            )
        if isinstance(self.sets, (str, YieldSet, Mapping)) or not self.sets:
            raise InputError(
                "sets must be a list of at least one set", where=where, mend='such as ["kobayashi-2006"]'
            )
        if self.winds not in ("birth", "rest"):
            raise InputError(
                f"winds {self.winds!r} isn't known", where=where, mend='choose "birth" or "rest"'
            )
        put = object.__setattr__
        put(self, "sets", tuple(mixed(s, where) for s in self.sets))
        put(self, "limits", None if self.limits is None else mass_range(self.limits, f"{where}: limits"))
        put(self, "implode", read_implosions(self.implode, f"{where}: implode"))
        for name in ("events_from", "neutron_star_limit"):
            value = plain(getattr(self, name), "Msun", name, where=where)
            if value <= 0:
                raise InputError(f"{name} must be positive, not {value:g} Msun", where=where)
            put(self, name, value)

    def at(self, metallicity: float) -> StellarSource:
        """Return the source with the shares that its laws give at a metallicity."""
        with told(f"source {self.kind}"):
            sets = tuple(entry.at(metallicity) for entry in self.sets)
        same = all(a is b for a, b in zip(sets, self.sets, strict=True))
        return self if same else replace(self, sets=sets)

    @property
    def implosions(self) -> tuple[tuple[float, float, float], ...]:
        """Ranges of initial mass, Msun, with the probability that a star there implodes."""
        if isinstance(self.implode, FailureTable):
            ranges = zip(pairwise(self.implode.masses), self.implode.probability, strict=True)
            return tuple((lo, hi, p) for (lo, hi), p in ranges)
        return tuple((lo, hi, 1.0) for lo, hi in self.implode)

    def to_dict(self) -> dict[str, Any]:
        """Return the source as a ``[[source]]`` table of the population file."""
        out: dict[str, Any] = {"kind": self.kind, "sets": [_entry(m) for m in self.sets]}
        if self.limits is not None:
            out["limits"] = list(self.limits)
        if self.kind == "core-collapse":
            out["events_from"] = self.events_from
            table = isinstance(self.implode, FailureTable)
            out["implode"] = self.implode.to_dict() if table else [list(w) for w in self.implode]
            out["winds"] = self.winds
            out["neutron_star_limit"] = self.neutron_star_limit
        return out


@dataclass(frozen=True)
class DelayedSource:
    """Events that follow star formation after a delay, such as Type Ia supernovae.

    Attributes
    ----------
    kind : str
        ``"thermonuclear"``, or a name of the user's own.
    sets : sequence
        One entry: the set of the event's yields, or a mixture.
    number : float, or callable
        Events per Msun formed, over the delay's own limits. A function of metallicity, such
        as a `NumberLaw`, gives it at the population's.
    delay : Delay, mapping, or callable
        Distribution of delay times. In a mapping a slope may be a `SlopeLaw`; a function of
        metallicity gives a delay or a mapping.
    consumes : {"white dwarf", "neutron star", "black hole"}
        The remnant that an event uses up.
    """

    kind: str
    sets: Sequence[Any]
    number: Any
    delay: Any
    consumes: str = "white dwarf"

    def __post_init__(self) -> None:
        where = f"source {self.kind}"
        if self.kind in STELLAR_KINDS:
            raise InputError(
                f"kind {self.kind!r} takes no delay", where=where, mend="its stars eject when they die"
            )
        if isinstance(self.sets, (str, YieldSet, Mapping)) or len(self.sets) != 1:
            raise InputError(
                "a delayed source needs a list of one set",
                where=where,
                mend='name one, such as ["nomoto-1997-w7"], or a mixture [{ "a" = 0.5, "b" = 0.5 }]',
            )
        if self.consumes not in REMNANTS:
            raise InputError(
                f"consumes {self.consumes!r} isn't a remnant",
                where=where,
                mend=nearest(self.consumes, REMNANTS),
            )
        put = object.__setattr__
        put(self, "sets", tuple(mixed(s, where) for s in self.sets))
        if self.sets[0].limits != (None, None):
            raise InputError(
                "events have no initial mass, so from and to mean nothing", where=where, mend="leave them out"
            )
        with told(where):
            if isinstance(self.number, Mapping):
                put(self, "number", number_law(self.number, "number"))
            if not callable(self.number):
                number = plain(self.number, "1/Msun", "number")
                if number < 0:
                    raise InputError(f"number is negative: {number:g} per Msun")
                put(self, "number", self.number if isinstance(self.number, Given) else number)
            if isinstance(self.delay, Mapping):
                spec = {k: _slopes(v, f"delay.{k}") for k, v in self.delay.items()}
                if any(isinstance(v, SlopeLaw) for v in _flat(spec.values())):
                    put(self, "delay", VaryingDelay(spec))
        if not isinstance(self.delay, Delay) and not callable(self.delay):
            put(self, "delay", delay(self.delay, where))

    def at(self, metallicity: float) -> DelayedSource:
        """Return the source with what its laws give at a metallicity."""
        where = f"source {self.kind}"
        given: dict[str, Any] = {}
        with told(where):
            law = self.number if callable(self.number) else law_of(self.number)
            if law:
                value = plain(law(metallicity), "1/Msun", f"number at Z = {metallicity:g}")
                if value < 0:
                    raise InputError(f"number at Z = {metallicity:g} is negative: {value:g} per Msun")
                given["number"] = Given(value, law)
            law = self.delay if not isinstance(self.delay, Delay) else law_of(self.delay)
            if law:
                given["delay"] = with_law(delay(law(metallicity)), law)
        sets = tuple(entry.at(metallicity) for entry in self.sets)
        if any(a is not b for a, b in zip(sets, self.sets, strict=True)):
            given["sets"] = sets
        return replace(self, **given) if given else self

    def to_dict(self) -> dict[str, Any]:
        """Return the source as a ``[[source]]`` table of the population file."""
        return {
            "kind": self.kind,
            "sets": [_entry(m) for m in self.sets],
            "number": _held(self.number),
            "delay": _held(self.delay),
            "consumes": self.consumes,
        }


@dataclass(frozen=True)
class Join:
    """What happens between two neighbouring sources, or two sets in series within one.

    Attributes
    ----------
    between : pair of str
        Kinds of the two sources, or ids of the two sets, the lower mass first.
    policy : str
        One of `JOIN_POLICIES`.
    """

    between: tuple[str, str]
    policy: str = "bridge"

    def __post_init__(self) -> None:
        if isinstance(self.between, str) or len(self.between) != 2:
            raise InputError("join.between needs two names", mend='such as ["agb", "core-collapse"]')
        object.__setattr__(self, "between", tuple(self.between))
        _policy(self.policy, JOIN_POLICIES, f"join between {' and '.join(self.between)}")

    def to_dict(self) -> dict[str, Any]:
        """Return the join as a ``[[join]]`` table of the population file."""
        return {"between": list(self.between), "policy": self.policy}


@dataclass(frozen=True)
class Edges:
    """What happens beyond the sets: in mass below and above, and in metallicity.

    Attributes
    ----------
    below : str
        One of `EDGE_BELOW`: for stars under the lowest mass of any source.
    above : str
        One of `EDGE_ABOVE`: for stars over the highest.
    metallicity : {"hold", "refuse"}
        Outside a set's metallicities, hold the edge slice or refuse.
    """

    below: str = "swallow"
    above: str = "swallow"
    metallicity: str = "hold"

    def __post_init__(self) -> None:
        _policy(self.below, EDGE_BELOW, "edges.below")
        _policy(self.above, EDGE_ABOVE, "edges.above")
        _policy(self.metallicity, ("hold", "refuse"), "edges.metallicity")

    def to_dict(self) -> dict[str, Any]:
        """Return the edges as the population file's ``[edges]`` table."""
        return {"below": self.below, "above": self.above, "metallicity": self.metallicity}


Source = StellarSource | DelayedSource


def _policy(given: str, known: Sequence[str], where: str) -> None:
    if given not in known:
        raise InputError(f"policy {given!r} isn't known", where=where, mend=f"choose {', '.join(known)}")


def _entry(one: Mixed) -> Any:
    return one.to_entry([set_id(s) for s in one.sets])


def _held(value: Any) -> Any:
    """A number or a delay as a population file holds it: as its law, where a file can hold that."""
    law = value if callable(value) else law_of(value)
    if hasattr(law, "to_dict"):
        return law.to_dict()
    if callable(value):
        return named(value)
    return value.to_dict() if isinstance(value, Delay) else float(value)


def _slopes(value: Any, where: str) -> Any:
    """Read the laws among the numbers of a delay."""
    if isinstance(value, Mapping):
        return slope_law(value, where)
    return [_slopes(one, where) for one in value] if isinstance(value, (list, tuple)) else value


def _flat(values: Any) -> Any:
    for value in values:
        yield from value if isinstance(value, (list, tuple)) else (value,)


def interpolation(method: str) -> str:
    """Check the name of an interpolation in mass."""
    if method not in METHODS:
        raise InputError(f"interpolation {method!r} isn't known", mend=f"choose {' or '.join(METHODS)}")
    return method
