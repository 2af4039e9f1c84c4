"""A population in words: the notes under a table, and a paragraph for the text of a paper."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from typing import TYPE_CHECKING, Any

from steelyard.integrate import citations as cited
from steelyard.integrate.citations import Citation
from steelyard.integrate.imf import CallableIMF
from steelyard.integrate.laws import law_of
from steelyard.integrate.provenance import policies
from steelyard.integrate.results import Convention, PopulationYields
from steelyard.integrate.sources import DelayedSource, StellarSource

from . import digits as rounding

if TYPE_CHECKING:
    from steelyard.integrate.delays import Delay
    from steelyard.integrate.population import Population
    from steelyard.integrate.spread import YieldErrors

#: pieces of text, and papers cited between them
Text = tuple[str | Citation, ...]

#: sources as they stand over a column
HEADINGS = {
    "agb": "AGB",
    "core-collapse": "Core collapse",
    "thermonuclear": "Thermonuclear",
    "sum": "Sum",
}

#: sources in running text
NAMES = {
    "agb": "AGB stars",
    "core-collapse": "core-collapse supernovae",
    "thermonuclear": "thermonuclear supernovae",
}

#: what is done where no model stands
POLICIES = {
    "bridge": "a straight line between the models on either side",
    "reach-up": "the yields per unit initial mass of the model below",
    "reach-down": "the yields per unit initial mass of the model above",
    "return-only": "ejecta of the composition at birth",
    "swallow": "all mass stays in the remnant",
}


def notes(result: PopulationYields, errors: YieldErrors | None = None) -> Iterator[Text]:
    """Yield what a result rests on, a text each."""
    population = result.population
    yield ("Initial mass function: ", *_imf(population), "; yields are per Msun formed between these limits.")
    yield (*_lifetimes(population), ".")
    for source in population.sources:
        name = HEADINGS.get(source.kind, source.kind)
        if isinstance(source, DelayedSource):
            yield (f"{name}: ", *_sets(source, population), "; ", *_events(source), ".")
        else:
            yield (f"{name}: ", *_sets(source, population), ".")
    ranges = ", ".join(
        f"{one['from']:g}-{one['to']:g} Msun {one['served_by']} ({HEADINGS.get(one['source'])})"
        for one in result.ranges
    )
    yield (f"Initial masses: {ranges}.{_explained(result)}",)
    held = next(line for line in policies(result) if line.startswith("beyond the metallicities"))
    yield (f"Between models yields are {population.interpolation} in initial mass; {held}.",)
    yield ("Compositions at birth that a set does not give are scaled from ", *_mixtures(population), ".")
    if errors is not None:
        yield (" ".join(_stated(errors)),)
    for one in result.notes:
        yield (f"{one.rstrip('.')}.",)


def methods(result: PopulationYields, convention: Convention, errors: YieldErrors | None = None) -> Text:
    """Return a paragraph that says how yields were weighed."""
    from importlib.metadata import version

    population = result.population
    out: list[str | Citation] = [
        f"We weighted published {convention} yields of single stars by ",
        "the initial mass function of " if cited.of_imf(population) else "an initial mass function that is ",
        *_imf(population),
        f", for a population of metallicity Z = {population.metallicity:g}. ",
    ]
    stellar = [s for s in population.sources if isinstance(s, StellarSource)]
    for source in stellar:
        out += [f"{_stars(source)} eject the yields of ", *_sets(source, population, ids=False), ". "]
    for source in population.sources:
        if isinstance(source, DelayedSource):
            kind = (
                "Thermonuclear supernovae"
                if source.kind == "thermonuclear"
                else f"Events of kind {source.kind}"
            )
            out += [f"{kind} eject the yields of ", *_sets(source, population, ids=False), "; "]
            out += ["there are ", *_events(source), ". "]
    out += [*_lifetimes(population), ". "]
    out += ["Compositions at birth that a set does not give are scaled from ", *_mixtures(population), ". "]
    gaps = [one for one in result.ranges if one["served_by"].split(",")[0] in POLICIES]
    for policy in dict.fromkeys(one["served_by"].split(",")[0] for one in gaps):
        at = [f"{g['from']:g}-{g['to']:g} Msun" for g in gaps if g["served_by"].split(",")[0] == policy]
        out.append(f"For stars of {_listed(at)}, where no model stands, we took {_taken(policy)}. ")
    lost = [f"{g['from']:g}-{g['to']:g} Msun" for g in result.ranges if "imploding" in g["served_by"]]
    if lost:
        out.append(f"Stars of {_listed(lost)}, or part of them, implode and eject their winds only. ")
    if errors is not None:
        out.append(" ".join(_stated(errors)) + " ")
    out.append(f"Yields were integrated with steelyard {version('steelyard')}.")
    return tuple(out)


def _taken(policy: str) -> str:
    return "all mass to stay in the remnant" if policy == "swallow" else POLICIES[policy]


def _stars(source: StellarSource) -> str:
    return "Low- and intermediate-mass stars" if source.kind == "agb" else "Massive stars"


def _imf(population: Population) -> Text:
    form, (lo, hi) = population.imf, population.imf.limits
    told = form.to_dict()
    paper = cited.of_imf(population)
    law = law_of(form)
    limits = f" from {lo:g} to {hi:g} Msun"
    if paper:
        system = " for systems" if told["form"].endswith("-system") else ""
        return (*paper, f"{system}{limits}")
    if isinstance(form, CallableIMF):
        return (f"a function of our own, {told.get('function', '')}{limits}",)
    if told.get("form") == "lognormal":
        return (f"a lognormal around {told['centre']:g} Msun of width {told['sigma']:g} dex{limits}",)
    at = f" (at Z = {population.metallicity:g})" if law else ""
    slopes = [f"{s:.4g}" for s in told["slopes"]]
    breaks = [f"{m:g}" for m in told["breaks"]]
    broken = f" with {_plural('break', breaks)} at {_listed(breaks)} Msun" if breaks else ""
    return (f"a power law of {_plural('slope', slopes)} {_listed(slopes)}{at}{broken}{limits}",)


def _lifetimes(population: Population) -> Text:
    papers = cited.of_lifetimes(population)
    if population.lifetimes == "sets":
        return ("Stellar lifetimes are those of the yield sets, elsewhere those of ", *papers)
    if not papers:
        return ("Stellar lifetimes are a function of our own",)
    return ("Stellar lifetimes are those of ", *papers)


def _sets(source: Any, population: Population, ids: bool = True) -> Text:
    """The sets of a source with their papers; of sets by name alone only what has no paper."""
    out: list[str | Citation] = []
    loaded = [entry.load(population.solar) for entry in source.sets]
    if not ids and all(len(sets) == 1 and cited.of_set(sets[0]) for sets in loaded):
        return tuple(_joined(dict.fromkeys(p for (one,) in loaded for p in cited.of_set(one))))
    for i, entry in enumerate(source.sets):
        if i:
            out.append(", then ")
        papers = dict.fromkeys(p for one in loaded[i] for p in cited.of_set(one))
        out += [entry.name, " of " if papers else "", *_joined(papers)]
    return tuple(out)


def _joined(papers: Iterable[Citation]) -> Iterator[str | Citation]:
    known = list(papers)
    for i, one in enumerate(known):
        if i:
            yield " and " if one is known[-1] else ", "
        yield one


def _events(source: DelayedSource) -> Text:
    papers = cited.of_delay(source.delay)
    law = " at this metallicity" if law_of(source.number) or law_of(source.delay) else ""
    after = (" as of ", *papers) if papers else ()
    return (f"{source.number:.4g} events per Msun formed{law}, {_delay(source.delay)}", *after)


def _delay(given: Delay) -> str:
    told: Mapping[str, Any] = given.to_dict()
    limits = ""
    if told.get("limits"):
        limits = f" from {rounding.age(told['limits'][0])} to {rounding.age(told['limits'][1])}"
    if told["form"] == "power-law":
        return f"with delays distributed as time to the power {told['slope']:g}{limits}"
    if told["form"] == "exponential":
        return f"with delays distributed exponentially, timescale {rounding.age(told['timescale'])},{limits}"
    if told["form"] == "broken-power-law":
        slopes, breaks = [f"{s:g}" for s in told["slopes"]], [rounding.age(b) for b in told["breaks"]]
        at = f" with {_plural('break', breaks)} at {_listed(breaks)}" if breaks else ""
        return f"with delays distributed as time to the powers {_listed(slopes)}{at}{limits}"
    kind = "a table" if told["form"] == "tabulated" else "a function"
    return f"with delays distributed as {kind} of our own{limits}"


def _mixtures(population: Population) -> Text:
    out: list[str | Citation] = []
    for i, id in enumerate(cited.mixtures_used(population)):
        out.append(" and " if i else "")
        out += _joined(cited.of_mixture(id))
    return tuple(out)


def _explained(result: PopulationYields) -> str:
    used = dict.fromkeys(one["served_by"].split(",")[0] for one in result.ranges)
    known = [f"{one}: {POLICIES[one]}" for one in used if one in POLICIES]
    return f" Here {'; '.join(known)}." if known else ""


def _stated(errors: YieldErrors) -> Iterator[str]:
    from ..spread import assumed

    told = "assume" if errors.spread == assumed(errors.result.population) else "state"
    yield f"Errors are standard deviations, carried through from errors that we {told} on published yields:"
    parts = []
    for one in errors.spread.errors:
        covered = one.elements if isinstance(one.elements, str) else ", ".join(one.elements)
        parts.append(f"{one.sigma:g} dex on {covered} of {NAMES.get(one.source, one.set or one.source)}")
    yield f"{'; '.join(parts)}; what returns as it was at birth has none."


def _plural(word: str, parts: list[str]) -> str:
    return f"{word}s" if len(parts) > 1 else word


def _listed(parts: list[str]) -> str:
    return " and ".join([", ".join(parts[:-1]), parts[-1]] if len(parts) > 1 else parts)
