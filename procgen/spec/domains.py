"""Domains: the sets of values a parameter may take, how a value is read, and what to say when it is not one.

Domains read trees (`spec.tree`), whose nodes know their places, through a `Reading`, which collects faults.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any, Protocol

from procgen.spec.records import dataclass
from procgen.spec.units import length_pattern
from procgen.spec.words import bounds, did_you_mean, one_of, unquote

if TYPE_CHECKING:
    from procgen.spec.calendar import Grid
    from procgen.spec.declare import Parameter
    from procgen.spec.model import Entry, Fault
    from procgen.spec.tree import Tree


Schema = dict[str, Any]  # a part of a JSON Schema (2020-12)
FORMS = ("draw", "from_table", "parameter", "column")  # the mappings that stand in place of a number


class _Sentinel:
    """A named constant that is only ever compared by identity."""

    def __init__(self, name: str) -> None:
        self.name = name

    def __repr__(self) -> str:
        return self.name

    def __reduce__(self) -> str:
        return self.name  # pickles as the module's own constant, so `is` holds in worker processes


REQUIRED: Any = _Sentinel("REQUIRED")
INVALID: Any = _Sentinel("INVALID")  # what `read` returns after it has reported a fault


class Reading(Protocol):
    """What reading needs: somewhere to report, the grid, the laws, the catalogue, and bodies read."""

    faults: list[Fault]
    grid: Grid | None  # None after a fault in `time`
    laws: Mapping[str, Any]
    catalogue: Mapping[str, Any]
    made: list[Any]  # what was read in place of numbers that vary

    def fault(self, tree: Tree, message: str) -> None: ...
    def expected(self, tree: Tree, what: str, hint: str = "") -> Any: ...
    def about(self, parameter: Parameter | None) -> Reading: ...
    def body(self, tree: Tree) -> tuple[Entry, ...]: ...
    def varying(self, tree: Tree, domain: Real) -> Any: ...
    def closed(self) -> Reading: ...
    def by_series(self) -> Reading: ...
    def cut(self, parts: int) -> Reading: ...


class Domain:
    """The set of values a parameter may take."""

    structured = False  # whether a value is itself a mapping, so that `{value: v, per: day}` cannot stand for it

    def describe(self) -> str:
        """Return the set in words that follow "expected", such as "a number above 0"."""
        raise NotImplementedError

    def read(self, tree: Tree, reader: Reading) -> Any:
        """Return the value written at `tree`, or INVALID after reporting why it is not one."""
        raise NotImplementedError

    def default(self, value: Any, reader: Reading) -> Any:
        """Return the value that a declared default stands for."""
        return value

    def schema(self) -> Schema:
        """Return the set as JSON Schema: never tighter than `read`, which has the last word."""
        return {}


@dataclass(frozen=True)
class Real(Domain):
    """A finite number within bounds; read as float."""

    above: float | None = None
    below: float | None = None
    at_least: float | None = None
    at_most: float | None = None

    def describe(self) -> str:
        return "a number" + bounds(self.above, self.below, self.at_least, self.at_most)

    def read(self, tree: Tree, reader: Reading) -> Any:
        value = tree.value
        if varies(tree):
            return reader.varying(tree, self)
        if isinstance(value, bool) or not isinstance(value, (int, float)):
            return reader.expected(tree, self.describe(), unquote(value))
        try:
            number = float(value)
        except OverflowError:
            number = math.inf
        if not math.isfinite(number):
            return reader.expected(tree, self.describe(), "the number must be finite")
        return number if self.holds(number) else reader.expected(tree, self.describe())

    def schema(self) -> Schema:
        limits = {
            "exclusiveMinimum": self.above,
            "exclusiveMaximum": self.below,
            "minimum": self.at_least,
            "maximum": self.at_most,
        }
        number = {"type": "number"} | {word: limit for word, limit in limits.items() if limit is not None}
        return {"anyOf": [number, {"$ref": "#/$defs/varying"}]}

    def holds(self, number: float) -> bool:
        """Return whether a finite number lies within the bounds."""
        return (
            (self.above is None or number > self.above)
            and (self.below is None or number < self.below)
            and (self.at_least is None or number >= self.at_least)
            and (self.at_most is None or number <= self.at_most)
        )


@dataclass(frozen=True)
class Whole(Domain):
    """A whole number within bounds; read as int."""

    at_least: int | None = None
    at_most: int | None = None

    def describe(self) -> str:
        return "a whole number" + bounds(None, None, self.at_least, self.at_most)

    def read(self, tree: Tree, reader: Reading) -> Any:
        value = tree.value
        if isinstance(value, float) and value.is_integer() and abs(value) < 2**53:
            value = int(value)  # 1e6 is the whole number it looks like
        if isinstance(value, bool) or not isinstance(value, int):
            return reader.expected(tree, self.describe(), unquote(value))
        low, high = self.at_least, self.at_most
        if (low is not None and value < low) or (high is not None and value > high):
            return reader.expected(tree, self.describe())
        return value

    def schema(self) -> Schema:
        limits = {"minimum": self.at_least, "maximum": self.at_most}
        return {"type": "integer"} | {word: limit for word, limit in limits.items() if limit is not None}


@dataclass(frozen=True)
class Reals(Domain):
    """A list of numbers within bounds, a scalar standing for a list of one; read as a tuple of floats."""

    above: float | None = None
    below: float | None = None
    at_least: float | None = None
    at_most: float | None = None
    min_length: int = 1

    @property
    def each(self) -> Real:
        return Real(self.above, self.below, self.at_least, self.at_most)

    def describe(self) -> str:
        count = f" of at least {self.min_length} numbers" if self.min_length > 1 else ""
        each = self.each.describe()
        return f"a list{count}, each {each}" if count else f"{each}, or a list of such numbers"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if tree.is_map and not varies(tree):
            return reader.expected(tree, self.describe())
        trees = tree.value if tree.is_list else (tree,)
        wrong = [t for t in trees if isinstance(t.value, float) and not math.isfinite(t.value)]
        if len(wrong) > 1:  # one fault for all of them: a gap in a table is rarely alone
            return reader.expected(wrong[0], self.each.describe(), f"{len(wrong)} numbers of the list are not finite")
        values = tuple([self.each.read(t, reader) for t in trees])
        if len(values) < self.min_length:
            return reader.expected(tree, self.describe())
        return INVALID if any(v is INVALID for v in values) else values

    def schema(self) -> Schema:
        return one_or_list(self.each.schema(), self.min_length)


@dataclass(frozen=True)
class Text(Domain):
    """A string."""

    def describe(self) -> str:
        return "a text"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if isinstance(tree.value, str):
            return tree.value
        quotable = tree.is_scalar and tree.value is not None
        return reader.expected(tree, self.describe(), "put it in quotes" if quotable else "")

    def schema(self) -> Schema:
        return {"type": "string"}


@dataclass(frozen=True)
class Flag(Domain):
    """true or false; in YAML 1.2 `yes` and `no` are texts."""

    def describe(self) -> str:
        return "true or false"

    def read(self, tree: Tree, reader: Reading) -> Any:
        return tree.value if isinstance(tree.value, bool) else reader.expected(tree, self.describe())

    def schema(self) -> Schema:
        return {"type": "boolean"}


class Choice(Domain):
    """One of a few words."""

    def __init__(self, *words: str) -> None:
        self.words = words

    def describe(self) -> str:
        return one_of(self.words)

    def read(self, tree: Tree, reader: Reading) -> Any:
        if isinstance(tree.value, str) and tree.value in self.words:
            return tree.value
        return reader.expected(tree, self.describe(), did_you_mean(tree.value, self.words))

    def schema(self) -> Schema:
        return {"enum": list(self.words)}


@dataclass(frozen=True)
class Span(Domain):
    """A positive length of time; read as a float number of steps of the grid."""

    def describe(self) -> str:
        return "a length of time above 0: a number of steps, or a text such as 15min, 1d, 2 weeks"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not isinstance(tree.value, str):
            return _steps(tree, reader, self, Real(above=0.0))
        return _on_grid(tree, reader, "span_steps")

    def schema(self) -> Schema:
        return {"anyOf": [{"type": "number", "exclusiveMinimum": 0}, {"type": "string", "pattern": length_pattern()}]}


@dataclass(frozen=True)
class Moment(Domain):
    """A point in time; read as a float number of steps, counted from step 0."""

    def describe(self) -> str:
        return "a point in time: a number of steps from step 0, a clock time such as 18:00, or a date"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not isinstance(tree.value, str):
            return _steps(tree, reader, self, Real())
        return _on_grid(tree, reader, "moment_steps")

    def schema(self) -> Schema:
        return {"type": ["number", "string"]}


def one_or_list(each: Schema, least: int = 1) -> Schema:
    """Return the schema of a list, of which one alone may stand for a list of one."""
    many: Schema = {"type": "array", "items": each, "minItems": least}
    return many if least > 1 else {"anyOf": [each, many]}


def _steps(tree: Tree, reader: Reading, domain: Domain, number: Real) -> Any:
    value = tree.value
    plain = isinstance(value, (int, float)) and not isinstance(value, bool)
    if plain and math.isfinite(value) and abs(value) < 2**53 and number.holds(value):
        return float(value)
    return reader.expected(tree, domain.describe())


def _on_grid(tree: Tree, reader: Reading, method: str) -> Any:
    if reader.grid is None:  # the fault of `time` is already reported
        return INVALID
    try:
        return getattr(reader.grid, method)(tree.value)
    except ValueError as error:
        reader.fault(tree, str(error))
        return INVALID


def varies(tree: Tree) -> bool:
    """Return whether a mapping stands in place of a number that varies."""
    return tree.is_map and any(form in tree.value for form in FORMS)
