"""Verdicts: each from the smallest series that shows it, with the term named in its reasons."""

from __future__ import annotations

import numpy as np
import pytest

from procgen.chance.laws import LAWS
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from procgen.theory import SeriesTheory, theory
from procgen.theory.verdict import CYCLES, GROWS, INFINITE, MEAN, SETTLES, STRICT, VARIES

from .references import LAPLACE, NORMAL, UNIFORM, student


def seasonal(axis, name="x.seasonal", period=12):
    axis.at_work(name, float(period))
    f = axis.known(lambda steps: np.cos(2 * np.pi * (steps % period) / period))
    axis.at_work("x.sum")
    return f


def noise(axis, key="x.noise", law=NORMAL):
    return axis.source(key, law, 1.0)


def trend(axis, slope=0.5):
    axis.at_work("x.trend")
    return axis.known(lambda steps: 3.0 + slope * steps)


def walk(axis):
    axis.at_work("x.random_walk")
    return axis.walk(noise(axis), 0.0, 0.0)


CASES = {
    "noise": (noise, STRICT, ""),
    "heavy noise": (lambda a: noise(a, law=student(3)), STRICT, ""),
    "noise and a constant": (lambda a: noise(a) + a.known(lambda t: np.full(t.shape, 2.0)), STRICT, ""),
    "trend": (lambda a: noise(a) + trend(a), MEAN, "trend slope 0.5 a step in x.trend"),
    "a flat trend": (lambda a: noise(a) + trend(a, 0.0), STRICT, ""),
    "season": (lambda a: noise(a) + seasonal(a), MEAN, "period of 12 steps in x.seasonal"),
    "walk": (walk, GROWS, "unit root in x.random_walk"),
    "differenced walk": (lambda a: walk(a).difference(), STRICT, ""),
    "walk minus its lag": (lambda a: walk(a).difference(5), STRICT, ""),
    "seasonal difference": (lambda a: (noise(a) + seasonal(a)).difference(12), STRICT, ""),
    "differenced trend": (lambda a: (noise(a) + trend(a)).difference(), STRICT, ""),
    "trend times noise": (lambda a: a.product((trend(a), noise(a))), VARIES, "x.trend"),
    "season times noise": (lambda a: a.product((seasonal(a), noise(a))), CYCLES, "period of 12"),
    "constant times noise": (lambda a: a.product((trend(a, 0.0), noise(a))), STRICT, ""),
    "exp of a walk": (lambda a: walk(a).exp(), GROWS, "unit root in x.random_walk"),
    "exp of noise": (lambda a: noise(a).exp(), STRICT, ""),
    "exp of a season and noise": (lambda a: (seasonal(a) + noise(a)).exp(), CYCLES, "period of 12"),
    "sum of exp": (lambda a: noise(a).exp().integrate(), GROWS, "running sum"),
    "summed difference": (lambda a: noise(a).difference().integrate(), SETTLES, "value of step 0"),
    "from a past": (lambda a: a.filtered(noise(a), (0.5,), (), (1.0,)), SETTLES, "given past"),
    "unit root from a past": (lambda a: a.filtered(noise(a), (1.0,), (), (1.0,)), GROWS, "unit root"),
    "explosive from a past": (lambda a: a.filtered(noise(a), (1.1,), (), (1.0,)), GROWS, "explosive root"),
    "moving average from a past": (lambda a: a.filtered(noise(a), (), (0.5,), (), (1.0,)), SETTLES, "given past"),
    "exp of heavy noise": (lambda a: noise(a, law=student(3)).exp(), INFINITE, "no finite mean"),
    "exp of a light noise": (lambda a: noise(a, law=LAPLACE).exp(), STRICT, ""),
    "exp of a garch": (lambda a: a.garch("g", NORMAL, 1.0, (0.1,), (0.8,)).exp(), INFINITE, "no finite mean"),
    "exp of a bounded garch": (lambda a: a.garch("g", UNIFORM, 1.0, (0.1,), (0.6,)).exp(), STRICT, ""),
    "exp of a product": (lambda a: a.product([noise(a)] * 2).exp(), STRICT, "moments unknown"),
    "square of a walk": (lambda a: a.product([walk(a)] * 2), GROWS, "unit root in x.random_walk"),
    "integrated garch": (lambda a: a.garch("g", NORMAL, 1.0, (0.3,), (0.7,)), INFINITE, STRICT),
    "explosive garch": (lambda a: a.garch("g", NORMAL, 1.0, (3.9,), ()), INFINITE, "not stationary"),
    "high order, open": (lambda a: a.garch("g", NORMAL, 1.0, (0.3, 0.2), (0.6,)), INFINITE, "Lyapunov"),
}


