"""Columns that repeat: what was found right in one row group is right in another that holds the same bytes.

Steps and times are the same in every row group of whole paths. Where they are packed to the same bytes as in one that
was read and compared, they need not be unpacked again, which takes as long as reading the values.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from procgen.spec.pages import chunk_begin

if TYPE_CHECKING:
    import pyarrow.parquet as pq

LARGEST = 1 << 20  # bytes of a chunk that are compared; what repeats is packed to less


class Again:
    """The bytes of some columns of a file of this machine that were found right; of others nothing is known.

    packed: how columns are packed, by row group.
    """

    def __init__(self, path: object, found: pq.FileMetaData, names: Collection[str], packed: Sequence[object]):
        self._path, self._found, self._names, self._packed = path, found, names, packed
        self._right: dict[str, tuple[Any, ...]] = {}
        self._here: dict[str, tuple[Any, ...]] = {}

    def known(self, group: int) -> set[str]:
        """The columns that hold in a row group what they hold in the one that was found right last."""
        self._here = self._chunks(group) if isinstance(self._path, Path) else {}
        return {name for name, here in self._here.items() if self._right.get(name) == here}

    def found_right(self) -> None:
        """The row group that `known` was asked for last has been compared with what must be there."""
        self._right |= self._here

    def _chunks(self, group: int) -> dict[str, tuple[Any, ...]]:
        """By column: all that its values follow from, beside its type."""
        rows, chunks = self._found.row_group(group), dict[str, tuple[Any, ...]]()
        with Path(str(self._path)).open("rb", buffering=0) as file:
            for column in map(rows.column, range(rows.num_columns)):
                if column.path_in_schema in self._names and 0 <= column.total_compressed_size <= LARGEST:
                    begin = chunk_begin(column)
                    file.seek(begin)
                    data = file.read(column.total_compressed_size)
                    pages = column.data_page_offset - begin, column.has_dictionary_page, column.file_path
                    how = rows.num_rows, column.num_values, column.compression, column.encodings
                    chunks[column.path_in_schema] = (data, *pages, *how)
        return chunks
