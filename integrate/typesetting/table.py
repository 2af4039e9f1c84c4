"""A population's yields as the cells, marks and notes of a paper's table, before any format."""

from __future__ import annotations

import string
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from steelyard.integrate.citations import Citation, citations
from steelyard.integrate.results import Convention, PopulationYields
from steelyard.yields.errors import InputError, nearest

from . import digits as rounding
from .wording import HEADINGS, NAMES, Text, methods, notes

if TYPE_CHECKING:
    from steelyard.integrate.spread import YieldErrors

#: the column of all sources together
SUM = "sum"


@dataclass(frozen=True)
class Cell:
    """A figure.

    Attributes
    ----------
    value : float or None
        Msun per Msun formed, or its log10; None where there is none.
    error : float
        Its standard deviation in the same unit; 0 where none is stated.
    last : int
        Power of ten of the last digit.
    marks : str
        Letters of the table's marks.
    """

    value: float | None
    error: float = 0.0
    last: int = 0
    marks: str = ""


@dataclass(frozen=True)
class Row:
    """The figures of a species at an age (yr), a cell a column."""

    age: float
    species: str
    cells: tuple[Cell, ...]


@dataclass(frozen=True, eq=False)
class PaperTable:
    """A table of yields.

    Attributes
    ----------
    result : PopulationYields
    errors : YieldErrors or None
    convention : {"total", "net"}
    log : bool
    columns : tuple of str
        Sources, and ``"sum"``.
    rows : tuple of Row
        By age, then species.
    marks : tuple of (str, str)
        Letter and meaning.
    """

    result: PopulationYields
    errors: YieldErrors | None
    convention: Convention
    log: bool
    columns: tuple[str, ...]
    rows: tuple[Row, ...]
    marks: tuple[tuple[str, str], ...]

    @property
    def ages(self) -> tuple[float, ...]:
        """Ages in the order of rows, yr."""
        return tuple(dict.fromkeys(row.age for row in self.rows))

    @property
    def headings(self) -> tuple[str, ...]:
        """Headings of the columns."""
        return tuple(HEADINGS.get(one, one) for one in self.columns)

    @property
    def caption(self) -> str:
        """What the table holds."""
        at = f" up to an age of {rounding.age(self.ages[0])}" if len(self.ages) == 1 else " up to each age"
        kind = "Logarithms of IMF-weighted" if self.log else "IMF-weighted"
        z = self.result.population.metallicity
        return f"{kind} {self.convention} yields of a stellar population of Z = {z:g}{at}"

    @property
    def unit(self) -> str:
        """The unit of the figures."""
        return "log10 of Msun per Msun formed" if self.log else "Msun per Msun formed"

    @property
    def notes(self) -> tuple[Text, ...]:
        """What the figures rest on, each a text in which papers are cited."""
        return tuple(notes(self.result, self.errors))

    @property
    def methods(self) -> Text:
        """A paragraph for the text of a paper."""
        return methods(self.result, self.convention, self.errors)

    @property
    def papers(self) -> tuple[Citation, ...]:
        """Every paper that the figures rest on."""
        return citations(self.result.population)


