"""Reading published tables: a file a format, all giving the same `Sheet` of cells as text."""

from __future__ import annotations

import importlib
import re
from pathlib import Path

from ..errors import InputError, nearest
from .common import Options
from .sheet import Sheet, figure, is_figure
from .source import Source, open_source

__all__ = ["FORMATS", "Options", "Sheet", "Source", "detect", "figure", "is_figure", "open_source", "read"]

#: the formats; each is read by the module of that name
FORMATS = ("mrt", "cds", "ecsv", "csv", "text", "latex", "votable", "fits", "hdf5", "block")

_SUFFIXES = {
    ".mrt": "mrt",
    ".ecsv": "ecsv",
    ".csv": "csv",
    ".tsv": "csv",
    ".tex": "latex",
    ".vot": "votable",
    ".votable": "votable",
    ".fits": "fits",
    ".fit": "fits",
    ".h5": "hdf5",
    ".hdf5": "hdf5",
    ".hdf": "hdf5",
}


def read(path: str | Path | Source, format: str = "", options: Options | None = None) -> list[Sheet]:
    r"""Read the tables of a file, compressed or not.

    Parameters
    ----------
    path : path-like or Source
    format : str
        One of `FORMATS`; told from content and suffix where empty.
    options : Options, optional
        What a layout adds.

    Returns
    -------
    list of Sheet
        Never empty.

    Raises
    ------
    InputError
        The file can't be read; one line with the file and, where there is one, the line of it.

    Examples
    --------
    >>> import tempfile, pathlib
    >>> file = pathlib.Path(tempfile.mkdtemp()) / "invented.txt"
    >>> _ = file.write_text("mass Z C12\n1.0 0.02 1.5E-03\n")
    >>> read(file)[0].rows
    (('1.0', '0.02', '1.5E-03'),)
    """
    source = path if isinstance(path, Source) else open_source(path)
    options = options or Options()
    if format and format not in FORMATS:
        raise InputError(f"format {format!r} isn't known", where=source.name, mend=nearest(format, FORMATS))
    if not source.data.strip():
        raise InputError("the file is empty", where=source.name, mend="fetch it again")
    chosen = format or ("cds" if options.bytes else detect(source))
    module = importlib.import_module(f".{chosen}", __name__)
    try:
        sheets = module.read(source, options)
    except InputError:
        raise
    except (RecursionError, MemoryError):
        raise InputError(
            "nested or inflated beyond reason", where=source.name, mend="check the file"
        ) from None
    if not any(sheet.rows for sheet in sheets):
        raise InputError("the table has no rows", where=source.name, mend="fetch it again")
    return sheets


def detect(source: Source) -> str:
    """Tell the format of a file from its content, and from its suffix where that leaves a doubt.

    Returns
    -------
    str
        One of `FORMATS`.
    """
    data = source.data
    if data.startswith(b"\x89HDF\r\n\x1a\n"):
        return "hdf5"
    if data.startswith(b"SIMPLE  ="):
        return "fits"
    head = data[:20_000]
    if re.search(rb"<([\w]+:)?VOTABLE", head, re.IGNORECASE):
        return "votable"
    text = source.text[:200_000]
    if re.match(r"# %ECSV", text):
        return "ecsv"
    if re.search(r"^\s*#* ?Byte-by-byte Description", text, re.MULTILINE):
        return "mrt"
    if re.search(r"\\begin\{(tabular|deluxetable|longtable|longdeluxetable|supertabular|array)", text):
        return "latex"
    suffix = _SUFFIXES.get(Path(source.name).suffix.lower(), "")
    if suffix in ("csv", "latex", "votable"):
        return suffix
    from .csv import likely_delimiter

    if _has_blocks(source):
        return "block"
    if likely_delimiter(source.lines):
        return "csv"
    readme = source.path.parent / "ReadMe"
    if Path(source.name).suffix == ".dat" and readme.is_file() and not source.path.samefile(readme):
        return "cds"
    return "text"


def _has_blocks(source: Source) -> bool:
    """Whether lines of another shape than their neighbours part the data into blocks, or head them."""
    from .block import read

    try:
        blocks = read(source, Options())
    except InputError:
        return False
    return all("=" in b.heading or any(c.isdigit() for c in b.heading) for b in blocks)
