"""Reading the `time` of a spec: its parameters, declared as those of terms are, and the rules that join them."""

from __future__ import annotations

from dataclasses import replace
from datetime import date, datetime, timedelta
from typing import Any
from zoneinfo import ZoneInfo, available_timezones

import numpy as np

from procgen.spec.calendar import LAST_YEAR, Grid
from procgen.spec.declare import INVALID, Choice, Domain, Parameter, Reading, Schema, Whole, one_or_list, read_each
from procgen.spec.timelist import TimeList, listed
from procgen.spec.tree import Tree
from procgen.spec.units import DATED, length_pattern, parse_date, parse_length
from procgen.spec.words import did_you_mean

MOST = 10**12  # paths, or steps; an address holds more, but nobody's disk does


class Every(Domain):
    """The length of a step; read as (count, unit)."""

    def describe(self) -> str:
        return "a length of time such as 15min, 1h, 1d, 1 week, 1 month, 1 quarter, 1 year or 1 business day"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not isinstance(tree.value, str):
            return reader.expected(tree, self.describe())
        try:
            count, unit = parse_length(tree.value)
        except ValueError as error:
            reader.fault(tree, str(error))
            return INVALID
        if unit == "step" or count.denominator != 1 or count > 10**9:
            hint = "write a whole number of a smaller unit" if unit != "step" else ""
            return reader.expected(tree, self.describe(), hint)
        return int(count), unit

    def schema(self) -> Schema:
        return {"type": "string", "pattern": length_pattern(whole=True)}


class Date(Domain):
    """A date, with or without a time, and an offset where a time happens twice; read as a datetime."""

    def describe(self) -> str:
        return "a date, with or without a time, such as 2027-01-04 or 2027-01-04T06:00"

    def read(self, tree: Tree, reader: Reading) -> Any:
        moment = parse_date(tree.value) if isinstance(tree.value, str) else None
        return reader.expected(tree, self.describe()) if moment is None else moment

    def schema(self) -> Schema:
        return {"type": "string", "pattern": DATED}


class Zone(Domain):
    """A name from the time zone database."""

    def describe(self) -> str:
        return "a time zone such as Europe/Berlin or UTC"

    def read(self, tree: Tree, reader: Reading) -> Any:
        name = tree.value
        if not isinstance(name, str) or len(name) > 100:
            return reader.expected(tree, self.describe())
        try:
            ZoneInfo(name)
        except (KeyError, ValueError, OSError):  # unknown, no proper name, or a folder of the database
            return reader.expected(tree, self.describe(), did_you_mean(name, available_timezones()))
        return name

    def schema(self) -> Schema:
        return {"type": "string", "maxLength": 100}


class Dates(Domain):
    """A list of days, one standing for a list of one; read as a sorted tuple of dates."""

    def describe(self) -> str:
        return "a list of days such as 2027-12-24"

    def read(self, tree: Tree, reader: Reading) -> Any:
        days = [self._day(t, reader) for t in (tree.value if tree.is_list else (tree,))]
        return INVALID if INVALID in days else tuple(sorted(set(days)))

    def schema(self) -> Schema:
        return one_or_list({"type": "string", "maxLength": 10, "pattern": DATED}, 0)

    def _day(self, tree: Tree, reader: Reading) -> date | Any:
        moment = parse_date(tree.value) if isinstance(tree.value, str) and len(tree.value) <= 10 else None
        return reader.expected(tree, "a day such as 2027-12-24") if moment is None else moment.date()


TIME = (
    Parameter("steps", "T", Whole(at_least=1, at_most=MOST), "number of steps"),
    Parameter("start", "", Date(), "local date and time at which step 0 begins; of two, the first", default=None),
    Parameter("every", "", Every(), "length of a step", default=None),
    Parameter("at", "", TimeList(), "times of all steps, instead of start and every (and of steps)", default=None),
    Parameter("zone", "", Zone(), "time zone of start or at; UTC when absent", default=None),
    Parameter("stamp", "", Choice("begin", "end"), "which end of a step its time is", default="begin"),
    Parameter("holidays", "", Dates(), "days that are no business days, beside weekends", default=()),
)


