"""The grid as one long table: FITS, VOTable, ECSV and CSV, written by astropy."""

from __future__ import annotations

import io
import json
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from steelyard.yields.errors import InputError, nearest

from ..provenance import replace_file
from .grid import Handoff
from .hdf5 import arrays, told

if TYPE_CHECKING:
    from astropy.table import Table

FORMATS = {"fits": "fits", "votable": "votable", "ecsv": "ascii.ecsv", "csv": "ascii.csv"}

_YIELDS = ("total", "net", "total_rate", "net_rate")


def as_table(made: Handoff) -> Table:
    """Return a row for each metallicity, age, source and species, its origin in `meta`.

    The accounts of a source (ejected, rest) and of the population (living, returned,
    remnants, events) are repeated on every row that they belong to.
    """
    from astropy.table import Table

    result, data = made.results[0], arrays(made)
    shape = data["total"].shape
    table = Table()
    axes = (made.metallicities, made.ages, np.array(result.sources), np.array(result.species))
    for i, (name, values) in enumerate(zip(("metallicity", "age", "source", "species"), axes, strict=True)):
        at = tuple(-1 if j == i else 1 for j in range(4))
        table[name] = np.broadcast_to(values.reshape(at), shape).ravel()
    columns = {name: data[name] for name in _YIELDS} | {"followed": data["followed"][None, None]}
    columns |= {n: data[n][..., None] for n in ("rest_total", "rest_net", "ejected", "ejected_rate")}
    columns |= {n: data[n][..., None, None] for n in ("living", "returned")}
    for name, kinds in (
        ("remnants", result.remnants_by_kind),
        ("events", result.events),
        ("event_rates", result.events),
    ):
        for k, kind in enumerate(kinds):
            columns[f"{name}_{kind}".replace(" ", "_").replace("-", "_")] = data[name][..., k, None, None]
    for name, values in columns.items():
        table[name] = np.broadcast_to(values, shape).ravel()
        units = ["solMass-1"] if name.startswith("event") else []
        units += ["yr-1"] if "rate" in name else []
        if units:
            table[name].unit = " ".join(units)
    table["age"].unit = "yr"
    table.meta = {name: list(v) if isinstance(v, tuple) else v for name, v in told(made).items()}
    table.meta["error_checked"] = made.checked
    return table


def write_table(made: Handoff, path: str | Path, form: str) -> None:
    """Write a grid as a table, whole or not at all.

    Parameters
    ----------
    made : Handoff
    path : str or Path
    form : {"fits", "votable", "ecsv", "csv"}

    Raises
    ------
    InputError
        A form that isn't known, or a file that can't be written.
    """
    if form not in FORMATS:
        raise InputError(f"format {form!r} isn't known", mend=nearest(form, FORMATS))
    table = as_table(made)
    lines = json.dumps(table.meta, indent=1, allow_nan=False).splitlines()
    if form == "fits":
        from astropy.io import fits

        unit = fits.table_to_hdu(_bare(table))
        for line in lines:
            # a card holds 72 characters; longer lines are cut up and joined by the reader
            unit.header.add_comment(line.encode("ascii", "backslashreplace").decode())
        out = io.BytesIO()
        fits.HDUList([fits.PrimaryHDU(), unit]).writeto(out, checksum=True)
        data = out.getvalue()
    elif form == "votable":
        from astropy.io.votable import from_table

        made_file = from_table(_bare(table))
        made_file.description = "\n".join(lines)
        out = io.BytesIO()
        made_file.to_xml(out)
        data = out.getvalue()
    else:
        text = io.StringIO()
        (table if form == "ecsv" else _bare(table)).write(text, format=FORMATS[form])
        head = "".join(f"# {line}\n" for line in lines) if form == "csv" else ""
        data = (head + text.getvalue()).encode()
    replace_file(path, data)


def _bare(table: Table) -> Table:
    copy = table.copy(copy_data=False)
    copy.meta = {}
    return copy
