"""The JSON Schema of population files, by which editors complete keys and underline mistakes.

``steelyard weigh --schema`` writes it to population.schema.json; a population file whose first line
is ``#:schema ./population.schema.json`` is then checked by editors that read that line. Choices, keys
and explanations are those of the reader and of the template; what only the reader can know, such as
units and whether sets meet, it alone checks.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import fields
from typing import Any

from steelyard.yields.composition import mixtures
from steelyard.yields.library import shipped

from ..delays import FORMS as DELAY_FORMS
from ..delays import PRESETS
from ..imf import FORMS as IMF_FORMS
from ..lifetimes import LAWS
from ..sources import EDGE_ABOVE, EDGE_BELOW, JOIN_POLICIES, REMNANTS, STELLAR_KINDS
from .reading import MOST_AGES, template
from .text import FUNCTION, SETS

DIALECT = "https://json-schema.org/draft/2020-12/schema"

Schema = dict[str, Any]

_TEXT: Schema = {"type": "string"}
#: a number, or text with a unit
_AMOUNT: Schema = {"type": ["number", "string"]}


def population_schema() -> Schema:
    """Return the schema, as plain values for JSON.

    Examples
    --------
    >>> sorted(population_schema()["required"])
    ['metallicity', 'source']
    """
    told = _explanations(template())
    stellar = {"sets": _several(_entry()), "limits": {"anyOf": [{"const": SETS}, _pair()]}}
    stellar["winds"] = _one_of(("birth", "rest"))
    collapse = {
        **stellar,
        "events_from": _AMOUNT,
        "implode": {"anyOf": [{"type": "array", "items": _pair()}, _table("masses", "probability")]},
        "neutron_star_limit": _AMOUNT,
    }
    delayed = {
        "sets": _several(_entry()),
        "number": {"anyOf": [_AMOUNT, _table("value", "power", "reference")]},
        "delay": _delay(),
        "consumes": _one_of(REMNANTS),
    }
    top: Schema = {
        "metallicity": _AMOUNT,
        "solar": _one_of(mixtures()),
        "species": {"anyOf": [_one_of(("elements", "nuclides")), _several(_TEXT)]},
        "ages": {"anyOf": [_several(_AMOUNT), _ages()]},
        "interpolation": _one_of(("linear", "cubic")),
        "imf": _closed(_imf(), ("form",), told, "imf"),
        "lifetimes": _closed({"table": _one_of((*LAWS, SETS))}, (), told, "lifetimes"),
        "source": {
            "type": "array",
            "minItems": 1,
            "items": {
                "type": "object",
                "required": ["kind"],
                "properties": {"kind": {"anyOf": [_one_of((*STELLAR_KINDS, "thermonuclear")), _TEXT]}},
                "if": {"properties": {"kind": {"const": "agb"}}},
                "then": _source("agb", stellar, ("sets",), told),
                "else": {
                    "if": {"properties": {"kind": {"const": "core-collapse"}}},
                    "then": _source("core-collapse", collapse, ("sets",), told),
                    "else": _source("thermonuclear", delayed, ("sets", "number", "delay"), told),
                },
            },
        },
        "join": {
            "type": "array",
            "items": _closed(
                {
                    "between": {"type": "array", "items": _TEXT, "minItems": 2, "maxItems": 2},
                    "policy": _one_of(JOIN_POLICIES),
                },
                ("between",),
                told,
                "join",
            ),
        },
        "edges": _closed(
            {
                "below": _one_of(EDGE_BELOW),
                "above": _one_of(EDGE_ABOVE),
                "metallicity": _one_of(("hold", "refuse")),
            },
            (),
            told,
            "edges",
        ),
    }
    made = _closed(top, ("metallicity", "source"), told, "")
    return {"$schema": DIALECT, "title": "Population file of steelyard", **made}


def _one_of(choices: Iterable[str]) -> Schema:
    return {"enum": sorted(choices)}


def _several(items: Schema) -> Schema:
    return {"type": "array", "items": items, "minItems": 1}


def _pair() -> Schema:
    return {"type": "array", "items": _AMOUNT, "minItems": 2, "maxItems": 2}


def _table(*keys: str) -> Schema:
    return {"type": "object", "required": list(keys), "properties": {key: {} for key in keys}} | {
        "additionalProperties": False
    }


def _ages() -> Schema:
    steps = {"type": "integer", "minimum": 2, "maximum": MOST_AGES}
    made = _table("from", "to", "steps")
    return {**made, "properties": {"from": _AMOUNT, "to": _AMOUNT, "steps": steps}}


def _entry() -> Schema:
    """A set, completed from those that ship but of any name, or a mixture of sets."""
    return {"anyOf": [_one_of(shipped()), _TEXT, {"type": "object", "minProperties": 1}]}


def _imf() -> Schema:
    slope = {"anyOf": [_AMOUNT, _table("value", "per_dex", "reference")]}
    return {
        "form": _one_of(IMF_FORMS),
        "limits": _pair(),
        "slopes": _several(slope),
        "breaks": {"type": "array", "items": _AMOUNT},
        "centre": _AMOUNT,
        "sigma": _AMOUNT,
    }


def _delay() -> Schema:
    forms = [name for name in DELAY_FORMS if name != FUNCTION]
    keys = {field.name for name in forms for field in fields(DELAY_FORMS[name])}
    table = {
        "type": "object",
        "required": ["form"],
        "properties": {**{key: {} for key in sorted(keys)}, "form": _one_of((*forms, *PRESETS))},
        "additionalProperties": False,
    }
    return {"anyOf": [_one_of(PRESETS), table]}


def _source(kind: str, keys: Mapping[str, Schema], needs: Iterable[str], told: Mapping[str, str]) -> Schema:
    return _closed({"kind": {}, **keys}, needs, told, f"source {kind}")


def _closed(keys: Mapping[str, Schema], needs: Iterable[str], told: Mapping[str, str], where: str) -> Schema:
    """A table that has no keys but these, each with what the template says of it."""
    explained = {}
    for key, schema in keys.items():
        text = told.get(f"{where}.{key}" if where else key, "")
        explained[key] = {"description": text, **schema} if text else schema
    return {
        "type": "object",
        "required": list(needs),
        "properties": explained,
        "additionalProperties": False,
    }


def _explanations(template: str) -> dict[str, str]:
    """The comment over each key of the template: of tables by ``table.key``, of sources by kind."""
    out: dict[str, str] = {}
    where, comment = "", []
    for line in template.splitlines():
        table = re.fullmatch(r"\[+(\w+)\]+", line)
        key = re.match(r"(\w+) =", line)
        if line.startswith("#"):
            comment.append(line.lstrip("# "))
            continue
        if table:
            where = table[1]
            out[where] = " ".join(comment)
        elif key and where == "source" and key[1] == "kind":
            where = f"source {line.split(chr(34))[1]}"
        elif key:
            out[f"{where}.{key[1]}" if where else key[1]] = " ".join(comment)
        comment = []
    return {name: text for name, text in out.items() if text}
