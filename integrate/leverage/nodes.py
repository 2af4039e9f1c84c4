"""How a population's yields depend on each published model that they are made of.

Every yield of a population splits, without remainder, into

    E = sum over models of (weight x what the paper prints for the model) + birth composition.

What is printed is a set's net yields where its paper gives them, its total yields elsewhere.
Birth composition is all that no table prints: winds that a set doesn't list, what stars of a
set of net yields return unchanged (in total yields), less what was there at birth (in net
yields of a set of totals), and joins and edges that return ejecta as they were born.

The weights come from laying the population out with unit vectors in place of yields, so no
rule of joins, edges or series is written twice. Between models, lines are linear in what is
printed. Monotone cubics aren't, for their slopes depend on neighbours; but the slopes are
homogeneous of degree 1 in the values, so by Euler's theorem the derivatives to the printed
figures, times the figures, still sum to the yield. The derivatives are in closed form.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError, nearest
from steelyard.yields.nuclides import parse

from ..population import Population, read_ages
from ..sources import DelayedSource, StellarSource
from ..tracks import Strand, event_row, strands
from ..weights import Segments, dead_weights, dying_basis
from .monotone import monotone_slopes
from .unit_layout import unit_layout

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Model:
    """One published model of a population's sets.

    Attributes
    ----------
    set : str
        Id of the set.
    metallicity, mass : float or None
        At birth; None for the event of a delayed source.
    source : str
        Kind of the source that names the set.
    """

    set: str
    metallicity: float | None
    mass: float | None
    source: str

    def __str__(self) -> str:
        if self.mass is None:
            return f"{self.set}, event"
        return f"{self.set}, {self.mass:g} Msun, Z = {self.metallicity:g}"


@dataclass(frozen=True, eq=False)
class Parts:
    """What a population's yields up to some ages are made of.

    Attributes
    ----------
    contribution : ndarray, shape (sources, t, models, species)
        Weight times printed figure; a model counts for another source than its own where it
        is an end of a join.
    birth_total, birth_net : ndarray, shape (sources, t, species)
        What belongs to no model, in total and in net yields.
    """

    contribution: Array
    birth_total: Array
    birth_net: Array

    def birth(self, convention: str) -> Array:
        """Return what belongs to no model, shape (sources, t, species)."""
        return self.birth_total if convention == "total" else self.birth_net


@dataclass(frozen=True, eq=False)
class _Piece:
    """One slice that stars are taken from.

    Attributes
    ----------
    strand : Strand
    at : slice
        Its models among all.
    primary, printed : ndarray, shape (n, nuclides of the set)
        What is interpolated, and what the paper prints.
    projection : ndarray, shape (nuclides of the set, species)
    total : ndarray, shape (n, nuclides of the set)
        Total yields, with the unlisted wind where the source returns it at birth composition.
    """

    strand: Strand
    at: slice
    primary: Array
    printed: Array
    projection: Array
    total: Array

    @property
    def cubic(self) -> bool:
        return self.strand.curve.slopes is not None

    @cached_property
    def slopes(self) -> tuple[Array, Array]:
        """Slopes of the cubics at the nodes, and their derivatives to the nodes' values."""
        return monotone_slopes(self.strand.curve.mass, self.primary)

    def unlisted(self, value: Array, slope: Array, convention: str) -> Array:
        """Return what yields hold beside what is interpolated, from weights of values and slopes."""
        one = self.strand.grid.slices[self.strand.position]
        beside = ((self.total if convention == "total" else one.net) - self.primary) @ self.projection
        out = value @ beside
        if self.cubic and beside.any():
            n = self.projection.shape[1]
            block = slice(0, n) if convention == "total" else slice(n, 2 * n)
            out = out + slope @ (self.strand.curve.slopes[:, block] - self.slopes[0] @ self.projection)
        return out


