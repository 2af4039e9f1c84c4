"""What a layout may say: its keys read from TOML, each checked and mistyped ones named."""

from __future__ import annotations

import tomllib
from collections.abc import Iterable, Mapping
from importlib.resources import files
from pathlib import Path
from typing import Any

from ..build import EJECTED_RULES
from ..composition import mixture
from ..errors import InputError, nearest
from ..readers import FORMATS, Options, open_source
from .declared import CONVENTIONS, FIGURES, SCALES, Drop, Layout, ModelField, Value
from .template import Template

PAPER = ("authors", "year", "title", "reference", "doi", "table")

_TOP = (
    *("id", "kind", "summary", "decay", "missing", "covers", "ejected", "blank", "file", "paper"),
    *("read", "model", "yields", "rename", "rest", "ignore", "drop", "birth", "variants"),
)


def shipped_layouts() -> tuple[str, ...]:
    """Return the names of the shipped layouts.

    Examples
    --------
    >>> "kobayashi-2006" in shipped_layouts()
    True
    """
    folder = files("steelyard.yields").joinpath("layouts")
    return tuple(sorted(f.name[:-5] for f in folder.iterdir() if f.name.endswith(".toml")))


def layout(name: str | Path) -> Layout:
    """Load a layout: a shipped one by its name, or a file.

    Parameters
    ----------
    name : str or path-like
        One of `shipped_layouts()`, or the path of a TOML file.

    Returns
    -------
    Layout

    Raises
    ------
    InputError
        No such layout, or a key in it can't be read.

    Examples
    --------
    >>> layout("kobayashi-2006").ejected
    'mass - remnant'
    """
    if str(name) in shipped_layouts():
        text = files("steelyard.yields").joinpath("layouts", f"{name}.toml").read_text(encoding="utf-8")
        return parse_layout(text, str(name))
    path = Path(name)
    if not path.exists() and path.suffix != ".toml" and len(path.parts) == 1:
        raise InputError(
            f"layout {str(name)!r} isn't known",
            mend=f"{nearest(str(name), shipped_layouts())}; or name a TOML file",
        )
    source = open_source(path)
    if len(source.data) > 2**20:
        raise InputError("too large for a layout", where=source.name, mend="name the layout, not the table")
    return parse_layout(source.text, source.name)


def parse_layout(text: str, name: str) -> Layout:
    """Read the text of a layout.

    Parameters
    ----------
    text : str
        TOML.
    name : str
        What to call it in errors.

    Returns
    -------
    Layout

    Raises
    ------
    InputError
        Broken TOML, an unknown or missing key, a value of the wrong kind.
    """
    try:
        raw = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise InputError(
            f"can't be read as TOML: {str(error)[:120]}", where=name, mend="check it there"
        ) from None
    _known(raw, _TOP, name)
    read = _table(raw, "read", name)
    options = _options(read, name)
    model = _model(_table(raw, "model", name), name)
    columns = dict(_table(raw, "yields", name))
    species = _text(columns.pop("species", ""), f"{name} [yields] species")
    values = tuple(_value(c, v, name) for c, v in _checked(columns, CONVENTIONS, f"{name} [yields]").items())
    rest = _named(raw, "rest", ("species",), name)
    ignore = _named(raw, "ignore", ("columns", "species"), name)
    birth, default, ids = _birth(raw, name), *_variants(raw, name)
    covers = raw.get("covers", "explosion" if {"final_mass", "wind"} & set(model) else "life")
    _one_of(covers, ("life", "explosion"), f"{name} covers")
    blank = raw.get("blank", "refuse")
    _one_of(blank, ("refuse", "zero"), f"{name} blank")
    made = Layout(
        name=name,
        id=_text(raw.get("id", ""), f"{name} id"),
        kind=_text(raw.get("kind", ""), f"{name} kind"),
        model=model,
        species=species,
        yields=values,
        covers=covers,
        ejected=_ejected(raw, model, values, name),
        blank=blank,
        format=_one_of(read.get("format", ""), ("", *FORMATS), f"{name} [read] format"),
        options=options,
        heading=_template(read.get("heading"), f"{name} [read] heading"),
        file=_template(raw.get("file"), f"{name} file"),
        rename={k: _text(v, f"{name} [rename] {k}") for k, v in _table(raw, "rename", name).items()},
        rest=rest["species"],
        rest_why=rest["why"],
        ignore_columns=ignore["columns"],
        ignore_species=ignore["species"],
        ignore_why=ignore["why"],
        drop=_drops(raw, name),
        birth=birth,
        default_variant=default,
        variant_ids=ids,
        about=_about(raw, name),
        text=text,
    )
    _sense(made)
    return made


