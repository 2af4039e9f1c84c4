"""Sets on their way out and back: a folder of CSV files, ECSV, HDF5. Each says of itself what it holds."""

from __future__ import annotations

import csv
import hashlib
import io
import json
import os
import secrets
import shutil
import tomllib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from .build import EJECTED_RULES
from .errors import InputError, nearest
from .layouting import Reading, parse_layout
from .layouting.convert import readings
from .layouting.gather import gather
from .layouting.reading import TABLES, Table, table_of
from .readers import Source, open_source, read
from .storefile import FORMAT, decode, encode

#: form of an export, and the suffix that tells it
FORMS = {"csv": "", "ecsv": ".ecsv", "hdf5": ".h5"}

LAYOUT_KEY = "steelyard_layout"


def export(reading: Reading, path: str | Path, form: str = "") -> Path:
    """Write a set for other programs, or for another library.

    Parameters
    ----------
    reading : Reading
    path : path-like
        Must not exist yet.
    form : str
        ``csv`` (a folder like those of the shipped tables), ``ecsv`` or ``hdf5``;
        told from the path's suffix where empty, a folder where it has none of these.

    Returns
    -------
    Path

    Raises
    ------
    InputError
        The path exists or can't be written.

    Notes
    -----
    CSV and HDF5 keep the printed digits; ECSV holds numbers, the shortest digits that give them back.
    """
    path = Path(path)
    suffix = path.suffix.lower()
    form = form or ("ecsv" if suffix == ".ecsv" else "hdf5" if suffix in (".h5", ".hdf5") else "csv")
    if form not in FORMS:
        raise InputError(f"{form!r} isn't a form of export", mend=nearest(form, FORMS))
    if path.exists() or path.is_symlink():
        raise InputError("exists already", where=str(path), mend="name a path that doesn't")
    write: Callable[[Reading, Path], None] = {"csv": _folder, "ecsv": _ecsv, "hdf5": _hdf5}[form]
    part = path.with_name(f".{path.name}.{secrets.token_hex(4)}.part")
    try:
        write(reading, part)
        os.rename(part, path)
    except OSError as error:
        raise InputError(
            f"can't be written: {error.strerror or error}", where=str(path), mend="name another path"
        ) from None
    finally:
        if part.is_dir():
            shutil.rmtree(part, ignore_errors=True)
        else:
            part.unlink(missing_ok=True)
    return path


def recognise(path: str | Path) -> Reading | None:
    """Read what `export` wrote; None for anything else.

    Parameters
    ----------
    path : path-like

    Returns
    -------
    Reading or None

    Raises
    ------
    InputError
        It is an export, but damaged.
    """
    path = Path(path)
    if path.is_dir():
        return _from_folder(path)
    source = open_source(path)
    if source.data.startswith(b"\x89HDF") and FORMAT.encode() in source.data:
        return decode(source.data, str(path))[1]
    if source.data.startswith(b"# %ECSV") and LAYOUT_KEY.encode() in source.data:
        return _from_ecsv(source)
    return None


def _folder(reading: Reading, part: Path) -> None:
    import tomli_w

    part.mkdir()
    checksums = {}
    for name in reading.tables:
        rows = reading.rows(name)
        text = io.StringIO()
        writer = csv.DictWriter(text, list(rows[0]), lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)
        data = text.getvalue().encode()
        (part / f"{name}.csv").write_bytes(data)
        checksums[f"{name}.csv"] = hashlib.sha256(data).hexdigest()
    info = {k: v for k, v in reading.info.items() if k != "checksums"} | {"checksums": checksums}
    (part / "set.toml").write_bytes(tomli_w.dumps(info).encode())


