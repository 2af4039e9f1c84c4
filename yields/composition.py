"""What stars are born with: solar mixtures, big-bang matter, and what lies between at any metallicity."""

from __future__ import annotations

import csv
import hashlib
import io
import math
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from importlib.resources import files
from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import InputError, nearest
from .nuclides import Species, atomic_mass, atomic_number, fractions, parse
from .units import plain

#: big-bang helium by mass and D, 3He, 7Li by number per H: Cyburt, Fields, Olive & Yeh 2016,
#: Rev. Mod. Phys. 88, 015004, with the Planck baryon density; from memory
PRIMORDIAL_HELIUM = 0.24709
PRIMORDIAL_PER_H = MappingProxyType({"H2": 2.58e-5, "He3": 1.0039e-5, "Li7": 4.68e-10})

# Elements whose amount at birth isn't proportional to Z; all the others are the metals.
_LIGHT = ("H", "He", "Li")


@dataclass(frozen=True)
class Mixture:
    """The composition of the Sun according to one paper.

    Parameters
    ----------
    id : str
        Author and year, such as ``"asplund-2009"``.
    X, Y, Z : float
        Mass fractions of hydrogen, helium and metals as the paper gives them.
    log_eps : mapping
        From element to log10 of its number per 1e12 hydrogen atoms.
    at_birth : mapping
        The same for elements that the Sun has destroyed since its birth (Li, by a factor of 160).
    citation : str
        The paper.
    checksum : str
        SHA-256 of the table.
    """

    id: str
    X: float
    Y: float
    Z: float
    log_eps: Mapping[str, float] = field(hash=False, repr=False)
    at_birth: Mapping[str, float] = field(hash=False, repr=False)
    citation: str = ""
    checksum: str = field(default="", repr=False)

    def mass_fractions(self) -> dict[str, float]:
        """Return the mass fraction of each element, X_i = 10^(log eps_i) A_i / sum over all elements.

        Returns
        -------
        dict
            From element to mass fraction; they sum to 1. Hydrogen, helium and metals come within 1 %
            of the paper's own X, Y, Z.

        Examples
        --------
        >>> round(mixture("asplund-2009").mass_fractions()["O"], 5)
        0.00573
        """
        weights = {e: 10.0 ** (eps - 12.0) * atomic_mass(e) for e, eps in self.log_eps.items()}
        total = math.fsum(weights.values())
        return {e: w / total for e, w in weights.items()}

    def number_ratio(self, a: Species | str, b: Species | str) -> float:
        """Return how many atoms of ``a`` there are for one of ``b``.

        Parameters
        ----------
        a, b : Species or str
            Elements, or nuclides: then with the isotopic composition of the solar system.

        Returns
        -------
        float

        Raises
        ------
        InputError
            The mixture has no such element, or nature no such nuclide.

        Examples
        --------
        >>> sun = mixture("asplund-2009")
        >>> round(sun.number_ratio("C", "O"), 2), round(sun.number_ratio("C12", "C13"), 1)
        (0.55, 89.4)
        """
        return 10.0 ** (self._log_number(a) - self._log_number(b))

    def _log_number(self, species: Species | str) -> float:
        one = parse(species) if isinstance(species, str) else species
        if one.symbol not in self.log_eps:
            raise InputError(
                f"solar mixture {self.id} has no {one.name}", mend=nearest(one.symbol, self.log_eps)
            )
        amount = self.at_birth.get(one.symbol, self.log_eps[one.symbol])
        if one.is_element:
            return amount
        if one not in fractions(one.symbol):
            natural = ", ".join(i.name for i in fractions(one.symbol))
            raise InputError(f"{one.name} isn't found in the solar system", mend=f"natural: {natural}")
        return amount + math.log10(fractions(one.symbol)[one])


@lru_cache(maxsize=1)
def mixtures() -> tuple[str, ...]:
    """Return the ids of the shipped solar mixtures.

    Examples
    --------
    >>> mixtures()
    ('anders-grevesse-1989', 'asplund-2009', 'asplund-2021', 'grevesse-sauval-1998', 'lodders-2003')
    """
    folders = files("steelyard.tables").joinpath("solar").iterdir()
    return tuple(sorted(f.name for f in folders if f.joinpath("set.toml").is_file()))


