"""A sample as a value: numbers written in the spec, or a column of a file beside it, in any order.

As with other tables, what a file says is put into the spec in its place: a spec once read needs no file any more, and
its digest is one of the numbers.
"""

from __future__ import annotations

from typing import Any

from procgen.spec.columns import table_of
from procgen.spec.declare import INVALID, Domain, Parameter, Real, Reals, Schema, Text, mapping_of, read_each
from procgen.spec.domains import Reading
from procgen.spec.tables import has_numbers
from procgen.spec.tree import Tree

FILE = (
    Parameter("file", "", Text(), "a CSV or Parquet file, beside the spec"),
    Parameter("column", "", Text(), "column of the values"),
)
NUMBERS = (Parameter("numbers", "", Reals(), "the values, in any order"),)


class Sample(Domain):
    """Observed values in any order; read as a tuple of floats."""

    structured = True

    def describe(self) -> str:
        return "a list of numbers, or a column of a file such as {file: orders.csv, column: litres}"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_map:
            return Reals().read(tree, reader)
        if "file" in tree.value and not self._inlined(tree, reader):
            return INVALID
        return read_each(tree, NUMBERS, reader).get("numbers", INVALID)

    def _inlined(self, tree: Tree, reader: Reading) -> bool:
        """Put the numbers of the file in the place of its name; False after reporting why they cannot be."""
        found = table_of(tree, FILE, reader)
        if found is None or not has_numbers(*found, None, tree.value["file"], reader):
            return False
        table, column = found
        place = tree.value["column"].place
        trees = tuple([Tree(value, place) for value in table[column]])
        tree.value.clear()
        tree.value.update(numbers=Tree(trees, place))
        return True

    def schema(self) -> Schema:
        return {"anyOf": [Reals().schema(), mapping_of(FILE), mapping_of(NUMBERS)]}


class Smoothing(Domain):
    """Whether a sample is smoothed: not at all, by the usual rule, or by a bandwidth."""

    width = Real(at_least=0.05, at_most=5)

    def describe(self) -> str:
        return f"true, false, or a bandwidth: {self.width.describe()}"

    def read(self, tree: Tree, reader: Reading) -> Any:
        value = tree.value
        number = isinstance(value, int | float) and not isinstance(value, bool)
        if isinstance(value, bool) or (number and self.width.holds(value)):
            return value if isinstance(value, bool) else float(value)
        return reader.expected(tree, self.describe())

    def schema(self) -> Schema:
        return {"anyOf": [{"type": "boolean"}, {"type": "number", "minimum": 0.05, "maximum": 5}]}
