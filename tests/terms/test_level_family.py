"""Growth, events, the local calendar and flags: against formulas, SciPy and the calendars of pandas."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from scipy.special import expit

import procgen as pg
from procgen.chance.laws import LAWS
from procgen.spec.calendar import Grid
from procgen.spec.model import SpecError
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from procgen.terms.graph import build
from procgen.terms.recover import forecast
from procgen.terms.run import Run

from .helpers import draw, graph_of

STEPS = 200


def dated(series: str, time: str, seed: int = 3):
    """The graph and, by pandas, the local times of a spec with dates."""
    text = f"procgen: 1\nseed: {seed}\npaths: 4\ntime: {{{time}}}\nseries:\n{series}\n"
    graph = build(read_text(text, catalogue(), LAWS))
    grid = graph.spec.time
    stamps = pd.to_datetime(grid.stamps(0, grid.steps), unit="us", utc=True)
    return graph, stamps.tz_convert(grid.zone or "UTC").tz_localize(None)


def values(graph, steps):
    return {name: x[:, 0] for name, x in draw(graph, 0, 1, [steps]).items()}


def test_growth_is_its_formulas():
    """NumPy's exp, scipy.special.expit, and the sum of a fading slope step by step (Gardner & McKenzie 1985)."""
    graph = graph_of(
        "  e: {exponential_trend: {level: 40, rate: -0.02, base: 10}}\n"
        "  l: {logistic_trend: {capacity: 90, rate: 0.15, midpoint: 80, floor: 5}}\n"
        "  d: {damped_trend: {level: 50, slope: 2, damping: 0.95}}",
        steps=STEPS,
    )
    x, t = values(graph, STEPS), np.arange(STEPS)
    np.testing.assert_allclose(x["e"], 10 + 40 * np.exp(-0.02 * t), rtol=1e-14)
    np.testing.assert_allclose(x["l"], 5 + 85 * expit(0.15 * (t - 80)), rtol=1e-13)
    np.testing.assert_allclose(np.diff(x["d"]), 2 * 0.95 ** t[:-1], rtol=0, atol=1e-12)
    assert x["d"][0] == 50


def test_growth_says_its_rate_per_year():
    series = "  x: {exponential_trend: {level: 1, rate: {value: 0.05, per: year}}}"
    graph, _ = dated(series, "start: 2027-01-01, every: 1d, steps: 800")
    x = values(graph, 800)["x"]
    assert x[731] / x[0] == pytest.approx(np.exp(0.05 * 731 / 365.2425), rel=1e-13)


def test_events_are_felt_from_their_step_on():
    graph = graph_of(
        "  s: {event: {at: 20, size: 5}}\n  p: {event: {shape: pulse, at: 20, size: 5, length: 3}}\n"
        "  o: {event: {shape: pulse, at: 20, size: 5}}\n  r: {event: {shape: ramp, at: 20, size: 5, length: 10}}\n"
        "  d: {event: {shape: decay, at: 20, size: 5, length: 4}}\n  c: {event: {at: 2027-01-05T12:00, size: 1}}",
        steps=60,
    )
    x, t = values(graph, 60), np.arange(60)
    assert np.array_equal(x["s"], 5.0 * (t >= 20)) and np.array_equal(x["c"], 1.0 * (t >= 36))
    assert np.array_equal(x["p"], 5.0 * ((t >= 20) & (t < 23))) and np.array_equal(x["o"], 5.0 * (t == 20))
    np.testing.assert_allclose(x["r"], np.interp(t, [20, 30], [0, 5]), atol=1e-14)
    np.testing.assert_allclose(x["d"], np.where(t < 20, 0, 5 * 0.5 ** ((t - 20) / 4.0)), atol=1e-14)


@pytest.mark.parametrize(
    "time",
    [
        "start: 2027-03-26, every: 1h, steps: 100, zone: Europe/Berlin",  # the clocks skip an hour
        "start: 2027-10-29T00:00, every: 15min, steps: 500, zone: Europe/Berlin",  # and take one twice
        "start: 2028-02-20, every: 1d, steps: 400, zone: America/New_York",  # a leap year
        "start: 2027-01-31, every: 1 month, steps: 60",
        "start: 2027-12-20, every: 1 business day, steps: 300, zone: Asia/Tokyo",
        "start: 2027-09-20T06:00, every: 6h, steps: 900, zone: Australia/Lord_Howe",  # clocks move by 30 minutes
        "start: 1960-01-01, every: 12h, steps: 40000, zone: Pacific/Apia",  # a day that was skipped
    ],
)
def test_calendar_is_that_of_pandas(time):
    graph, local = dated(
        "\n".join(
            f"  {by}: {{calendar: {{by: {by}, values: {list(range(n))}}}}}"
            for by, n in (("hour", 24), ("weekday", 7), ("hour_of_week", 168), ("month", 12), ("monthday", 31))
        )
        + f"\n  yearday: {{calendar: {{by: yearday, values: {list(range(366))}}}}}",
        time,
    )
    x = values(graph, len(local))
    assert np.array_equal(x["hour"], local.hour)
    assert np.array_equal(x["weekday"], local.day_of_week)
    assert np.array_equal(x["hour_of_week"], local.day_of_week * 24 + local.hour)
    assert np.array_equal(x["month"], local.month - 1)
    assert np.array_equal(x["monthday"], local.day - 1)
    leap_day_later = (~local.is_leap_year & (local.month > 2)).astype(int)
    assert np.array_equal(x["yearday"], local.day_of_year - 1 + leap_day_later)


