"""The curve that each entry of a source serves at a population's metallicity."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.composition import birth_composition
from steelyard.yields.curve import ACCOUNTS, Curve, Method, blend, bracket, imploded_curve, slice_curve
from steelyard.yields.errors import InputError
from steelyard.yields.grid import YieldSet
from steelyard.yields.library import DEFAULT_SOLAR
from steelyard.yields.nuclides import Species, isotopes, parse

from .sources import Mixed

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Columns:
    """Where the quantities of a population stand in a row of values.

    Attributes
    ----------
    species : tuple of str
        A row holds their totals, their net yields, then the accounts.
    """

    species: tuple[str, ...]

    @property
    def total(self) -> slice:
        """Total yields."""
        return slice(0, len(self.species))

    @property
    def net(self) -> slice:
        """Net yields."""
        return slice(len(self.species), 2 * len(self.species))

    @property
    def width(self) -> int:
        """Length of a row."""
        return 2 * len(self.species) + len(ACCOUNTS)

    @cached_property
    def apart(self) -> NDArray[np.bool_]:
        """False for a nuclide whose element is listed too, so that a sum counts nothing twice."""
        parsed = [parse(s) for s in self.species]
        whole = {s.symbol for s in parsed if s.is_element}
        return np.array([s.is_element or s.symbol not in whole for s in parsed], dtype=bool)

    def account(self, name: str) -> int:
        """Position of rest_total, rest_net, ejected, remnant or wind."""
        return 2 * len(self.species) + ACCOUNTS.index(name)


@dataclass(frozen=True, eq=False)
class Track:
    """What one entry of a source's sets ejects along initial mass.

    Attributes
    ----------
    name : str
        Ids of the sets.
    curve : Curve
        Columns as in `Columns`.
    imploded : Curve
        The same stars when they implode: their wind only, at birth composition.
    models : tuple of (str, float, float)
        Set, metallicity and mass of each published model that the curve's `share` counts.
    followed : ndarray of bool, shape (species,)
        False where some set of the entry doesn't follow a species.
    cover : ndarray, shape (species,)
        Share of a species' mass at birth that is in nuclides the entry follows.
    elements : frozenset of str
        Elements of which every set of the entry follows anything.
    notes : tuple of str
    """

    name: str
    curve: Curve
    imploded: Curve
    models: tuple[tuple[str, float, float], ...]
    followed: NDArray[np.bool_]
    cover: Array
    elements: frozenset[str]
    notes: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class Strand:
    """One slice of one set of an entry: what a track is a weighted sum of.

    Attributes
    ----------
    grid : YieldSet
    position : int
        Which slice of the set.
    weight : float
        Share of the set in the entry times weight of the slice in metallicity.
    curve, imploded : Curve
        As in `Track`.
    """

    grid: YieldSet
    position: int
    weight: float
    curve: Curve
    imploded: Curve


def strands(
    entry: Mixed,
    metallicity: float,
    species: Sequence[str],
    method: Method,
    edge: str,
    winds: str,
    solar: str,
) -> tuple[list[Strand], list[str]]:
    """Return the slices that an entry is made of at a metallicity.

    Parameters
    ----------
    entry : Mixed
        One set, or several with shares.
    metallicity : float
    species : sequence of str
        Wanted species.
    method : {"linear", "cubic"}
        Interpolation in mass.
    edge : {"hold", "refuse"}
        Outside a set's metallicities.
    winds : {"birth", "rest"}
        What becomes of winds that a set doesn't list.
    solar : str
        Mixture for birth compositions that a set doesn't give.

    Returns
    -------
    strands : list of Strand
    notes : list of str

    Raises
    ------
    InputError
        A set is one of events, or doesn't reach the metallicity and may not be held.
    """
    out, notes = [], []
    for grid, share in zip(entry.load(solar), entry.shares, strict=True):
        if grid.event:
            raise InputError(
                f"{grid.id} lists single events, not stars",
                mend="use it in a source with a delay and a number",
            )
        at = bracket(grid, metallicity, edge)
        projection, _ = grid.projection(species)
        primary = "net" if "total" in grid.derived else "total"
        for position, weight in zip(at.slices, at.weights, strict=True):
            one = grid.slices[position]
            curve = slice_curve(one, projection, method, primary, winds)
            imploded = imploded_curve(one, projection, method, winds)
            out.append(Strand(grid, position, share * weight, curve, imploded))
        notes += [n for n in (at.note, *grid.notes) if n]
    if winds == "rest":
        notes = [n for n in notes if not n.endswith("returned at birth composition")]
    return out, notes


def braid(name: str, parts: Sequence[Strand], species: Sequence[str], notes: Sequence[str] = ()) -> Track:
    """Combine slices into the track of their entry.

    Parameters
    ----------
    name : str
        Of the entry.
    parts : sequence of Strand
    species : sequence of str
    notes : sequence of str

    Returns
    -------
    Track

    Raises
    ------
    InputError
        The slices share no masses.
    """
    weights = [p.weight for p in parts]
    try:
        curve = blend([p.curve for p in parts], weights)
    except InputError as error:
        at = ", ".join(f"{p.grid.slices[p.position].metallicity:g}" for p in parts)
        raise InputError(
            f"{error.what} at Z = {at}", where=name, mend="choose another metallicity or another set"
        ) from None
    models = [(p.grid.id, p.grid.slices[p.position]) for p in parts]
    grids = list(dict.fromkeys(p.grid for p in parts))
    return Track(
        name,
        curve,
        blend([p.imploded for p in parts], weights),
        tuple((id, one.metallicity, float(m)) for id, one in models for m in one.mass),
        np.all([g.projection(species)[1] for g in grids], axis=0),
        np.min([_cover(g, species) for g in grids], axis=0),
        frozenset.intersection(*(frozenset(s.symbol for s in g.parsed) for g in grids)),
        tuple(notes),
    )


def _cover(grid: YieldSet, species: Sequence[str]) -> Array:
    """Share of each species' mass at birth that is in nuclides a set follows."""
    out = np.zeros(len(species))
    for i, text in enumerate(species):
        one = parse(text)
        if one in grid.parsed:
            out[i] = 1.0
        elif one.is_element:
            natural = _isotopes(one.symbol)
            whole = sum(natural.values())
            out[i] = sum(x for n, x in natural.items() if n in grid.parsed) / whole if whole else 0.0
    return out


