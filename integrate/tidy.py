"""Tidy tables in CSV, their origin in comment lines above them."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

from steelyard.yields.whole import replace_file


def write_tidy(
    path: str | Path, origin: Iterable[str], header: Sequence[str], rows: Iterable[Sequence[Any]]
) -> None:
    """Write a table, whole or not at all; numbers have as many digits as it takes to read them back.

    Parameters
    ----------
    path : str or Path
        A file there is replaced.
    origin : iterable of str
        Lines that say where the figures come from.
    header : sequence of str
    rows : iterable of sequence
        Text and plain numbers.

    Raises
    ------
    InputError
        The file can't be written.

    Examples
    --------
    >>> import pathlib, tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = pathlib.Path(folder) / "a.csv"
    ...     write_tidy(path, ["made up"], ["species", "total"], [["O", 0.1]])
    ...     print(path.read_text(), end="")
    # made up
    species,total
    O,0.1
    """
    text = io.StringIO()
    text.writelines(f"# {line}".rstrip() + "\n" for line in origin)
    table = csv.writer(text, lineterminator="\n")
    table.writerow(header)
    table.writerows(rows)
    replace_file(path, text.getvalue().encode())