def test_local_time_before_the_start_and_far_away():
    """The grid's local clock at negative steps, by pandas; and no failure beyond what a zone can be asked."""
    from datetime import datetime

    grid = Grid(1, datetime(2027, 1, 4), (1, "h"), "Europe/Berlin")
    steps = np.arange(-5000, 0)
    utc = pd.Timestamp("2027-01-03T23:00Z") + pd.to_timedelta(steps, unit="h")
    local = utc.tz_convert("Europe/Berlin").tz_localize(None)
    assert np.array_equal(grid.local(steps), local.astype("datetime64[us]").astype(np.int64))
    far = Grid(1, datetime(2027, 1, 4), (500, "h"), "Europe/Berlin").local(np.array([-200_000, 200_000]))
    assert far[0] < 0 < far[1]


@pytest.mark.parametrize("steps", [np.array(7), np.arange(3), np.arange(5, 40), np.array([10**12])])
def test_a_whole_period_gives_one_step_and_many_their_cosine(steps):
    """One step by itself, fewer than a cycle, more than one, a far one: 2 cos(2π (t − 3) / 12)."""
    graph = graph_of("  x: {seasonal: {period: 12, harmonics: {amplitude: 2, peak: 3}}}")
    found = graph.series["x"].term.at(steps)
    assert found.shape == steps.shape
    np.testing.assert_allclose(found, 2 * np.cos(2 * np.pi * (steps % 12 - 3) / 12), atol=1e-15)


def test_annual_waves_are_as_long_as_each_year():
    """Peaks at the beginning of 20 July whatever the year; the fraction of the year by pandas."""
    series = "  x: {annual: {harmonics: [{amplitude: 8, peak: 07-20}, {amplitude: 2, peak: 01-01}]}}"
    graph, local = dated(series, "start: 2027-01-01, every: 1d, steps: 1800")
    x = values(graph, 1800)["x"]
    length = np.where(local.is_leap_year, 366, 365)
    peak = np.array([pd.Timestamp(y, 7, 20).day_of_year for y in local.year])
    day = local.day_of_year.to_numpy()
    expected = 8 * np.cos(2 * np.pi * (day - peak) / length) + 2 * np.cos(4 * np.pi * (day - 1) / length)
    np.testing.assert_allclose(x, expected, atol=1e-12)
    highest = x - 2 * np.cos(4 * np.pi * (day - 1) / length)
    assert np.allclose(highest[(local.month == 7) & (local.day == 20)], 8)


def test_holidays_and_the_days_beside_them():
    graph, local = dated(
        "  x: {holidays: {days: [2027-12-27, 12-25, 02-29], size: -30, day_before: -8, day_after: 3}}",
        "start: 2027-12-20T00:00, every: 6h, steps: 6000, zone: Europe/Berlin",
    )
    x = pd.Series(values(graph, 6000)["x"], index=local)
    named = {"2027-12-24": -8, "2027-12-25": -30, "2027-12-26": -5, "2027-12-27": -30, "2027-12-28": 3}
    named |= {"2028-02-28": -8, "2028-02-29": -30, "2028-03-01": 3, "2029-02-28": 0, "2029-12-25": -30}
    for day, size in named.items():
        assert np.all(x[day] == size), day
    assert np.count_nonzero(x[:"2028-02-20"]) == 4 * 5


def test_calendar_needs_dates_and_a_value_for_each_place():
    undated = "procgen: 1\nseed: 1\npaths: 1\ntime: {steps: 5}\nseries:\n  x: {calendar: {by: hour, values: [1, 2]}}\n"
    with pytest.raises(SpecError, match=r"the local calendar needs time: \{start: …, every: …\}; give them"):
        read_text(undated, catalogue(), LAWS)
    with pytest.raises(SpecError, match="expected 24 values for by: hour, got 2; give one for each"):
        graph_of("  x: {calendar: {by: hour, values: [1, 2]}}")
    with pytest.raises(SpecError, match="expected a day such as 2027-12-24, or 12-24 for every year, got"):
        graph_of("  x: {holidays: {days: 13-40, size: 1}}")
    with pytest.raises(SpecError, match="expected a day of the year such as 07-15, not 02-29, got"):
        graph_of("  x: {annual: {harmonics: {amplitude: 1, peak: 02-29}}}")


