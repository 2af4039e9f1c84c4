"""The page: its frame, its look, and how it is written."""

from __future__ import annotations

from pathlib import Path

from steelyard.yields.whole import replace_file

from ..provenance import FORMAT, attributes, summary
from ..typesetting import digits as rounding
from .gathering import Report
from .markup import Markup, element, join
from .sections import SECTIONS

#: nothing is fetched, and no script runs
_POLICY = "default-src 'none'; style-src 'unsafe-inline'; img-src data:"

_LOOK = """
:root { color-scheme: light dark; --ink: #1a1a1a; --paper: #ffffff; --quiet: #555555; --rule: #b5b5b5;
  --link: #0b57a4; --block: #f3f3f3; }
@media (prefers-color-scheme: dark) {
  :root { --ink: #ececec; --paper: #16181b; --quiet: #b4b4b4; --rule: #5c5f63; --link: #8fc1ff;
    --block: #23262a; }
}
* { box-sizing: border-box; }
body { margin: 0; color: var(--ink); background: var(--paper);
  font: 1rem/1.55 system-ui, "DejaVu Sans", sans-serif; }
.skip { position: absolute; left: -100vw; top: 0; padding: .5rem 1rem; background: var(--paper); }
.skip:focus { left: 0; z-index: 1; }
header, nav, main, footer { max-width: 62rem; margin: 0 auto; padding: 0 1rem; }
header { padding-top: 1.5rem; }
footer { padding-bottom: 2rem; color: var(--quiet); }
h1 { font-size: 1.7rem; line-height: 1.25; margin: 0 0 .5rem; }
h2 { font-size: 1.3rem; margin: 2.5rem 0 .75rem; padding-top: .75rem; border-top: 1px solid var(--rule); }
h3 { font-size: 1.05rem; margin: 1.75rem 0 .5rem; }
p, li { max-width: 46rem; overflow-wrap: anywhere; }
ul, ol { padding-left: 1.4rem; }
a { color: var(--link); }
a:focus-visible, .scroll:focus-visible, pre:focus-visible { outline: 3px solid var(--link);
  outline-offset: 2px; }
.scroll { overflow-x: auto; margin: 1rem 0; }
table { border-collapse: collapse; font-size: .9rem; font-variant-numeric: tabular-nums; }
caption { text-align: left; color: var(--quiet); padding: 0 0 .4rem; }
caption span { display: block; min-width: 18rem; max-width: min(46rem, calc(100vw - 2rem)); }
th, td { text-align: left; vertical-align: top; padding: .25rem 1.1rem .25rem 0; }
th:last-child, td:last-child { padding-right: 0; }
thead th { border-bottom: 1px solid var(--ink); vertical-align: bottom; }
tbody tr + tr > * { border-top: 1px solid var(--block); }
tbody th { font-weight: 600; white-space: nowrap; }
.figure-cell { text-align: right; white-space: nowrap; }
sup { font-size: .72em; line-height: 0; }
pre { overflow-x: auto; padding: .8rem 1rem; background: var(--block); font-size: .85rem; line-height: 1.45; }
code { font-family: ui-monospace, "DejaVu Sans Mono", monospace; }
figure { margin: 1.5rem 0; }
figure .scroll { background: #ffffff; margin: 0; padding: .5rem; }
figure svg { display: block; width: 100%; min-width: 34rem; max-width: 52rem; height: auto; }
figcaption { color: var(--quiet); margin-top: .4rem; }
@media (max-width: 40rem) { tbody th { white-space: normal; min-width: 5rem; }
  td:not(.figure-cell) { min-width: 7.5rem; }
  td:nth-child(2):not(.figure-cell) { min-width: 10rem; } }
@media print {
  :root { --ink: #000000; --paper: #ffffff; --quiet: #333333; --rule: #888888; --link: #000000;
    --block: #f3f3f3; }
  nav, .skip { display: none; }
  body { font-size: 9.5pt; }
  header, main, footer { max-width: none; padding: 0; }
  .scroll, pre { overflow: visible; }
  pre { white-space: pre-wrap; overflow-wrap: anywhere; }
  table { font-size: 7.5pt; }
  td { overflow-wrap: anywhere; }
  thead { display: table-header-group; }
  tr, figure { break-inside: avoid; }
  h2, h3, caption { break-after: avoid; }
  figure svg { min-width: 0; max-width: 100%; }
}
"""


def to_html(found: Report) -> str:
    """Return a report as one HTML page, which needs no other file and no network.

    Parameters
    ----------
    found : Report

    Returns
    -------
    str
        The same report gives the same page.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> from steelyard.integrate.reporting import report
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])])
    >>> to_html(report(stars, ["O"])).splitlines()[0]
    '<!DOCTYPE html>'
    """
    population = found.population
    title = f"Yields of a stellar population of Z = {population.metallicity:g}"
    told = attributes(found.result)
    head = element(
        "head",
        element("meta", charset="utf-8"),
        element("meta", http_equiv="Content-Security-Policy", content=_POLICY),
        element("meta", name="viewport", content="width=device-width, initial-scale=1"),
        element("meta", name="generator", content=f"{FORMAT}, steelyard {told['steelyard_version']}"),
        element("title", title),
        element("link", rel="icon", href="data:,"),
        element("style", Markup(_LOOK)),
    )
    links = [element("li", element("a", heading, href=f"#{name}")) for name, heading, _ in SECTIONS]
    parts = [
        element(
            "section",
            element("h2", heading, id=f"{name}-heading"),
            Markup("\n"),
            make(found),
            id=name,
            aria_labelledby=f"{name}-heading",
        )
        for name, heading, make in SECTIONS
    ]
    body = element(
        "body",
        element("a", "To the report", class_="skip", href="#report"),
        element(
            "header",
            element("h1", title),
            element("p", f"{summary(population)}; yields up to {rounding.age(found.oldest)}."),
        ),
        element("nav", element("ul", *links), aria_label="Sections"),
        element("main", join(parts, "\n"), id="report", tabindex="-1"),
        element("footer", element("p", f"steelyard {told['steelyard_version']}")),
    )
    return f"<!DOCTYPE html>\n{element('html', head, Markup(chr(10)), body, lang='en')}\n"


def write_html(found: Report, path: str | Path) -> None:
    """Write a report as one HTML page, whole or not at all.

    Parameters
    ----------
    found : Report
    path : str or Path
        A file there is replaced.

    Raises
    ------
    InputError
        The file can't be written.
    """
    replace_file(path, to_html(found).encode("utf-8"))
