"""Declarations of parameters: one list per term or law, from which everything else is derived.

A term or a law lists its parameters once, as `Parameter(name, symbol, domain, meaning, ...)`. The reader, the
messages, the catalogue, the reference page and the test strategies all work from that list.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from typing import Any

from procgen.spec.domains import (
    INVALID,
    REQUIRED,
    Choice,
    Domain,
    Flag,
    Moment,
    Reading,
    Real,
    Reals,
    Schema,
    Span,
    Text,
    Whole,
    one_or_list,
    varies,
)
from procgen.spec.model import Frozen
from procgen.spec.records import dataclass
from procgen.spec.tree import Tree
from procgen.spec.varying import VaryingLaw, found_in, tried
from procgen.spec.words import did_you_mean, nearest, one_of, unknown_key

__all__ = [
    "INVALID",
    "REQUIRED",
    "Body",
    "Choice",
    "Domain",
    "Flag",
    "LawOf",
    "Moment",
    "Parameter",
    "Reading",
    "Real",
    "Reals",
    "Record",
    "Records",
    "Schema",
    "Span",
    "Text",
    "Whole",
    "mapping",
    "mapping_of",
    "one_or_list",
    "read_each",
    "read_parameters",
]


@dataclass(frozen=True)
class Parameter:
    """One parameter of a term or a law, declared once.

    Parameters
    ----------
    name, symbol : the key in a spec, and the sign in equations.
    domain : the values it may take.
    meaning : one phrase, used in the catalogue and behind faults.
    default : the value when absent (None stands for absent); REQUIRED when it must be written.
    unit : "series" (the unit of the series), "1", "steps", "1/step", ...
    per : "rate" (scales with the length of a step), "diffusion" (with its square root), or None. With either,
        `{value: v, per: day}` is read, and the value is converted to one step of the grid.
    by_time : the term can go by the time that passes, so that `per` is right also where times are listed.
    no_per : why `per` makes no sense here, as a full clause, when the general reason is not enough.
    """

    name: str
    symbol: str
    domain: Domain
    meaning: str
    default: Any = REQUIRED
    unit: str = "1"
    per: str | None = None
    no_per: str | None = None
    by_time: bool = False

    @property
    def required(self) -> bool:
        return self.default is REQUIRED

    def read(self, tree: Tree, reader: Reading) -> Any:
        """Return the value at `tree` per step, or INVALID after reporting."""
        reader = reader.about(self)
        if varies(tree) and not (self.domain.structured or isinstance(self.domain, Real | Reals)):
            reader.fault(tree, f"{self.name} cannot vary, only numbers can; write {self.domain.describe()}")
            return INVALID
        if tree.is_map and "per" in tree.value and not self.domain.structured:
            return self._read_per(tree, reader)
        return self.domain.read(tree, reader)

    def _read_per(self, tree: Tree, reader: Reading) -> Any:
        if self.per is None:
            why = self.no_per or "only rates and the spread of a diffusion scale with the length of a step"
            reader.fault(tree, f"{self.name} cannot be written with per: {why}; write its value per step")
            return INVALID
        if set(tree.value) != {"value", "per"}:
            return reader.expected(tree, "exactly the keys value and per, as in {value: 0.16, per: year}")
        value = self.domain.read(tree.value["value"], reader)
        unit = tree.value["per"]
        if not isinstance(unit.value, str):
            return reader.expected(unit, "a unit of time such as day")
        if reader.grid is None or value is INVALID:  # the grid's own fault is already reported
            return INVALID
        try:
            steps = reader.grid.steps_per(unit.value, self.by_time)
        except ValueError as error:
            reader.fault(unit, str(error))
            return INVALID
        scale = steps if self.per == "rate" else math.sqrt(steps)
        return tuple(v / scale for v in value) if isinstance(value, tuple) else value / scale

    def schema(self) -> Schema:
        """Return what may be written for it as JSON Schema, with its meaning."""
        value = self.domain.schema()
        if self.per and not self.domain.structured:
            value = {"anyOf": [value, mapping({"value": value, "per": {"type": "string"}}, ("value", "per"))]}
        return {"description": f"{self.meaning}: {self.domain.describe()}", **value}


@dataclass(frozen=True)
class LawOf(Domain):
    """The law of a shock: a name, or a name with its parameters; read as an instance from the registry."""

    structured = True

    def describe(self) -> str:
        return "a law: a name such as normal, or a name with its parameters such as {student_t: {df: 5}}"

    def default(self, value: Any, reader: Reading) -> Any:
        return reader.laws[value]() if isinstance(value, str) else value

    def read(self, tree: Tree, reader: Reading) -> Any:
        if isinstance(tree.value, str):
            name, inner = tree.value, None
        elif tree.is_map and len(tree.value) == 1:
            name, inner = next(iter(tree.value.items()))
        else:
            return reader.expected(tree, self.describe())
        law = reader.laws.get(name)
        if law is None:
            return reader.expected(tree, one_of(sorted(reader.laws)), did_you_mean(name, reader.laws))
        values = self._parameters(law, inner, tree, reader.by_series())
        if values is INVALID:
            return INVALID
        try:
            for numbers, _ in tried(values):
                made = law(**numbers)
        except ValueError as error:
            reader.fault(tree if inner is None else inner, str(error))
            return INVALID
        return VaryingLaw(law, values) if found_in(values) else made

    def _parameters(self, law: Any, inner: Tree | None, tree: Tree, reader: Reading) -> Any:
        if inner is None:
            missing = [p.name for p in law.parameters if p.required]
            if missing:
                return reader.expected(tree, f"the law {tree.value} with its parameters {', '.join(missing)}")
            return {p.name: p.domain.default(p.default, reader) for p in law.parameters}
        return read_parameters(inner, law.parameters, reader)

    def schema(self) -> Schema:
        return {"$ref": "#/$defs/law"}


class Record(Domain):
    """A mapping with declared keys; read as a dict."""

    structured = True

    def __init__(self, *parameters: Parameter) -> None:
        self.parameters = parameters

    def describe(self) -> str:
        return f"a mapping with the keys {', '.join(p.name for p in self.parameters)}"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_map:
            return reader.expected(tree, self.describe())
        return read_parameters(tree, self.parameters, reader)

    def schema(self) -> Schema:
        return mapping_of(self.parameters)


class Records(Domain):
    """A list of mappings with declared keys, one standing for a list of one; read as a tuple of dicts."""

    structured = True

    def __init__(self, *parameters: Parameter) -> None:
        self.parameters = parameters

    def describe(self) -> str:
        return f"a list of mappings with the keys {', '.join(p.name for p in self.parameters)}"

    def read(self, tree: Tree, reader: Reading) -> Any:
        trees = tree.value if tree.is_list else (tree,)
        if not trees or not all(t.is_map for t in trees):
            return reader.expected(tree, self.describe())
        values = tuple([read_parameters(t, self.parameters, reader) for t in trees])
        return INVALID if any(v is INVALID for v in values) else values

    def schema(self) -> Schema:
        return one_or_list(mapping_of(self.parameters))


@dataclass(frozen=True)
class Body(Domain):
    """A term, or a list of terms that are summed; read as a tuple of entries."""

    structured = True

    def describe(self) -> str:
        return "a term such as {white_noise: {sd: 1}}, or a list of terms, which is their sum"

    def read(self, tree: Tree, reader: Reading) -> Any:
        return reader.body(tree)

    def schema(self) -> Schema:
        return {"$ref": "#/$defs/body"}


def mapping(properties: Schema, required: Iterable[str] = ()) -> Schema:
    """Return the schema of a mapping with these keys and no others."""
    return {"type": "object", "properties": properties, "required": [*required], "additionalProperties": False}


def mapping_of(parameters: Iterable[Parameter]) -> Schema:
    """Return the schema of a mapping with declared keys."""
    parameters = tuple(parameters)
    return mapping({p.name: p.schema() for p in parameters}, [p.name for p in parameters if p.required])


def read_parameters(tree: Tree, parameters: Sequence[Parameter], reader: Reading) -> Any:
    """Return a frozen mapping of every declared parameter, defaults filled; INVALID after reporting all faults."""
    before = len(reader.faults)
    values = read_each(tree, parameters, reader)
    return Frozen(values) if len(reader.faults) == before and INVALID not in values.values() else INVALID


def read_each(
    tree: Tree,
    parameters: Sequence[Parameter],
    reader: Reading,
    also: Iterable[str] = (),
    optional: Iterable[str] = (),
) -> dict[str, Any]:
    """Return every declared parameter of a mapping, defaults filled, INVALID for each that has a fault.

    Keys in `also` belong to the caller and are passed over; a required one in `optional` may be missing, and is
    then None. All faults are reported, not only the first.
    """
    if not tree.is_map:
        names = ", ".join(p.name for p in parameters)
        reader.expected(tree, f"a mapping with the keys {names}" if parameters else "{}")
        return {}
    allowed = [*(p.name for p in parameters), *also]
    meant = set()
    for key in tree.value:
        if key not in allowed:
            reader.fault(tree.key(key), unknown_key(key, allowed))
            meant.add(nearest(key, allowed))
    values: dict[str, Any] = {}
    for parameter in parameters:
        name = parameter.name
        if name in tree.value:
            values[name] = parameter.read(tree.value[name], reader)
        elif parameter.required and name not in optional:
            if name not in meant:  # a misspelt key is one fault, not two
                what = f"{parameter.meaning}: {parameter.domain.describe()}"
                reader.fault(tree, f"expected the key {name} ({what})")
            values[name] = INVALID
        else:
            values[name] = None if parameter.required else parameter.domain.default(parameter.default, reader)
    return values