@pytest.mark.parametrize("name", CASES)
def test_verdict(axis, name):
    build, verdict, reason = CASES[name]
    x = SeriesTheory("x", build(axis))
    assert x.stationarity.verdict == verdict
    assert any(reason in text for text in x.stationarity.reasons)
    said, reasons = x.stationarity
    assert said == verdict and reasons


def test_reasons_name_every_term(axis):
    x = SeriesTheory("x", walk(axis) + trend(axis) + seasonal(axis))
    text = "; ".join(x.stationarity.reasons)
    assert all(term in text for term in ("x.random_walk", "x.trend", "x.seasonal"))
    assert not x.stationarity.stationary and not x.stationarity.covariance_stationary


def test_a_moving_mean_keeps_the_covariance(axis):
    x = SeriesTheory("x", noise(axis) + trend(axis))
    assert not x.stationarity.stationary and x.stationarity.covariance_stationary


def test_uncorrelated_is_not_independent(axis):
    """A garch: zero autocorrelation, correlated squares, strictly stationary, and the reason says so."""
    x = SeriesTheory("x", axis.garch("x.garch", NORMAL, 0.1, (0.1,), (0.8,)))
    assert x.stationarity.verdict == STRICT
    assert any("not independent" in text for text in x.stationarity.reasons)
    assert x.autocorrelation(1) == 0.0 and x.autocovariance_of_squares(1) > 0.0


def test_a_line_that_bends_before_step_0_is_not_a_line(axis):
    bent = axis.known(lambda steps: np.maximum(steps, -3.0))
    np.testing.assert_allclose(SeriesTheory("x", bent.lag(5)).mean([0, 1, 4]), [-3.0, -3.0, -1.0])


def test_a_trend_is_named_beside_a_season(axis):
    x = SeriesTheory("x", trend(axis) + seasonal(axis) + noise(axis))
    assert "trend slope 0.5 a step in x.trend" in x.stationarity.reasons
    assert x.expression.mean_path.level == 3.0 and x.expression.mean_path.slope == 0.5


def test_known_paths_are_summed_exactly(axis):
    """Running sums of a line and of a pattern against plain addition, and differenced back to themselves."""
    for f in (trend(axis), seasonal(axis), seasonal(axis) * 2.0 + trend(axis, -0.1)):
        total = f.integrate(7.0)
        values = SeriesTheory("f", f).mean(np.arange(40))
        np.testing.assert_allclose(
            SeriesTheory("s", total).mean(np.arange(40)), 7.0 + np.cumsum(values) - values[0], atol=1e-12
        )
        np.testing.assert_allclose(SeriesTheory("d", total.difference()).mean(np.arange(40)), values, atol=1e-12)
    far = SeriesTheory("s", seasonal(axis).integrate(1.0)).mean(10**12)
    assert abs(far - 1.0) < 12


def test_a_variance_without_a_number_is_still_a_verdict():
    term = (
        "{egarch: {omega: 0.1, alpha: 0.045, gamma: -0.1, beta: 0.15, law: {skewed_t: {skew: -0.086, df: 3.782}}, "
        "before: {variance: 1, shocks: 0.5}}}"
    )
    text = f"procgen: 1\nseed: 5\npaths: 50\ntime: {{steps: 60}}\nseries:\n  x: {term}\n"
    known = theory(read_text(text, catalogue(), LAWS))["x"]
    assert known.stationarity.verdict == SETTLES
    assert known.variance([5]) is None and known.reason("variance") == "infinite variance of x.egarch"


