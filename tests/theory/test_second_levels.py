"""Known series: means from formulas in many digits or day by day, also summed, differenced, delayed and multiplied.

Time starts on Monday 2027-01-04 at 0:00, a step is an hour.
"""

from __future__ import annotations

from datetime import datetime, timedelta
from fractions import Fraction
from functools import cache

import mpmath as mp
import numpy as np
import pytest

from procgen.theory import theory

from ..terms.helpers import graph_of

STEPS = [*range(40), 100, 999]
START = datetime(2027, 1, 4)
HOURS = [Fraction(7 * h % 24) for h in range(24)]
DAYS = [0, 0, 0, 0, -5, -20, -25]


def when(t):
    return START + timedelta(hours=t)


def bent(t):
    """310 at step 0 and then slope by slope: 0.5 before step 5, -1 up to step 20, 0.25 from there on; and 0.01 t^2."""
    return line(t) + Fraction(t * t, 100)


@cache
def line(t):
    if t <= 0:
        return 310 + Fraction(t, 2)
    k = t - 1
    return line(k) + (Fraction(1, 2) if k < 5 else Fraction(-1) if k < 20 else Fraction(1, 4))


@cache
def fading(t):
    return mp.mpf(50 + 2 * t) if t <= 0 else fading(t - 1) + 2 * mp.mpf(0.95) ** (t - 1)


def annual(t):
    now = when(t)
    length = (datetime(now.year + 1, 1, 1) - datetime(now.year, 1, 1)) / timedelta(hours=1)
    since = (now - datetime(now.year, 7, 20)) / timedelta(hours=1)
    return 8 * mp.cos(2 * mp.pi * mp.mpf(since) / mp.mpf(length))


def holiday(t):
    day = when(t).date()
    is_one = lambda d: (d.year, d.month, d.day) == (2027, 1, 5) or (d.month, d.day) == (12, 25)  # noqa: E731
    if is_one(day):
        return -30
    return -8 if is_one(day + timedelta(days=1)) else 0


