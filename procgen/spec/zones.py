"""Offsets of a time zone at many instants at once, from its transitions, year by year."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from functools import lru_cache
from zoneinfo import ZoneInfo

import numpy as np

from procgen.spec.units import DAY, MICROSECOND, SECOND

_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_FIRST, _LAST = 2, 9998  # the years in which a zone can be asked, whatever its offset


def offsets(zone: str, utc: np.ndarray) -> np.ndarray:
    """Return the offsets from UTC of a zone at instants: int64 microseconds, for µs of UTC since 1970.

    Before the year 2 and after 9998 they are those of these years.
    """
    if not utc.size:
        return np.zeros(utc.shape, np.int64)
    years = np.clip((utc // DAY).astype("datetime64[D]").astype("datetime64[Y]").astype(int) + 1970, _FIRST, _LAST)
    spans = [_year(zone, year) for year in np.unique(years).tolist()]
    begins, sizes = (np.concatenate(parts) for parts in zip(*spans, strict=True))
    return sizes[np.maximum(np.searchsorted(begins, utc, side="right") - 1, 0)]


@lru_cache(maxsize=4096)
def _year(zone: str, year: int) -> tuple[np.ndarray, np.ndarray]:
    """Return the instants in a year from which an offset holds, its first instant too, and those offsets."""
    first, last = (_instant(datetime(y, 1, 1, tzinfo=UTC)) for y in (year, year + 1))
    begins, sizes = [first], [_offset(zone, first)]
    for day in range(first, last, DAY):
        end = min(day + DAY, last)
        while _offset(zone, end) != sizes[-1]:
            begins.append(_change(zone, begins[-1] if begins[-1] > day else day, end, sizes[-1]))
            sizes.append(_offset(zone, begins[-1]))
    return np.array(begins), np.array(sizes)


def _change(zone: str, low: int, high: int, size: int) -> int:
    """Return the first second after `low` at which the offset is not `size`, as it is not at `high`."""
    while high - low > SECOND:
        middle = low + (high - low) // (2 * SECOND) * SECOND
        low, high = (middle, high) if _offset(zone, middle) == size else (low, middle)
    return high


def _offset(zone: str, utc: int) -> int:
    local = (_EPOCH + timedelta(microseconds=utc)).astimezone(ZoneInfo(zone)).utcoffset()
    return 0 if local is None else local // MICROSECOND


def _instant(moment: datetime) -> int:
    return (moment - _EPOCH) // MICROSECOND
