"""A guessed layout written down as TOML, with the reasons beside it."""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from pathlib import Path

from ..readers import Sheet


@dataclass
class Draft:
    """What a guess has found so far.

    Attributes
    ----------
    sheets : list of Sheet
    format : str
    heading : str
        Pattern of the headings of blocks.
    model, yields : dict
        Where figures of the models and yields stand, by their key in the layout.
    notes : dict
        Why, by the same keys.
    spare : list of str
        Columns that say again what another one says.
    rest, ignore_species, ignore_columns : list of str
        Names that are no species.
    masses : list of float
        Initial masses, Msun, a model each.
    """

    sheets: list[Sheet]
    format: str
    heading: str = ""
    model: dict[str, str] = field(default_factory=dict)
    yields: dict[str, str] = field(default_factory=dict)
    notes: dict[str, str] = field(default_factory=dict)
    spare: list[str] = field(default_factory=list)
    rest: list[str] = field(default_factory=list)
    ignore_species: list[str] = field(default_factory=list)
    ignore_columns: list[str] = field(default_factory=list)
    masses: list[float] = field(default_factory=list)


def _quoted(text: str) -> str:
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'


def proposal(draft: Draft, name: str) -> str:
    """Write a draft down as TOML with comments.

    Parameters
    ----------
    draft : Draft
    name : str
        Name of the file.

    Returns
    -------
    str
    """
    masses = draft.masses
    kind = "agb"
    if not masses:
        kind = "thermonuclear"
    elif min(masses) >= 8 and max(masses) > 10:
        kind = "core-collapse"
    stem = re.sub(r"[^A-Za-z0-9]+", "-", Path(name).stem).strip("-").lower() or "mine"
    lines = [
        f"# proposed from {name}; check every line, above all kind, units and the convention of the yields",
        f"id = {_quoted(stem)}      # author-year",
        f'kind = "{kind}"      # agb, core-collapse, thermonuclear, or a name of yours'
        + (
            f"; the masses are {min(masses):g} to {max(masses):g} Msun"
            if masses
            else "; no initial mass found"
        ),
    ]
    model = {k: v for k, v in draft.model.items() if k != "variant" or draft.heading}
    if "final_mass" in model:
        lines.append(
            'covers = "explosion"      # the wind before it, initial mass - final_mass, is not in the table'
        )
    if "birth_hydrogen" in model:
        lines.append('ejected = "birth hydrogen"      # more digits than "mass - remnant"')
    elif "total" in draft.yields and not {"remnant", "ejected"} & set(model):
        lines.append('ejected = "sum of total"      # no remnant or ejected mass found')
    elif masses and not {"remnant", "ejected"} & set(model):
        lines.append("# no remnant or ejected mass found: say in [model] where it stands")
    lines += ["", "#[paper]", '#authors = ""', "#year = 2026", '#reference = ""', '#doi = ""', ""]
    lines += ["[read]", f'format = "{draft.format}"']
    if draft.heading:
        lines.append(f"heading = {_quoted(draft.heading)}")
    lines += ["", "[model]"]
    for key in (
        "metallicity",
        "mass",
        "variant",
        "remnant",
        "ejected",
        "final_mass",
        "lifetime",
        "birth_hydrogen",
    ):
        if key in model:
            lines.append(_model_line(draft, key, model[key]))
    if masses and "metallicity" not in model:
        lines.append("metallicity = 0.014      # no column of it found")
    lines += ["", "[yields]"]
    for key, column in sorted(draft.yields.items(), key=lambda kv: kv[0] != "species"):
        note = f"      # {draft.notes[key]}" if key in draft.notes else ""
        lines.append(f"{key} = {_quoted(column)}{note}")
    lines += [f"# also there: {one}" for one in draft.spare]
    if draft.rest:
        lines += [
            "",
            "[rest]",
            f"species = [{', '.join(map(_quoted, draft.rest))}]",
            'why = "no species: lumps"',
        ]
    if draft.ignore_species or draft.ignore_columns:
        lines += ["", "[ignore]"]
        if draft.ignore_species:
            lines.append(f"species = [{', '.join(map(_quoted, draft.ignore_species))}]")
        if draft.ignore_columns:
            lines.append(f"columns = [{', '.join(map(_quoted, draft.ignore_columns))}]")
        lines.append('why = "no species"')
    if masses and "initial" not in draft.yields and not {"net", "total"} <= set(draft.yields):
        lines += ["", "#[birth]      # the table doesn't say what the stars were born with"]
        lines += ['#mixture = "asplund-2009"', "#enhancement = { O = 0.4 }", "#below = 0.01"]
    return "\n".join(lines) + "\n"


def _model_line(draft: Draft, key: str, place: str) -> str:
    note = f"      # {draft.notes[key]}" if key in draft.notes else ""
    unit = draft.sheets[0].units.get(place, "")
    if unit and unit != "---":
        note += f"      # the file says {unit}"
    if place.startswith("row "):
        row, _, column = place[4:].partition(" in ")
        inside = f"row = {_quoted(row)}" + (f", column = {_quoted(column)}" if column else "")
        return f"{key} = {{ {inside} }}{note}"
    if key == "metallicity" and "fe" in place.casefold():
        return f'{key} = {{ field = {_quoted(place)}, scale = "[Fe/H]" }}{note}'
    return f"{key} = {_quoted(place)}{note}"
