"""Stamps against pandas, which has its own calendar and time zone code; lengths and moments against hand counts."""

import time
from datetime import UTC, date, datetime

import numpy as np
import pandas as pd
import pytest

from procgen.spec.calendar import Grid, tz_version
from procgen.spec.units import LENGTH, parse_clock, parse_date, parse_length

BERLIN = "Europe/Berlin"


def utc(*texts):
    return np.array([pd.Timestamp(text).tz_convert("UTC").tz_localize(None) for text in texts], "datetime64[us]")


def stamps(grid, first, count):
    return grid.stamps(first, count).view("datetime64[us]")


def as_utc(index):
    return index.tz_convert("UTC").tz_localize(None).to_numpy().astype("datetime64[us]")


@pytest.mark.parametrize("zone", [BERLIN, "America/New_York", "Australia/Lord_Howe", "Asia/Kolkata"])
@pytest.mark.parametrize(
    ("every", "frequency"),
    [((15, "min"), "15min"), ((1, "h"), "1h"), ((90, "s"), "90s"), ((250, "ms"), "250ms"), ((7, "h"), "7h")],
)
def test_absolute_steps_keep_their_length_across_changes_of_clocks(zone, every, frequency):
    grid = Grid(5000, datetime(2027, 3, 27, 12), every, zone)
    expected = pd.date_range("2027-03-27T12:00", periods=5000, freq=frequency, tz=zone)
    np.testing.assert_array_equal(stamps(grid, 0, 5000), as_utc(expected))


def test_the_local_clock_of_a_day_that_skips_the_time_of_its_step_is_past_the_gap():
    """On 2027-03-28 no clock in Berlin shows 02:30: the step of that day begins at 03:30, as pandas has it too."""
    grid = Grid(5, datetime(2027, 3, 26, 2, 30), (1, "day"), BERLIN)
    shown = pd.DatetimeIndex(grid.moments(np.arange(5)).astype("M8[us]"), tz="UTC").tz_convert(BERLIN).tz_localize(None)
    np.testing.assert_array_equal(grid.local(np.arange(5)), shown.to_numpy().astype("M8[us]").astype(np.int64))
    assert shown[2] == pd.Timestamp("2027-03-28T03:30")


@pytest.mark.parametrize("zone", [BERLIN, "America/New_York", "Asia/Tokyo"])
@pytest.mark.parametrize(
    ("every", "offset"),
    [
        ((1, "day"), pd.DateOffset(days=1)),
        ((3, "day"), pd.DateOffset(days=3)),
        ((2, "week"), pd.DateOffset(weeks=2)),
        ((1, "month"), pd.DateOffset(months=1)),
        ((1, "quarter"), pd.DateOffset(months=3)),
        ((1, "year"), pd.DateOffset(years=1)),
    ],
)
def test_calendar_steps_keep_their_local_clock_time(zone, every, offset):
    start = pd.Timestamp("1995-10-31T06:30")
    count = 40
    scale = pd.DateOffset(**offset.kwds)
    local = [start + k * scale for k in range(count)]  # from the start each time, so 31 October stays a 31st
    expected = as_utc(pd.DatetimeIndex(local).tz_localize(zone))
    grid = Grid(count, start.to_pydatetime(), every, zone)
    np.testing.assert_array_equal(stamps(grid, 0, count), expected)


def test_month_ends_are_counted_from_the_start():
    grid = Grid(5, datetime(2028, 1, 31), (1, "month"))
    days = np.array(["2028-01-31", "2028-02-29", "2028-03-31", "2028-04-30", "2028-05-31"], "datetime64[us]")
    np.testing.assert_array_equal(stamps(grid, 0, 5), days)


def test_business_days_leave_out_weekends_and_holidays():
    holidays = (date(2027, 3, 26), date(2027, 3, 29), date(2027, 5, 6))
    grid = Grid(300, datetime(2027, 1, 4, 17, 30), (1, "business day"), BERLIN, holidays=holidays)
    days = pd.date_range("2027-01-04", periods=300, freq=pd.offsets.CustomBusinessDay(holidays=list(holidays)))
    expected = as_utc((days + pd.Timedelta(hours=17, minutes=30)).tz_localize(BERLIN))
    np.testing.assert_array_equal(stamps(grid, 0, 300), expected)


def test_a_skipped_local_time_is_read_with_the_offset_before_the_change():
    grid = Grid(3, datetime(2027, 3, 27, 2, 30), (1, "day"), BERLIN)
    expected = utc("2027-03-27T02:30+01:00", "2027-03-28T03:30+02:00", "2027-03-29T02:30+02:00")
    np.testing.assert_array_equal(stamps(grid, 0, 3), expected)


