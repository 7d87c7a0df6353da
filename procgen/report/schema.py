"""The spec language as a JSON Schema (2020-12), for editors that complete and underline while one types.

It is made from the declarations that the reader works by, and is never tighter than the reader: what it refuses, the
reader refuses too. What joins parameters, names and steps (roots, correlations, cycles, dates) only the reader knows.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

from procgen.chance.laws import LAWS, Law
from procgen.report.catalogue import purpose
from procgen.spec.correlated import FORMS
from procgen.spec.declare import Body, Real, Schema, mapping, mapping_of, one_or_list
from procgen.spec.entries import REPLACED, SPREAD
from procgen.spec.groups import TEMPLATE
from procgen.spec.parameters import DRAWN
from procgen.spec.reader import HEAD, RESERVED, SERIES
from procgen.spec.tables import LOOKUP, TABLE
from procgen.spec.timegrid import TIME
from procgen.spec.variants import ALL, BASE
from procgen.terms import catalogue

BODY: Schema = {"$ref": "#/$defs/body"}
NAME: Schema = {"$ref": "#/$defs/name"}
SETTINGS = "dotted places of this spec, each with what is to stand there, as in {series.load.ar.sd: 9, time.steps: 500}"


def schema() -> Schema:
    """The JSON Schema of a spec, as plain data."""
    head = mapping_of(HEAD)
    sections = {
        "time": time(),
        "reuse": {"description": "a home for YAML anchors, otherwise ignored"},
        "shared": named({"anyOf": [BODY, mapping({"of": BODY}, ["of"])]}, RESERVED),
        "series": named({"anyOf": [BODY, mapping_of(SERIES)]}, RESERVED),
        "groups": named(mapping_of((*TEMPLATE, *(p for p in SERIES if p.name not in ("of", "stream", "before"))))),
        "parameters": named({"anyOf": declared()}),
        "correlation": one_or_list({"anyOf": [mapping_of(form) for form in FORMS.values()]}, 0),
        "variants": named({"type": "object", "minProperties": 1, "description": SETTINGS}, (BASE, ALL)),
    }
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "title": "A procgen spec",
        **mapping(head["properties"] | sections, [*head["required"], "time"]),
        "anyOf": [{"required": ["series"]}, {"required": ["groups"]}],
        "$defs": {
            "name": {"type": "string", "pattern": "^[A-Za-z_][A-Za-z0-9_]*$"},
            "body": one_or_list({"$ref": "#/$defs/entry"}),
            "entry": entry(),
            "varying": {"anyOf": [*declared(), *(mapping({form: NAME}, [form]) for form in ("parameter", "column"))]},
            "law": {"anyOf": [law for name in LAWS for law in ways(LAWS[name])]},
        },
    }


def time() -> Schema:
    """The time of a spec: its steps, or the list of their times."""
    form = mapping_of(TIME)
    least = [{"required": [name]} for name in (*form["required"], "at")]
    beside = {"start": ["every"], "stamp": ["start"], "holidays": ["every"]}
    return {**form, "required": [], "anyOf": least, "dependentRequired": beside}


def declared() -> list[Schema]:
    """The ways to write a number that varies: a draw, or a table."""
    looked_up = {**mapping_of(LOOKUP), "oneOf": [{"required": ["file"]}, {"required": ["values"]}]}
    return [mapping_of(DRAWN), mapping({TABLE: looked_up}, [TABLE])]


def named(body: Schema, taken: Sequence[str] = ()) -> Schema:
    """Bodies by name, none of which is one of those that are taken."""
    names = {**NAME, "not": {"enum": list(taken)}} if taken else NAME
    return {"type": "object", "additionalProperties": body, "propertyNames": names, "minProperties": 1}


def entry() -> Schema:
    """One term: exactly one kind, and what may stand beside it."""
    kinds = {kind: {"description": term.purpose, **term_schema(term)} for kind, term in catalogue().items()}
    beside = {
        "as": {"description": "label of the term; its kind when absent", **NAME},
        "times": {"description": "factor of the term", **Real().schema()},
    }
    return {**mapping(kinds | beside), "oneOf": [{"required": [kind]} for kind in kinds]}


def term_schema(term: Any) -> Schema:
    """What may be written behind a kind: its parameters, or what its short form takes."""
    long = parameters_schema(term)
    if any(p.name == "of" and isinstance(p.domain, Body) for p in term.parameters):
        return {"anyOf": [long, BODY]}
    brief = next((p for p in term.parameters if p.name == term.short), None)
    return long if brief is None else {"anyOf": [long, brief.schema()]}


def parameters_schema(term: Any) -> Schema:
    """The parameters of a kind; of those that say the spread, exactly one."""
    form = mapping_of(term.parameters)
    spread = [p.name for p in term.parameters if p.name in SPREAD]
    if term.takes_shock:
        form["properties"]["shock"] = {"description": "a noise that drives it", "$ref": "#/$defs/entry"}
    if term.takes_shock or len(spread) == 2:
        form["required"] = [name for name in form["required"] if name not in REPLACED]
        form["oneOf"] = [{"required": [name]} for name in (*spread, *(["shock"] if term.takes_shock else []))]
    elif instead := [p.name for p in term.parameters if p.name in ("sd", "spread")][1:]:
        form["anyOf"] = [{"required": [name]} for name in ("sd", *instead)]
    return form


def ways(law: type[Law]) -> Iterable[Schema]:
    """The ways to write a law: its name alone where that suffices, and its name with parameters."""
    if not any(p.required for p in law.parameters):
        yield {"const": law.name, "description": purpose(law)}
    yield mapping({law.name: {"description": purpose(law), **mapping_of(law.parameters)}}, [law.name])
