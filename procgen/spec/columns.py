"""A recorded series as a value: numbers written in the spec, or a column of a file beside it, matched by step or time.

As with other tables, what a file says is put into the spec in its place: a spec once read needs no file any more, and
its digest is one of the numbers.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np

from procgen.spec.declare import INVALID, Domain, Parameter, Reals, Schema, Text, Whole, mapping_of, read_each
from procgen.spec.domains import Reading
from procgen.spec.records import dataclass
from procgen.spec.tables import MOST_VALUES, Columns, has_column, has_numbers, read_file
from procgen.spec.tree import Tree
from procgen.spec.units import parse_date

MOST_PAST = 10_000  # numbers that a series can leave from: they are filtered one by one

FILE = (
    Parameter("file", "", Text(), "a CSV or Parquet file, beside the spec"),
    Parameter("column", "", Text(), "column of the values"),
    Parameter("step", "", Text(), "column of the steps, whole numbers", default=None),
    Parameter("time", "", Text(), "column of the times; local where they have no offset", default=None),
)
NUMBERS = (
    Parameter("first", "", Whole(), "the step of the first number, at most 0", default=0),
    Parameter("numbers", "", Reals(), "the numbers, one a step"),
)


@dataclass(frozen=True)
class Recorded:
    """Numbers, one a step, from the step `first` on."""

    first: int
    numbers: tuple[float, ...]


class Column(Domain):
    """Numbers one a step; read as a Recorded."""

    structured = True
    back = 0  # how many steps before step 0 rows may lie, beside as many as there are rows
    dated = True  # whether a number is that of a moment, so that another start is not its own

    def describe(self) -> str:
        return "a list of numbers, or a column of a file such as {file: weather.csv, column: degrees, time: at}"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_map:
            numbers = Reals().read(tree, reader)
            return INVALID if numbers is INVALID else Recorded(0, numbers)
        before = len(reader.faults)
        if not self._without_file(tree, reader):
            return INVALID
        values = read_each(tree, NUMBERS, reader)
        if len(reader.faults) > before:
            return INVALID
        if values["first"] > 0:
            return reader.expected(tree.value["first"], "a step of at most 0, so that step 0 has a number")
        return Recorded(values["first"], values["numbers"])

    def _without_file(self, tree: Tree, reader: Reading) -> bool:
        """Have numbers in the place of a file; those of a file read already are matched with the steps of today."""
        if tree.origin is None:
            return "file" not in tree.value or self._inlined(tree, reader)
        written, table, begins = tree.origin
        tree.value, tree.keys = dict(written.value), written.keys
        return self._inlined(tree, reader, table, begins)

    def _inlined(
        self, tree: Tree, reader: Reading, table: Columns | None = None, begins: tuple[int, int] | None = None
    ) -> bool:
        """Put the numbers of the file in the place of its name; False after reporting why they cannot be."""
        before = len(reader.faults)
        asked = read_each(tree, FILE, reader)
        if len(reader.faults) == before and (asked["step"] is None) == (asked["time"] is None):
            reader.expected(tree, "the column of the steps or that of the times, one of them")
        if len(reader.faults) > before:
            return False
        if self.dated and asked["step"] is not None and not _as_it_was(begins, tree, reader):
            return False
        table = read_file(tree.value["file"], reader) if table is None else table
        by = asked["step"] or asked["time"]
        file = tree.value["file"]
        if table is INVALID or not all(has_column(table, name, file, reader) for name in (asked["column"], by)):
            return False
        steps = _steps(table, by, asked["time"] is not None, tree, reader, self.back)
        if not has_numbers(table, asked["column"], by, tree.value["file"], reader) or steps is None:
            return False
        found = {step: float(x) for step, x in zip(steps, table[asked["column"]], strict=True) if step is not None}
        double, times = next(iter(Counter(step for step in steps if step is not None).most_common(1)), (0, 0))
        if times > 1:
            rows = [row for row, step in zip(table.rows, steps, strict=True) if step == double]
            message = f"the table has two rows for step {double}; keep one ({rows[0]} or {rows[1]})"
            reader.fault(tree.value["file"], message)
            return False
        tree.origin = Tree(dict(tree.value), tree.place, dict(tree.keys)), table, begins or _begins(reader)
        return self._put(tree, found, reader)

    def _put(self, tree: Tree, found: dict[int, float], reader: Reading) -> bool:
        return _put(tree, found, reader)

    def schema(self) -> Schema:
        return {"anyOf": [Reals().schema(), mapping_of(FILE), mapping_of(NUMBERS)]}


class Undated(Column):
    """Numbers of which only the order counts, whatever moments they are of."""

    dated = False


PAST = (
    Parameter("numbers", "", Reals(), "the numbers, one a step, oldest first"),
    Parameter("since", "", Text(), "time of the first of them"),
    Parameter("until", "", Text(), "time of the last of them, at step −1 or later: what is later is left out"),
)


class Past(Column):
    """What came before step 0: numbers one a step, the last of them at step −1; read as a tuple of floats.

    Numbers of a file with times go into the spec with their times, so that another start or step is noticed; those that
    are matched by step are refused where the spec is read again with another one.
    """

    back = 10_000

    def describe(self) -> str:
        return (
            "a list of numbers, the last of them at step −1, or a column of a file such as "
            "{file: history.csv, column: load, time: at}"
        )

    def read(self, tree: Tree, reader: Reading) -> Any:
        reader = reader.closed()  # what was recorded is the same on every path
        if tree.is_map and "until" not in tree.value and "file" not in tree.value:
            return reader.expected(tree, self.describe())
        if (tree.is_map or tree.origin is not None) and not self._without_file(tree, reader):
            return INVALID
        numbers = self._cut(tree, reader) if tree.is_map else Reals().read(tree, reader)
        if numbers is not INVALID and len(numbers) > MOST_PAST:
            what = f"at most {MOST_PAST:,} numbers before step 0"
            reader.fault(tree, f"expected {what}, got {len(numbers):,}; keep the last ones")
            return INVALID
        return numbers

    def _put(self, tree: Tree, found: dict[int, float], reader: Reading) -> bool:
        """Write the numbers of the steps before step 0, which have no gap; rows from step 0 on are left out."""
        past = {step: number for step, number in found.items() if step < 0}
        if -1 not in past:
            last = f"its last row before step 0 is that of step {max(past)}" if past else "all its rows lie later"
            reader.fault(
                tree.value["file"],
                f"expected rows up to step −1, the one just before step 0, but {last}; add what is missing, or change "
                "the spec's start",
            )
            return False
        gap = next((step for step in range(-1, min(past), -1) if step not in past), None)
        if gap is not None:
            message = f"the table has nothing for step {gap}, and more before it; fill the gap, or take out older rows"
            reader.fault(tree.value["file"], message)
            return False
        place, timed = tree.value["file"].place, "time" in tree.value and reader.grid is not None
        numbers = tuple([Tree(past[step], place) for step in sorted(past)])
        tree.value, tree.keys = numbers, {}
        if timed:
            ends = {"since": _time_of(min(past), reader), "until": _time_of(-1, reader)}
            tree.value = {"numbers": Tree(numbers, place)} | {key: Tree(end, place) for key, end in ends.items()}
        return True

    def _cut(self, tree: Tree, reader: Reading) -> Any:
        """The numbers up to step −1 of those up to a time; INVALID after reporting that they end before it."""
        before = len(reader.faults)
        values = read_each(tree, PAST, reader)
        if len(reader.faults) > before or reader.grid is None:
            return INVALID
        numbers, ends = values["numbers"], [parse_date(values[key]) for key in ("since", "until")]
        if None in ends or reader.grid.start is None:
            return reader.expected(tree, "since and until as dates and times, and a spec whose time has a start")
        first, last = (round(end.replace(tzinfo=end.tzinfo or UTC).timestamp() * 1e6) for end in ends if end)
        stamps = reader.grid.stamps(-len(numbers), 2 * len(numbers)).tolist()
        if first in stamps and last in stamps[stamps.index(first) :]:
            begin, end = stamps.index(first), stamps.index(last) + 1
            if begin + len(numbers) == end >= len(numbers):
                return numbers[: len(numbers) - begin]
        reader.fault(
            tree,
            f"expected {len(numbers)} numbers on the steps of the spec, up to step −1 at {_time_of(-1, reader)} or "
            f"later, got them from {values['since']} to {values['until']}, where the start was another when the file "
            "was read; change the spec's start or step where its file is still named, or give before anew with it, as "
            "in {file: history.csv, column: load, time: at}",
        )
        return INVALID

    def schema(self) -> Schema:
        return {"anyOf": [Reals().schema(), mapping_of(FILE), mapping_of(PAST)]}


def _begins(reader: Reading) -> tuple[int, int] | None:
    """When steps 0 and 1 begin, in µs of UTC since 1970; None without a start."""
    if reader.grid is None or reader.grid.start is None:
        return None
    first, second = replace(reader.grid, stamp="begin").stamps(0, 2).tolist()
    return first, second


def _as_it_was(begins: tuple[int, int] | None, tree: Tree, reader: Reading) -> bool:
    """Whether steps begin when they did as rows were matched with them; False after reporting that they do not.

    Rows with times are matched anew; those with steps would move along, and nobody would see it.
    """
    now = _begins(reader)
    if begins is None or now is None or begins == now:
        return True
    step = 0 if begins[0] != now[0] else 1
    was, is_now = (datetime.fromtimestamp(each[step] / 1e6, UTC).isoformat() for each in (begins, now))
    reader.fault(
        tree.value["step"],
        f"the rows of {tree.value['file'].value} are matched by step, and step {step} began at {was} where they were "
        f"stated, and begins at {is_now} now: their numbers would move along unseen; match them by time, as in "
        "{file: …, column: …, time: …}, or state beside the new start that they are meant for it: "
        f"{tree.place.path}: {{file: …, column: …, step: …}}",
    )
    return False


def _time_of(step: int, reader: Reading) -> str:
    """The time of a step in UTC, as a spec would have it."""
    assert reader.grid is not None
    return datetime.fromtimestamp(reader.grid.stamps(step, 1).tolist()[0] / 1e6, UTC).isoformat()


def table_of(tree: Tree, fields: Sequence[Parameter], reader: Reading) -> tuple[Columns, str] | None:
    """The table of a mapping of a file and one of its columns, and that column; None after reporting what is wrong."""
    before = len(reader.faults)
    asked = read_each(tree, fields, reader)
    if len(reader.faults) > before:
        return None
    table = read_file(tree.value["file"], reader)
    if table is INVALID or not has_column(table, asked["column"], tree.value["file"], reader):
        return None
    return table, asked["column"]


def _put(tree: Tree, found: dict[int, float], reader: Reading) -> bool:
    """Write the numbers from the first step that leads up to step 0 without a gap, as far as there is none."""
    if 0 not in found:
        reader.fault(tree.value["file"], "the table has nothing for step 0; check its first row and the spec's start")
        return False
    first = last = 0
    while first - 1 in found:
        first -= 1
    while last + 1 in found:
        last += 1
    steps = reader.grid.steps if reader.grid is not None else 0
    if last + 1 < min(steps, max(found) + 1):
        reader.fault(tree.value["file"], f"the table has nothing for step {last + 1}, and more after it; fill the gap")
        return False
    place = tree.value["file"].place
    numbers = tuple([Tree(found[step], place) for step in range(first, last + 1)])
    tree.value.clear()
    tree.value.update(first=Tree(first, place), numbers=Tree(numbers, place))
    return True


def _steps(table: Columns, by: str, times: bool, tree: Tree, reader: Reading, back: int) -> Sequence[int | None] | None:
    """The step of each row, None for rows far behind the last step; or None after reporting what is none."""
    values, grid = table[by], reader.grid
    if not times:
        wrong = next((i for i, v in enumerate(values) if isinstance(v, bool) or not isinstance(v, int)), None)
        if wrong is None:
            return values
        _refused("whole numbers", by, wrong, table, tree, reader)
        return None
    if grid is None:
        return None
    if grid.start is None:
        reader.fault(tree.value["time"], "times need time: {start: …, every: …}; give them, or match by step")
        return None
    span = np.arange(-len(values) - back, min(grid.steps, MOST_VALUES) + len(values))
    if grid.at:  # no other times are known
        if back:
            why = "where the times of steps are listed (time.at), those before step 0 are not among them"
            how = "match by step, as in {…, step: COLUMN}, up to step −1, or, where steps differ in length for "
            how += "the term (ornstein_uhlenbeck), give it its own before: {x: 16}, its value at step −1"
            reader.fault(tree.value["time"], f"{why}; {how}")
            return None
        span = np.arange(len(grid.at))
    stamps, clocks = grid.stamps(int(span[0]), len(span)).tolist(), grid.local(span + (grid.stamp == "end")).tolist()
    by_utc = dict(zip(stamps, span.tolist(), strict=True))
    by_clock = dict(zip(clocks[::-1], span.tolist()[::-1], strict=True))  # of two that happen twice, the first
    steps: list[int | None] = []
    for i, value in enumerate(values):
        if (moment := _moment(value)) is None:
            _refused("a date, or a date and time,", by, i, table, tree, reader)
            return None
        known, ends = (by_clock, clocks) if moment.tzinfo is None else (by_utc, stamps)
        micro = _micro(moment)
        if micro not in known and micro <= ends[-1]:
            old = f"{value} ({table.rows[i]}) lies more than {-span[0]:,} steps before step 0; take out older rows"
            near = micro > ends[0] or grid.at
            none = _between(value, table.rows[i], micro, known, grid.zone or "UTC")
            none += "; take that row out, or change the spec's time" if steps else _all_off(values, by_clock, by_utc)
            reader.fault(tree.value["file"], none if near else f"{old}, or change the spec's start")
            return None
        steps.append(known.get(micro))
    return steps


def _moment(value: Any) -> datetime | None:
    return value if isinstance(value, datetime) else parse_date(str(value))


def _micro(moment: datetime) -> int:
    """µs since 1970: of UTC, or by the clock where there is no offset."""
    return round((moment.replace(tzinfo=UTC) if moment.tzinfo is None else moment).timestamp() * 1e6)


def _between(value: Any, row: str, micro: int, known: dict[int, int], zone: str) -> str:
    """What is said of a time at which no step is."""
    near = min(known, key=lambda at: abs(at - micro))
    moment = datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=near)
    local = _moment(value).tzinfo is None  # type: ignore[union-attr]  # it has been read
    text = moment.replace(tzinfo=None).isoformat() + (f" in {zone}" if local else "Z")
    if not local and zone != "UTC":
        text += f", which is {moment.astimezone(ZoneInfo(zone)).replace(tzinfo=None).isoformat()} in {zone}"
    return f"no step is at {value} ({row}), the nearest, step {known[near]}, is at {text}"


def _all_off(values: Sequence[Any], by_clock: dict[int, int], by_utc: dict[int, int]) -> str:
    """How to mend a table whose first time is at no step: row by row, or as a whole where no other one is at one."""
    moments = [moment for moment in map(_moment, values) if moment is not None]
    on = sum(_micro(moment) in (by_clock if moment.tzinfo is None else by_utc) for moment in moments)
    if on or len(moments) < 2:
        return "; take that row out, or change the spec's time"
    return (
        f", and so it is with all {len(moments):,} rows: is the zone of the table another than that of the spec, or "
        "its start or step? Convert the times, or change the spec's time (zone, start, every)"
    )


def _refused(expected: str, by: str, row: int, table: Columns, tree: Tree, reader: Reading) -> None:
    message = f"expected {expected} in column {by}, got {table[by][row]!r} on {table.rows[row]}"
    reader.fault(tree.value["file"], message)
