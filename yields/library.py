"""The yield sets there are, shipped and admitted: finding them and checking their figures."""

from __future__ import annotations

import csv
import hashlib
import io
import tomllib
from collections.abc import Mapping
from dataclasses import replace
from functools import lru_cache
from importlib.resources import files
from importlib.resources.abc import Traversable
from typing import Any

import numpy as np

from . import store
from .build import Printed, build
from .errors import InputError, nearest
from .grid import Slice, YieldSet

#: kinds of table folder that hold yields; the others hold lifetimes, mixtures, isotopes
KINDS = ("agb", "core-collapse", "thermonuclear")

DEFAULT_SOLAR = "asplund-2009"

#: behind a set's id: the set after all its radioactive nuclides have decayed
DECAYED = "@decayed"


def catalogue() -> Mapping[str, tuple[str, str]]:
    """Return every yield set there is: the shipped ones, and those in the user's library.

    Returns
    -------
    mapping
        From the set's id to its folder and the variant it selects there; for an admitted
        set, to its file and nothing.

    Warns
    -----
    LibraryWarning
        For every file of the library that can't be used.

    Examples
    --------
    >>> catalogue()["karakas-2010"]
    ('karakas-2010', 'VW93')
    """
    own = {e.id: (str(e.path), "") for e in store.entries() if e.id not in _catalogue()}
    return dict(sorted({**_catalogue(), **own}.items()))


@lru_cache(maxsize=1)
def _catalogue() -> Mapping[str, tuple[str, str]]:
    """Every shipped yield set."""
    found: dict[str, tuple[str, str]] = {}
    for folder in sorted(files("steelyard.tables").iterdir(), key=lambda f: f.name):
        if not folder.joinpath("set.toml").is_file():
            continue
        info = _info(folder)
        if info["kind"] not in KINDS:
            continue
        variants = info.get("variants", {})
        ids = dict(variants.get("ids", {}))
        if "default" in variants or not ids:
            found[info["id"]] = (folder.name, variants.get("default", ""))
        for one, variant in ids.items():
            found[one] = (folder.name, variant)
    return dict(sorted(found.items()))


def shipped() -> tuple[str, ...]:
    """Return the ids of all shipped yield sets, in alphabetical order.

    Examples
    --------
    >>> "kobayashi-2006" in shipped()
    True
    """
    return tuple(_catalogue())


def printed(id: str) -> tuple[Mapping[str, Any], Printed]:
    """Return the figures of a set as its paper prints them, before they are laid on the grid.

    Parameters
    ----------
    id : str
        Author-year and variant, one of `catalogue()`.

    Returns
    -------
    info : mapping
        What its set.toml says.
    figures : Printed
        Of its own models only, where the set continues another upwards.

    Raises
    ------
    InputError
        No such set, or its figures don't match their checksum.

    Examples
    --------
    >>> info, figures = printed("kobayashi-2006")
    >>> info["ejected"], figures.models[0]["remnant"]
    ('mass - remnant', '1.57E+00')
    """
    if id in _catalogue():
        return _printed(id)
    if store.holds(id):
        return store.printed(id)
    raise InputError(f"yield set {id!r} isn't known", mend=nearest(id, catalogue()))


def _printed(id: str) -> tuple[Mapping[str, Any], Printed]:
    name, variant = _catalogue()[id]
    folder = files("steelyard.tables").joinpath(name)
    info = _info(folder)
    texts = {csv_name: _text(folder, csv_name, digest) for csv_name, digest in info["checksums"].items()}
    rows = {csv_name: _select(_rows(text), variant) for csv_name, text in texts.items()}
    yields = {c: rows[f"{c}.csv"] for c in ("total", "net") if f"{c}.csv" in rows}
    return info, Printed(rows["models.csv"], yields, rows.get("initial.csv"))


def load(id: str, solar: str = DEFAULT_SOLAR) -> YieldSet:
    """Load a yield set by its id.

    Parameters
    ----------
    id : str
        Author-year and variant, one of `catalogue()`; with ``@decayed`` behind it, the
        set after all its radioactive nuclides have decayed.
    solar : str
        Mixture for the birth composition where the set itself gives none.

    Returns
    -------
    YieldSet

    Raises
    ------
    InputError
        No such set, or its figures don't match their checksum.

    Examples
    --------
    >>> "Be7" in load("karakas-2010").species, "Be7" in load("karakas-2010@decayed").species
    (True, False)
    >>> load("nomoto-1997-w7").slices[0].ejected.round(3)
    array([1.374])
    """
    if id in _catalogue():
        return _load(id, solar)
    if store.holds(id):
        return store.load(id, solar)
    if id.endswith(DECAYED):
        from .decay import decayed

        return replace(decayed(load(id.removesuffix(DECAYED), solar)), id=id)
    raise InputError(f"yield set {id!r} isn't known", mend=nearest(id, catalogue()))


@lru_cache(maxsize=128)
def _load(id: str, solar: str) -> YieldSet:
    """Load a shipped set; its figures don't change while a process runs."""
    info, figures = _printed(id)
    _, variant = _catalogue()[id]
    joined = "\n".join(f"{n} {d}" for n, d in sorted(info["checksums"].items()))
    checksum = hashlib.sha256(f"{joined}\n{variant}".encode()).hexdigest()
    grid = build(id, info, figures, solar, checksum)
    if "continue" in info:
        lower = _load(info["continue"]["from"], solar)
        grid = _continue(grid, lower, float(info["continue"]["masses_up_to"]))
    return grid


def _continue(upper: YieldSet, lower: YieldSet, top: float) -> YieldSet:
    """Put the models of another set, up to a mass, under those of a set that begins above."""
    if upper.species != lower.species or upper.metallicities != lower.metallicities:
        raise InputError(f"can't continue {lower.id}: other species or metallicities", where=upper.id)
    slices = []
    for a, b in zip(lower.slices, upper.slices, strict=True):
        keep = a.mass <= top
        parts: dict[str, Any] = {
            name: np.concatenate([getattr(a, name)[keep], getattr(b, name)])
            for name in ("mass", "ejected", "wind", "total", "net")
        }
        lifetime = None
        if a.lifetime is not None and b.lifetime is not None:
            lifetime = np.concatenate([a.lifetime[keep], b.lifetime])
        slices.append(Slice(b.metallicity, initial=b.initial, lifetime=lifetime, **parts))
    note = f"{upper.id}: models up to {top:g} Msun are those of {lower.id}"
    checksum = hashlib.sha256(f"{lower.checksum} {upper.checksum}".encode()).hexdigest()
    return replace(upper, slices=tuple(slices), notes=(*upper.notes, note), checksum=checksum)


def _info(folder: Traversable) -> dict[str, Any]:
    return tomllib.loads(folder.joinpath("set.toml").read_text(encoding="utf-8"))


def _text(folder: Traversable, name: str, digest: str) -> str:
    data = folder.joinpath(name).read_bytes()
    if hashlib.sha256(data).hexdigest() != digest:
        raise InputError(
            "the figures don't match their checksum",
            where=f"tables/{folder.name}/{name}",
            mend="restore the file as shipped, or correct the checksum in set.toml if the change is meant",
        )
    return data.decode("utf-8")


def _rows(text: str) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(text)))


def _select(rows: list[dict[str, str]], variant: str) -> list[dict[str, str]]:
    """Rows of one variant: those marked with it, and those not marked; all, where none is asked for."""
    if not variant or not rows or "variant" not in rows[0]:
        return rows
    return [r for r in rows if r["variant"] in ("", variant)]
