"""One error that a user states of what a set, or every set of a source, prints."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.nuclides import parse
from steelyard.yields.units import plain

from ..leverage.nodes import Model

Array = NDArray[np.float64]

#: stands for elements that an entry doesn't list
GROUPS = ("all", "metals")


@dataclass(frozen=True)
class StatedError:
    """An error on what a set, or every set of a source, prints.

    Attributes
    ----------
    sigma : float
        Standard deviation of log10 of the printed figure, dex.
    set, source : str
        One of them: id of a set, or kind of a source.
    elements : "all", "metals" or sequence of str
        "metals" is all but H and He. Nuclides of one element share its error.
    correlation_length : float
        In log10 of initial mass, dex; 0 leaves only the common mode and models of equal mass.
    common : float
        Fraction of the variance that is common to all models of a set.
    between : float, or matrix
        Correlation of any two elements, 0 to 1; or one matrix in the order of `elements`.

    Raises
    ------
    InputError
        Numbers out of range, or a matrix that isn't one of correlations.

    Examples
    --------
    >>> StatedError(0.15, set="kobayashi-2006", elements=["O", "Mg"], common=0.5).elements
    ('O', 'Mg')
    """

    sigma: Any
    set: str = ""
    source: str = ""
    elements: str | Sequence[str] = "all"
    correlation_length: Any = 0.1
    common: Any = 0.5
    between: Any = 0.0

    def __post_init__(self) -> None:
        put = object.__setattr__
        if bool(self.set) == bool(self.source):
            raise InputError("an error is of one set or of one source", mend='such as set = "kobayashi-2006"')
        if isinstance(self.elements, str):
            if self.elements not in GROUPS:
                raise InputError(
                    f"elements {self.elements!r} isn't a choice",
                    where=self.where,
                    mend='write "all", "metals", or a list such as ["O", "Mg"]',
                )
        else:
            put(self, "elements", _symbols(self.elements, self.where))
        for name, highest in (("sigma", 2.0), ("correlation_length", np.inf), ("common", 1.0)):
            value = plain(getattr(self, name), "", name, where=self.where)
            if np.ndim(value) or not 0 <= value <= highest:
                limits = "0 or more" if np.isinf(highest) else f"from 0 to {highest:g}"
                raise InputError(f"{name} is {value}, not {limits}", where=self.where)
            put(self, name, value)
        put(self, "between", self._between())

    @property
    def where(self) -> str:
        """What the error is of, for messages."""
        return f"spread of {self.set or self.source}"

    def _between(self) -> Any:
        value = plain(self.between, "", "between", where=self.where)
        if not np.ndim(value):
            if not 0 <= value <= 1:
                raise InputError(f"between is {value:g}, not from 0 to 1", where=self.where)
            return value
        count = 0 if isinstance(self.elements, str) else len(self.elements)
        if value.shape != (count, count):
            raise InputError(
                f"between has shape {value.shape}, but elements lists {count}",
                where=self.where,
                mend="give a row and a column for each element listed",
            )
        ordered = np.allclose(value, value.T, atol=1e-12) and np.allclose(np.diag(value), 1.0, atol=1e-12)
        if not ordered or np.linalg.eigvalsh(value).min() < -1e-10:
            raise InputError(
                "between isn't a correlation matrix",
                where=self.where,
                mend="make it symmetric, with 1 on its diagonal and no negative eigenvalue",
            )
        return tuple(tuple(row) for row in value.tolist())

    def covers(self, symbol: str) -> bool:
        """Return whether an element has this error."""
        if self.elements == "metals":
            return symbol not in ("H", "He")
        return self.elements == "all" or symbol in self.elements

    def element_correlation(self, symbols: Sequence[str]) -> Array:
        """Return rho for elements that the error covers, shape (n, n)."""
        same = np.equal.outer(np.array(symbols), np.array(symbols))
        if isinstance(self.between, float):
            return np.where(same, 1.0, self.between)
        at = [list(self.elements).index(s) for s in symbols]
        return np.where(same, 1.0, np.array(self.between)[np.ix_(at, at)])

    def model_correlation(self, models: Sequence[Model]) -> Array:
        """Return the correlation of the models of a set, shape (k, k)."""
        x = np.log10([m.mass or 1.0 for m in models])
        apart = abs(x[:, None] - x[None, :])
        if self.correlation_length:
            near = np.exp(-apart / self.correlation_length)
        else:
            near = (apart == 0).astype(float)
        return self.common + (1 - self.common) * near

    def to_dict(self) -> dict[str, Any]:
        """Return the error as a ``[[spread]]`` table."""
        out: dict[str, Any] = {"set": self.set} if self.set else {"source": self.source}
        between = self.between if isinstance(self.between, float) else [list(row) for row in self.between]
        return out | {
            "elements": self.elements if isinstance(self.elements, str) else list(self.elements),
            "sigma": self.sigma,
            "correlation_length": self.correlation_length,
            "common": self.common,
            "between": between,
        }


def _symbols(names: Any, where: str) -> tuple[str, ...]:
    out = []
    for text in names:
        one = parse(text)
        if not one.is_element:
            raise InputError(
                f"{one.name} is a nuclide",
                where=where,
                mend=f"state an error of {one.symbol}; its nuclides share it",
            )
        out.append(one.symbol)
    if not out or len(set(out)) < len(out):
        raise InputError(
            "elements must be listed, each once", where=where, mend='such as ["O", "Mg"], or "all"'
        )
    return tuple(out)
