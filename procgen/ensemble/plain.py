"""Columns of plain numbers, read from where they stand in a file into memory that may be used again.

Our values are not compressed: a page is a header and the numbers. The reader of Parquet gets new memory for each row
group and gives it back, which costs more than to read (measured: a third of all processor time of a validation). What
is written in any other way is left to it.
"""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from procgen.spec.pages import chunk_begin, codecs, headers

if TYPE_CHECKING:
    import pyarrow as pa
    import pyarrow.parquet as pq

Room = Callable[[str, int], np.ndarray]  # name of a column, bytes: memory (uint8) that is used until the next row group

_TYPES = {"double": ("DOUBLE", "None"), "float": ("FLOAT", "None"), "int64": ("INT64", "None")}
_TIME = ("INT64", "timeUnit=microseconds")
_PLAIN, _DATA_PAGE, _AS_IS, _ZSTD = 0, 0, 0, 6  # as the format numbers them


def new(name: str, size: int) -> np.ndarray:
    """Memory of its own for each column of each row group."""
    return np.empty(size, np.uint8)


class Plain:
    """The columns of a file of this machine; of others nothing is plain."""

    def __init__(self, path: object, file: pq.ParquetFile, room: Room = new):
        self._path, self._found, self._room = path, file.metadata, room
        self.codecs: list[list[int]] = []
        self._at: dict[str, tuple[int, pa.DataType]] = {}
        if isinstance(path, Path) and sys.byteorder == "little":
            self.codecs = codecs(path)
            schema = file.schema_arrow
            leaves = {file.schema.column(k).path: k for k in range(len(file.schema))}
            for name, kind in zip(schema.names, schema.types, strict=True):
                if name in leaves and _is_plain(file.schema.column(leaves[name]), kind):
                    self._at[name] = leaves[name], kind

    def read(self, group: int, names: Sequence[str]) -> dict[str, pa.Array]:
        """Those of the named columns of a row group that are plain numbers."""
        import pyarrow as pa

        found: dict[str, pa.Array] = {}
        for name in names:
            if name in self._at:
                rows, kind = self._rows(group), self._at[name][1]
                out, at = self._room(name, rows * (kind.bit_width // 8)), 0
                for page in self._pages(group, name, out):
                    at += len(page)
                if at == len(out):
                    found[name] = pa.Array.from_buffers(kind, rows, [None, pa.py_buffer(out)])
        return found

    def holds(self, group: int, name: str, agrees: Callable[[int, np.ndarray], bool]) -> bool:
        """Whether a column of whole numbers is plain and all of it agrees, asked page by page: first row, numbers.

        What only is compared so is never in memory as a whole.
        """
        row = 0
        if name not in self._at or str(self._at[name][1]) in ("double", "float"):
            return False
        for page in self._pages(group, name):
            numbers = page.view(np.int64)
            if not agrees(row, numbers):
                return False
            row += len(numbers)
        return row == self._rows(group)

    def _rows(self, group: int) -> int:
        return int(self._found.row_group(group).num_rows)

    def _pages(self, group: int, name: str, out: np.ndarray | None = None) -> Iterator[np.ndarray]:
        """The bytes of each page of a column, in `out` where that is given; it ends at the first that is not plain."""
        place, kind = self._at[name]
        chunk, width = self._found.row_group(group).column(place), kind.bit_width // 8
        codec = self.codecs[group][place] if group < len(self.codecs) else None
        if codec not in (_AS_IS, _ZSTD) or chunk.has_dictionary_page or chunk.file_path:
            return
        left = width * self._rows(group)
        with Path(str(self._path)).open("rb", buffering=0) as file:
            for begin, header in headers(self._path, file, chunk_begin(chunk), chunk.total_compressed_size):
                size, packed = header.get(2, -1), header.get(3, -1)
                said = header.get(1), header.get(502), width * header.get(501, -1)
                if said != (_DATA_PAGE, _PLAIN, size) or size > left:
                    return
                file.seek(begin)
                page = self._room("page", size) if out is None else out[len(out) - left :][:size]
                if not _filled(file, page, packed, codec):
                    return
                yield page
                left -= size


def _is_plain(column: Any, kind: pa.DataType) -> bool:
    """Whether the numbers of a column in a page are those of an Arrow array of this type, and none is missing."""
    if column.max_definition_level or column.max_repetition_level:
        return False
    physical, logical = column.physical_type, str(column.logical_type)
    if str(kind).startswith("timestamp[us"):
        return physical == _TIME[0] and _TIME[1] in logical
    return _TYPES.get(str(kind)) == (physical, logical)


def _filled(file: Any, out: np.ndarray, packed: int, codec: int) -> bool:
    """Fill memory with the content of the page that a file is at; whether it has as much."""
    if codec == _AS_IS:
        return packed == len(out) and _read(file, out)
    import pyarrow as pa

    # A stream has little memory of its own: what is unpacked at once would be in new memory each time.
    with pa.CompressedInputStream(pa.BufferReader(file.read(packed)), "zstd") as unpacked:
        return _read(unpacked, out) and not unpacked.read(1)


def _read(file: Any, out: np.ndarray) -> bool:
    """Read until the memory is full; whether there was as much."""
    view = memoryview(out)  # type: ignore[arg-type]
    while view:
        count = file.readinto(view)
        if not count:
            return False
        view = view[count:]
    return True