def test_a_longer_spec_has_the_same_calendar():
    spec = graph_of("  x: {calendar: {by: weekday, values: [1, 2, 3, 4, 5, 6, 7]}}").spec
    longer = spec.changed(steps=500)
    assert longer.series == spec.series and longer.changed(steps=spec.time.steps).digest() == spec.digest()


def test_flag_by_dates():
    graph = graph_of("  x: {flag: {spans: [{from: 3, until: 5}, {from: 2027-01-04T20:00}]}}", steps=30)
    t = np.arange(30)
    assert np.array_equal(values(graph, 30)["x"], 1.0 * (((t >= 3) & (t < 5)) | (t >= 20)))


def test_flag_follows_its_chain():
    """Each step by the definition from the same uniforms, in a loop of Python."""
    graph = graph_of("  x: {flag: {share: 0.3, stay: 6}}", steps=STEPS)
    x = draw(graph, 0, 8, [STEPS])["x"]
    u = graph.sources[0].stream.uniforms(0, 8, 0, STEPS)
    leave, enter = 1 / 6, 0.3 / 6 / 0.7
    for path in range(8):
        on = u[0, path] < 0.3
        for t in range(STEPS):
            if t:
                on = u[t, path] < (1 - leave if on else enter)
            assert x[t, path] == on


def test_flag_before_step_0_does_not_move_what_follows():
    plain = draw(graph_of("  x: {flag: {share: 0.3, stay: 6}}"), 0, 500, [40])["x"]
    graph = graph_of("  x: {flag: {share: 0.3, stay: 6}}\n  y: {lag: {of: [{use: x}], by: 9}}")
    both = draw(graph, 0, 500, [40])
    assert np.array_equal(both["x"], plain) and np.array_equal(both["y"][9:], plain[:-9])
    assert set(np.unique(both["y"])) == {0.0, 1.0}


def test_flag_forecasts_the_powers_of_its_matrix():
    graph = graph_of("  x: {flag: {share: 0.3, stay: 6}}")
    run = Run(graph, 0, 20)
    last = run.tile(30)["x"][-1]
    answer = forecast(run, "x", 4)
    enter, stay = 0.3 / 6 / 0.7, 1 - 1 / 6
    matrix = np.array([[1 - enter, enter], [1 - stay, stay]])
    for h in range(4):
        chance = np.linalg.matrix_power(matrix, h + 1)[last.astype(int), 1]
        np.testing.assert_allclose(answer.mean[h], chance, rtol=1e-12)
        np.testing.assert_allclose(answer.variance[h], chance * (1 - chance), rtol=1e-12)


def test_flag_agrees_with_its_theory_and_another_does_not():
    """False alarm 1e-8 at a fixed seed; a stay of 3 in place of 6 must be found."""

    def spec(stay):
        return graph_of(f"  x: {{flag: {{share: 0.3, stay: {stay}}}}}", steps=40).spec.changed(paths=4000)

    ensemble = pg.render(spec(6))
    assert pg.validate(ensemble, false_alarm=1e-8).agrees is True
    wrong = pg.render(spec(3))
    assert pg.validate(wrong, spec=spec(6), false_alarm=1e-8).agrees is False


@pytest.mark.parametrize(
    ("term", "sentence"),
    [
        (
            "{flag: {share: 0.9, stay: 3}}",
            "expected a stay of at least 9 steps for a share of 0.9, got 3: it would be off for less than one; "
            "raise stay, or lower share",
        ),
        (
            "{intermittent: {share: 0.2, stay: 0.5, size: 3, sd: 1}}",
            "expected a stay of at least 1 step for a share of 0.2, got 0.5: none lasts less than a step; raise stay",
        ),
        ("{flag: {stay: 3}}", "expected `share` or `spans`, exactly one of them"),
        ("{flag: {spans: [{from: 5, until: 5}]}}", "expected spans that end after they begin"),
        ("{event: {shape: ramp, at: 3, size: 1}}", "expected a length beside shape: ramp; give length"),
        ("{event: {at: 3, size: 1, length: 4}}", "a step lasts for ever; remove length"),
    ],
)
def test_what_cannot_be_is_refused_with_the_mend(term, sentence):
    with pytest.raises(SpecError) as caught:
        graph_of(f"  x: {term}")
    assert sentence in str(caught.value)


def test_a_trend_has_its_level_at_step_0_whatever_was_bent_before():
    body = "  x: {trend: {level: 5, slope: 1, bends: [{at: -10, slope: 3}, {at: 4, slope: 0}]}}"
    x = draw(graph_of(body), 0, 1, [8])["x"][:, 0]
    assert x.tolist() == [5, 8, 11, 14, 17, 17, 17, 17]
    trend = graph_of(body).series["x"].term
    assert trend.equation() == "x[t] = 5 + 1 t + 2 (max(0, t + 10) − 10) − 3 max(0, t − 4)".replace("+ 1 t", "+ t")


def test_a_number_near_1_does_not_read_1():
    term = graph_of("  x: {ar: {phi: 0.9999999999, sd: 1}}").series["x"].term
    assert "0.9999999999 x[t−1]" in term.equation()