@dataclass(frozen=True, eq=False)
class Nodes:
    """A population's dependence on its models, prepared for any ages.

    Attributes
    ----------
    population : Population
    models : tuple of Model
        Those that serve the population's metallicity, then the events of delayed sources.
    printed : ndarray, shape (models, species)
        What the papers print, Msun.
    """

    population: Population
    models: tuple[Model, ...]
    printed: Array
    _pieces: tuple[_Piece, ...]
    _segments: Segments
    _events: tuple[tuple[int, slice, Array, Array], ...]

    @property
    def species(self) -> tuple[str, ...]:
        """Species of the population."""
        return self.population.prepared.columns.species

    def at(self, ages: object = None) -> Parts:
        """Split the yields up to some ages into parts.

        Parameters
        ----------
        ages : array_like, optional
            yr, or text and Quantities; default: the population's own.

        Returns
        -------
        Parts
        """
        ages = self._ages(ages)
        value, slope, lent = self._weights(ages)
        shape = (len(self.population.sources), len(ages))
        n = len(self.species)
        out = np.zeros((*shape, len(self.models), n))
        total, net = lent[..., :n].copy(), lent[..., n:].copy()
        for piece in self._pieces:
            u, v = value[..., piece.at], slope[..., piece.at]
            apart = piece.primary - piece.printed
            if piece.cubic:
                gradient = u[..., None] + np.einsum("itj,jks->itks", v, piece.slopes[1])
                out[..., piece.at, :] = (gradient * piece.printed) @ piece.projection
                more = (gradient * apart).sum(axis=-2) @ piece.projection
            else:
                out[..., piece.at, :] = u[..., None] * (piece.printed @ piece.projection)
                more = u @ (apart @ piece.projection)
            total += more + piece.unlisted(u, v, "total")
            net += more + piece.unlisted(u, v, "net")
        for i, at, rows, shares in self._events:
            source = self.population.sources[i]
            number = source.number * np.asarray(source.delay.fraction(np.array(ages)))
            each = number[:, None] * shares
            out[i, :, at] = each[..., None] * rows[:, :n]
            net[i] += each @ (rows[:, n:] - rows[:, :n])
        return Parts(out, total, net)

    def weights(self, ages: object = None) -> Array:
        """Return how many stars or events each model stands for where yields are straight lines in mass.

        Parameters
        ----------
        ages : array_like, optional
            yr.

        Returns
        -------
        ndarray, shape (sources, t, models)
            Per Msun formed: the derivative of every yield to the model's own. With cubics, the
            part of it that leaves slopes as they are.
        """
        ages = self._ages(ages)
        value, _, _ = self._weights(ages)
        for i, at, _, shares in self._events:
            source = self.population.sources[i]
            number = source.number * np.asarray(source.delay.fraction(np.array(ages)))
            value[i, :, at] = number[:, None] * shares
        return value

    def change(self, model: int, species: Sequence[int], factor: float, ages: object = None) -> Array:
        """Return how yields change where one model's printed figures are multiplied by a factor.

        Exact, with cubics too.

        Parameters
        ----------
        model : int
            Its position in `models`.
        species : sequence of int
            Positions of the species whose figures change.
        factor : float
        ages : array_like, optional
            yr.

        Returns
        -------
        ndarray, shape (sources, t)
            Sum over the species, Msun per Msun formed; the same in total and net yields.
        """
        wanted = np.zeros(len(self.species))
        wanted[list(species)] = 1.0
        piece = next((p for p in self._pieces if p.at.start <= model < p.at.stop), None)
        if piece is None or not piece.cubic:
            weight = self.weights(ages)[..., model]
            return weight * (factor - 1) * float(self.printed[model] @ wanted)
        value, slope, _ = self._weights(self._ages(ages))
        k = model - piece.at.start
        counted = piece.projection @ wanted
        moved = piece.primary.copy()
        moved[k] += (factor - 1) * piece.printed[k] * (counted != 0)
        before, _ = piece.slopes
        after, _ = monotone_slopes(piece.strand.curve.mass, moved)
        rise = value[..., piece.at] @ ((moved - piece.primary) @ counted)
        return rise + slope[..., piece.at] @ ((after - before) @ counted)

    def printed_along(self, mass: Array) -> Array:
        """Return the part of stars' yields along initial mass that the models' printed figures make.

        Parameters
        ----------
        mass : ndarray, shape (m,)
            Msun, inside the mass function's limits.

        Returns
        -------
        ndarray, shape (m, species)
            Msun; the rest of a yield is at birth composition.
        """
        which, basis = dying_basis(self._segments, mass)
        row = np.einsum("me,mek->mk", basis, self._segments.coefficients[which])
        n, half = len(self.species), len(self.species) + len(self.models)
        value, slope = row[:, n:half], row[:, half + n : 2 * half]
        out = np.zeros((len(mass), n))
        for piece in self._pieces:
            out += value[:, piece.at] @ (piece.printed @ piece.projection)
            if piece.cubic:
                moved = np.einsum("jks,ks->js", piece.slopes[1], piece.printed)
                out += slope[:, piece.at] @ (moved @ piece.projection)
        return out

    def _ages(self, ages: object) -> tuple[float, ...]:
        return self.population.ages if ages is None else read_ages(ages)

    def _weights(self, ages: Sequence[float]) -> tuple[Array, Array, Array]:
        """Weights of the nodes' values and slopes by source and age, and what is lent at birth."""
        asked = np.array(ages)
        order = np.argsort(asked, kind="stable")
        back = np.argsort(order, kind="stable")
        turnoff = np.asarray(self.population.prepared.curve.turnoff(asked[order]))
        parts = self._segments
        dead = dead_weights(self.population.imf, parts, turnoff)[back]
        n, k = len(self.species), len(self.models)
        out = np.zeros((len(self.population.sources), len(ages), parts.coefficients.shape[2]))
        stellar = [i for i, s in enumerate(self.population.sources) if isinstance(s, StellarSource)]
        for owner, i in enumerate(stellar):
            mine = parts.owner == owner
            flat = parts.coefficients[mine].reshape(-1, out.shape[2])
            out[i] = dead[:, mine].reshape(len(ages), -1) @ flat
        half = n + k
        lent = np.concatenate([out[..., :n], out[..., half : half + n]], axis=-1)
        return out[..., n:half], out[..., half + n : 2 * half], lent


