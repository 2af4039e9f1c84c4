"""What a report tells of a population, worked out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from steelyard.yields.audit import Finding
from steelyard.yields.errors import InputError
from steelyard.yields.grid import YieldSet
from steelyard.yields.nuclides import parse

from ..contrasting import Contrast, contrast
from ..leverage import Leverage, leverage
from ..population import Population
from ..results import PopulationYields
from ..spread import Spread, YieldErrors, assumed
from .choices import usual_swaps

#: elements where neither the caller nor the population names any: every nucleosynthetic family
CHOICE = ("C", "N", "O", "Mg", "Si", "Ca", "Mn", "Fe", "Ni")


@dataclass(frozen=True, eq=False)
class Report:
    """What a report tells.

    Attributes
    ----------
    result : PopulationYields
        All species at all ages of the population.
    species : tuple of str
        Those that are told of.
    errors : YieldErrors
        Of the yields of `species` (and of Fe, for [X/Fe]) at the oldest age.
    assumed : bool
        Whether nobody has stated the errors.
    findings : tuple of (YieldSet, tuple of Finding)
        Of the audit of every set.
    leverage : Leverage
        Of `species` at the oldest age.
    contrast : Contrast or None
        One swap at a time; None where nothing can be swapped.
    refused : tuple of str
        Why usual swaps aren't made.
    """

    result: PopulationYields
    species: tuple[str, ...]
    errors: YieldErrors
    assumed: bool
    findings: tuple[tuple[YieldSet, tuple[Finding, ...]], ...]
    leverage: Leverage
    contrast: Contrast | None
    refused: tuple[str, ...]

    @property
    def population(self) -> Population:
        """What was weighed."""
        return self.result.population

    @property
    def oldest(self) -> float:
        """The age that is told of, yr."""
        return float(np.max(self.result.ages))

    def ratio(self, species: str) -> tuple[float, float] | None:
        """Return [X/Fe] of the ejecta and its standard deviation, dex; None where there is none."""
        found = self.errors.result
        # some nuclides of iron are not iron
        if "Fe" not in found.species or species == "Fe":
            return None
        try:
            value = float(found.ratio(species, "Fe")[0])
        except InputError:  # the Sun has no such species
            return None
        return (value, float(self.errors.ratio(species, "Fe")[0])) if np.isfinite(value) else None

    def weighs_in(self, finding: Finding) -> bool:
        """Return whether any of the models that a finding is of makes a part of the yields told of."""
        parts = np.abs(self.leverage.parts.contribution).sum(axis=(0, 1, 3))
        return any(
            part > 0
            and model.set == finding.set
            and (finding.metallicity is None or model.metallicity in (None, finding.metallicity))
            and (finding.mass is None or model.mass in (None, finding.mass))
            for model, part in zip(self.leverage.models, parts, strict=True)
        )


def report(
    population: Population,
    species: Sequence[str] = (),
    spread: Spread | None = None,
    swaps: Mapping[str, Any] | None = None,
) -> Report:
    """Work out what a report tells of a population.

    Parameters
    ----------
    population : Population
    species : sequence of str, optional
        Elements or nuclides to tell of; default: the population's own list, or an element or two of
        every nucleosynthetic family.
    spread : Spread, optional
        Errors of the published figures; default: `assumed`.
    swaps : mapping, optional
        As `contrast` takes them; default: other published choices for each ingredient.

    Returns
    -------
    Report

    Raises
    ------
    InputError
        A species, an error or a swap that isn't of the population, or nothing is ejected.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])])
    >>> found = report(stars, ["O"])
    >>> found.species, [len(findings) for _, findings in found.findings]
    (('O',), [13])
    """
    result = population.weigh()
    oldest = float(np.max(result.ages))
    if oldest <= 0:
        raise InputError("nothing is ejected at age 0, so there is nothing to report", mend="add an age")
    chosen = _species(population, species)
    followed = {parse(one).symbol for one in population.prepared.columns.species}
    names = list(dict.fromkeys([*chosen, *(["Fe"] if "Fe" in followed else [])]))
    narrowed = replace(population, species=names, ages=(oldest,))
    errors = (spread or assumed(population)).propagate(narrowed.weigh())
    refused: tuple[str, ...] = ()
    if swaps is None:
        swaps, refused = usual_swaps(population)
    return Report(
        result,
        chosen,
        errors,
        spread is None,
        tuple((one, one.audit()) for one in population.prepared.sets),
        leverage(replace(narrowed, species=list(chosen))),
        contrast(population, swaps, ages=[oldest], species=chosen) if swaps else None,
        refused,
    )


def _species(population: Population, asked: Sequence[str]) -> tuple[str, ...]:
    if not asked and isinstance(population.species, str):
        symbols = {parse(one).symbol for one in population.prepared.columns.species}
        return tuple(one for one in CHOICE if one in symbols) or tuple(sorted(symbols - {""})[: len(CHOICE)])
    return tuple(dict.fromkeys(parse(one).name for one in asked or population.species))
