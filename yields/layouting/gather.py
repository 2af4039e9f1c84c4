"""From sheets to models: every model's own figures and yields, still as printed, by the layout."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import partial

from ..errors import InputError, nearest
from ..readers import Sheet, figure
from .declared import Drop, Layout, ModelField
from .models import Gathered, Model, Names, Place
from .template import Template

Key = tuple[float, float, str]

AXES = ("metallicity", "mass", "variant")


@dataclass(frozen=True)
class _Column:
    """A column of yields: what it holds and what its name says."""

    index: int
    place: Place
    species: str | None
    gaps: Mapping[str, str]


def gather(sheets: Sequence[Sheet], layout: Layout) -> Gathered:
    """Sort the cells of sheets into models.

    Parameters
    ----------
    sheets : sequence of Sheet
        All tables of all files of one set.
    layout : Layout

    Returns
    -------
    Gathered

    Raises
    ------
    InputError
        A column isn't there, a cell can't be read, a yield is given twice, a model lacks a figure.
    """
    names = Names(layout)
    models: dict[Key, Model] = {}
    beside: dict[Key, dict[str, str]] = {}
    units: dict[str, str] = {}
    warnings: list[str] = []
    dropped = dict.fromkeys(range(len(layout.drop)), 0)
    columns = [_columns(sheet, layout, names) for sheet in sheets]
    if not any(columns):
        raise _no_column(sheets[0], layout)
    for sheet, found in zip(sheets, columns, strict=True):
        walk = partial(_walk, sheet, layout, _outer(sheet, layout), found)
        if not found:
            if not any(spec.at in sheet.columns for spec in layout.model.values() if spec.at):
                warnings.append(f"{sheet.where}: none of the layout's columns; left out")
                continue
            for _, row, key, fields in walk(dropped):
                _set_fields(beside.setdefault(key, {}), sheet, layout, row, fields)
            continue
        _units(units, sheet, layout, found)
        for group, row, key, fields in walk(dropped):
            model = models.setdefault(key, Model(sheet.at(row)))
            _set_fields(model.fields, sheet, layout, row, fields)
            _set_values(model, sheet, layout, names, row, fields, group)
    for number, times in dropped.items():
        if not times:
            conditions = ", ".join(f"{k} = {v}" for k, v in layout.drop[number].where.items())
            warnings.append(f"nothing to drop for {conditions}")
    if not models:
        raise InputError("every model is dropped", where=layout.name, mend="check [[drop]]")
    for key, model in models.items():
        model.fields = {**beside.get(key, {}), **model.fields}
        for name, spec in layout.model.items():
            if name not in model.fields:
                place = spec.at or spec.row or spec.column
                raise InputError(
                    f"no {name} for the model of {model.label}: {place!r} isn't there",
                    where=model.where,
                    mend=nearest(place, _places(sheets)),
                )
    return Gathered(list(models.values()), list(names.order), units, warnings)


def _walk(
    sheet: Sheet,
    layout: Layout,
    outer: Mapping[str, str],
    columns: Sequence[_Column],
    dropped: dict[int, int],
) -> Iterator[tuple[list[_Column], int, Key, dict[str, str]]]:
    """Every row, and every group of its columns that belong to one model, with the fields it can see."""
    groups: dict[tuple[tuple[str, str], ...], list[_Column]] = {}
    for one in columns:
        groups.setdefault(tuple(sorted(one.gaps.items())), []).append(one)
    groups = groups or {(): []}
    specs = [layout.model[a] for a in AXES if a in layout.model]
    axis_rows = {spec.row: spec for spec in specs if spec.row}
    at_species = sheet.columns.index(layout.species) if layout.species in sheet.columns else -1
    current: dict[tuple[int, str], str] = {}
    for row, cells in enumerate(sheet.rows):
        seen = outer | dict(zip(sheet.columns, cells, strict=True))
        printed = cells[at_species] if at_species >= 0 else ""
        if printed in axis_rows:
            for number, group in enumerate(groups.values()):
                current[number, axis_rows[printed].name] = cells[group[0].index]
            continue
        if printed in layout.ignore_species:
            continue
        for number, (gaps, group) in enumerate(groups.items()):
            fields = seen | dict(gaps)
            for spec in axis_rows.values():
                fields[f"\0{spec.name}"] = current.get((number, spec.name), "")
            axes = {spec.name: _axis(spec, fields, sheet, row, group) for spec in specs}
            drop = _dropped(layout.drop, fields, axes, sheet, row) if layout.drop else None
            if drop is not None:
                dropped[drop] += 1
                continue
            key = (
                _number(axes.get("metallicity", "0"), "metallicity", sheet, row),
                _number(axes.get("mass", "0"), "mass", sheet, row),
                axes.get("variant", ""),
            )
            yield group, row, key, fields | {f"\0{k}": v for k, v in axes.items()}


def _outer(sheet: Sheet, layout: Layout) -> dict[str, str]:
    """Fields that hold for a whole sheet: from its heading and the name of its file."""
    found: dict[str, str] = {}
    if layout.heading:
        gaps = layout.heading.match(sheet.heading)
        if gaps is None:
            raise InputError(
                f"heading {sheet.heading[:80]!r} isn't as {layout.heading.text!r}",
                where=sheet.at(0),
                mend="correct the line, or [read] heading of the layout",
            )
        found |= gaps
    if layout.file:
        gaps = layout.file.match(sheet.file)
        if gaps is None:
            raise InputError(
                f"the file's name isn't as {layout.file.text!r}", where=sheet.file, mend="rename the file"
            )
        found |= gaps
    return found


def _columns(sheet: Sheet, layout: Layout, names: Names) -> list[_Column]:
    """The columns of yields of one sheet; none where it has none of them."""
    taken = {layout.species, *layout.ignore_columns}
    for spec in layout.model.values():
        taken |= {spec.at, spec.column}
    found: list[_Column] = []
    absent: list[Template] = []
    wanted = [(v.convention, i, t) for v in layout.yields for i, t in enumerate(v.columns)]
    # the pattern with most text of its own picks first, so that "{species}" leaves "net_{species}" alone
    claimed: set[int] = set()
    for convention, number, template in sorted(
        wanted, key=lambda w: -len(w[2].text) + sum(map(len, w[2].gaps))
    ):
        before = len(found)
        for index, column in enumerate(sheet.columns):
            gaps = template.match(column)
            if gaps is None or (template.gaps and (column in taken or index in claimed)):
                continue
            species = None
            if "species" in gaps:
                species = names(gaps.pop("species"), f"{sheet.where} column {column}")
                if species is None:
                    continue
            claimed.add(index)
            found.append(_Column(index, (convention, number), species, gaps))
        if len(found) == before:
            absent.append(template)
    if found and absent:
        raise InputError(
            f"no column {absent[0].text!r}", where=sheet.where, mend=nearest(absent[0].text, sheet.columns)
        )
    return found


def _axis(
    spec: ModelField, fields: Mapping[str, str], sheet: Sheet, row: int, group: Sequence[_Column]
) -> str:
    if spec.constant:
        return spec.constant
    name = f"\0{spec.name}" if spec.row else spec.at
    if name not in fields:
        known = [f for f in fields if not f.startswith("\0")]
        raise InputError(
            f"no {spec.name}: {spec.at!r} isn't there", where=sheet.where, mend=nearest(name, known)
        )
    text = fields[name].strip()
    text = spec.values.get(text, text)
    if not text and spec.name != "variant":
        column = sheet.columns[group[0].index] if spec.row and group else spec.at
        raise InputError(
            f"no {spec.name} in column {column!r}", where=sheet.at(row), mend="give every model its own"
        )
    return text


def _dropped(
    drops: Sequence[Drop], fields: Mapping[str, str], axes: Mapping[str, str], sheet: Sheet, row: int
) -> int | None:
    for number, drop in enumerate(drops):
        for name in drop.where:
            if name not in fields and name not in axes:
                known = [*axes, *(f for f in fields if not f.startswith("\0"))]
                raise InputError(
                    f"no field {name!r}", where=f"[[drop]] {number + 1}", mend=nearest(name, known)
                )
        if all(_same(fields.get(k, axes.get(k, "")), v) for k, v in drop.where.items()):
            return number
    return None


def _same(a: str, b: str) -> bool:
    try:
        x, y = figure(a), figure(b)
    except ValueError:
        return a.strip().casefold() == b.strip().casefold()
    return x == y if x is None or y is None else float(x) == float(y)


def _set_fields(
    into: dict[str, str], sheet: Sheet, layout: Layout, row: int, fields: Mapping[str, str]
) -> None:
    """Keep a model's own figures that stand in this row, refusing a second, different one."""
    for name, spec in layout.model.items():
        if name in AXES:
            text = fields[f"\0{name}"]
            into.setdefault(name, text)
            continue
        if spec.row:
            continue
        text = spec.constant or fields.get(spec.at, "").strip()
        text = spec.values.get(text, text)
        if text:
            _put(into, name, text, sheet, row)