def nodes(population: Population) -> Nodes:
    """Find how a population depends on each published model.

    Parameters
    ----------
    population : Population

    Returns
    -------
    Nodes

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O", "Fe"])
    >>> found = nodes(stars)
    >>> print(found.models[0])
    kobayashi-2006, 13 Msun, Z = 0.02
    >>> parts, result = found.at(["1 Gyr"]), stars.weigh(["1 Gyr"])
    >>> whole = parts.contribution.sum(axis=2) + parts.birth_net
    >>> bool(abs(whole / result.net - 1).max() < 1e-12)
    True
    """
    ready, z, solar = population.prepared, population.metallicity, population.solar
    names = ready.columns.species
    taken: list[list[list[Strand]]] = []
    for source in population.sources:
        if isinstance(source, StellarSource):
            taken.append(
                [
                    strands(
                        entry,
                        z,
                        names,
                        population.interpolation,
                        population.edges.metallicity,
                        source.winds,
                        solar,
                    )[0]
                    for entry in source.sets
                ]
            )
    stellar = [s for s in population.sources if isinstance(s, StellarSource)]
    models: list[Model] = []
    pieces: list[_Piece] = []
    for source, rows in zip(stellar, taken, strict=True):
        for strand in (p for parts in rows for p in parts):
            one = strand.grid.slices[strand.position]
            derived = strand.grid.derived
            at = slice(len(models), len(models) + len(one.mass))
            models += [Model(strand.grid.id, one.metallicity, float(m), source.kind) for m in one.mass]
            pieces.append(
                _Piece(
                    strand,
                    at,
                    one.net if "total" in derived else one.listed,
                    one.listed if "net" in derived else one.net,
                    strand.grid.projection(names)[0],
                    one.total if source.winds == "birth" else one.listed,
                )
            )
    events, event_figures = [], []
    for i, source in enumerate(population.sources):
        if isinstance(source, DelayedSource):
            entry = source.sets[0]
            grids = entry.load(solar)
            at = slice(len(models), len(models) + len(grids))
            models += [Model(g.id, None, None, source.kind) for g in grids]
            figures = np.array([event_row(g, names, ready.birth)[0][: 2 * len(names)] for g in grids])
            events.append((i, at, figures, np.array(entry.shares)))
            event_figures.append(figures[:, : len(names)])
    printed = np.concatenate([*(p.printed @ p.projection for p in pieces), *event_figures])
    layout = unit_layout(population, stellar, taken, {id(p.strand): p.at for p in pieces}, len(models))
    return Nodes(population, tuple(models), printed, tuple(pieces), layout, tuple(events))


def positions(species: Sequence[str], name: str) -> list[int]:
    """Return where a species stands in a list, or all nuclides of an element that isn't there itself.

    Raises
    ------
    InputError
        It isn't there.
    """
    wanted = parse(name)
    if wanted.name in species:
        return [list(species).index(wanted.name)]
    at = [i for i, s in enumerate(species) if wanted.is_element and parse(s).symbol == wanted.symbol]
    if not at:
        raise InputError(f"species {name!r} isn't in the population", mend=nearest(name, species))
    return at
