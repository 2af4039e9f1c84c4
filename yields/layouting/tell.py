"""What a column of yields is, told from its signs and sums."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Column:
    """The figures of one model in one column, one a species."""

    name: str
    values: NDArray[np.float64]


def tell(name: str, models: Sequence[Column], masses: Sequence[float]) -> tuple[str, str]:
    """Tell the convention of a column.

    Parameters
    ----------
    name : str
        Its name, which decides where sums leave a doubt.
    models : sequence of Column
        Its figures, model by model.
    masses : sequence of float
        Initial masses, Msun, in the same order; may be empty.

    Returns
    -------
    convention : str
        ``net``, ``total``, ``mass_fraction``, ``initial``; empty where it is none of them.
    why : str
        In words.

    Examples
    --------
    >>> tell("y", [Column("y", np.array([-0.5, 0.4, 0.1]))], [3.0])
    ('net', 'there are negative figures, and they sum to zero')
    """
    sums = np.array([m.values.sum() for m in models])
    sizes = np.array([np.abs(m.values).sum() for m in models])
    if not sizes.all():
        return "", ""
    negative = min(float(m.values.min()) for m in models)
    balanced = bool(np.all(np.abs(sums) < 0.02 * sizes))
    if balanced and negative < 0:
        return "net", "there are negative figures, and they sum to zero"
    if re.search(r"log|fac|ratio|^a$", name, re.IGNORECASE):
        return "", ""
    if negative < -1e-3 * float(sizes.max()):
        # a logarithm is mostly negative, and beyond what any star could lose
        largest = max(float(np.abs(m.values).max()) for m in models)
        if largest > (max(masses) if len(masses) else 100.0) or np.all(sums < -0.5 * sizes):
            return "", ""
        return "net", "there are negative figures"
    if np.all(np.abs(sums - 1.0) < 0.02):
        same = len(models) > 1 and all(
            m.values.shape == models[0].values.shape
            and np.allclose(m.values, models[0].values, rtol=1e-6, atol=1e-14)
            for m in models[1:3]
        )
        told = bool(re.search(r"x_?0|init|birth", name, re.IGNORECASE))
        if told or same:
            return "initial", "sums to 1 and is the same in several models"
        return "mass_fraction", "sums to 1"
    if len(masses) == len(sums) and np.any(sums > 1.001 * np.asarray(masses)):
        return "", ""
    return "total", "no negative figures"
