"""Tables in FITS files."""

from __future__ import annotations

import io
import warnings

from ..errors import InputError
from .common import Options, unreadable
from .numbers import sheet_of_arrays
from .sheet import Sheet
from .source import LARGEST, Source


def read(source: Source, options: Options) -> list[Sheet]:
    """Read the binary and ASCII tables of a FITS file.

    Parameters
    ----------
    source : Source
    options : Options
        `table` picks one by its EXTNAME, or its number among the extensions from 1; `columns` renames.

    Returns
    -------
    list of Sheet
        One for each table. Cells are the shortest text that gives back the number.

    Raises
    ------
    InputError
    """
    if not source.data.startswith(b"SIMPLE"):
        raise InputError("this is no FITS file", where=source.name, mend="name its format with --format")
    from astropy.io import fits
    from astropy.table import Table

    found = []
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            with fits.open(io.BytesIO(source.data), memmap=False, lazy_load_hdus=False) as units:
                for number, unit in enumerate(units):
                    if not isinstance(unit, (fits.BinTableHDU, fits.TableHDU)):
                        continue
                    if isinstance(unit, fits.CompImageHDU):
                        continue
                    if unit.size > LARGEST or unit.size > len(source.data):
                        raise InputError(
                            "declares more data than it holds", where=source.name, mend="fetch it again"
                        )
                    found.append((number, unit.name, Table.read(unit)))
    except InputError:
        raise
    except Exception as error:  # damaged headers raise many kinds
        raise unreadable(error, source.name, "fits") from None
    sheets = []
    for number, name, table in found:
        if options.table and options.table not in (name, str(number)):
            continue
        where = source.name if len(found) == 1 else f"{source.name} extension {name or number}"
        sheets.append(sheet_of_arrays(table, source, where, options, heading=name))
    if not sheets:
        what = f"no table {options.table!r}" if options.table else "no table in any extension"
        names = ", ".join(name or str(number) for number, name, _ in found)
        raise InputError(what, where=source.name, mend=f"it has {names}" if found else "check the file")
    return sheets
