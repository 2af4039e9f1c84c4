"""The sections of a report, each from what was worked out to HTML."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING
from urllib.parse import quote

import numpy as np

from steelyard.yields.errors import InputError

from ..citations import Citation, citations
from ..contrasting.telling import rows, sentences, signed
from ..popfile import population_to_toml
from ..provenance import attributes, command
from ..typesetting import bibtex, paper_table
from ..typesetting import digits as rounding
from ..typesetting.machine import prose
from ..typesetting.table import Cell
from .drawing import drawing
from .gathering import Report
from .markup import Markup, bullets, code, element, join, table

if TYPE_CHECKING:
    from matplotlib.figure import Figure

#: findings listed of a set, the heaviest first
MOST_FINDINGS = 30

#: models listed of each species
MODELS = 3

#: a list of numbers, each on a line of its own
_NUMBERS = re.compile(r"= \[\n((?:    [-+.0-9e]+,\n)+)\]")

_NUCLIDE = re.compile(r"([A-Z][a-z]?)([0-9]+)(m?)")


def weighed(found: Report) -> Markup:
    """What was weighed, in words."""
    made = paper_table(found.errors.result, found.species, errors=found.errors)
    return join(
        [
            element("p", prose(made.methods)),
            element("h3", "Choices"),
            bullets(prose(text) for text in made.notes),
            element("p", "The ", element("a", "population file", href="#file"), " stands whole below."),
        ],
        "\n",
    )


def ranges(found: Report) -> Markup:
    """Which initial masses are served by what, and the mass budget."""
    result = found.result
    served = table(
        "Initial masses of stars, what serves them, and the source that their ejecta count for",
        ("Initial mass (Msun)", "Source", "Served by"),
        ((f"{one['from']:g} to {one['to']:g}", one["source"], one["served_by"]) for one in result.ranges),
        left=3,
    )
    i = int(np.argmax(result.ages))
    budget = [
        ("returned", result.returned[i]),
        ("in living stars", result.living[i]),
        *((f"in {kind}s", mass[i]) for kind, mass in result.remnants_by_kind.items()),
    ]
    at = rounding.age(found.oldest)
    masses = table(
        f"Where 1 Msun formed is after {at}",
        ("", "Msun"),
        ((name, f"{mass:.4f}") for name, mass in budget),
    )
    events = table(
        f"Events up to {at}",
        ("", "Number per Msun formed"),
        ((kind, f"{number[i]:.4g}") for kind, number in result.events.items()),
    )
    return join([served, masses, events if result.events else ""], "\n")


def audited(found: Report) -> Markup:
    """What the audit finds in the sets."""
    out: list[str] = [
        element(
            "p",
            "Every set is audited for figures that contradict themselves, each other or their units. A"
            " warning is to be looked at before use. The last column says whether any model concerned has"
            " a part in the yields of this report.",
        )
    ]
    for grid, findings in found.findings:
        out.append(element("h3", grid.id))
        if not findings:
            out.append(element("p", "Nothing was found."))
            continue
        heads = ("Severity", "Models", "Check", "What was found", "What to do", "Has a part")
        shown = findings[:MOST_FINDINGS]
        out.append(
            table(
                f"Findings in {grid.id}",
                heads,
                (
                    (f.severity, f.model, f.check, f.explanation, f.advice, _yes(found.weighs_in(f)))
                    for f in shown
                ),
                left=len(heads),
            )
        )
        if len(findings) > len(shown):
            rest = len(findings) - len(shown)
            out.append(element("p", f"{rest} more: ", element("code", f"steelyard audit {grid.id}"), "."))
    return join(out, "\n")


def yields(found: Report) -> Markup:
    """The yields with their errors, and the two figures."""
    from ..figures.over_time import yields_over_time
    from ..figures.pattern import production_pattern

    made = paper_table(found.errors.result, found.species, errors=found.errors)
    cells = []
    for row in made.rows:
        ratio = found.ratio(row.species)
        told: list[str] = [_minus(f"{signed(ratio[0])} ± {ratio[1]:.2f}") if ratio else "–"]
        # a sum without a source, over iron of all of them, tells less than it seems to
        told += [_mark(row.cells[-1].marks)] if ratio else []
        cells.append((_species(row.species), *(_figure(cell) for cell in row.cells), join(told)))
    at = rounding.age(found.oldest)
    stated = (
        "Nobody has stated errors for this population. Those below follow from an assumption, published by"
        " no one: 0.15 dex on every metal of every set, half of the variance common to all models of a set."
        if found.assumed
        else "The errors below follow from those stated for the published figures."
    )
    marks = bullets(f"{letter}: {text}" for letter, text in made.marks)
    species = ", ".join(found.species)
    return join(
        [
            element("p", f"{stated} Beside each yield stands its standard deviation."),
            table(
                f"Total yields up to {at}, Msun per Msun formed, and [X/Fe] of all ejecta, dex",
                ("Species", *made.headings, "[X/Fe]"),
                cells,
            ),
            marks,
            _drawn(
                lambda: yields_over_time(found.result, _shown(found)),
                "over-time",
                f"Curves of the total yields of {species} by source and in sum, rising with age up to {at}.",
                "Total yields up to each age, by source and in sum.",
            ),
            _drawn(
                lambda: production_pattern(found.result, f"{found.oldest!r} yr"),
                "pattern",
                f"Overabundance of each element in all that is ejected up to {at}, and the share of each"
                " source in it.",
                f"Elements in the ejecta against the Sun, and who makes them, up to {at}.",
            ),
        ],
        "\n",
    )


def contrasted(found: Report) -> Markup:
    """What other published choices would do."""
    from ..figures.contrast import strip_chart

    refused = bullets(found.refused)
    if found.contrast is None:
        return join([element("p", "Nothing could be swapped in this population."), refused], "\n")
    contrast = found.contrast
    at = rounding.age(float(contrast.ages[-1]))
    cells = [
        (row.label if row.factor == "all" else f"{row.factor}: {row.label}", *map(_minus, row.cells))
        for row in rows(contrast)
    ]
    over: dict[tuple[str, ...], list[str]] = {}
    for name, sources in contrast.ratio_sources.items():
        if sources and sources != tuple(contrast.base.sources) and name != "Fe":
            over.setdefault(sources, []).append(f"[{name}/Fe]")
    partial = [
        f"{', '.join(names)}: over {' and '.join(sources)}, which follow both elements"
        for sources, names in over.items()
    ]
    return join(
        [
            element("p", "One choice is swapped at a time, and everything else is kept."),
            table(
                f"Total yields up to {at} with another choice, dex against this population",
                ("Choice", *(_species(name) for name in contrast.species)),
                cells,
            ),
            bullets(sentences(contrast)),
            _drawn(
                lambda: strip_chart(contrast),
                "contrast",
                "Marks for every choice, showing how far it moves the yield of each element, in dex; the"
                " table above holds the figures.",
                "How far each choice moves each yield.",
            ),
            element("h3", "Notes on the choices"),
            bullets([*partial, *contrast.notes, *found.refused]),
        ],
        "\n",
    )


def leaned_on(found: Report) -> Markup:
    """Which models the yields rest on."""
    from ..figures.leverage import contribution_by_mass
    from ..figures.mass_function import mass_function_and_weights

    of = found.leverage
    cells = []
    for name in found.species:
        for one in of.ranked(name, 0, "total", MODELS):
            if one.model is not None or one.amount:
                moves = [_minus(f"{m:+.3f}") if np.isfinite(m) else "–" for m in (one.doubled, one.halved)]
                moves = moves if one.model else ["", ""]
                cells.append((_species(name), one.name, f"{100 * one.share:.1f}", *moves))
    at = rounding.age(found.oldest)
    return join(
        [
            table(
                f"The {MODELS} models that make most of each total yield up to {at}, and how far it moves, in"
                " dex, where a model's figure is wrong by a factor of 2",
                ("Species", "Model", "Share (%)", "Twice as much", "Half as much"),
                cells,
                left=2,
            ),
            _drawn(
                lambda: contribution_by_mass(of, _shown(found), 0),
                "leverage",
                "Share of each yield made per dex of initial mass, with the published models marked.",
                "Which initial masses make each yield.",
            ),
            _drawn(
                lambda: mass_function_and_weights(of, 0),
                "weights",
                "Stars and mass formed per dex of initial mass, and below it how many stars each model stands"
                " for.",
                "The mass function, and the weight that it gives to each model.",
            ),
        ],
        "\n",
    )


def cited(found: Report) -> Markup:
    """The papers, and their BibTeX."""
    papers = citations(found.population)
    return join(
        [
            element("ol", *(element("li", *_paper(one)) for one in papers)),
            element("h3", "BibTeX"),
            code(bibtex(papers), "BibTeX of the papers"),
        ],
        "\n",
    )


def remade(found: Report) -> Markup:
    """How to make the report again: the population file, commands, checksums of what went in."""
    told = attributes(found.result)
    toml = _folded(population_to_toml(found.population))
    link = element(
        "a",
        "Save the population file",
        href=f"data:text/plain;charset=utf-8,{quote(toml)}",
        download="population.toml",
    )
    again = ["steelyard weigh population.toml", *([f"steelyard {command()}"] if command() else [])]
    out: list[str] = [
        element(
            "p",
            f"Made by steelyard {told['steelyard_version']}. Save the population file below as"
            " population.toml",
            "" if found.assumed else ", and the stated errors as spread.toml",
            "; then this weighs it",
            " and makes this page again:" if command() else ":",
        ),
        code("\n".join(again), "Commands"),
        element("h3", "Population file", id="file"),
        element("p", link),
        code(toml, "Population file"),
    ]
    if not found.assumed:
        out += [element("h3", "Stated errors"), code(found.errors.spread.to_toml(), "Stated errors")]
    checksums = zip(told["sets"], told["set_checksums"], strict=True)
    out.append(table("Yield sets and the SHA-256 of their figures", ("Set", "SHA-256"), checksums, left=2))
    out.append(element("h3", "Policies in force"))
    out.append(bullets(told["policies"]))
    if told["notes"]:
        out += [element("h3", "Notes"), bullets(told["notes"])]
    return join(out, "\n")


#: name in the page's address, heading, and what makes it
SECTIONS: tuple[tuple[str, str, Callable[[Report], Markup]], ...] = (
    ("weighed", "What was weighed", weighed),
    ("ranges", "Ranges of initial mass", ranges),
    ("yields", "Yields", yields),
    ("contrast", "Other choices", contrasted),
    ("leverage", "Models that matter most", leaned_on),
    ("audit", "Audit of the yield sets", audited),
    ("papers", "Papers to cite", cited),
    ("remake", "Make it again", remade),
)


def _shown(found: Report) -> list[str]:
    """As many species as a figure has panels for."""
    return list(found.species[:9])


def _drawn(draw: Callable[[], Figure], name: str, shows: str, caption: str) -> Markup:
    try:
        return drawing(draw(), name, shows, caption)
    except InputError as error:  # a young population has nothing to draw, but tables
        return element("p", f"Not drawn: {error}.")


def _folded(toml: str) -> str:
    """The same TOML with long lists of numbers on few lines."""

    def fold(found: re.Match[str]) -> str:
        numbers = " ".join(found[1].split())
        return f"= [\n{textwrap.indent(textwrap.fill(numbers, 92), '    ')}\n]"

    return _NUMBERS.sub(fold, toml)


def _yes(value: bool) -> str:
    return "yes" if value else "no"


def _species(name: str) -> Markup:
    """A nuclide with its mass number raised in front."""
    nuclide = _NUCLIDE.fullmatch(name)
    if nuclide is None:
        return element("span", name)
    return join([element("sup", f"{nuclide[2]}{nuclide[3]}"), nuclide[1]])


def _figure(cell: Cell) -> Markup:
    if cell.value is None or (not cell.value and not cell.error):
        text: list[str] = ["–" if cell.value is None else "0"]
    else:
        value, error, exponent = rounding.scaled(cell.value, cell.error, cell.last)
        both = f"({value} ± {error})" if error else value
        text = [both.replace("-", "−")]
        if exponent:
            text += [" × 10", element("sup", str(exponent).replace("-", "−"))]
    return join([*text, _mark(cell.marks)])


def _mark(letters: str) -> Markup:
    return element("sup", f" ({letters})") if letters else Markup("")


def _minus(text: str) -> str:
    """A figure with the sign that is as wide as a plus."""
    return re.sub(r"-(?=[0-9])", "−", text)


def _paper(one: Citation) -> Iterator[str]:
    yield f"{one.line}. {one.title}".rstrip(". ") + "."
    if one.doi.startswith("10."):
        yield " "
        yield element("a", f"doi:{one.doi}", href=f"https://doi.org/{quote(one.doi, safe='/')}")