@lru_cache(maxsize=128)
def _isotopes(symbol: str) -> dict[Species, float]:
    """Mass fractions of an element's natural nuclides, in some matter of solar pattern."""
    natural = isotopes(symbol)
    amounts = birth_composition([n.name for n in natural], 0.01, DEFAULT_SOLAR)
    return dict(zip(natural, amounts.tolist(), strict=True))


def event_row(grid: YieldSet, species: Sequence[str], birth: Array) -> tuple[Array, NDArray[np.bool_]]:
    """Return what one event of a delayed source ejects.

    Parameters
    ----------
    grid : YieldSet
        A set of events.
    species : sequence of str
    birth : ndarray, shape (species,)
        Mass fractions at the population's birth, for the net yields.

    Returns
    -------
    row : ndarray, shape (2 o + 5,)
        Columns as in `Columns`; the remnant is minus the mass ejected, since the
        event uses up a remnant.
    followed : ndarray of bool, shape (o,)
    """
    if not grid.event:
        raise InputError(
            f"{grid.id} lists stars over initial mass, not single events",
            mend="choose a thermonuclear set, or one of your own",
        )
    one = grid.slices[0]
    projection, followed = grid.projection(species)
    mass = float(one.ejected[0])
    total = one.total[0] @ projection
    net = np.where(followed, total - mass * birth * _cover(grid, species), 0.0)
    apart = Columns(tuple(species)).apart
    accounts = [mass - float(total[apart].sum()), -float(net[apart].sum()), mass, -mass, 0.0]
    return np.concatenate([total, net, accounts]), followed
