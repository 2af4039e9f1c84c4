"""A stellar population: what is declared about it, prepared once, weighed at any ages."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.composition import birth_composition, mixture
from steelyard.yields.curve import bracket
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.grid import YieldSet
from steelyard.yields.library import DEFAULT_SOLAR
from steelyard.yields.nuclides import parse
from steelyard.yields.units import plain

from .imf import CallableIMF, MassFunction, imf, kroupa_2001
from .laws import law_of, named, with_law
from .lifetimes import LifetimeCurve, LifetimeLaw, lifetimes, tabulated
from .ranges import spans
from .results import PopulationYields
from .sources import STELLAR_KINDS, DelayedSource, Edges, Join, Source, StellarSource, interpolation
from .span import Ground, Span
from .tracks import Columns, Track, braid, event_row, strands
from .weighing import Products, weigh
from .weights import Segments, segments

Array = NDArray[np.float64]

DEFAULT_AGES = (1e7, 3e7, 1e8, 3e8, 1e9, 3e9, 13.8e9)


@dataclass(frozen=True, eq=False, repr=False)
class Population:
    """Stars born together, and the events that follow from them.

    Attributes
    ----------
    metallicity : float
        Mass fraction of metals at birth.
    sources : sequence of StellarSource or DelayedSource
    imf : MassFunction, str or callable
        A mass function, the name of one with its usual limits, or a function of
        metallicity that returns one, such as a `PowerLawIMF`.
    lifetimes : str, callable or LifetimeLaw
        A law by name; ``"sets"`` for the sets' own lifetimes where they give them
        (Portinari+ 1998 elsewhere); or a function of mass and metallicity in yr.
    joins : sequence of Join
    edges : Edges
    solar : str
        Mixture for [X/Y] and for birth compositions that a set doesn't give.
    species : "elements", "nuclides" or sequence of str
    ages : sequence, optional
        Ages at which `weigh` answers when not told otherwise, yr.
    interpolation : {"linear", "cubic"}
        In initial mass between models.

    Examples
    --------
    >>> from steelyard.integrate import Join, Population, StellarSource
    >>> stars = Population(
    ...     metallicity=0.014,
    ...     sources=[
    ...         StellarSource("agb", ["karakas-2010", "doherty-2014"]),
    ...         StellarSource("core-collapse", ["kobayashi-2006"]),
    ...     ],
    ...     joins=[Join(("agb", "core-collapse"), "bridge")],
    ... )
    >>> result = stars.weigh(["100 Myr", "13.8 Gyr"])
    >>> bool(np.all(abs(result.living + result.remnants + result.returned - 1) < 1e-12))
    True
    """

    metallicity: Any
    sources: Sequence[Source]
    imf: Any = field(default_factory=kroupa_2001)
    lifetimes: str | Callable[..., Any] | LifetimeLaw = "portinari-1998"
    joins: Sequence[Join] = ()
    edges: Edges = field(default_factory=Edges)
    solar: str = DEFAULT_SOLAR
    species: str | Sequence[str] = "elements"
    ages: Any = DEFAULT_AGES
    interpolation: str = "linear"

    def __post_init__(self) -> None:
        put = object.__setattr__
        z = plain(self.metallicity, "", "metallicity")
        if not 0 <= z < 0.5:
            raise InputError(f"metallicity {z:g} isn't a mass fraction of metals", mend="such as 0.014")
        put(self, "metallicity", z)
        put(self, "sources", tuple(s.at(z) for s in self.sources))
        put(self, "joins", tuple(self.joins))
        put(self, "imf", _mass_function(self.imf, z))
        if not isinstance(self.imf, MassFunction):
            raise InputError(
                f"imf isn't a mass function: {str(self.imf)[:60]}",
                mend="give a form's name, steelyard.integrate.imf(...) or from_function(function, limits)",
            )
        put(self, "ages", read_ages(self.ages))
        interpolation(self.interpolation)
        mixture(self.solar)
        if not self.sources:
            raise InputError(
                "the population has no source", mend="add a source, such as agb or core-collapse"
            )
        kinds = [s.kind for s in self.sources]
        twice = sorted({k for k in kinds if kinds.count(k) > 1})
        if twice:
            raise InputError(
                f"source {twice[0]} is named twice",
                mend="put its sets in series or in a mixture in one source",
            )

    def __repr__(self) -> str:
        return f"Population(Z = {self.metallicity:g}, {self.imf!r}, sources {', '.join(self.kinds)})"

    @property
    def kinds(self) -> tuple[str, ...]:
        """Kinds of the sources, in the order given."""
        return tuple(s.kind for s in self.sources)

    @property
    def laws(self) -> tuple[str, ...]:
        """What a law of metallicity gave, and what gives another value at another metallicity."""
        out = ["imf"] if law_of(self.imf) else []
        for source in self.sources:
            out += [
                f"{source.kind}.{key}" for key in ("number", "delay") if law_of(getattr(source, key, None))
            ]
            if any(law_of(entry.shares) for entry in source.sets):
                out.append(f"{source.kind}.sets")
        return tuple(out)

    @cached_property
    def prepared(self) -> Prepared:
        """All that doesn't depend on ages: spans, coefficients, events, notes."""
        return _prepare(self)

    def weigh(self, ages: Any = None) -> PopulationYields:
        """Weigh the population.

        Parameters
        ----------
        ages : array_like, optional
            yr, or text and Quantities; default: the population's own.

        Returns
        -------
        PopulationYields
            All per Msun formed.

        Raises
        ------
        InputError
            Negative ages, or sets that don't fit together.
        """
        return weigh(self, self.ages if ages is None else read_ages(ages))


