"""Tables in files: CSV and Parquet read as DataFrames, and what is no such file is told in a sentence, with a repair.

A CSV is looked through before it is read: a line with more fields than the header would be read with its values in
wrong columns, or some of them dropped; one with fewer, with values missing that nobody left out.
"""

from __future__ import annotations

import csv
import gzip
import hashlib
import io
from collections.abc import Callable, Iterator
from functools import partial
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO, Protocol, TypeVar

import numpy as np

from procgen.spec.pages import Bomb, read_within
from procgen.spec.words import row_told

if TYPE_CHECKING:
    import pandas as pd

_PARQUET = (".parquet", ".pq")
_TEXT = (".csv", ".tsv", ".txt", ".gz")
_BOOKS = (".xlsx", ".xls", ".ods")
_MARK = b"PAR1"  # at both ends of a Parquet file (Apache Parquet, file format)
_CHUNK = 1 << 24  # bytes that are looked through at once
_LINE = 1 << 24  # bytes of a line
_COLUMNS = 200_000
_ROOM = 1 << 26  # bytes that any file may grow to in memory
_GROWTH = 50  # times its size that a larger one may
_HEAD = 1 << 16
_SEPARATORS = {",": "commas", ";": "semicolons", "\t": "tabs"}
_AS_FRAME = "and give validate the DataFrame"


class TableError(ValueError):
    """A table that cannot be read as paths of a spec; the message says what was expected and what is there."""


class Wanted(Protocol):
    """Which columns of a file are to be read."""

    all: list[Any]


N = TypeVar("N", bound=Wanted)


def read_file(path: Path, choose: Callable[[list[str]], N]) -> tuple[pd.DataFrame, N]:
    """The columns of a file that `choose` wants of those it has, and what it said. Raises TableError."""
    if not path.exists():
        raise TableError(f"there is no file {path}")
    if not path.is_file():
        raise TableError(f"expected a file, got a device at {path}; give the path of a CSV or Parquet file")
    suffix = path.suffix.lower()
    try:
        if suffix in _PARQUET:
            return _parquet(path, choose)
        if suffix in _TEXT:
            return _text(path, choose)
    except TableError:
        raise
    except Bomb as error:
        raise TableError(str(error)) from None
    except gzip.BadGzipFile:
        raise TableError(f"{path} is not compressed with gzip; if it is text, give it a name without .gz") from None
    except UnicodeDecodeError as error:
        raise TableError(
            f"{path} is not UTF-8: byte {error.object[error.start]:#04x} is no part of a letter; save it as UTF-8, or "
            f"read it with pandas.read_csv(…, encoding='cp1252') or whatever it is written in, {_AS_FRAME}"
        ) from None
    except Exception as error:  # pandas and pyarrow raise whatever their parsers do
        reason = str(error).strip().splitlines()[0] if str(error).strip() else type(error).__name__
        raise TableError(f"{path} cannot be read: {reason}") from None
    book = "; save the sheet as CSV" if suffix in _BOOKS else ""
    raise TableError(f"expected a .csv, .tsv or .parquet file, got {path.name}{book}")


def told_by(path: Path) -> Callable[[int], str]:
    """How the rows of a file, counted from 0, are told to people: by their lines in a text, else by their numbers."""
    return partial(_line, path) if path.suffix.lower() in _TEXT else row_told


def _line(path: Path, row: int) -> str:
    """The line at which a row of a text ends: line 1 has the column names, and blank lines count."""
    reader = csv.reader(_lines(path), delimiter=_header(path)[0])
    try:
        ends = (reader.line_num for fields in reader if len(fields) > 1 or any(map(str.strip, fields)))
        return f"line {next(islice(ends, row + 1, None))}"
    except (csv.Error, StopIteration):  # a field longer than that reader takes
        return row_told(row)