def test_a_local_time_that_happens_twice_is_the_first_unless_the_start_says_otherwise():
    first = Grid(3, datetime(2027, 10, 30, 2, 30), (1, "day"), BERLIN)
    expected = utc("2027-10-30T02:30+02:00", "2027-10-31T02:30+02:00", "2027-11-01T02:30+01:00")
    np.testing.assert_array_equal(stamps(first, 0, 3), expected)
    second = Grid(2, datetime(2027, 10, 31, 2, 30, fold=1), (1, "year"), BERLIN)
    np.testing.assert_array_equal(stamps(second, 0, 1), utc("2027-10-31T02:30+01:00"))
    hours = Grid(2, datetime(2027, 10, 31, 2, 30, fold=1), (1, "h"), BERLIN)
    np.testing.assert_array_equal(stamps(hours, 0, 2), utc("2027-10-31T02:30+01:00", "2027-10-31T03:30+01:00"))


def test_a_later_of_two_times_does_not_move_skipped_ones():
    # 2038-03-28 02:30 is skipped; it is read with the offset before the change, whatever the start's fold.
    grid = Grid(3800, datetime(2027, 10, 31, 2, 30, fold=1), (1, "day"), BERLIN)
    skipped = (date(2038, 3, 28) - date(2027, 10, 31)).days
    np.testing.assert_array_equal(stamps(grid, skipped, 1), utc("2038-03-28T02:30+01:00"))


@pytest.mark.parametrize("unit", ["min", "day", "month", "business day"])
def test_stamps_at_the_end_of_steps_are_the_begins_of_the_next(unit):
    begin = Grid(50, datetime(2027, 3, 1), (1, unit), BERLIN)
    end = Grid(50, datetime(2027, 3, 1), (1, unit), BERLIN, stamp="end")
    np.testing.assert_array_equal(end.stamps(0, 50), begin.stamps(1, 50))


@pytest.mark.parametrize("unit", ["s", "min", "day", "week", "month", "business day"])
def test_any_range_of_steps_is_a_slice_of_the_whole(unit):
    grid = Grid(4000, datetime(2027, 1, 29, 2, 30), (1, unit), BERLIN)
    whole = grid.stamps(0, 4000)
    for first, count in [(0, 1), (59, 70), (3999, 1), (100, 0)]:
        np.testing.assert_array_equal(grid.stamps(first, count), whole[first : first + count])
    assert np.all(np.diff(whole) > 0)


@pytest.mark.parametrize("unit", ["s", "day", "business day"])
def test_a_million_stamps_take_less_than_a_second(unit):
    grid = Grid(10**6, datetime(1990, 1, 1, 2, 30), (1, unit), BERLIN)
    begin = time.process_time()
    grid.stamps(0, 10**6)
    grid.stamps(10**6 - 1, 1)
    assert time.process_time() - begin < 1.0


def test_a_grid_without_a_start_has_no_stamps():
    with pytest.raises(ValueError, match="these steps have no stamps: the spec's time has no start"):
        Grid(10).stamps(0, 1)


@pytest.mark.parametrize(
    ("every", "unit", "steps"),
    [
        ((15, "min"), "day", 96.0),
        ((15, "min"), "step", 1.0),
        ((1, "h"), "year", 365.2425 * 24),  # the Gregorian mean year: 97 leap years in 400
        ((1, "month"), "year", 12.0),
        ((1, "quarter"), "year", 4.0),
        ((1, "month"), "day", 12 / 365.2425),
        ((1, "business day"), "business day", 1.0),
        ((1, "business day"), "year", 365.2425 * 5 / 7),
        ((2, "week"), "week", 0.5),
    ],
)
def test_steps_per_unit(every, unit, steps):
    assert Grid(10, None, every).steps_per(unit) == pytest.approx(steps, rel=1e-15)


@pytest.mark.parametrize(
    ("every", "text", "steps"),
    [
        ((15, "min"), "1d", 96.0),
        ((15, "min"), "2 weeks", 1344.0),
        ((15, "min"), "10min", 10 / 15),
        ((1, "h"), "90 s", 0.025),
        ((1, "day"), "1 week", 7.0),
        ((1, "month"), "1 year", 12.0),
        ((1, "business day"), "5 business days", 5.0),
        (None, "24 steps", 24.0),
    ],
)
def test_lengths_in_steps(every, text, steps):
    assert Grid(10, None, every).span_steps(text) == steps


