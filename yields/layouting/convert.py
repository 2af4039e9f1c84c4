"""From gathered texts to figures in Msun: units, logarithms, fractions, metallicity scales, variants."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..errors import InputError
from ..nuclides import parse
from ..readers import figure
from .declared import Layout, Value
from .models import Gathered, Model
from .reading import Reading, Table
from .scales import factor_of, metallicities

Array = NDArray[np.float64]


def readings(
    gathered: Gathered, layout: Layout, sources: Sequence[tuple[str, str]], id: str = ""
) -> tuple[Reading, ...]:
    """Turn gathered models into one reading for each set id of the layout.

    Parameters
    ----------
    gathered : Gathered
    layout : Layout
    sources : sequence of (str, str)
        Name and digest of each file.
    id : str
        Id of the set, in place of the layout's own.

    Returns
    -------
    tuple of Reading

    Raises
    ------
    InputError
        No id, a missing figure, a unit of the wrong dimension, variants that nothing tells apart.
    """
    name = id or layout.id
    if not name:
        raise InputError(
            "the set has no id", where=layout.name, mend="give one with --id, or id = in the layout"
        )
    wanted = _wanted(gathered.models, layout, name)
    return tuple(
        _reading(one, [m for m in gathered.models if _belongs(m, variant)], gathered, layout, sources)
        for one, variant in wanted.items()
    )


def _wanted(models: Sequence[Model], layout: Layout, name: str) -> dict[str, str]:
    """Set ids, and the variant that each selects."""
    there = {m.fields.get("variant", "") for m in models} - {""}
    if len(there) <= 1 and not layout.variant_ids:
        return {name: ""}
    wanted = {name: layout.default_variant} if layout.default_variant else {}
    for one, variant in layout.variant_ids.items():
        wanted[name + one.removeprefix(layout.id) if one.startswith(layout.id) else one] = variant
    if not wanted:
        raise InputError(
            f"several variants: {', '.join(sorted(there)[:8])}",
            where=f"{layout.name} [variants]",
            mend="pick one with default =, or give each an id under [variants.ids]",
        )
    kept = {one: v for one, v in wanted.items() if any(m.fields.get("variant", "") == v for m in models)}
    # a file may hold only models that belong to every variant
    kept = kept or ({name: layout.default_variant} if "" in {m.fields.get("variant") for m in models} else {})
    if not kept:
        raise InputError(
            f"no models of {', '.join(wanted.values())}",
            where=f"{layout.name} [variants]",
            mend=f"the files have {', '.join(sorted(there)[:8])}",
        )
    return kept


def _belongs(model: Model, variant: str) -> bool:
    return not variant or model.fields.get("variant", "") in ("", variant)


def _reading(
    id: str,
    models: Sequence[Model],
    gathered: Gathered,
    layout: Layout,
    sources: Sequence[tuple[str, str]],
) -> Reading:
    warnings = list(gathered.warnings)
    own = _own_figures(models, gathered, layout, warnings)
    species = [s for s in gathered.species if any(s in v for m in models for v in m.values.values())]
    tables = {"models": own}
    fractions: Array | None = None
    by_convention = {v.convention: v for v in layout.yields}
    if "initial" in by_convention:
        text, fractions, converted = _figures(
            models, species, by_convention["initial"], layout, gathered, warnings
        )
        tables["initial"] = _initial(models, species, text, fractions, converted, own, warnings)
    for value in layout.yields:
        if value.convention == "initial":
            continue
        text, numbers, converted = _figures(models, species, value, layout, gathered, warnings)
        scale = _scale(value, own, layout, species, fractions, models, warnings)
        if scale is not None:
            numbers, converted = numbers * scale, True
        name = "net" if value.convention == "net" else "total"
        tables[name] = Table(tuple(species), text, numbers, frozenset(species) if converted else frozenset())
    order = [n for n in ("models", "net", "total", "initial") if n in tables]
    info = _info(id, layout, tables, species, sources)
    return Reading(
        id, info, {n: tables[n] for n in order}, tuple(sources), layout.text, tuple(dict.fromkeys(warnings))
    )


def _figures(
    models: Sequence[Model],
    species: Sequence[str],
    value: Value,
    layout: Layout,
    gathered: Gathered,
    warnings: list[str],
) -> tuple[tuple[tuple[str, ...], ...], Array, bool]:
    """The printed texts of one convention, the figures in Msun, and whether these differ from those."""
    places = [(value.convention, i) for i in range(len(value.columns))]
    texts, filled = [], 0
    numbers = np.zeros((len(models), len(species)))
    for row, model in enumerate(models):
        parts = [model.values.get(place, {}) for place in places]
        line = []
        for column, one in enumerate(species):
            found = [part[one] for part in parts if one in part]
            if not found:
                if layout.blank != "zero":
                    raise InputError(
                        f"no {value.convention} yield of {one} for the model of {model.label}",
                        where=model.where,
                        mend='drop the model or ignore the species; or blank = "zero", if it means that',
                    )
                filled += 1
                line.append("")
                continue
            line.append(found[0] if len(found) == 1 else " + ".join(found))
            numbers[row, column] = _sum(found, value.log10)
        texts.append(tuple(line))
    if filled:
        warnings.append(f"{filled} blank cells of {value.convention} are taken as zero, as the layout says")
    converted = value.log10 or len(places) > 1
    if not np.all(np.isfinite(numbers)):
        raise InputError(f"{value.convention} isn't finite", where=layout.name, mend="check log10 and units")
    if value.convention in ("net", "total") and not value.per_initial_mass:
        factor = factor_of(
            value.unit, gathered.units.get(value.convention, ""), "Msun", value.convention, warnings
        )
        if factor != 1.0:
            numbers, converted = numbers * factor, True
    return tuple(texts), numbers, converted


def _sum(texts: Sequence[str], log10: bool) -> float:
    """The sum of printed figures, which were found readable before."""
    total = 0.0
    for text in texts:
        number = float(figure(text) or 0.0)
        try:
            total += 10.0**number if log10 else number
        except OverflowError:
            return np.inf
    return total


def _scale(
    value: Value,
    own: Table,
    layout: Layout,
    species: Sequence[str],
    fractions: Array | None,
    models: Sequence[Model],
    warnings: list[str],
) -> Array | None:
    """What turns fractions into Msun, shape (models, 1) or (models, species); None where they are Msun."""
    if value.per_initial_mass:
        return _own(own, "mass", layout)[:, None]
    if value.convention not in ("mass_fraction", "production_factor"):
        return None
    ejected = _listed(own, layout, species, fractions)[:, None]
    if value.convention == "mass_fraction":
        return ejected
    assert fractions is not None  # the layout was refused otherwise
    absent = [s for i, s in enumerate(species) if not fractions[:, i].all()]
    if absent:
        warnings.append(
            f"production factors say nothing of {', '.join(absent[:8])}, absent at birth: taken as zero"
        )
    return ejected * fractions


def _listed(own: Table, layout: Layout, species: Sequence[str], fractions: Array | None) -> Array:
    """The ejected mass that the printed fractions are fractions of."""
    if layout.ejected == "printed":
        return _own(own, "ejected", layout)
    if layout.ejected == "birth hydrogen" and fractions is not None and "H1" in species:
        return _own(own, "birth_hydrogen", layout) / fractions[:, list(species).index("H1")]
    if layout.ejected == "mass - remnant":
        before = "final_mass" if layout.covers == "explosion" and "final_mass" in own.columns else "mass"
        return _own(own, before, layout) - _own(own, "remnant", layout)
    raise InputError(
        f"fractions need an ejected mass, which ejected = {layout.ejected!r} doesn't give",
        where=layout.name,
        mend="give [model] remnant or ejected",
    )


def _own(own: Table, name: str, layout: Layout) -> Array:
    if name not in own.columns:
        raise InputError(f"{name} is needed", where=f"{layout.name} [model]", mend=f"say where {name} stands")
    return own.figures[:, own.columns.index(name)]


def _own_figures(models: Sequence[Model], gathered: Gathered, layout: Layout, warnings: list[str]) -> Table:
    """The models' own figures."""
    names = [n for n in ("metallicity", "mass", "variant", "remnant", "ejected") if n in layout.model]
    names += [n for n in ("final_mass", "wind", "lifetime", "birth_hydrogen") if n in layout.model]
    text = [[m.fields.get(n, "") for n in names] for m in models]
    figures = np.full((len(models), len(names)), np.nan)
    converted = set()
    for j, name in enumerate(names):
        if name == "variant":
            continue
        spec = layout.model[name]
        printed = np.array([float(figure(row[j]) or 0.0) for row in text])
        numbers = 10.0**printed if spec.log10 else printed
        if name == "metallicity":
            numbers = metallicities(numbers, spec.scale, spec.solar, layout)
        else:
            unit = "yr" if name == "lifetime" else "Msun"
            numbers = numbers * factor_of(spec.unit, gathered.units.get(name, ""), unit, name, warnings)
        if not np.array_equal(numbers, printed):
            converted.add(name)
        figures[:, j] = numbers
    if "wind" in names:
        j = names.index("wind")
        # the grid wants the mass before the explosion
        figures[:, j] = figures[:, names.index("mass")] - figures[:, j]
        names[j] = "final_mass"
        converted = (converted - {"wind"}) | {"final_mass"}
    return Table(tuple(names), tuple(tuple(r) for r in text), figures, frozenset(converted))


