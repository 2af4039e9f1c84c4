"""Figures inside the page: SVG without what belongs to a file of its own."""

from __future__ import annotations

import io
import re
from typing import TYPE_CHECKING

from steelyard.yields.figures.style import style

from .markup import Markup, element

if TYPE_CHECKING:
    from matplotlib.figure import Figure

_ROOT = re.compile(r"<svg [^>]*?(viewBox=\"[^\"]*\")[^>]*>")
#: where a name is given, and where it is used
_NAMED = re.compile(r'(\bid="|href="#|url\(#)')
#: lines of paths, and their coordinates, which need no millionths of a point
_PATH = re.compile(r'(?<= d=")[^"]*')
_LONG = re.compile(r"-?[0-9]+\.[0-9]{3,}")
_BARE = {"Date": None, "Creator": None, "Format": None, "Type": None}


def drawing(figure: Figure, name: str, shows: str, caption: str) -> Markup:
    """Return a figure as an HTML element.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    name : str
        Put in front of every name inside the drawing, which are then the only ones in the page.
    shows : str
        What there is to see, for those who don't see it.
    caption : str
    """
    image = io.StringIO()
    with style():
        figure.savefig(image, format="svg", metadata=_BARE)
    # the declaration and the document type stand before the root
    text = image.getvalue()
    text = text[text.index("<svg ") :].strip()
    text = _NAMED.sub(rf"\g<1>{name}-", text)
    text = _PATH.sub(lambda path: _LONG.sub(lambda x: f"{float(x[0]):.2f}", path[0]), text)
    root = _ROOT.match(text)
    if root is None:
        raise ValueError("matplotlib's SVG begins otherwise than expected")
    label = element("title", shows)
    opened = (
        '<svg xmlns="http://www.w3.org/2000/svg" xmlns:xlink="http://www.w3.org/1999/xlink"'
        f' {root[1]} role="img" aria-labelledby="{name}-title">'
    )
    titled = label.replace("<title>", f'<title id="{name}-title">')
    svg = Markup(f"{opened}{titled}{text[root.end() :]}")
    return element(
        "figure",
        element("div", svg, class_="scroll", tabindex="0", role="region", aria_label=f"Figure: {caption}"),
        element("figcaption", caption),
    )