def _mass_function(given: Any, metallicity: float) -> MassFunction:
    """The mass function at a metallicity, with the law it comes from if there is one."""
    if isinstance(given, str):
        return imf(given)
    law = law_of(given) if isinstance(given, MassFunction) else given
    if law is None:
        return given
    if not callable(law):
        raise InputError(
            f"imf can't be read from {given!r}",
            mend="give a mass function, its name, or a function of metallicity that returns one",
        )
    made = law(metallicity)
    if not isinstance(made, MassFunction):
        raise InputError(
            f"{named(law)} doesn't return a mass function at Z = {metallicity:g}",
            where="imf",
            mend="return what steelyard.integrate.imf or from_function makes",
        )
    return with_law(made, law)


def read_ages(ages: Any) -> tuple[float, ...]:
    """Read ages, yr: numbers, text or Quantities, one or many."""
    values = np.atleast_1d(plain(ages, "yr", "ages"))
    if values.size == 0 or values.ndim != 1:
        raise InputError("ages needs at least one age", mend='such as ["10 Myr", "13.8 Gyr"]')
    if values.min() < 0:
        raise InputError(f"ages: age is negative: {values.min():g} yr", mend="give ages from 0")
    return tuple(values.tolist())


@dataclass(frozen=True, eq=False)
class Prepared:
    """A population as arrays.

    Attributes
    ----------
    columns : Columns
        Where species and accounts stand in a row.
    birth : ndarray, shape (species,)
        Mass fractions at birth.
    spans : tuple of Span
        Cover the mass function's limits.
    segments : Segments
    events : ndarray, shape (delayed sources, columns)
        What one event of each delayed source ejects.
    followed : ndarray of bool, shape (sources, species)
    sets : tuple of YieldSet
        Every set used.
    models : tuple of (str, float, float)
        Published models in the order of the segments' `share`.
    curve : LifetimeCurve
    notes : tuple of str
    """

    columns: Columns
    birth: Array
    spans: tuple[Span, ...]
    segments: Segments
    events: Array
    followed: NDArray[np.bool_]
    sets: tuple[YieldSet, ...]
    models: tuple[tuple[str, float, float], ...]
    curve: LifetimeCurve
    notes: tuple[str, ...]

    @cached_property
    def products(self) -> Products:
        """The segments' coefficients laid out for products with the weights."""
        return Products(self.segments)


