"""Yield sets made of other yield sets: elements of nuclides, another solar mixture; overabundances.

Every function on a `YieldSet` returns a new one: its id carries what was done after a ``+``, its notes
say it in a sentence, and its checksum is that of the parent's checksum and the operation, so that the
same step on the same figures always has the same checksum.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .composition import Mixture, birth_composition, mixture, mixtures
from .conventions import factor_from_total
from .errors import InputError
from .grid import Slice, YieldSet
from .nuclides import isotopes

Array = NDArray[np.float64]

#: a total may come out negative by this share of what was there at birth before a mixture is refused
_SLACK = 0.02


def overabundance(grid: YieldSet, relative_to: str = "birth") -> tuple[Array, ...]:
    """Return the production factors of every model of a set.

    Parameters
    ----------
    grid : YieldSet
    relative_to : str
        ``"birth"``: the composition each slice was born with; or the id of a solar mixture.

    Returns
    -------
    tuple of ndarray
        One a slice, shape (n, s): (total / ejected) / reference; NaN where there is no reference.

    Raises
    ------
    InputError
        The mixture isn't known, or the set is an event, which has no birth composition.

    Examples
    --------
    >>> from steelyard.yields import load
    >>> agb = load("karakas-2010")
    >>> round(float(overabundance(agb)[3][8, agb.species.index("C12")]), 2)
    2.95
    """
    if relative_to == "birth":
        if grid.event:
            raise InputError(
                "an event has no composition at birth", where=grid.id, mend="name a solar mixture instead"
            )
        return tuple(factor_from_total(one.total, one.initial, one.ejected) for one in grid.slices)
    sun = mixture(relative_to)
    reference = birth_composition(grid.species, _metals(sun), sun)
    return tuple(factor_from_total(one.total, reference, one.ejected) for one in grid.slices)


def to_elements(grid: YieldSet) -> YieldSet:
    """Sum the nuclides of a set into elements.

    Parameters
    ----------
    grid : YieldSet

    Returns
    -------
    YieldSet
        Every element of which the set follows a nuclide; a free neutron stays as it is. Its notes name the
        elements of which stable nuclides are missing.

    Raises
    ------
    InputError
        The set holds elements already.

    Examples
    --------
    >>> from steelyard.yields import load
    >>> agb = to_elements(load("karakas-2010"))
    >>> agb.id, agb.species[:4]
    ('karakas-2010+elements', ('H', 'He', 'Li', 'Be'))
    """
    if grid.follows_elements:
        raise InputError("the set holds elements already", where=grid.id, mend="use it as it stands")
    elements = sorted({one.element for one in grid.parsed})
    names = tuple(one.name for one in elements)
    matrix = np.array([[float(one.element == e) for e in elements] for one in grid.parsed])
    partial = [
        f"{e.name} without {', '.join(i.name for i in lacking)}"
        for e in elements
        if e.Z and (lacking := [i for i in isotopes(e.symbol) if i not in grid.parsed])
    ]
    note = f"{grid.id}: nuclides summed into elements"
    if partial:
        note += f"; {', '.join(partial)}"
    return derive(grid, "elements", note, {"species": "elements"}, names, lambda one: mapped(one, matrix))


def birth_mixture(grid: YieldSet) -> str | None:
    """Return the solar mixture that a set's compositions at birth are scaled from.

    Parameters
    ----------
    grid : YieldSet

    Returns
    -------
    str or None
        Id of a shipped mixture that, scaled with the set's declared enhancement, gives the set's X0 in
        every slice; None where none does: then X0 is the set's own.

    Examples
    --------
    >>> from steelyard.yields import load
    >>> birth_mixture(load("marigo-2001")), birth_mixture(load("karakas-2010"))
    ('asplund-2009', None)
    """
    if grid.event:
        return None
    for name in mixtures():
        try:
            scaled = _scaled(grid, name)
        except InputError:
            continue
        pairs = zip(grid.slices, scaled, strict=True)
        if all(np.allclose(x, one.initial, rtol=1e-9, atol=0) for one, x in pairs):
            return name
    return None


def rescaled(grid: YieldSet, solar: str) -> YieldSet:
    """Take a set to another solar mixture, where that means something.

    What the paper printed never changes. Where it gave no composition at birth, the mixture that stands in
    for it enters only the quantity that was derived: the total where net yields are printed, the net
    yield and the unlisted wind where totals are. Those are made anew.

    Parameters
    ----------
    grid : YieldSet
    solar : str
        Id of a solar mixture.

    Returns
    -------
    YieldSet
        The set itself where it is scaled from that mixture already.

    Raises
    ------
    InputError
        The set is an event and has no birth; it gives its own composition at birth, with which its models
        were computed; or with the new mixture it would eject less than nothing of a species, so that its
        own figures rule the mixture out.

    Examples
    --------
    >>> from steelyard.yields import load
    >>> old = load("marigo-2001")
    >>> new = rescaled(old, "anders-grevesse-1989")
    >>> a, b = old.slices[0], new.slices[0]
    >>> bool((a.net == b.net).all()), bool((a.total == b.total).all())
    (True, False)
    """
    mixture(solar)
    if grid.event:
        raise InputError(
            "an event isn't born from gas, so no solar mixture enters its yields",
            where=grid.id,
            mend="use it as it stands",
        )
    known = birth_mixture(grid)
    if known is None:
        raise InputError(
            "the set gives its own composition at birth and its models were computed with it",
            where=grid.id,
            mend="use it as it stands: other seeds would make other stars",
        )
    if known == solar:
        return grid
    slices = []
    for one, birth in zip(grid.slices, _scaled(grid, solar), strict=True):
        at_birth = one.ejected[:, None] * birth
        if "net" in grid.derived:
            total = one.listed + one.wind[:, None] * birth
            slices.append(replace(one, total=total, net=total - at_birth, initial=birth))
        else:
            slices.append(replace(one, total=one.net + at_birth, initial=birth))
            _check_not_negative(grid, slices[-1], one, solar)
    note = (
        f"{grid.id}: composition at birth scaled from {solar} instead of {known}; published figures unchanged"
    )
    birth_info = {**grid.info.get("birth", {}), "mixture": solar}
    made = derive(grid, solar, note, {"birth": birth_info}, grid.species, lambda one: one)
    return replace(made, slices=tuple(slices))


def _check_not_negative(grid: YieldSet, one: Slice, before: Slice, solar: str) -> None:
    """Refuse a mixture of which a model would eject less than nothing, where the old one fitted."""
    floor = -_SLACK * one.ejected[:, None] * one.initial
    worse = (one.total < floor) & (one.total < before.total)
    if worse.any():
        row, col = np.argwhere(worse)[0]
        raise InputError(
            f"with {solar} the {one.mass[row]:g} Msun model at Z = {one.metallicity:g} would eject"
            f" {one.total[row, col]:.3g} Msun of {grid.species[col]}: the set's net yields rule it out",
            where=grid.id,
            mend="keep the mixture that the set's models were computed with",
        )


def _metals(sun: Mixture) -> float:
    """Metals of a mixture by its own sum: the metallicity at which birth compositions are the mixture."""
    fractions = sun.mass_fractions()
    return float(sum(x for element, x in fractions.items() if element not in ("H", "He", "Li")))


def _scaled(grid: YieldSet, solar: str) -> list[Array]:
    declared = grid.info.get("birth", {})
    below = declared.get("below", np.inf)
    return [
        birth_composition(
            grid.species,
            one.metallicity,
            solar,
            declared.get("enhancement") if one.metallicity < below else None,
        )
        for one in grid.slices
    ]


def mapped(one: Slice, matrix: Array) -> Slice:
    """Apply a linear map of species to everything a slice says of them, so that its budget still closes."""
    return replace(one, total=one.total @ matrix, net=one.net @ matrix, initial=one.initial @ matrix)


def derive(
    grid: YieldSet,
    what: str,
    note: str,
    info: Mapping[str, Any],
    species: Sequence[str],
    change: Callable[[Slice], Slice],
    operation: str = "",
) -> YieldSet:
    """Make the new set of a conversion: slices changed one by one, id, note and checksum as said above."""
    text = f"{grid.checksum}\n{operation or what}"
    return replace(
        grid,
        id=f"{grid.id}+{what}",
        species=tuple(species),
        slices=tuple(change(one) for one in grid.slices),
        notes=(*grid.notes, note),
        info={**grid.info, **info},
        checksum=hashlib.sha256(text.encode()).hexdigest(),
    )
