"""What weighing a population gives: labelled arrays with their units."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.composition import abundance_ratio
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.nuclides import parse
from steelyard.yields.units import registry

from .tracks import Columns

if TYPE_CHECKING:
    import pandas as pd
    import pint

    from .population import Population
    from .weighing import Dying

Array = NDArray[np.float64]
Convention = Literal["total", "net"]

#: elements that a notebook shows of many: one or two of every nucleosynthetic family
_SHOWN = ("H", "He", "C", "N", "O", "Mg", "Si", "S", "Ca", "Mn", "Fe", "Ni", "Ba", "Eu")


@dataclass(frozen=True, eq=False, repr=False)
class PopulationYields:
    """Yields of a stellar population, per Msun formed.

    Attributes
    ----------
    population : Population
        What was weighed.
    ages : ndarray, shape (t,)
        yr.
    species : tuple of str
    sources : tuple of str
    cumulative : ndarray, shape (sources, t, 2 species + 5)
        Everything by source up to each age: totals, net yields and accounts
        (`Columns`), Msun per Msun formed.
    dying : Dying
        Who dies at each age: `rates` are made of it when asked for.
    living : ndarray, shape (t,)
        Mass in living stars.
    remnants_by_kind : dict of ndarray, shape (t,)
        Mass in white dwarfs, neutron stars and black holes.
    events, event_rates : dict of ndarray, shape (t,)
        Numbers per Msun formed up to an age; per yr and Msun formed.
    followed : ndarray of bool, shape (sources, species)
        False where a source doesn't follow a species: missing, not zero.
    notes : tuple of str
        What was assumed, held or derived.
    """

    population: Population
    ages: Array
    species: tuple[str, ...]
    sources: tuple[str, ...]
    cumulative: Array
    dying: Dying
    living: Array
    remnants_by_kind: dict[str, Array]
    events: dict[str, Array]
    event_rates: dict[str, Array]
    followed: NDArray[np.bool_]
    notes: tuple[str, ...]

    def __repr__(self) -> str:
        return (
            f"PopulationYields(Z = {self.population.metallicity:g}, {len(self.ages)} ages,"
            f" {len(self.species)} species, sources {', '.join(self.sources)})"
        )

    def _repr_html_(self) -> str:
        from steelyard.yields.display import html_table

        i = int(np.argmax(self.ages))
        shown = [s for s in self.species if parse(s).symbol in _SHOWN] or list(self.species)
        shown = shown[: len(_SHOWN)]
        rows = []
        for name in shown:
            cells = []
            for source in (*self.sources, None):
                value = float(self.get(name, source)[i])
                lacks = name in self.missing[source] if source else bool(self.lacking(name))
                cells.append("-" if lacks and not value else f"{value:.3e}{'†' if lacks else ''}")
            rows.append([name, *cells])
        cells = [cell for row in rows for cell in row[1:]]
        notes = [
            "-: not followed" if "-" in cells else "",
            "†: without what isn't followed" if any("†" in cell for cell in cells) else "",
            f"{len(self.species) - len(shown)} more species" if len(shown) < len(self.species) else "",
        ]
        caption = f"Z = {self.population.metallicity:g}: total yields up to {self.ages[i]:.4g} yr"
        headings = ["", *self.sources, "sum"]
        return html_table(f"{caption}, Msun per Msun formed", headings, rows, "; ".join(filter(None, notes)))

    @cached_property
    def rates(self) -> Array:
        """Everything by source at each age, per yr; shape and columns as of `cumulative`."""
        return self.dying.rates()

    @property
    def columns(self) -> Columns:
        """Where species and accounts stand along the last axis."""
        return Columns(self.species)

    @property
    def total(self) -> Array:
        """Total yields up to each age, shape (sources, t, species), Msun per Msun formed."""
        return self.cumulative[..., self.columns.total]

    @property
    def net(self) -> Array:
        """Net yields up to each age, shape (sources, t, species), Msun per Msun formed."""
        return self.cumulative[..., self.columns.net]

    @property
    def total_rate(self) -> Array:
        """Total yields per time, shape (sources, t, species), Msun per yr and Msun formed."""
        return self.rates[..., self.columns.total]

    @property
    def net_rate(self) -> Array:
        """Net yields per time, shape (sources, t, species), Msun per yr and Msun formed."""
        return self.rates[..., self.columns.net]

    @property
    def ejected(self) -> Array:
        """Mass ejected by each source, shape (sources, t), Msun per Msun formed."""
        return self.cumulative[..., self.columns.account("ejected")]

    @property
    def returned(self) -> Array:
        """Mass returned by all sources, shape (t,), Msun per Msun formed."""
        return self.ejected.sum(axis=0)

    @property
    def remnants(self) -> Array:
        """Mass in remnants of all kinds, shape (t,), Msun per Msun formed."""
        return sum(self.remnants_by_kind.values())

    @property
    def ranges(self) -> list[dict[str, Any]]:
        """The ranges of initial mass that came out: from, to (Msun), source, and what serves them."""
        kinds = [s.kind for s in self.population.sources if s.kind in ("agb", "core-collapse")]
        out: list[dict[str, Any]] = []
        for span in self.population.prepared.spans:
            how = span.how
            if span.implodes:
                how += ", imploding" if span.implodes == 1 else f", {span.implodes:g} imploding"
            one = {"from": span.lo, "to": span.hi, "source": kinds[span.owner], "served_by": how}
            if out and all(out[-1][k] == one[k] for k in ("source", "served_by")):
                out[-1]["to"] = span.hi
            else:
                out.append(one)
        return out

    @property
    def missing(self) -> dict[str, list[str]]:
        """Species that each source doesn't follow."""
        return {
            source: [s for s, has in zip(self.species, row, strict=True) if not has]
            for source, row in zip(self.sources, self.followed, strict=True)
        }

    def get(
        self,
        species: str,
        source: str | None = None,
        convention: Convention = "total",
        rate: bool = False,
    ) -> Array:
        """Return the yield of a species over time.

        Parameters
        ----------
        species : str
            One of `species`, or an element of which nuclides were weighed (their sum).
        source : str, optional
            One of `sources`; default: the sum of all that follow it.
        convention : {"total", "net"}
        rate : bool
            Per yr at each age instead of up to it.

        Returns
        -------
        ndarray, shape (t,)
            Msun per Msun formed (and yr).

        Raises
        ------
        InputError
            The species or source isn't in the result.
        """
        if convention not in ("total", "net"):
            raise InputError(f"convention {convention!r} isn't known", mend="choose total or net")
        at = self._columns_of(species)
        values = {
            ("total", False): self.total,
            ("net", False): self.net,
            ("total", True): self.total_rate,
            ("net", True): self.net_rate,
        }[convention, rate][..., at].sum(axis=-1)
        if source is None:
            return values.sum(axis=0)
        return values[self._source(source)]

    def quantity(
        self,
        species: str,
        source: str | None = None,
        convention: Convention = "total",
        rate: bool = False,
    ) -> pint.Quantity:
        """Return the yield of a species over time with its unit.

        Parameters and errors as in `get`.

        Returns
        -------
        pint.Quantity, shape (t,)
            In Msun / Msun, or Msun / Msun / yr for rates.
        """
        units = registry()
        unit = units.Msun / units.Msun / units.yr if rate else units.Msun / units.Msun
        return units.Quantity(self.get(species, source, convention, rate), unit)

    def ratio(
        self,
        a: str,
        b: str,
        source: str | None = None,
        convention: Convention = "total",
        rate: bool = False,
    ) -> Array:
        """Return [a/b] of the ejecta.

        Parameters
        ----------
        a, b : str
            Elements or nuclides.
        source, convention, rate
            As in `get`.

        Returns
        -------
        ndarray, shape (t,)
            dex against the population's solar mixture; NaN where a yield isn't positive.
        """
        ma, mb = (self.get(x, source, convention, rate) for x in (a, b))
        return abundance_ratio(ma, mb, a, b, self.population.solar)

    def lacking(self, species: str) -> tuple[str, ...]:
        """Return the sources that don't follow a species: sums over sources miss their part."""
        at = self._columns_of(species)
        return tuple(s for s, row in zip(self.sources, self.followed, strict=True) if not row[at].any())

    def to_pandas(self, convention: Convention = "total", rate: bool = False) -> pd.DataFrame:
        """Return yields as a table.

        Parameters
        ----------
        convention : {"total", "net"}
        rate : bool

        Returns
        -------
        pandas.DataFrame
            Indexed by source ("sum" for all) and age in yr, a column a species; NaN
            where a source doesn't follow a species, and the sum is over those that do.
        """
        import pandas as pd

        frames = {}
        for source, row in zip(self.sources, self.followed, strict=True):
            values = np.column_stack([self.get(s, source, convention, rate) for s in self.species])
            frames[source] = pd.DataFrame(
                np.where(row, values, np.nan), index=self.ages, columns=list(self.species)
            )
        values = np.column_stack([self.get(s, None, convention, rate) for s in self.species])
        frames["sum"] = pd.DataFrame(values, index=self.ages, columns=list(self.species))
        out = pd.concat(frames, names=["source", "age_yr"])
        out.attrs = {
            "convention": convention,
            "unit": "Msun per yr and Msun formed" if rate else "Msun per Msun formed",
        }
        return out

    def to_dict(self) -> dict[str, Any]:
        """Return everything as plain lists, in the layout of ``steelyard weigh --json``."""
        source_at = dict(enumerate(self.sources))

        def table(values: Array) -> dict[str, list[float]]:
            return {s: values[:, j].tolist() for j, s in enumerate(self.species)}

        return {
            "metallicity": self.population.metallicity,
            "ages_yr": self.ages.tolist(),
            "species": list(self.species),
            "sources": list(self.sources),
            "total": {source: table(self.total[i]) for i, source in source_at.items()},
            "net": {source: table(self.net[i]) for i, source in source_at.items()},
            "sum": {"total": table(self.total.sum(axis=0)), "net": table(self.net.sum(axis=0))},
            "missing": self.missing,
            "returned": self.returned.tolist(),
            "living": self.living.tolist(),
            "remnants": self.remnants.tolist(),
            "remnants_by_kind": {k: v.tolist() for k, v in self.remnants_by_kind.items()},
            "events": {k: v.tolist() for k, v in self.events.items()},
            "ranges": self.ranges,
            "notes": list(self.notes),
        }

    def _columns_of(self, species: str) -> list[int]:
        wanted = parse(species)
        if wanted.name in self.species:
            return [self.species.index(wanted.name)]
        at = [i for i, s in enumerate(self.species) if wanted.is_element and parse(s).symbol == wanted.symbol]
        if not at:
            raise InputError(f"species {species!r} isn't in the result", mend=nearest(species, self.species))
        return at

    def _source(self, source: str) -> int:
        if source not in self.sources:
            raise InputError(f"source {source!r} isn't in the result", mend=nearest(source, self.sources))
        return self.sources.index(source)