def _prepare(population: Population) -> Prepared:
    z, solar = population.metallicity, population.solar
    stellar = [s for s in population.sources if isinstance(s, StellarSource)]
    delayed = [s for s in population.sources if isinstance(s, DelayedSource)]
    if not stellar:
        raise InputError(
            "the population has no source of stars", mend="add a source of kind agb or core-collapse"
        )
    sets = tuple(dict.fromkeys(g for s in population.sources for entry in s.sets for g in entry.load(solar)))
    columns = Columns(_species(population.species, sets))
    names = columns.species
    birth = birth_composition(names, z, solar)
    notes: list[str] = []
    tracks: list[list[Track]] = []
    for source in stellar:
        entries = []
        for entry in source.sets:
            parts, told = strands(
                entry, z, names, population.interpolation, population.edges.metallicity, source.winds, solar
            )
            told += [
                f"{source.kind}: {g.id} is a set of kind {g.kind}"
                for g in entry.load(solar)
                if g.kind in STELLAR_KINDS and g.kind != source.kind
            ]
            entries.append(braid(entry.name, parts, names, told))
        tracks.append(entries)
        notes += [n for t in entries for n in t.notes]
    ground = Ground(columns, birth, population.imf.limits)
    cover, more = spans(stellar, tracks, population.joins, population.edges, ground)
    notes += more
    cubic = any(s.curve.slopes is not None for s in cover)
    limit = next((s.neutron_star_limit for s in stellar if s.kind == "core-collapse"), None)
    followed = np.zeros((len(population.sources), len(names)), dtype=bool)
    used = {s.how for s in cover}
    rows = []
    for i, source in enumerate(population.sources):
        if isinstance(source, StellarSource):
            serving = [t for t in tracks[stellar.index(source)] if t.name in used]
            followed[i] = np.all([t.followed for t in serving], axis=0) if serving else False
        else:
            parts = [event_row(g, names, birth) for g in source.sets[0].load(solar)]
            rows.append(sum(w * row for w, (row, _) in zip(source.sets[0].shares, parts, strict=True)))
            followed[i] = np.all([f for _, f in parts], axis=0)
    curve = _lifetime_curve(population, stellar, notes)
    if isinstance(population.imf, CallableIMF):
        notes.append(
            "the mass function is a function, integrated numerically: relative error of its integrals about"
            f" {max(population.imf.error, 1e-16):.0e}"
        )
    return Prepared(
        columns,
        birth,
        tuple(cover),
        segments(cover, cubic, columns.account("remnant"), limit),
        np.array(rows).reshape(len(delayed), columns.width),
        followed,
        sets,
        tuple(m for ts in tracks for t in ts for m in t.models),
        curve,
        tuple(dict.fromkeys(notes)),
    )


def _species(wanted: str | Sequence[str], sets: Sequence[YieldSet]) -> tuple[str, ...]:
    """The species of the result, in order of Z and A."""
    have = {s for g in sets for s in g.parsed}
    if wanted == "elements":
        return tuple(s.name for s in sorted({s.element for s in have}))
    if wanted == "nuclides":
        return tuple(s.name for s in sorted(have))
    if isinstance(wanted, str) or not len(wanted):
        raise InputError(
            f"species {wanted!r} isn't a choice",
            mend='write "elements", "nuclides", or a list such as ["O", "Mg", "Al26"]',
        )
    names = []
    for text in wanted:
        one = parse(text)
        if not any(g.columns(one.name) for g in sets):
            known = [s.name for s in sorted(have | {s.element for s in have})]
            raise InputError(
                f"no set of the population follows {one.name}", where="species", mend=nearest(one.name, known)
            )
        names.append(one.name)
    return tuple(dict.fromkeys(names))


def _lifetime_curve(
    population: Population, stellar: Sequence[StellarSource], notes: list[str]
) -> LifetimeCurve:
    z = population.metallicity
    if population.lifetimes != "sets":
        return lifetimes(population.lifetimes).at(z)
    outside = lifetimes("portinari-1998").at(z)
    for source in stellar:
        for entry in source.sets:
            grid = entry.load(population.solar)[0]
            if len(entry.sets) == 1 and all(s.lifetime is not None for s in grid.slices):
                at = bracket(grid, z, population.edges.metallicity)
                parts = [grid.slices[i] for i in at.slices]
                lo, hi = max(p.mass[0] for p in parts), min(p.mass[-1] for p in parts)
                mass = np.unique(np.concatenate([p.mass for p in parts]))
                mass = mass[(mass >= lo) & (mass <= hi)]
                log_time = sum(
                    w * np.interp(np.log(mass), np.log(p.mass), np.log(p.lifetime))
                    for w, p in zip(at.weights, parts, strict=True)
                )
                notes.append(f"lifetimes of {grid.id} at {lo:g}-{hi:g} Msun, portinari-1998 elsewhere")
                return tabulated(mass, np.exp(log_time), outside=outside, law=f"{grid.id} lifetimes")
    raise InputError(
        'no set of the population gives lifetimes, as lifetimes = "sets" asks',
        mend='choose a law, such as "portinari-1998"',
    )
