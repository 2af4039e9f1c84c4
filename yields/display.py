"""What notebooks show of an object: a small table in HTML."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from html import escape


def html_table(caption: str, headings: Sequence[str], rows: Iterable[Sequence[str]], note: str = "") -> str:
    """Return a table, its first column the rows' headings.

    Parameters
    ----------
    caption : str
    headings : sequence of str
    rows : iterable of sequence of str
    note : str
        What stands below it.

    Examples
    --------
    >>> print(html_table("a < b", ["", "c"], [["d", "1"]]))
    <table><caption style="text-align: left">a &lt; b</caption><thead><tr><th scope="col"></th><th
    scope="col">c</th></tr></thead><tbody><tr><th scope="row">d</th><td>1</td></tr></tbody></table>
    """
    head = "".join(f'<th scope="col">{escape(one)}</th>' for one in headings)
    body = ""
    for first, *others in rows:
        cells = "".join(f"<td>{escape(one)}</td>" for one in others)
        body += f'<tr><th scope="row">{escape(first)}</th>{cells}</tr>'
    return (
        f'<table><caption style="text-align: left">{escape(caption)}</caption>'
        f"<thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"
        + (f"<p>{escape(note)}</p>" if note else "")
    )
