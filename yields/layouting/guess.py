"""A first layout for a table never seen: from names, signs and sums of its columns. A person checks it."""

from __future__ import annotations

import re
from collections.abc import Sequence
from functools import lru_cache
from pathlib import Path

import numpy as np

from ..errors import InputError
from ..nuclides import parse
from ..readers import Sheet, detect, figure, is_figure, open_source, read
from .proposal import Draft, proposal
from .tell import Column, tell
from .template import Template

#: names that papers give to the figures of a model, looked for in this order
NAMES = (
    ("metallicity", r"z|z0|z_?i|z_?ini(tial)?|metallicity|metal|\[?fe/h\]?|feh"),
    ("final_mass", r"m_?pre(sn)?_?|m_?presn|pre_?sn_?mass|final_?mass_?before.*|m_?fin(al)?_?before.*"),
    ("remnant", r"m_?rem(nant)?_?|remnant(_?mass)?|rem|m_?cut_?|mass_?cut|m_?core|m_?wd|m_?ns|m1"),
    ("ejected", r"m_?ej(ected|ecta)?_?|ejected(_?mass)?|ejecta|m_?lost|mass_?lost|m_?expelled"),
    ("final", r"m_?f(in(al)?)?_?|final_?mass|mfinal"),
    ("lifetime", r"life_?time|lifetime|t_?life|tau|age|t_?ms|t_?tot"),
    ("mass", r"m|m0|m_?i|m_?ini(t(ial)?)?_?|initial_?mass|mass|m_?zams_?|zams(_?mass)?|m_?star|m_?prog"),
    ("variant", r"model|variant|case|mass_?loss|rotation|v_?rot|vrot|energy|e_?exp"),
)

_NUMBER = re.compile(r"(?<![A-Za-z0-9_.])[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?(?![0-9.])")
_KEY = re.compile(r"([A-Za-z_][A-Za-z_0-9()\[\]/]*)\s*[=:]?\s*$")
_PATTERN = re.compile(r"(.*?)(\d+(?:\.\d*)?)(.*)")
_SUMS = re.compile(r"(total|sum|all)\b.*", re.IGNORECASE)


def guess(path: str | Path, format: str = "") -> str:
    r"""Propose a layout for a file.

    Parameters
    ----------
    path : path-like
    format : str
        Format of the file, if it can't be told.

    Returns
    -------
    str
        TOML with comments, to be checked and completed by hand.

    Raises
    ------
    InputError
        The file can't be read, or nothing in it looks like species.

    Examples
    --------
    >>> import tempfile, pathlib
    >>> file = pathlib.Path(tempfile.mkdtemp()) / "invented.csv"
    >>> _ = file.write_text("mass,Z,remnant,C12,O16\n1.0,0.02,0.6,-1.5E-03,3.9E-03\n")
    >>> print(guess(file).partition("[yields]")[2].strip().splitlines()[0])
    net = "{species}"      # there are negative figures
    """
    source = open_source(path)
    chosen = format or detect(source)
    sheets = read(source, chosen)
    draft = Draft(sheets, chosen)
    if sheets[0].heading and chosen == "block":
        _headings(draft)
    species = _species_column(sheets[0])
    if not species:
        _wide(draft)
    elif not _across(draft, species):
        _long(draft, species)
    return proposal(draft, source.name)


def role(name: str) -> str:
    """Which figure of a model a name stands for; empty where none.

    Examples
    --------
    >>> role("M_ini"), role("Z0"), role("M_cut_"), role("C12")
    ('mass', 'metallicity', 'remnant', '')
    """
    bare = name.strip().strip("#").replace(" ", "_").casefold()
    for key, pattern in NAMES:
        if re.fullmatch(pattern, bare):
            return key
    return ""


@lru_cache(maxsize=4096)
def _is_species(text: str) -> bool:
    # saying what an unknown name could have meant takes long: figures and sentences aren't asked about
    if not 0 < len(text) <= 24 or is_figure(text):
        return False
    try:
        parse(text)
    except InputError:
        return False
    return True


def _species_column(sheet: Sheet) -> str:
    best, share = "", 0.6
    for index, name in enumerate(sheet.columns):
        cells = [row[index] for row in sheet.rows[:500]]
        hits = sum(_is_species(c) for c in cells) / len(cells)
        # a column of one word is a label, unless the table has one row
        if hits >= share and (len(set(cells)) > 1 or len(cells) == 1):
            best, share = name, hits + 1e-9
    return best


