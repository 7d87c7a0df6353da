"""Groups of series: one template, written once, stands for many series with names and a table of values.

    groups:
      stores:
        table: {file: stores.csv}                 # one row a series, named in the column `series`
        of:
          - constant: {level: {column: base}}     # the value of this series' row
          - ar: {phi: 0.6, sd: {draw: {lognormal: {median: 2, sigma: 0.3, within: [0.5, 8]}}, over: series}}

Every member is an ordinary series of its own, in the order of the names, and draws by its name.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from typing import Any

from procgen.spec.declare import INVALID, Body, Domain, Parameter, Reading, Schema, Text, Whole, mapping_of, read_each
from procgen.spec.entries import read_name
from procgen.spec.model import Frozen, Series
from procgen.spec.parameters import Known
from procgen.spec.tables import has_column, read_file
from procgen.spec.tree import NAME, Tree
from procgen.spec.varying import Varying

KEY = "series"  # the column of a table that names the series
MOST = 10_000
Rows = Mapping[str, Mapping[str, Any]]
ReadSeries = Callable[[str, Tree, Any], Series]

NUMBERED = (
    Parameter("prefix", "", Text(), "how each name begins"),
    Parameter("count", "", Whole(at_least=1, at_most=MOST), "how many there are: prefix1, prefix2, …"),
)


class Members(Domain):
    """Names of series: a list of them, or a prefix and a count; read as a tuple of str."""

    structured = True

    def describe(self) -> str:
        return "a list of names, or a prefix and a count, as in {prefix: store_, count: 500}"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if tree.is_map:
            values = read_each(tree, NUMBERED, reader)
            if INVALID in values.values() or not values:
                return INVALID
            if not NAME.fullmatch(values["prefix"]):
                return reader.expected(tree.value["prefix"], "letters, digits and _, not beginning with a digit")
            return tuple([f"{values['prefix']}{i}" for i in range(1, values["count"] + 1)])
        if not tree.is_list or not tree.value or len(tree.value) > MOST:
            return reader.expected(tree, self.describe())
        return tuple([read_name(each, reader, "") for each in tree.value])

    def schema(self) -> Schema:
        return {"anyOf": [{"type": "array", "items": {"$ref": "#/$defs/name"}, "minItems": 1}, mapping_of(NUMBERED)]}


class RowsOf(Domain):
    """A table with a row a series: a file, or the rows by name; read as a mapping of names to rows."""

    structured = True

    def describe(self) -> str:
        return "{file: stores.csv}, or rows by name, as in {store_1: {region: north, base: 12}}"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_map or not tree.value:
            return reader.expected(tree, self.describe())
        if set(tree.value) == {"file"} and not tree.value["file"].is_map:
            inline = _inlined(tree.value["file"], reader)
            if inline is INVALID:
                return INVALID
            tree.value, tree.keys = inline.value, inline.keys
        before = len(reader.faults)
        rows = {read_name(tree.key(name), reader, name): _row(row, reader) for name, row in tree.value.items()}
        return Frozen(rows) if len(reader.faults) == before else INVALID

    def schema(self) -> Schema:
        return {"type": "object", "minProperties": 1}


TEMPLATE = (
    Parameter("names", "", Members(), "the series of the group; the rows of its table when absent", default=None),
    Parameter("table", "", RowsOf(), "a row a series: its attributes, and numbers for the terms", default=None),
    Parameter("of", "", Body(), "the terms of each series"),
)
OWN = ("names", "table")  # what a group has beside the keys of a series


def read_groups(tree: Tree, reader: Any, declared: Mapping[str, Varying], read: ReadSeries) -> dict[str, Series]:
    """Return the series of all groups by name; `read(name, tree, reader)` reads one from its template."""
    if not tree.is_map or not tree.value:
        reader.expected(tree, "groups by name, as in {stores: {names: [a, b], of: [{white_noise: {sd: 1}}]}}")
        return {}
    found: dict[str, Series] = {}
    for name, group in tree.value.items():
        read_name(tree.key(name), reader, name)
        for series in _members(name, group, reader, declared, read):
            if series.name in found:
                reader.fault(group, f"the series {series.name} is in the group {found[series.name].group} already")
            found[series.name] = series
    return found


def _members(
    group: str, tree: Tree, reader: Any, declared: Mapping[str, Varying], read: ReadSeries
) -> Sequence[Series]:
    if not tree.is_map or "of" not in tree.value:
        reader.expected(tree, "a mapping with `of`, and `names` or a `table`")
        return ()
    if "stream" in tree.value:
        reader.fault(tree.key("stream"), "the series of a group draw by their names; remove stream")
        return ()
    if "before" in tree.value:
        message = "what came before is that of one series; write it at a series of its own, or remove before"
        reader.fault(tree.key("before"), message)
        return ()
    names, table = (p.read(tree.value[p.name], reader) if p.name in tree.value else None for p in TEMPLATE[:2])
    if INVALID in (names, table) or not _told(names, table, tree, reader):
        return ()
    rows: Rows = table if table is not None else {}
    inner = {key: value for key, value in tree.value.items() if key not in OWN}
    template = Tree(inner, tree.place, tree.keys)
    members = []
    for name in names or rows:
        before = len(reader.faults)
        known = Known(declared, rows.get(name, {}), name)
        series = read(name, template, reader.open(known))
        members.append(replace(series, group=group, attributes=Frozen(rows.get(name, {}))))
        if len(reader.faults) > before:  # the next one would have the same
            break
    return members


def _told(names: Any, table: Any, tree: Tree, reader: Any) -> bool:
    """Whether the names are told, each once, and each has its row where there is a table."""
    if names is None and table is None:
        reader.fault(tree, "a group needs names, or a table with a row a series; give one")
        return False
    twice = next((name for i, name in enumerate(names or ()) if name in names[:i]), None)
    if twice is not None:
        reader.fault(tree.value["names"], f"the name {twice} stands twice; remove one")
        return False
    missing = [name for name in names or () if table is not None and name not in table]
    if missing:
        reader.fault(tree.value["table"], f"the table has no row for {', '.join(missing[:5])}; add it there")
    return not missing


def _row(tree: Tree, reader: Reading) -> Mapping[str, Any]:
    if not tree.is_map or not all(cell.is_scalar and cell.value is not None for cell in tree.value.values()):
        reader.expected(tree, "a row of numbers and texts by column, as in {region: north, base: 12}")
        return {}
    return Frozen({name: cell.value for name, cell in tree.value.items()})


def _inlined(tree: Tree, reader: Reading) -> Any:
    """Return the rows of a file as a tree."""
    columns = read_file(tree, reader)
    if columns is INVALID:
        return INVALID
    if KEY not in columns:
        reader.fault(tree, f"the table has no column {KEY}, which names the series; it has {', '.join(columns)}")
        return INVALID
    if not all(has_column(columns, name, tree, reader) for name in columns if name):  # one without a name is not used
        return INVALID
    names = [str(name) for name in columns[KEY]]
    if len(set(names)) < len(names):
        twice = next(name for i, name in enumerate(names) if name in names[:i])
        reader.fault(tree, f"the series {twice} stands in two rows of the table; keep one")
        return INVALID
    others = [name for name in columns if name != KEY]
    rows = {}
    for i, name in enumerate(names):
        cells = {column: Tree(columns[column][i], tree.place) for column in others}
        rows[name] = Tree(cells, tree.place, {column: Tree(column, tree.place) for column in others})
    return Tree(rows, tree.place, {name: Tree(name, tree.place) for name in names})
