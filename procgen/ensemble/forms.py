"""Forms: what the rows of one file look like, from values (paths, steps) to an Arrow table and back.

A file is a sequence of *units*, which stand one after another: a panel has one for each series, the other forms have
one. A rectangle of a unit is a run of rows, so that any rectangle can be read by itself. On the way back, the columns
that say where a row belongs are held against what must be there, and the first that differs is named.
"""

from __future__ import annotations

from collections.abc import Container, Iterator, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from procgen.ensemble.columns import Column
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.layouts import Layout, labels, owned
from procgen.ensemble.plan import BUFFER_BYTES, GROUP_ROWS, Block, cut
from procgen.ensemble.reading import expect, numbers, values_of

if TYPE_CHECKING:
    import pyarrow as pa

Unit = Sequence[Column]


def form(layout: Layout, columns: Unit, stamps: Any, whole: Block, among: Unit | None = None) -> Form:
    """The form of a file that holds `columns` of the rectangle `whole`; `stamps` is None without a start.

    `among` are the columns of all files that will be read as one table: those of the file itself when None.
    """
    kind = {"long": Long, "panel": Panel, "nested": Nested, "wide": Wide}[layout.kind]
    return kind(layout, columns, stamps, whole, columns if among is None else among)


class Form:
    """Rows by path, then step; one column a series. This is layout long, and what the others share."""

    def __init__(self, layout: Layout, columns: Unit, stamps: Any, whole: Block, among: Unit):
        self.layout, self.columns, self.stamps, self.whole = layout, tuple(columns), stamps, whole
        self.among = among
        self.names = layout.index(stamps is not None)
        self.units: list[Unit] = [self.columns]
        self.schema = self._schema()
        self._key: tuple[int, ...] | None = None
        self._steps: dict[str, pa.Array] = {}

    # which rows

    @property
    def keys(self) -> list[str]:
        """Columns that repeat, which are packed, and alone have statistics."""
        return [*self.names.values()]

    @property
    def texts(self) -> list[str]:
        """Columns of texts that repeat, which are read as numbers of them."""
        return [self.names["id"]] if "id" in self.names else []

    @property
    def by_step(self) -> list[str]:
        """Columns that are the same on every path."""
        return [name for role, name in self.names.items() if role in ("step", "time")]

    def pieces(self, row_bytes: int) -> Iterator[Block]:
        """Rectangles that are read by themselves; `row_bytes` of all columns of the ensemble."""
        yield from cut(self.whole, max(min(GROUP_ROWS, BUFFER_BYTES // row_bytes), 1))

    def pages(self, row_bytes: int) -> Iterator[tuple[Block, Unit]]:
        """What is written as one row group, in the order of the file."""
        for unit in self.units:
            for block in self.pieces(row_bytes):
                yield block, unit

    def rows(self, block: Block) -> int:
        """Rows of a unit in a rectangle."""
        return block.rows

    def start(self, unit: int, block: Block) -> int:
        """The row at which a rectangle begins, of unit number `unit`."""
        before = (block.first_path - self.whole.first_path) * self.whole.steps
        return unit * self.whole.rows + before + block.first_step - self.whole.first_step

    def total(self) -> int:
        """Rows of the file."""
        return len(self.units) * self.rows(self.whole)

    # from values to rows

    def _schema(self) -> pa.Schema:
        import pyarrow as pa

        return pa.schema([*self._index_fields(), *(_field(c.name, arrow_type(c.type), c) for c in self.columns)])

    def _index_fields(self) -> list[pa.Field]:
        import pyarrow as pa

        kinds = {"id": pa.string(), "path": pa.int64(), "step": pa.int64(), "time": self._time_type()}
        return [_field(name, kinds[role]) for role, name in self.names.items()]

    def _time_type(self) -> pa.DataType:
        import pyarrow as pa

        return pa.int64() if self.stamps is None else pa.timestamp("us", tz="UTC")

    def table(self, block: Block, unit: Unit, values: Mapping[str, np.ndarray]) -> pa.Table:
        """The rows of a unit in a rectangle, from values (paths, steps) as they are stored."""
        import pyarrow as pa

        data = [array(values[column.name], arrow_type(column.type), column.gaps) for column in unit]
        return pa.Table.from_arrays([*self._index(block, unit).values(), *data], schema=self.schema)

    def _index(self, block: Block, unit: Unit) -> dict[str, pa.Array]:
        """The index columns by role; what only depends on the steps is built once."""
        import pyarrow as pa

        key = (block.paths, block.first_step, block.steps)
        if key != self._key:
            self._key, self._steps = key, {}
            for role in ("step", "time"):
                if role in self.names:
                    self._steps[role] = array(np.tile(self._at(role, block), block.paths), self._kind(role))
        paths = np.repeat(np.arange(block.first_path, block.end_path), block.steps)
        found = {"path": array(paths, pa.int64()), **self._steps}
        return {role: found[role] for role in self.names if role in found}

    def _kind(self, role: str) -> pa.DataType:
        return self.schema.field(self.names[role]).type

    def _at(self, role: str, block: Block) -> np.ndarray:
        """Steps, or times in microseconds, of a rectangle (steps,)."""
        if role == "step" or self.stamps is None:
            return np.arange(block.first_step, block.end_step)
        return np.asarray(self.stamps(block.first_step, block.steps), np.int64)

    # from rows to values

    def wanted(self, unit: Unit, names: Container[str]) -> Unit:
        """The columns of a unit that must be read for the columns of these names."""
        return [column for column in unit if column.name in names]

    def needs(self, block: Block, unit: Unit) -> list[str]:
        """The columns to read for the columns of a unit."""
        return [*self.keys, *(column.name for column in unit)]

    def values(self, table: pa.Table, block: Block, unit: Unit, where: object) -> dict[str, np.ndarray]:
        """Stored values (paths, steps) by name; EnsembleError where a row is not what belongs there."""
        self._expect_index(table, block, where)
        return {c.name: values_of(table.column(c.name), c, where, block) for c in unit}

    def _expect_index(self, table: pa.Table, block: Block, where: object) -> None:
        for role, name in self.names.items():
            if role != "id" and name in table.column_names:  # what was not read is known to be right
                found = numbers(table.column(name), f"column {name}", where, block)
                expect(where, name, found.reshape(block.paths, block.steps), self.index_at(name, block), block)

    def index_at(self, name: str, block: Block) -> np.ndarray:
        """What an index column of numbers must hold in a rectangle: (paths, 1) or (steps,)."""
        if name == self.names.get("path"):
            return np.arange(block.first_path, block.end_path)[:, None]
        return self._at("step" if name == self.names.get("step") else "time", block)


class Long(Form):
    pass


class Panel(Form):
    """Rows by id, path, then step; ids are names of series, and what is revealed of them stands beside the value."""

    def __init__(self, layout: Layout, columns: Unit, stamps: Any, whole: Block, among: Unit):
        self.value = layout.name("value")
        super().__init__(layout, columns, stamps, whole, among)
        self.units = [*owned(columns)]

    def _schema(self) -> pa.Schema:
        import pyarrow as pa

        units = owned(self.columns)
        types = {some[0].type for some in owned(self.among)}
        kind = arrow_type(types.pop() if len(types) == 1 else "float64")
        value = pa.field(self.value, kind, nullable=any(some[0].gaps for some in units))
        beside = [labels(some) for some in units]
        gappy = {label for some in units for label, c in zip(labels(some), some[1:], strict=True) if c.gaps}
        revealed = [
            pa.field(label, pa.float64(), nullable=label in gappy or not all(label in some for some in beside))
            for label in dict.fromkeys(label for some in beside for label in some)
        ]
        return pa.schema([*self._index_fields(), value, *revealed])

    def table(self, block: Block, unit: Unit, values: Mapping[str, np.ndarray]) -> pa.Table:
        import pyarrow as pa

        index = {"id": pa.repeat(unit[0].name, block.rows), **self._index(block, unit)}
        kind = self.schema.field(self.value).type
        main = np.ascontiguousarray(values[unit[0].name], kind.to_pandas_dtype())
        beside = {label: (values[c.name], c.gaps) for label, c in zip(labels(unit), unit[1:], strict=True)}
        data = [array(main, kind, unit[0].gaps)]
        for place in self.schema.names[len(index) + 1 :]:
            some, gaps = beside.get(place, (None, False))
            data.append(pa.nulls(block.rows, pa.float64()) if some is None else array(some, pa.float64(), gaps))
        return pa.Table.from_arrays([*index.values(), *data], schema=self.schema)

    def wanted(self, unit: Unit, names: Container[str]) -> Unit:
        return unit if super().wanted(unit, names) else []

    def needs(self, block: Block, unit: Unit) -> list[str]:
        return self.schema.names

    def values(self, table: pa.Table, block: Block, unit: Unit, where: object) -> dict[str, np.ndarray]:
        self._expect_index(table, block, where)
        self._expect_id(table, unit[0].name, block, where)
        places = dict(zip([self.value, *labels(unit)], unit, strict=True))
        for name in self.schema.names[len(self.names) :]:
            if name not in places and table.column(name).null_count < table.num_rows:
                raise EnsembleError(f"{where} is damaged: column {name} has values where {unit[0].name} has none")
        return {c.name: values_of(table.column(name), c, where, block) for name, c in places.items()}

    def _expect_id(self, table: pa.Table, name: str, block: Block, where: object) -> None:
        import pyarrow.compute as pc

        for chunk in table.column(self.names["id"]).chunks:
            other = next((each for each in pc.unique(chunk).to_pylist() if each != name), name)
            if other != name:
                raise EnsembleError(
                    f"{where} is damaged: where rows of {name} belong ({block}), column {self.names['id']} has {other}"
                )


class Nested(Form):
    """A row a path: its number, the first step, the time of that, and a list of values a series."""

    def _schema(self) -> pa.Schema:
        import pyarrow as pa

        lists = [pa.list_(pa.field("element", arrow_type(c.type), nullable=c.gaps)) for c in self.columns]
        fields = [_field(c.name, kind, c, False) for c, kind in zip(self.columns, lists, strict=True)]
        return pa.schema([*self._index_fields(), *fields])

    def pieces(self, row_bytes: int) -> Iterator[Block]:
        yield from _ranges(self.whole, row_bytes)

    def rows(self, block: Block) -> int:
        return block.paths

    def start(self, unit: int, block: Block) -> int:
        return block.first_path - self.whole.first_path

    def table(self, block: Block, unit: Unit, values: Mapping[str, np.ndarray]) -> pa.Table:
        import pyarrow as pa

        ends = array(np.arange(block.paths + 1, dtype=np.int32) * np.int32(block.steps), pa.int32())
        lists = []
        for column in unit:
            inside = array(values[column.name], arrow_type(column.type), column.gaps)
            lists.append(pa.ListArray.from_arrays(ends, inside, type=self.schema.field(column.name).type))
        index = [array(self._of_rows(role, block), self._kind(role)) for role in self.names]
        return pa.Table.from_arrays([*index, *lists], schema=self.schema)

    def _of_rows(self, role: str, block: Block) -> np.ndarray:
        if role == "path":
            return np.arange(block.first_path, block.end_path)
        return np.repeat(self._at(role, Block(block.first_path, 1, block.first_step, 1)), block.paths)

    def values(self, table: pa.Table, block: Block, unit: Unit, where: object) -> dict[str, np.ndarray]:
        first = Block(block.first_path, block.paths, block.first_step, 1)
        for role, name in self.names.items():
            found = numbers(table.column(name), f"column {name}", where, first)
            expect(where, name, found[:, None], self._of_rows(role, block)[:, None], first)
        return {c.name: self._list(table, c, block, where) for c in unit}

    def _list(self, table: pa.Table, column: Column, block: Block, where: object) -> np.ndarray:
        import pyarrow.compute as pc

        lists = table.column(column.name)
        first = Block(block.first_path, block.paths, block.first_step, 1)
        sizes = numbers(pc.list_value_length(lists), f"column {column.name}", where, first)
        expect(where, f"{column.name} (its length)", sizes[:, None], np.full((block.paths, 1), block.steps), block)
        return values_of(pc.list_flatten(lists), column, where, block)


class Wide(Form):
    """A row a step, a column a path; one series."""

    def _schema(self) -> pa.Schema:
        import pyarrow as pa

        kind, column = arrow_type(self.columns[0].type), self.columns[0]
        return pa.schema([*self._index_fields(), *(_field(name, kind, column) for name in self._paths(self.whole))])

    def _paths(self, block: Block) -> list[str]:
        return [self.layout.of_path(path) for path in range(block.first_path, block.end_path)]

    def pieces(self, row_bytes: int) -> Iterator[Block]:
        yield from _ranges(self.whole, row_bytes)

    def pages(self, row_bytes: int) -> Iterator[tuple[Block, Unit]]:
        yield self.whole, self.columns

    def rows(self, block: Block) -> int:
        return block.steps

    def start(self, unit: int, block: Block) -> int:
        return block.first_step - self.whole.first_step

    def table(self, block: Block, unit: Unit, values: Mapping[str, np.ndarray]) -> pa.Table:
        import pyarrow as pa

        kind, data = arrow_type(unit[0].type), values[unit[0].name]
        index = [array(self._at(role, block), self._kind(role)) for role in self.names]
        return pa.Table.from_arrays([*index, *(array(path, kind, unit[0].gaps) for path in data)], schema=self.schema)

    def needs(self, block: Block, unit: Unit) -> list[str]:
        return [*self.keys, *self._paths(block)]

    def values(self, table: pa.Table, block: Block, unit: Unit, where: object) -> dict[str, np.ndarray]:
        for role, name in self.names.items():
            first = Block(block.first_path, 1, block.first_step, block.steps)
            found = numbers(table.column(name), f"column {name}", where, first)
            expect(where, name, found[None], self._at(role, block)[None], first)
        rows = []
        for path, name in enumerate(self._paths(block), block.first_path):
            here = Block(path, 1, block.first_step, block.steps)
            rows.append(values_of(table.column(name), unit[0], where, here))
        return {unit[0].name: np.concatenate(rows)}


def _ranges(whole: Block, row_bytes: int) -> Iterator[Block]:
    """Ranges of paths with all steps of `whole`."""
    yield from cut(whole, max(min(GROUP_ROWS, BUFFER_BYTES // row_bytes), whole.steps))


def _field(name: str, kind: pa.DataType, column: Column | None = None, nullable: bool | None = None) -> pa.Field:
    import pyarrow as pa

    unit = {"unit": column.unit} if column is not None and column.unit else None
    nullable = column is not None and column.gaps if nullable is None else nullable
    return pa.field(name, kind, nullable=nullable, metadata=unit)


def arrow_type(name: str) -> pa.DataType:
    """The Arrow type of a column's type."""
    import pyarrow as pa

    return {"float64": pa.float64(), "float32": pa.float32(), "int64": pa.int64()}[name]


def array(values: np.ndarray, kind: pa.DataType, gaps: bool = False) -> pa.Array:
    """An Arrow array over the same memory, where that is in one piece; with `gaps`, null for what is NaN."""
    import pyarrow as pa

    if gaps:
        flat_values = np.ascontiguousarray(values).reshape(-1)
        return pa.array(flat_values, kind, mask=np.isnan(flat_values))
    return pa.Array.from_buffers(kind, values.size, [None, pa.py_buffer(np.ascontiguousarray(values).reshape(-1))])
