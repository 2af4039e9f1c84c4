"""What becomes of radioactive nuclides after the ejection.

Half-lives and branchings are those of ICRP Publication 107, through the library radioactivedecay; a
caller may overrule a half-life, or give that of a nuclide which the library lacks. Abundances along a
chain follow the equations of Bateman 1910, Proc. Camb. Phil. Soc. 15, 423.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from decimal import Decimal, localcontext
from functools import lru_cache
from typing import Any

import numpy as np

from .convert import derive, mapped
from .errors import InputError, nearest
from .grid import YieldSet
from .nuclides import Species, atomic_mass, fractions, is_stable, parse, symbols
from .units import plain

YEAR = 365.25 * 86400.0  # s

#: digits carried through the Bateman sum, whose terms cancel
_DIGITS = 120

# An unstable daughter that the set doesn't follow and that holds less than this of its parent's
# mass is counted with what it decays to.
_NEGLIGIBLE = 1e-9


@dataclass(frozen=True)
class Decay:
    """How one nuclide decays.

    Attributes
    ----------
    half_life : float
        yr; infinite for what doesn't decay.
    daughters : tuple of (str, float)
        Nuclides, as `Species` names them, and their branching fractions; what is missing to 1
        (spontaneous fission) isn't followed.
    """

    half_life: float
    daughters: tuple[tuple[str, float], ...] = ()


def decayed(
    grid: YieldSet,
    age: Any = None,
    keep: Iterable[str] = (),
    half_lives: Mapping[str, Any] | None = None,
) -> YieldSet:
    """Let the radioactive nuclides of a set decay.

    Parameters
    ----------
    grid : YieldSet
        Of nuclides.
    age : float, str or pint.Quantity, optional
        Time since the ejection, yr. Without it everything decays to the end: to stable nuclides, and to
        those of K40, Rb87, Th232, U238 and the like that the solar system still holds.
    keep : iterable of str
        Long-lived nuclides to leave as they stand, such as Al26 and Fe60. What others feed into them
        stays there too.
    half_lives : mapping, optional
        From nuclide to half-life (yr, text or Quantity), over that of ICRP-107 or for a nuclide it lacks;
        or to a pair (half-life, daughter). Without a daughter, and where ICRP-107 names none, it is the
        isobar of lower atomic mass next to the nuclide; an isomer of a stable nuclide falls to the
        ground state.

    Returns
    -------
    YieldSet
        Totals, net yields and the composition at birth changed alike. An unstable daughter that the set
        didn't follow becomes a new column; the mass that reaches a stable nuclide which the set doesn't
        follow goes to rest, for a column with that share alone would pass for the whole.

    Raises
    ------
    InputError
        The set holds elements; a nuclide has no known decay; the age is negative; a nuclide to keep isn't
        in any chain of the set.

    Notes
    -----
    Mass goes with the mass number: a daughter of equal A takes over the whole mass, an alpha particle takes
    4/A of it and is counted as He4. So what is ejected doesn't change; the mass of the decay energy, less
    than 1e-3, stays with the daughter, as in tables that are summed over isobars.

    Examples
    --------
    >>> from steelyard.yields import load
    >>> agb = load("karakas-2010")
    >>> old = decayed(agb, keep=["Fe60"])
    >>> old.id, "Al26" in old.species, "Fe60" in old.species
    ('karakas-2010+decayed', False, True)
    """
    elements = [one.name for one in grid.parsed if one.is_element]
    if elements:
        raise InputError(
            f"{', '.join(elements[:3])}{' …' if len(elements) > 3 else ''}: an element can't decay without"
            " its nuclides being known",
            where=grid.id,
            mend="decay the nuclides before summing them into elements",
        )
    years = None if age is None else plain(age, "yr", "age")
    if years is not None and years < 0:
        raise InputError(f"age is negative: {years:g} yr", where=grid.id, mend="count from the ejection")
    given = _given(half_lives or {}, grid.id)
    kept = frozenset(parse(one).name for one in keep)
    reached = {one: remaining(one, years, kept, given) for one in grid.species}
    unknown = kept - {n for shares in reached.values() for n in shares}
    if unknown:
        raise InputError(
            f"{', '.join(sorted(unknown))} isn't among the set's nuclides or their daughters",
            where=grid.id,
            mend=nearest(min(unknown), grid.species),
        )
    species, lost = _columns(grid, reached, kept, given, years)
    matrix = np.zeros((len(grid.species), len(species)))
    for row, one in enumerate(grid.species):
        for name, share in _mass_shares(one, reached[one]).items():
            target = _followed(name, species, kept, given)
            if target is not None:
                matrix[row, species.index(target)] += share
    when = "to the end" if years is None else f"for {years:g} yr"
    note = f"{grid.id}: radioactive nuclides decayed {when}"
    if kept:
        note += f", {', '.join(sorted(kept))} kept"
    if lost:
        note += f"; {', '.join(lost)} isn't followed, so what decays to it is in the rest"
    what = "decayed" if years is None else f"decayed-{years:g}yr"
    law = sorted((n, d.half_life, d.daughters) for n, d in given.items())
    operation = f"decayed age={years!r} keep={sorted(kept)} half_lives={law}"
    info = {
        "decay": f"Decayed {when} after the ejection"
        + (f"; kept: {', '.join(sorted(kept))}." if kept else ".")
    }
    return derive(grid, what, note, info, species, lambda one: mapped(one, matrix), operation)


def remaining(
    nuclide: str,
    age: float | None,
    keep: Iterable[str] = (),
    half_lives: Mapping[str, Decay] | None = None,
) -> dict[str, float]:
    """Return what one atom of a nuclide has become.

    Parameters
    ----------
    nuclide : str
    age : float or None
        yr; None for the end of all decays.
    keep : iterable of str
        Nuclides taken as stable.
    half_lives : mapping, optional
        Decays over those of ICRP-107.

    Returns
    -------
    dict
        From nuclide to the probability that the atom is one of it.

    Raises
    ------
    InputError
        A nuclide of the chain has no known decay.

    Examples
    --------
    >>> {n: round(x, 3) for n, x in remaining("Ni56", 77.23 / 365.25).items()}
    {'Ni56': 0.0, 'Co56': 0.543, 'Fe56': 0.457}
    """
    kept, given = frozenset(keep), half_lives or {}
    found: dict[str, Decimal] = {}
    with localcontext() as context:
        context.prec = _DIGITS
        _walk(parse(nuclide).name, age, kept, given, [], Decimal(1), found)
    return {name: float(share) for name, share in found.items()}


def _walk(
    name: str,
    age: float | None,
    kept: frozenset[str],
    given: Mapping[str, Decay],
    rates: list[Decimal],
    branch: Decimal,
    found: dict[str, Decimal],
) -> None:
    """Add the atoms that reach a nuclide along one path, then go on to its daughters."""
    decay = _decay(name, age, kept, given)
    ended = not decay.daughters
    if age is None:
        if ended:
            found[name] = found.get(name, Decimal(0)) + branch
    else:
        rate = Decimal(0) if ended else Decimal(2).ln() / Decimal(decay.half_life)
        rates = [*rates, rate]
        found[name] = found.get(name, Decimal(0)) + branch * _bateman(rates, Decimal(age))
    for daughter, share in decay.daughters:
        _walk(daughter, age, kept, given, rates, branch * Decimal(share), found)


def _bateman(rates: list[Decimal], age: Decimal) -> Decimal:
    """Abundance of the last member of a chain that starts with one atom of the first."""
    distinct: list[Decimal] = []
    for rate in rates:
        # equal rates would divide by zero; this far apart they make no difference in 16 digits
        while rate in distinct:
            rate += (rate or Decimal(1)) * Decimal("1e-30")
        distinct.append(rate)
    total = Decimal(0)
    for i, own in enumerate(distinct):
        term = (-own * age).exp()
        for j, other in enumerate(distinct):
            if j != i:
                term /= other - own
        total += term
    for rate in distinct[:-1]:
        total *= rate
    return total


def _decay(name: str, age: float | None, kept: frozenset[str], given: Mapping[str, Decay]) -> Decay:
    """Decay of a nuclide, an unending one where it is stable, kept, or an end for this age."""
    stable = Decay(float("inf"))
    if name in kept:
        return stable
    if name in given:
        return given[name]
    if (parsed := _species(name)) and (is_stable(parsed) or (age is None and _natural(parsed))):
        return stable
    found = _tabulated(name)
    if found is None:
        raise InputError(
            f"{name} has no decay in the data of ICRP-107",
            mend=f'give its half-life, such as half_lives = {{"{name}": "1 Myr"}}, or keep it',
        )
    return found


def _natural(one: Species) -> bool:
    return not one.is_element and not one.isomer and one.Z > 0 and one in fractions(one.symbol)


def _species(name: str) -> Species | None:
    """Parse a name; None for the second isomers that only decay data know."""
    try:
        return parse(name)
    except InputError:
        return None


@lru_cache(maxsize=4096)
def _tabulated(name: str) -> Decay | None:
    import radioactivedecay

    symbol = name.rstrip("0123456789mnpqr") if not name.startswith("n") else "n"
    try:
        one = radioactivedecay.Nuclide(f"{symbol}-{name[len(symbol) :]}")
    except ValueError:
        return None
    seconds = one.half_life("s")
    if not np.isfinite(seconds):
        return Decay(float("inf"))
    pairs = list(zip(one.progeny(), one.branching_fractions(), strict=True))
    # the printed fractions of some nuclides sum to 1 only to their last digit
    whole = sum(share for _, share in pairs)
    daughters = tuple((n.replace("-", ""), float(share / whole)) for n, share in pairs if n != "SF")
    return Decay(seconds / YEAR, daughters)


def _given(half_lives: Mapping[str, Any], where: str) -> dict[str, Decay]:
    found = {}
    for key, value in half_lives.items():
        one = parse(key)
        pair = isinstance(value, (tuple, list))
        if pair and len(value) != 2:
            raise InputError(f"{key} needs a half-life and a daughter", where=where)
        years = plain(value[0] if pair else value, "yr", f"half-life of {one.name}", where=where)
        if years <= 0:
            raise InputError(f"half-life of {one.name} isn't positive: {years:g} yr", where=where)
        if pair:
            found[one.name] = Decay(years, ((parse(value[1]).name, 1.0),))
            continue
        known = _tabulated(one.name)
        daughters = known.daughters if known and known.daughters else ((_toward_stability(one).name, 1.0),)
        found[one.name] = Decay(years, daughters)
    return found


def _toward_stability(one: Species) -> Species:
    """Daughter of a nuclide whose decay no table gives."""
    ground = Species(one.symbol, one.A)
    if one.isomer and is_stable(ground):
        return ground
    lighter = []
    for z_step in (-1, 1):
        beside = _isobar(one, z_step)
        if beside is not None and atomic_mass(beside) < atomic_mass(ground):
            lighter.append(beside)
    if not lighter:
        raise InputError(
            f"{one.name} has no isobar that it could decay to",
            mend=f'give the daughter too: half_lives = {{"{one.name}": ("1 Myr", "NUCLIDE")}}',
        )
    return min(lighter, key=atomic_mass)


def _isobar(one: Species, z_step: int) -> Species | None:
    z = one.Z + z_step
    if not 1 <= z <= len(symbols()):
        return None
    return _species(f"{symbols()[z - 1]}{one.A}")


def _mass_number(name: str) -> int:
    return int("".join(c for c in name if c.isdigit()))


def _mass_shares(parent: str, atoms: Mapping[str, float]) -> dict[str, float]:
    """Turn atoms of daughters for one of the parent into mass of daughters per mass of the parent."""
    whole = _mass_number(parent)
    shares: dict[str, float] = {}
    for name, count in atoms.items():
        own = _mass_number(name)
        shares[name] = shares.get(name, 0.0) + count * own / whole
        if (whole - own) % 4 == 0 and whole > own:
            shares["He4"] = shares.get("He4", 0.0) + count * (whole - own) / whole
    return shares


def _columns(
    grid: YieldSet,
    reached: Mapping[str, Mapping[str, float]],
    kept: frozenset[str],
    given: Mapping[str, Decay],
    years: float | None,
) -> tuple[list[str], list[str]]:
    """Species of the decayed set in order, and the stable nuclides it feeds without following them."""
    wanted: set[str] = set()
    lost: set[str] = set()
    for one in grid.species:
        for name, share in _mass_shares(one, reached[one]).items():
            if name == one:
                if share > 0 or one in kept:
                    wanted.add(name)
            elif name in grid.species:
                wanted.add(name)
            elif _decay(name, years, kept, given).daughters or name in kept:
                if share >= _NEGLIGIBLE:
                    wanted.add(name)
            elif share > 0:
                lost.add(name)
    return [s.name for s in sorted(parse(n) for n in wanted if _species(n))], sorted(lost)


def _followed(name: str, species: list[str], kept: frozenset[str], given: Mapping[str, Decay]) -> str | None:
    """Column that takes up a nuclide: its own, or that of the first daughter along the chain."""
    while name not in species:
        if (parsed := _species(name)) and is_stable(parsed):
            return None
        daughters = _decay(name, 0.0, kept, given).daughters
        if not daughters:
            return None
        name = max(daughters, key=lambda pair: pair[1])[0]
    return name
