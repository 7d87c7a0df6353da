"""Times of anyone's table against the spec's grid: which step each is, and what is said where they are others."""

from __future__ import annotations

import re
import warnings
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.words import many
from procgen.spec.words import row_told

if TYPE_CHECKING:
    import pandas as pd

_DAY_FIRST = re.compile(r"\s*(\d{1,2})[/.\-](\d{1,2})[/.\-](\d{4}|\d{2})\b(.*)")
_UNITS = ((86_400_000_000, "day"), (3_600_000_000, "h"), (60_000_000, "min"), (1_000_000, "s"))
_NUMBERS: tuple[tuple[float, float, str, str, Any, Any], ...] = (
    (15_000, 80_000, "a day number of a spreadsheet", "unit='D', origin='1899-12-30'", "D", "1899-12-30"),
    (1e8, 1e10, "seconds since 1970", "unit='s'", "s", "unix"),
    (1e11, 1e13, "milliseconds since 1970", "unit='ms'", "ms", "unix"),
    (1e14, 1e16, "microseconds since 1970", "unit='us'", "us", "unix"),
    (1e17, 9e18, "nanoseconds since 1970", "unit='ns'", "ns", "unix"),
)  # from, below, what a number of this size looks like, how pandas is told so, its unit and origin
_ZONES = 14 * 3_600_000_000  # microseconds, the farthest that a zone is from UTC


class ClockError(ValueError):
    """A column that holds no times, or times that are no steps of the spec; the message says which and why."""


class NoTime(ClockError):
    """A column that holds something else: another one may be meant."""


class Times:
    """A column of times as microseconds UTC; `local` (or None) are those of times without a zone, taken as the spec's.

    `told` says where a row of the column is. Raises ClockError where one is no time (NoTime), or its day and month
    cannot be told apart.
    """

    def __init__(self, column: pd.Series, zone: str | None, told: Callable[[int], str] = row_told):
        import pandas as pd

        self.column, self.told = column, told
        codes, texts = pd.factorize(column, use_na_sentinel=False)  # as many as steps, not as rows
        found = pd.Series(texts)
        if found.dtype == object or pd.api.types.is_string_dtype(found):
            self._refuse_day_first(found, codes)
        times = _times(found)
        if times.isna().any():
            row = int(np.argmax(times.isna().to_numpy()[codes]))
            value = column.iloc[row]
            given = repr(value) if isinstance(value, str) else str(value)
            raise NoTime(f"{given} in column {column.name}, {told(row)}, is no time")
        naive = times.dt.tz is None
        self.only_dates = naive and bool((times.dt.normalize() == times).all())
        self.utc = _microseconds(times.dt.tz_localize("UTC") if naive else times)[codes]
        self.local: NDArray[np.int64] | None = None
        if naive and zone:
            self.local = _microseconds(times.dt.tz_localize(zone, ambiguous=True, nonexistent="shift_forward"))[codes]

    def _refuse_day_first(self, found: pd.Series, codes: NDArray) -> None:
        """Which of 03/01/2027 is the month cannot be seen, and of 31/12/2027 only by chance."""
        for place, text in enumerate(found):
            match = _DAY_FIRST.fullmatch(text) if isinstance(text, str) else None
            if match is None:
                continue
            row = int(np.argmax(codes == place))
            one, other, year, rest = match.groups()
            day, month = (other, one) if int(other) > 12 else (one, other)
            year = year if len(year) == 4 else f"20{year}"
            raise ClockError(
                f"{text!r} in column {self.column.name}, {self.told(row)}, may have its day or its month first; write "
                f"times with the year first (ISO 8601), such as {year}-{int(month):02d}-{int(day):02d}{rest.rstrip()}"
            )


def refuse_numbers(column: pd.Series, told: Callable[[int], str] = row_told) -> None:
    """NoTime for a column of numbers, with what they look like and how to make times of them."""
    if column.dtype.kind not in "iuf" or not len(column):
        return
    first = column.iloc[0]
    looks = ""
    for low, high, what, how, unit, origin in _NUMBERS:
        if low <= first < high:
            import pandas as pd

            at = pd.to_datetime(first, unit=unit, origin=origin).round("s").isoformat()
            looks = (
                f"; it looks like {what}, which would be {at}: convert with pandas.to_datetime(…, {how}) and give "
                f"validate the DataFrame, or write times as text such as {at}"
            )
    raise NoTime(f"{first} in column {column.name}, {told(0)}, is a number, not a time{looks}")


def _times(found: pd.Series) -> pd.Series:
    """Points in time, or NaT; in UTC where offsets differ, as across a change of clocks."""
    import pandas as pd

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", FutureWarning)  # of pandas 2, which gives objects where pandas 3 raises
            times = pd.to_datetime(found, errors="coerce", format="mixed")
        if times.dtype != object:
            return times
    except ValueError:
        pass
    return pd.to_datetime(found, errors="coerce", utc=True, format="mixed")


def _microseconds(times: pd.Series) -> NDArray[np.int64]:
    return times.dt.tz_convert("UTC").dt.tz_localize(None).to_numpy().astype("datetime64[us]").astype(np.int64)