def _sense(made: Layout) -> None:
    """Refuse layouts that lack what every set needs."""
    conventions = {v.convention for v in made.yields}
    if not conventions - {"initial"}:
        raise InputError(
            "no column of yields",
            where=f"{made.name} [yields]",
            mend="give net, total or mass_fraction = ...",
        )
    if len(conventions & {"total", "mass_fraction", "production_factor"}) > 1:
        raise InputError(
            "total yields are given twice", where=f"{made.name} [yields]", mend="keep one of them"
        )
    if not made.kind:
        raise InputError(
            "kind is missing",
            where=made.name,
            mend="give agb, core-collapse, thermonuclear or a name of yours",
        )
    if "mass" in made.model and "metallicity" not in made.model:
        raise InputError(
            "metallicity is missing",
            where=f"{made.name} [model]",
            mend="{ constant = 0.014 } will do for one",
        )
    gaps = {f for v in made.yields for t in v.columns for f in t.fields}
    if not made.species and "species" not in gaps:
        raise InputError(
            "where species stand isn't said",
            where=f"{made.name} [yields]",
            mend='give species = "its column", or a pattern with {species}',
        )
    if made.covers == "explosion" and "mass" in made.model and not {"final_mass", "wind"} & set(made.model):
        raise InputError(
            "an explosion needs the mass before it",
            where=f"{made.name} [model]",
            mend="give final_mass or wind, or covers = 'life'",
        )
    if "production_factor" in conventions and "initial" not in conventions:
        raise InputError(
            "production factors need the composition at birth",
            where=f"{made.name} [yields]",
            mend="give initial = the column of X0",
        )


def _ejected(
    raw: Mapping[str, Any], model: Mapping[str, ModelField], values: Iterable[Value], name: str
) -> str:
    if "ejected" in raw:
        return _one_of(raw["ejected"], EJECTED_RULES, f"{name} ejected")
    for key, rule in (
        ("ejected", "printed"),
        ("remnant", "mass - remnant"),
        ("birth_hydrogen", "birth hydrogen"),
    ):
        if key in model:
            return rule
    if any(v.convention == "total" for v in values):
        return "sum of total"
    raise InputError(
        "the ejected mass of a model can't be had",
        where=f"{name} [model]",
        mend="give remnant, ejected or birth_hydrogen",
    )


def _model(table: Mapping[str, Any], name: str) -> dict[str, ModelField]:
    fields = {}
    for key, given in _checked(table, (*FIGURES, "variant"), f"{name} [model]").items():
        where = f"{name} [model] {key}"
        if isinstance(given, str):
            fields[key] = ModelField(key, at=given)
            continue
        if isinstance(given, (int, float)) and not isinstance(given, bool):
            fields[key] = ModelField(key, constant=repr(given))
            continue
        known = ["field", "row", "column", "constant", "unit", "log10", "values"]
        known += ["scale", "solar"] if key == "metallicity" else []
        _known(_is_table(given, where), known, where)
        if ("field" in given) + ("row" in given) + ("constant" in given) != 1:
            raise InputError("needs one of field, row and constant", where=where, mend="say where it stands")
        solar = given.get("solar")
        if solar is not None and not (isinstance(solar, float) and 0 < solar < 0.1):
            raise InputError(
                f"solar = {solar!r} is no metallicity of the Sun", where=where, mend="such as 0.0134"
            )
        fields[key] = ModelField(
            key,
            at=_text(given.get("field", ""), where),
            row=_text(given.get("row", ""), where),
            column=_text(given.get("column", ""), where),
            constant=str(given.get("constant", "")),
            unit=_text(given.get("unit", ""), where),
            log10=_flag(given.get("log10", False), f"{where} log10"),
            scale=_one_of(given.get("scale", "Z"), SCALES, f"{where} scale"),
            solar=solar,
            values={k: _text(v, where) for k, v in _is_table(given.get("values", {}), where).items()},
        )
    return fields


def _value(convention: str, given: Any, name: str) -> Value:
    where = f"{name} [yields] {convention}"
    if isinstance(given, str):
        given = {"column": given}
    given = _is_table(given, where)
    known = ["column", "unit", "log10"] + (["per_initial_mass"] if convention in ("net", "total") else [])
    _known(given, known, where)
    columns = given.get("column")
    columns = [columns] if isinstance(columns, str) else columns
    if not isinstance(columns, list) or not columns:
        raise InputError("names no column", where=where, mend='give column = "its name"')
    return Value(
        convention,
        tuple(Template(_text(c, where), where) for c in columns),
        unit=_text(given.get("unit", ""), where),
        log10=_flag(given.get("log10", False), f"{where} log10"),
        per_initial_mass=_flag(given.get("per_initial_mass", False), f"{where} per_initial_mass"),
    )


def _options(read: Mapping[str, Any], name: str) -> Options:
    where = f"{name} [read]"
    known = ("format", "columns", "bytes", "table", "readme", "skip", "delimiter", "heading")
    _known(read, known, where)
    places = {}
    for column, span in _is_table(read.get("bytes", {}), f"{where} bytes").items():
        good = isinstance(span, list) and len(span) == 2 and all(type(b) is int for b in span)
        if not good or not 1 <= span[0] <= span[1] <= 100_000:
            raise InputError(
                f"bytes of {column} aren't [first, last]: {span!r}", where=where, mend="count from 1"
            )
        places[column] = (span[0], span[1])
    skip = read.get("skip", 0)
    if type(skip) is not int or skip < 0:
        raise InputError(f"skip = {skip!r} is no number of lines", where=where, mend="give a whole number")
    readme = _text(read.get("readme", ""), f"{where} readme")
    if readme and Path(readme).name != readme:
        raise InputError(
            f"readme = {readme!r} isn't beside the data", where=where, mend="name a file, no folder"
        )
    return Options(
        columns=tuple(_texts(read.get("columns", []), f"{where} columns")),
        bytes=places,
        table=str(read.get("table", "")),
        readme=readme,
        skip=skip,
        delimiter=_text(read.get("delimiter", ""), f"{where} delimiter"),
    )


