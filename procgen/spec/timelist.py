"""Listed times of steps: written in the spec, or a column of a file beside it.

As with other tables, what a file says is put into the spec in its place: a spec once read needs no file any more, and
its digest is one of the times.
"""

from __future__ import annotations

from datetime import UTC, datetime
from typing import Any

from procgen.spec.calendar import LAST_YEAR, Grid
from procgen.spec.columns import table_of
from procgen.spec.declare import INVALID, Domain, Parameter, Reading, Schema, Text, mapping_of
from procgen.spec.tables import Columns
from procgen.spec.tree import Tree
from procgen.spec.units import MICROSECOND, parse_date

FILE = (
    Parameter("file", "", Text(), "a CSV or Parquet file, beside the spec"),
    Parameter("column", "", Text(), "column of the times; local where they have no offset"),
)
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


class TimeList(Domain):
    """Times of steps 0, 1, …; read as a tuple of trees, each with a datetime, aware where an offset is written."""

    structured = True

    def describe(self) -> str:
        return (
            "a list of at least two dates and times, each later than the one before, or a column of a file such as "
            "{file: ticks.parquet, column: time}"
        )

    def read(self, tree: Tree, reader: Reading) -> Any:
        if tree.is_map and not _inlined(tree, reader):
            return INVALID
        if not tree.is_list or len(tree.value) < 2:
            return reader.expected(tree, self.describe())
        moments = [parse_date(one.value) if isinstance(one.value, str) else None for one in tree.value]
        for one, moment in zip(tree.value, moments, strict=True):
            if moment is None:
                return reader.expected(one, "a date and time such as 2027-01-04T06:07")
        return tuple([Tree(moment, one.place) for one, moment in zip(tree.value, moments, strict=True)])

    def schema(self) -> Schema:
        return {"anyOf": [{"type": "array", "items": {"type": "string"}, "minItems": 2}, mapping_of(FILE)]}


def listed(times: tuple[Tree, ...], zone: str | None, reader: Reading) -> tuple[int, ...] | None:
    """Return read times as µs of UTC since 1970, those without an offset local in a zone; None after a fault."""
    clock = Grid(1, zone=zone)
    found: list[int] = []
    for one in times:
        if message := _misfit(one.value, clock) or _earlier(one.value, clock, times, found):
            reader.fault(one, message)
            return None
        found.append(_utc(one.value, clock))
    return tuple(found)


def _utc(moment: datetime, clock: Grid) -> int:
    return clock.instant(moment) if moment.tzinfo is None else (moment - _EPOCH) // MICROSECOND


def _misfit(moment: datetime, clock: Grid) -> str:
    """Return why no step can be at a moment, or ""."""
    if not 2 <= moment.year <= LAST_YEAR:
        return f"expected a year from 2 to {LAST_YEAR}, got {moment.year}"
    if moment.tzinfo is None and clock.skipped(moment):
        why = f"does not exist in {clock.zone}: the clocks skip it; take it out, or write times with their offset"
        return f"{moment.isoformat(timespec='minutes')} {why}"
    return ""


def _earlier(moment: datetime, clock: Grid, times: tuple[Tree, ...], found: list[int]) -> str:
    """Return what is wrong with a moment that is not later than the last one found, or ""."""
    if not found or _utc(moment, clock) > found[-1]:
        return ""
    last = times[len(found) - 1].value
    twice = clock.zone and moment.tzinfo is None and clock.twice(moment)
    hint = "where clocks are set back, write the offset, as in +01:00" if twice else "sort them, and keep one of equals"
    return (
        f"expected times each later than the one before, got {moment.isoformat()} for step {len(found)} after "
        f"{last.isoformat()} for step {len(found) - 1}; {hint}"
    )


def _inlined(tree: Tree, reader: Reading) -> bool:
    """Put the times of a file in the place of its name; False after reporting why they cannot be."""
    found = table_of(tree, FILE, reader)
    texts = None if found is None else _texts(*found, tree, reader)
    if texts is None:
        return False
    place = tree.value["file"].place
    tree.value, tree.keys = tuple([Tree(text, place) for text in texts]), {}
    return True


def _texts(table: Columns, column: str, tree: Tree, reader: Reading) -> list[str] | None:
    """The times of a column as a spec would have them; None after reporting the first that is none."""
    texts = []
    for value, row in zip(table[column], table.rows, strict=True):
        moment = value if isinstance(value, datetime) else parse_date(str(value))
        if moment is None or getattr(value, "nanosecond", 0) != 0:
            what = f"expected a date and time, to the microsecond, in column {column}, got {value!r} on {row}"
            reader.fault(tree.value["file"], f"{what}; mend the table, or take that row out")
            return None
        texts.append(_text(moment))
    return texts


def _text(moment: datetime) -> str:
    if moment.tzinfo is None:
        return moment.isoformat()
    return moment.astimezone(UTC).replace(tzinfo=None).isoformat() + "Z"