def _headings(draft: Draft) -> None:
    """A pattern for the headings of the blocks: what follows a known name, or stands before Msun."""
    first = draft.sheets[0].heading
    text, end, taken = "", 0, set()
    for match in _NUMBER.finditer(first):
        before, after = first[: match.start()], first[match.end() :]
        key = _KEY.search(before)
        found = role(key[1]) if key else ""
        found = "remnant" if found == "final" else found
        if not found and re.match(r"\s*M(_?sun|sol)?\b", after, re.IGNORECASE):
            found = "mass"
        if not found or found in taken or found == "variant":
            continue
        taken.add(found)
        text += first[end : match.start()] + "{" + found + "}"
        end = match.end()
    tail = first[end:]
    texts = [text + tail, text + " {variant}", text + "{}"]
    for candidate in texts:
        try:
            template = Template(candidate)
        except InputError:
            continue
        gaps = [template.match(s.heading) for s in draft.sheets]
        if taken and all(g is not None for g in gaps):
            draft.heading = candidate
            draft.model |= {key: key for key in template.fields}
            if "mass" in taken:
                draft.masses = [float(figure(g["mass"]) or 0.0) for g in gaps if g]
            return
    raise InputError(
        f"can't tell mass and metallicity in the heading {first[:80]!r}",
        where=draft.sheets[0].at(0),
        mend="write the layout by hand, beginning with the shipped one called block",
    )


def _axes(draft: Draft, columns: Sequence[str]) -> None:
    """Columns whose names are those of a model's own figures."""
    for column in columns:
        key = role(column)
        if key and key not in draft.model:
            draft.model[key] = column
    if "final" in draft.model:
        last = draft.model.pop("final")
        draft.model["final_mass" if "remnant" in draft.model else "remnant"] = last


def _wide(draft: Draft) -> None:
    sheet = draft.sheets[0]
    prefixes: dict[str, list[str]] = {}
    for column in sheet.columns:
        if role(column):
            continue
        for prefix in _prefixes(column):
            if _is_species(column[len(prefix) :]):
                prefixes.setdefault(prefix, []).append(column)
                break
    prefixes = {p: c for p, c in prefixes.items() if len(c) > 1} or prefixes
    if not prefixes:
        raise InputError(
            "neither a column of species nor columns named after species",
            where=sheet.where,
            mend="name the columns with [read] columns, or write the layout by hand",
        )
    used = [c for group in prefixes.values() for c in group]
    _axes(draft, [c for c in sheet.columns if c not in used])
    mass = _numbers(sheet, draft.model.get("mass", ""))
    draft.masses = [] if mass is None else mass.tolist()
    for prefix, group in prefixes.items():
        table = np.column_stack([_filled(sheet, c) for c in group])
        convention, why = tell(prefix, [Column(prefix, row) for row in table], draft.masses)
        _take(draft, convention, prefix + "{species}", why)
    own = set(draft.model.values())
    draft.ignore_columns = [c for c in sheet.columns if c not in used and c not in own]


def _prefixes(column: str) -> list[str]:
    cuts = [m.end() for m in re.finditer(r"[_:.\s(-]", column)]
    return ["", *(column[:cut] for cut in cuts)]


def _across(draft: Draft, species: str) -> bool:
    """Columns that each hold a model: their names differ in one number."""
    sheet = draft.sheets[0]
    shapes: dict[tuple[str, str], list[tuple[str, float]]] = {}
    for column in sheet.columns:
        if column == species or not (match := _PATTERN.fullmatch(column)):
            continue
        if _numbers(sheet, column) is not None:
            shapes.setdefault((match[1], match[3]), []).append((column, float(match[2])))
    if not shapes:
        return False
    (before, after), group = max(shapes.items(), key=lambda s: len(s[1]))
    masses = [m for _, m in group]
    if len(group) < 2 or sorted(masses) != masses or not 0.05 < min(masses) <= max(masses) < 1000:
        return False
    names = [c for c, _ in group]
    _axes(draft, [c for c in sheet.columns if c not in names and c != species])
    draft.model["mass"] = "mass"
    draft.masses = masses
    at = sheet.columns.index(species)
    rows = list(dict.fromkeys(row[at] for row in sheet.rows))
    own = {role(name): name for name in rows if role(name) and not _is_species(name)}
    if "final" in own:
        last = own.pop("final")
        own["final_mass" if "remnant" in own else "remnant"] = last
    for key, name in own.items():
        draft.model[key] = f"row {name}"
    _leftovers(draft, [r for r in rows if r not in own.values()])
    followed = [i for i, row in enumerate(sheet.rows) if _is_species(row[at])]
    blocks = _blocks([sheet.rows[i][at] for i in followed])
    arrays = [Column(c, _filled(sheet, c)[np.array(followed)][part]) for part in blocks for c in names]
    convention, why = tell(before, arrays, masses * len(blocks))
    draft.yields["species"] = species
    _take(draft, convention, f"{before}{{mass}}{after}", why)
    return True