def _put(into: dict[str, str], name: str, text: str, sheet: Sheet, row: int) -> None:
    if name in into and not _same(into[name], text):
        raise InputError(
            f"{name} of one model is {text}, and {into[name]} before",
            where=sheet.at(row),
            mend="tell two models of one mass apart with [model] variant, or leave one out with [[drop]]",
        )
    if name not in into:
        _number(text, name, sheet, row)
        into[name] = text


def _set_values(
    model: Model,
    sheet: Sheet,
    layout: Layout,
    names: Names,
    row: int,
    fields: Mapping[str, str],
    group: Sequence[_Column],
) -> None:
    cells = sheet.rows[row]
    printed = fields.get(layout.species, "").strip() if layout.species else ""
    for name, spec in layout.model.items():
        if spec.row and spec.row == printed and name not in AXES:
            index = sheet.columns.index(spec.column) if spec.column in sheet.columns else group[0].index
            if spec.column and spec.column not in sheet.columns:
                raise InputError(
                    f"no column {spec.column!r}", where=sheet.where, mend=nearest(spec.column, sheet.columns)
                )
            _put(model.fields, name, cells[index].strip(), sheet, row)
            if not spec.column:
                return
    common = names(printed, sheet.at(row)) if layout.species else None
    for one in group:
        species = one.species or common
        if species is None:
            continue
        text = cells[one.index]
        try:
            blank = figure(text) is None
        except ValueError:
            raise _no_number(text, sheet, row, one.index) from None
        if blank:
            continue
        values = model.values.setdefault(one.place, {})
        if species in values:
            raise InputError(
                f"{species} is given twice for the model of {model.label}",
                where=f"{sheet.at(row)} column {sheet.columns[one.index]}",
                mend="tell two models of one mass apart with [model] variant, or leave one out with [[drop]]",
            )
        values[species] = text