@pytest.mark.parametrize(
    ("body", "verdict", "reasons"),
    [
        ("{ar: {phi: 0.5, sd: 1, before: {x: [3]}}}", SETTLES, ["x.ar leaves from a given past and forgets it"]),
        ("{exp: [{ar: {phi: 0.5, sd: 1, before: {x: [3]}}}]}", SETTLES, [
            "a random part is multiplied by what settles (x.ar leaves from a given past and forgets it)",
            "x.ar leaves from a given past and forgets it"]),
        ("{garch: {omega: 1, alpha: 0.1, before: {variance: 1, shocks: 0.5}}}", SETTLES, [
            "x.garch leaves from a given variance and forgets it"]),
        ("{hold: {of: [{ar: {phi: 0.5, sd: 1, before: {x: [3]}}}], every: 5}}", SETTLES, [
            "x.ar leaves from a given past and forgets it", "known path of x.hold", "held for 5 steps in x.hold"]),
        ("{schedule: {of: [{white_noise: {sd: 1}}], until: 9, then: [{constant: 2}]}}", VARIES, [
            "a random part is multiplied by what moves (known path of x.schedule)", "known path of x.schedule"]),
    ],
)  # fmt: skip
def test_each_reason_is_said_once(body, verdict, reasons):
    text = f"procgen: 1\nseed: 5\npaths: 50\ntime: {{steps: 60}}\nseries:\n  x: {body}\n"
    said = theory(read_text(text, catalogue(), LAWS))["x"].stationarity
    assert said.verdict == verdict and list(said.reasons) == reasons


def test_a_held_series_from_a_given_past_is_read_from_step_0():
    """Of step 0, 5, 10 of the recursion from 3: means 3 phi^(t + 1), variances (1 - phi^(2t + 2))/(1 - phi^2)."""
    text = "procgen: 1\nseed: 5\npaths: 50\ntime: {steps: 60}\nseries:\n"
    text += "  x: {hold: {of: [{ar: {phi: 0.5, sd: 1, before: {x: [3]}}}], every: 5}}\n"
    held = theory(read_text(text, catalogue(), LAWS))["x"]
    t = np.array([0, 4, 5, 12])
    at = t - t % 5
    np.testing.assert_allclose(held.mean(t), 3 * 0.5 ** (at + 1), rtol=1e-14)
    np.testing.assert_allclose(held.variance(t), (1 - 0.25 ** (at + 1)) / 0.75, rtol=1e-14)


HEAVY = {"white_noise": {"sd": 1, "law": {"student_t": {"df": 3}}}}
NO_VARIANCE = {"white_noise": {"spread": 1, "law": {"stable": {"alpha": 1.5}}}}


@pytest.mark.parametrize(
    ("body", "order", "verdict"),
    [
        ({"clip": {"low": -1, "high": 1, "of": [NO_VARIANCE]}}, np.inf, STRICT),
        ({"clip": {"low": -1, "high": 1, "of": [{"exp": [HEAVY]}]}}, np.inf, STRICT),
        ({"sigmoid": {"of": [NO_VARIANCE]}}, np.inf, STRICT),
        ({"clip": {"high": 1, "of": [HEAVY]}}, 3.0, STRICT),
        ({"floor": [HEAVY]}, 3.0, STRICT),
        ({"abs": [NO_VARIANCE]}, 1.5, INFINITE),
    ],
)
def test_what_has_bounds_has_all_moments_and_a_bend_those_of_its_body(body, order, verdict):
    """E |X|^k ≤ max(|low|, |high|)^k; E |f(X)|^k ≤ E (a + |X|)^k: common practice, no source."""
    x = theory({"procgen": 1, "seed": 1, "paths": 10, "time": {"steps": 20}, "series": {"x": [body]}})["x"]
    assert x.highest_moment == order
    assert x.stationarity.verdict == verdict
