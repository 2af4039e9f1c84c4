"""`steelyard scatter`: populations of finite mass, drawn star by star, beside the exact law."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import typer

from steelyard.integrate.popfile import read_ages, told
from steelyard.integrate.scatter import MODES, ScatteredYields, scatter, write_scatter, write_statistics
from steelyard.integrate.scatter.result import LEVELS
from steelyard.scripts import given, terminal
from steelyard.yields.errors import InputError, nearest
from steelyard.yields.nuclides import parse
from steelyard.yields.units import plain

#: ages where no population file is given
STEPS = {"from": "3 Myr", "to": "13.8 Gyr", "steps": 20}

#: as the messages call the ways to draw
TOLD = {"poisson": "Poisson numbers of stars", "number": "a fixed number of stars", "mass": "a fixed mass"}


def command(
    file: str = typer.Argument(
        "",
        metavar="FILE",
        help="Population file (TOML). Default: the population that `steelyard weigh --template` writes, at"
        " 20 ages.",
        show_default=False,
    ),
    mass: str = typer.Option("1e3", metavar="MASS", help="Mass of each population, Msun."),
    count: int = typer.Option(10000, metavar="N", help="How many populations to draw."),
    seed: int = typer.Option(1, metavar="N", help="The same seed gives the same digits."),
    mode: str = typer.Option(
        "poisson",
        metavar="|".join(MODES),
        help="Poisson numbers of stars; a fixed number; or stars until a mass is reached, the last one kept.",
    ),
    ages: str = typer.Option(
        "", metavar="LIST", help='Ages in place of the file\'s, such as "10 Myr, 1 Gyr"; all are printed.'
    ),
    species: str = given.SPECIES,
    net: bool = typer.Option(False, "--net", help="Net yields: less what was there at birth."),
    ratio: str = typer.Option(
        "", metavar="LIST", help="Ratios of the figure, such as Mg/Fe,C/O. Default: up to six."
    ),
    workers: int = typer.Option(0, metavar="N", help="Threads. Default: as many as there are cores."),
    changes: list[str] = given.WITH,
    output: str = typer.Option(
        "", "--output", "-o", metavar="DIR", help="Folder for the files. Default: the current one."
    ),
    figures: bool = typer.Option(True, "--figures/--no-figures", help="Draw the figure, or don't."),
    json: bool = typer.Option(
        False, "--json", help="Print JSON only; files are written only where --output says so."
    ),
) -> None:
    """Draw populations of finite mass star by star: how far chance moves what they eject.

    Each star is drawn from the mass function, each delayed event in time. Prints the exact mean,
    standard deviation and skewness at the last age (or at each of --ages), which follow from the
    compound-Poisson law, with quantiles of the populations drawn. Writes scatter.h5 (every
    population, for other codes to draw from), scatter.csv (statistics) and, as .png and .pdf,
    ratio-scatter: abundance ratios against the mass of the population.

    \b
    Examples:
      steelyard scatter --mass 1e3 --count 10000 --species O,Mg,Fe --output results
      steelyard scatter --mass 300 --count 2000 --ages "10 Myr, 100 Myr" --no-figures
      steelyard scatter --mass 1e4 --count 500 --mode mass --species O,Fe --json
    """
    if mode not in MODES:
        raise InputError(f"{mode!r} isn't a way to draw", where="--mode", mend=nearest(mode, MODES))
    if workers < 0:
        raise InputError(f"{workers} threads can't work", where="--workers", mend="give 1 or more")
    population = given.population(file, changes, ages=ages, species=species)
    if not (file or ages):
        population = replace(population, ages=read_ages(STEPS))
    size = plain(mass, "Msun", "--mass")
    pairs = [_pair(one) for one in terminal.words(ratio, "--ratio")] if ratio else None
    with told(file), terminal.slow("drawing"):
        drawn = scatter(population, size, count, seed, mode, None, "net" if net else "total", workers or None)
    written: list[Path] = []
    undrawn = ""
    if output or not json:
        with terminal.slow("writing"):
            written, undrawn = _write(drawn, pairs, Path(output or "."), figures)
    if json:
        terminal.print_json(drawn.to_dict())
        return
    _print(drawn, range(len(drawn.ages)) if ages else [len(drawn.ages) - 1])
    print()
    print("written: " + ", ".join(str(path) for path in written))
    if undrawn:
        print(f"not drawn: {undrawn}")


def _pair(text: str) -> tuple[str, str]:
    parts = text.strip("[]").split("/")
    if len(parts) != 2:
        raise InputError(f"{text!r} isn't a ratio", where="--ratio", mend="such as Mg/Fe")
    with told("--ratio"):
        return parse(parts[0].strip()).name, parse(parts[1].strip()).name


def _write(
    drawn: ScatteredYields, pairs: list[tuple[str, str]] | None, where: Path, figures: bool
) -> tuple[list[Path], str]:
    """Write all files; the paths of those written, and why the figure isn't among them."""
    figure, undrawn = None, ""
    if figures:
        from steelyard.integrate.figures.scatter import ratio_scatter

        try:
            figure = ratio_scatter(drawn.population, pairs, float(drawn.ages[-1]), seed=drawn.seed)
        except InputError as error:  # of a young population, or of one element
            if pairs:
                raise
            undrawn = f"ratio-scatter: {error}"
    where = terminal.folder(where)
    written = [where / "scatter.h5", where / "scatter.csv"]
    write_scatter(drawn, written[0])
    write_statistics(drawn, written[1])
    if figure is not None:
        from steelyard.integrate.figures import save

        for suffix in (".png", ".pdf"):
            written.append(where / f"ratio-scatter{suffix}")
            save(figure, written[-1])
    return written, undrawn


