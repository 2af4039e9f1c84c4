"""Machine-readable tables of the AAS journals: a byte-by-byte description, then the data."""

from __future__ import annotations

from ..errors import InputError
from .common import Options, ascii_table, from_table, uncommented
from .sheet import Sheet
from .source import Source

DESCRIPTION = "Byte-by-byte Description"


def read(source: Source, options: Options) -> list[Sheet]:
    """Read a machine-readable table, also one whose lines were commented out.

    Parameters
    ----------
    source : Source
    options : Options
        `columns` renames, `skip` leaves out lines at the top.

    Returns
    -------
    list of Sheet
        One; units and explanations are those of the description.

    Raises
    ------
    InputError
    """
    lines = [line.expandtabs(8).rstrip() for line in uncommented(source.lines[options.skip :])]
    start = next((i for i, line in enumerate(lines) if line.startswith(DESCRIPTION)), None)
    if start is None:
        raise InputError(
            "no byte-by-byte description",
            where=source.name,
            mend="give the bytes of each column in [read.bytes]",
        )
    title = next((line[6:].strip() for line in lines[:start] if line.startswith("Table:")), "")
    return [described(lines[start:], source, options, offset=options.skip + start, heading=title)]


def described(
    lines: list[str], source: Source, options: Options, offset: int | None, heading: str = ""
) -> Sheet:
    """Read a byte-by-byte description and the data that follow it.

    `offset` is the number of lines of the file above them; None where they aren't lines of one file.
    """
    rules = [i for i, line in enumerate(lines) if line.startswith(("------", "======"))]
    data = [i for i in range(rules[-1] + 1, len(lines)) if lines[i].strip()] if rules else []
    if not data:
        raise InputError("no data after the description", where=source.name, mend="fetch the whole table")
    # the library reads the format MRT with the checks of CDS; the description is the same
    table = ascii_table([*lines[: rules[-1] + 1], *(lines[i] for i in data)], source.name, format="cds")
    at = tuple(offset + i + 1 for i in data) if offset is not None else ()
    if len(at) != len(table):
        at = ()
    return from_table(table, source, columns=options.columns, heading=heading, lines=at)
