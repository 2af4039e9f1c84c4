"""The internal grid: what one paper publishes, a slice for each metallicity, each with its own masses."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from itertools import pairwise
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray

from .errors import InputError, nearest
from .nuclides import Species, parse

if TYPE_CHECKING:
    import pandas as pd

    from .audit import Finding

Array = NDArray[np.float64]
Convention = Literal["total", "net"]


@dataclass(frozen=True, eq=False, repr=False)
class Slice:
    """All models of a yield set at one metallicity.

    Attributes
    ----------
    metallicity : float
        Mass fraction of metals at birth.
    mass : ndarray, shape (n,)
        Initial masses, Msun, strictly increasing. For the event of a delayed
        source the one "mass" is the mass ejected.
    ejected : ndarray, shape (n,)
        All mass that leaves the star over its life, winds included, Msun.
    wind : ndarray, shape (n,)
        The part of `ejected` that the paper doesn't list (mass lost before the
        explosion), taken to leave at birth composition, Msun.
    total, net : ndarray, shape (n, s)
        Total and net yields, Msun, one column a species.
    initial : ndarray, shape (s,)
        Mass fractions at birth, X0.
    lifetime : ndarray, shape (n,), optional
        Lifetimes, yr, where the paper gives them.
    """

    metallicity: float
    mass: Array
    ejected: Array
    wind: Array
    total: Array
    net: Array
    initial: Array
    lifetime: Array | None = None

    def __post_init__(self) -> None:
        n, s = self.total.shape
        for name, shape in (
            ("mass", (n,)),
            ("ejected", (n,)),
            ("wind", (n,)),
            ("net", (n, s)),
            ("initial", (s,)),
            ("lifetime", (n,)),
        ):
            array = getattr(self, name)
            if array is not None and array.shape != shape:
                raise InputError(f"{name} has shape {array.shape}, not {shape}", where=self._where())
        for name in ("mass", "ejected", "wind", "total", "net", "initial"):
            array = getattr(self, name)
            if not np.all(np.isfinite(array)):
                row = int(np.argwhere(~np.isfinite(array))[0][0])
                raise InputError(
                    f"{name} of model {row + 1} isn't a finite number",
                    where=self._where(),
                    mend="give every model a value, or drop the model",
                )
        if not np.isfinite(self.metallicity) or not 0 <= self.metallicity < 1:
            raise InputError(
                f"metallicity {self.metallicity} isn't a mass fraction",
                mend="give Z as a mass fraction of metals, such as 0.014",
            )
        if n == 0:
            raise InputError("there are no models", where=self._where())
        if np.any(self.mass <= 0):
            raise InputError(f"mass isn't positive: {self.mass.min():g} Msun", where=self._where())
        if np.any(np.diff(self.mass) <= 0):
            i = int(np.argmax(np.diff(self.mass) <= 0))
            raise InputError(
                f"masses don't increase: {self.mass[i]:g} then {self.mass[i + 1]:g} Msun",
                where=self._where(),
                mend="sort the models and keep one for each mass",
            )
        for name in ("mass", "ejected", "wind", "total", "net", "initial"):
            own = np.array(getattr(self, name), dtype=float)
            own.setflags(write=False)
            object.__setattr__(self, name, own)

    def __repr__(self) -> str:
        lo, hi = self.mass[0], self.mass[-1]
        return f"Slice(Z = {self.metallicity:g}, {len(self.mass)} models, {lo:g}-{hi:g} Msun)"

    def _where(self) -> str:
        return f"slice Z = {self.metallicity:g}"

    @property
    def remnant(self) -> Array:
        """Remnant masses, Msun, shape (n,): initial mass less ejected mass."""
        return self.mass - self.ejected

    @property
    def listed(self) -> Array:
        """What the paper itself lists as total, shape (n, s): `total` without the unlisted wind."""
        return self.total - self.wind[:, None] * self.initial

    def rest(self, convention: Convention = "total") -> Array:
        """Ejected mass that belongs to no species the set follows, Msun.

        Parameters
        ----------
        convention : {"total", "net"}

        Returns
        -------
        ndarray, shape (n,)
            ejected - sum of totals, or minus the sum of net yields; with it every
            model's budget closes. Small negative values are a table's own rounding.
        """
        if convention == "net":
            return -self.net.sum(axis=1)
        return self.ejected - self.total.sum(axis=1)


@dataclass(frozen=True, eq=False)
class YieldSet:
    """A published yield set on its ragged grid of mass and metallicity.

    Attributes
    ----------
    id : str
        Author-year and variant, such as ``"limongi-chieffi-2018-R-v150"``.
    kind : str
        Source that ejects: ``"agb"``, ``"core-collapse"``, ``"thermonuclear"`` or one of the user's.
    species : tuple of str
        Canonical names of the nuclides or elements followed, in order of Z and A.
    slices : tuple of Slice
        In order of metallicity.
    derived : frozenset of str
        Which of ``"total"`` and ``"net"`` was not published but follows from the
        other and the birth composition.
    notes : tuple of str
        What was done on the way into the grid.
    info : mapping
        Paper, provenance, decay state and gaps, as in the set's own set.toml.
    checksum : str
        SHA-256 over the figures the set was made from.
    event : bool
        Whether the one "model" is an event of a delayed source, without initial mass.

    Examples
    --------
    >>> from steelyard.yields import load
    >>> agb = load("karakas-2010")
    >>> agb.metallicities
    (0.0001, 0.004, 0.008, 0.02)
    >>> agb.value("C12", mass=3.0, metallicity=0.02, convention="net")
    0.013704421
    """

    id: str
    kind: str
    species: tuple[str, ...]
    slices: tuple[Slice, ...]
    derived: frozenset[str] = frozenset()
    notes: tuple[str, ...] = ()
    info: Mapping[str, Any] = field(default_factory=dict)
    checksum: str = ""
    event: bool = False

    def __post_init__(self) -> None:
        if not self.slices:
            raise InputError("the set has no models", where=self.id)
        if len(set(self.species)) != len(self.species):
            twice = sorted({s for s in self.species if self.species.count(s) > 1})
            raise InputError(f"species named twice: {', '.join(twice)}", where=self.id)
        for name in self.species:
            if parse(name).name != name:
                raise InputError(f"species {name!r} isn't written as {parse(name).name}", where=self.id)
        whole = {s.symbol for s in self.parsed if s.is_element}
        both = sorted({s.symbol for s in self.parsed if not s.is_element and s.symbol in whole})
        if both:
            raise InputError(
                f"both an element and its nuclides are listed: {', '.join(both)}",
                where=self.id,
                mend="keep one of them, or the element would count twice",
            )
        for one in self.slices:
            if one.total.shape[1] != len(self.species):
                raise InputError(
                    f"slice Z = {one.metallicity:g} has {one.total.shape[1]} columns for"
                    f" {len(self.species)} species",
                    where=self.id,
                )
        z = self.metallicities
        if any(b <= a for a, b in pairwise(z)):
            raise InputError(f"metallicities don't increase: {z}", where=self.id)

    def __repr__(self) -> str:
        models = sum(len(s.mass) for s in self.slices)
        return f"YieldSet({self.id!r}, {self.kind}, {models} models, {len(self.species)} species)"

    def _repr_html_(self) -> str:
        from .display import html_table

        derived = f"; {' and '.join(sorted(self.derived))} yields derived" if self.derived else ""
        caption = f"{self.id}: {self.kind}, {len(self.species)} species{derived}"
        if self.event:
            # an event has no initial mass
            (one,) = self.slices
            return html_table(caption, ["", "ejected (Msun)"], [["event", f"{one.ejected[0]:g}"]])
        rows = [
            [f"{one.metallicity:g}", f"{len(one.mass)}", f"{one.mass[0]:g}", f"{one.mass[-1]:g}"]
            for one in self.slices
        ]
        return html_table(caption, ["Z", "models", "from (Msun)", "to (Msun)"], rows)

    @property
    def metallicities(self) -> tuple[float, ...]:
        """Metallicities of the slices, increasing."""
        return tuple(float(s.metallicity) for s in self.slices)

    @property
    def masses(self) -> tuple[float, ...]:
        """Every initial mass that occurs in some slice, Msun, increasing."""
        return tuple(float(m) for m in np.unique(np.concatenate([s.mass for s in self.slices])))

    @cached_property
    def parsed(self) -> tuple[Species, ...]:
        """The species as parsed names, in the order of `species`."""
        return tuple(parse(s) for s in self.species)

    @property
    def follows_elements(self) -> bool:
        """Whether the set lists elements rather than nuclides."""
        return all(s.is_element for s in self.parsed)

    def at(self, metallicity: float) -> Slice:
        """Return the slice at a metallicity of the set.

        Parameters
        ----------
        metallicity : float
            One of `metallicities`, to a relative 1e-9.

        Returns
        -------
        Slice

        Raises
        ------
        InputError
            The set has no such slice.
        """
        for one in self.slices:
            if np.isclose(one.metallicity, metallicity, rtol=1e-9, atol=0):
                return one
        have = ", ".join(f"{z:g}" for z in self.metallicities)
        raise InputError(f"no slice at Z = {metallicity:g}", where=self.id, mend=f"it has {have}")

    def columns(self, name: str) -> list[int]:
        """Return the columns that make up a species or element.

        Parameters
        ----------
        name : str
            A nuclide, or an element: all its nuclides that the set follows.

        Returns
        -------
        list of int
            Empty where the set doesn't follow it.
        """
        wanted = parse(name)
        if wanted.name in self.species:
            return [self.species.index(wanted.name)]
        if wanted.is_element:
            return [i for i, s in enumerate(self.parsed) if s.symbol == wanted.symbol]
        return []

    def projection(self, names: Sequence[str]) -> tuple[Array, NDArray[np.bool_]]:
        """Return the matrix that sums the set's species into others.

        Parameters
        ----------
        names : sequence of str
            The species wanted, nuclides or elements.

        Returns
        -------
        matrix : ndarray, shape (s, len(names))
            Zeros and ones; ``total @ matrix`` gives the wanted species.
        followed : ndarray of bool, shape (len(names),)
            False where the set doesn't follow a species: missing, not zero.
        """
        matrix = np.zeros((len(self.species), len(names)))
        for j, name in enumerate(names):
            matrix[self.columns(name), j] = 1.0
        return matrix, matrix.any(axis=0)

    def value(self, species: str, mass: float, metallicity: float, convention: Convention = "total") -> float:
        """Return one published model's yield of a species or element.

        Parameters
        ----------
        species : str
        mass : float
            Initial mass of the model, Msun.
        metallicity : float
        convention : {"total", "net"}

        Returns
        -------
        float
            Msun.

        Raises
        ------
        InputError
            There is no such model, or the set doesn't follow the species.
        """
        columns = self.columns(species)
        if not columns:
            raise InputError(
                f"species {species!r} isn't followed", where=self.id, mend=nearest(species, self.species)
            )
        one = self.at(metallicity)
        rows = np.flatnonzero(np.isclose(one.mass, mass, rtol=1e-9, atol=0))
        if rows.size == 0:
            have = ", ".join(f"{m:g}" for m in one.mass)
            raise InputError(
                f"no model of {mass:g} Msun at Z = {metallicity:g}", where=self.id, mend=f"it has {have}"
            )
        return float(getattr(one, convention)[rows[0], columns].sum())

    def audit(self) -> tuple[Finding, ...]:
        """Look for what contradicts itself in the set: `steelyard.yields.audit.audit`.

        Returns
        -------
        tuple of Finding
            The heaviest first.

        Examples
        --------
        >>> from steelyard.yields import load
        >>> load("kobayashi-2006").audit()[0].severity
        'warning'
        """
        from .audit import audit

        return audit(self)

    def to_pandas(self, convention: Convention = "total") -> pd.DataFrame:
        """Return the whole set as a table.

        Parameters
        ----------
        convention : {"total", "net"}

        Returns
        -------
        pandas.DataFrame
            A row a model, indexed by (metallicity, mass); columns ejected, remnant,
            wind, rest and the species, all Msun.
        """
        import pandas as pd

        frames = []
        for one in self.slices:
            index = pd.MultiIndex.from_product(
                [[one.metallicity], one.mass.tolist()], names=["metallicity", "mass"]
            )
            accounts = {
                "ejected": one.ejected,
                "remnant": one.remnant,
                "wind": one.wind,
                "rest": one.rest(convention),
            }
            species = dict(zip(self.species, getattr(one, convention).T, strict=True))
            frames.append(pd.DataFrame(accounts | species, index=index))
        frame = pd.concat(frames)
        frame.attrs = {"set": self.id, "convention": convention, "unit": "Msun"}
        return frame
