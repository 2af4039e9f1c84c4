"""What a report swaps where its reader names nothing: one published choice against another."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from steelyard.yields.errors import InputError

from ..contrasting.ingredients import ingredients
from ..population import Population

#: published choices of what populations mostly differ in
USUAL: Mapping[str, tuple[str, ...]] = {
    "imf": ("salpeter-1955", "kroupa-1993", "kroupa-2001", "chabrier-2003"),
    "agb": ("karakas-2010+doherty-2014", "marigo-2001+doherty-2014"),
    "core-collapse": ("kobayashi-2006", "limongi-chieffi-2018-R-v000"),
    "thermonuclear": ("nomoto-1997-w7", "iwamoto-1999-WDD2"),
    "lifetimes": ("portinari-1998", "raiteri-1996"),
    "join": ("bridge", "swallow"),
}


def usual_swaps(population: Population) -> tuple[dict[str, list[Any]], tuple[str, ...]]:
    """Return the usual swaps that a population can take, and why it can't take others.

    Parameters
    ----------
    population : Population

    Returns
    -------
    swaps : dict
        As `steelyard.integrate.contrasting.contrast` takes them; the population's own choices are
        left out.
    refused : tuple of str
        A line for each swap that can't be made.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])])
    >>> usual_swaps(stars)[0]["core-collapse"]
    ['limongi-chieffi-2018-R-v000']
    """
    known = ingredients(population)
    swaps: dict[str, list[Any]] = {}
    refused = []
    for name in filter(known.__contains__, USUAL):
        one = known[name]
        for choice in USUAL[name]:
            try:
                swapped = one.swap(population, choice)
                if one.tell(swapped) == one.tell(population):
                    continue
                # the sets may leave a gap that nothing joins
                swapped.weigh([max(population.ages)])
            except InputError as error:
                refused.append(f"{name} isn't swapped for {choice}: {error}")
            else:
                swaps.setdefault(name, []).append(choice)
    return swaps, tuple(refused)