def _from_folder(path: Path) -> Reading:
    source = open_source(path / "set.toml")
    try:
        info = tomllib.loads(source.text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise InputError(f"can't be read as TOML: {str(error)[:120]}", where=str(source.path)) from None
    where = str(path / "set.toml")
    for key in ("id", "kind", "yields", "covers", "ejected"):
        if not isinstance(info.get(key), str):
            raise InputError(f"{key} is missing", where=where, mend="write it as in an exported set")
    if info["ejected"] not in EJECTED_RULES:
        raise InputError(
            f"ejected = {info['ejected']!r} isn't known",
            where=where,
            mend=nearest(info["ejected"], EJECTED_RULES),
        )
    if "variants" in info or "continue" in info:
        raise InputError("holds several sets", where=where, mend="keep the rows of one, without [variants]")
    tables = {}
    for name in ("models", *info["yields"].split(" and "), "initial"):
        file = path / f"{name}.csv"
        if name == "initial" and not file.exists():
            continue
        if name not in TABLES:
            raise InputError(
                f"yields = {info['yields']!r} isn't known", where=where, mend="net, total or net and total"
            )
        tables[name] = _from_csv(open_source(file), info.get("checksums", {}))
    keys = [c for c in ("metallicity", "mass", "variant") if c in tables["models"].columns]
    for name in set(tables) - {"models", "initial"}:
        tables[name] = _without(tables[name], keys)
    plain = {k: v for k, v in info.items() if k != "checksums"}
    return Reading(info["id"], plain, tables, ((path.name, source.sha256),))


def _from_csv(source: Source, checksums: Any) -> Table:
    digest = checksums.get(source.name) if isinstance(checksums, dict) else None
    if digest and digest != source.sha256:
        raise InputError(
            "the figures don't match their checksum",
            where=str(source.path),
            mend="fetch the folder again, or leave out [checksums] if the change is meant",
        )
    sheet = read(source, "csv")[0]
    words = [c for c in sheet.columns if c == "note"]
    if words:
        sheet = type(sheet)(
            tuple(c for c in sheet.columns if c not in words),
            tuple(
                tuple(v for c, v in zip(sheet.columns, r, strict=True) if c not in words) for r in sheet.rows
            ),
            sheet.where,
            lines=sheet.lines,
        )
    try:
        return table_of(sheet.columns, sheet.rows)
    except ValueError as error:
        raise InputError(
            f"{str(error)[:60]!r} isn't a number", where=sheet.where, mend="correct it"
        ) from None


def _without(table: Table, keys: list[str]) -> Table:
    kept = [i for i, c in enumerate(table.columns) if c not in keys]
    return Table(
        tuple(table.columns[i] for i in kept),
        tuple(tuple(row[i] for i in kept) for row in table.text),
        table.figures[:, kept],
    )


def _hdf5(reading: Reading, part: Path) -> None:
    part.write_bytes(encode(reading))


def _ecsv(reading: Reading, part: Path) -> None:
    import tomli_w
    from astropy.table import Column
    from astropy.table import Table as AstropyTable

    columns: list[Any] = []
    models = reading.tables["models"]
    for j, name in enumerate(models.columns):
        if name == "variant":
            columns.append(Column([row[j] for row in models.text], name, dtype=str))
            continue
        unit = {"metallicity": None, "lifetime": "yr"}.get(name, "solMass")
        columns.append(Column(models.figures[:, j], name, unit=unit))
    for convention in ("net", "total", "initial"):
        if convention not in reading.tables:
            continue
        table = reading.tables[convention]
        figures = table.figures
        if convention == "initial":
            figures = figures[_rows_at_birth(models, table)]
        for j, name in enumerate(table.columns):
            if name != "metallicity":
                unit = None if convention == "initial" else "solMass"
                columns.append(Column(figures[:, j], f"{convention}_{name}", unit=unit))
    # as one line: line ends inside of YAML text don't survive the comment signs before them
    text = json.dumps(tomli_w.dumps(_own_layout(reading)))
    made = AstropyTable(columns, meta={LAYOUT_KEY: text})
    made.write(part, format="ascii.ecsv", delimiter=",")


def _rows_at_birth(models: Table, initial: Table) -> list[int]:
    z = models.figures[:, models.columns.index("metallicity")]
    return [int(np.argmin(np.abs(initial.figures[:, 0] - one))) for one in z]


def _own_layout(reading: Reading) -> dict[str, Any]:
    """The layout that reads an exported ECSV table."""
    info = reading.info
    made = {
        k: info[k] for k in ("id", "kind", "summary", "decay", "missing", "covers", "ejected") if k in info
    }
    made |= {"id": reading.id, "read": {"format": "ecsv"}}
    if "paper" in info:
        made["paper"] = info["paper"]
    made["model"] = {c: c for c in reading.tables["models"].columns}
    made["yields"] = {c: c + "_{species}" for c in ("net", "total", "initial") if c in reading.tables}
    if "ignore" in info:
        made["rest"] = {
            "species": list(info["ignore"]["columns"]),
            "why": info["ignore"].get("why", "lumped"),
        }
    if "birth" in info:
        made["birth"] = dict(info["birth"])
    return made


def _from_ecsv(source: Source) -> Reading | None:
    sheets = read(source, "ecsv")
    text = sheets[0].meta.get(LAYOUT_KEY)
    if text is None:
        return None
    where = f"{source.name} {LAYOUT_KEY}"
    try:
        text = json.loads(text)
    except (ValueError, RecursionError):
        raise InputError("can't be read", where=where, mend="export the set again") from None
    if not isinstance(text, str):
        raise InputError("isn't text", where=where, mend="export the set again")
    layout = parse_layout(text, where)
    return readings(gather(sheets, layout), layout, [(source.path.name, source.sha256)])[0]
