"""Yield sets that serve together: mixtures with their shares, and the masses they are kept to."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

from steelyard.yields.errors import InputError
from steelyard.yields.grid import YieldSet
from steelyard.yields.library import load
from steelyard.yields.units import plain

from .laws import GivenShares, ShareLaw, law_of
from .popvalues import told

SetChoice = str | YieldSet


@dataclass(frozen=True)
class Mixed:
    """Sets that share the same stars or events.

    Attributes
    ----------
    sets : tuple of str or YieldSet
    shares : tuple of float, or ShareLaw
        Positive, summing to 1; a `ShareLaw` gives them at the population's metallicity.
    limits : pair of float or None, optional
        Initial masses served, Msun; None at either end leaves it to the sets.
    """

    sets: tuple[SetChoice, ...]
    shares: Any
    limits: Any = (None, None)

    def __post_init__(self) -> None:
        shares = self.shares
        count = len(shares.shares if isinstance(shares, ShareLaw) else shares)
        if not self.sets or len(self.sets) != count:
            raise InputError(
                "a mixture needs one share for each set", mend='such as { "set-a" = 0.7, "set-b" = 0.3 }'
            )
        if not isinstance(shares, ShareLaw):
            if min(shares) < 0 or abs(sum(shares) - 1) > 1e-9:
                raise InputError(
                    f"shares of a mixture must be positive and sum to 1, not {sum(shares):g}",
                    mend="scale the shares",
                )
            scaled = tuple(s / sum(shares) for s in shares)
            law = law_of(shares)
            object.__setattr__(self, "shares", GivenShares(scaled, law) if law else scaled)
        lo, hi = (None if m is None else plain(m, "Msun", "from and to") for m in self.limits)
        if (lo is not None and lo <= 0) or (hi is not None and hi <= (lo or 0)):
            raise InputError(
                f"a mixture can't serve masses from {lo or 0:g} to {hi or 0:g} Msun",
                mend="write the lower mass in from, the higher in to",
            )
        object.__setattr__(self, "limits", (lo, hi))

    def at(self, metallicity: float) -> Mixed:
        """Return the mixture with the shares that its law gives at a metallicity."""
        law = self.shares if isinstance(self.shares, ShareLaw) else law_of(self.shares)
        return replace(self, shares=GivenShares(law(metallicity), law)) if law else self

    @property
    def name(self) -> str:
        """The ids of the sets with their shares, and the masses served where limits are given."""
        if len(self.sets) == 1:
            text = set_id(self.sets[0])
        elif isinstance(self.shares, ShareLaw):
            text = " + ".join(set_id(one) for one in self.sets)
        else:
            text = " + ".join(
                f"{share:g} {set_id(one)}" for one, share in zip(self.sets, self.shares, strict=True)
            )
        lo, hi = self.limits
        low, high = f" from {lo:g}" if lo is not None else "", f" up to {hi:g}" if hi is not None else ""
        return f"{text}{low}{high}{' Msun' if low or high else ''}"

    def to_entry(self, names: Sequence[str]) -> Any:
        """Return the mixture as an entry of the population file's ``sets``, its sets under these names."""
        law = self.shares if isinstance(self.shares, ShareLaw) else law_of(self.shares)
        window = {k: m for k, m in zip(("from", "to"), self.limits, strict=True) if m is not None}
        if len(names) == 1 and not window and not law:
            return names[0]
        shares = [list(row) for row in law.shares] if law else self.shares
        at = {"metallicities": list(law.metallicities)} if law else {}
        return {**dict(zip(names, shares, strict=True)), **at, **window}

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
        shares = {k: v for k, v in entry.items() if k not in ("from", "to", "metallicities")}
        limits = (entry.get("from"), entry.get("to"))
        with told(where):
            if "metallicities" in entry:
                return Mixed(tuple(shares), ShareLaw(entry["metallicities"], list(shares.values())), limits)
            values = tuple(plain(v, "", f"share of {set_id(k)}") for k, v in shares.items())
            return Mixed(tuple(shares), values, limits)
    raise InputError(
        f"a set can't be read from {entry!r}",
        where=where,
        mend='give an id, or { "id" = share, ... } for a mixture',
    )
