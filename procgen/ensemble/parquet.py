"""Parts as Parquet files: written row group by row group, and read back in blocks.

Values are written plain: nothing compresses random digits, and dictionaries and statistics cost more than
all the rest. The index columns repeat, so zstd makes them vanish, and they alone carry statistics, which let
readers skip. Measured per row of layout long: values 5 ns, path 2, step 3, time 3; delta encoding 4.5, 5, 5.5.
zstd's quick levels do not see again what is 30,000 rows away: steps of such paths take them 23 ns and 1.5 bytes, and
times are not made smaller at all. Those of long paths are written as differences (delta encoding): 5 ns, 0.04 bytes.
"""

from __future__ import annotations

import contextlib
import inspect
import json
from collections.abc import Container, Iterator, Mapping, Sequence
from functools import cache, partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from procgen.ensemble.again import Again
from procgen.ensemble.columns import Column
from procgen.ensemble.errors import EnsembleError, refuse_unread
from procgen.ensemble.forms import Form, Unit, form
from procgen.ensemble.layouts import Layout
from procgen.ensemble.places import Place, readable
from procgen.ensemble.plain import Plain, Room, new
from procgen.ensemble.plan import GROUP_ROWS, Block, cut
from procgen.ensemble.reading import fits
from procgen.ensemble.watched import Watched
from procgen.spec.pages import Bomb, refuse_bombs

if TYPE_CHECKING:
    import pyarrow as pa
    import pyarrow.parquet as pq

LONG = 10_000  # steps of a path from which on they are written as differences
FAST = -5  # zstd's quick levels are as small on columns that repeat
IDENTITY = b"procgen"  # metadata: which spec, seed, paths and steps
NODES = b"procgen.nodes"  # metadata: the digest nodes of the part
LARGEST = 4 * GROUP_ROWS  # rows of a row group that are read at once, whoever wrote it

Blocks = Iterator[tuple[Block, dict[str, np.ndarray]]]