def steps_on_grid(times: Times, time: Any) -> NDArray[np.int64]:
    """The step of each time on the calendar of a spec; times without a zone are UTC, or else the spec's.

    Raises ClockError when some are no steps of it.
    """
    grid = _grid(time, time.steps)
    if _lacks_hours(times, grid):
        other = 'name a column of whole steps with --step-col NAME (columns={"step": NAME})'
        raise ClockError(f"{_no_hours(times, time)}, or {other}")
    step, on = _placed(grid, times.utc)
    if not on.all() and times.local is not None:
        moved, fits = _placed(grid, times.local)
        if fits.sum() > on.sum():
            step, on = moved, fits
    if not on.all():
        row = int(np.argmax(~on))
        raise ClockError(
            f"{times.column.iloc[row]} in column {times.column.name}, {times.told(row)}, is no step of the spec; "
            f"{int((~on).sum()):,} of {many(len(on), 'row')} {'is' if len(on) == 1 else 'are'} off its grid: "
            f"{difference(grid, times, time)}"
        )
    return step


def mismatch(times: Times, step: NDArray[np.int64], time: Any) -> str:
    """What is wrong with times that stand beside their steps, or nothing."""
    grid = _grid(time, int(step.max()) + 1)
    wrong = grid[step] != times.utc
    if wrong.any() and times.local is not None:  # they may be those of the clocks on the wall
        wrong = min(wrong, _on_the_wall(grid, time.zone)[step] != times.utc, key=np.count_nonzero)
    if not wrong.any():
        return ""
    row, count = int(np.argmax(wrong)), int(np.count_nonzero(wrong))
    are = "is not that of its step" if count == 1 else "are not those of their steps"
    return (
        f"{many(count, 'time')} of {len(step):,} {are}, the first {times.column.iloc[row]} at step {step[row]}, "
        f"{times.told(row)}: {difference(grid, times, time)}"
    )


def difference(grid: NDArray[np.int64], times: Times, time: Any) -> str:
    """What the grid of a spec is, and what the times are instead."""
    if _lacks_hours(times, grid):
        return _no_hours(times, time)
    seen = np.unique(times.utc)
    zone = f", or else as {time.zone}" if times.local is not None else ""
    expected = _expected(time)
    same = len(seen) < 2 or len(grid) < 2 or np.array_equal(np.diff(seen)[:1], np.diff(grid)[:1])
    got = "" if same else f"every {_length(int(np.median(np.diff(seen))))}, "
    shift = int(seen[0] - grid[0])
    later = f", {_length(abs(shift))} {'later' if shift > 0 else 'earlier'}" if shift else ""
    text = f"{expected}, the first at {_stamp(grid[0])}, got {got}the first at {_stamp(seen[0])}{later}"
    if same and shift and len(grid) > 1:
        if abs(shift) == int(grid[1] - grid[0]):
            text += " (one step)"
        elif shift % 900_000_000 == 0 and abs(shift) <= _ZONES:
            text += " (another time zone?)"
    return text + (f"; times without a zone are read as UTC{zone}" if zone else "")


def _expected(time: Any) -> str:
    if time.at:
        return f"expected the times listed in the spec ({time.length} apart on average)"
    count, unit = time.every
    return f"expected every {count} {unit}{'s' if count > 1 and unit not in ('min', 'h', 's') else ''}"


def _lacks_hours(times: Times, grid: NDArray[np.int64]) -> bool:
    """Whether all times are midnights of several days, on a grid that has other hours."""
    halves = _UNITS[0][0] // 2  # a day on which clocks change is shorter than 24 h, and no hour is missing in it
    return bool(times.only_dates and (np.diff(grid) <= halves).any() and np.ptp(times.utc) > 0)


def _no_hours(times: Times, time: Any) -> str:
    day = _stamp(times.utc[0])[:10]
    often = f"steps {time.length} apart on average" if time.at else f"a step every {time.length}"
    return (
        f"times in {times.column.name} have no hour, only dates such as {day}, where the spec has {often}; "
        f"write them with hours, such as {day}T06:00"
    )


def _on_the_wall(grid: NDArray[np.int64], zone: str) -> NDArray[np.int64]:
    import pandas as pd

    there = pd.to_datetime(grid, unit="us", utc=True).tz_convert(zone).tz_localize(None)
    return there.to_numpy().astype("datetime64[us]").astype(np.int64)


def _grid(time: Any, steps: int) -> NDArray[np.int64]:
    return np.asarray(time.stamps(0, steps)).astype(np.int64)


def _placed(grid: NDArray[np.int64], stamps: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    step = np.searchsorted(grid, stamps)
    return step.astype(np.int64), (step < len(grid)) & (grid[np.minimum(step, len(grid) - 1)] == stamps)


def _stamp(microseconds: Any) -> str:
    at = np.datetime64(int(microseconds), "us")
    text = str(at.astype("datetime64[m]") if at == at.astype("datetime64[m]") else at)
    return f"{text} UTC"


def _length(microseconds: int) -> str:
    """A length of time in the largest unit that it is a whole number of."""
    for size, unit in _UNITS:
        if microseconds % size == 0:
            count = microseconds // size
            return many(count, unit) if unit == "day" else f"{count:,} {unit}"
    return f"{microseconds / 1e6:g} s"