@pytest.mark.parametrize(
    ("every", "text", "message"),
    [
        ((15, "min"), "1 month", "a month is no fixed number of steps of 15 min; write a number of steps"),
        ((1, "business day"), "1 week", "a week is no fixed number of steps of 1 business day; write a number of "
         "steps"),
        ((1, "month"), "1h", "an hour is no fixed number of steps of 1 month; write a number of steps"),
        (None, "1d", '"1d" needs the length of a step; give time: {every: 1h, …}, or write a number of steps'),
        ((1, "h"), "0 h", 'expected a length of time above 0, got "0 h"'),
        ((1, "h"), "1 fortnight", "unknown unit of time fortnight; expected ms, s, min, h, day, week, month, quarter, "
         "year, business day or step"),
        ((1, "h"), "5 m", "unknown unit of time m; expected ms, s, min, h, day, week, month, quarter, year, "
         "business day or step; write min or month"),
        ((1, "h"), "3 dayz", "unknown unit of time dayz; expected ms, s, min, h, day, week, month, quarter, year, "
         "business day or step; did you mean day?"),
        ((1, "h"), "-1h", 'expected a length of time such as 15min, 1d or 2 weeks, got "-1h"'),
    ],
)  # fmt: skip
def test_lengths_that_are_not_so_many_steps(every, text, message):
    with pytest.raises(ValueError) as error:
        Grid(10, None, every).span_steps(text)
    assert str(error.value) == message


@pytest.mark.parametrize(
    ("every", "text", "steps"),
    [
        ((15, "min"), "18:00", 72.0),
        ((15, "min"), "00:00:30", 30 / 900),
        ((15, "min"), "2027-01-05", 96.0),
        ((15, "min"), "2027-01-03T12:00", -48.0),
        ((1, "h"), "2027-03-29", 84 * 24 - 1.0),  # one hour fewer since 4 January: the clocks went forward
        ((1, "h"), "2027-03-29T00:00+02:00", 84 * 24 - 1.0),
        ((1, "day"), "12:00", 0.5),
        ((1, "day"), "2027-03-29", 84.0),  # local days, however long
        ((1, "week"), "2027-01-18", 2.0),
        ((1, "month"), "2027-03-04", 2.0),
        ((1, "month"), "2027-02-18", 1.5),  # half of the 28 days from 4 February to 4 March
        ((1, "month"), "2026-12-04", -1.0),
        ((1, "business day"), "2027-01-11", 5.0),
        ((1, "business day"), "2027-01-09", 4 + 1 / 3),  # a Saturday, in the step that lasts from Friday to Monday
    ],
)
def test_moments_in_steps(every, text, steps):
    assert Grid(10, datetime(2027, 1, 4), every, BERLIN).moment_steps(text) == steps


@pytest.mark.parametrize(
    ("grid", "text", "message"),
    [
        (Grid(10), "18:00", '"18:00" needs time: {start: …, every: …}; give them, or write a number of steps'),
        (
            Grid(10, datetime(2027, 1, 4), (1, "month")),
            "18:00",
            "a clock time is no point in steps of 1 month; write a number of steps",
        ),
        (
            Grid(10, datetime(2027, 1, 4), (1, "h")),
            "25:00",
            'expected a number of steps, a clock time such as 18:00, or a date such as 2027-01-04T06:00, got "25:00"',
        ),
        (
            Grid(10, datetime(2027, 1, 4), (1, "h"), BERLIN),
            "2027-07-01T00:00+01:00",
            "2027-07-01T00:00:00+01:00 has an offset that Europe/Berlin does not have then; leave the offset out",
        ),
    ],
)
def test_moments_that_are_none(grid, text, message):
    with pytest.raises(ValueError) as error:
        grid.moment_steps(text)
    assert str(error.value) == message


def test_texts_of_time():
    assert parse_length("day") == (1, "day")
    assert parse_length(" 1.5 hours ") == (1.5, "h")
    assert parse_clock("7:05") == datetime(2000, 1, 1, 7, 5).time()
    assert parse_clock("07:05:09.25").microsecond == 250_000
    assert [parse_clock(text) for text in ("24:00", "7", "07:60", "18:00 ", "x")][:3] == [None, None, None]
    assert parse_date("2027-02-29") is None
    assert parse_date("2027-01-04T06:00Z") == datetime(2027, 1, 4, 6, tzinfo=UTC)
    assert parse_date("2027-01-04 06:00:30") == datetime(2027, 1, 4, 6, 0, 30)


def test_lengths_agree_with_the_gregorian_calendar():
    # 400 Gregorian years hold 146,097 days: common knowledge of the calendar, as in ISO 8601.
    assert LENGTH["year"] * 400 == LENGTH["day"] * 146_097
    assert LENGTH["quarter"] * 4 == LENGTH["month"] * 12 == LENGTH["year"]
    assert LENGTH["business day"] * 5 == LENGTH["week"]


def test_the_time_zone_database_says_its_version():
    version = tz_version()
    assert version is None or version[:2] == "20"
