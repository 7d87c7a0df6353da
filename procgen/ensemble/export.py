"""An ensemble, or some of it, as one file for another tool: CSV, spreadsheet, Parquet, or a NumPy array.

What the target cannot hold is said before anything is written; nothing is left out without a word. The file is written
piece by piece and appears when it is whole.
"""

from __future__ import annotations

import contextlib
import os
import secrets
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path

import numpy as np

from procgen.ensemble.choice import Choice
from procgen.ensemble.clock import Clock
from procgen.ensemble.ensemble import Ensemble
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.forms import Form
from procgen.ensemble.layouts import Layout
from procgen.ensemble.manifest import bytes_text
from procgen.ensemble.store import named_path
from procgen.ensemble.targets import TARGETS
from procgen.spec.records import dataclass

Tick = Callable[[int, int], None]


def export(
    ensemble: Ensemble,
    path: str | Path,
    *,
    layout: str | None = None,
    series: Sequence[str] | str | None = None,
    paths: range | None = None,
    steps: range | None = None,
    decimals: int | None = None,
    local_time: bool = False,
    columns: Mapping[str, str] | None = None,
    overwrite: bool = False,
) -> Export:
    """An export that is ready to be written; its arguments are those of `Ensemble.export`.

    Raises EnsembleError when the target cannot hold what is wanted, or is in the way.
    """
    path = named_path(path)
    _refuse_place(path, overwrite)
    _refuse_source(path, ensemble)
    suffix = path.suffix.lower()
    if suffix not in (*TARGETS, ".npy"):
        raise EnsembleError(f"expected a file that ends in {', '.join(TARGETS)} or .npy, got {path.name!r}")
    choice = Choice.of(ensemble, series, paths, steps, decimals)
    zone = None
    if local_time:
        if ensemble.stamps is None:
            raise EnsembleError("the spec has no start, so that there is no local time; leave local time away")
        zone = ensemble.spec.time.zone or "UTC"
    if suffix == ".npy":
        if layout is not None or columns or local_time:
            raise EnsembleError(
                "an .npy file is an array: without layout, columns and time; leave these away, or write .parquet"
            )
        return Export(path, choice, None, None)
    rows = choice.form(Layout.asked(layout or "long", None, columns))
    made = Export(path, choice, rows, Clock(ensemble.stamps, zone) if ensemble.stamps is not None else None)
    TARGETS[suffix].check(path, rows, made.rows)
    return made


@dataclass(frozen=True)
class Export:
    """What will be written, and where; `form` is None for an array, `clock` where there are no times."""

    path: Path
    choice: Choice
    form: Form | None
    clock: Clock | None

    @property
    def rows(self) -> int:
        """Rows of the table, without its header; paths and steps of an array."""
        return self.choice.block.rows * len(self.choice.columns) if self.form is None else self.form.total()

    def text(self) -> str:
        """What the file will hold, and what the target does not know."""
        return "\n".join([self._contents(), *self._notes()])

    def _contents(self) -> str:
        names = ", ".join(column.name for column in self.choice.columns)
        if self.form is None:
            axes = "(paths, steps)" if len(self._shape) == 2 else "(series, paths, steps)"
            return f"{self.path}: an array {axes} = {self._shape} of {self._type}, of {names}"
        shown = self.form.schema.names
        some = shown if len(shown) <= 8 else [*shown[:6], "…", shown[-1]]
        head = f"{self.path}: {self.rows:,} row{'s' * (self.rows != 1)}, {len(shown):,} columns ({', '.join(some)})"
        return f"{head} of {names}" if self.form.layout.kind in ("panel", "wide") else head

    def _notes(self) -> Iterator[str]:
        if self.form is None:
            yield "note: an array knows no names, units, times or numbers of paths" + (
                "; series are its first axis, in this order" if len(self.choice.columns) > 1 else ""
            )
        elif self.clock is not None:
            yield from TARGETS[self.path.suffix.lower()].notes(self.clock, self.choice.block, self.form.names["time"])

    @property
    def _shape(self) -> tuple[int, ...]:
        block, count = self.choice.block, len(self.choice.columns)
        return (block.paths, block.steps) if count == 1 else (count, block.paths, block.steps)

    @property
    def _type(self) -> np.dtype:
        types = {column.type for column in self.choice.columns}
        return np.dtype(types.pop() if len(types) == 1 else "float64")

    def write(self, overwrite: bool = False, progress: Tick | None = None) -> Path:
        """Write the file; returns its path. `progress` is called with (rows written, rows in all)."""
        with _whole_file(self.path, overwrite) as temporary:
            if self.form is None:
                self._array(temporary, progress)
            else:
                self._table(temporary, self.form, progress)
        return self.path

    def _table(self, temporary: Path, rows: Form, progress: Tick | None) -> None:
        target, done = TARGETS[self.path.suffix.lower()], 0
        with target(temporary, rows, self.clock) as writer:
            for block, table in self.choice.tables(rows, self.path.parent):
                for part in range(0, table.num_rows, target.AT_ONCE):
                    some = table.slice(part, target.AT_ONCE)
                    writer.write(block, some)
                    done += some.num_rows
                    if progress is not None:
                        progress(done, self.rows)

    def _array(self, temporary: Path, progress: Tick | None) -> None:
        done, kind = 0, self._type
        with open(temporary, "wb") as file:
            head = {"descr": np.lib.format.dtype_to_descr(kind), "fortran_order": False, "shape": self._shape}
            np.lib.format.write_array_header_1_0(file, head)
            for column in self.choice.columns:
                for block, values in self.choice.runs([column.name]):
                    file.write(np.ascontiguousarray(values[column.name], kind).data)
                    done += block.rows
                    if progress is not None:
                        progress(done, self.rows)

    def size_text(self) -> str:
        """The size of the file that was written."""
        return bytes_text(self.path.stat().st_size)


def _refuse_place(path: Path, overwrite: bool) -> None:
    if path.is_dir():
        raise EnsembleError(f"{path} is a folder; give the name of a file in it, such as {path / 'values.csv'}")
    if not path.parent.is_dir():
        raise EnsembleError(f"there is no folder {path.parent} to write {path.name} into; make it first")
    if path.exists() and not overwrite:
        raise EnsembleError(
            f"{path} is there already; choose another name, or replace it with --overwrite (overwrite=True)"
        )


def _refuse_source(path: Path, ensemble: Ensemble) -> None:
    """Refuse the folder that is read: its parts would be replaced, and readers of all its files meet one more."""
    folder = getattr(ensemble, "path", None)
    if isinstance(folder, Path) and path.resolve().is_relative_to(folder.resolve()):
        raise EnsembleError(f"{path} would be among the files of the ensemble itself ({folder}); choose another folder")


@contextlib.contextmanager
def _whole_file(path: Path, overwrite: bool) -> Iterator[Path]:
    """A temporary path beside `path`, which becomes it when the block ends well, and nothing otherwise."""
    temporary = path.with_name(f".{path.name}.{secrets.token_hex(4)}.tmp")
    try:
        yield temporary
        _refuse_place(path, overwrite)  # somebody may have put it there meanwhile
        os.replace(temporary, path)
    except OSError as error:
        reason = os.strerror(error.errno) if error.errno else error
        raise EnsembleError(f"{path} cannot be written: {reason}; nothing is left of it") from None
    finally:
        temporary.unlink(missing_ok=True)
