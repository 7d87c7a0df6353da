"""What is wanted of an ensemble (series, paths, steps, decimals), as rectangles of values or as tables of a layout.

All of it comes piece by piece, in bounded memory, and in the order of the whole ensemble, however that was cut.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from procgen.ensemble.columns import Column, as_float, store
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.files import scratch
from procgen.ensemble.forms import Form, form
from procgen.ensemble.layouts import Layout
from procgen.ensemble.plan import BUFFER_BYTES, Block, cut
from procgen.spec.records import dataclass
from procgen.spec.words import did_you_mean

if TYPE_CHECKING:
    import pyarrow as pa

    from procgen.ensemble.ensemble import Blocks, Ensemble

MOST_COLUMNS = 16_384  # of a table with a column a path: more are of no use to whoever opens it


@dataclass(frozen=True)
class Choice:
    """Columns and a rectangle of an ensemble; values are rounded when the columns say so."""

    ensemble: Ensemble
    columns: tuple[Column, ...]
    block: Block
    rounded: bool = False

    @classmethod
    def of(
        cls,
        ensemble: Ensemble,
        series: Sequence[str] | str | None = None,
        paths: range | None = None,
        steps: range | None = None,
        decimals: int | None = None,
    ) -> Choice:
        """The columns of these names and paths and steps of these numbers; all of them where None.

        Raises EnsembleError when some are not there.
        """
        whole, names = ensemble.whole, [series] if isinstance(series, str) else series
        known = {column.name: column for column in ensemble.columns}
        for name in names or ():
            if name not in known:
                hint = did_you_mean(name, known)
                raise EnsembleError(f"expected a series among {', '.join(known)}, got {name!r}{hint and f'; {hint}'}")
            if names is not None and list(names).count(name) > 1:
                raise EnsembleError(f"expected each series once, got {name} {list(names).count(name)} times")
        if names is not None and not names:
            raise EnsembleError(f"expected at least one series among {', '.join(known)}")
        first_path, end_path = _inside("paths", paths, whole.first_path, whole.end_path)
        first_step, end_step = _inside("steps", steps, whole.first_step, whole.end_step)
        columns = tuple(known[name] for name in (known if names is None else names))
        if decimals is not None:
            if isinstance(decimals, bool) or not isinstance(decimals, int) or not -22 <= decimals <= 22:
                raise EnsembleError(f"expected decimals to be a whole number from -22 to 22, got {decimals!r}")
            columns = tuple(replace(column, decimals=decimals) for column in columns)
        block = Block(first_path, end_path - first_path, first_step, end_step - first_step)
        return cls(ensemble, columns, block, decimals is not None)

    @property
    def row_bytes(self) -> int:
        return 8 * len(self.columns)

    def form(self, layout: Layout) -> Form:
        """The form of one table of all that is wanted; EnsembleError where the layout cannot hold it."""
        stamps = self.ensemble.stamps
        layout.check(self.columns, stamps is not None, range(self.block.first_path, self.block.end_path))
        if layout.kind == "wide" and len(self.columns) > 1:
            names = ", ".join(column.name for column in self.columns)
            raise EnsembleError(
                f"a table of layout wide holds one series, got {names}; choose one with --series (series=)"
            )
        if layout.kind == "wide" and self.block.paths > MOST_COLUMNS - 2:
            raise EnsembleError(
                f"a table with a column a path holds at most {MOST_COLUMNS - 2:,} paths, got {self.block.paths:,}; "
                "choose fewer with --paths (paths=), or another layout: few readers take more columns, whatever the "
                "format"
            )
        return form(layout, self.columns, stamps, self.block)

    def tables(self, rows: Form, near: Path) -> Iterator[tuple[Block, pa.Table]]:
        """The rows of the form, by rectangles; what is too large to be turned in memory goes into a file in `near`."""
        if rows.layout.kind == "wide":
            yield from ((block, rows.table(block, self.columns, values)) for block, values in self.by_steps(near))
            return
        for unit in rows.units:
            names = [column.name for column in unit]
            pieces = self.by_paths(names) if rows.layout.kind == "nested" else self.runs(names)
            yield from ((block, rows.table(block, unit, values)) for block, values in pieces)

    # rectangles

    def runs(self, names: Sequence[str]) -> Blocks:
        """Rectangles in row order: whole paths, or runs of one path."""
        if self.ensemble.cut_by_steps:
            for paths in self._ranges():
                for block in cut(paths, max(BUFFER_BYTES // self.row_bytes, 1)):
                    yield block, self.rectangle(block, names)
            return
        for here, values in self.ensemble.stored(self.block.first_path, self.block.end_path, names):
            common = self.block.common(here)
            if common is not None:
                yield common, self._stored({name: values[name][common.within(here)] for name in names})

    def by_paths(self, names: Sequence[str] | None = None) -> Blocks:
        """Rectangles of whole paths, in order; at least one path, however long it is."""
        names = [column.name for column in self.columns] if names is None else names
        for paths in self._ranges():
            for block in cut(paths, max(BUFFER_BYTES // self.row_bytes, paths.steps)):
                yield block, self.rectangle(block, names)

    def by_steps(self, near: Path) -> Blocks:
        """Rectangles of all paths, in order of the steps, of the one column there is."""
        column, whole = self.columns[0], self.block
        kind = np.dtype(column.type)
        if whole.rows * kind.itemsize <= BUFFER_BYTES:
            yield whole, self.rectangle(whole, [column.name])
            return
        count = max(BUFFER_BYTES // (whole.paths * kind.itemsize), 1)
        with scratch(near, whole.rows * kind.itemsize) as file:
            for _, values in self.runs([column.name]):  # whole paths or runs of one, in order: the file grows
                file.write(np.ascontiguousarray(values[column.name]).data)
            for first in range(whole.first_step, whole.end_step, count):
                block = Block(whole.first_path, whole.paths, first, min(count, whole.end_step - first))
                yield block, {column.name: self._columns_of(file, block, kind)}

    def _columns_of(self, file: Any, block: Block, kind: np.dtype) -> np.ndarray:
        """Some steps of all paths, from a file that holds path after path."""
        out = np.empty((block.paths, block.steps), kind)
        for row in range(block.paths):
            file.seek((row * self.block.steps + block.first_step - self.block.first_step) * kind.itemsize)
            file.readinto(out[row].data)
        return out

    def rectangle(self, block: Block, names: Sequence[str]) -> dict[str, np.ndarray]:
        """The values of a rectangle, rounded where that is wanted."""
        return self._stored(self.ensemble.rectangle(block, names))

    def _stored(self, values: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
        if not self.rounded:
            return values
        columns = {column.name: column for column in self.columns}
        return {name: store(as_float(data), columns[name]) for name, data in values.items()}

    def _ranges(self) -> Iterator[Block]:
        """What is wanted, range of paths by range as they are stored."""
        for paths in self.ensemble.ranges():
            here = Block(paths.start, len(paths), self.block.first_step, self.block.steps)
            block = self.block.common(here)
            if block is not None:
                yield block


def _inside(name: str, wanted: Any, first: int, end: int) -> tuple[int, int]:
    if wanted is None:
        return first, end
    if not isinstance(wanted, range) or wanted.step != 1:
        raise TypeError(f"expected {name} to be a range such as range({first}, {min(first + 10, end)}), got {wanted!r}")
    if not first <= wanted.start < wanted.stop <= end:
        numbers = f"{wanted.start} to {wanted.stop - 1}" if len(wanted) > 1 else f"{wanted.start}" if wanted else "none"
        raise EnsembleError(f"expected {name} within {first} to {end - 1}, got {numbers}")
    return wanted.start, wanted.stop
