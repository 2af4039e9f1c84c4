"""`steelyard contrast`: how much of an answer is the choice of tables and laws."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import typer

from steelyard.integrate.contrasting import MOST, Contrast, contrast, design, read_swap
from steelyard.integrate.contrasting.compare import MARKS, OVER
from steelyard.integrate.contrasting.telling import (
    Row,
    rows,
    sentences,
    share_rows,
    share_sentences,
    signed,
)
from steelyard.integrate.popfile import told
from steelyard.integrate.population import Population
from steelyard.integrate.provenance import summary
from steelyard.scripts import given, terminal
from steelyard.yields.errors import InputError

#: columns of species side by side
WIDTH = 10

SWAP = typer.Option(
    [],
    "--swap",
    "-s",
    metavar="INGREDIENT=CHOICE,...",
    help="What to swap and for what; may be given often.",
    show_default=False,
)


def command(
    file: str = typer.Argument(
        "",
        metavar="POPULATION",
        help="Population file (TOML), the base. Default: the one that `steelyard weigh --template` writes.",
        show_default=False,
    ),
    swap: list[str] = SWAP,
    full: bool = typer.Option(
        False, "--full", help="Weigh all combinations, and say which swap the spread is due to."
    ),
    ages: str = typer.Option(
        "", metavar="LIST", help='Ages, such as "100 Myr, 13.8 Gyr". Default: the oldest of the file.'
    ),
    elements: str = typer.Option(
        "",
        *given.LISTED,
        metavar="LIST",
        help="What to compare: a list such as O,Mg,Fe, or all. Default: the list in the file, or"
        " C,N,O,Mg,Si,Ca,Mn,Fe,Ni.",
    ),
    net: bool = typer.Option(False, "--net", help="Compare net yields: less what was there at birth."),
    common_range: bool = typer.Option(
        False,
        "--common-range",
        help="Restrict a source whose sets are swapped to the masses that all its choices serve.",
    ),
    most: int = typer.Option(
        MOST, metavar="N", help="With --full, combinations to weigh at most; of more, a sample is drawn."
    ),
    output: str = typer.Option(
        "", "--output", "-o", metavar="DIR", help="Folder for the files. Default: none are written."
    ),
    figures: bool = typer.Option(
        True, "--figures/--no-figures", help="Draw figures into the folder, or not."
    ),
    markdown: bool = typer.Option(False, "--markdown", help="Print the table as Markdown only."),
    json: bool = typer.Option(False, "--json", help="Print JSON only."),
) -> int:
    """Swap yield sets, mass functions, delays, joins in a population, and say in dex what it does.

    One ingredient is swapped at a time, or with --full in all combinations; then the variance is
    divided among them. Ingredients: a source by its kind (agb, core-collapse, thermonuclear), imf,
    imf.limits, delay, number, lifetimes, join, edges.below, edges.above, interpolation, metallicity,
    solar, and keys of a source such as core-collapse.implode. A choice of sets may be a series (a+b),
    a mixture (a:0.7/b:0.3) or, in quotes, a pattern ('limongi-chieffi-2018-*'); what takes several
    keys is a table: 'delay={form="exponential",timescale="1 Gyr",limits=["40 Myr","13.8 Gyr"]}'.

    With --output, writes contrast.csv, contrast.tex, and as .png and .pdf contrast and
    abundance-envelope; with --full shares-yields.csv, shares-ratios.csv and the figure shares too.

    \b
    Examples:
      steelyard contrast --swap imf=salpeter-1955,chabrier-2003
      steelyard contrast --swap agb=marigo-2001+doherty-2014 --elements C,N,O --net
      steelyard contrast --swap 'thermonuclear=iwamoto-1999-*' --swap join=swallow --full -o referee
    """
    if json and markdown:
        raise InputError("--json and --markdown exclude each other", mend="give one of the two")
    if not swap:
        raise InputError("nothing is swapped", where="--swap", mend="such as --swap imf=salpeter-1955")
    population = given.population(file)
    made = design(
        population,
        _swaps(swap, population),
        given.read_given_ages(ages) if ages else None,
        _elements(elements),
        common_range,
    )
    count = min(made.size, most) if full else len(made.one_at_a_time)
    with terminal.slow(f"weighing {count} populations"):
        found = contrast(made, full=full, convention="net" if net else "total", most=most)
    with terminal.slow("dividing the variance"):
        divided = _divided(found)
    written = _write(found, divided, Path(output), figures) if output else []
    if json:
        extra = (
            {"shares": {"yields": divided[0].to_dict(), "ratios": divided[1].to_dict()}} if divided else {}
        )
        extra["sentences"] = [{"age_yr": float(a), "lines": lines} for a, lines in _lines(found, divided)]
        terminal.print_json(found.to_dict() | extra)
    elif markdown:
        from steelyard.integrate.contrasting.writing import to_markdown

        print("\n".join(to_markdown(found, t) for t in range(len(found.ages))), end="")
    else:
        _print(found, divided)
        if written:
            print()
            print("written: " + ", ".join(str(path) for path in written))
    return 0


def _swaps(texts: Sequence[str], population: Population) -> dict[str, list[Any]]:
    swaps: dict[str, list[Any]] = {}
    for text in texts:
        with told("--swap"):
            name, choices = read_swap(text, population)
        swaps.setdefault(name, []).extend(choices)
    return swaps


def _elements(text: str) -> Any:
    return "elements" if text == "all" else given.names(text) or None


def _divided(found: Contrast) -> Any:
    """Shares of yields and of [X/Fe], where choices are combined."""
    if not found.full:
        return ()
    from steelyard.integrate.shares import shares

    return shares(found), shares(found, ratio=True)


def _lines(found: Contrast, divided: Any) -> Iterable[tuple[float, list[str]]]:
    """What the choices do to each element, in sentences, by age."""
    for t, age in enumerate(found.ages):
        told_ = share_sentences(divided[1], divided[0], t) if divided else sentences(found, t)
        yield float(age), list(told_)


def _write(found: Contrast, divided: Any, where: Path, figures: bool) -> list[Path]:
    from steelyard.integrate.contrasting.writing import write_csv, write_latex

    drawn = _draw(found, divided) if figures else {}
    where = terminal.folder(where)
    written = [where / "contrast.csv", where / "contrast.tex"]
    write_csv(found, written[0])
    write_latex(found, written[1])
    for name, one in zip(("shares-yields.csv", "shares-ratios.csv"), divided, strict=False):
        written.append(where / name)
        write_csv(one, written[-1])
    for name, figure in drawn.items():
        from steelyard.integrate.figures import save

        for suffix in (".png", ".pdf"):
            written.append(where / f"{name}{suffix}")
            save(figure, written[-1])
    return written


def _draw(found: Contrast, divided: Any) -> dict[str, Any]:
    from steelyard.integrate.figures.contrast import abundance_envelope, strip_chart
    from steelyard.integrate.figures.shares import stacked_shares

    wanted: dict[str, Callable[[], Any]] = {
        "contrast": lambda: strip_chart(found),
        "abundance-envelope": lambda: abundance_envelope(found),
    }
    if divided:
        wanted["shares"] = lambda: stacked_shares(*divided)
    drawn = {}
    for name, draw in wanted.items():
        try:
            drawn[name] = draw()
        except InputError:  # such as no element with a ratio to iron: the table says so
            continue
    return drawn


def _print(found: Contrast, divided: Any) -> None:
    out = terminal.console()
    out.print(f"Base: {summary(found.design.base)}", style="bold")
    lines = dict(_lines(found, divided))
    for t, age in enumerate(found.ages):
        at = terminal.duration(float(age))
        out.print()
        _table(
            out,
            [_base(found, t), *rows(found, t)],
            found.species,
            f"{found.convention.capitalize()} yields up to {at}: the base in Msun per Msun formed, choices in"
            " dex against it",
        )
        out.print()
        ratios = [Row("base", "", tuple(_ratio(found, 0, t)))]
        alone = [Row(r.factor, r.label, cells) for r, cells in _ratio_rows(found, t)]
        spread = [f"{v:.2f}" if np.isfinite(v) else "-" for v in found.range(True)[t]]
        ratios += [*alone, Row("all", "range", tuple(spread))]
        _table(out, *_without_iron(ratios, found), f"[X/{OVER}] of the ejecta up to {at}, dex")
        for one in divided:
            of = f"[X/{OVER}]" if one.ratio else f"log10 of {found.convention} yields"
            how = f"a sample of {len(found.at)}" if found.sampled else f"all {len(found.at)}"
            out.print()
            title = f"Shares of the variance of {of} over {how} combinations, per cent"
            table = share_rows(one, t)
            _table(out, *(_without_iron(table, found) if one.ratio else (table, found.species)), title)
    notes = [*_lacking(found), *_left_out(divided), *found.notes]
    out.print()
    out.print(terminal.facts([("notes", notes)]))
    for age, told_ in lines.items():
        out.print()
        out.print(f"At {terminal.duration(age)}", style="bold")
        for line in told_:
            out.print(line)


def _base(found: Contrast, t: int) -> Row:
    dagger = terminal.mark("†", "*")
    lacking = {s for names in found.lacking.values() for s in names}
    cells = [
        f"{terminal.scientific(float(v))}{dagger if s in lacking else ''}"
        for s, v in zip(found.species, found.yields[0, t], strict=True)
    ]
    return Row("base", "", tuple(cells))


def _ratio(found: Contrast, row: int, t: int) -> list[str]:
    return [
        MARKS[mark] if mark in (1, 2) else signed(value) if np.isfinite(value) else "-"
        for value, mark in zip(found.ratio[row, t], found.ratio_marks[row, t], strict=True)
    ]


def _ratio_rows(found: Contrast, t: int) -> Iterable[tuple[Row, tuple[str, ...]]]:
    from steelyard.integrate.contrasting.telling import singles

    for row, place in zip(rows(found, t), singles(found), strict=False):
        yield row, tuple(_ratio(found, int(place), t))


def _without_iron(found: Sequence[Row], of: Contrast) -> tuple[list[Row], tuple[str, ...]]:
    """Rows without the column of [Fe/Fe]."""
    keep = [j for j, name in enumerate(of.species) if name != OVER]
    shown = [Row(r.factor, r.label, tuple(r.cells[j] for j in keep)) for r in found]
    return shown, tuple(of.species[j] for j in keep)


def _table(out: Any, found: Sequence[Row], species: Sequence[str], title: str) -> None:
    """Choices down, species across, in blocks that a line has room for."""
    out.print(title, style="bold")
    plain = {row.factor for row in found} <= {"share", "dex"}
    heads = [""] if plain else ["", ""]
    for start in range(0, len(species), WIDTH):
        part = slice(start, start + WIDTH)
        made = terminal.table(*heads, *species[part], left=len(heads))
        before = ""
        for row in found:
            shown = "" if row.factor in (before, "all") else row.factor
            made.add_row(*([] if plain else [shown]), row.label, *row.cells[part])
            before = row.factor
        out.print(made)


def _lacking(found: Contrast) -> list[str]:
    """Species that the base's sources don't follow, and what ratios are taken over."""
    dagger = terminal.mark("†", "*")
    out = [
        f"{dagger} sums without {source}, which doesn't follow {', '.join(names)} at all its masses"
        for source, names in found.lacking.items()
    ]
    everyone = tuple(found.base.sources)
    over: dict[tuple[str, ...], list[str]] = {}
    for name, sources in found.ratio_sources.items():
        if sources and sources != everyone and name != OVER:
            over.setdefault(sources, []).append(f"[{name}/{OVER}]")
    out += [
        f"{', '.join(names)}: over {' and '.join(sources)}, which follow both elements"
        for sources, names in over.items()
    ]
    return out


def _left_out(divided: Any) -> list[str]:
    out: dict[str, list[str]] = {}
    for one in divided:
        for name, by_factor in one.left_out.items():
            for factor, labels in by_factor.items():
                text = f"{factor}: {', '.join(labels)}"
                shown = f"[{name}/{OVER}]" if one.ratio else name
                out.setdefault(text, []).append(shown)
    return [
        f"shares of {', '.join(names)} are without {text}, which doesn't follow what the base does"
        for text, names in out.items()
    ]
