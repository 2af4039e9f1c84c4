"""Yield sets against each other: what each says of a star of one initial mass and metallicity."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .curve import blend, bracket, slice_curve
from .errors import InputError, nearest
from .grid import Convention, YieldSet
from .nuclides import parse
from .units import plain

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Against:
    """What several sets say of the same stars.

    Attributes
    ----------
    sets : tuple of str
        Ids; differences are against the first.
    kinds : tuple of str
        Of each set.
    species : tuple of str
    metallicity : float
    convention : {"total", "net"}
    derived : tuple of bool
        Of each set, whether its paper prints yields of the other convention only.
    used : tuple of str
        Of each set, which of its metallicities stand behind the values.
    mass : ndarray, shape (m,)
        Initial masses of the models of any of the sets, Msun, increasing.
    values : ndarray, shape (sets, m, species)
        Yields, Msun; NaN outside a set's masses, and where it doesn't follow the species.
    model : ndarray of bool, shape (sets, m)
        Whether the set has a model of that mass; elsewhere the value lies on a straight line
        between its models.
    checksums : tuple of str
        Of the sets.
    """

    sets: tuple[str, ...]
    kinds: tuple[str, ...]
    species: tuple[str, ...]
    metallicity: float
    convention: Convention
    derived: tuple[bool, ...]
    used: tuple[str, ...]
    mass: Array
    values: Array
    model: NDArray[np.bool_]
    checksums: tuple[str, ...]

    @property
    def dex(self) -> Array:
        """log10 of each set's value over the first's, shape as of `values`; NaN where it has no meaning."""
        with np.errstate(invalid="ignore", divide="ignore"):
            ratio = self.values / self.values[0]
            return np.where(ratio > 0, np.log10(np.where(ratio > 0, ratio, np.nan)), np.nan)

    def to_dict(self) -> dict[str, Any]:
        """Return everything as plain values for JSON; None for what there isn't."""
        return {
            "sets": list(self.sets),
            "metallicity": self.metallicity,
            "used": dict(zip(self.sets, self.used, strict=True)),
            "convention": self.convention,
            "derived": dict(zip(self.sets, self.derived, strict=True)),
            "species": list(self.species),
            "masses": self.mass.tolist(),
            "model": {one: row.tolist() for one, row in zip(self.sets, self.model, strict=True)},
            "yields": _by_set(self, self.values),
            "dex": _by_set(self, self.dex),
        }


def _by_set(found: Against, values: Array) -> dict[str, dict[str, list[float | None]]]:
    return {
        one: {
            name: [None if np.isnan(v) else v for v in values[k, :, i].tolist()]
            for i, name in enumerate(found.species)
        }
        for k, one in enumerate(found.sets)
    }


def against(
    grids: Sequence[YieldSet], species: Sequence[str], metallicity: Any, convention: Convention = "total"
) -> Against:
    """Lay yield sets side by side at one metallicity.

    Between two metallicities of a set, its yields are straight in log10 Z (straight in Z next to
    0); outside them its end holds. Total yields are of the whole life: a wind that a paper
    doesn't list is in them, at birth composition.

    Parameters
    ----------
    grids : sequence of YieldSet
        Two or more, of stars.
    species : sequence of str
        Nuclides or elements.
    metallicity : float
        Mass fraction of metals at birth.
    convention : {"total", "net"}

    Returns
    -------
    Against

    Raises
    ------
    InputError
        Sets of single events, fewer than two, one named twice, or a species that none follows.

    Examples
    --------
    >>> from steelyard.yields import load
    >>> pair = [load("kobayashi-2006"), load("limongi-chieffi-2018-R-v000")]
    >>> found = against(pair, ["O"], 0.02)
    >>> found.mass[:3], found.used[1]
    (array([13., 15., 18.]), 'Z = 0.01345, held')
    >>> found.model[1, :3].tolist()
    [True, True, False]
    """
    z = plain(metallicity, "", "metallicity")
    names = list(dict.fromkeys(parse(one).name for one in species))
    ids = [grid.id for grid in grids]
    if len(grids) < 2 or len(set(ids)) < len(ids):
        raise InputError("comparing takes two sets or more, each once", mend="name another set")
    for grid in grids:
        if grid.event:
            raise InputError(
                "lists single events, which have no initial mass", where=grid.id, mend="name sets of stars"
            )
    for name in names:
        if not any(grid.columns(name) for grid in grids):
            known = dict.fromkeys(s.name for grid in grids for s in grid.parsed)
            known |= dict.fromkeys(s.symbol for grid in grids for s in grid.parsed)
            raise InputError(f"none of the sets follows {name}", mend=nearest(name, known))
    own: list[tuple[Array, Array]] = []
    used = []
    for grid in grids:
        projection, _ = grid.projection(names)
        found = bracket(grid, z)
        slices = [grid.slices[i] for i in found.slices]
        curve = blend([slice_curve(one, projection) for one in slices], found.weights)
        first = 0 if convention == "total" else len(names)
        values = curve.values[:, first : first + len(names)].copy()
        values[:, [not grid.columns(name) for name in names]] = np.nan
        own.append((curve.mass, values))
        told = " and ".join(f"{one.metallicity:g}" for one in slices)
        used.append(f"Z = {told}{', held' if found.note else ', between' if len(slices) > 1 else ''}")
    mass = np.unique(np.concatenate([nodes for nodes, _ in own]))
    values = np.full((len(grids), len(mass), len(names)), np.nan)
    for k, (nodes, figures) in enumerate(own):
        inside = (mass >= nodes[0]) & (mass <= nodes[-1])
        for i in range(len(names)):
            values[k, inside, i] = np.interp(mass[inside], nodes, figures[:, i])
    return Against(
        tuple(ids),
        tuple(grid.kind for grid in grids),
        tuple(names),
        z,
        convention,
        tuple(convention in grid.derived for grid in grids),
        tuple(used),
        mass,
        values,
        np.array([np.isin(mass, nodes) for nodes, _ in own]),
        tuple(grid.checksum for grid in grids),
    )
