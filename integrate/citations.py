"""The papers that a population rests on: of its yield sets, mass function, lifetimes, delays and mixtures."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any

from .delays import PRESETS, Delay, delay
from .lifetimes import LAWS

if TYPE_CHECKING:
    from steelyard.yields.grid import YieldSet

    from .population import Population

#: two forms of one paper
_SAME_PAPER = {"chabrier-2003-system": "chabrier-2003"}

_INITIALS = re.compile(r"(?:[^\W\d_]{1,3}\.-?)+")
_REFERENCE = re.compile(r"(?P<journal>.*\S)\s+(?P<volume>[A-Z]?\d+),\s*(?P<page>\S+)")


@dataclass(frozen=True)
class Citation:
    """A paper.

    Attributes
    ----------
    authors : str
        Surnames before initials, commas between authors: ``"Maoz D., Graur O."``.
    year : int
    title : str
    reference : str
        Journal, volume and page: ``"ApJ 848, 25"``.
    doi : str
        Empty where there is none.

    Examples
    --------
    >>> paper = Citation("Maoz D., Graur O.", 2017, "Star formation", "ApJ 848, 25")
    >>> paper.key, paper.label
    ('Maoz2017ApJ848.25', 'Maoz & Graur (2017)')
    """

    authors: str
    year: int
    title: str
    reference: str
    doi: str = ""

    @property
    def names(self) -> tuple[tuple[str, str], ...]:
        """Surname and initials of each author; no initials where a name doesn't end in any."""
        out = []
        for one in filter(None, (part.strip() for part in self.authors.split(","))):
            words = one.split()
            count = 0
            while count < len(words) - 1 and _INITIALS.fullmatch(words[-1 - count]):
                count += 1
            at = len(words) - count
            out.append((" ".join(words[:at]), " ".join(words[at:])))
        return tuple(out)

    @property
    def journal(self) -> tuple[str, str, str]:
        """Journal, volume and page; only the first where the reference isn't of that form."""
        found = _REFERENCE.fullmatch(self.reference)
        return (found["journal"], found["volume"], found["page"]) if found else (self.reference, "", "")

    @property
    def key(self) -> str:
        """First author, year, journal, volume and page: the same in every population."""
        first = self.names[0][0] if self.names else "anonymous"
        journal, volume, page = self.journal
        parts = (first, str(self.year), journal, volume, page)
        *known, at = (re.sub(r"[^A-Za-z0-9]", "", part) for part in parts)
        return "".join(known) + (f".{at}" if at else "")

    @property
    def label(self) -> str:
        """Authors and year as in running text."""
        return f"{self._surnames} ({self.year})"

    @property
    def line(self) -> str:
        """Authors, year, journal, volume and page as in running text."""
        return f"{self._surnames} ({self.year}, {self.reference})"

    @property
    def _surnames(self) -> str:
        surnames = [surname for surname, _ in self.names]
        return f"{surnames[0]} et al." if len(surnames) > 2 else " & ".join(surnames)


def citations(population: Population) -> tuple[Citation, ...]:
    """Return every paper that a population rests on, each once.

    Parameters
    ----------
    population : Population

    Returns
    -------
    tuple of Citation
        Of the mass function, the yield sets, the delays, the lifetimes, and the solar mixtures for
        what a set doesn't give. What is the user's own has no paper.

    Examples
    --------
    >>> from steelyard.integrate.popfile import default_population
    >>> [paper.key for paper in citations(default_population())][:3]
    ['Kroupa2001MNRAS322.231', 'Karakas2010MNRAS403.1413', 'Doherty2014MNRAS437.195']
    """
    found = [*of_imf(population)]
    for one in population.prepared.sets:
        found += of_set(one)
    for source in population.sources:
        if isinstance(getattr(source, "delay", None), Delay):
            found += of_delay(source.delay)
    found += of_lifetimes(population)
    for id in mixtures_used(population):
        found += of_mixture(id)
    return tuple(dict.fromkeys(found))


def of_imf(population: Population) -> tuple[Citation, ...]:
    """Return the paper of a population's mass function, if it is a published one."""
    return _method(population.imf.to_dict().get("form", ""))


def of_set(one: YieldSet) -> tuple[Citation, ...]:
    """Return the papers that published a yield set."""
    given = one.info.get("paper", [])
    return tuple(_citation(paper) for paper in ([given] if isinstance(given, Mapping) else given))


def of_delay(given: Delay) -> tuple[Citation, ...]:
    """Return the paper of a delay-time distribution, if it is a published one."""
    return tuple(paper for name in PRESETS if delay(name) == given for paper in _method(name))


def of_lifetimes(population: Population) -> tuple[Citation, ...]:
    """Return the paper of the lifetimes; for the sets' own, of the law where they give none."""
    given = population.lifetimes
    name = given if isinstance(given, str) else next((n for n, law in LAWS.items() if type(given) is law), "")
    if name in ("portinari-1998", "sets"):
        return _shipped("portinari-1998-lifetimes")
    return _method(name)


def of_mixture(id: str) -> tuple[Citation, ...]:
    """Return the papers of a solar mixture."""
    return _shipped("solar", id)


def mixtures_used(population: Population) -> tuple[str, ...]:
    """Return the solar mixtures that stand for compositions at birth."""
    own = [one.info.get("birth", {}).get("mixture", "") for one in population.prepared.sets]
    return tuple(dict.fromkeys([population.solar, *filter(None, own)]))


def _method(name: str) -> tuple[Citation, ...]:
    found = _methods().get(_SAME_PAPER.get(name, name))
    return (_citation(found),) if found else ()


@lru_cache(maxsize=1)
def _methods() -> Mapping[str, Mapping[str, Any]]:
    return tomllib.loads(files("steelyard.integrate").joinpath("citations.toml").read_text(encoding="utf-8"))


@lru_cache(maxsize=32)
def _shipped(*folder: str) -> tuple[Citation, ...]:
    path = files("steelyard.tables").joinpath(*folder, "set.toml")
    given = tomllib.loads(path.read_text(encoding="utf-8"))["paper"]
    papers: Sequence[Mapping[str, Any]] = [given] if isinstance(given, Mapping) else given
    return tuple(_citation(paper) for paper in papers)


def _citation(paper: Mapping[str, Any]) -> Citation:
    # papers of admitted sets say what their layout says
    text = {name: str(paper.get(name, "")) for name in ("authors", "title", "reference", "doi")}
    return Citation(year=int(paper.get("year", 0)), **text)