def paper_table(
    result: PopulationYields,
    species: Sequence[str] = (),
    sources: Sequence[str] = (),
    convention: Convention = "total",
    log: bool = False,
    digits: int = 3,
    errors: YieldErrors | None = None,
) -> PaperTable:
    """Return the yields of a population as a table for a paper.

    Parameters
    ----------
    result : PopulationYields
        At the ages wanted.
    species, sources : sequence of str
        Default: all of the result; ``"sum"`` among the sources is the sum over all of them.
    convention : {"total", "net"}
    log : bool
        log10 of the yields; a yield that isn't above 0 has none and is marked.
    digits : int
        Significant digits, or decimals of a logarithm, where no error is stated.
    errors : YieldErrors, optional
        Of `result`: figures are then printed with their errors, to one or two digits of these.

    Returns
    -------
    PaperTable

    Raises
    ------
    InputError
        A species or source that isn't in the result, or digits outside of 1 to 15.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O", "Fe"])
    >>> table = paper_table(stars.weigh(["1 Gyr"]))
    >>> table.columns, [row.species for row in table.rows]
    (('core-collapse', 'sum'), ['O', 'Fe'])
    """
    if not 1 <= digits <= rounding.MOST_DIGITS:
        raise InputError(
            f"{digits} digits can't be printed", mend=f"give a number from 1 to {rounding.MOST_DIGITS}"
        )
    columns = tuple(dict.fromkeys(sources)) or (*result.sources, SUM)
    for one in columns:
        if one not in (*result.sources, SUM):
            known = (*result.sources, SUM)
            raise InputError(f"source {one!r} isn't in the result", mend=nearest(one, known))
    names = tuple(dict.fromkeys(species)) or result.species
    marks = _Marks(result)
    made = {
        (name, column): _cells(result, name, column, convention, log, digits, errors, marks)
        for name in names
        for column in columns
    }
    rows = [
        Row(age, name, tuple(made[name, column][i] for column in columns))
        for i, age in enumerate(result.ages.tolist())
        for name in names
    ]
    kept = {letter for row in rows for cell in row.cells for letter in cell.marks}
    # letters that are not seen are no marks; the others go from a on
    seen = [(old, text) for old, text in marks.texts.items() if old in kept]
    again = dict(zip((old for old, _ in seen), string.ascii_letters, strict=False))
    rows = [
        Row(
            r.age,
            r.species,
            tuple(Cell(c.value, c.error, c.last, "".join(again[m] for m in c.marks)) for c in r.cells),
        )
        for r in rows
    ]
    listed = tuple((again[old], text) for old, text in seen)
    return PaperTable(result, errors, convention, log, columns, tuple(rows), listed)


class _Marks:
    """Letters for what is missing from figures."""

    def __init__(self, result: PopulationYields) -> None:
        letters = iter(string.ascii_letters)
        self.texts: dict[str, str] = {}
        self.without: dict[str, str] = {}
        self.partly: dict[str, str] = {}
        for source in result.sources:
            name = NAMES.get(source, source)
            self.without[source] = next(letters)
            self.texts[self.without[source]] = (
                f"Without {name}, whose yield sets do not follow this species: missing, not zero."
            )
            self.partly[source] = next(letters)
            self.texts[self.partly[source]] = (
                f"{name[:1].upper()}{name[1:]}: followed at some initial masses only."
            )
        self.no_log = next(letters)
        self.texts[self.no_log] = "Not above zero: no logarithm."

    def of(self, result: PopulationYields, species: str, column: str) -> str:
        out = ""
        for source in result.lacking(species):
            partly = bool(result.get(species, source).any())
            if column == SUM:
                out += (self.partly if partly else self.without)[source]
            elif column == source and partly:
                out += self.partly[source]
        return out


def _cells(
    result: PopulationYields,
    species: str,
    column: str,
    convention: Convention,
    log: bool,
    digits: int,
    errors: YieldErrors | None,
    marks: _Marks,
) -> list[Cell]:
    """The cells of a species and a source, one an age."""
    source = None if column == SUM else column
    values = result.get(species, source, convention)
    lacks = result.lacking(species)
    if column in lacks and not result.get(species, source).any():
        return [Cell(None)] * len(values)
    if source is None and len(lacks) == len(result.sources) and not result.get(species).any():
        return [Cell(None, marks=marks.of(result, species, column))] * len(values)
    deviations = np.zeros(len(values)) if errors is None else errors.get(species, source)
    deviations = np.where(deviations < rounding.NEGLIGIBLE * abs(values), 0.0, deviations)
    mark = marks.of(result, species, column)
    out = []
    for value, error in zip(values.tolist(), deviations.tolist(), strict=True):
        if log and value <= 0:
            out.append(Cell(None, marks=mark + marks.no_log))
        elif log:
            shown, spread = float(np.log10(value)), rounding.log_error(value, error)
            last = rounding.places(shown, spread, digits) if spread else -digits
            out.append(Cell(shown, spread, last, mark))
        else:
            out.append(Cell(value, error, rounding.places(value, error, digits), mark))
    return out