KNOWN = {
    "constant": ("constant: 12.5", lambda t: 12.5),
    "trend": (
        "trend: {level: 310, slope: 0.5, quadratic: 0.01, bends: [{at: 5, slope: -1}, {at: 20, slope: 0.25}]}", bent),
    "exponential_trend": (
        "exponential_trend: {level: 40, rate: -0.02, base: 10}", lambda t: 10 + 40 * mp.exp(mp.mpf(-0.02) * t)),
    "logistic_trend": (
        "logistic_trend: {capacity: 90, rate: 0.15, midpoint: 25, floor: 5}",
        lambda t: 5 + 85 / (1 + mp.exp(-mp.mpf(0.15) * (t - 25)))),
    "damped_trend": ("damped_trend: {level: 50, slope: 2, damping: 0.95}", fading),
    "seasonal": (
        "seasonal: {period: 24, harmonics: [{amplitude: 42, peak: 18}, {amplitude: 9}, {amplitude: 2, order: 5}]}",
        lambda t: 42 * mp.cos(mp.pi * (t - 18) / 12) + 9 * mp.cos(mp.pi * 2 * t / 12) + 2 * mp.cos(mp.pi * 5 * t / 12)),
    "seasonal, of no whole period": (
        "seasonal: {period: 17.5, harmonics: [{amplitude: 3, peak: 2}]}",
        lambda t: 3 * mp.cos(2 * mp.pi * (t - 2) / mp.mpf(17.5))),
    "seasonal, profile": (
        "seasonal: {period: 6, profile: [1, 4, -2], first: 1}", lambda t: [1, 4, -2][(t - 1) // 2 % 3] - 1),
    "event": ("event: {shape: ramp, at: 20, size: -15, length: 10}", lambda t: -15 * min(max((t - 20) / 10, 0), 1)),
    "event, decay": (
        "event: {shape: decay, at: 20, size: 5, length: 4}",
        lambda t: 0 if t < 20 else 5 * mp.mpf(2) ** (-mp.mpf(t - 20) / 4)),
    "event, pulse": ("event: {shape: pulse, at: 20, size: 5, length: 3}", lambda t: 5 * (20 <= t < 23)),
    "flag": ("flag: {spans: [{from: 5, until: 9}, {from: 30}]}", lambda t: 1 * (5 <= t < 9 or t >= 30)),
    "calendar": (f"calendar: {{by: hour, values: {[int(h) for h in HOURS]}}}", lambda t: HOURS[t % 24]),
    "calendar, weekday": (f"calendar: {{by: weekday, values: {DAYS}}}", lambda t: DAYS[when(t).weekday()]),
    "annual": ("annual: {harmonics: [{amplitude: 8, peak: 07-20}]}", annual),
    "holidays": ("holidays: {days: [2027-01-05, 12-25], size: -30, day_before: -8}", holiday),
}  # fmt: skip

DERIVED = {name.partition(",")[0]: "test_a_known_series_and_what_is_made_of_it" for name in KNOWN}


def number(value):
    return mp.mpf(value.numerator) / value.denominator if isinstance(value, Fraction) else mp.mpf(value)


@pytest.mark.parametrize("name", KNOWN)
def test_a_known_series_and_what_is_made_of_it(name):
    """Its mean, and of its lag, difference, rolling mean, running sum, hold, sigmoid, exponential and square."""
    term, f = KNOWN[name]
    body = f"of: [{{{term}}}]"
    graph = graph_of(
        f"  x: {{{term}}}\n  lag: {{lag: {{{body}, by: 7}}}}\n"
        f"  difference: {{difference: {{{body}, by: 3, order: 2}}}}\n"
        f"  mean: {{rolling_mean: {{{body}, over: 5}}}}\n  sum: {{integrate: {{{body}, start: 2}}}}\n"
        f"  hold: {{hold: {{{body}, every: 4}}}}\n  clip: {{clip: {{{body}, low: -1, high: 20}}}}\n"
        f"  curve: {{sigmoid: {{{body}}}}}\n  square: {{power: {{{body}, exponent: 2}}}}\n"
        f"  e: {{exp: [{{{term}, times: 0.02}}]}}",
        steps=1000,
    )
    th = theory(graph.spec, graph)
    with mp.workdps(40):
        x = {t: number(f(t)) for t in range(-20, STEPS[-1] + 1)}
        largest = float(max(abs(value) for value in x.values()))
        sums = {0: mp.mpf(2)}
        for t in range(1, STEPS[-1] + 1):
            sums[t] = sums[t - 1] + x[t]
        expected = {
            "x": lambda t: x[t],
            "lag": lambda t: x[t - 7],
            "difference": lambda t: x[t] - 2 * x[t - 3] + x[t - 6],
            "mean": lambda t: mp.fsum(x[t - k] for k in range(5)) / 5,
            "sum": lambda t: sums[t],
            "hold": lambda t: x[t - t % 4],
            "clip": lambda t: min(max(x[t], -1), 20),
            "curve": lambda t: 1 / (1 + mp.exp(-x[t])),
            "square": lambda t: x[t] ** 2,
            "e": lambda t: mp.exp(mp.mpf(0.02) * x[t]),
        }
        for series, g in expected.items():
            exact = np.array([float(g(t)) for t in STEPS])
            size = largest if series in ("difference", "lag", "mean") else abs(exact)
            found = th[series].mean(np.array(STEPS))
            assert found is not None, (series, th[series].reason("mean"))
            assert np.all(np.abs(found - exact) <= 1e-9 * size + 1e-13), series
            assert not th[series].variance(np.array(STEPS)).any()


def test_known_factors_of_a_noise_and_their_weights_in_a_sum():
    """Cov(s(t) e(t), s(u) e(u)) = s(t) s(u) Cov(e(t), e(u)): a seasonal amplitude and a fade, all pairs of 30 steps."""
    graph = graph_of(
        "  x: {product: [{seasonal: {period: 24, harmonics: [{amplitude: 2, peak: 5}]}}, {ar: {phi: 0.7, sd: 1}}]}\n"
        "  y: {schedule: {of: [{ar: {phi: 0.7, sd: 1}}], until: 10, fade: 8, "
        "then: [{ar: {phi: -0.4, sd: 2}, as: other}, {constant: 3}]}}"
    )
    th, t = theory(graph.spec, graph), np.arange(30)
    gaps = abs(t[:, None] - t)
    s = 2 * np.cos(2 * np.pi * (t - 5) / 24)
    np.testing.assert_allclose(th["x"].covariance(t[:, None], t), np.outer(s, s) * 0.7**gaps / 0.51, atol=1e-13)
    w = np.clip((t - 10) / 8, 0, 1)
    exact = np.outer(1 - w, 1 - w) * 0.7**gaps / 0.51 + np.outer(w, w) * 4 * (-0.4) ** gaps / 0.84
    np.testing.assert_allclose(th["y"].covariance(t[:, None], t), exact, atol=1e-13)
    np.testing.assert_allclose(th["y"].mean(t), 3 * w, atol=1e-15)
