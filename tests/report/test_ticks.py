"""Ticks: round numbers, and round times by the local clock."""

from datetime import datetime
from zoneinfo import ZoneInfo

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from procgen.report.pictures.ticks import axis, calendar_ticks, round_ticks, step_axis, tick_text
from procgen.spec.calendar import Grid

spans = st.tuples(st.floats(-1e9, 1e9), st.floats(1e-6, 1e9)).map(lambda pair: (pair[0], pair[0] + pair[1]))


@given(spans.filter(lambda span: span[1] - span[0] > 1e-9 * abs(span[0])))
def test_round_ticks_lie_within_and_are_one_two_or_five_apart(span):
    low, high = span
    ticks = round_ticks(low, high)
    values = [value for value, _ in ticks]
    assert 1 <= len(ticks) <= 7
    slack = 1e-6 * (high - low)
    assert all(low - slack <= value <= high + slack for value in values)
    if len(values) > 1:
        step = values[1] - values[0]
        lead = step / 10.0 ** np.floor(np.log10(step) + 1e-9)
        assert np.isclose(lead, [1, 2, 5, 10], rtol=1e-5, atol=0).any()
        assert len({text for _, text in ticks}) == len(ticks)  # enough digits to tell them apart


@pytest.mark.parametrize(
    ("value", "step", "text"),
    [
        (0.30000000000000004, 0.1, "0.3"),
        (-2.0, 1.0, "−2"),
        (1e-17, 0.5, "0"),
        (12_000.0, 2000.0, "12,000"),
        (2.5e7, 5e6, "2.5e7"),
        (0.00002, 0.00001, "2e−5"),
        (1200.0, 200.0, "1200"),
    ],
)
def test_text_of_a_tick(value, step, text):
    assert tick_text(value, step) == text


def test_an_axis_without_extent_gets_one():
    assert axis(5.0, 5.0).low < 5.0 < axis(5.0, 5.0).high
    assert axis(float("nan"), float("inf")).high == 1.0


def test_steps_without_a_start_are_numbered():
    found = step_axis(Grid(500), 0, 499)
    assert found.label == "step"
    assert [text for _, text in found.ticks] == ["0", "100", "200", "300", "400"]


def test_days_begin_at_local_midnight_across_a_change_of_clocks():
    zone = ZoneInfo("Europe/Berlin")
    grid = Grid(120, datetime(2027, 3, 26, 18), (1, "h"), "Europe/Berlin")  # summer time from 28 March 2027, 02:00
    ticks, span = calendar_ticks(grid, 0, 119)
    assert [text for _, text in ticks] == ["27 Mar", "28 Mar", "29 Mar", "30 Mar", "31 Mar"]
    assert span == "2027-03-26 to 2027-03-31"
    stamps = grid.stamps(0, 120)
    for place, text in ticks:
        local = datetime.fromtimestamp(stamps[round(place)] / 1e6, zone)
        assert (local.hour, local.minute) == (0, 0) and f"{local.day} Mar" == text
        assert place == pytest.approx(round(place))
    assert np.diff([place for place, _ in ticks]).round().tolist() == [24, 23, 24, 24]  # 28 March has 23 hours


def test_months_and_years_are_those_of_the_calendar():
    months, _ = calendar_ticks(Grid(24, datetime(2026, 11, 15), (1, "month")), 0, 23)
    assert [text for _, text in months] == ["Jan 2027", "Jul", "Jan 2028", "Jul"]
    years, _ = calendar_ticks(Grid(309, datetime(1700, 1, 1), (1, "year")), 0, 308)
    assert [(round(place), text) for place, text in years][:2] == [(0, "1700"), (100, "1800")]


def test_ticks_of_business_days_stand_where_the_days_are():
    grid = Grid(30, datetime(2027, 1, 4), (1, "business day"))
    ticks, _ = calendar_ticks(grid, 0, 29)
    assert {text: round(place) for place, text in ticks}["11 Jan"] == 5  # Monday to Monday is five business days


def test_seconds_and_a_single_step():
    ticks, span = calendar_ticks(Grid(60, datetime(2027, 1, 4, 6, 0), (100, "ms")), 0, 59)
    assert span == "2027-01-04" and ticks[1][1].startswith(":0")
    assert step_axis(Grid(1, datetime(2027, 1, 4), (1, "d")), 0, 0).high == 1.0
