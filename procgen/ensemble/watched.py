"""A part behind a URL, whose pages are looked at on their way from there.

Of a file of this machine all headers of pages are read before anything is unpacked. In a store each would be a request
of its own; so they are read in the bytes that the reader of Parquet fetches anyway, before it gets them.
"""

from __future__ import annotations

from collections.abc import Collection
from io import BytesIO
from typing import Any

import numpy as np

from procgen.spec.pages import Pages


class Watched:
    """An open file for a reader; once it knows what to `expect`, Bomb where a page that is read would grow too much."""

    def __init__(self, file: Any, name: object):
        self._file, self._name = file, name
        self._pages: Pages | None = None
        self.mode = "rb"

    def expect(self, found: Any, names: Collection[str]) -> int:
        """From now on look at each chunk of columns that is read; the values of these columns as the footer says."""
        self._pages = pages = Pages(self._name, self._file.size(), found)
        self._edges = np.array([(chunk.begin, chunk.end) for chunk in pages.chunks], dtype=np.int64).reshape(-1, 2)
        self._left = np.ones(len(self._edges), dtype=bool)
        return sum(chunk.column.num_values for chunk in pages.chunks if chunk.name in names)

    def read(self, size: int = -1) -> bytes:
        begin = self._file.tell()
        data = self._file.read(size if size >= 0 else None)
        if self._pages is not None:
            self._look(self._pages, data, begin)
        return bytes(data)

    def _look(self, pages: Pages, data: bytes, begin: int) -> None:
        end = begin + len(data)
        first, last = self._edges.T
        for k in np.flatnonzero(self._left & (first < end) & (last > begin)):
            chunk = pages.chunks[k]
            if begin <= chunk.begin and chunk.end <= end:
                pages.values(BytesIO(data), chunk, begin)
            else:  # it comes in pieces
                pages.values(self._file, chunk)
                self._file.seek(end)
            self._left[k] = False

    def seek(self, *place: int) -> int:
        return int(self._file.seek(*place))

    def tell(self) -> int:
        return int(self._file.tell())

    def close(self) -> None:
        self._file.close()

    @property
    def closed(self) -> bool:
        return bool(self._file.closed)

    def readable(self) -> bool:
        return True

    def seekable(self) -> bool:
        return True
