"""Layouts: where in a paper's table everything stands, and what is read with that."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from ..errors import InputError
from ..readers import open_source, read
from .convert import readings
from .declared import Layout
from .gather import gather
from .reading import Reading, Table
from .schema import layout, parse_layout, shipped_layouts

__all__ = ["Layout", "Reading", "Table", "layout", "parse_layout", "read_sets", "shipped_layouts"]

#: files for one set; a paper has a handful
MOST_FILES = 200


def read_sets(
    paths: Sequence[str | Path], by: Layout | str | Path, *, id: str = "", format: str = ""
) -> tuple[Reading, ...]:
    r"""Read the files of a yield set by a layout.

    Parameters
    ----------
    paths : sequence of path-like
        All files that make up the set.
    by : Layout or str or path-like
        The layout, its name, or its file.
    id : str
        Id of the set, in place of the layout's own.
    format : str
        Format of the files, in place of the layout's own.

    Returns
    -------
    tuple of Reading
        One, or one for each variant to which the layout gives an id.

    Raises
    ------
    InputError
        Something in the files or the layout can't be used; nothing is returned in part.

    Examples
    --------
    >>> import tempfile, pathlib
    >>> file = pathlib.Path(tempfile.mkdtemp()) / "invented.csv"
    >>> _ = file.write_text("mass,Z,remnant,C12,O16\n1.0,0.02,0.6,1.5E-03,3.9E-03\n")
    >>> reading, = read_sets([file], "wide", id="invented-2026")
    >>> reading.grid("asplund-2009").value("C12", 1.0, 0.02)
    0.0015
    """
    chosen = by if isinstance(by, Layout) else layout(by)
    if not paths or len(paths) > MOST_FILES:
        raise InputError(f"{len(paths)} files", mend=f"name 1 to {MOST_FILES} files")
    sources = [open_source(path) for path in paths]
    sheets = [sheet for source in sources for sheet in read(source, format or chosen.format, chosen.options)]
    gathered = gather(sheets, chosen)
    return readings(gathered, chosen, [(s.path.name, s.sha256) for s in sources], id)
