"""What was read of a paper's tables: figures as printed beside figures in Msun, ready for the grid."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..build import Printed, build
from ..grid import YieldSet
from ..readers import figure

#: tables of a reading, in the order in which they are written
TABLES = ("models", "net", "total", "initial")

#: columns that hold words
WORDS = ("variant",)


@dataclass(frozen=True, eq=False)
class Table:
    """Figures with the text they were printed as.

    Attributes
    ----------
    columns : tuple of str
    text : tuple of tuple of str
        As printed, a row a model (in ``initial``, a metallicity).
    figures : ndarray, shape (rows, columns)
        In Msun, yr and mass fractions; NaN in columns of words.
    converted : frozenset of str
        Columns whose figure isn't the printed number: logarithms, fractions, other units.
    """

    columns: tuple[str, ...]
    text: tuple[tuple[str, ...], ...]
    figures: NDArray[np.float64]
    converted: frozenset[str] = frozenset()

    def cells(self) -> list[list[str]]:
        """Return each figure as text that `float` takes: the printed digits wherever they still hold."""
        other = [c in self.converted for c in self.columns]
        words = [c in WORDS for c in self.columns]
        out = []
        for row, numbers in zip(self.text, self.figures.tolist(), strict=True):
            out.append(
                [
                    repr(number) if conv else text if word else (figure(text) or "0")
                    for text, number, conv, word in zip(row, numbers, other, words, strict=True)
                ]
            )
        return out


@dataclass(frozen=True, eq=False)
class Reading:
    """One yield set as read, before it is laid on the grid.

    Attributes
    ----------
    id : str
    info : mapping
        As in a set.toml: kind, convention, how the ejected mass is known, paper, what goes to rest.
    tables : mapping
        ``models``, then ``net``, ``total``, ``initial`` as far as they are printed.
    sources : tuple of (str, str)
        Name and SHA-256 of each file.
    layout : str
        Text of the layout.
    warnings : tuple of str
    """

    id: str
    info: Mapping[str, Any]
    tables: Mapping[str, Table]
    sources: tuple[tuple[str, str], ...] = ()
    layout: str = ""
    warnings: tuple[str, ...] = field(default=())

    def rows(self, name: str) -> list[dict[str, str]]:
        """Return a table as rows, the yields with the columns that name their model."""
        table = self.tables[name]
        rows = [dict(zip(table.columns, cells, strict=True)) for cells in table.cells()]
        if name in ("models", "initial"):
            return rows
        keys = [c for c in ("metallicity", "mass", "variant") if c in self.tables["models"].columns]
        models = self.rows("models")
        return [{k: m[k] for k in keys} | row for m, row in zip(models, rows, strict=True)]

    def renamed(self, id: str) -> Reading:
        """Return the same reading under another id."""
        return replace(self, id=id, info={**self.info, "id": id})

    def printed(self) -> Printed:
        """Return the figures in the form that is laid on the grid."""
        yields = {c: self.rows(c) for c in ("total", "net") if c in self.tables}
        initial = self.rows("initial") if "initial" in self.tables else None
        return Printed(self.rows("models"), yields, initial)

    @cached_property
    def checksum(self) -> str:
        """SHA-256 over id, what is said of the set, and every figure."""
        digest = hashlib.sha256()
        digest.update(json.dumps([self.id, self.info, self.layout], sort_keys=True).encode())
        for name in TABLES:
            if name in self.tables:
                table = self.tables[name]
                digest.update(json.dumps([name, table.columns, sorted(table.converted)]).encode())
                digest.update("\n".join("\t".join(row) for row in table.text).encode())
                digest.update(np.ascontiguousarray(table.figures, dtype="<f8").tobytes())
        return digest.hexdigest()

    def grid(self, solar: str) -> YieldSet:
        """Lay the figures on the grid.

        Parameters
        ----------
        solar : str
            Mixture for birth compositions that the set doesn't give.

        Returns
        -------
        YieldSet
        """
        grid = build(self.id, self.info, self.printed(), solar, self.checksum)
        return replace(grid, notes=(*grid.notes, *(f"{self.id}: {w}" for w in self.warnings)))


def table_of(columns: Sequence[str], text: Sequence[Sequence[str]], **more: Any) -> Table:
    """Make a table whose figures are the printed ones."""
    figures = [
        [np.nan if c in WORDS else float(figure(t) or 0.0) for c, t in zip(columns, row, strict=True)]
        for row in text
    ]
    array = np.array(figures, dtype=float).reshape(len(text), len(columns))
    return Table(tuple(columns), tuple(tuple(row) for row in text), array, **more)
