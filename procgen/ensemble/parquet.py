"""One part as a Parquet file, long layout: path, step, time, then one column a value, path then step.

Values are written plain: nothing compresses random digits, and dictionaries and statistics cost more than
all the rest. The index columns repeat, so zstd makes them vanish, and they alone carry statistics, which let
readers skip. Measured per row: values 5 ns, path 2, step 3, time 3; delta encoding 4.5, 5, 5.5.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from procgen.ensemble.columns import Column
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.plan import GROUP_ROWS, Block, cut

if TYPE_CHECKING:
    import pyarrow as pa
    import pyarrow.parquet as pq

FAST = -5  # zstd's quick levels are as small on columns that repeat
IDENTITY = b"procgen"  # metadata: which spec, seed, paths and steps
NODES = b"procgen.nodes"  # metadata: the digest nodes of the part


def schema(columns: Sequence[Column], stamped: bool, metadata: Mapping[bytes, str] | None = None) -> pa.Schema:
    """The Arrow schema of the long layout."""
    import pyarrow as pa

    fields = [pa.field("path", pa.int64(), nullable=False), pa.field("step", pa.int64(), nullable=False)]
    if stamped:
        fields.append(pa.field("time", pa.timestamp("us", tz="UTC"), nullable=False))
    for column in columns:
        unit = {"unit": column.unit} if column.unit else None
        fields.append(pa.field(column.name, _type(column.type), nullable=False, metadata=unit))
    return pa.schema(fields, metadata=metadata)


def _type(name: str) -> pa.DataType:
    import pyarrow as pa

    return {"float64": pa.float64(), "float32": pa.float32(), "int64": pa.int64()}[name]


def array(values: np.ndarray, kind: pa.DataType) -> pa.Array:
    """An Arrow array over the same memory."""
    import pyarrow as pa

    return pa.Array.from_buffers(kind, values.size, [None, pa.py_buffer(values.reshape(-1))])


class Index:
    """The index columns of blocks; what only depends on a block's steps is built once."""

    def __init__(self, stamps: Any):
        self.stamps = stamps
        self._key: tuple[int, int, int] | None = None
        self._arrays: list[pa.Array] = []

    def __call__(self, block: Block) -> list[pa.Array]:
        """Arrow arrays of path, step and, with stamps, time."""
        import pyarrow as pa

        key = (block.paths, block.first_step, block.steps)
        if key != self._key:
            steps = np.arange(block.first_step, block.end_step)
            self._arrays = [array(np.tile(steps, block.paths), pa.int64())]
            if self.stamps is not None:
                times = np.asarray(self.stamps(block.first_step, block.steps), np.int64)
                self._arrays.append(array(np.tile(times, block.paths), pa.timestamp("us", tz="UTC")))
            self._key = key
        paths = np.arange(block.first_path, block.end_path)
        return [array(np.repeat(paths, block.steps), pa.int64()), *self._arrays]


def table(
    schema: pa.Schema, index: Index, columns: Sequence[Column], block: Block, values: Mapping[str, np.ndarray]
) -> pa.Table:
    """A block as rows, path then step."""
    import pyarrow as pa

    data = [array(values[column.name], _type(column.type)) for column in columns]
    return pa.Table.from_arrays(index(block) + data, schema=schema)


class PartWriter:
    """Writes one part, row group by row group, as a context; `nodes` goes into the footer at its end."""

    def __init__(self, path: Path, columns: Sequence[Column], stamps: Any, identity: Mapping[str, Any]):
        import pyarrow as pa
        import pyarrow.parquet as pq

        self.columns = columns
        self.nodes: dict[str, Any] = {}
        self.schema = schema(columns, stamps is not None, {IDENTITY: json.dumps(identity)})
        self.index = Index(stamps)
        keys = [name for name in ("path", "step", "time") if name in self.schema.names]
        self._sink = pa.OSFile(str(path), "wb")
        self._file = pq.ParquetWriter(
            self._sink,
            self.schema,
            compression=dict.fromkeys(self.schema.names, "none") | dict.fromkeys(keys, "zstd"),
            compression_level=dict.fromkeys(keys, FAST),
            use_dictionary=False,
            write_statistics=keys,
            write_batch_size=1 << 17,
        )

    def __enter__(self) -> PartWriter:
        return self

    def __exit__(self, kind: type[BaseException] | None, *rest: object) -> None:
        try:
            if kind is None:
                self._file.add_key_value_metadata({NODES: json.dumps(self.nodes)})
                self._file.close()
        finally:
            self._file.is_open = False  # after a failure, no second attempt when it is collected
            self._sink.close()

    def write(self, batch: Block, values: Mapping[str, np.ndarray]) -> None:
        """Add stored values (paths, steps) of the next block, in row order."""
        for group in cut(batch, GROUP_ROWS):
            rows = slice(group.first_path - batch.first_path, group.end_path - batch.first_path)
            steps = slice(group.first_step - batch.first_step, group.end_step - batch.first_step)
            inside = {name: data[rows, steps] for name, data in values.items()}
            rowgroup = table(self.schema, self.index, self.columns, group, inside)
            self._file.write_table(rowgroup, row_group_size=group.rows)


