"""Tables beside a spec: values by path or by series, from a CSV or Parquet file.

What a file says is put into the spec in its place, so that a spec once read needs no file any more, and its digest
is one of the values: `from_table: {file: stores.csv, key: series}` becomes `from_table: {key: series, values: {…}}`.
"""

from __future__ import annotations

import csv
import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from procgen.spec.declare import INVALID, Choice, Domain, Parameter, Reals, Schema, Text, read_each
from procgen.spec.domains import Reading
from procgen.spec.draws import TableDraw
from procgen.spec.model import Frozen
from procgen.spec.named import Named
from procgen.spec.pages import read_within
from procgen.spec.tree import Tree, show_scalar
from procgen.spec.words import did_you_mean, one_of, row_told, unquote

TABLE = "from_table"
MOST_VALUES = 50_000  # they become a part of the spec
KEPT = "the spec in a manifest"  # as the file of a place: one from which no file is opened
MOST_BYTES = 20 << 20  # of a table's file, and of its values in memory


class Columns(dict[str, list[Any]]):
    """The columns of a file by name; `rows` tells people where each row is: "line 7" or "row 5, counted from 0".

    Of columns with one name the last is here, which nobody may take; `names` has all names as they stand in the file.
    """

    rows: Sequence[str] = ()
    names: Sequence[str] = ()


class Values(Domain):
    """A list of numbers, one a path, or a mapping of names of series to numbers."""

    def describe(self) -> str:
        return "a list of numbers, one a path, or a mapping of names of series to numbers"

    def read(self, tree: Tree, reader: Reading) -> Any:
        return Named(Reals().each).read(tree, reader) if tree.is_map else Reals().read(tree, reader)

    def schema(self) -> Schema:
        return {"type": ["array", "object"]}


LOOKUP = (
    Parameter("file", "", Text(), "a CSV or Parquet file, beside the spec", default=None),
    Parameter("key", "", Choice("path", "series"), "whose values these are; in a file, also the column that says so"),
    Parameter("column", "", Text(), "column of the values; the name of the parameter when absent", default=None),
    Parameter("values", "", Values(), "the values themselves, instead of a file", default=None),
)


def read_lookup(tree: Tree, column: str, reader: Reading) -> Any:
    """Return the TableDraw written at `from_table` of a mapping, or INVALID after reporting why there is none."""
    if set(tree.value) != {TABLE}:
        return reader.expected(tree, f"the key {TABLE} alone")
    inner = tree.value[TABLE]
    before = len(reader.faults)
    values = read_each(inner, LOOKUP, reader)
    if len(reader.faults) > before or INVALID in values.values():
        return INVALID
    if (values["file"] is None) == (values["values"] is None):
        return reader.expected(inner, "a file or values, one of them")
    if values["values"] is None:
        tree.value[TABLE] = inner = _inlined(inner, values, column, reader)
        return INVALID if inner is INVALID else read_lookup(tree, column, reader)
    given = values["values"]
    if isinstance(given, tuple) != (values["key"] == "path"):
        kind = "a list of numbers" if values["key"] == "path" else "a mapping of names to numbers"
        return reader.expected(inner.value["values"], f"{kind}, for key: {values['key']}")
    return TableDraw(given)


def _inlined(tree: Tree, values: dict[str, Any], column: str, reader: Reading) -> Any:
    """Return the tree of a table with its values in the place of the file."""
    key, name = values["key"], values["column"] or column
    table = read_file(tree.value["file"], reader)
    if table is INVALID or not all([has_column(table, each, tree.value["file"], reader) for each in (key, name)]):
        return INVALID
    place = tree.value["file"].place
    if not has_numbers(table, name, key, tree.value["file"], reader):
        return INVALID
    numbers = [Tree(value, place) for value in table[name]]
    if key == "series":
        names = [str(value) for value in table[key]]
        if len(set(names)) < len(names):
            reader.fault(tree.value["file"], f"the series {_twice(names)} stands in two rows; keep one")
            return INVALID
        inner = Tree(dict(zip(names, numbers, strict=True)), place)
    else:
        if sorted(table[key]) != list(range(len(numbers))):
            last = len(numbers) - 1
            reader.fault(tree.value["file"], f"expected the paths 0 to {last} in column path, each once, in any order")
            return INVALID
        order = sorted(range(len(numbers)), key=lambda row: table[key][row])
        inner = Tree(tuple([numbers[row] for row in order]), place)
    return Tree({"key": tree.value["key"], "values": inner}, tree.place, tree.keys)


def _twice(names: Sequence[str]) -> str:
    return next(name for i, name in enumerate(names) if name in names[:i])


def has_column(table: Columns, name: str, tree: Tree, reader: Reading) -> bool:
    """Whether the table of the file at `tree` has one column of a name; False after reporting that it has not."""
    if name not in table:
        message = f"the table has no column {name}; it has {one_of(table)}; {did_you_mean(name, table)}"
        reader.fault(tree, message.rstrip("; ") + other_separator([*table]))
        return False
    places = [str(k) for k, found in enumerate(table.names, 1) if found == name]
    if len(places) > 1:
        where = f"columns {', '.join(places[:-1])} and {places[-1]}"
        message = f"the table has {len(places)} columns named {name!r}, {where}; rename or drop all but the one meant"
        reader.fault(tree, message)
    return len(places) == 1