def _units(units: dict[str, str], sheet: Sheet, layout: Layout, columns: Sequence[_Column]) -> None:
    """Keep the units that the file itself declares, for yields and for the models' own figures."""
    stated = [(one.place[0], sheet.units.get(sheet.columns[one.index], "")) for one in columns]
    for name, spec in layout.model.items():
        column = spec.at or spec.column or (sheet.columns[columns[0].index] if spec.row else "")
        stated.append((name, sheet.units.get(column, "")))
    for name, unit in stated:
        if unit and units.setdefault(name, unit) != unit:
            raise InputError(
                f"{name} stands in {units[name]} and in {unit}", where=sheet.where, mend="admit them apart"
            )


def _number(text: str, name: str, sheet: Sheet, row: int) -> float:
    try:
        found = figure(text)
    except ValueError:
        found = None
    if found is None:
        raise InputError(
            f"{name} {text[:40]!r} isn't a number", where=sheet.at(row), mend="correct it, or the layout"
        )
    return float(found)


def _no_number(text: str, sheet: Sheet, row: int, column: int) -> InputError:
    return InputError(
        f"{text[:40]!r} isn't a number",
        where=f"{sheet.at(row)} column {sheet.columns[column]}",
        mend="correct it, or put '...' where there is no value",
    )


def _no_column(sheet: Sheet, layout: Layout) -> InputError:
    wanted = layout.yields[0].columns[0].text
    return InputError(f"no column {wanted!r}", where=sheet.where, mend=nearest(wanted, sheet.columns))


def _places(sheets: Sequence[Sheet]) -> list[str]:
    return list(dict.fromkeys(c for sheet in sheets for c in sheet.columns))