class PartWriter:
    """Writes one file of a part, row group by row group, as a context; `nodes` goes into the footer at its end."""

    def __init__(self, path: Path, rows: Form, identity: Mapping[str, Any]):
        import pyarrow as pa
        import pyarrow.parquet as pq

        self.form = rows
        self.nodes: dict[str, Any] = {}
        columns = [f"{field.name}.list.element" if _is_list(field) else field.name for field in rows.schema]
        differences = rows.by_step if rows.whole.steps >= LONG else []
        packed = [name for name in rows.keys if name not in differences]
        self._sink = pa.OSFile(str(path), "wb")
        self._file = pq.ParquetWriter(
            self._sink,
            rows.schema.with_metadata({IDENTITY: json.dumps(identity)}),
            compression=dict.fromkeys(columns, "none") | dict.fromkeys(packed, "zstd"),
            compression_level=dict.fromkeys(packed, FAST),
            column_encoding=dict.fromkeys(differences, "DELTA_BINARY_PACKED"),
            use_dictionary=[name for role, name in rows.names.items() if role == "id"],
            write_statistics=rows.keys,
            write_batch_size=1 << 17,
            **_long_pages(),
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
            self.page(group, self.form.columns, batch, values)

    def page(self, group: Block, unit: Unit, batch: Block, values: Mapping[str, np.ndarray]) -> None:
        """Add a unit of the rectangle `group` as one row group, from values of `batch`."""
        inside = {column.name: values[column.name][group.within(batch)] for column in unit}
        rowgroup = self.form.table(group, unit, inside)
        self._file.write_table(rowgroup, row_group_size=max(rowgroup.num_rows, 1))


@cache
def _long_pages() -> dict[str, int]:
    """Pages as long as their size allows: versions that cut them at 20,000 rows have far more to set up and to read."""
    import pyarrow.parquet as pq

    known = inspect.signature(pq.ParquetWriter).parameters
    return {"max_rows_per_page": GROUP_ROWS} if "max_rows_per_page" in known else {}


def _is_list(field: pa.Field) -> bool:
    import pyarrow as pa

    return pa.types.is_list(field.type)


def footer(path: Place) -> tuple[dict[str, Any], dict[str, Any], pq.FileMetaData]:
    """A part's identity, digest nodes and Parquet metadata; EnsembleError when it is not a part of ours."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    try:
        found = pq.read_metadata(readable(path))
        texts = found.metadata or {}
        return json.loads(texts[IDENTITY]), json.loads(texts[NODES]), found
    except (OSError, pa.ArrowException, ValueError, RecursionError) as error:
        refuse_unread(error, path)
        raise EnsembleError(f"{path} cannot be read as Parquet: {_first_line(error)}") from None
    except KeyError:
        raise EnsembleError(f"{path} was not written by procgen render, or was changed since") from None


def is_parquet(path: Place) -> bool:
    """Whether a file can be read as Parquet, whoever wrote it."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    try:
        pq.read_metadata(readable(path))
    except (OSError, pa.ArrowException, ValueError) as error:
        refuse_unread(error, path)
        return False
    return True


def _first_line(error: BaseException) -> str:
    return str(error).strip().partition("\n")[0]


def read(
    folder: Place,
    name: str,
    part: Block,
    layout: Layout,
    columns: Sequence[Column],
    stamps: Any = None,
    first_path: int = 0,
    end_path: int | None = None,
    names: Container[str] | None = None,
    room: Room = new,
) -> Blocks:
    """Blocks of the part of that name in row order with their stored values (paths, steps), in bounded memory.

    Index columns are held against what the part must contain; the first row that differs is named. What lies outside
    the paths from `first_path` to `end_path` is skipped where that can be. `columns` are all that the ensemble has,
    `names` those that are wanted, all when None. `room` gives memory for values, which those of a later block may be
    in, too.
    """
    names = {column.name for column in columns} if names is None else names
    end = part.end_path if end_path is None else end_path
    if layout.streams:
        wanted = [column for column in columns if column.name in names]
        yield from _read_groups(folder / name, form(layout, wanted, stamps, part), first_path, end, room)
        return
    held = {folder / file: some for file, some in layout.files(name, columns).items()}
    files = {
        path: form(layout, some, stamps, part, columns)
        for path, some in held.items()
        if any(c.name in names for c in some)
    }
    for piece in next(iter(files.values())).pieces(8 * len(columns)) if files else ():
        if piece.end_path > first_path and piece.first_path < end:
            found: dict[str, np.ndarray] = {}
            for path, rows in files.items():
                found |= _piece(path, rows, piece, names)
            yield piece, found


def _read_groups(path: Place, rows: Form, first_path: int, end_path: int, room: Room) -> Blocks:
    """Blocks of layout long, one row group in memory, however it is cut into them."""
    part, unit = rows.whole, rows.units[0]
    with _opened(path, rows) as file:
        row, plain = 0, Plain(path, file, room)
        again = Again(path, file.metadata, rows.by_step, plain.codecs)
        for group in range(file.num_row_groups):
            here = range(row, row + file.metadata.row_group(group).num_rows)
            row = here.stop
            a, b = part.first_path + here.start // part.steps, part.first_path + (row - 1) // part.steps
            if here and b >= first_path and a < end_path:
                whole = here.start % part.steps == 0 and len(here) % part.steps == 0
                known = again.known(group) if whole else set()
                known |= {
                    name
                    for name in rows.keys
                    if name not in known and plain.holds(group, name, partial(_agree, rows, name, here.start))
                }
                needed = [name for name in rows.needs(part, unit) if name not in known]
                for begin, table in _tables(file, plain, group, needed):
                    for block in pieces(range(here.start + begin, here.start + begin + table.num_rows), part):
                        some = table.slice(rows.start(0, block) - here.start - begin, block.rows)
                        yield block, rows.values(some, block, unit, path)
                if whole:
                    again.found_right()


def _agree(rows: Form, name: str, start: int, row: int, numbers: np.ndarray) -> bool:
    """Whether numbers of a column, from a row of a row group on that begins at row `start`, are those of the rows."""
    at = 0
    for block in pieces(range(start + row, start + row + len(numbers)), rows.whole):
        some = numbers[at : at + block.rows].reshape(block.paths, block.steps)
        if not np.equal(some, rows.index_at(name, block)).all():
            return False
        at += block.rows
    return True


def _tables(
    file: pq.ParquetFile, plain: Plain, group: int, names: Sequence[str]
) -> Iterator[tuple[int, pa.Table]]:
    """A row group with the number of its first row: whole, or in runs where it is larger than any of ours."""
    import pyarrow as pa

    if file.metadata.row_group(group).num_rows <= LARGEST:
        arrays = plain.read(group, names)
        others = [name for name in names if name not in arrays]
        if others:
            table = file.read_row_group(group, columns=others, use_threads=False)
            arrays |= dict(zip(table.column_names, table.columns, strict=True))
        yield 0, pa.table(arrays)
        return
    begin = 0
    for batch in file.iter_batches(GROUP_ROWS, [group], names, use_threads=False):
        yield begin, pa.Table.from_batches([batch])
        begin += batch.num_rows


def _piece(path: Place, rows: Form, piece: Block, names: Container[str]) -> dict[str, np.ndarray]:
    """The wanted columns of one file in a rectangle."""
    found: dict[str, np.ndarray] = {}
    with _opened(path, rows) as file:
        groups = [file.metadata.row_group(k).num_rows for k in range(file.num_row_groups)]
        edges = np.concatenate([[0], np.cumsum(groups, dtype=np.int64)])
        for number, unit in enumerate(rows.units):
            if wanted := rows.wanted(unit, names):
                start = rows.start(number, piece)
                here = range(start, start + rows.rows(piece))
                table = _rows(file, edges, here, rows.needs(piece, wanted))
                found |= rows.values(table, piece, wanted, path)
    return {name: values for name, values in found.items() if name in names}


def _rows(file: pq.ParquetFile, edges: np.ndarray, here: range, names: Sequence[str]) -> pa.Table:
    """A run of rows, from the row groups that hold it, whatever those are."""
    first = int(np.searchsorted(edges, here.start, side="right")) - 1
    end = int(np.searchsorted(edges, here.stop, side="left"))
    if int(edges[end] - edges[first]) > len(here) + LARGEST:
        raise EnsembleError(
            f"its row groups of {int(edges[end] - edges[first]):,} rows are too large to be read; write it again with "
            f"at most {GROUP_ROWS:,} rows in each"
        )
    table = file.read_row_groups([*range(first, end)], columns=list(names), use_threads=False)
    return table.slice(here.start - int(edges[first]), len(here))


@contextlib.contextmanager
def _opened(path: Place, rows: Form) -> Iterator[pq.ParquetFile]:
    """A file whose columns and number of rows are as they must be; EnsembleError otherwise, or when it breaks."""
    import pyarrow as pa

    try:
        source = path if isinstance(path, Path) else Watched(path.open(), path)
        with _file(path, source, rows) as file:
            _expect_schema(path, file.schema_arrow, rows.schema)
            if file.metadata.num_rows != rows.total():
                raise EnsembleError(
                    f"{path} is damaged: expected {rows.total()} rows ({rows.whole}), got {file.metadata.num_rows}"
                )
            _refuse_bombs(path, source, file, rows)
            yield file
    except Bomb as error:
        raise EnsembleError(f"{error}, or draw it again with --resume (resume=True)") from None
    except MemoryError as error:
        refuse_unread(error, path)
        raise EnsembleError(
            f"{path} cannot be read in the memory there is ({_first_line(error) or 'none is left'}); give it more, or, "
            "if it is damaged, draw it again with --resume (resume=True)"
        ) from None
    except (OSError, UnicodeDecodeError, pa.ArrowException) as error:
        refuse_unread(error, path)
        raise EnsembleError(
            f"{path} is damaged: {_first_line(error)}; draw it again with --resume (resume=True)"
        ) from None


def _file(path: Place, source: Path | Watched, rows: Form) -> pq.ParquetFile:
    import pyarrow.parquet as pq

    try:
        return pq.ParquetFile(source, read_dictionary=rows.texts)
    except KeyError:
        raise EnsembleError(f"{path} is damaged: it has no column {rows.texts[0]}") from None


def _refuse_bombs(path: Place, source: Path | Watched, file: pq.ParquetFile, rows: Form) -> None:
    """EnsembleError for a file whose pages hold more than belongs there; behind a URL they are seen when read."""
    wanted = sum(rows.whole.rows if _is_list(field) else rows.total() for field in rows.schema)
    names = rows.schema.names
    if isinstance(source, Watched):
        found = source.expect(file.metadata, names)
    else:
        found = refuse_bombs(source, file.metadata, names)
    if found != wanted:
        raise EnsembleError(
            f"{path} is damaged: expected {wanted:,} values, got {found:,}; draw it again with --resume (resume=True)"
        )


def _expect_schema(path: Place, found: pa.Schema, expected: pa.Schema) -> None:
    types: dict[str, list[pa.DataType]] = {}
    for name, kind in zip(found.names, found.types, strict=True):
        types.setdefault(name, []).append(kind)
    for field in expected:
        here = types.get(field.name, [])
        if len(here) != 1 or not fits(here[0], field.type):
            raise EnsembleError(
                f"{path} is damaged: expected one column {field.name} of type {field.type}, "
                f"got {' and '.join(map(str, here)) or 'none'}"
            )


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