def read_file(tree: Tree, reader: Reading) -> Any:
    """Return the columns of the file named at `tree`, by name, or INVALID after reporting why it cannot be read."""
    if not isinstance(tree.value, str):
        return reader.expected(tree, "the path of a CSV or Parquet file")
    if tree.place.file == KEPT:
        reader.fault(tree, "expected the numbers themselves, as render keeps them, got the name of a file")
        return INVALID
    beside = tree.place.file if tree.place.file and not tree.place.file.startswith("--") else None
    path = Path(beside or "").parent / tree.value
    try:
        if path.exists() and not path.is_file():
            reader.fault(
                tree, f"expected a file, got a folder or a device at {path}; give the path of a CSV or Parquet file"
            )
            return INVALID
        columns = _parquet(path) if path.suffix == ".parquet" else _csv(path)
    except FileNotFoundError:
        folder = "the folder of the spec" if beside else "the current folder where no file of a spec has it"
        reader.fault(tree, f"there is no file {path.absolute()}; a path is taken from {folder}")
        return INVALID
    except (OSError, ValueError, csv.Error) as error:
        reader.fault(tree, f"cannot read the table {path}: {str(error).splitlines()[0]}")
        return INVALID
    count = sum(len(values) for values in columns.values())
    if count > MOST_VALUES:
        reader.fault(tree, f"expected a table of at most {MOST_VALUES:,} values, got {count:,}; leave some out")
        return INVALID
    return columns


def has_numbers(table: Columns, name: str, by: str | None, tree: Tree, reader: Reading) -> bool:
    """Whether a column has a number in every row; False after reporting, once, the first row that has none.

    `by` is the column that says whose the row is: its step, time, path or series.
    """
    wrong = [i for i, value in enumerate(table[name]) if not _is_number(value)]
    if not wrong:
        return True
    value, whose = table[name][wrong[0]], f", where {by} is {table[by][wrong[0]]}" if by else ""
    others = f"; {len(wrong) - 1} other rows have none either" if len(wrong) > 2 else "; one other row has none either"
    hint = unquote(str(value)) if isinstance(value, str | float) else ""
    hint = "fill what is empty, or take such rows out" if value in ("", None) else hint or "mend the table"
    message = f"expected a number, got {show_scalar(value)} in column {name} on {table.rows[wrong[0]]}{whose}"
    reader.fault(tree, message + (others if len(wrong) > 1 else "") + f"; {hint}")
    return False


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)


def _csv(path: Path) -> Columns:
    _refuse_large(path)
    with open(path, encoding="utf-8-sig", newline="") as file:
        lines = csv.reader(file)
        found = [(row, lines.line_num) for row in lines if row]
    rows, ends = [row for row, _ in found], [end for _, end in found]
    if len(rows) < 2:
        raise ValueError("expected a line of names, and lines of values under it")
    short = next((i for i, row in enumerate(rows) if len(row) != len(rows[0])), None)
    if short is not None:
        what = f"line {ends[short]} has {len(rows[short])} cells, and there are {len(rows[0])} names"
        raise ValueError(what + other_separator(rows[0]))
    names = [name.strip() for name in rows[0]]
    columns = Columns({name: [_cell(row[i].strip()) for row in rows[1:]] for i, name in enumerate(names)})
    columns.names = names
    columns.rows = [f"line {end}" for end in ends[1:]]
    return columns


def other_separator(names: Sequence[str]) -> str:
    """What is to be said of a line of names that something else than commas parts; nothing where commas do."""
    found = [what for mark, what in ((";", "semicolons"), ("\t", "tabs")) if len(names) == 1 and mark in names[0]]
    return f"; {found[0]} part its names: use commas, and write numbers with a decimal point" if found else ""


def _cell(text: str) -> Any:
    """Return a cell as a whole number, a number, or the text that it is."""
    for kind in (int, float):
        try:
            value = kind(text)
            return value if math.isfinite(value) else text
        except (ValueError, OverflowError):  # text, or a whole number beyond all floats
            continue
    return text


def _refuse_large(path: Path) -> None:
    size = path.stat().st_size
    if size > MOST_BYTES:
        raise ValueError(f"expected a file of at most {MOST_BYTES:,} bytes, got {size:,}; leave some of it out")


def _parquet(path: Path) -> Columns:
    import pyarrow.parquet as pq

    if not path.exists():
        raise FileNotFoundError(path)
    _refuse_large(path)
    columns = Columns(read_within(path, None, MOST_BYTES).to_pydict())
    columns.names = pq.read_schema(path).names  # what is read has columns of one name side by side
    columns.rows = [row_told(i) for i in range(max(map(len, columns.values()), default=0))]
    return columns


__all__ = ["LOOKUP", "TABLE", "Frozen", "has_column", "read_file", "read_lookup"]
