"""The figures of a paper with the precision to which it prints them."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..build import MODEL_COLUMNS, Printed, column, number, table

Array = NDArray[np.float64]

_FIGURE = re.compile(r"\s*[-+]?(\d*)\.?(\d*)(?:[eEdD]([-+]?\d+))?\s*")


def half_unit(text: str) -> float:
    """Return half a unit of the last digit of a printed number: the most by which rounding moved it.

    Examples
    --------
    >>> half_unit("1.57E+00"), half_unit("13"), half_unit("0.0069")
    (0.005, 0.5, 5e-05)
    """
    match = _FIGURE.fullmatch(text)
    if match is None:
        return 0.0
    return 0.5 * 10.0 ** (int(match[3] or 0) - len(match[2]))


@dataclass(frozen=True)
class Sheet:
    """One set's printed figures as arrays, a row a model, in the order of print.

    Attributes
    ----------
    id : str
    info : mapping
    printed : Printed
    metallicity, mass : ndarray, shape (n,)
        Zeros for an event, which has neither.
    lumps : tuple of str
        Columns that are mass but no species.
    event : bool
    """

    id: str
    info: Mapping[str, Any]
    printed: Printed
    metallicity: Array
    mass: Array
    lumps: tuple[str, ...]
    event: bool
    _cache: dict[str, Any] = field(default_factory=dict, repr=False)

    @classmethod
    def of(cls, id: str, info: Mapping[str, Any], printed: Printed) -> Sheet:
        """Read the axes; everything else is read when a check asks for it."""
        models = printed.models
        event = "mass" not in models[0]
        where = f"{id} models.csv"
        zeros = np.zeros(len(models))
        lumps = tuple(info.get("ignore", {}).get("columns", ()))
        return cls(
            id,
            info,
            printed,
            zeros if event else column(models, "metallicity", where),
            zeros if event else column(models, "mass", where),
            lumps,
            event,
        )

    def has(self, name: str) -> bool:
        """Whether the models have a printed column."""
        return name in self.printed.models[0]

    def account(self, name: str) -> Array:
        """A printed column of the models, shape (n,)."""
        return column(self.printed.models, name, f"{self.id} models.csv")

    def account_rounding(self, name: str) -> Array:
        """Half a unit of the last digit of each figure of a column of the models."""
        return np.array([half_unit(row[name]) for row in self.printed.models])

    def columns(self, convention: str) -> list[str]:
        """Columns of a yield table, lumps included."""
        return [c for c in self.printed.yields[convention][0] if c not in MODEL_COLUMNS]

    def yields(self, convention: str) -> Array:
        """A yield table, shape (n, columns)."""
        if convention not in self._cache:
            rows = self.printed.yields[convention]
            self._cache[convention] = table(rows, self.columns(convention), f"{self.id} {convention}.csv")
        return self._cache[convention]

    def rounding(self, convention: str) -> Array:
        """Half a unit of the last digit of each yield, shape (n, columns).

        From the digits that the paper is known to print, where a copy dropped their zeros.
        """
        key = f"{convention} rounding"
        if key not in self._cache:
            names = self.columns(convention)
            rows = self.printed.yields[convention]
            halves = np.array([[half_unit(row[c]) for c in names] for row in rows])
            digits = self.info.get("rounding", {}).get("digits")
            if digits:
                size = np.abs(self.yields(convention))
                power = np.floor(np.log10(size, out=np.zeros_like(size), where=size > 0))
                halves = np.minimum(halves, 0.5 * 10.0 ** (power - digits + 1))
            self._cache[key] = halves
        return self._cache[key]

    def initial(self) -> tuple[list[str], list[dict[str, float]]]:
        """Columns and rows of the printed compositions at birth; none where there are none."""
        rows: Sequence[Mapping[str, str]] = self.printed.initial or ()
        if not rows:
            return [], []
        names = [c for c in rows[0] if c not in MODEL_COLUMNS]
        where = f"{self.id} initial.csv"
        return names, [
            {c: number(text, f"{where} row {i + 2} column {c}") for c, text in row.items() if c != "variant"}
            for i, row in enumerate(rows)
        ]

    def model(self, row: int) -> dict[str, float]:
        """Axes of a model, as a finding wants them."""
        if self.event:
            return {}
        return {"metallicity": float(self.metallicity[row]), "mass": float(self.mass[row])}