def _blocks(names: Sequence[str]) -> list[slice]:
    """Stretches of rows in which no species comes twice."""
    starts, seen = [0], set()
    for i, name in enumerate(names):
        if name in seen:
            starts.append(i)
            seen = set()
        seen.add(name)
    return [slice(a, b) for a, b in zip(starts, [*starts[1:], len(names)], strict=True)]


def _long(draft: Draft, species: str) -> None:
    sheet = draft.sheets[0]
    if not draft.heading:
        _axes(draft, [c for c in sheet.columns if c != species])
    draft.yields["species"] = species
    at = sheet.columns.index(species)
    names = list(dict.fromkeys(row[at] for s in draft.sheets for row in s.rows))
    _leftovers(draft, names)
    parts = _models(draft, species)
    own = set(draft.model.values()) | {species}
    kept = [c for c in sheet.columns if c not in own and _numbers(sheet, c) is not None]
    columns = {c: [Column(c, _filled(s, c)[rows]) for s, rows in parts] for c in kept}
    told: dict[str, str] = {}
    for name, arrays in columns.items():
        convention, why = tell(name, arrays, draft.masses)
        if not convention:
            continue
        if convention in told:
            draft.spare.append(f'{convention} = "{name}"')
            continue
        told[convention] = name
        _take(draft, convention, name, why)
    _settle(draft, told, columns, at, parts)


def _settle(
    draft: Draft,
    told: dict[str, str],
    columns: dict[str, list[Column]],
    at: int,
    parts: list[tuple[Sheet, slice | np.ndarray]],
) -> None:
    """Of several columns that say the same, keep the most telling ones."""
    if {"net", "initial"} <= set(told):
        # the mass that was there at birth gives the ejected mass: its hydrogen over X0
        for name, arrays in columns.items():
            at_birth = [
                t.values - n.values
                for t, n in zip(columns.get(told.get("total", ""), []), columns[told["net"]], strict=False)
            ]
            if name == told.get("total") or not at_birth:
                continue
            if all(
                np.allclose(a.values, b, rtol=1e-3, atol=1e-7) for a, b in zip(arrays, at_birth, strict=True)
            ):
                printed = [row[at] for row in parts[0][0].rows]
                hydrogen = next((p for p in printed if _is_species(p) and parse(p).name == "H1"), "")
                if hydrogen:
                    draft.model["birth_hydrogen"] = f"row {hydrogen} in {name}"
                    draft.notes["birth_hydrogen"] = "total - net; over X0 it gives the ejected mass"
                draft.spare = [s for s in draft.spare if not s.endswith(f'"{name}"')]
        for convention in ("total", "mass_fraction"):
            if convention in draft.yields:
                draft.spare.append(f'{convention} = "{draft.yields.pop(convention)}"')
    elif "total" in told and "mass_fraction" in told:
        draft.spare.append(f'mass_fraction = "{draft.yields.pop("mass_fraction")}"')


def _models(draft: Draft, species: str) -> list[tuple[Sheet, slice | np.ndarray]]:
    """The rows of each model."""
    if draft.heading:
        return [(s, slice(None)) for s in draft.sheets]
    parts: list[tuple[Sheet, slice | np.ndarray]] = []
    for sheet in draft.sheets:
        axes = [
            sheet.columns.index(c) for k, c in draft.model.items() if k in ("mass", "metallicity", "variant")
        ]
        groups: dict[tuple[str, ...], list[int]] = {}
        for i, row in enumerate(sheet.rows):
            groups.setdefault(tuple(row[a] for a in axes), []).append(i)
        for rows in groups.values():
            parts.append((sheet, np.array(rows)))
            if "mass" in draft.model:
                cell = sheet.rows[rows[0]][sheet.columns.index(draft.model["mass"])]
                draft.masses.append(float(figure(cell) or 0.0) if is_figure(cell) else 0.0)
    return parts


def _leftovers(draft: Draft, names: Sequence[str]) -> None:
    for name in names:
        if name and not _is_species(name):
            (draft.ignore_species if _SUMS.fullmatch(name) else draft.rest).append(name)


def _take(draft: Draft, convention: str, column: str, why: str) -> None:
    if not convention or convention in draft.yields:
        draft.spare.append(f'{convention or "total"} = "{column}"')
        return
    draft.yields[convention] = column
    draft.notes[convention] = why


def _numbers(sheet: Sheet, column: str) -> np.ndarray | None:
    """A column as figures, NaN where there is none; None where it holds words."""
    if column not in sheet.columns:
        return None
    index = sheet.columns.index(column)
    try:
        found = [figure(row[index]) for row in sheet.rows]
    except ValueError:
        return None
    if all(f is None for f in found):
        return None
    return np.array([np.nan if f is None else float(f) for f in found])


def _filled(sheet: Sheet, column: str) -> np.ndarray:
    found = _numbers(sheet, column)
    return np.zeros(len(sheet.rows)) if found is None else np.nan_to_num(found)
