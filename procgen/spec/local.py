"""What a term may know of the local calendar: domains that read to small objects made from the spec's grid."""

from __future__ import annotations

import re
from dataclasses import replace
from datetime import date
from typing import Any

import numpy as np

from procgen.spec.calendar import Grid
from procgen.spec.domains import INVALID, Choice, Domain, Reading, Schema, one_or_list
from procgen.spec.records import dataclass
from procgen.spec.tree import Tree
from procgen.spec.units import DAY, parse_date

HOUR = DAY // 24
_MONDAY = 3  # 1970-01-01 was a Thursday
_MONTH_DAY = re.compile(r"([0-9]{2})-([0-9]{2})", re.ASCII)


@dataclass(frozen=True)
class LocalClock:
    """The local calendar of the steps of a grid: what is asked of a step holds where it begins."""

    grid: Grid

    def days(self, steps: np.ndarray) -> np.ndarray:
        """Local days since 1970-01-01, int64."""
        return self.grid.local(steps) // DAY

    def hours(self, steps: np.ndarray) -> np.ndarray:
        """Full hours since local midnight, 0 to 23."""
        return self.grid.local(steps) % DAY // HOUR

    def weekdays(self, steps: np.ndarray) -> np.ndarray:
        """Days since Monday, 0 to 6."""
        return (self.days(steps) + _MONDAY) % 7

    def dates(self, steps: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Years, months 1 to 12, and days of the month 1 to 31."""
        return civil(self.days(steps))

    def years_gone(self, steps: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Years, how many days of them are gone (with fractions), and how many days they have."""
        local = self.grid.local(steps)
        years = (local // DAY).astype("datetime64[D]").astype("datetime64[Y]").astype(np.int64) + 1970
        first = day_of(years, 1, 1)
        return years, (local - first * DAY) / DAY, day_of(years + 1, 1, 1) - first


def civil(days: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Years, months 1 to 12 and days of the month of days since 1970-01-01."""
    at = days.astype("datetime64[D]")
    months = at.astype("datetime64[M]")
    day = (at - months.astype("datetime64[D]")).astype(np.int64) + 1
    count = months.astype(np.int64)
    return count // 12 + 1970, count % 12 + 1, day


def day_of(years: np.ndarray, month: int, day: int) -> np.ndarray:
    """Days since 1970-01-01 of a day of the year; 29 February is 1 March where there is none."""
    months = ((years - 1970) * 12 + month - 1).astype("datetime64[M]")
    return months.astype("datetime64[D]").astype(np.int64) + day - 1


@dataclass(frozen=True)
class Part:
    """A part of the local calendar that counts steps into places 0, 1, …; `size` is how many there are."""

    unit: str
    clock: LocalClock

    @property
    def size(self) -> int:
        return PARTS[self.unit]

    def places(self, steps: np.ndarray) -> np.ndarray:
        """The place of each step."""
        clock = self.clock
        if self.unit == "hour":
            return clock.hours(steps)
        if self.unit == "weekday":
            return clock.weekdays(steps)
        if self.unit == "hour_of_week":
            return clock.weekdays(steps) * 24 + clock.hours(steps)
        _, month, day = clock.dates(steps)
        if self.unit == "month":
            return month - 1
        # Days of the year are counted in a leap year, so that 1 March is the same place in every year.
        return day - 1 if self.unit == "monthday" else np.cumsum([0, *LEAP_MONTHS])[month - 1] + day - 1


LEAP_MONTHS = (31, 29, 31, 30, 31, 30, 31, 31, 30, 31, 30)
PARTS = {"hour": 24, "weekday": 7, "hour_of_week": 168, "month": 12, "monthday": 31, "yearday": 366}


@dataclass(frozen=True)
class DaySet:
    """Days of the local calendar: single ones since 1970-01-01, and (month, day) of every year."""

    single: tuple[int, ...]
    yearly: tuple[tuple[int, int], ...]
    clock: LocalClock

    def hit(self, steps: np.ndarray, shift: int = 0) -> np.ndarray:
        """Whether the day of each step, `shift` days on, is one of them."""
        days = self.clock.days(steps) + shift
        found = np.isin(days, np.array(self.single, np.int64))
        _, month, day = civil(days)
        for m, d in self.yearly:
            found = found | ((month == m) & (day == d))
        return found


@dataclass(frozen=True)
class YearDay:
    """A day of every year, and the clock to find it."""

    month: int
    day: int
    clock: LocalClock

    def turns(self, steps: np.ndarray) -> np.ndarray:
        """Turns since the day began, in years of 365 or 366 days: 0 where it begins."""
        years, gone, length = self.clock.years_gone(steps)
        at = day_of(years, self.month, self.day) - day_of(years, 1, 1)
        return (gone - at) / length


class CalendarPart(Choice):
    """A part of the local calendar; read as a Part."""

    def __init__(self) -> None:
        super().__init__(*PARTS)

    def read(self, tree: Tree, reader: Reading) -> Any:
        unit, clock = super().read(tree, reader), _clock(tree, reader)
        return INVALID if INVALID in (unit, clock) else Part(unit, clock)


class CalendarDays(Domain):
    """A list of days, one standing for a list of one; read as a DaySet."""

    def describe(self) -> str:
        return "a list of days such as 2027-12-24, or 12-24 for every year"

    def read(self, tree: Tree, reader: Reading) -> Any:
        days = [self._day(t, reader) for t in (tree.value if tree.is_list else (tree,))]
        clock = _clock(tree, reader)
        if INVALID in days or clock is INVALID:
            return INVALID
        single = tuple(sorted({d for d in days if isinstance(d, int)}))
        return DaySet(single, tuple(sorted({d for d in days if isinstance(d, tuple)})), clock)

    def _day(self, tree: Tree, reader: Reading) -> Any:
        text = tree.value if isinstance(tree.value, str) else ""
        yearly, moment = month_day(text), parse_date(text) if len(text) <= 10 else None
        if yearly is None and moment is None:
            return reader.expected(tree, "a day such as 2027-12-24, or 12-24 for every year")
        return yearly or (moment.date() - date(1970, 1, 1)).days  # type: ignore[union-attr]

    def schema(self) -> Schema:
        return one_or_list({"type": "string", "maxLength": 10}, 0)


class EveryYear(Domain):
    """A day of every year; read as a YearDay."""

    def describe(self) -> str:
        return "a day of the year such as 07-15, not 02-29"

    def read(self, tree: Tree, reader: Reading) -> Any:
        found = month_day(tree.value) if isinstance(tree.value, str) else None
        if found in (None, (2, 29)):
            return reader.expected(tree, self.describe())
        clock = _clock(tree, reader)
        return INVALID if clock is INVALID else YearDay(*found, clock)

    def schema(self) -> Schema:
        return {"type": "string"}


def month_day(text: str) -> tuple[int, int] | None:
    """Return month and day of a text such as 12-24, or None when it is none."""
    match = _MONTH_DAY.fullmatch(text)
    if match is None:
        return None
    month, day = int(match[1]), int(match[2])
    try:
        date(2000, month, day)
    except ValueError:
        return None
    return month, day


def _clock(tree: Tree, reader: Reading) -> Any:
    if reader.grid is None:  # the fault of `time` is already reported
        return INVALID
    if reader.grid.start is None:
        need = "needs time: {start: …, every: …}; give them, or use seasonal with a period in steps"
        reader.fault(tree, f"the local calendar {need}")
        return INVALID
    # How many steps there are is no part of what a step's date is: with it, a longer spec would be another one.
    return LocalClock(replace(reader.grid, steps=1))
