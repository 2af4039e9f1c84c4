"""Coefficients of a population's segments as a function of metallicity and shares.

Between two neighbouring metallicities of any set used, the segments stay where they
are, and their coefficients are linear in the weights of the slices and, species by
species, in the mass fractions at birth:

    C = K0 + K1 x + sum_j b_j (A0_j + A1_j x),

with b_j the weight of slice j (its share in the mixture times its weight in
metallicity) and x the birth fraction of the column's species. The arrays come from
laying out the population with unit weights, so no rule of joins or edges is written twice.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.composition import birth_composition, mixture
from steelyard.yields.curve import bracket
from steelyard.yields.errors import InputError

from ..population import Population
from ..ranges import spans
from ..sources import Mixed, StellarSource, set_id
from ..span import Ground, Span
from ..tracks import Columns, Strand, Track, braid, strands
from ..weights import Segments, segments

Array = NDArray[np.float64]

#: masses wider than any mass function, Msun: limits may move without a new layout
WIDEST = (1e-3, 1e4)


@dataclass(frozen=True, eq=False)
class Coefficients:
    """One layout of segments, and its coefficients' dependence on weights and birth.

    Attributes
    ----------
    edge : ndarray, shape (s + 1,)
        Ends of the segments, Msun.
    owner : ndarray of int, shape (s,)
        Stellar source of each segment, never decreasing order of mass.
    constant : ndarray, shape (2, s, e, o)
        K0 and K1.
    parts : ndarray, shape (2, j, s, e, o)
        A0 and A1 for each slice.
    slices : tuple of (int, int, str, float)
        For each slice j: source, entry, set id, metallicity.
    share : ndarray, shape (j, s, 2, k)
        How much of each end value is each published model's, for unit weight.
    models : tuple of (str, float, float)
        Set, metallicity and mass of the published models.
    followed : ndarray of bool, shape (stellar sources, o)
    passing : tuple of (float, float, int, int)
        For each core-collapse source: the range of the join under it, Msun, the source
        below and itself; ejecta pass from one to the other at its lowest collapse mass.
    """

    edge: Array
    owner: NDArray[np.int_]
    constant: Array
    parts: Array
    slices: tuple[tuple[int, int, str, float], ...]
    share: Array
    models: tuple[tuple[str, float, float], ...]
    followed: NDArray[np.bool_]
    passing: tuple[tuple[float, float, int, int], ...]

    def at(self, weights: Array, birth: Array) -> Array:
        """Return C, shape (s, e, o)."""
        flat = np.tensordot(weights, self.parts, axes=(0, 1))
        return self.constant[0] + flat[0] + (self.constant[1] + flat[1]) * birth

    def along(self, weights: Array, birth: Array, d_weights: Array, d_birth: Array) -> Array:
        """Return the derivative of C along a change of weights and birth, shape (s, e, o)."""
        flat = np.tensordot(weights, self.parts[1], axes=(0, 0))
        moved = np.tensordot(d_weights, self.parts, axes=(0, 1))
        return moved[0] + moved[1] * birth + (self.constant[1] + flat) * d_birth


def layout_key(population: Population, metallicity: float) -> tuple[tuple[str, tuple[int, ...]], ...]:
    """Return which slices of which sets serve a metallicity: the layout is the same where this is."""
    out = []
    for source in population.sources:
        if isinstance(source, StellarSource):
            for entry in source.sets:
                for grid in entry.load(population.solar):
                    at = bracket(grid, metallicity, population.edges.metallicity)
                    out.append((grid.id, at.slices))
    return tuple(out)


def coefficients(
    population: Population, metallicity: float, species: Sequence[str], convention: str
) -> Coefficients:
    """Lay out a population near a metallicity.

    Parameters
    ----------
    population : Population
    metallicity : float
        Any one of those that share the layout.
    species : sequence of str
    convention : {"total", "net"}

    Returns
    -------
    Coefficients
    """
    stellar = [s for s in population.sources if isinstance(s, StellarSource)]
    columns = Columns(tuple(species))
    wanted = columns.total if convention == "total" else columns.net
    all_strands: list[list[list[Strand]]] = []
    names: list[list[str]] = []
    for source in stellar:
        rows = []
        for entry in source.sets:
            parts, _ = strands(
                entry,
                metallicity,
                species,
                population.interpolation,
                population.edges.metallicity,
                source.winds,
                population.solar,
            )
            rows.append(parts)
        all_strands.append(rows)
        names.append([entry.name for entry in source.sets])

    def lay(
        only: tuple[int, int, int] | None, birth: float
    ) -> tuple[Segments, list[list[Track]], list[Span]]:
        tracks = []
        for i, rows in enumerate(all_strands):
            entries = []
            for k, parts in enumerate(rows):
                unit = [replace(p, weight=float((i, k, j) == only)) for j, p in enumerate(parts)]
                entries.append(braid(names[i][k], unit, species))
            tracks.append(entries)
        ground = Ground(columns, np.full(len(species), birth), WIDEST)
        cover, _ = spans(stellar, tracks, population.joins, population.edges, ground)
        cubic = population.interpolation == "cubic"
        return segments(cover, cubic, columns.account("remnant"), None), tracks, cover

    none, tracks, cover = lay(None, 0.0)
    born, _, _ = lay(None, 1.0)
    k0 = none.coefficients[..., wanted]
    k1 = born.coefficients[..., wanted] - k0
    a0, a1, share, slices = [], [], [], []
    for i, rows in enumerate(all_strands):
        for k, parts in enumerate(rows):
            for j, strand in enumerate(parts):
                dry, wet = lay((i, k, j), 0.0)[0], lay((i, k, j), 1.0)[0]
                a0.append(dry.coefficients[..., wanted] - k0)
                a1.append(wet.coefficients[..., wanted] - k0 - k1 - a0[-1])
                share.append(dry.share)
                slices.append((i, k, strand.grid.id, strand.grid.slices[strand.position].metallicity))
    return Coefficients(
        none.edge,
        none.owner,
        np.stack([k0, k1]),
        np.stack([np.stack(a0), np.stack(a1)]),
        tuple(slices),
        np.stack(share),
        tuple(m for ts in tracks for t in ts for m in t.models),
        np.array([np.all([t.followed for t in ts], axis=0) for ts in tracks]),
        _passing(cover, stellar, names),
    )


def _passing(
    cover: Sequence[Span], stellar: Sequence[StellarSource], names: Sequence[Sequence[str]]
) -> tuple[tuple[float, float, int, int], ...]:
    out = []
    for i, source in enumerate(stellar):
        own = min(s.lo for s in cover if s.owner == i and s.how in names[i])
        below = [(s.hi, s.owner) for s in cover if s.hi <= own and s.how in names[s.owner]]
        if source.kind == "core-collapse" and below:
            lo, lower = max(below)
            out.append((lo, own, lower, i))
    return tuple(out)


def slice_weights(
    population: Population, metallicity: float, shares: Mapping[tuple[int, str], float]
) -> tuple[Array, Array, dict[tuple[int, str], Array]]:
    """Return the weights of all slices in the order of `Coefficients.slices`, and their derivatives.

    Parameters
    ----------
    population : Population
    metallicity : float
    shares : mapping
        Free shares, from (stellar source, set id) to value.

    Returns
    -------
    weights : ndarray, shape (j,)
    by_metallicity : ndarray, shape (j,)
    by_share : dict of ndarray, shape (j,)
        For each free share; the sets of its mixture that aren't free give way in proportion.
    """
    weights, by_metallicity = [], []
    by_share: dict[tuple[int, str], list[float]] = {key: [] for key in shares}
    stellar = [s for s in population.sources if isinstance(s, StellarSource)]
    for i, source in enumerate(stellar):
        for entry in source.sets:
            given = {id: value for (at, id), value in shares.items() if at == i}
            part, moved = mixture_shares(entry, given)
            for position, grid in enumerate(entry.load(population.solar)):
                at = bracket(grid, metallicity, population.edges.metallicity)
                slopes = _bracket_slope(grid.metallicities, metallicity, at.slices)
                for weight, slope in zip(at.weights, slopes, strict=True):
                    weights.append(part[position] * weight)
                    by_metallicity.append(part[position] * slope)
                    for key, row in by_share.items():
                        here = moved.get(key[1], np.zeros(len(part))) if key[0] == i else np.zeros(len(part))
                        row.append(here[position] * weight)
    return np.array(weights), np.array(by_metallicity), {k: np.array(v) for k, v in by_share.items()}


def mixture_shares(entry: Mixed, free: Mapping[str, float]) -> tuple[Array, dict[str, Array]]:
    """Return the shares of an entry's sets where some are free, and their derivatives.

    Raises
    ------
    InputError
        The free shares leave less than nothing for the others.
    """
    ids = [set_id(s) for s in entry.sets]
    declared = np.array(entry.shares)
    is_free = np.array([id in free for id in ids])
    values = np.array([free.get(id, 0.0) for id in ids])
    if not is_free.any():
        return declared, {}
    rest = 1.0 - values[is_free].sum()
    if values.min() < 0 or rest < -1e-12 or (is_free.all() and abs(rest) > 1e-9):
        raise InputError(
            f"free shares of {entry.name} come to {values[is_free].sum():g}",
            mend="keep them positive, with a sum of at most 1; leave one set of the mixture unfree",
        )
    others = np.where(is_free, 0.0, declared)
    proportion = (
        others / others.sum() if others.sum() > 0 else np.where(is_free, 0.0, 1.0 / max((~is_free).sum(), 1))
    )
    out = values + rest * proportion
    return out, {id: (np.arange(len(ids)) == n) - proportion for n, id in enumerate(ids) if is_free[n]}


def _bracket_slope(grid: Sequence[float], z: float, at: tuple[int, ...]) -> tuple[float, ...]:
    """Derivatives of the bracket's weights to metallicity."""
    if len(at) == 1:
        return (0.0,)
    lo, hi = grid[at[0]], grid[at[1]]
    slope = 1 / (hi - lo) if lo == 0 else 1 / (z * np.log(hi / lo))
    return (-slope, slope)