@lru_cache(maxsize=32)
def mixture(id: str) -> Mixture:
    """Load a solar mixture.

    Parameters
    ----------
    id : str
        One of `mixtures()`.

    Returns
    -------
    Mixture

    Raises
    ------
    InputError
        No such mixture, or its figures don't match their checksum.

    Examples
    --------
    >>> mixture("asplund-2009").Z
    0.0134
    """
    if id not in mixtures():
        raise InputError(f"solar mixture {id!r} isn't known", mend=nearest(str(id), mixtures()))
    folder = files("steelyard.tables").joinpath("solar", id)
    info = tomllib.loads(folder.joinpath("set.toml").read_text(encoding="utf-8"))
    data = folder.joinpath("abundances.csv").read_bytes()
    checksum = hashlib.sha256(data).hexdigest()
    if checksum != info["checksums"]["abundances.csv"]:
        raise InputError(
            "the figures don't match their checksum",
            where=f"tables/solar/{id}/abundances.csv",
            mend="restore the file as shipped, or correct the checksum in set.toml if the change is meant",
        )
    rows = list(csv.DictReader(io.StringIO(data.decode("utf-8"))))
    paper = info["paper"]
    return Mixture(
        id,
        *(float(info["published"][key]) for key in "XYZ"),
        log_eps=MappingProxyType({r["element"]: float(r["log_eps"]) for r in rows}),
        at_birth=MappingProxyType({r["element"]: float(r["at_birth"]) for r in rows if r["at_birth"]}),
        citation=f"{paper['authors']} {paper['year']}, {paper['reference']}",
        checksum=checksum,
    )


def birth_composition(
    species: Sequence[Species | str],
    metallicity: float,
    mixture: Mixture | str,
    enhancement: Mapping[str, float] | None = None,
) -> NDArray[np.float64]:
    """Return the mass fractions of matter between the big bang and the Sun, or beyond it.

    Hydrogen, helium and lithium go from their big-bang to their solar amount with Z,
    X_i(Z) = X_i,bb (1 - Z/Zsun) + X_i,sun Z/Zsun; every metal is its share of the solar metals times Z.
    Zsun is the mixture's own sum of metals, so that at Z = Zsun the mixture itself comes out. Beyond
    the Sun helium goes on along the same line, D and 3He keep their solar shares of hydrogen and
    helium, and lithium goes on as the metals do.

    Parameters
    ----------
    species : sequence of Species or str
        Nuclides or elements. Unstable nuclides that nature lacks get 0.
    metallicity : float
        Mass fraction Z of the metals: everything heavier than lithium.
    mixture : Mixture or str
        Solar mixture, or its id. Its photosphere is used, but for Li the value at the Sun's birth.
    enhancement : mapping, optional
        From element to dex by which it is raised over solar against Fe, such as ``{"O": 0.5}``; the
        metals are then rescaled to the same Z.

    Returns
    -------
    numpy.ndarray
        Mass fraction of each species; over all nuclides, or all elements, they sum to 1, those of the
        metals to Z.

    Raises
    ------
    InputError
        Z below 0 or so large that no hydrogen is left, or an enhancement of what is no metal of the mixture.

    Notes
    -----
    Big bang: Cyburt et al. 2016, Rev. Mod. Phys. 88, 015004 (from memory). Scaling with the solar pattern
    and a linear helium enrichment is common practice.

    Examples
    --------
    >>> birth_composition(["H", "He", "O"], 0.0, "asplund-2009").round(4)
    array([0.7529, 0.2471, 0.    ])
    >>> x = birth_composition(["O16", "Fe56"], 0.001, "asplund-2009", {"O": 0.4})
    >>> bool(x[0] > 10 * x[1])
    True
    """
    sun = _mixture(mixture)
    z = float(plain(metallicity, "", "metallicity"))
    raised = tuple(sorted((enhancement or {}).items()))
    by_element, light = _by_element(sun, z, raised)
    out = np.zeros(len(species))
    for index, item in enumerate(species):
        one = parse(item) if isinstance(item, str) else item
        whole = by_element.get(one.symbol, 0.0)
        if one.is_element:
            out[index] = whole
        elif one.symbol in light:
            out[index] = whole * light[one.symbol].get(one, 0.0)
        elif whole:
            out[index] = whole * _mass_shares(one.symbol).get(one, 0.0)
    return out