def _initial(
    models: Sequence[Model],
    species: Sequence[str],
    text: Sequence[Sequence[str]],
    fractions: Array,
    converted: bool,
    own: Table,
    warnings: list[str],
) -> Table:
    """A row a metallicity: what most of its models were born with."""
    z = (
        own.figures[:, own.columns.index("metallicity")]
        if "metallicity" in own.columns
        else np.zeros(len(models))
    )
    printed_z = [m.fields.get("metallicity", "0") for m in models]
    rows, figures = [], []
    for one in dict.fromkeys(z.tolist()):
        members = np.flatnonzero(z == one)
        row, values = [printed_z[members[0]]], [one]
        for j, name in enumerate(species):
            most = Counter(fractions[members, j].tolist()).most_common(1)[0][0]
            first = next(i for i in members if fractions[i, j] == most)
            row.append(text[first][j])
            values.append(most)
            for i in members:
                if not np.isclose(fractions[i, j], most, rtol=1e-3, atol=1e-12):
                    warnings.append(
                        f"the model of {models[i].label} starts from {name} {text[i][j]},"
                        f" its siblings from {text[first][j]}, which is used"
                    )
        rows.append(tuple(row))
        figures.append(values)
    kept = frozenset(species) if converted else frozenset()
    kept |= own.converted & {"metallicity"}
    return Table(("metallicity", *species), tuple(rows), np.array(figures), kept)


