"""Nuclides and elements: names as papers write them, atomic masses, isotopic composition.

Masses and solar-system isotopic fractions are read from ``tables/isotopes``, which says
where they come from.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache, total_ordering
from importlib.resources import files
from types import MappingProxyType

from .errors import InputError, nearest

_PERIODIC_TABLE = (
    "H He Li Be B C N O F Ne Na Mg Al Si P S Cl Ar K Ca Sc Ti V Cr Mn Fe Co Ni Cu Zn Ga Ge As Se Br Kr "
    "Rb Sr Y Zr Nb Mo Tc Ru Rh Pd Ag Cd In Sn Sb Te I Xe Cs Ba La Ce Pr Nd Pm Sm Eu Gd Tb Dy Ho Er Tm Yb "
    "Lu Hf Ta W Re Os Ir Pt Au Hg Tl Pb Bi Po At Rn Fr Ra Ac Th Pa U Np Pu Am Cm Bk Cf Es Fm Md No Lr Rf "
    "Db Sg Bh Hs Mt Ds Rg Cn Nh Fl Mc Lv Ts Og"
)
_SYMBOLS = tuple(_PERIODIC_TABLE.split())
_NUMBER = {symbol: z for z, symbol in enumerate(_SYMBOLS, start=1)}
_FOLDED = {symbol.casefold(): symbol for symbol in _SYMBOLS}

# A lone lower-case p, n, d or t is a particle; P and N are phosphorus and nitrogen.
_PARTICLES = {
    "p": ("H", 1),
    "p1": ("H", 1),
    "d": ("H", 2),
    "D": ("H", 2),
    "t": ("H", 3),
    "T": ("H", 3),
    "n": ("n", 1),
    "n1": ("n", 1),
}
_WORDS = {
    "proton": ("H", 1),
    "prot": ("H", 1),
    "deuterium": ("H", 2),
    "tritium": ("H", 3),
    "neutron": ("n", 1),
    "neut": ("n", 1),
    "alpha": ("He", 4),
    "α": ("He", 4),
}
_SCRIPTS = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹₀₁₂₃₄₅₆₇₈₉ᵐ", "01234567890123456789m")
_TYPESETTING = re.compile(r"\\(?:mathrm|mathit|mathbf|textrm|text|rm|it|,|!|;)|[${}^_~\s\\]")
_SYMBOL_FIRST = re.compile(r"([A-Za-z]{1,2})-?(\d{1,3})([m*]?)")
_NUMBER_FIRST = re.compile(r"(\d{1,3})([m*]?)-?([A-Za-z]{1,2})(\*?)")

#: yr; a nuclide that lives longer doesn't fade in any star or galaxy
_AS_GOOD_AS_STABLE = 1e13


@total_ordering
@dataclass(frozen=True)
class Species:
    """A nuclide, or an element where no mass number is given.

    Parameters
    ----------
    symbol : str
        Chemical symbol; ``"n"`` for the neutron.
    A : int
        Mass number; 0 means the element, all its isotopes together.
    isomer : bool
        The long-lived excited state, such as that of 26Al.

    Notes
    -----
    Species sort by atomic number, then mass number.

    Examples
    --------
    >>> Species("C", 12).name, Species("C").name, Species("Al", 26, isomer=True).name
    ('C12', 'C', 'Al26m')
    >>> sorted([Species("O", 16), Species("C", 13), Species("C", 12)])[0].name
    'C12'
    """

    symbol: str
    A: int = 0
    isomer: bool = False

    @property
    def name(self) -> str:
        """The name as steelyard writes it: ``C12``, ``C``, ``Al26m``."""
        return f"{self.symbol}{self.A or ''}{'m' if self.isomer else ''}"

    @property
    def Z(self) -> int:
        """Atomic number; 0 for the neutron."""
        return _NUMBER.get(self.symbol, 0)

    @property
    def is_element(self) -> bool:
        """Whether this is an element, not a nuclide."""
        return self.A == 0

    @property
    def element(self) -> Species:
        """The element this belongs to; the neutron belongs to itself."""
        return Species(self.symbol) if self.Z else self

    def __lt__(self, other: object) -> bool:
        if not isinstance(other, Species):
            return NotImplemented
        return (self.Z, self.A, self.isomer) < (other.Z, other.A, other.isomer)

    def __str__(self) -> str:
        return self.name


@lru_cache(maxsize=16384)
def parse(text: str) -> Species:
    r"""Read the name of a nuclide or element as papers and codes write it.

    Parameters
    ----------
    text : str
        ``C12``, ``12C``, ``C-12``, ``c12``, ``C_12``, ``^12^C``, ``$^{12}$C``, ``¹²C``; ``C`` is the
        element. ``p``, ``d``, ``t``, ``n`` and ``alpha`` are the particles (``P`` and ``N`` the elements);
        ``al-6`` is the ground state and ``al*6`` the isomer of 26Al, which is written ``Al26m``.

    Returns
    -------
    Species

    Raises
    ------
    InputError
        No such element or nuclide; the message names the nearest ones.

    Examples
    --------
    >>> [parse(t).name for t in ("12C", "he4", r"$^{56}\mathrm{Fe}$", "p", "P", "al*6")]
    ['C12', 'He4', 'Fe56', 'H1', 'P', 'Al26m']
    """
    if not isinstance(text, str):
        raise InputError(f"species is not text: {text!r}", mend="give a name such as 'C12' or 'C'")
    bare = _TYPESETTING.sub("", text.translate(_SCRIPTS)).strip("-")
    if bare in _PARTICLES:
        return Species(*_PARTICLES[bare])
    folded = bare.casefold()
    if folded in _WORDS:
        return Species(*_WORDS[folded])
    if folded in ("al-6", "al*6"):
        return Species("Al", 26, isomer="*" in folded)
    if folded in _FOLDED:
        return Species(_FOLDED[folded])
    if match := _SYMBOL_FIRST.fullmatch(bare):
        symbol, number, mark = match.groups()
    elif match := _NUMBER_FIRST.fullmatch(bare):
        number, mark, symbol, star = match.groups()
        mark = mark or star
    else:
        raise _unknown(text, bare)
    symbol = _FOLDED.get(symbol.casefold(), "")
    if (symbol, int(number)) not in _masses():
        raise _unknown(text, bare)
    return Species(symbol, int(number), isomer=bool(mark))


def name(text: str) -> str:
    """Return the name of a species as steelyard writes it.

    Examples
    --------
    >>> name("^56^Fe")
    'Fe56'
    """
    return parse(text).name


def symbols() -> tuple[str, ...]:
    """Return the chemical symbols in order of atomic number, H to Og.

    Examples
    --------
    >>> symbols()[25]
    'Fe'
    """
    return _SYMBOLS


def atomic_number(symbol: str) -> int:
    """Return the atomic number of an element.

    Raises
    ------
    InputError
        No such element.

    Examples
    --------
    >>> atomic_number("Fe")
    26
    """
    return _element(symbol).Z


def atomic_mass(species: Species | str) -> float:
    """Return the mass of one atom in u.

    Parameters
    ----------
    species : Species or str
        A nuclide, or an element: then the mean over its isotopes in the solar system. An isomer
        weighs as much as its ground state here.

    Returns
    -------
    float
        Mass in u.

    Raises
    ------
    InputError
        An element without natural isotopes has no mean mass.

    Examples
    --------
    >>> atomic_mass("C12")
    12.0
    >>> round(atomic_mass("Fe"), 3)
    55.845
    """
    species = _species(species)
    if not species.is_element:
        return _masses()[species.symbol, species.A]
    shares = fractions(species.symbol)
    if not shares:
        raise InputError(
            f"{species.name} has no isotopes in the solar system, so no mean atomic mass",
            mend=f"name the nuclide, such as {species.name}{_heaviest(species.symbol)}",
        )
    return sum(share * _masses()[one.symbol, one.A] for one, share in shares.items())


def isotopes(symbol: str) -> tuple[Species, ...]:
    """Return the nuclides of an element that the solar system holds, light to heavy.

    Raises
    ------
    InputError
        No such element.

    Examples
    --------
    >>> [i.name for i in isotopes("O")]
    ['O16', 'O17', 'O18']
    """
    return tuple(fractions(symbol))


def fractions(symbol: str) -> Mapping[Species, float]:
    """Return the isotopic composition of an element in the solar system.

    Parameters
    ----------
    symbol : str
        Chemical symbol.

    Returns
    -------
    mapping
        From nuclide to its share by number; the shares sum to 1. Empty where nature has none.

    Raises
    ------
    InputError
        No such element.

    Examples
    --------
    >>> round(fractions("C")[parse("C13")], 6)
    0.011062
    """
    return _fractions().get(_element(symbol).symbol, MappingProxyType({}))


def is_stable(species: Species | str) -> bool:
    """Say whether a nuclide is stable, or lives longer than 1e13 yr.

    Parameters
    ----------
    species : Species or str
        A nuclide; an element counts as stable where one of its isotopes does. The 180Ta found in
        nature, an isomer, counts as stable under the name Ta180.

    Returns
    -------
    bool

    Examples
    --------
    >>> is_stable("Fe56"), is_stable("Ni56"), is_stable("K40"), is_stable("Tc")
    (True, False, False, False)
    """
    species = _species(species)
    if species.is_element:
        return any(is_stable(one) for one in isotopes(species.symbol))
    return not species.isomer and species in _stable()


def _species(species: Species | str) -> Species:
    return species if isinstance(species, Species) else parse(species)


def _element(symbol: str) -> Species:
    if symbol not in _NUMBER:
        raise InputError(f"element {symbol!r} isn't known", mend=nearest(str(symbol), _SYMBOLS))
    return Species(symbol)


def _unknown(text: str, bare: str) -> InputError:
    what = f"species {text!r} isn't known"
    match = re.search("[A-Za-z]+", bare)
    symbol = _FOLDED.get(match[0].casefold(), "") if match else ""
    if symbol:
        return InputError(
            what, mend=f"known: {symbol} and {symbol}{_lightest(symbol)} to {symbol}{_heaviest(symbol)}"
        )
    known = [*_SYMBOLS, *(f"{s}{a}" for s, a in _masses())]
    if match := _NUMBER_FIRST.fullmatch(bare):
        bare = f"{match[3]}{match[1]}"
    return InputError(what, mend=nearest(bare.replace("-", ""), known))


def _lightest(symbol: str) -> int:
    return min(a for s, a in _masses() if s == symbol)


def _heaviest(symbol: str) -> int:
    return max(a for s, a in _masses() if s == symbol)


def _table(file: str) -> list[dict[str, str]]:
    with files("steelyard.tables").joinpath("isotopes", file).open(encoding="utf-8", newline="") as lines:
        return list(csv.DictReader(lines))


@lru_cache(maxsize=1)
def _masses() -> dict[tuple[str, int], float]:
    masses = {}
    for row in _table("masses.csv"):
        symbol = _SYMBOLS[int(row["Z"]) - 1] if row["Z"] != "0" else "n"
        masses[symbol, int(row["A"])] = float(row["mass"])
    return masses


@lru_cache(maxsize=1)
def _natural() -> list[tuple[Species, float, float]]:
    """Nuclide, its share as printed, its half-life in yr."""
    rows = _table("fractions.csv")
    return [(parse(r["nuclide"]), float(r["fraction"]), float(r["half_life_yr"] or "inf")) for r in rows]


@lru_cache(maxsize=1)
def _stable() -> frozenset[Species]:
    return frozenset(one for one, _, half_life in _natural() if half_life > _AS_GOOD_AS_STABLE)


@lru_cache(maxsize=1)
def _fractions() -> dict[str, Mapping[Species, float]]:
    raw: dict[str, dict[Species, float]] = {}
    for one, share, _ in _natural():
        raw.setdefault(one.symbol, {})[one] = share
    return {
        symbol: MappingProxyType({one: share / sum(shares.values()) for one, share in shares.items()})
        for symbol, shares in raw.items()
    }