def abundance_ratio(
    mass_a: ArrayLike,
    mass_b: ArrayLike,
    a: Species | str,
    b: Species | str,
    mixture: Mixture | str,
) -> NDArray[np.float64]:
    """Return [a/b]: log10 of the number ratio over that of the Sun.

    [a/b] = log10(m_a / A_a) - log10(m_b / A_b) - log10(n_a / n_b)_sun.

    Parameters
    ----------
    mass_a, mass_b : array_like
        Masses or mass fractions of the two, in one unit; they broadcast.
    a, b : Species or str
        Elements or nuclides.
    mixture : Mixture or str
        Solar mixture, or its id.

    Returns
    -------
    numpy.ndarray
        dex; NaN where a mass isn't positive.

    Raises
    ------
    InputError
        The mixture lacks a species.

    Examples
    --------
    >>> x = mixture("asplund-2009").mass_fractions()
    >>> abs(float(abundance_ratio(x["O"], x["Fe"], "O", "Fe", "asplund-2009"))) < 1e-12
    True
    """
    solar = math.log10(_mixture(mixture).number_ratio(a, b))
    weight = math.log10(atomic_mass(a) / atomic_mass(b))
    mass_a, mass_b = np.broadcast_arrays(np.asarray(mass_a, dtype=float), np.asarray(mass_b, dtype=float))
    positive = (mass_a > 0) & (mass_b > 0)
    log_a = np.log10(mass_a, out=np.full(mass_a.shape, np.nan), where=positive)
    log_b = np.log10(mass_b, out=np.full(mass_b.shape, np.nan), where=positive)
    return log_a - log_b - weight - solar


_load = mixture  # the functions above take an argument of that name


def _mixture(given: Mixture | str) -> Mixture:
    return given if isinstance(given, Mixture) else _load(given)


@lru_cache(maxsize=512)
def _mass_shares(symbol: str) -> dict[Species, float]:
    weights = {one: share * atomic_mass(one) for one, share in fractions(symbol).items()}
    total = math.fsum(weights.values())
    return {one: w / total for one, w in weights.items()}


def _big_bang() -> dict[Species, float]:
    """Mass fractions of the nuclides the big bang left."""
    per_h1 = {n: ratio * atomic_mass(n) / atomic_mass("H1") for n, ratio in PRIMORDIAL_PER_H.items()}
    h1 = (1.0 - PRIMORDIAL_HELIUM) / (1.0 + per_h1["H2"] + per_h1["Li7"])
    found = {parse(n): ratio * h1 for n, ratio in per_h1.items()}
    found[parse("H1")] = h1
    found[parse("He4")] = PRIMORDIAL_HELIUM - found[parse("He3")]
    return found


def _by_element(
    sun: Mixture, z: float, enhancement: tuple[tuple[str, float], ...]
) -> tuple[dict[str, float], dict[str, dict[Species, float]]]:
    """Mass fractions of the elements, and the mass shares of the isotopes of the light ones."""
    solar = sun.mass_fractions()
    for symbol, eps in sun.at_birth.items():
        solar[symbol] *= 10.0 ** (eps - sun.log_eps[symbol])
    metals = {e: x for e, x in solar.items() if e not in _LIGHT}
    z_sun = math.fsum(metals.values())
    for symbol, dex in enhancement:
        if symbol not in metals:
            atomic_number(symbol)
            raise InputError(f"can't enhance {symbol}: not a metal of {sun.id}", mend="name a metal")
        metals[symbol] *= 10.0 ** plain(dex, "", f"enhancement of {symbol}")
    scale = z / math.fsum(metals.values())
    found = {e: x * scale for e, x in metals.items()}

    far = z / z_sun
    near = min(far, 1.0)
    early = _big_bang()
    mixed = {}
    for symbol in _LIGHT:
        born = {one: x for one, x in early.items() if one.symbol == symbol}
        now = {one: share * solar[symbol] for one, share in _mass_shares(symbol).items()}
        mixed[symbol] = {
            one: born.get(one, 0.0) * (1.0 - near) + now.get(one, 0.0) * near for one in sorted({*born, *now})
        }
    light = {
        symbol: {one: x / math.fsum(parts.values()) for one, x in parts.items()}
        for symbol, parts in mixed.items()
    }
    found["He"] = PRIMORDIAL_HELIUM + (solar["He"] - PRIMORDIAL_HELIUM) * far
    found["Li"] = math.fsum(mixed["Li"].values()) * max(far, 1.0)
    found["H"] = 1.0 - found["He"] - found["Li"] - z
    if z < 0 or found["H"] <= 0:
        raise InputError(
            f"metallicity {z:g} is no mass fraction that stars are born with",
            mend="give Z between 0 and about 0.7",
        )
    return found, light
