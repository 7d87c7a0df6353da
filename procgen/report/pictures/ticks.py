"""Where axes have ticks: round numbers, and round times of the local calendar."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from procgen.report.pictures.chart import Axis

Ticks = tuple[tuple[float, str], ...]
_HOUR = 3_600_000_000
_DAY = 24 * _HOUR
# Lengths of ticks in microseconds; months and years are counted by the calendar.
_SHORT = [1000 * k for k in (1, 2, 5, 10, 20, 50, 100, 200, 500)]
_SHORT += [1_000_000 * k for k in (1, 2, 5, 10, 20, 30, 60, 120, 300, 600, 900, 1800)]
_SHORT += [_HOUR * k for k in (1, 2, 3, 6, 12)] + [_DAY, 2 * _DAY, 7 * _DAY, 14 * _DAY]
_MONTHS = [1, 2, 3, 6, 12, 24, 60, 120, 240, 600, 1200, 2400, 6000, 12000]
_NAMES = "Jan Feb Mar Apr May Jun Jul Aug Sep Oct Nov Dec".split()
_MONDAY = 4 * _DAY  # 1970-01-05


def axis(low: float, high: float, label: str = "", most: int = 6, room: float = 0.0) -> Axis:
    """An axis from `low` to `high` with round ticks; `room` is a share of it that is added on both sides."""
    if not math.isfinite(low) or not math.isfinite(high):
        low, high = 0.0, 1.0
    if high <= low:
        around = abs(low) * 0.1 or 1.0
        low, high = low - around, high + around
    low, high = low - room * (high - low), high + room * (high - low)
    return Axis(low, high, round_ticks(low, high, most), label)


def round_ticks(low: float, high: float, most: int = 6) -> Ticks:
    """At most `most` ticks within the range, 1, 2 or 5 times a power of ten apart."""
    rough = (high - low) / most
    power = 10.0 ** math.floor(math.log10(rough))
    step = next(power * k for k in (1, 2, 5, 10, 20) if power * k * most >= (high - low) * (1 - 1e-9))
    first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
    return tuple((k * step, tick_text(k * step, step)) for k in range(first, last + 1))


def tick_text(value: float, step: float) -> str:
    """A tick in as many digits as its distance to the next one needs."""
    if abs(value) < step / 2:
        return "0"
    if abs(value) >= 1e6 or step < 1e-4:
        digits = max(0, math.floor(math.log10(abs(value))) - math.floor(math.log10(step)))
        mantissa, _, exponent = f"{value:.{digits}e}".partition("e")
        return f"{mantissa}e{int(exponent)}".replace("-", "−")
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    text = f"{value:,.{decimals}f}" if abs(value) >= 10_000 else f"{value:.{decimals}f}"
    return text.replace("-", "−")


def step_axis(grid: Any, first: int, last: int, room: float = 0.0) -> Axis:
    """The axis of steps first … last: local dates where the spec has a start, else numbers of steps.

    `room` is a share of it that is added on both sides.
    """
    last = max(last, first + 1)
    low, high = first - room * (last - first), last + room * (last - first)
    if grid.start is None:
        whole = tuple((v, t) for v, t in round_ticks(first, last) if v == round(v))
        return Axis(low, high, whole, "step")
    ticks, span = calendar_ticks(grid, first, last)
    return Axis(low, high, ticks, f"{span} ({grid.zone or 'UTC'})")


def calendar_ticks(grid: Any, first: int, last: int, most: int = 6) -> tuple[Ticks, str]:
    """Ticks at round local times, and the days or years that they lie in."""
    steps = np.unique(np.linspace(first, last, min(last - first + 1, 2000)).astype(np.int64))
    clock = np.maximum.accumulate(grid.local(steps))  # an hour that comes twice stands still
    low, high = int(clock[0]), int(clock[-1])
    times, text = _round_times(low, high, most)
    # The first step that begins at the tick or later: between two steps there is no better place.
    places = np.interp(times, clock, steps) if len(steps) > 1 else np.zeros(len(times))
    dates = np.array([low, high], dtype="datetime64[us]").astype("datetime64[D]").astype(str)
    span = str(dates[0]) if dates[0] == dates[1] else f"{dates[0]} to {dates[1]}"
    return tuple((float(p), text(int(t))) for p, t in zip(places, times, strict=True)), span


def _round_times(low: int, high: int, most: int) -> tuple[list[int], Any]:
    length = next((k for k in _SHORT if (high - low) <= k * most), None)
    if length is not None:
        origin = _MONDAY if length % (7 * _DAY) == 0 else 0
        begin = origin + -(-(low - origin) // length) * length
        return list(range(begin, high + 1, length)), _day_text if length >= _DAY else _clock_text(length)
    edges = np.array([low, high], dtype="datetime64[us]").astype("datetime64[M]").astype(np.int64)
    count = int(edges[1] - edges[0])
    length = next((k for k in _MONTHS if count <= k * most), _MONTHS[-1])
    origin = -1970 * 12  # so that years are multiples of the length
    begin = origin + -(-(int(edges[0]) - origin) // length) * length
    months = np.arange(begin, int(edges[1]) + 1, length).astype("datetime64[M]")
    times = months.astype("datetime64[us]").astype(np.int64)
    return [int(t) for t in times if low <= t <= high], _year_text if length >= 12 else _month_text


def _parts(time: int) -> tuple[int, int, int, int]:
    """Year, month, day, and microseconds of the day."""
    day = np.datetime64(time, "us").astype("datetime64[D]")
    year, month, date = str(day).rsplit("-", 2)
    return int(year), int(month), int(date), time - int(day.astype("datetime64[us]").astype(np.int64))


def _day_text(time: int) -> str:
    _, month, day, _ = _parts(time)
    return f"{day} {_NAMES[month - 1]}"


def _clock_text(length: int) -> Any:
    def text(time: int) -> str:
        _, month, day, rest = _parts(time)
        if rest == 0:
            return f"{day} {_NAMES[month - 1]}"
        hours, minutes = rest // _HOUR, rest % _HOUR // 60_000_000
        if length >= 60_000_000:
            return f"{hours:02d}:{minutes:02d}"
        seconds = rest % 60_000_000
        return f":{seconds // 1_000_000:02d}" + (f".{seconds % 1_000_000 // 1000:03d}" if length < 1_000_000 else "")

    return text


def _month_text(time: int) -> str:
    year, month, *_ = _parts(time)
    return f"{_NAMES[month - 1]} {year}" if month == 1 else _NAMES[month - 1]


def _year_text(time: int) -> str:
    return str(_parts(time)[0])