def footer(path: Path) -> tuple[dict[str, Any], dict[str, Any], pq.FileMetaData]:
    """A part's identity, digest nodes and Parquet metadata; EnsembleError when it is not a part of ours."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    try:
        found = pq.read_metadata(path)
        texts = found.metadata or {}
        return json.loads(texts[IDENTITY]), json.loads(texts[NODES]), found
    except (OSError, pa.ArrowException, ValueError) as error:
        raise EnsembleError(f"{path} cannot be read as Parquet: {_first_line(error)}") from None
    except KeyError:
        raise EnsembleError(f"{path} was not written by procgen render, or was changed since") from None


def _first_line(error: BaseException) -> str:
    return str(error).strip().partition("\n")[0]


def read(
    path: Path,
    part: Block,
    columns: Sequence[Column],
    stamps: Any = None,
    first_path: int = 0,
    end_path: int | None = None,
) -> Iterator[tuple[Block, dict[str, np.ndarray]]]:
    """Blocks of a part in row order with their stored values (paths, steps), one row group in memory.

    Index columns are held against what the part must contain; the first row that differs is named. With
    `first_path` and `end_path`, row groups outside that range of paths are skipped.
    """
    import pyarrow as pa
    import pyarrow.parquet as pq

    try:
        with pq.ParquetFile(path) as file:
            _expect_schema(path, file.schema_arrow, columns, stamps is not None)
            names = [*(["time"] if stamps is not None else []), "path", "step", *(c.name for c in columns)]
            row = 0
            for group in range(file.num_row_groups):
                rows = file.metadata.row_group(group).num_rows
                here = range(row, row + rows)
                row += rows
                if row > part.rows:
                    break
                a, b = part.first_path + here.start // part.steps, part.first_path + (row - 1) // part.steps
                if rows and b >= first_path and (end_path is None or a < end_path):
                    table = file.read_row_group(group, columns=names, use_threads=False)
                    yield from _blocks(path, table, here, part, columns, stamps)
    except (OSError, pa.ArrowException) as error:
        raise EnsembleError(f"{path} is damaged: {_first_line(error)}; draw it again with --resume") from None
    if row != part.rows:
        raise EnsembleError(f"{path} is damaged: expected {part.rows} rows ({part}), it has another number")


def _expect_schema(path: Path, found: pa.Schema, columns: Sequence[Column], stamped: bool) -> None:
    for field in schema(columns, stamped):
        types = [str(kind) for name, kind in zip(found.names, found.types, strict=True) if name == field.name]
        if types != [str(field.type)]:
            raise EnsembleError(
                f"{path} is damaged: expected one column {field.name} of type {field.type}, "
                f"got {' and '.join(types) or 'none'}"
            )


def _blocks(path: Path, table: pa.Table, here: range, part: Block, columns: Sequence[Column], stamps: Any):
    flat = {name: _flat(path, table, name) for name in ["path", "step", *(c.name for c in columns)]}
    times = _flat(path, table, "time") if stamps is not None else None
    for block in pieces(here, part):
        start = (block.first_path - part.first_path) * part.steps + block.first_step - part.first_step
        rows = slice(start - here.start, start - here.start + block.rows)
        shaped = {name: data[rows].reshape(block.paths, block.steps) for name, data in flat.items()}
        _expect(path, "path", shaped.pop("path"), np.arange(block.first_path, block.end_path)[:, None], block)
        _expect(path, "step", shaped.pop("step"), np.arange(block.first_step, block.end_step), block)
        if times is not None:
            wanted = np.asarray(stamps(block.first_step, block.steps))
            _expect(path, "time", times[rows].reshape(block.paths, block.steps), wanted, block)
        yield block, shaped


def _flat(path: Path, table: pa.Table, name: str) -> np.ndarray:
    import pyarrow as pa

    column = table.column(name)
    if column.null_count:
        raise EnsembleError(f"{path} is damaged: column {name} has missing values")
    if column.num_chunks == 1:  # its memory as it is; `to_numpy` would import pandas for it
        chunk = column.chunk(0)
        kind = "<i8" if pa.types.is_timestamp(column.type) else np.dtype(column.type.to_pandas_dtype())
        return np.frombuffer(chunk.buffers()[1], kind, len(chunk), chunk.offset * np.dtype(kind).itemsize)
    return column.cast(pa.int64()).to_numpy() if pa.types.is_timestamp(column.type) else column.to_numpy()


def pieces(here: range, part: Block) -> Iterator[Block]:
    """Rows of a part as rectangles: the rest of a path, whole paths, the beginning of a path."""
    row = here.start
    while row < here.stop:
        path, step = divmod(row, part.steps)
        whole = (here.stop - row) // part.steps if step == 0 else 0
        steps = part.steps if whole else min(part.steps - step, here.stop - row)
        block = Block(part.first_path + path, max(whole, 1), part.first_step + step, steps)
        yield block
        row += block.rows


def _expect(path: Path, name: str, got: np.ndarray, wanted: np.ndarray, block: Block) -> None:
    if np.array_equal(got, np.broadcast_to(wanted, got.shape)):
        return
    i, j = np.argwhere(got != wanted)[0]
    raise EnsembleError(
        f"{path} is damaged: where path {block.first_path + i}, step {block.first_step + j} belongs, "
        f"column {name} has {got[i, j]}"
    )
