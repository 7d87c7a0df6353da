"""The grid of steps and its calendar: stamps, lengths and moments in steps.

Milliseconds to hours are absolute: a step has the same length on the day the clocks change. Days and up are
local calendar: a step keeps its local clock time, and every stamp is computed from the start, never from the
stamp before (31 January + 1 month is 28 or 29 February, + 2 months is 31 March).

Where a calendar step falls on a local time that the change of clocks skips, it is read with the offset before
the change (02:30 becomes 03:30); where a local time happens twice, it is the first, or the one whose offset
`start` was written with. A whole day that a zone skipped (Samoa, 30 December 2011) is the same instant as the
next.

Where the times are listed, steps are at these; before the first and after the last, all are the mean length apart.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from datetime import date, datetime, time, timedelta
from fractions import Fraction
from functools import cached_property
from zoneinfo import ZoneInfo

import numpy as np

from procgen.spec.records import dataclass
from procgen.spec.units import (
    ABSOLUTE,
    DAY,
    DAYS,
    LENGTH,
    MICROSECOND,
    MONTHS,
    YEAR,
    parse_clock,
    parse_date,
    parse_length,
    shown,
    spelled,
)
from procgen.spec.zones import offsets

LAST_YEAR = 9998  # one short of what a datetime can hold, for the ends of steps and for time zones
LISTED = "where the times are listed"
_NEEDS_TIME = "needs time: {start: …, every: …}; give them, or write a number of steps"
_EPOCH = date(1970, 1, 1).toordinal()


@dataclass(frozen=True)
class Grid:
    """The steps of a spec and, where `start` and `every` are given, or `at`, when they are.

    Parameters
    ----------
    steps : number of steps.
    start : local date and time at which step 0 begins, without a time zone; its `fold` says which of two, the
        first where it is 0. Calendar steps at a clock time that a day skips are moved past the gap.
    every : length of a step as (count, unit), the unit a key of `units.LENGTH`.
    zone : name of the time zone; None is UTC.
    stamp : "begin" or "end": which end of a step its stamp is.
    holidays : days that are not business days, beside Saturdays and Sundays.
    uneven : the length of the steps whose equal parts these are, where the parts have no calendar.
    at : the times of steps 0, 1, … where they are listed: µs of UTC since 1970, two or more, each later than the one
        before, and no fewer than `steps`; `start` is then the first of them, and `every` None.
    """

    steps: int
    start: datetime | None = None
    every: tuple[int, str] | None = None
    zone: str | None = None
    stamp: str = "begin"
    holidays: tuple[date, ...] = ()
    uneven: str = ""  # the length of the steps that were cut into parts without a calendar
    at: tuple[int, ...] = ()

    def cut(self, parts: int) -> Grid:
        """Return the grid of steps cut into so many equal parts; without a calendar where these are no whole ms.

        Days and weeks have equal parts only where no clock changes.
        """
        steps = self.steps * parts
        if self.at:
            return replace(self, steps=steps, start=None, uneven="listed steps", at=())
        if self.every is None:
            return replace(self, steps=steps)
        whole = self.every[1] in ABSOLUTE or (self.every[1] in DAYS and self.zone is None)
        if not whole or self._length % (parts * LENGTH["ms"]):
            return replace(self, steps=steps, start=None, every=None, uneven=self._every)
        length = self._length // parts
        unit = next(unit for unit in ("h", "min", "s", "ms") if length % LENGTH[unit] == 0)
        return replace(self, steps=steps, every=(length // LENGTH[unit], unit))

    def stamps(self, first_step: int, count: int) -> np.ndarray:
        """Return the stamps of `count` steps from `first_step`: int64 (count,), µs of UTC since 1970.

        Raises ValueError when the grid has no start.
        """
        if self.start is None:
            raise ValueError("these steps have no stamps: the spec's time has no start")
        return self.moments(np.arange(first_step, first_step + count, dtype=np.int64))

    def moments(self, steps: np.ndarray) -> np.ndarray:
        """Return the stamps of any steps: int64, µs of UTC since 1970; needs a start."""
        if self.at:
            return self._listed(np.asarray(steps, np.int64))
        assert self.start is not None and self.every is not None
        steps = np.asarray(steps, np.int64) + (self.stamp == "end")
        if self.every[1] in ABSOLUTE:
            return steps * self._length + self._utc(self.start)
        return self._calendar_utc(self._local(steps))

    @property
    def mean_length(self) -> int:
        """The length of a step in µs: on average, where steps differ in length."""
        return self._length

    @property
    def even(self) -> bool:
        """Whether all steps are known to have one length; also where none is given."""
        if self.every is None:
            return not self.uneven and not self.at
        return self.every[1] in ABSOLUTE or (self.every[1] in DAYS and self.zone is None)

    def local(self, steps: np.ndarray) -> np.ndarray:
        """Return the local clock where steps begin: int64 microseconds since 1970-01-01T00:00 by that clock.

        Raises ValueError when the grid has no start.
        """
        if self.start is None:
            raise ValueError("these steps have no local time: the spec's time has no start")
        steps = np.asarray(steps, np.int64)
        if self.at:
            utc = self._listed(steps)
        elif self.every is not None and self.every[1] not in ABSOLUTE:
            if self.zone is None:
                return self._local(steps)
            utc = self._calendar_utc(self._local(steps))  # and back: a day may skip the time at which its step begins
        else:
            utc = steps * self._length + self._utc(self.start)
        return utc if self.zone is None else utc + offsets(self.zone, utc)

    def last_year(self) -> int:
        """Return the year in which the last step ends, to within a few days; needs a start."""
        assert self.start is not None
        return int(self.start.year + Fraction(self.start.month - 1, 12) + Fraction(self.steps * self._length, YEAR))

    def steps_per(self, unit: str, by_time: bool = False) -> float:
        """Return how many steps a unit such as `day` or `year` holds, on average; ValueError says why not.

        A month is a twelfth of the Gregorian mean year of 365.2425 days, a business day 7/5 of a day. `by_time`: the
        average is asked for by what counts by the time that passes, and so has it right also where times are listed.
        """
        count, name = parse_length(unit)
        if name == "step":
            return float(count)
        if self.at and not by_time:
            raise ValueError(
                f"per: {unit} needs steps of one length, and {LISTED} (time.at) they may have any; write the value per "
                "step, or use ornstein_uhlenbeck with clock: time, which goes by the time that passes"
            )
        if self.every is None and not self.at:
            need = f"needs the length of a step; {self._lack('every: 1h, …')}, or write per: step"
            raise ValueError(f"per: {unit} {need}")
        return float(count * LENGTH[name] / self._length)

    def span_steps(self, text: str) -> float:
        """Return a length of time such as `1d` in steps; ValueError says why not.

        Only lengths that are the same number of steps wherever they begin: on a grid of hours a day is 24
        hours, and a month has no such number.
        """
        count, unit = parse_length(text)
        if unit == "step":
            return float(count)
        if self.at:
            raise ValueError(
                f"{_article(unit)} is no fixed number of steps {LISTED} (time.at); write a number of steps, or use "
                "calendar, which goes by the hour, the weekday or the month"
            )
        if self.every is None:
            need = f"needs the length of a step; {self._lack('every: 1h, …')}, or write a number of steps"
            raise ValueError(f"{shown(text)} {need}")
        step = self.every[1]
        if _family(unit) != _family(step):
            raise ValueError(f"{_article(unit)} is no fixed number of steps of {self._every}; write a number of steps")
        return float(count * LENGTH[unit] / self._length)

    def moment_steps(self, text: str) -> float:
        """Return a clock time on the day of the start, or a date (and time), in steps from step 0.

        ValueError says why not. A date between two steps is a fraction of the step it lies in.
        """
        clock, moment = parse_clock(text), parse_date(text)
        if clock is None and moment is None:
            raise ValueError(
                "expected a number of steps, a clock time such as 18:00, or a date such as 2027-01-04T06:00, "
                f"got {shown(text)}"
            )
        if self.start is None:
            need = f"needs the steps' times; {self._lack('start: …, every: …')}, or write a number of steps"
            raise ValueError(f"{shown(text)} {need if self.uneven else _NEEDS_TIME}")
        if clock is not None:
            if self.every is not None and _family(self.every[1]) != "day":
                raise ValueError(f"a clock time is no point in steps of {self._every}; write a number of steps")
            moment = datetime.combine(self.start.date(), clock)
        assert moment is not None
        return self._position(self.resolve(moment))

    def resolve(self, moment: datetime) -> datetime:
        """Return a moment as local time, `fold` set from a written offset; ValueError when that is wrong."""
        if moment.tzinfo is None:
            return moment
        local, offset = moment.replace(tzinfo=None), moment.utcoffset()
        for fold in (0, 1):
            if timedelta(microseconds=self._offset(local, fold)) == offset:
                return local.replace(fold=fold)
        why = f"has an offset that {self.zone or 'UTC'} does not have then; leave the offset out"
        raise ValueError(f"{moment.isoformat()} {why}")

    def skipped(self, moment: datetime) -> bool:
        """Return whether the change of clocks skips a local time."""
        return self._offset(moment, 1) > self._offset(moment, 0)

    def twice(self, moment: datetime) -> bool:
        """Return whether a local time happens twice, as clocks are set back."""
        return self._offset(moment, 1) < self._offset(moment, 0)

    def instant(self, moment: datetime) -> int:
        """Return a local time, without a time zone, as µs of UTC since 1970; the first of two."""
        return self._utc(moment)

    def _lack(self, keys: str) -> str:
        """Return how to mend a lack of dates."""
        if self.uneven:
            return f"parts of {self.uneven} have no fixed length, so choose other steps"
        return f"give time: {{{keys}}}"

    @property
    def _length(self) -> int:
        if self.at:
            return max(1, round(Fraction(self.at[-1] - self.at[0], len(self.at) - 1)))
        assert self.every is not None
        return self.every[0] * LENGTH[self.every[1]]

    @property
    def length(self) -> str:
        """The length of a step in words, such as "1 business day"; on average where times are listed."""
        return spelled(self._length) if self.at else self._every

    @property
    def _every(self) -> str:
        assert self.every is not None
        return f"{self.every[0]} {self.every[1]}"

    @cached_property
    def _times(self) -> np.ndarray:
        return np.array(self.at, np.int64)

    def _listed(self, steps: np.ndarray) -> np.ndarray:
        """Return UTC of steps whose times are listed; of others by the mean length."""
        inside = np.clip(steps, 0, len(self.at) - 1)
        return self._times[inside] + (steps - inside) * self._length

    def _offset(self, moment: datetime, fold: int | None = None) -> int:
        """Return the zone's offset from UTC at a local time, in microseconds."""
        if self.zone is None:
            return 0
        offset = ZoneInfo(self.zone).utcoffset(moment if fold is None else moment.replace(fold=fold))
        return 0 if offset is None else offset // MICROSECOND

    def _utc(self, moment: datetime) -> int:
        return _microseconds(moment) - self._offset(moment, 0 if self.skipped(moment) else None)

    def _calendar_utc(self, local: np.ndarray) -> np.ndarray:
        """Return UTC of local times that all have the clock time of the start."""
        assert self.start is not None
        if self.zone is None:
            return local
        days = (local // DAY + _EPOCH).tolist()
        first = _offsets(self.zone, days, self.start.time(), 0)
        if self.start.fold:  # the later of two times has the smaller offset, as has the one before a gap
            first = np.minimum(first, _offsets(self.zone, days, self.start.time(), 1))
        return local - first

    def _local(self, steps: np.ndarray) -> np.ndarray:
        """Return the local begin of calendar steps, in microseconds since 1970 by the local clock."""
        assert self.start is not None and self.every is not None
        count, unit = self.every
        day = np.datetime64(self.start.date(), "D")
        if unit in DAYS:
            days = day.astype(np.int64) + steps * (count * DAYS[unit])
        elif unit in MONTHS:
            months = day.astype("datetime64[M]").astype(np.int64) + steps * (count * MONTHS[unit])
            begin, end = _first_day(months), _first_day(months + 1)
            days = begin + np.minimum(self.start.day - 1, end - begin - 1)
        else:
            holidays = np.array(self.holidays, dtype="datetime64[D]")
            days = np.busday_offset(day, steps * count, holidays=holidays).astype(np.int64)
        return days * DAY + _microseconds(self.start) % DAY

    def _position(self, moment: datetime) -> float:
        if self.at:
            return self._among(self._utc(moment))
        assert self.start is not None and self.every is not None
        unit = self.every[1]
        if unit in ABSOLUTE:
            return float(Fraction(self._utc(moment) - self._utc(self.start), self._length))
        if unit in DAYS:
            return float(Fraction(_microseconds(moment) - _microseconds(self.start), self._length))
        guess = int(Fraction(_microseconds(moment) - _microseconds(self.start), self._length))
        near = np.arange(guess - 12, guess + 13) if unit in MONTHS else self._business_steps(moment)
        stamps = self._local(near)
        at = int(np.searchsorted(stamps, _microseconds(moment), side="right")) - 1
        gone = Fraction(_microseconds(moment) - int(stamps[at]), int(stamps[at + 1] - stamps[at]))
        return float(int(near[at]) + gone)

    def _among(self, utc: int) -> float:
        """Return an instant in steps from step 0, where times are listed."""
        last = len(self.at) - 1
        if not self.at[0] <= utc < self.at[last]:
            end = 0 if utc < self.at[0] else last
            return float(end + Fraction(utc - self.at[end], self._length))
        before = int(np.searchsorted(self._times, utc, side="right")) - 1
        return float(before + Fraction(utc - self.at[before], self.at[before + 1] - self.at[before]))

    def _business_steps(self, moment: datetime) -> np.ndarray:
        assert self.start is not None and self.every is not None
        holidays = np.array(self.holidays, dtype="datetime64[D]")
        days = np.busday_count(self.start.date(), moment.date(), holidays=holidays)
        return np.arange(days // self.every[0] - 3, days // self.every[0] + 4)


def tz_version() -> str | None:
    """Return the version of the time zone database in use, such as "2025b", or None when it does not say."""
    from importlib import metadata
    from pathlib import Path
    from zoneinfo import TZPATH

    for folder in map(Path, TZPATH):
        if (folder / "Europe").is_dir():
            for name, take in _VERSIONS.items():
                if (folder / name).is_file():
                    with open(folder / name, encoding="utf-8") as file:
                        return take(file.readline())
            return None
    try:
        return metadata.version("tzdata")
    except metadata.PackageNotFoundError:
        return None


_VERSIONS: dict[str, Callable[[str], str]] = {
    "tzdata.zi": lambda line: line.removeprefix("# version").strip(),
    "+VERSION": str.strip,
}


def _family(unit: str) -> str:
    if unit in MONTHS:
        return "month"
    return "business day" if unit == "business day" else "day"


def _article(unit: str) -> str:
    return {"ms": "a millisecond", "s": "a second", "min": "a minute", "h": "an hour"}.get(unit, f"a {unit}")


def _microseconds(moment: datetime) -> int:
    """Return microseconds since 1970 by the local clock."""
    return (moment.replace(tzinfo=None) - datetime(1970, 1, 1)) // MICROSECOND


def _first_day(months: np.ndarray) -> np.ndarray:
    return months.astype("datetime64[M]").astype("datetime64[D]").astype(np.int64)


def _offsets(zone: str, days: list[int], clock: time, fold: int) -> np.ndarray:
    """Return the zone's offsets at one local clock time of many days, in microseconds."""
    at, offset, clock = date.fromordinal, ZoneInfo(zone).utcoffset, clock.replace(fold=fold)
    # Few offsets occur in a zone, so each is divided out once: a million days take well under a second.
    found = [offset(datetime.combine(at(day), clock)) for day in days]
    size = {value: 0 if value is None else value // MICROSECOND for value in set(found)}
    return np.array([size[value] for value in found], dtype=np.int64)