def _info(
    id: str,
    layout: Layout,
    tables: Mapping[str, Table],
    species: Sequence[str],
    sources: Sequence[tuple[str, str]],
) -> dict[str, Any]:
    unfollowed = _canonical(layout.rest)
    rest = [s for s in species if s in unfollowed]
    followed = [parse(s) for s in species if s not in rest]
    if not followed:
        raise InputError("no species is left", where=layout.name, mend="check [rest] and [ignore]")
    files = ", ".join(name for name, _ in sources)
    yields = " and ".join(c for c in ("net", "total") if c in tables)
    printed = next(tables[c] for c in ("total", "net") if c in tables)
    info: dict[str, Any] = {
        "id": id,
        "kind": layout.kind,
        "summary": layout.about.get("summary", f"Admitted from {files}."),
        "species": "elements" if all(s.is_element for s in followed) else "nuclides",
        "yields": yields,
        "covers": layout.covers,
        "ejected": layout.ejected,
        **{k: v for k, v in layout.about.items() if k != "summary"},
        "figures": {"origin": f"admitted from {files} with the layout {layout.name}"},
        "units": {"mass": "Msun", "yield": "Msun", "lifetime": "yr"},
        "rounding": {"digits": _digits(printed.text)},
    }
    if layout.drop:
        info["figures"]["dropped"] = [
            f"{', '.join(f'{k} = {v}' for k, v in d.where.items())}: {d.why}" for d in layout.drop
        ]
    ignored = [*layout.ignore_columns, *layout.ignore_species]
    if ignored:
        info["figures"]["ignored"] = f"{', '.join(ignored)}: {layout.ignore_why}"
    if rest:
        info["ignore"] = {"columns": rest, "why": layout.rest_why}
    if layout.birth:
        info["birth"] = dict(layout.birth)
    return info


def _canonical(names: Iterable[str]) -> set[str]:
    """Names as printed, and as steelyard writes them where they are species."""
    found = set(names)
    for name in names:
        try:
            found.add(parse(name).name)
        except InputError:
            continue
    return found


def _digits(text: Sequence[Sequence[str]]) -> int:
    """Significant digits of the printed yields: the most that occur in the first models."""
    most = 0
    for cell in (c for row in text[:4] for c in row):
        mantissa = cell.lower().partition("e")[0].partition("d")[0].lstrip("+-−")
        most = max(most, len(mantissa.replace(".", "").lstrip("0")))
    return most
