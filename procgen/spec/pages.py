"""What a Parquet file becomes when it is unpacked, told by the headers of its pages before any is.

A footer may say anything, and a few bytes of a page may stand for gigabytes: a page is unpacked to the size that its
own header says, and holds as many values. Pages and their headers: Apache Parquet, file format, and Apache Thrift,
compact protocol.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Sequence
from io import SEEK_END, BytesIO
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO

from procgen.spec.records import dataclass

if TYPE_CHECKING:
    import pyarrow as pa
    import pyarrow.parquet as pq

MOST_BYTES = 128 << 20  # of a page; usual writers make pages of 1 MB
MOST_PAGES = 50_000  # besides one for each kB of the file
_FIXED = {3: 1, 7: 8}  # bytes of a value by its Thrift type: a byte, a double
_VARINTS = (4, 5, 6)
_LONGEST = 10  # bytes of a varint of 64 bits
_DEEPEST = 8
_HEADERS = (256, 1 << 20)  # bytes of a header, of nearly all and of any
_SMALL = 1 << 18  # bytes of a chunk that are read at once, not header by header
_WIDEST = 64  # bytes of a value of fixed length: the widest decimals have 32


class Bomb(ValueError):
    """A file that is damaged, or grows out of all proportion when it is read; the message says where."""


def read_within(path: Path, names: Sequence[str] | None, most: int) -> pa.Table:
    """The columns of these names, or all, of a Parquet file of anyone's; Bomb where they take more than `most` bytes.

    Texts that repeat are kept once while it is read, and their lengths added up before they are written out.
    """
    import pyarrow as pa
    import pyarrow.compute as pc
    import pyarrow.parquet as pq

    with pq.ParquetFile(path) as file:
        schema = file.schema_arrow
    texts = [field.name for field in schema if _is_text(field.type)]
    with pq.ParquetFile(path, read_dictionary=texts) as file:
        names = schema.names if names is None else names
        values = refuse_bombs(path, file.metadata, names)
        _refuse_more(path, 8 * values, most)
        table = file.read(columns=list(names), use_threads=False)
    size = 0
    for k, column in enumerate(table.columns):
        if pa.types.is_dictionary(column.type) and table.column_names[k] in texts:
            for chunk in column.chunks:
                lengths = pc.take(pc.binary_length(chunk.dictionary), chunk.indices)
                size += pc.sum(lengths).as_py() or 0
            _refuse_more(path, size, most)
            table = table.set_column(k, table.column_names[k], column.cast(column.type.value_type))
    return table


def _is_text(kind: pa.DataType) -> bool:
    import pyarrow as pa

    known = (pa.types.is_string, pa.types.is_binary, pa.types.is_large_string, pa.types.is_large_binary)
    return any(test(kind) for test in known)


def _refuse_more(path: Path, size: int, most: int) -> None:
    if size > most:
        raise Bomb(
            f"{path} is refused: its {path.stat().st_size:,} bytes would become {size:,} in memory; if that is meant, "
            "write it again without compression and dictionaries"
        )


def refuse_bombs(path: Path, found: pq.FileMetaData, names: Collection[str]) -> int:
    """The values that the columns of these names hold, after looking at all of their pages.

    Bomb where a page grows beyond MOST_BYTES, or holds more values than the footer says.
    """
    pages = Pages(path, path.stat().st_size, found)
    with path.open("rb", buffering=0) as file:
        return sum(pages.values(*_brought(file, chunk)) for chunk in pages.chunks if chunk.name in names)


def _brought(file: BinaryIO, chunk: Chunk) -> tuple[BinaryIO, Chunk, int]:
    """What to look for the pages of a chunk in: its bytes and a few more, where they are few; where these begin."""
    if chunk.begin < 0 or not 0 <= chunk.size <= _SMALL:
        return file, chunk, 0
    file.seek(chunk.begin)
    return BytesIO(file.read(chunk.size + _HEADERS[0])), chunk, chunk.begin


@dataclass(frozen=True)
class Chunk:
    """The bytes of a file that hold one column in one row group, as its footer says; widest: bytes of a fixed value."""

    name: str
    begin: int
    size: int
    column: Any
    widest: int

    @property
    def end(self) -> int:
        return self.begin + self.size


class Pages:
    """Looks at the pages of a Parquet file: path, bytes of it, and its footer."""

    def __init__(self, path: Any, size: int, found: pq.FileMetaData):
        self._path, self._most, self._seen = path, MOST_PAGES + size // 1000, 0
        of = [field.name for field in found.schema.to_arrow_schema() for _ in range(_leaves(field.type))]
        groups = (found.row_group(k) for k in range(found.num_row_groups))
        self.chunks = [
            Chunk(of[j], chunk_begin(column), column.total_compressed_size, column, found.schema.column(j).length)
            for group in groups
            for j, column in enumerate(map(group.column, range(group.num_columns)))
        ]

    def values(self, file: BinaryIO, chunk: Chunk, offset: int = 0) -> int:
        """The values of a chunk by the headers of its pages, in what holds the file from `offset` on; Bomb."""
        here = 0
        for size, count in _pages(self._path, file, chunk.begin - offset, chunk.size):
            self._seen, here = self._seen + 1, here + count
            _refuse(self._path, chunk, size, here, self._seen > self._most)
        return here


def chunk_begin(column: Any) -> int:
    """Where in the file the first page of a column in a row group begins, as its footer says."""
    begin = column.data_page_offset
    if column.has_dictionary_page and column.dictionary_page_offset:
        begin = min(begin, column.dictionary_page_offset)
    return int(begin)


def _leaves(kind: pa.DataType) -> int:
    """Columns in the file that a column of this type is kept in."""
    return sum(_leaves(kind.field(k).type) for k in range(kind.num_fields)) if kind.num_fields else 1


def _refuse(path: Any, chunk: Chunk, size: int, values: int, many: bool) -> None:
    column, what = chunk.column, ""
    if not 0 <= size <= MOST_BYTES:
        what = f"a page of column {column.path_in_schema} would become {size:,} bytes, more than {MOST_BYTES:,}"
    elif values > column.num_values:
        what = f"column {column.path_in_schema} has more values than the {column.num_values:,} that its footer says"
    elif many:
        what = "it is cut into more pages than its size can fill"
    elif column.physical_type == "FIXED_LEN_BYTE_ARRAY" and chunk.widest > _WIDEST:
        what = f"column {column.path_in_schema} has values of {chunk.widest:,} bytes each"
    if what:
        raise Bomb(f"{path} is refused: {what}; write it again with pages of usual size")


def _pages(path: Any, file: BinaryIO, begin: int, length: int) -> Iterator[tuple[int, int]]:
    """(bytes when unpacked, values) of each page of a column chunk; of dictionaries no values."""
    for _, header in headers(path, file, begin, length):
        yield header.get(2, -1), 0 if header.get(1, -1) == 2 else header.get(501, header.get(801, 0))


def headers(path: Any, file: BinaryIO, begin: int, length: int) -> Iterator[tuple[int, dict[int, int]]]:
    """Where the content of each page of a column chunk begins, and what its header says: see `_struct`."""
    end, last = begin + length, (b"", dict[int, int]())
    while 0 <= begin < end:
        last = text, header = _header(path, file, begin, *last)
        yield begin + len(text), header
        packed = header.get(3, -1)
        if packed < 0:
            return
        begin += len(text) + packed


def _header(path: Any, file: BinaryIO, begin: int, last: bytes, found: dict[int, int]) -> tuple[bytes, dict[int, int]]:
    """The header that begins at a place of a file, and what it says; most are as the `last` one is."""
    for most in _HEADERS:
        file.seek(begin)
        data = file.read(most)
        if last and data.startswith(last):
            return last, found
        try:
            found = {}
            return data[: _struct(data, 0, 0, 0, found)], found
        except IndexError:  # it goes on
            if len(data) < most:
                raise Bomb(f"{path} is damaged: it ends inside of a page") from None
        except ValueError:
            break
    raise Bomb(f"{path} is damaged: a header of a page cannot be read")


def _struct(data: bytes, at: int, place: int, depth: int, found: dict[int, int]) -> int:
    """Add the whole numbers of a Thrift structure to `found`, by the numbers of their fields; where it ends.

    A field of a structure within one has a hundred times the number of that one, and its own. All else is passed over.
    """
    number = 0
    while head := data[at]:
        at += 1
        if head >> 4:
            number += head >> 4
        else:
            number, at = _varint(data, at)
            number = (number >> 1) ^ -(number & 1)
        kind = head & 15
        if kind in _VARINTS:
            value, at = _varint(data, at)
            found[place + number] = (value >> 1) ^ -(value & 1)
        elif kind in _FIXED:
            at += _FIXED[kind]
        elif kind == 8:  # a text
            value, at = _varint(data, at)
            at += value
        elif kind == 12 and depth < _DEEPEST:
            at = _struct(data, at, 100 * (place + number), depth + 1, found)
        elif kind not in (1, 2):  # true, false
            raise ValueError("of another kind")
    return at + 1


def _varint(data: bytes, at: int) -> tuple[int, int]:
    byte = data[at]
    if byte < 128:
        return byte, at + 1
    value = 0
    for k in range(_LONGEST):
        byte = data[at + k]
        value |= (byte & 127) << (7 * k)
        if byte < 128:
            return value, at + k + 1
    raise ValueError("longer than a whole number")


def codecs(path: Path) -> list[list[int]]:
    """How each column is packed, by row group, as the format numbers it; of a footer that cannot be read none.

    PyArrow, asked for one that it does not know, ends the process (26.0: an exception that it does not catch).
    """
    try:
        with path.open("rb") as file:
            file.seek(-8, SEEK_END)
            size = int.from_bytes(file.read(4), "little")
            file.seek(-8 - size, SEEK_END)
            footer, _ = _value(file.read(size), 0, 12, 0)
        return [[column[3][4] for column in group[1]] for group in footer[4]]
    except (OSError, LookupError, ValueError, TypeError):
        return []


def _value(data: bytes, at: int, kind: int, depth: int) -> tuple[Any, int]:
    """A value of a Thrift structure and where it ends: whole numbers, lists, and structures by number of field."""
    if kind in _VARINTS:
        value, at = _varint(data, at)
        return (value >> 1) ^ -(value & 1), at
    if kind in _FIXED or kind == 8:
        size, at = (_FIXED[kind], at) if kind in _FIXED else _varint(data, at)
        return None, at + size
    if kind in (9, 10) and depth < 2 * _DEEPEST:
        count, inside, at = data[at] >> 4, data[at] & 15, at + 1
        if count == 15:
            count, at = _varint(data, at)
        values: list[Any] = [None] * count if count <= len(data) else []
        for k in range(count):
            values[k], at = (None, at + 1) if inside in (1, 2) else _value(data, at, inside, depth + 1)
        return values, at
    if kind != 12 or depth >= 2 * _DEEPEST:
        raise ValueError("of another kind")
    fields: dict[int, Any] = {}
    number = 0
    while head := data[at]:
        at += 1
        if head >> 4:
            number += head >> 4
        else:
            number, at = _varint(data, at)
            number = (number >> 1) ^ -(number & 1)
        if head & 15 not in (1, 2):  # true, false
            fields[number], at = _value(data, at, head & 15, depth + 1)
    return fields, at + 1
