"""Files that hold one table: CSV, spreadsheet, Parquet. Each says what it cannot hold before it is written."""

from __future__ import annotations

import contextlib
import csv
import io
import zipfile
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any, ClassVar
from xml.sax.saxutils import escape

from procgen.ensemble.clock import Clock
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.forms import Form
from procgen.ensemble.plan import BUFFER_BYTES, Block

if TYPE_CHECKING:
    import pyarrow as pa

CHUNKS = 1 << 17  # pieces of columns in a Parquet file: each costs writer and reader about 2 kB of memory
SHEET_ROWS, SHEET_COLUMNS = 1_048_576, 16_384  # Office Open XML (ECMA-376) leaves it open; these are in common use
SHEET, CELL = "xl/worksheets/sheet1.xml", 128  # where a workbook has its first sheet; bytes of a cell, at most


class Target:
    """A file of rows, as a context. `clock` is None where there are no times."""

    AT_ONCE: ClassVar[int] = 1 << 20  # rows that are handed over at once

    def __init__(self, path: Path, rows: Form, clock: Clock | None):
        self.path, self.form, self.clock = path, rows, clock
        self.time = rows.names.get("time") if clock is not None else None

    def __enter__(self) -> Target:
        return self

    def __exit__(self, kind: type[BaseException] | None, *rest: object) -> None:
        raise NotImplementedError

    def write(self, block: Block, table: pa.Table) -> None:
        """Add rows, which are of the steps of a rectangle."""
        raise NotImplementedError

    @classmethod
    def check(cls, path: Path, rows: Form, count: int) -> None:
        """EnsembleError when the target cannot hold so many rows of this form."""

    @classmethod
    def notes(cls, clock: Clock, block: Block, column: str) -> Iterator[str]:
        """What a reader must know of the times."""
        yield f"note: {column} is {f'the local time of {clock.zone}' if clock.zone else 'in UTC'}"


class Csv(Target):
    """Numbers in the fewest digits that read back as the same; times in ISO 8601."""

    def __init__(self, path: Path, rows: Form, clock: Clock | None):
        super().__init__(path, rows, clock)
        self._file = open(path, "wb")
        head = io.StringIO()
        csv.writer(head, lineterminator="\n").writerow(rows.schema.names)
        self._file.write(head.getvalue().encode())

    def write(self, block: Block, table: pa.Table) -> None:
        import pyarrow as pa
        import pyarrow.csv

        if self.time is not None and self.clock is not None:
            table = self.clock.replaced(table, self.time, block, self.clock.texts)
        # A float32 in its own fewest digits is another number to a reader who takes them for a double.
        wide = [field.with_type(pa.float64()) if field.type == pa.float32() else field for field in table.schema]
        table = table.cast(pa.schema(wide, table.schema.metadata))
        options = pyarrow.csv.WriteOptions(include_header=False, quoting_style="none")  # ids and times need none
        pyarrow.csv.write_csv(table, self._file, options)

    def __exit__(self, kind: type[BaseException] | None, *rest: object) -> None:
        self._file.close()

    @classmethod
    def check(cls, path: Path, rows: Form, count: int) -> None:
        _refuse_lists(path, rows)

    @classmethod
    def notes(cls, clock: Clock, block: Block, column: str) -> Iterator[str]:
        several = "; its offset changes on the way, which pandas.to_datetime reads with utc=True"
        yield from (note + (several if clock.changes(block) else "") for note in super().notes(clock, block, column))


