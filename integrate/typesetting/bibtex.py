"""Papers as BibTeX."""

from __future__ import annotations

from collections.abc import Sequence

from steelyard.integrate.citations import Citation
from steelyard.integrate.provenance import provenance
from steelyard.integrate.results import PopulationYields

from .tex import comment, escape


def bibtex(papers: Sequence[Citation], result: PopulationYields | None = None) -> str:
    """Return papers as BibTeX entries, by `Citation.key`.

    Parameters
    ----------
    papers : sequence of Citation
    result : PopulationYields, optional
        What rests on them; named in a comment.

    Examples
    --------
    >>> paper = Citation("Maoz D., Graur O.", 2017, "Star formation, supernovae, iron", "ApJ 848, 25")
    >>> print(bibtex([paper]))
    @article{Maoz2017ApJ848.25,
      author = {{Maoz}, D. and {Graur}, O.},
      title = {{Star formation, supernovae, iron}},
      journal = {ApJ},
      volume = {848},
      pages = {25},
      year = {2017},
    }
    <BLANKLINE>
    """
    origin = f"{comment(provenance(result)[:1])}\n" if result else ""
    return origin + "\n".join(_entry(one) for one in papers)


def _entry(paper: Citation) -> str:
    journal, volume, page = paper.journal
    authors = (
        f"{{{escape(surname)}}}, {escape(initials)}" if initials else f"{{{escape(surname)}}}"
        for surname, initials in paper.names
    )
    fields = {
        "author": " and ".join(authors),
        "title": f"{{{escape(paper.title)}}}" if paper.title else "",
        "journal" if volume else "howpublished": escape(journal),
        "volume": escape(volume),
        "pages": escape(page),
        "year": str(paper.year),
        "doi": paper.doi,
    }
    body = "".join(f"  {name} = {{{value}}},\n" for name, value in fields.items() if value)
    return f"@{'article' if volume else 'misc'}{{{paper.key},\n{body}}}\n"