def read_time(tree: Tree, reader: Reading) -> Grid | None:
    """Return the grid of a spec, or None after reporting every fault."""
    before = len(reader.faults)
    by_list = tree.is_map and "at" in tree.value
    values = read_each(tree, TIME, reader, optional=("steps",) if by_list else ())
    if by_list:
        _alone(tree, reader)
    elif tree.is_map:
        _companions(tree, values, reader)
    if len(reader.faults) > before:
        return None
    if by_list:
        return _listed(tree, values, reader)
    grid = Grid(**{**values, "start": None, "at": ()})
    if values["start"] is None:
        return grid
    return _start(tree, grid, values["start"], reader)


def _companions(tree: Tree, values: dict[str, Any], reader: Reading) -> None:
    """Report keys that mean nothing without another."""
    given = tree.value
    if "start" in given and "every" not in given:
        reader.fault(tree, "expected every beside start, as in {start: 2027-01-04, every: 15min, steps: 96}")
    for key in ("zone", "stamp"):
        if key in given and "start" not in given:
            reader.fault(tree.key(key), f"{key} means nothing without start; give start, or remove {key}")
    every = values.get("every")
    if "holidays" in given and every is not INVALID and (every is None or every[1] != "business day"):
        message = "holidays count only on steps of business days; write every: 1 business day, or remove them"
        reader.fault(tree.key("holidays"), message)


def _alone(tree: Tree, reader: Reading) -> None:
    """Report keys that have no place beside listed times."""
    for key in ("start", "every", "stamp", "holidays"):
        if key in tree.value:
            message = f"{key} has no place beside at, which lists the time of every step; remove {key}, or at"
            reader.fault(tree.value[key] if key == "start" else tree.key(key), message)


def _listed(tree: Tree, values: dict[str, Any], reader: Reading) -> Grid | None:
    at, steps = listed(values["at"], values["zone"], reader), values["steps"]
    if at is None:
        return None
    if steps is not None and steps > len(at):
        message = f"expected at most {len(at):,} steps, for so many times are listed in at, got {steps:,}"
        reader.fault(tree.value["steps"], f"{message}; list more times, or ask for fewer steps")
        return None
    grid = Grid(steps or len(at), datetime(1970, 1, 1), zone=values["zone"], at=at)
    first = int(grid.local(np.zeros(1, np.int64))[0])
    return replace(grid, start=datetime(1970, 1, 1) + timedelta(microseconds=first))


def _start(tree: Tree, grid: Grid, moment: datetime, reader: Reading) -> Grid | None:
    place = tree.value["start"]
    try:
        moment = grid.resolve(moment)
    except ValueError as error:
        reader.fault(place, str(error))
        return None
    placed = Grid(grid.steps, moment, grid.every, grid.zone, grid.stamp, grid.holidays)
    if message := _misfit(placed, moment):
        reader.fault(place, message)
        return None
    if (year := placed.last_year()) > LAST_YEAR:
        message = f"expected steps that end by the year {LAST_YEAR}, but the last of {grid.steps:,} would be in "
        reader.fault(tree.value["steps"], f"{message}{year}; give fewer or shorter steps, or leave out start")
        return None
    return placed


def _misfit(grid: Grid, moment: datetime) -> str:
    """Return why no step can begin at `moment`, or ""."""
    if grid.skipped(moment):
        why = f"does not exist in {grid.zone}: the clocks skip it; choose a time before or after"
        return f"{moment.isoformat(timespec='minutes')} {why}"
    if moment.year < 2 or moment.year > LAST_YEAR:
        return f"expected a year from 2 to {LAST_YEAR}, got {moment.year}"
    if grid.every is not None and grid.every[1] == "business day":
        holidays = np.array(grid.holidays, dtype="datetime64[D]")
        if not np.is_busday(moment.date(), holidays=holidays):
            first = np.busday_offset(moment.date(), 0, roll="forward", holidays=holidays)
            return f"expected a start on a business day, got {moment.date()}; the next one is {first}"
    return ""