def digest_of(path: Path) -> str:
    """SHA-256 of the bytes of a file, as it lies there: what `sha256sum` says of it."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _parquet(path: Path, choose: Callable[[list[str]], N]) -> tuple[pd.DataFrame, N]:
    import pyarrow.parquet as pq

    with path.open("rb") as file:
        first = file.read(len(_MARK))
        file.seek(max(path.stat().st_size - len(_MARK), 0))
        last = file.read()
    if not first:
        raise TableError(f"{path} is empty; expected a Parquet file")
    if first != _MARK:
        raise TableError(
            f"{path} is no Parquet file, for it does not begin with {_MARK.decode()}; if it is text, give it a name "
            f"that ends in .csv, else write it again"
        )
    if last != _MARK:
        raise TableError(f"{path} is cut off: a Parquet file ends with {_MARK.decode()}; write or copy it again")
    wanted = choose(pq.read_schema(path).names)
    if not pq.read_metadata(path).num_rows:  # then there may be pages of no bytes
        raise TableError(f"{path} has no rows")
    return read_within(path, wanted.all, _room(path)).to_pandas(ignore_metadata=True), wanted


def _room(path: Path) -> int:
    """Bytes that a file may become in memory: one that grows beyond is no table that somebody kept."""
    return max(_ROOM, _GROWTH * path.stat().st_size)


def _text(path: Path, choose: Callable[[list[str]], N]) -> tuple[pd.DataFrame, N]:
    import pandas as pd

    with _opened(path) as file:
        _refuse_other_files(path, file.read(_HEAD))
    separator, header = _header(path)
    wanted = choose([name or f"Unnamed: {k}" for k, name in enumerate(header)])
    _refuse_other_lines(path, separator, len(header))
    return pd.read_csv(path, sep=separator, usecols=wanted.all, low_memory=False), wanted


def _opened(path: Path) -> BinaryIO:
    return gzip.open(path) if path.suffix.lower() == ".gz" else path.open("rb")  # type: ignore[return-value]


def _refuse_other_files(path: Path, head: bytes) -> None:
    """TableError for what is no UTF-8 text, from its first bytes."""
    said = ""
    if not head.strip(b"\xef\xbb\xbf \t\r\n"):
        said = "is empty; expected a line of column names, then a line for each path and step"
    elif head.startswith((b"\xff\xfe", b"\xfe\xff")) or head[1:8:2] == b"\0\0\0\0" or head[0:8:2] == b"\0\0\0\0":
        said = f"is UTF-16; save it as UTF-8, or read it with pandas.read_csv(…, encoding='utf-16') {_AS_FRAME}"
    elif head.startswith(_MARK):
        said = "is a Parquet file; give it a name that ends in .parquet"
    elif head.startswith(b"PK\3\4"):
        said = "is a workbook or a zip archive, not text; save the sheet as CSV, or unpack the archive"
    elif head.startswith(b"\x1f\x8b"):
        said = "is compressed with gzip; give it a name that ends in .csv.gz"
    elif b"\0" in head:
        said = "is not text, for it holds bytes that are 0; expected CSV, or Parquet in a file named .parquet"
    if said:
        raise TableError(f"{path} {said}")


def _header(path: Path) -> tuple[str, list[str]]:
    """The separator and the column names: commas, or else semicolons or tabs, whichever part the first line."""
    rows = {}
    for separator in _SEPARATORS:
        reader = csv.reader(_lines(path), delimiter=separator)
        try:
            rows[separator] = next(row for row in reader if any(map(str.strip, row)))
        except csv.Error:  # a field longer than any name: something else parts this line
            rows[separator] = []
    order = ("\t", ",", ";") if ".tsv" in path.suffixes else tuple(_SEPARATORS)
    best = next((separator for separator in order if len(rows[separator]) > 1), order[0])
    if not rows[best]:
        raise TableError(f"{path} begins with a line that is not one of column names; expected these, parted by commas")
    if len(rows[best]) > _COLUMNS:
        raise TableError(
            f"{path} has {len(rows[best]):,} columns, at most {_COLUMNS:,} are read; is a line end missing?"
        )
    return best, rows[best]


def _refuse_other_lines(path: Path, separator: str, expected: int) -> None:
    """TableError for the first line with more fields than the header, or fewer; blank lines do not count."""
    number = size = 0
    with _opened(path) as file:
        while chunk := file.read(_CHUNK):
            chunk += file.readline(_LINE)
            size += len(chunk)
            _refuse_size(path, chunk, size)
            if b'"' in chunk or b"\r" in chunk.replace(b"\r\n", b""):  # a field may hold separators and ends of lines
                break
            for found in _other(chunk, separator, expected):
                line = chunk.split(b"\n", found + 1)[found].decode(errors="replace").rstrip("\r")
                if line.strip(" ") or separator in line:
                    raise _wrong_line(path, number + found + 1, line.split(separator), separator, expected)
            number += chunk.count(b"\n")
        else:
            return
    reader = csv.reader(_lines(path), delimiter=separator)
    for row in reader:
        if len(row) != expected and (len(row) > 1 or any(map(str.strip, row))):
            raise _wrong_line(path, reader.line_num, row, separator, expected)


def _refuse_size(path: Path, chunk: bytes, size: int) -> None:
    """TableError for a line that does not end, and for a small file that has grown out of all proportion."""
    if len(chunk) > _LINE and b"\n" not in chunk[-_LINE:]:
        raise TableError(f"{path} has a line of more than {_LINE:,} bytes; expected a line for each path and step")
    if path.suffix.lower() == ".gz" and size > _room(path):
        raise TableError(
            f"{path} is refused: its {path.stat().st_size:,} bytes unpack to more than {_room(path):,}; if that is "
            "meant, unpack it, and give the path of the text"
        )


def _lines(path: Path) -> Iterator[str]:
    """The lines of a text; TableError where one does not end, or the file grows out of all proportion."""
    size = 0
    with io.TextIOWrapper(_opened(path), encoding="utf-8-sig", newline="") as text:  # type: ignore[arg-type]
        while line := text.readline(_LINE):
            size += len(line)
            if len(line) == _LINE:
                raise TableError(
                    f"{path} has a line of more than {_LINE:,} letters; expected one for each path and step"
                )
            if size > _CHUNK:
                _refuse_size(path, b"", size)
            yield line


def _other(chunk: bytes, separator: str, expected: int) -> list[int]:
    """The lines of a chunk of whole lines, empty ones left out, that have other than the expected number of fields."""
    letters = np.frombuffer(chunk, dtype=np.uint8)
    ends = np.append(np.flatnonzero(letters == ord("\n")), len(letters))
    cuts = np.searchsorted(np.flatnonzero(letters == ord(separator)), ends)
    filled = np.diff(ends, prepend=-1) > 1
    if b"\r" in chunk:
        filled &= (np.diff(ends, prepend=-1) > 2) | (letters[np.maximum(ends - 1, 0)] != ord("\r"))
    return np.flatnonzero(filled & (np.diff(cuts, prepend=0) != expected - 1)).tolist()


def _wrong_line(path: Path, line: int, fields: list[str], separator: str, expected: int) -> TableError:
    shown = separator.join(fields)
    shown = repr(shown if len(shown) <= 60 else shown[:59] + "…")
    mend = "is there a separator too many, or a text with one that does not stand in quotes?"
    if len(fields) < expected:
        mend = "is it cut off? Of a value that is missing the field is empty, but its separator stands"
    elif separator == ",":
        mend = "write numbers with a decimal point, not a comma, and put text that holds a comma in quotes"
    return TableError(
        f"{path}: expected {expected} fields between {_SEPARATORS[separator]} in line {line}, as the header has, got "
        f"{len(fields)}: {shown}; {mend}"
    )
