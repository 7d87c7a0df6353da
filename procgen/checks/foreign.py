"""Anyone's table as an ensemble: a DataFrame, CSV or Parquet, any row order, any column names.

Everything that is wrong with it is named: paths and steps that are missing or there twice, times off the grid,
text where numbers should be.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import filled, handled, judge, late, ordered, sizes
from procgen.checks.blocks import GROUP
from procgen.checks.clock import ClockError, NoTime, Times, mismatch, refuse_numbers, steps_on_grid
from procgen.checks.files import TableError, digest_of, read_file, told_by
from procgen.checks.gather import Gather
from procgen.checks.lane import Progress, in_one_process
from procgen.checks.reshaped import LONG, Panel, Told, Wide, recognised
from procgen.checks.roles import Names, listed, option
from procgen.checks.verdict import Check
from procgen.checks.words import joined, many
from procgen.ensemble.plan import Block
from procgen.spec.words import row_told
from procgen.terms.varied import Varied

if TYPE_CHECKING:
    import pandas as pd

_DECIMAL_COMMA = re.compile(r"[+-]?[\d.]*,\d+")
_THOUSANDS = re.compile(r"[+-]?\d{1,3}(,\d{3})+(\.\d*)?")
_SHOWN = 3  # cells of a column of text
_ANOTHER = "is another column meant?"
_NO_NUMBERS = {
    "c": ("complex numbers", "give .real or .imag"),
    "b": ("True and False", "give .astype(int) where they stand for 1 and 0"),
    "M": ("times", _ANOTHER),
    "m": ("durations", "give them in one unit, such as .dt.total_seconds()"),
}  # kind of a column -> what it holds, and how to mend it
_NO_NUMBERS |= {"boolean": _NO_NUMBERS["b"], "complex": _NO_NUMBERS["c"], "timedelta": _NO_NUMBERS["m"]}
_NO_NUMBERS |= {each: _NO_NUMBERS["M"] for each in ("datetime", "datetime64", "date", "time", "period")}
_LOOKED_AT = 1 << 26  # values of a series that are looked at all together
BLOCK = 1 << 22  # values of one series that are handed on at once


def read_table(path: Path, spec: Any, columns: Mapping[str, str] | None) -> Table:
    """The table in a CSV or Parquet file; only the columns that are needed are read."""
    frame, wanted = read_file(path, lambda found: recognised(found, spec, columns, path.name))
    return Table(*_long(frame, wanted, told_by(path)), spec, str(path), digest_of(path))


def from_frame(frame: pd.DataFrame, spec: Any, columns: Mapping[str, str] | None) -> Table:
    """A DataFrame, long or with a row an observation; an index with names counts as columns."""
    if frame.columns.name == "path":  # as a wide frame of an ensemble has it
        frame = frame.set_axis([c if isinstance(c, str) else f"path_{c}" for c in frame.columns], axis=1)
    if any(name is not None for name in frame.index.names):
        frame = frame.reset_index()
    wanted = recognised([str(c) for c in frame.columns], spec, columns, "the table")
    return Table(*_long(frame, wanted, row_told), spec, "the table")


def _long(frame: pd.DataFrame, wanted: Names | Panel | Wide, told: Told) -> tuple[pd.DataFrame, Names, Told]:
    """The frame with a row a path and step, which column is what, and where its rows are in what was given."""
    return (frame, wanted, told) if isinstance(wanted, Names) else wanted.long(frame, told)


class Table:
    """A table put in order: dense arrays, NaN where something is missing, and checks that name it.

    `told` says where a row is; `file_digest` is that of the file it was read from, None where it was in memory.
    """

    def __init__(
        self, frame: pd.DataFrame, names: Names, told: Told, spec: Any, where: str, file_digest: str | None = None
    ):
        self.spec, self.where, self.told, self.file_digest = spec, where, told, file_digest
        self.columns = {name: name for name in spec.series}
        self.same_draws = False
        self.faults: list[Check] = []
        if not len(frame):
            raise TableError(f"{where} has no rows")
        self._checks: list[Check] = []
        self._assumed: list[str] = []  # what is said in the first line
        self.absent = 0  # rows that are missing; they are NaN in every series
        self._on_clock = False  # whether times tell which steps are there
        self._in_order = False  # whether nothing does
        path, labels = _codes(frame[names.path], told) if names.path else (np.zeros(len(frame), np.int64), ["0"])
        self.labels: list[Any] = labels
        step = self._steps(frame, names, path)
        if names.clock is not None:
            self._compare_times(frame[names.clock], step)
        self._first = int(step.min())
        late.refuse_unknown(where, self._first, int(step.max()), spec.time.steps, self._on_clock)
        late.refuse_cuts(where, labels, path, step)
        self.paths, self.steps = len(self.labels), int(step.max()) + 1
        if self.paths * self.steps > 4 * len(frame) + 1_000_000:
            raise TableError(
                f"{where}: {len(frame)} rows cannot be {self.paths} paths of {self.steps} steps; "
                f"is the right column taken for the step? {option('step')}"
            )
        self.rows = self.paths * self.steps
        if names.path is None and len(np.unique(step)) < len(step):
            raise TableError(
                f"{where}: steps repeat, and there is no column path; {listed('path', names.found)}; {option('path')}"
            )
        self._checks += sizes.checks(self.paths, self.steps, spec)
        self._assumed += sizes.told(self.paths, self.steps, spec)
        self._place(path, step)
        self._values = {name: self._numbers(frame[column], name) for name, column in names.series.items()}

    def checks(self) -> list[Check]:
        return [*self._checks, self._each_once(), *self._filled(), *self._order_of_paths()]

    def causes(self, names: Sequence[str]) -> Iterator[Check]:
        """What was done to the values of these series, where it shows."""
        for plan in self._plan.series:
            if plan.name in names and plan.theory.random and not plan.unknown and self.rows <= _LOOKED_AT:
                x = self._block(self._values[plan.name], 0, self.paths)
                if np.isfinite(x).all():
                    yield from handled.causes(plan.name, x, plan, self.spec.series[plan.name].decimals)

    def _filled(self) -> Iterator[Check]:
        """Whether one number stands in many places of a series."""
        for what in self._plan.precision:
            if what.repeats is not None and self.steps > 1 and self.rows <= _LOOKED_AT:
                yield filled.check(what.name, self._block(self._values[what.name], 0, self.paths), what.repeats)

    def _order_of_paths(self) -> Iterator[Check]:
        """Whether paths go on where others end, or share draws; not where the spec gives each numbers of its own."""
        if self.paths <= judge.FEW_PATHS or Varied(self.spec).parameters:
            return
        steps = [0, min(1, self.steps - 1), max(self.steps - 2, 0), self.steps - 1]
        order = np.array(ordered.natural(self.labels))
        rows = {name: np.column_stack([self._at(x, step) for step in steps])[order] for name, x in self._values.items()}
        moved = {p.name: not p.unknown and len(p.drawn) > 0 and p.drawn[-1] > 0 for p in self._plan.series}
        yield from ordered.checks(rows, moved)

    def _at(self, values: NDArray, step: int) -> NDArray:
        """The values of all paths at a step; NaN where there is none."""
        wanted = np.arange(self.paths) * self.steps + step
        found = np.minimum(np.searchsorted(self._key, wanted), len(self._key) - 1)
        return np.where(self._key[found] == wanted, values[self._order[found]], np.nan)

    def about(self) -> dict[str, Any]:
        return {
            "title": self.spec.title,
            "paths": self.paths,
            "steps": self.steps,
            "digest": None,
            "spec_digest": self.spec.digest(),
            "where": self.where,
            "spec_file": self.spec.file,
            "judged_on": "; ".join(self._assumed),
        }

    def gathered(self, workers: int | None, progress: Progress | None, scheduler: str | None = None) -> Gather:
        """The sums of one pass, by this process: the table is in its memory."""
        from procgen.checks.planning import plan_of
        from procgen.checks.source import no_cluster

        no_cluster(scheduler)
        plan = self._plan = plan_of(self.spec, self.steps, self.same_draws, self.paths)
        if self._first > 0:
            late.refuse_window(self.where, self._first, self.steps, self.paths, plan.gaps, self._values)
        if self._in_order:
            stated = self.paths * self.spec.time.steps
            late.refuse_closed_up(self.where, stated, len(self._key), self._values, plan.gaps)
        return in_one_process(plan, self.blocks(), Block(0, self.paths, 0, self.steps), progress)

    def blocks(self) -> Iterator[tuple[int, int, Mapping[str, np.ndarray]]]:
        """Blocks of whole paths."""
        width = max(min(1024, BLOCK // self.steps) // GROUP, 1) * GROUP
        for first in range(0, self.paths, width):
            count = min(width, self.paths - first)
            yield first, 0, {name: self._block(values, first, count) for name, values in self._values.items()}

    def _block(self, values: NDArray, first: int, count: int) -> NDArray:
        low, high = np.searchsorted(self._key, [first * self.steps, (first + count) * self.steps])
        out = np.full(count * self.steps, np.nan)
        out[self._key[low:high] - first * self.steps] = values[self._order[low:high]]
        return out.reshape(count, self.steps)

    # reading

    def _steps(self, frame: pd.DataFrame, names: Names, path: NDArray) -> NDArray[np.int64]:
        if names.step is not None:
            column = frame[names.step]
            numeric = column.dtype.kind in "iuf" or not _looks_like_times(column)
            return self._numbered(column, names.step) if numeric else self._timed(column)
        if names.time is not None:
            return self._timed(frame[names.time])
        if names.path is None and len(frame) >= 2 * self.spec.time.steps:
            where = f"{self.where} has {len(frame):,} rows, no column of paths and none of steps or times"
            mend = f"{listed('path', names.found)}; {option('path')}; {option('step')}"
            raise TableError(f"{where}, where a path has {self.spec.time.steps:,} steps; {mend}")
        self._in_order = True
        none = f"no column of steps or times: rows of a path are taken in their order; else {option('step')}"
        self._say("step order", none, "reported")
        order = np.argsort(path, kind="stable")
        starts = np.searchsorted(path[order], np.arange(len(self.labels)))
        step = np.empty(len(path), dtype=np.int64)
        step[order] = np.arange(len(path)) - starts[path[order]]
        return step

    def _numbered(self, column: pd.Series, name: str) -> NDArray[np.int64]:
        import pandas as pd

        numbers = pd.to_numeric(column, errors="coerce").to_numpy(dtype=float)
        bad = ~np.isfinite(numbers) | (numbers != np.rint(numbers)) | (np.abs(numbers) > 2**53)
        if bad.any():
            row = int(np.argmax(bad))
            raise TableError(
                f"{self.where}: expected whole steps in {name}, got {_cell(column, row)} in {self.told(row)}; "
                f'{option("step")}, or one of times with --time-col NAME (columns={{"time": NAME}})'
            )
        step = numbers.astype(np.int64)
        lowest = int(step.min())
        if lowest == 1 and int(step.max()) == self.spec.time.steps:
            counted = f"steps in {name} count from 1; taken as steps 0 to {step.max() - 1}"
            self._assumed.append(counted)
            self._say("step order", counted, "reported")
            return step - 1
        if lowest < 0:
            raise TableError(f"{self.where}: expected steps from 0 on in {name}, got {lowest}")
        return step

    def _timed(self, column: pd.Series) -> NDArray[np.int64]:
        try:
            if self.spec.time.start is None:
                times = Times(column, self.spec.time.zone, self.told)
                return np.unique(times.utc, return_inverse=True)[1].astype(np.int64)
            refuse_numbers(column, self.told)
            times = Times(column, self.spec.time.zone, self.told)
            self._on_clock = True
            return steps_on_grid(times, self.spec.time)
        except NoTime as error:
            other = f'{option("time")}, or one of whole steps with --step-col NAME (columns={{"step": NAME}})'
            raise TableError(f"{self.where}: {error}; {other}") from None
        except ClockError as error:
            raise TableError(f"{self.where}: {error}") from None

    def _compare_times(self, column: pd.Series, step: NDArray[np.int64]) -> None:
        """Times that stand beside steps: are they those that the spec gives these steps?"""
        if self.spec.time.start is None or column.dtype.kind in "iufb":
            return
        try:
            fault = mismatch(Times(column, self.spec.time.zone, self.told), step, self.spec.time)
        except ClockError as error:
            self._say("times", f"they are not compared with the spec's: {error}", "reported")
            return
        self._on_clock = not fault
        self._checks.append(Check.fact("", "times", "all rows", fault, "every time is that of its step"))

    def _place(self, path: NDArray, step: NDArray) -> None:
        """Sort rows by path and step; name what is missing or there twice."""
        key = path * self.steps + step
        ordered = bool(np.all(key[1:] > key[:-1]))
        self._order = np.arange(len(key)) if ordered else np.argsort(key, kind="stable")
        self._key = key[self._order]
        if not ordered:
            self._say("row order", "rows are not in the order of path and step; they were sorted", "reported")
        twice = np.flatnonzero(self._key[1:] == self._key[:-1])
        self._fault = ""
        if twice.size:
            are = "is" if twice.size == 1 else "are"
            self._fault = f"{many(twice.size, 'row')} {are} there twice, the first {self._where(self._key[twice[0]])}"
            keep = np.concatenate([[True], self._key[1:] != self._key[:-1]])
            self._key, self._order = self._key[keep], self._order[keep]
        self.absent = self.rows - len(self._key)

    def _each_once(self) -> Check:
        """Whether every row is there once; where all series have missing values, a row without any may be left out."""
        fault, note = self._fault, "each is there once"
        if self.absent:
            gap = np.flatnonzero(self._key != np.arange(len(self._key)))
            first = self._where(int(gap[0]) if gap.size else len(self._key))
            are = "is" if self.absent == 1 else "are"
            told = f"{many(self.absent, 'row')} {are} missing, the first {first}"
            if set(self._values) <= set(self._plan.gaps):
                note = f"{told}: judged as missing values, which the spec states"
            else:
                fault = "; ".join(filter(None, [fault, told]))
        return Check.fact("", "every path and step once", "all rows", fault, note)

    def _where(self, key: int) -> str:
        return f"path {self.labels[int(key) // self.steps]}, step {int(key) % self.steps}"

    def _numbers(self, column: pd.Series, name: str) -> NDArray:
        import pandas as pd

        column = column.astype(column.cat.categories.dtype) if hasattr(column, "cat") else column
        kind = column.dtype.kind if column.dtype.kind != "O" else pd.api.types.infer_dtype(column, skipna=True)
        if kind in _NO_NUMBERS:
            held, mend = _NO_NUMBERS[kind]
            cell = _cell(column, int(np.argmax(column.notna().to_numpy())))
            raise TableError(f"{self.where}: {name} holds {held}, such as {cell}; expected numbers ({mend})")
        if column.dtype.kind == "O" and isinstance(column.iloc[0], list | np.ndarray):
            raise TableError(
                f"{self.where}: {name} holds lists (layout nested); {LONG}: a row a path and step, one number in each"
            )
        values = pd.to_numeric(column, errors="coerce").to_numpy(dtype=float, na_value=np.nan)
        text = np.isnan(values) & column.notna().to_numpy()
        if text.any():
            row = int(np.argmax(text))
            cell, count = column.iloc[row], int(text.sum())
            if isinstance(cell, str) and _DECIMAL_COMMA.fullmatch(cell.strip()):
                raise TableError(
                    f"{self.where}: {name} has decimal commas, the first {cell!r} in {self.told(row)}; write "
                    f"numbers with a point, or read the file with pandas.read_csv(…, decimal=',') and give validate "
                    f"the DataFrame"
                )
            if isinstance(cell, str) and _THOUSANDS.fullmatch(cell.strip()):
                raise TableError(
                    f"{self.where}: {name} has thousands separators, the first {cell!r} in {self.told(row)}; write "
                    f"numbers without them, or read the file with pandas.read_csv(…, thousands=',') and give validate "
                    f"the DataFrame"
                )
            if count == column.notna().sum():
                first = joined([repr(each) for each in dict.fromkeys(column.dropna())][:_SHOWN])
                raise TableError(f"{self.where}: {name} holds text, such as {first}; expected numbers; {option(name)}")
            are = "value is no number" if count == 1 else "values are no numbers"
            fault = f"{count:,} {are}, the first {_cell(column, row)} in {self.told(row)}"
            self._checks.append(Check.fact(name, "numbers", "all rows", fault))
        return values

    def _say(self, what: str, note: str, outcome: str) -> None:
        self._checks.append(Check("", what, "all rows", "structure", outcome=outcome, note=note))


def _cell(column: pd.Series, row: int) -> str:
    """A cell as it is written."""
    value = column.iloc[row]
    return repr(value) if isinstance(value, str) else str(value)


def _looks_like_times(column: pd.Series) -> bool:
    """Whether a column given as the step holds stamps, as dates or as text such as 2027-01-04 00:15."""
    if column.dtype.kind == "M":
        return True
    first = str(column.iloc[0])
    return not first.strip().lstrip("+-").replace(".", "", 1).isdigit() and any(c in first for c in "-:/")


def _codes(column: pd.Series, told: Told) -> tuple[NDArray[np.int64], list[Any]]:
    """Paths numbered in the order of their labels."""
    import pandas as pd

    if column.isna().any():
        row = int(np.argmax(column.isna().to_numpy()))
        raise TableError(f"{told(row)} has no path; every row needs one in {column.name}")
    codes, labels = pd.factorize(column, sort=True)
    return codes.astype(np.int64), list(labels)
