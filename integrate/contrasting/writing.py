"""A contrast on disk: CSV with every number, LaTeX and Markdown of the table, with their origin."""

from __future__ import annotations

import io
from collections.abc import Iterator, Sequence
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING

from steelyard.yields.whole import replace_file

from .. import provenance
from ..provenance import summary
from .compare import Contrast
from .telling import Row, rows

if TYPE_CHECKING:
    from ..shares import Shares

#: columns of species that a page has room for
WIDTH = 12


def origin(found: Contrast) -> list[str]:
    """Return where a contrast comes from, as lines of text.

    Returns
    -------
    list of str
        Version, base, what is swapped, sets with their checksums, notes, the base's population file.
    """
    made = found.design
    populations = [made.population(at) for at in made.one_at_a_time]
    sets = dict.fromkeys(g for p in populations for s in p.sources for e in s.sets for g in e.load(p.solar))
    how = (
        "sample of all combinations"
        if found.sampled
        else "all combinations"
        if found.full
        else "one at a time"
    )
    return [
        f"steelyard contrast, steelyard {version('steelyard')}",
        f"base {summary(made.base)}",
        *(f"swap {f.name}: {f.labels[0]} (base); {', '.join(f.labels[1:])}" for f in made.factors),
        f"choices {how}: {len(found.at)} populations, the base included",
        f"{found.convention} yields, Msun per Msun formed up to the age; dex: log10 of yield over base",
        *(f"set {one.id} sha256 {one.checksum}" for one in sets),
        *(f"note {line}" for line in found.notes),
        *provenance.origin(made.base),
    ]


def write_csv(found: Contrast | Shares, path: str | Path) -> None:
    """Write all numbers of a contrast, or shares, as a tidy table with its origin above it.

    Parameters
    ----------
    found : Contrast or Shares
        Of a contrast a row for each age, population and species (`Contrast.to_pandas`); of
        shares a row for each age, species and part.
    path : str or Path
        A file there is replaced, whole or not at all.

    Raises
    ------
    InputError
        The file can't be written.
    """
    contrasted = found if isinstance(found, Contrast) else found.contrast
    text = io.StringIO()
    for line in origin(contrasted):
        text.write(f"# {line}".rstrip() + "\n")
    if isinstance(found, Contrast):
        found.to_pandas().to_csv(text, index=False, lineterminator="\n")
    else:
        of = "[X/Fe]" if found.ratio else "log10 of yields"
        text.write(f"# shares of the variance of {of} over the combinations; error: half width at 95 %\n")
        text.write("age_yr,species,part,share,error,variance_dex2\n")
        for t, age in enumerate(contrasted.ages.tolist()):
            for j, name in enumerate(contrasted.species):
                for k, part in enumerate(found.names):
                    error = 0.0 if found.error is None else float(found.error[k, t, j])
                    numbers = (float(found.parts[k, t, j]), error, float(found.variance[t, j]))
                    text.write(f"{age!r},{name},{part},{','.join(map(repr, numbers))}\n")
    replace_file(path, text.getvalue().encode())


def write_latex(found: Contrast, path: str | Path, age: int = -1) -> None:
    """Write the table of choices and elements for LaTeX with the booktabs package.

    Parameters
    ----------
    found : Contrast
    path : str or Path
        A file there is replaced, whole or not at all.
    age : int
        Position among the ages.

    Raises
    ------
    InputError
        The file can't be written.
    """
    lines = [f"% {line}".rstrip() for line in origin(found)]
    lines.append(f"% at {found.ages[age]:.6g} yr; needs \\usepackage{{booktabs}}")
    for species, block in _blocks(found, age):
        lines += [f"\\begin{{tabular}}{{ll{'r' * len(species)}}}", "\\toprule"]
        lines += [" & ".join(["Ingredient", "Choice", *species]) + r" \\", "\\midrule"]
        before = ""
        for row in block:
            if row.factor != before and before:
                lines.append("\\midrule" if row.factor == "all" else "\\addlinespace")
            shown = row.factor if row.factor not in (before, "all") else ""
            lines.append(" & ".join([_tex(shown), _tex(row.label), *map(_tex_cell, row.cells)]) + r" \\")
            before = row.factor
        lines += ["\\bottomrule", "\\end{tabular}", ""]
    replace_file(path, "\n".join(lines).encode())


def to_markdown(found: Contrast, age: int = -1) -> str:
    """Return the table of choices and elements as Markdown.

    Parameters
    ----------
    found : Contrast
    age : int
        Position among the ages.

    Returns
    -------
    str
    """
    lines: list[str] = []
    for species, block in _blocks(found, age):
        lines += ["", "| swapped | choice | " + " | ".join(species) + " |"]
        lines.append("|---|---|" + "---:|" * len(species))
        before = ""
        for row in block:
            shown = row.factor if row.factor not in (before, "all") else ""
            label = row.label if row.factor == "all" else f"`{row.label}`"
            cells = (cell.replace("-", "−") if cell[1:2].isdigit() else cell for cell in row.cells)
            lines.append(f"| {shown} | {label} | " + " | ".join(cells) + " |")
            before = row.factor
    return "\n".join(lines[1:]) + "\n"


def _blocks(found: Contrast, age: int) -> Iterator[tuple[Sequence[str], list[Row]]]:
    whole = rows(found, age)
    for start in range(0, len(found.species), WIDTH):
        end = start + WIDTH
        yield found.species[start:end], [Row(r.factor, r.label, r.cells[start:end]) for r in whole]


def _tex(text: str) -> str:
    for sign in "&%$#_{}":
        text = text.replace(sign, f"\\{sign}")
    return text


def _tex_cell(cell: str) -> str:
    """Numbers with a true minus; what stands in place of a number in italics."""
    if cell[:1] in "+-" and cell[1:2].isdigit():
        return f"${cell}$"
    return (
        cell
        if cell[:1].isdigit() or cell == "-"
        else f"\\textit{{{cell.replace('-', '$-$').replace('+', '$+$')}}}"
    )
