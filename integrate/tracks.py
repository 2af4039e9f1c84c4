"""The curve that each entry of a source serves at a population's metallicity."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.curve import ACCOUNTS, Curve, Method, blend, bracket, slice_curve
from steelyard.yields.errors import InputError
from steelyard.yields.grid import Slice, YieldSet

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
    notes : tuple of str
    """

    name: str
    curve: Curve
    imploded: Curve
    models: tuple[tuple[str, float, float], ...]
    followed: NDArray[np.bool_]
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
            shown = _without_wind(one) if winds == "rest" else one
            curve = slice_curve(shown, projection, method, primary)
            out.append(
                Strand(grid, position, share * weight, curve, slice_curve(_imploded(one), projection, method))
            )
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
    return Track(
        name,
        curve,
        blend([p.imploded for p in parts], weights),
        tuple((id, one.metallicity, float(m)) for id, one in models for m in one.mass),
        np.all([p.grid.projection(species)[1] for p in parts], axis=0),
        tuple(notes),
    )


def _without_wind(one: Slice) -> Slice:
    """A slice whose unlisted wind belongs to no species."""
    return replace(one, total=one.listed)


def _imploded(one: Slice) -> Slice:
    """A slice whose stars eject nothing but their wind."""
    lost = one.wind[:, None] * one.initial
    return replace(one, ejected=one.wind, total=lost, net=np.zeros_like(lost))


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
    net = np.where(followed, total - mass * birth, 0.0)
    rest = mass - float(one.total[0].sum())
    accounts = [rest, -float(net.sum()), mass, -mass, 0.0]
    return np.concatenate([total, net, accounts]), followed