@dataclass(frozen=True, eq=False)
class Birth:
    """Mass fractions at birth, straight lines in Z on either side of the solar value.

    Attributes
    ----------
    sun : float
        Z of the Sun.
    start, solar : ndarray, shape (o,)
        Mass fractions at Z = 0 and at the Sun's.
    above : ndarray, shape (o,)
        Their derivatives to Z beyond the Sun.
    """

    sun: float
    start: Array
    solar: Array
    above: Array

    def at(self, z: float) -> Array:
        """Return the mass fractions at a metallicity."""
        if z < self.sun:
            return self.start + (self.solar - self.start) * (z / self.sun)
        return self.solar + self.above * (z - self.sun)

    def slope(self, z: float) -> Array:
        """Return their derivatives to it; at the Sun's those beyond it."""
        return (self.solar - self.start) / self.sun if z < self.sun else self.above


def birth(species: Sequence[str], solar: str) -> Birth:
    """Return the mass fractions at birth of some species (see `composition.birth_composition`)."""
    fractions = mixture(solar).mass_fractions()
    sun = float(sum(x for element, x in fractions.items() if element not in ("H", "He", "Li")))
    none, here, beyond = (birth_composition(species, z, solar) for z in (0.0, sun, 1.25 * sun))
    return Birth(sun, none, here, (beyond - here) / (0.25 * sun))
