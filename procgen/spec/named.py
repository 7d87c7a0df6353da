"""Domains of what is given by name: bodies, values, and rows of numbers in the order of names."""

from __future__ import annotations

from typing import Any

from procgen.spec.declare import INVALID, Domain, Reading, Reals, Schema, one_or_list
from procgen.spec.entries import read_name
from procgen.spec.model import Frozen
from procgen.spec.records import dataclass
from procgen.spec.tree import Tree


@dataclass(frozen=True)
class Named(Domain):
    """A mapping of names to values of one domain; read as a mapping in the order of writing."""

    each: Domain
    structured = True

    def describe(self) -> str:
        return f"a mapping of names, each to {self.each.describe()}"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_map or not tree.value:
            return reader.expected(tree, self.describe())
        before = len(reader.faults)
        values = {read_name(tree.key(name), reader, name): self.each.read(t, reader) for name, t in tree.value.items()}
        sound = len(reader.faults) == before and INVALID not in values.values()
        return Frozen(values) if sound else INVALID

    def schema(self) -> Schema:
        names = {"propertyNames": {"$ref": "#/$defs/name"}}
        return {"type": "object", "additionalProperties": self.each.schema(), "minProperties": 1, **names}


@dataclass(frozen=True)
class Names(Domain):
    """A list of distinct names; read as a tuple of str."""

    def describe(self) -> str:
        return "a list of at least 2 distinct names"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_list or len(tree.value) < 2:
            return reader.expected(tree, self.describe())
        before = len(reader.faults)
        names = tuple([read_name(t, reader, "") for t in tree.value])
        if len(reader.faults) > before:
            return INVALID
        return names if len(set(names)) == len(names) else reader.expected(tree, self.describe())

    def schema(self) -> Schema:
        return {"type": "array", "items": {"$ref": "#/$defs/name"}, "minItems": 2, "uniqueItems": True}


@dataclass(frozen=True)
class Rows(Domain):
    """A list of rows of numbers within bounds; read as a tuple of tuples of floats."""

    each: Reals

    def describe(self) -> str:
        return f"a list of rows, as in [[…], […]], each entry {self.each.each.describe()}"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_list or not tree.value or not all(t.is_list for t in tree.value):
            return reader.expected(tree, self.describe())
        rows = tuple([self.each.read(row, reader) for row in tree.value])
        return INVALID if any(row is INVALID for row in rows) else rows

    def schema(self) -> Schema:
        row = {"type": "array", "items": self.each.each.schema(), "minItems": 1}
        return {"type": "array", "items": row, "minItems": 1}


@dataclass(frozen=True)
class Matrices(Domain):
    """A list of matrices, one standing for a list of one; read as a tuple of tuples of rows."""

    each: Rows

    def describe(self) -> str:
        return f"a matrix, {self.each.describe()}, or a list of matrices"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_list or not all(t.is_list for t in tree.value):
            return reader.expected(tree, self.describe())
        several = all(row.is_list for t in tree.value for row in t.value)
        matrices = tuple([self.each.read(t, reader) for t in (tree.value if several else (tree,))])
        return INVALID if any(matrix is INVALID for matrix in matrices) else matrices

    def schema(self) -> Schema:
        return one_or_list(self.each.schema(), 0)
