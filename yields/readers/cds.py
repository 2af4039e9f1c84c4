"""Tables of the Strasbourg data centre: a data file described by a ReadMe, or by the bytes of a layout."""

from __future__ import annotations

import fnmatch
import re

from ..errors import InputError
from .common import Options, ascii_table, from_table, uncommented
from .mrt import DESCRIPTION, described
from .sheet import Sheet
from .source import Source, open_source


def read(source: Source, options: Options) -> list[Sheet]:
    """Read a fixed-width data file.

    Parameters
    ----------
    source : Source
    options : Options
        `bytes` where columns stand; otherwise the ReadMe named by `readme`, or the one
        in the folder of the file.

    Returns
    -------
    list of Sheet
        One.

    Raises
    ------
    InputError
    """
    if options.bytes:
        return [_by_bytes(source, options)]
    path = source.path.parent / (options.readme or "ReadMe")
    if not path.is_file():
        raise InputError(
            "no ReadMe beside it that says where its columns stand",
            where=source.name,
            mend="put the ReadMe there, or give the bytes of each column in [read.bytes]",
        )
    readme = open_source(path)
    lines = [line.expandtabs(8).rstrip() for line in source.lines[options.skip :]]
    description = _description(readme.lines, source.name, path.name)
    return [described([*description, "-" * 80, *lines], source, options, offset=None)]


def _description(lines: list[str], name: str, where: str) -> list[str]:
    """The part of a ReadMe that describes one file."""
    starts = [i for i, line in enumerate(lines) if line.startswith(DESCRIPTION)]
    for i in starts:
        patterns = re.split(r"[,\s]+", lines[i].partition(":")[2].strip())
        if any(fnmatch.fnmatch(name, p) for p in patterns if p):
            rules = [j for j in range(i, len(lines)) if lines[j].startswith(("------", "======"))]
            # one rule above the titles of the columns, one below, one after the last column
            if len(rules) < 3:
                break
            return [line.rstrip() for line in lines[i : rules[2]]]
    raise InputError(
        f"no byte-by-byte description of {name}", where=where, mend="give the bytes in [read.bytes]"
    )


def _by_bytes(source: Source, options: Options) -> Sheet:
    lines = source.lines
    if all(line.startswith("#") for line in lines if line.strip()):
        lines = uncommented(lines)
    kept = [
        (i + 1, line.expandtabs(8).rstrip())
        for i, line in enumerate(lines)
        if i >= options.skip and line.strip() and not line.startswith("#")
    ]
    if not kept:
        raise InputError("the file holds no data", where=source.name, mend="fetch it again")
    end = max(last for _, last in options.bytes.values())
    table = ascii_table(
        [line.ljust(end) for _, line in kept],
        source.name,
        format="fixed_width_no_header",
        names=list(options.bytes),
        col_starts=[first - 1 for first, _ in options.bytes.values()],
        col_ends=[last - 1 for _, last in options.bytes.values()],
    )
    return from_table(table, source, lines=tuple(i for i, _ in kept))
