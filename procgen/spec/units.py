"""Lengths of time and dates as written in a spec: `15min`, `2 weeks`, `2027-01-04T00:00`, `18:00`."""

from __future__ import annotations

import re
from datetime import UTC, date, datetime, time, timedelta, timezone
from fractions import Fraction

from procgen.spec.words import did_you_mean

MICROSECOND = timedelta(microseconds=1)
SECOND = 1_000_000  # microseconds
DAY = 86_400 * SECOND
YEAR = 31_556_952 * SECOND  # the Gregorian mean year of 365.2425 days

# Mean length in microseconds. Months, quarters and years are Gregorian means; a business day is 7/5 of a day,
# holidays not counted: a year has 365.2425·5/7 = 260.887… of them, and not the 252 that some markets count.
LENGTH = {
    "ms": SECOND // 1000,
    "s": SECOND,
    "min": 60 * SECOND,
    "h": 3600 * SECOND,
    "day": DAY,
    "week": 7 * DAY,
    "month": YEAR // 12,
    "quarter": YEAR // 4,
    "year": YEAR,
    "business day": DAY * 7 // 5,
}
ABSOLUTE = ("ms", "s", "min", "h")
DAYS = {"day": 1, "week": 7}
MONTHS = {"month": 1, "quarter": 3, "year": 12}

_NAMES = {
    "ms": ("millisecond", "milliseconds"),
    "s": ("sec", "second", "seconds"),
    "min": ("minute", "minutes"),
    "h": ("hour", "hours"),
    "day": ("d", "days"),
    "week": ("w", "weeks"),
    "month": ("months",),
    "quarter": ("quarters",),
    "year": ("y", "years"),
    "business day": ("business days",),
}
_UNIT = {alias: unit for unit, aliases in _NAMES.items() for alias in (unit, *aliases)}
_UNIT |= {"step": "step", "steps": "step"}

_LENGTH = re.compile(r"([0-9]{1,15}(?:\.[0-9]{1,15})?)?[ ]*([A-Za-z]+(?: [A-Za-z]+)?)", re.ASCII)
_CLOCK = re.compile(r"([0-9]{1,2}):([0-9]{2})(?::([0-9]{2})(?:\.([0-9]{1,6}))?)?", re.ASCII)
_DATE = re.compile(
    r"(?P<day>[0-9]{4}-[0-9]{2}-[0-9]{2})"
    r"(?:[T ](?P<clock>[0-9]{2}:[0-9:.]+)(?P<offset>Z|[+-][0-9]{2}:[0-9]{2})?)?",
    re.ASCII,
)

DATED = r"^\s*[0-9]{4}-[0-9]{2}-[0-9]{2}"  # how a date begins, for editors


def length_pattern(whole: bool = False) -> str:
    """A regular expression, for editors, that every length of time fits; whole: whole numbers of a unit, no steps."""
    units = "|".join(name for name, unit in _UNIT.items() if not (whole and unit == "step"))
    return rf"^\s*([0-9]{{1,15}}(\.{'0' if whole else '[0-9]'}{{1,15}})?)? *({units})\s*$"


def parse_length(text: str) -> tuple[Fraction, str]:
    """Return count and unit of a length such as 15min, 1.5 h, or day (a count of 1); ValueError says why not.

    The unit is a key of LENGTH, or "step".
    """
    match = _LENGTH.fullmatch(text.strip())
    if match is None:
        raise ValueError(f"expected a length of time such as 15min, 1d or 2 weeks, got {shown(text)}")
    unit = _UNIT.get(match[2])
    if unit is None:
        hint = "write min or month" if match[2] in ("m", "M") else did_you_mean(match[2], _UNIT)
        known = f"{', '.join(LENGTH)} or step"
        raise ValueError(f"unknown unit of time {match[2]}; expected {known}" + (f"; {hint}" if hint else ""))
    count = Fraction(match[1] or 1)
    if count == 0:
        raise ValueError(f"expected a length of time above 0, got {shown(text)}")
    return count, unit


def parse_clock(text: str) -> time | None:
    """Return a clock time such as 18:00 or 07:30:15.5, or None when the text is no such time."""
    match = _CLOCK.fullmatch(text.strip())
    if match is None:
        return None
    hour, minute, second = int(match[1]), int(match[2]), int(match[3] or 0)
    if hour > 23 or minute > 59 or second > 59:
        return None
    return time(hour, minute, second, int((match[4] or "0").ljust(6, "0")))


def parse_date(text: str) -> datetime | None:
    """Return a date, or a date and time, in ISO form, or None; aware only when an offset is written."""
    match = _DATE.fullmatch(text.strip())
    if match is None:
        return None
    clock = parse_clock(match["clock"] or "00:00")
    try:
        day = date.fromisoformat(match["day"])
    except ValueError:
        return None
    return datetime.combine(day, clock, _offset(match["offset"])) if clock else None


def _offset(text: str | None) -> timezone | None:
    if text is None:
        return None
    if text == "Z":
        return UTC
    minutes = int(text[1:3]) * 60 + int(text[4:6])
    sign = -1 if text[0] == "-" else 1
    return timezone(timedelta(minutes=sign * min(minutes, 1439)))


def spelled(microseconds: int) -> str:
    """Return a length of time in the largest unit, up to days, that it is a whole number of, or else holds at all."""
    units = ("day", "h", "min", "s", "ms")
    whole = next((unit for unit in units if microseconds % LENGTH[unit] == 0), None)
    unit = whole or next((unit for unit in units if microseconds >= LENGTH[unit]), "ms")
    count = microseconds / LENGTH[unit]
    number = f"{count:,.0f}" if whole else f"{count:.4g}"
    return f"{number} {unit}{'s' if unit == 'day' and count != 1 else ''}"


def shown(text: str) -> str:
    """Return a text in quotes, shortened, for a message."""
    return f'"{text[:40]}…"' if len(text) > 40 else f'"{text}"'