def _print(drawn: ScatteredYields, at: Sequence[int]) -> None:
    out = terminal.console()
    out.print(
        f"{drawn.count} populations of {drawn.mass:g} Msun, {TOLD[drawn.mode]}, seed {drawn.seed};"
        f" Z = {drawn.population.metallicity:g}",
        style="bold",
    )
    quantiles, sample = drawn.quantiles(), drawn.sample_mean()
    for t in at:
        out.print()
        out.print(_table(drawn, t, quantiles[:, t], sample[t]))
        for line in _marks(drawn, t):
            out.print(line)
    out.print()
    out.print(terminal.facts(_facts(drawn)))


def _table(drawn: ScatteredYields, t: int, quantiles: Any, sample: Any) -> Any:
    law = drawn.law
    title = f"{drawn.convention.capitalize()} yields up to {terminal.duration(float(drawn.ages[t]))}, Msun"
    heads = ["mean", "sigma", "skewness", "sample mean", *(f"{100 * q:g} %" for q in LEVELS)]
    made = terminal.table("", *heads, title=title)
    dagger = terminal.mark("†", "*")
    followed = drawn.population.prepared.followed
    for i, species in enumerate(drawn.species):
        lacking = "" if followed[:, i].all() else dagger
        skewed = f"{law.skewness[t, i]:.2f}{'  ' if law.gaussian[t, i] else ' !'}"
        cells = [law.mean[t, i], law.sigma[t, i]]
        rest = [sample[i], *quantiles[:, i]]
        made.add_row(
            f"{species}{lacking}",
            *(terminal.scientific(float(v)) for v in cells),
            skewed,
            *(terminal.scientific(float(v)) for v in rest),
        )
    return made


def _marks(drawn: ScatteredYields, t: int) -> Iterator[str]:
    """What the signs in the table mean."""
    off = int((~drawn.law.gaussian[t]).sum())
    if off:
        yield (
            f"! a Gaussian fails for {off} of {len(drawn.species)} species: skewness above 0.5, so that its"
            " probabilities are off by more than about 3 %; use the quantiles"
        )
    followed = drawn.population.prepared.followed
    dagger = terminal.mark("†", "*")
    for source, row in zip(drawn.sources, followed, strict=True):
        names = [s for s, has in zip(drawn.species, row, strict=True) if not has]
        if names:
            yield f"{dagger} {source} doesn't follow {', '.join(names)}, or at some masses only"


def _facts(drawn: ScatteredYields) -> Iterator[tuple[str, str | list[str]]]:
    law = drawn.law
    assert drawn.born is not None and drawn.stars is not None
    noise = f" (sample {drawn.born.mean():.6g}, {drawn.stars.mean():.6g})"
    yield "born", f"{law.born:.6g} Msun and {law.stars:.6g} stars on average{noise}"
    if drawn.mode == "number":
        bias = law.born / drawn.mass - 1
        yield "bias", f"{bias:+.2g} of every mean yield, for the number of stars is rounded"
    if drawn.mode == "mass":
        bias = law.born / drawn.mass - 1
        yield (
            "bias",
            f"{bias:+.2g} of every mean yield, for the star that reaches the mass is kept; 0 per Msun born",
        )
    last = drawn.events[:, -1].mean(axis=0)
    numbers = ", ".join(f"{kind} {number:.4g}" for kind, number in zip(drawn.event_kinds, last, strict=True))
    yield "events", f"{numbers} in each on average, up to the last age" if numbers else ""
    nothing = float(np.mean(drawn.ejected[:, :, -1].sum(axis=1) <= 0))
    yield "barren", f"{100 * nothing:.2g} % eject nothing by the last age" if nothing else ""
    yield "notes", list(drawn.notes)
