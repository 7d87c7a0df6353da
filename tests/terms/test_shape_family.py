"""Bends, windows and schedules: values by their definitions, covariances by impulses, forecasts by hand."""

from __future__ import annotations

import re

import numpy as np
import pandas as pd
import pytest
from scipy.special import expit, logit

from procgen.spec.model import SpecError
from procgen.terms.recover import forecast
from procgen.terms.run import Run
from procgen.theory import theory

from .helpers import draw, graph_of
from .test_exact_covariance import compare

STEPS, PATHS = 120, 16
BODY = "  a: [{ar: {phi: 0.7, sd: 1}}, {constant: 0.4}]\n  b: {white_noise: {sd: 1.5}}\n"


def test_bends_are_their_functions():
    graph = graph_of(
        BODY + "  above: {hinge: {of: [{use: a}], above: 0.5}}\n  below: {hinge: {of: [{use: a}], below: 0.5}}\n"
        "  clip: {clip: {of: [{use: a}], low: -0.5, high: 1}}\n  cap: {clip: {of: [{use: a}], high: 1}}\n"
        "  abs: {abs: [{use: a}]}\n  cube: {power: {of: [{use: a}], exponent: 3}}\n"
        "  s: {sigmoid: {of: [{use: a}], low: 2, high: 10}}\n  l: {logit: {of: [{use: s}], low: 2, high: 10}}\n"
        "  max: {max: {of: [{use: a}], and: [{use: b}]}}\n  min: {min: {of: [{use: a}], and: [{use: b}]}}",
        steps=STEPS,
    )
    x = draw(graph, 0, PATHS, [STEPS])
    a, b = x["a"], x["b"]
    assert np.array_equal(x["above"], np.maximum(a - 0.5, 0)) and np.array_equal(x["below"], np.maximum(0.5 - a, 0))
    assert np.array_equal(x["clip"], np.clip(a, -0.5, 1)) and np.array_equal(x["cap"], np.minimum(a, 1))
    assert np.array_equal(x["abs"], abs(a)) and np.array_equal(x["max"], np.maximum(a, b))
    assert np.array_equal(x["min"], np.minimum(a, b))
    np.testing.assert_allclose(x["cube"], a**3, rtol=1e-14)
    np.testing.assert_allclose(x["s"], 2 + 8 * expit(a), rtol=1e-14)
    np.testing.assert_allclose(x["l"], logit((x["s"] - 2) / 8), rtol=1e-12, atol=1e-14)
    np.testing.assert_allclose(x["l"], a, rtol=1e-11, atol=1e-13)