class Sheet(Target):
    """One sheet of an Office Open XML workbook; numbers in full, times without a zone.

    openpyxl makes the workbook with the names of the columns; the rows are put in as text of the sheet, since a cell
    made as an object takes ten times as long. ECMA-376 part 1, 18.3.1: row, c (cell), v (value), is (text in place).
    """

    AT_ONCE = 1 << 13

    def __init__(self, path: Path, rows: Form, clock: Clock | None):
        from openpyxl.utils import get_column_letter

        super().__init__(path, rows, clock)
        names = rows.schema.names
        self._letters = [get_column_letter(k + 1) for k in range(len(names))]
        self._row = 2
        self._book, self._date = _empty_book(names)
        before, end, after = self._book.read(SHEET).partition(b"</sheetData>")
        self._rest = end + after
        self._zip = zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED, compresslevel=3)
        large = (rows.total() + 1) * len(names) * CELL > zipfile.ZIP64_LIMIT
        self._sheet = self._zip.open(SHEET, "w", force_zip64=large)
        self._sheet.write(before)

    def write(self, block: Block, table: pa.Table) -> None:
        if self.time is not None and self.clock is not None:
            table = self.clock.replaced(table, self.time, block, self.clock.dates)
        numbers = range(self._row, self._row + table.num_rows)
        columns = [self._cells(*pair, numbers) for pair in zip(self._letters, table.columns, strict=True)]
        rows = [
            f'<row r="{number}">{"".join(cells)}</row>'
            for number, cells in zip(numbers, zip(*columns, strict=True), strict=True)
        ]
        self._sheet.write("".join(rows).encode())
        self._row = numbers.stop

    def _cells(self, letter: str, column: pa.ChunkedArray, numbers: range) -> list[str]:
        """The cells of a column; nothing for what is missing. repr of a number has all its digits."""
        import pyarrow as pa

        values = column.to_pylist()
        texts: dict[Any, str] = {}
        style = ""
        if pa.types.is_integer(column.type) or pa.types.is_floating(column.type):
            pairs = zip(numbers, values, strict=True)
            return ["" if v is None else f'<c r="{letter}{n}" t="n"><v>{v!r}</v></c>' for n, v in pairs]
        for value in dict.fromkeys(values):
            texts[value], style = self._typed(value)
        return [f'<c r="{letter}{n}"{style}>{texts[v]}</c>' for n, v in zip(numbers, values, strict=True)]

    def _typed(self, value: Any) -> tuple[str, str]:
        """What is in the cell of a text or of a time, and how it is marked."""
        from openpyxl.utils.datetime import to_excel

        if isinstance(value, str):
            return f"<is><t>{escape(value)}</t></is>", ' t="inlineStr"'
        return f"<v>{to_excel(value)!r}</v>", f' t="n" s="{self._date}"'

    def __exit__(self, kind: type[BaseException] | None, *rest: object) -> None:
        try:
            if kind is None:
                self._finish()
        finally:
            for one in (self._sheet, self._zip):  # what could not be written cannot be ended either
                with contextlib.suppress(OSError, ValueError):
                    one.close()

    def _finish(self) -> None:
        self._sheet.write(self._rest)
        self._sheet.close()
        for name in self._book.namelist():
            if name != SHEET:
                self._zip.writestr(name, self._book.read(name))
        self._zip.close()

    @classmethod
    def check(cls, path: Path, rows: Form, count: int) -> None:
        _refuse_lists(path, rows)
        columns = len(rows.schema.names)
        if count + 1 > SHEET_ROWS or columns > SHEET_COLUMNS:
            raise EnsembleError(
                f"{path.name} would need {count + 1:,} rows and {columns:,} columns, and a sheet holds {SHEET_ROWS:,} "
                f"and {SHEET_COLUMNS:,}; choose fewer paths, steps or series (--paths, --steps, --series; "
                "paths=, steps=, series=), or write .csv or .parquet"
            )
        try:
            import openpyxl  # noqa: F401
        except ImportError:
            raise EnsembleError(
                "a spreadsheet is written by openpyxl, which is not installed: pip install '.[sheets]' in the "
                "checkout, or write .csv or .parquet, which need nothing"
            ) from None

    @classmethod
    def notes(cls, clock: Clock, block: Block, column: str) -> Iterator[str]:
        clock.dates(clock.stamps(block.first_step, block.steps))
        where = f"the local time of {clock.zone}" if clock.zone else "in UTC"
        twice = "; some times are there twice, where the clock was set back" if clock.twice(block) else ""
        yield f"note: a sheet knows no time zones: {column} is {where}{twice}"


class Parquet(Target):
    """Columns with their types; times are instants, shown in the zone that was asked for."""

    def __init__(self, path: Path, rows: Form, clock: Clock | None):
        import pyarrow as pa
        import pyarrow.parquet as pq

        super().__init__(path, rows, clock)
        self.schema = rows.schema
        if self.time is not None and clock is not None and clock.zone is not None:
            place, local = self.schema.get_field_index(self.time), pa.timestamp("us", tz=clock.zone)
            self.schema = self.schema.set(place, self.schema.field(place).with_type(local))
        self._sink = pa.OSFile(str(path), "wb")
        ids = [name for role, name in rows.names.items() if role == "id"]
        self._file = pq.ParquetWriter(
            self._sink, self.schema, compression="zstd", use_dictionary=ids, write_statistics=rows.keys
        )

    def write(self, block: Block, table: pa.Table) -> None:
        self._file.write_table(table.cast(self.schema))

    @classmethod
    def check(cls, path: Path, rows: Form, count: int) -> None:
        columns, groups = len(rows.schema.names), -(-rows.whole.rows * 8 // BUFFER_BYTES)
        if rows.layout.kind == "wide" and groups > 1 and groups * columns > CHUNKS:
            raise EnsembleError(
                f"{path.name} would be {groups * columns:,} pieces of columns, and a Parquet file of more than "
                f"{CHUNKS:,} is mostly a list of them; choose fewer paths or steps (--paths, --steps; paths=, "
                "steps=), or layout long"
            )

    def __exit__(self, kind: type[BaseException] | None, *rest: object) -> None:
        try:
            if kind is None:
                self._file.close()
        finally:
            self._file.is_open = False
            self._sink.close()


def _empty_book(names: list[str]) -> tuple[zipfile.ZipFile, int]:
    """A workbook in memory whose sheet has the names of columns only, and the number of its style for times."""
    from datetime import datetime

    from openpyxl import Workbook
    from openpyxl.cell import WriteOnlyCell

    book, made = Workbook(write_only=True), io.BytesIO()
    sheet = book.create_sheet("values")
    head = [WriteOnlyCell(sheet, value=name) for name in names]
    for cell in head:
        cell.data_type = "s"  # a name such as =x is no formula
    sheet.append(head)
    style = WriteOnlyCell(sheet, value=datetime(2000, 1, 1)).style_id
    book.save(made)
    return zipfile.ZipFile(made), style


def _refuse_lists(path: Path, rows: Form) -> None:
    if rows.layout.kind == "nested":
        raise EnsembleError(f"{path.name} cannot hold lists in cells; write .parquet, or choose another layout")


TARGETS: dict[str, type[Target]] = {".csv": Csv, ".xlsx": Sheet, ".parquet": Parquet}
