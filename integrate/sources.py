"""What is declared about a population: who ejects, where one source gives way to the next."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from steelyard.yields.curve import METHODS
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.grid import YieldSet
from steelyard.yields.library import load
from steelyard.yields.units import plain

from .delays import Delay, delay

#: kinds of source whose stars eject when they die
STELLAR_KINDS = ("agb", "core-collapse")

#: what is done between the top mass of one source (or set) and the bottom of the next
JOIN_POLICIES = ("bridge", "reach-up", "reach-down", "return-only", "swallow")

#: what is done with stars under the lowest or over the highest mass of any source
EDGE_BELOW = ("swallow", "reach-down", "return-only")
EDGE_ABOVE = ("swallow", "reach-up", "return-only")

REMNANTS = ("white dwarf", "neutron star", "black hole")

SetChoice = str | YieldSet


@dataclass(frozen=True)
class Mixed:
    """Sets that share the same stars or events.

    Attributes
    ----------
    sets : tuple of str or YieldSet
    shares : tuple of float
        Positive, summing to 1.
    """

    sets: tuple[SetChoice, ...]
    shares: tuple[float, ...]

    def __post_init__(self) -> None:
        if not self.sets or len(self.sets) != len(self.shares):
            raise InputError(
                "a mixture needs one share for each set", mend='such as { "set-a" = 0.7, "set-b" = 0.3 }'
            )
        if min(self.shares) < 0 or abs(sum(self.shares) - 1) > 1e-9:
            raise InputError(
                f"shares of a mixture must be positive and sum to 1, not {sum(self.shares):g}",
                mend="scale the shares",
            )

    @property
    def name(self) -> str:
        """The ids of the sets with their shares."""
        if len(self.sets) == 1:
            return set_id(self.sets[0])
        return " + ".join(
            f"{share:g} {set_id(one)}" for one, share in zip(self.sets, self.shares, strict=True)
        )

    def load(self, solar: str) -> tuple[YieldSet, ...]:
        """Return the sets themselves, loading those given by id."""
        return tuple(one if isinstance(one, YieldSet) else load(one, solar) for one in self.sets)


def set_id(one: SetChoice) -> str:
    """Return the id of a set given by id or as itself."""
    return one.id if isinstance(one, YieldSet) else one


def mixed(entry: Any, where: str = "") -> Mixed:
    """Read one entry of a source's ``sets``: an id, a YieldSet, or a mapping of ids to shares."""
    if isinstance(entry, Mixed):
        return entry
    if isinstance(entry, (str, YieldSet)):
        return Mixed((entry,), (1.0,))
    if isinstance(entry, Mapping):
        shares = tuple(plain(v, "", f"share of {set_id(k)}", where=where) for k, v in entry.items())
        return Mixed(tuple(entry), shares)
    raise InputError(
        f"a set can't be read from {entry!r}",
        where=where,
        mend='give an id, or { "id" = share, ... } for a mixture',
    )


@dataclass(frozen=True)
class StellarSource:
    """Stars of one kind, ejecting when they die.

    Attributes
    ----------
    kind : {"agb", "core-collapse"}
    sets : sequence
        Set ids, YieldSets or mixtures (mapping of id to share), in series: each
        serves the masses where it has models and the ones before it have none.
    limits : pair, optional
        Initial masses served, Msun; default: all that the sets cover.
    events_from : float
        Lowest initial mass that dies as a core-collapse event, Msun.
    implode : sequence of pairs
        Windows of initial mass that implode and eject their wind only, Msun.
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
        put(self, "implode", tuple(mass_range(w, f"{where}: implode") for w in self.implode))
        for name in ("events_from", "neutron_star_limit"):
            value = plain(getattr(self, name), "Msun", name, where=where)
            if value <= 0:
                raise InputError(f"{name} must be positive, not {value:g} Msun", where=where)
            put(self, name, value)

    def to_dict(self) -> dict[str, Any]:
        """Return the source as a ``[[source]]`` table of the population file."""
        out: dict[str, Any] = {"kind": self.kind, "sets": [_entry(m) for m in self.sets]}
        if self.limits is not None:
            out["limits"] = list(self.limits)
        if self.kind == "core-collapse":
            out["events_from"] = self.events_from
            out["implode"] = [list(w) for w in self.implode]
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
    number : float
        Events per Msun formed, over the delay's own limits.
    delay : Delay or mapping
        Distribution of delay times.
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
        number = plain(self.number, "1/Msun", "number", where=where)
        if number < 0:
            raise InputError(f"number is negative: {number:g} per Msun", where=where)
        put = object.__setattr__
        put(self, "sets", tuple(mixed(s, where) for s in self.sets))
        put(self, "number", number)
        put(self, "delay", self.delay if isinstance(self.delay, Delay) else delay(self.delay, where))

    def to_dict(self) -> dict[str, Any]:
        """Return the source as a ``[[source]]`` table of the population file."""
        return {
            "kind": self.kind,
            "sets": [_entry(m) for m in self.sets],
            "number": self.number,
            "delay": self.delay.to_dict(),
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


def mass_range(value: Any, name: str) -> tuple[float, float]:
    """Read a pair of masses, Msun, the lower first.

    Raises
    ------
    InputError
        Not two masses, negative, or not in order.
    """
    array = plain(value, "Msun", name)
    if getattr(array, "shape", ()) != (2,):
        raise InputError(f"{name} needs two masses", mend='such as ["13 Msun", "40 Msun"]')
    lo, hi = float(array[0]), float(array[1])
    if lo <= 0:
        raise InputError(f"{name}: mass isn't positive: {lo:g} Msun", mend="give masses above 0")
    if lo >= hi:
        raise InputError(f"{name}: {lo:g} isn't below {hi:g} Msun", mend="write the lower mass first")
    return lo, hi


def _policy(given: str, known: Sequence[str], where: str) -> None:
    if given not in known:
        raise InputError(f"policy {given!r} isn't known", where=where, mend=f"choose {', '.join(known)}")


def _entry(one: Mixed) -> Any:
    if len(one.sets) == 1:
        return set_id(one.sets[0])
    return {set_id(s): share for s, share in zip(one.sets, one.shares, strict=True)}


def interpolation(method: str) -> str:
    """Check the name of an interpolation in mass."""
    if method not in METHODS:
        raise InputError(f"interpolation {method!r} isn't known", mend=f"choose {' or '.join(METHODS)}")
    return method