def test_windows_are_those_of_pandas():
    graph = graph_of(
        BODY + "  m: {rolling_mean: {of: [{use: a}], over: 13}}\n  w: {rolling_mean: {of: [{use: a}], over: 8}}\n"
        "  one: {rolling_mean: {of: [{use: a}], over: 1}}\n  h: {hold: {of: [{use: a}], every: 1d, first: 6}}",
        steps=STEPS,
    )
    x = draw(graph, 0, PATHS, [STEPS])
    for name, over in (("m", 13), ("w", 8)):
        rolled = pd.DataFrame(x["a"]).rolling(over).mean().to_numpy()
        np.testing.assert_allclose(x[name][over - 1 :], rolled[over - 1 :], atol=1e-13)
    assert np.array_equal(x["one"], x["a"])
    read = 6 + 24 * ((np.arange(STEPS) - 6) // 24)
    assert np.array_equal(x["h"][6:], x["a"][read[6:]]) and np.all(x["h"][:6] == x["h"][0])


def test_windows_read_the_past_of_their_body():
    """Before step 0 a lag shows the body itself: its window is the mean of what the lag shows."""
    graph = graph_of(
        BODY + "  m: {rolling_mean: {of: [{use: a}], over: 5}}\n  h: {hold: {of: [{use: a}], every: 10, first: 3}}\n"
        "  late: {lag: {of: [{use: a}], by: 30}}\n  late_m: {lag: {of: [{use: m}], by: 20}}\n"
        "  late_h: {lag: {of: [{use: h}], by: 20}}",
        steps=STEPS,
    )
    x = draw(graph, 0, PATHS, [STEPS])
    past = x["late"][:30]  # a at steps -30 .. -1
    rolled = pd.DataFrame(past).rolling(5).mean().to_numpy()
    np.testing.assert_allclose(x["late_m"][:20], rolled[10:30], atol=1e-13)
    steps = np.arange(-20, 0)
    read = 3 + 10 * ((steps - 3) // 10)
    assert np.array_equal(x["late_h"][:20], past[read + 30]) and np.array_equal(x["h"][0], past[-7])


def test_schedule_fades_from_one_body_to_the_other():
    graph = graph_of(
        BODY + "  hard: {schedule: {of: [{use: a}], until: 2027-01-06, then: [{use: b}]}}\n"
        "  soft: {schedule: {of: [{use: a}], until: 40, then: [{use: b}], fade: 20}}",
        steps=STEPS,
    )
    x, t = draw(graph, 0, PATHS, [STEPS]), np.arange(STEPS)[:, None]
    assert np.array_equal(x["hard"], np.where(t < 48, x["a"], x["b"]))
    w = np.interp(t, [40, 60], [0, 1])
    np.testing.assert_allclose(x["soft"], (1 - w) * x["a"] + w * x["b"], atol=1e-14)


LINEAR = {
    "rolling mean": "  x: {rolling_mean: {of: [{ar: {phi: [0.5, 0.2], sd: 2}}], over: 5}}",
    "rolling mean of a walk": "  x: {rolling_mean: {of: [{random_walk: {sd: 1, start: 3}}], over: 6}}",
    "rolling mean, lagged": "  x: {lag: {of: [{rolling_mean: {of: [{ma: {theta: 0.3, sd: 1}}], over: 3}}], by: 4}}",
    "hold of noise": "  x: {hold: {of: [{white_noise: {sd: 3}}], every: 5}}",
    "hold of ar": "  x: {hold: {of: [{ar: {phi: 0.8, sd: 1}}], every: 4, first: 3}}",
    "hold of a walk": "  x: {hold: {of: [{random_walk: {sd: 1}}], every: 4, first: 2}}",
    "hold, lagged, beside its body": "  x: [{lag: {of: [{hold: {of: [{use: w}], every: 4}}], by: 6}}, {use: w}]",
    "hold of a hold": "  x: {hold: {of: [{hold: {of: [{ar: {phi: 0.8, sd: 1}}], every: 2}}], every: 5}}",
    "schedule": "  x: {schedule: {of: [{ar: {phi: 0.8, sd: 1}}], until: 7, then: [{random_walk: {sd: 1}}], fade: 6}}",
    "schedule of one body": "  x: {schedule: {of: [{use: w}], until: 9, then: [{use: w, times: 3}]}}\n  y: {use: w}",
}


@pytest.mark.parametrize("name", LINEAR)
def test_covariance_of_what_is_drawn(name, monkeypatch):
    rest = "shared:\n  w: {ar: {phi: [0.5, 0.3], sd: 1}}" if "use: w" in LINEAR[name] else ""
    compare(graph_of(LINEAR[name], steps=24, rest=rest), monkeypatch)


def test_schedule_forecasts_both_bodies():
    graph = graph_of(
        "  x: {schedule: {of: [{white_noise: {sd: 2}, as: e}], until: 32, then: [{white_noise: {sd: 1}}], fade: 4}}"
    )
    run = Run(graph, 0, 4)
    run.tile(30)
    answer = forecast(run, "x", 8)
    w = np.interp(np.arange(30, 38), [32, 36], [0, 1])
    np.testing.assert_allclose(answer.variance[:, 0], (1 - w) ** 2 * 4 + w**2, rtol=1e-13)


def test_verdicts_name_what_moves():
    graph = graph_of(
        "  h: {hold: {of: [{white_noise: {sd: 3}}], every: 5}}\n"
        "  s: {schedule: {of: [{white_noise: {sd: 2}}], until: 20, then: [{white_noise: {sd: 1}, as: e}]}}\n"
        "  c: {clip: {of: [{seasonal: {period: 6, harmonics: {amplitude: 1}}}, {white_noise: {sd: 1}}], low: 0}}\n"
        "  r: {rolling_mean: {of: [{white_noise: {sd: 2}}], over: 4}}"
    )
    th = theory(graph.spec, graph)
    verdicts = {name: th[name].stationarity.verdict for name in th}
    assert verdicts == {
        "h": "cyclostationary",
        "s": "variance not constant",
        "c": "mean not constant",
        "r": "strictly stationary",
    }
    assert "held for 5 steps in h.hold" in th["h"].stationarity.reasons


def test_what_is_held_is_jointly_normal_where_its_body_is():
    """Values read at other steps are some of the body's own; the mean of an exponential is a normal law's."""
    graph = graph_of(
        "  x: [{hold: {of: [{ar: {phi: 0.8, sd: 0.6}}], every: 5}}, {white_noise: {sd: 2}}]\n"
        "  y: [{exp: [{use: x}]}]\n  z: {hold: {of: [{white_noise: {sd: 1, law: laplace}}], every: 5}}"
    )
    th = theory(graph.spec, graph)
    assert th["x"].gaussian and not th["z"].gaussian
    assert th["x"].marginal(7).std() == pytest.approx(np.sqrt(1 + 4))
    np.testing.assert_allclose(th["y"].mean([0, 7]), np.exp(2.5), rtol=1e-12)


@pytest.mark.parametrize(
    ("term", "sentence"),
    [
        ("{clip: {of: [{constant: 1}], low: 3, high: 2}}", "expected low below high, got 3 and 2; exchange them"),
        ("{clip: {of: [{constant: 1}]}}", "expected `low`, `high` or both, got none of them; give one"),
        ("{hinge: {of: [{constant: 1}]}}", "expected `above` or `below`, exactly one of them"),
        ("{hold: {of: [{constant: 1}], every: 90min}}", "expected a length in whole steps, got 1.5 steps"),
        ("{rolling_mean: {of: [{constant: 1}], over: 200000}}", "expected a window of at most 100,000 steps"),
    ],
)
def test_what_cannot_be_is_refused_with_the_mend(term, sentence):
    with pytest.raises(SpecError) as caught:
        graph_of(f"  x: {term}")
    assert sentence in str(caught.value)


def test_a_logit_beyond_its_levels_is_no_number():
    """Known values are looked at when they are drawn, and so are those of shocks that end somewhere."""
    graph = graph_of("  x: {logit: [{white_noise: {sd: 1, law: uniform}}]}\n  y: {logit: [{trend: {slope: 0.1}}]}")
    x = draw(graph, 0, 50, [20])
    for values in x.values():
        assert np.isnan(values).any() and np.isfinite(values).any()


def test_a_season_shorter_than_two_steps_is_refused():
    import procgen as pg

    def spec(period):
        body = [{"seasonal": {"period": period, "harmonics": [{"amplitude": 3}]}}]
        time = {"start": "2027-01-01", "every": "1d", "steps": 6}
        return {"seed": 1, "paths": 1, "time": time, "series": {"x": body}}

    with pytest.raises(pg.SpecError, match=r"expected a period of at least 2 steps, .* got 0.125; take a longer"):
        pg.load(spec("3h"))
    assert pg.render(pg.load(spec("2d")))["x"][0].tolist() == [3, -3, 3, -3, 3, -3]


@pytest.mark.parametrize(
    ("body", "says"),
    [
        ("logit: [{constant: 1}]", "x.logit needs a body between its levels 0 and 1, got 1"),
        ("logit: {of: [{poisson: {mean: 3}}, {constant: 2}], high: 2}", "levels 0 and 2, got what is never below 2"),
        ("logit: [{flag: {share: 0.3}}]", "levels 0 and 1, got what can be 0; move"),
        ("logit: {of: [{poisson: {mean: 3}}], low: -1, high: 9}", "levels −1 and 9, got what can be 9; move"),
        ("logit: [{ar: {phi: 0.5, sd: 1}}]", "got one that nothing holds there; hold it by a sigmoid, or by a clip"),
        ("logit: [{white_noise: {sd: 0.1, law: {empirical: {values: [1, 2], smoothed: true}}}}]", "nothing holds"),
        ("exp: [{constant: 800}]", "x.exp needs a body below 709"),
    ],
)
def test_a_body_that_can_have_no_log_odds_or_exponential_is_refused_before_it_is_drawn(body, says):
    """The log odds of 0 and 1 are infinite (Berkson 1944), and so is exp(800) in double precision (IEEE 754)."""
    with pytest.raises(SpecError, match=re.escape(says)):
        graph_of(f"  x: {{{body}}}")
