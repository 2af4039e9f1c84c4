"""HTML of parts: text is escaped where it comes in, so that nothing from a file or a set is markup."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from html import escape

_VOID = frozenset({"link", "meta"})


class Markup(str):
    """Text that is HTML already; all other text is escaped where it is put into an element."""


def element(name: str, /, *children: str, **attributes: str) -> Markup:
    """Return an element.

    Parameters
    ----------
    name : str
    *children : str
        Text, escaped unless it is `Markup`.
    **attributes : str
        Underscores stand for hyphens, and one at the end of a name for nothing.

    Examples
    --------
    >>> print(element("p", "a < b, ", element("b", "c"), class_="note"))
    <p class="note">a &lt; b, <b>c</b></p>
    """
    told = "".join(
        f' {key.rstrip("_").replace("_", "-")}="{escape(value)}"' for key, value in attributes.items()
    )
    if name in _VOID:
        return Markup(f"<{name}{told}>")
    return Markup(f"<{name}{told}>{join(children)}</{name}>")


def join(parts: Iterable[str], between: str = "") -> Markup:
    """Return parts in a row, escaped unless they are `Markup`."""
    return Markup(between.join(one if isinstance(one, Markup) else escape(one) for one in parts))


def bullets(texts: Iterable[str]) -> Markup:
    """Return a list of texts; nothing where there are none."""
    items = [element("li", text) for text in texts]
    return element("ul", Markup("\n"), join(items, "\n"), Markup("\n")) if items else Markup("")


def code(text: str, name: str) -> Markup:
    """Return lines as they are, in a block that keys can scroll; `name` is what it is called."""
    return element("pre", element("code", text), tabindex="0", role="region", aria_label=name)


def table(caption: str, headings: Sequence[str], rows: Iterable[Sequence[str]], left: int = 1) -> Markup:
    """Return a table in a block that keys can scroll.

    Parameters
    ----------
    caption : str
    headings : sequence of str
    rows : iterable of sequence of str
        The first cell is the row's heading.
    left : int
        How many columns hold text, the first ones; the others hold figures.
    """

    def side(i: int) -> dict[str, str]:
        return {} if i < left else {"class_": "figure-cell"}

    head = element("tr", *(element("th", one, scope="col", **side(i)) for i, one in enumerate(headings)))
    body = [
        element(
            "tr",
            element("th", row[0], scope="row"),
            *(element("td", one, **side(i)) for i, one in enumerate(row[1:], start=1)),
        )
        for row in rows
    ]
    made = element(
        "table",
        element("caption", element("span", caption)),
        element("thead", head),
        element("tbody", Markup("\n"), join(body, "\n"), Markup("\n")),
    )
    return element("div", made, class_="scroll", tabindex="0", role="region", aria_label=caption)