def _named(raw: Mapping[str, Any], key: str, lists: tuple[str, ...], name: str) -> dict[str, Any]:
    where = f"{name} [{key}]"
    table = _table(raw, key, name)
    _known(table, (*lists, "why"), where)
    if table and not table.get("why"):
        raise InputError("doesn't say why", where=where, mend='add why = "..."')
    found: dict[str, Any] = {one: tuple(_texts(table.get(one, []), f"{where} {one}")) for one in lists}
    return found | {"why": _text(table.get("why", ""), where)}


def _drops(raw: Mapping[str, Any], name: str) -> tuple[Drop, ...]:
    given = raw.get("drop", [])
    if not isinstance(given, list):
        raise InputError("drop isn't a list of tables", where=name, mend="write [[drop]]")
    drops = []
    for number, one in enumerate(given, start=1):
        where = f"{name} [[drop]] {number}"
        _known(_is_table(one, where), ("where", "why"), where)
        conditions = _is_table(one.get("where", {}), where)
        if not conditions or not one.get("why"):
            raise InputError("needs where = { field = value } and why", where=where, mend="give both")
        drops.append(Drop({k: str(v) for k, v in conditions.items()}, _text(one["why"], where)))
    return tuple(drops)


def _birth(raw: Mapping[str, Any], name: str) -> Mapping[str, Any]:
    table = _table(raw, "birth", name)
    _known(table, ("mixture", "enhancement", "below", "source"), f"{name} [birth]")
    if "mixture" in table:
        mixture(_text(table["mixture"], f"{name} [birth] mixture"))
    return table


def _variants(raw: Mapping[str, Any], name: str) -> tuple[str, Mapping[str, str]]:
    table = _table(raw, "variants", name)
    _known(table, ("default", "ids"), f"{name} [variants]")
    ids = _is_table(table.get("ids", {}), f"{name} [variants.ids]")
    return _text(table.get("default", ""), f"{name} [variants] default"), {k: str(v) for k, v in ids.items()}


def _about(raw: Mapping[str, Any], name: str) -> dict[str, Any]:
    """What is said of the set and not of the table."""
    about = {key: _text(raw[key], f"{name} {key}") for key in ("summary", "decay", "missing") if key in raw}
    papers = raw.get("paper", [])
    for paper in [papers] if isinstance(papers, dict) else papers:
        _known(_is_table(paper, f"{name} [paper]"), PAPER, f"{name} [paper]")
        for key in ("authors", "year", "reference"):
            if key not in paper:
                raise InputError(
                    f"{key} is missing", where=f"{name} [paper]", mend="give it, or leave out [paper]"
                )
    return about | ({"paper": papers} if papers else {})


def _checked(table: Mapping[str, Any], known: Iterable[str], where: str) -> Mapping[str, Any]:
    _known(table, known, where)
    return table


def _known(table: Mapping[str, Any], known: Iterable[str], where: str) -> None:
    known = list(known)
    for key in table:
        if key not in known:
            raise InputError(f"key {key[:60]!r} isn't known", where=where, mend=nearest(key[:60], known))


def _table(raw: Mapping[str, Any], key: str, name: str) -> Mapping[str, Any]:
    return _is_table(raw.get(key, {}), f"{name} [{key}]")


def _is_table(value: Any, where: str) -> Mapping[str, Any]:
    if not isinstance(value, dict):
        raise InputError(f"isn't a table: {str(value)[:60]!r}", where=where, mend="write { key = value }")
    return value


def _text(value: Any, where: str) -> str:
    if isinstance(value, str):
        return value
    raise InputError(f"isn't text: {str(value)[:60]}", where=where, mend="put it in quotes")


def _texts(value: Any, where: str) -> list[str]:
    if not isinstance(value, list):
        raise InputError(f"isn't a list: {str(value)[:60]!r}", where=where, mend='write ["a", "b"]')
    return [_text(one, where) for one in value]


def _flag(value: Any, where: str) -> bool:
    if isinstance(value, bool):
        return value
    raise InputError(f"isn't true or false: {str(value)[:60]}", where=where, mend="write true or false")


def _one_of(value: Any, known: tuple[str, ...], where: str) -> str:
    if value in known and isinstance(value, str):
        return value
    raise InputError(f"{str(value)[:60]!r} isn't known", where=where, mend=nearest(str(value)[:60], known))


def _template(value: Any, where: str) -> Template | None:
    return None if value is None else Template(_text(value, where), where)
