"""Files that hold one table: CSV, spreadsheet, Parquet. Each says what it cannot hold before it is written."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any, ClassVar

from procgen.ensemble.clock import Clock
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.forms import Form
from procgen.ensemble.plan import BUFFER_BYTES, Block

if TYPE_CHECKING:
    import pyarrow as pa

CHUNKS = 1 << 17  # pieces of columns in a Parquet file: each costs writer and reader about 2 kB of memory
SHEET_ROWS, SHEET_COLUMNS = 1_048_576, 16_384  # Office Open XML (ECMA-376) leaves it open; these are in common use


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
        import pyarrow.csv

        if self.time is not None and self.clock is not None:
            table = self.clock.replaced(table, self.time, block, self.clock.texts)
        options = pyarrow.csv.WriteOptions(include_header=False, quoting_style="none")  # ids and times need none
        pyarrow.csv.write_csv(table, self._file, options)

    def __exit__(self, kind: type[BaseException] | None, *rest: object) -> None:
        self._file.close()

    @classmethod
    def check(cls, path: Path, rows: Form, count: int) -> None:
        _refuse_lists(path, rows)


class Sheet(Target):
    """One sheet of an Office Open XML workbook, row by row; numbers in full, times without a zone."""

    AT_ONCE = 1 << 13

    def __init__(self, path: Path, rows: Form, clock: Clock | None):
        from openpyxl import Workbook
        from openpyxl.cell import WriteOnlyCell

        super().__init__(path, rows, clock)
        self._cell = WriteOnlyCell
        self._book = Workbook(write_only=True)
        self._sheet = self._book.create_sheet("values")
        self._sheet.append([self._typed(name, "s") for name in rows.schema.names])

    def _typed(self, text: str, kind: str) -> Any:
        """A cell whose text is taken as it is: else numbers would be cut to 16 digits, and =x be a formula."""
        cell = self._cell(self._sheet, value=text)
        cell.data_type = kind
        return cell

    def write(self, block: Block, table: pa.Table) -> None:
        if self.time is not None and self.clock is not None:
            table = self.clock.replaced(table, self.time, block, self.clock.dates)
        columns = [column.to_pylist() for column in table.columns]
        for row in zip(*columns, strict=True):
            self._sheet.append([self._typed(repr(v), "n") if isinstance(v, float) else v for v in row])

    def __exit__(self, kind: type[BaseException] | None, *rest: object) -> None:
        if kind is None:
            self._book.save(self.path)
        else:
            self._sheet.close()

    @classmethod
    def check(cls, path: Path, rows: Form, count: int) -> None:
        _refuse_lists(path, rows)
        columns = len(rows.schema.names)
        if count + 1 > SHEET_ROWS or columns > SHEET_COLUMNS:
            raise EnsembleError(
                f"{path.name} would need {count + 1:,} rows and {columns:,} columns, and a sheet holds {SHEET_ROWS:,} "
                f"and {SHEET_COLUMNS:,}; choose fewer paths, steps or series (--paths, --steps, --series), "
                "or write .csv or .parquet"
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
                f"{CHUNKS:,} is mostly a list of them; choose fewer paths or steps (--paths, --steps), or layout long"
            )

    def __exit__(self, kind: type[BaseException] | None, *rest: object) -> None:
        try:
            if kind is None:
                self._file.close()
        finally:
            self._file.is_open = False
            self._sink.close()


def _refuse_lists(path: Path, rows: Form) -> None:
    if rows.layout.kind == "nested":
        raise EnsembleError(f"{path.name} cannot hold lists in cells; write .parquet, or choose another layout")


TARGETS: dict[str, type[Target]] = {".csv": Csv, ".xlsx": Sheet, ".parquet": Parquet}
