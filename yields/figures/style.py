"""What all figures share: the width of a journal's columns, type, colours, and how they are saved.

Colours are those of Okabe & Ito (2008, "Color universal design"), which readers with any kind of
colour vision tell apart; line, marker and hatch say the same once more, for print in grey.
"""

from __future__ import annotations

import io
import threading
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import InputError, nearest
from ..whole import replace_file

if TYPE_CHECKING:
    from matplotlib.artist import Artist
    from matplotlib.figure import Figure


#: inches: one and two columns of a journal page, 88 and 180 mm
COLUMN = 88 / 25.4
PAGE = 180 / 25.4

#: dots per inch of pixel images
RESOLUTION = 200

#: points
TEXT = 8.0
SMALL = 7.0

MSUN = r"M$_\odot$"
GREY = "#595959"


@dataclass(frozen=True)
class Look:
    """How a source is drawn: colour, dashes of its line, marker, hatch of its areas."""

    colour: str
    line: Any
    marker: str
    hatch: str


_DASHED, _DASH_DOT, _DOTTED = (0, (4.5, 1.6)), (0, (6, 1.4, 1.2, 1.4)), (0, (1.2, 1.3))

#: the sum of all sources
SUM = Look("#000000", "-", "D", "")

_KNOWN = {
    "core-collapse": Look("#0072B2", "-", "s", ""),
    "agb": Look("#D55E00", _DASHED, "o", "////"),
    "thermonuclear": Look("#009E73", _DASH_DOT, "^", "...."),
}
_FURTHER = (
    Look("#CC79A7", _DOTTED, "v", "xxxx"),
    Look("#56B4E9", (0, (8, 2)), "P", "----"),
    Look("#E69F00", (0, (3, 1.2, 1.2, 1.2, 1.2, 1.2)), "X", "\\\\\\\\"),
)

_NAMES = {"agb": "AGB", "core-collapse": "core collapse", "thermonuclear": "thermonuclear"}

_STYLE: dict[str, Any] = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": TEXT,
    "mathtext.fontset": "dejavusans",
    "axes.labelsize": TEXT,
    "axes.linewidth": 0.6,
    "axes.unicode_minus": True,
    "axes.grid": False,
    "axes.formatter.use_mathtext": True,
    "axes.facecolor": "white",
    "axes.edgecolor": "black",
    "axes.labelcolor": "black",
    "figure.facecolor": "white",
    "figure.labelsize": TEXT,
    "hatch.linewidth": 0.5,
    "legend.fontsize": TEXT,
    "legend.frameon": False,
    "lines.linewidth": 1.2,
    "text.color": "black",
    "text.usetex": False,
    "xtick.color": "black",
    "ytick.color": "black",
    "xtick.labelsize": SMALL,
    "ytick.labelsize": SMALL,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.top": True,
    "ytick.right": True,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.minor.width": 0.4,
    "ytick.minor.width": 0.4,
    "xtick.major.size": 3.0,
    "ytick.major.size": 3.0,
    "xtick.minor.size": 1.6,
    "ytick.minor.size": 1.6,
    # letters stay letters in vector files; names inside an SVG don't change from run to run
    "pdf.fonttype": 42,
    "svg.fonttype": "path",
    "svg.hashsalt": "steelyard",
    "savefig.bbox": None,
    "savefig.facecolor": "auto",
    "savefig.transparent": False,
    "path.sketch": None,
    "path.effects": [],
}

# matplotlib's settings are one for the whole process
_LOCK = threading.RLock()


@contextmanager
def style() -> Iterator[None]:
    """Put steelyard's settings in force, and the ones before them back."""
    import matplotlib

    with _LOCK:
        before = {key: matplotlib.rcParams[key] for key in _STYLE}
        try:
            matplotlib.rcParams.update(_STYLE)
            yield
        finally:
            matplotlib.rcParams.update(before)


def looks(sources: Sequence[str]) -> dict[str, Look]:
    """Return how each source is drawn: the known kinds always alike, others by their order.

    Examples
    --------
    >>> looks(["agb", "kilonova"])["agb"].marker
    'o'
    """
    others = [source for source in sources if source not in _KNOWN]
    return {s: _KNOWN[s] if s in _KNOWN else _FURTHER[others.index(s) % len(_FURTHER)] for s in sources}


def distinct(count: int) -> list[Look]:
    """Return as many looks as there are things of one kind to tell apart, from the first on.

    Examples
    --------
    >>> len({(one.colour, one.marker) for one in distinct(12)})
    12
    """
    base = [*_KNOWN.values(), *_FURTHER]
    lines = [one.line for one in base]
    markers = ("s", "o", "^", "v", "P", "X", "D", "<", ">", "p", "h", "*")
    return [
        Look(
            base[k % len(base)].colour,
            lines[(k + k // len(base)) % len(lines)],
            markers[k % len(markers)],
            "",
        )
        for k in range(count)
    ]


def label(source: str) -> str:
    """Return a source's name as figures print it."""
    return _NAMES.get(source, source).replace("$", r"\$")


def canvas(width: float, height: float, title: str, description: str = "") -> Figure:
    """Return an empty figure, in inches, that carries a title and where it comes from into its file."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width, height), layout="constrained")
    figure.provenance = (title, description)
    return figure


def legend(figure: Figure, entries: Sequence[tuple[Artist | tuple[Artist, ...], str]], columns: int) -> None:
    """Put a legend above all panels, where no data can be under it."""
    from matplotlib.legend_handler import HandlerTuple

    handles, texts = zip(*entries, strict=True)
    figure.legend(
        handles,
        texts,
        loc="outside upper center",
        ncols=columns,
        handler_map={tuple: HandlerTuple(ndivide=None, pad=0.4)},
        handlelength=2.6,
        columnspacing=1.6,
        handletextpad=0.6,
        borderaxespad=0.2,
        borderpad=0.2,
    )


def save(figure: Figure, path: str | Path) -> None:
    """Write a figure to a file of the kind its ending names.

    The same figure gives the same bytes: no dates are written. Where a figure of ours
    comes from stands whole in the file's own description.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    path : str or Path
        Ending in .png (200 dots per inch), .pdf or .svg. A file there is replaced,
        whole or not at all.

    Raises
    ------
    InputError
        The ending is another one, or the file can't be written.
    """
    kinds = ("pdf", "png", "svg")
    kind = Path(path).suffix.removeprefix(".").casefold()
    if kind not in kinds:
        raise InputError(
            f"a figure can't be written as {kind!r}" if kind else "a figure's file needs an ending",
            where=str(path),
            mend=nearest(kind, kinds) if kind else f"end it in .{', .'.join(kinds)}",
        )
    title, description = getattr(figure, "provenance", ("", ""))
    told: dict[str, dict[str, Any]] = {
        "pdf": {"Title": title, "Subject": description, "Creator": "steelyard", "CreationDate": None},
        "png": {"Title": title, "Description": description, "Software": "steelyard"},
        "svg": {"Title": title, "Description": description, "Creator": "steelyard", "Date": None},
    }
    image = io.BytesIO()
    with style():
        figure.savefig(image, format=kind, dpi=RESOLUTION, metadata=told[kind])
    replace_file(path, image.getvalue())
