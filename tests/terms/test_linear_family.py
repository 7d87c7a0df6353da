"""Integrated, structural and continuous-time terms: covariances as drawn, and published or other people's numbers."""

from __future__ import annotations

import json

import numpy as np
import pytest
from scipy.integrate import simpson
from scipy.linalg import solve_discrete_lyapunov
from statsmodels.tsa.api import SARIMAX, UnobservedComponents
from statsmodels.tsa.arima_process import arma_acovf

from procgen.chance.laws import LAWS
from procgen.chance.streams import Stream
from procgen.checks.kalman import Kalman
from procgen.spec.model import SpecError
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from procgen.terms.base import without_gap
from procgen.terms.graph import build
from procgen.terms.recover import forecast
from procgen.terms.run import Run
from procgen.theory import theory

from .helpers import draw, graph_of, jacobian
from .test_exact_covariance import STEPS, compare

DERIVED = {
    "local_level": "test_state_spaces_of_statsmodels",
    "local_linear_trend": "test_state_spaces_of_statsmodels",
}
AIRLINE = "{arima: {d: 1, theta: -0.4, seasonal: {period: 12, d: 1, theta: -0.6}, sd: 1}}"
SHORT = "{arima: {phi: 0.5, d: 1, theta: 0.3, seasonal: {period: 3, d: 1, theta: 0.2}, sd: 1}}"
DUMMY = "{seasonal_random_walk: {period: 4, sd: 2, form: dummy, start: [1, -2, -3, 4]}}"
LEVEL = "{local_level: {level_sd: 2, noise_sd: 3, start: 4}}"
TREND = "{local_linear_trend: {level_sd: 2, slope_sd: 0.5, noise_sd: 3, start: 4, slope: 0.3}}"
CYCLE = "{stochastic_cycle: {rho: 0.9, period: 7.5, total_sd: 2}}"
CASES = {
    "airline": f"  x: {AIRLINE}",
    "seasonal arma": "  x: {arima: {phi: 0.5, d: 0, seasonal: {period: 4, phi: 0.6, theta: 0.3}, sd: 1, drift: 3}}",
    "twice": "  x: {arima: {phi: 0.5, d: 2, theta: 0.3, sd: 1, drift: 0.1, start: [3, 4]}}",
    "seasons twice": "  x: {arima: {phi: 0.5, d: 1, theta: 0.3, seasonal: {period: 3, d: 2}, sd: 1}}",
    "arima lagged": f"  x: {{lag: {{of: [{SHORT}], by: 9}}}}\n  y: {{lag: {{of: [{{use: x}}], by: 1}}}}",
    "a difference of it": f"  x: {{difference: {{of: [{SHORT}], by: 2}}}}",
    "integrated again": f"  x: {{integrate: [{{lag: {{of: [{SHORT}], by: 4}}}}]}}",
    "laplace": "  x: {arima: {phi: 0.5, d: 1, seasonal: {period: 3, d: 1}, sd: 1, law: laplace}}",
    "arima before": "  x: {arima: {phi: 0.5, d: 1, theta: 0.4, sd: 1, drift: 3, before: {x: [1, 3, 2], shocks: 0.3}}}",
    "seasonal walk": "  x: {seasonal_random_walk: {period: 4, sd: 2, start: [1, 2, 3, 4]}}",
    "dummy": f"  x: {DUMMY}\n  y: {{lag: {{of: [{{use: x}}], by: 7}}}}",
    "dummy of two": "  x: {lag: {of: [{seasonal_random_walk: {period: 2, sd: 1, form: dummy}}], by: 3}}",
    "seasonal walk before": "  x: {seasonal_random_walk: {period: 3, sd: 2, before: {x: [1, 2, 3, 4]}}}",
    "dummy before": "  x: {seasonal_random_walk: {period: 3, sd: 2, form: dummy, before: {x: [1, 2, 3, 4]}}}",
    "level": f"  x: {LEVEL}\n  y: {{use: x.local_level.level}}",
    "level lagged": f"  x: {{lag: {{of: [{{use: y.local_level.level}}], by: 4}}}}\n  y: {LEVEL}",
    "trend": f"  x: {TREND}\n  y: {{use: x.local_linear_trend.level}}\n  z: {{use: x.local_linear_trend.slope}}",
    "trend lagged": f"  x: {TREND}\n  y: {{lag: {{of: [{{use: x}}], by: 5}}}}",
    "smooth trend": "  x: {local_linear_trend: {slope_sd: 0.5}}\n  y: {lag: {of: [{use: x}], by: 5}}",
    "cycle": f"  x: {CYCLE}\n  y: {{use: x.stochastic_cycle.star}}",
    "cycle lagged": f"  x: {{lag: {{of: [{{use: y.stochastic_cycle.star}}], by: 4}}}}\n  y: {CYCLE}",
    "ou": "  x: {ornstein_uhlenbeck: {rate: 0.3, sd: 2, mean: 4}}",
    "ou lagged": "  x: {lag: {of: [{ornstein_uhlenbeck: {rate: 0.3, total_sd: 2}}], by: 3}}",
    "ou before": "  x: {ornstein_uhlenbeck: {rate: 0.3, sd: 2, mean: 4, before: {x: 9}}}",
}
# All that is random comes after step 0, so that the forecast from there is the theory.
KNOWN_AT_0 = ("arima before", "seasonal walk", "dummy", "dummy before", "level", "trend", "smooth trend", "ou before")


def theory_of(term, **spec):
    graph = graph_of(f"  x: {term}", **spec)
    return theory(graph.spec, graph)["x"]


@pytest.mark.parametrize("name", CASES)
def test_covariance_of_what_is_drawn(name, monkeypatch):
    compare(graph_of(CASES[name], steps=STEPS), monkeypatch)


@pytest.mark.parametrize("term", [SHORT, DUMMY, "{ornstein_uhlenbeck: {rate: 0.3, sd: 2}}"])
def test_correlated_shocks_start_jointly(term, monkeypatch):
    rest = "correlation:\n  - {between: [x.e, y.ar], value: -0.6}"
    series = f"  x: {{lag: {{of: [{term[:-1]}, as: e}}], by: 5}}}}\n  y: {{ar: {{phi: [0.2, 0.3], sd: 2}}}}"
    compare(graph_of(series, steps=STEPS, rest=rest), monkeypatch)


@pytest.mark.parametrize("name", CASES)
def test_mean_is_what_no_shock_gives(name, monkeypatch):
    graph = graph_of(CASES[name], steps=60)

    def middle(stream, first_path, paths, first_step, steps, out=None):
        return np.full((steps, paths), 0.5)

    with monkeypatch.context() as patch:
        patch.setattr(Stream, "uniforms", middle)
        values = draw(graph, 0, 1, [60])
    known = theory(graph.spec, graph)
    for series, x in values.items():
        np.testing.assert_allclose(known[series].mean(np.arange(60)), x[:, 0], rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize("name", KNOWN_AT_0)
def test_forecast_from_the_start_is_the_theory(name):
    graph = graph_of(CASES[name], steps=STEPS)
    said, known = forecast(Run(graph, 0, 3), "x", STEPS), theory(graph.spec, graph)["x"]
    np.testing.assert_allclose(said.mean[:, 0], known.mean(np.arange(STEPS)), rtol=1e-11, atol=1e-11)
    np.testing.assert_allclose(said.variance[:, 0], known.variance(np.arange(STEPS)), rtol=1e-11, atol=1e-11)


@pytest.mark.parametrize("term", [LEVEL, TREND, CYCLE])
def test_one_step_forecast_of_several_disturbances(term):
    """x less its forecast is one mix of the shocks of that step, of the variance that was said."""
    graph = graph_of(f"  x: {term}")
    run = Run(graph, 0, 20)
    run.tile(30)
    said, x = forecast(run, "x", 2), run.tile(1)["x"][0]
    shocks = np.array([s.law.shocks(s.stream.uniforms(0, 20, 30, 1))[0] for s in graph.sources])
    weights = np.linalg.lstsq(shocks.T, x - said.mean[0])[0]
    np.testing.assert_allclose(x - said.mean[0], weights @ shocks, rtol=0, atol=1e-10)
    assert weights @ weights == pytest.approx(said.variance[0, 0], rel=1e-10)


# Box & Jenkins: the airline model


def test_airline_weights(monkeypatch):
    """Psi weights for (.4, .6): psi 1 … 11 .6, psi12 1, psi13 .84, psi24 1.24 (Box & Jenkins 1970, ch. 9).

    They are read from the value code: what a shock at step 1 does to the steps after it.
    """
    weights = jacobian(graph_of(f"  x: {AIRLINE}"), 26, monkeypatch)["x"]
    (shock,) = [column for column in weights.T if column[1] == 1.0 and not column[0] and column[2] == 0.6]
    np.testing.assert_allclose(shock[1:14], [1.0, *[0.6] * 11, 1.0], rtol=0, atol=1e-12)
    np.testing.assert_allclose(shock[[14, 25]], [0.84, 1.24], rtol=0, atol=1e-12)


def test_airline_forecast_errors():
    """Mean square error 1, 1.36, 4.96, 5.96, 13.7216 at 1, 2, 12, 13, 24 steps (Box & Jenkins ch. 9)."""
    published, steps = [1.0, 1.36, 4.96, 5.96, 13.7216], np.array([0, 1, 11, 12, 23])
    run = Run(graph_of(f"  x: {AIRLINE}"), 0, 4)
    run.tile(30)
    np.testing.assert_allclose(forecast(run, "x", 24).variance[steps, 0], published, rtol=1e-12)
    past = f"before: {{x: {[1.0] * 13}, shocks: {[0.5] * 13}}}"
    given = theory_of(AIRLINE.replace("sd: 1", f"sd: 1, {past}"))
    np.testing.assert_allclose(given.variance(steps), published, rtol=1e-12)


def test_airline_differences():
    """(1 − B)(1 − B¹²): g0 1.5776, rho 1, 11, 12, 13 (Box & Jenkins 1970, ch. 9), and stationary."""
    for first, second in ((1, 12), (12, 1)):
        w = theory_of(f"{{difference: {{of: [{{difference: {{of: [{AIRLINE}], by: {first}}}}}], by: {second}}}}}")
        assert w.stationarity.verdict == "strictly stationary"
        assert w.variance(0) == pytest.approx(1.5776, rel=1e-12)
        rho = w.autocorrelation(np.arange(25))
        expected = np.zeros(25)
        expected[[0, 1, 11, 12, 13]] = [1.0, -0.3448275862, 0.1521298174, -0.4411764706, 0.1521298174]
        np.testing.assert_allclose(rho, expected, rtol=0, atol=1e-10)


@pytest.mark.parametrize("order", [((1, 1, 1), (1, 1, 1, 4)), ((2, 0, 1), (0, 2, 1, 3)), ((0, 2, 2), (1, 0, 0, 5))])
def test_impulse_responses_of_statsmodels(order):
    """Forecast variances are sums of squared impulse responses of statsmodels' SARIMAX."""
    (p, d, q), (big_p, big_d, big_q, s) = order
    ar, ma, sar, sma = [0.5, -0.2][:p], [0.4, 0.3][:q], [0.6][:big_p], [-0.5][:big_q]
    model = SARIMAX(np.zeros(60), order=order[0], seasonal_order=order[1])
    psi = model.impulse_responses([*ar, *ma, *sar, *sma, 1.0], 29).ravel()
    parts = {"phi": ar, "theta": ma}, {"phi": sar, "theta": sma}
    own, season = (", ".join(f"{k}: {v}" for k, v in part.items() if v) for part in parts)
    term = f"{{arima: {{d: {d}, {own}, seasonal: {{period: {s}, d: {big_d}, {season}}}, sd: 1}}}}"
    run = Run(graph_of(f"  x: {term.replace(', ,', ',').replace(', }', '}')}"), 0, 2)
    run.tile(40)
    np.testing.assert_allclose(forecast(run, "x", 30).variance[:, 0], np.cumsum(psi**2), rtol=1e-10)


def test_a_seasonal_arma_is_the_product_of_its_polynomials():
    """Autocovariances of statsmodels' arma_acovf for the polynomials multiplied by numpy."""
    x = theory_of("{arima: {phi: 0.5, d: 0, theta: 0.2, seasonal: {period: 4, phi: 0.6, theta: 0.3}, sd: 2}}")
    ar = np.convolve([1, -0.5], [1, 0, 0, 0, -0.6])
    ma = np.convolve([1, 0.2], [1, 0, 0, 0, 0.3])
    np.testing.assert_allclose(x.autocovariance(np.arange(12)), arma_acovf(ar, ma, 12, 4.0), rtol=1e-9)


# Harvey: structural components


def state_space(model, params):
    """Transition, design and state noise of a statsmodels model with these parameters."""
    model.update(params)
    noise = model["selection"] @ model["state_cov"] @ model["selection"].T
    return model["transition"], model["design"][0], noise, model["obs_cov"][0, 0]


def covariances(transition, design, noise, irregular, initial, steps=STEPS):
    """All Cov(y[t], y[s]) of a state space from the covariance of its state at step 0."""
    out, p = np.zeros((steps, steps)), initial
    for s in range(steps):
        row = p @ design
        for t in range(s, steps):
            out[t, s] = out[s, t] = design @ row
            row = transition @ row
        out[s, s] += irregular
        p = transition @ p @ transition.T + noise
    return out


@pytest.mark.parametrize(
    ("term", "parts", "params"),
    [
        (LEVEL, {"level": "llevel"}, [9.0, 4.0]),
        (TREND, {"level": "lltrend"}, [9.0, 4.0, 0.25]),
        ("{local_linear_trend: {slope_sd: 0.5, noise_sd: 1}}", {"level": "strend"}, [1.0, 0.25]),
        (DUMMY, {"seasonal": 4, "irregular": False}, [4.0]),
        (CYCLE, {"cycle": True, "damped_cycle": True, "stochastic_cycle": True, "irregular": False}, None),
    ],
)
def test_state_spaces_of_statsmodels(term, parts, params):
    """Covariances from the matrices of statsmodels' UnobservedComponents; its states are known at the first step."""
    params = params or [4 * (1 - 0.81), 2 * np.pi / 7.5, 0.9]
    transition, design, noise, irregular = state_space(UnobservedComponents(np.zeros(50), **parts), params)
    initial = solve_discrete_lyapunov(transition, noise) if "cycle" in parts else np.zeros_like(noise)
    expected = covariances(transition, design, noise, irregular, initial)
    t, s = np.meshgrid(np.arange(STEPS), np.arange(STEPS), indexing="ij")
    np.testing.assert_allclose(theory_of(term).covariance(t, s), expected, rtol=1e-10, atol=1e-10)


def test_cycle():
    """Variance σ²/(1 − ρ²) and autocorrelation ρᵏ cos λk (Harvey 1989, eq. 2.3.38); Gaussian."""
    x, k = theory_of("{stochastic_cycle: {rho: 0.9, period: 7.5, sd: 2}}"), np.arange(20)
    assert x.gaussian and x.variance(0) == pytest.approx(4 / 0.19, rel=1e-12)
    np.testing.assert_allclose(x.autocorrelation(k), 0.9**k * np.cos(2 * np.pi * k / 7.5), rtol=0, atol=1e-12)


def test_nile():
    """First difference rho1 −1/(2 + q) = −.476804002 (Harvey 1989, sec. 4.1) at the variances of Durbin & Koopman
    (2012), sec. 2.10.3, and steady prediction variance 5501.257942 (sec. 2.11)."""
    nile = f"{{local_level: {{level_sd: {1469.1**0.5}, noise_sd: {15099**0.5}, start: 1120}}}}"
    change = theory_of(f"{{difference: {{of: [{nile}]}}}}")
    assert change.stationarity.verdict == "strictly stationary"
    np.testing.assert_allclose(change.autocorrelation([1, 2]), [-0.476804002, 0.0], rtol=0, atol=1e-9)
    system = theory_of(nile).system()
    q = system.loading @ system.noise @ system.loading.T
    filter_ = Kalman(system.transition, q, system.observation[0], system.initial)
    filter_.prepare(200)
    assert filter_.roots[-1] ** 2 == pytest.approx(5501.257942 + 15099, rel=1e-10)


def test_a_disturbance_that_is_switched_off_moves_no_other():
    with_noise = draw(graph_of(f"  x: {LEVEL}\n  y: {{use: x.local_level.level}}"), 0, 8, [40])["y"]
    alone = draw(graph_of(f"  x: {LEVEL.replace('noise_sd: 3', 'noise_sd: 0')}"), 0, 8, [40])["x"]
    assert np.array_equal(with_noise, alone)


# Ornstein and Uhlenbeck


def ou(every, steps, before=""):
    """κ = 2 and σ = 0.3 a year on a grid."""
    start = f"start: 2027-01-01, every: {every}"
    text = f"  x: {{ornstein_uhlenbeck: {{rate: {{value: 2, per: year}}, sd: {{value: 0.3, per: year}}{before}}}}}"
    spec = f"procgen: 1\nseed: 1\npaths: 4\ntime: {{{start}, steps: {steps}}}\nseries:\n{text}\n"
    graph = build(read_text(spec, catalogue(), LAWS))
    return graph, theory(graph.spec, graph)["x"]


def test_ornstein_uhlenbeck_by_the_month():
    """phi, conditional and stationary variance, half-life by the closed forms of Vasicek (1977)."""
    graph, x = ou("1 month", 60)
    assert x.variance(0) == pytest.approx(0.0225, rel=1e-12)
    assert x.autocorrelation([1])[0] == pytest.approx(0.846481724891, rel=1e-11)
    assert graph.series["x"].term.shock_sd() ** 2 == pytest.approx(0.00637804551209, rel=1e-11)
    phi = float(x.autocorrelation([1])[0])
    assert -np.log(2) / np.log(phi) / 12 == pytest.approx(0.346573590, rel=1e-8)


def test_ornstein_uhlenbeck_integrated_over_a_year():
    """Var of the integral over a year: .0127725219364 in the stationary law, .0085670184041 from a known value.

    Closed forms σ²/κ³(κt − 1 + e^(−κt)) and σ²/κ²(t − 2(1 − e^(−κt))/κ + (1 − e^(−2κt))/(2κ)), in decimals; here by
    Simpson's rule over the covariances of 504 steps a year, whose error is of the order of their fourth power.
    """
    n = 504  # divides the seconds of a mean year
    _, x = ou(f"{31_556_952 // n}s", n + 1)
    u = np.arange(n + 1) / n
    gamma = x.autocovariance(np.arange(n + 1))
    assert 2 * simpson((1 - u) * gamma, x=u) == pytest.approx(0.0127725219364, rel=1e-9)
    _, y = ou(f"{31_556_952 // n}s", n, ", before: {x: 0.5}")
    at = np.arange(n)
    inner = [0.0]  # over s < t for every second t; step −1 is the known value
    for t in range(1, n, 2):
        known = np.append(0.0, y.covariance(np.full(t + 1, t), at[: t + 1]))
        inner.append(simpson(known, x=u[: t + 2]))
    assert 2 * simpson(inner, x=u[::2]) == pytest.approx(0.0085670184041, rel=1e-9)


def test_a_finer_grid_sees_the_same_process():
    day, hour = ou("1d", 10)[1], ou("1h", 240)[1]
    np.testing.assert_allclose(day.autocovariance(np.arange(5)), hour.autocovariance(24 * np.arange(5)), rtol=1e-10)


def test_a_slow_pull_keeps_its_digits():
    """σ²(1 − e^(−2κ))/(2κ) at κ = 1e-7, by its series: 1 − κ + 2κ²/3."""
    (node,) = graph_of("  x: {ornstein_uhlenbeck: {rate: 1e-7, sd: 1}}").series.values()
    assert node.term.shock_sd() ** 2 == pytest.approx(1 - 1e-7 + 2e-14 / 3, rel=1e-15)


@pytest.mark.parametrize(
    ("term", "sentence"),
    [
        ("{arima: {phi: 1.02, d: 1, sd: 1}}", "outside the unit circle, got one at 0.9804 (modulus 0.9804)"),
        ("{arima: {d: 1, seasonal: {period: 12, phi: 1}, sd: 1}}", "or write a unit root as `d`"),
        ("{arima: {d: 1, seasonal: {period: 2.5}, sd: 1}}", "expected a period of a whole number of steps"),
        ("{arima: {d: 1, seasonal: {period: 4, d: 1}, sd: 1, start: [1, 2]}}", "expected 5 values up to step 0"),
        ("{arima: {phi: 0.5, d: 1, sd: 1, before: {x: 3}}}", "expected 2 past values in `x`"),
        ("{lag: {of: [{arima: {d: 1, sd: 1, before: {x: 3}}}], by: 4}}", "give 4 values there, or lag less"),
        ("{seasonal_random_walk: {period: 4, sd: 1, start: [1, 2]}}", "expected 4 values, one a step of a season"),
        (
            "{seasonal_random_walk: {period: 2, sd: 1, form: dummy, start: [1, 2]}}",
            "expected a pattern that sums to 0, got 3; subtract its mean",
        ),
        ("{local_level: {level_sd: 0}}", "expected a standard deviation above 0 among level_sd, noise_sd"),
        ("{stochastic_cycle: {rho: 0.9, period: 2, sd: 1}}", "expected a period above 2 steps, got 2"),
        ("{stochastic_cycle: {rho: 1, period: 9, sd: 1}}", "expected a number in (0, 1), got 1"),
        ("{ornstein_uhlenbeck: {rate: 1e-20, sd: 1}}", "use a random_walk"),
    ],
)
def test_what_cannot_be_drawn_is_refused_with_the_mend(term, sentence):
    with pytest.raises(SpecError) as caught:
        graph_of(f"  x: {term}")
    assert sentence in str(caught.value)


def test_a_term_of_several_disturbances_cannot_be_correlated():
    rest = "correlation:\n  - {between: [x.local_level, y.ar], value: 0.5}"
    with pytest.raises(SpecError, match=r"^the shocks of x\.local_level are its own and cannot be mixed"):
        graph_of(f"  x: {LEVEL}\n  y: {{ar: {{phi: 0.5, sd: 1}}}}", rest=rest)


def test_gaps_of_several_paths_count_as_the_longest():
    none, values = np.nan, np.array([[1.0, np.nan, np.nan], [2.0, 5.0, np.nan], [3.0, 6.0, np.nan]])
    filled, gap = without_gap(values[:, :2], 7.0)
    assert gap == 1 and filled.tolist() == [[7.0, 7.0], [2.0, 5.0], [3.0, 6.0]]
    assert without_gap(np.array([[none, 1.0], [none, none], [2.0, 2.0]]), 0.0)[1] == 2
    assert without_gap(values[:, 2:], 0.0)[1] == 3
    assert without_gap(values[:, :1], 0.0)[1] == 0
    kept, gap = without_gap(values, 0.0)  # a path that is all gap says nothing of the others
    assert gap == 1 and kept[:, 1].tolist() == [0.0, 5.0, 6.0] and np.isnan(kept[1:, 2]).all()


@pytest.mark.parametrize(
    ("kind", "shown"),
    [
        ({"arima": {"d": 1, "phi": 0.5, "sd": 1}}, "(1 − 0.5 B) (1 − B) x[t] = a[t],  x = 0 up to step 0"),
        (
            {"arima": {"d": 1, "phi": 0.5, "theta": 0.3, "sd": 1, "before": {"x": [1, 2, 3], "shocks": [0.1, 0.2]}}},
            "(1 − 0.5 B) (1 − B) x[t] = (1 + 0.3 B) a[t],  x[−2] = 2, x[−1] = 3,  a[−1] = 0.2",
        ),
        (
            {"arima": {"d": 1, "seasonal": {"period": 12, "d": 1}, "sd": 1, "start": list(range(13))}},
            "(1 − B)(1 − B^12) x[t] = a[t],  x[−12] = 0, x[−11] = 1, …, x[0] = 12",
        ),
        (
            {"seasonal_random_walk": {"period": 4, "sd": 1, "start": [5, -2, -4, 1]}},
            "x[t] = x[t−4] + a[t],  x[−3] = −2, x[−2] = −4, x[−1] = 1, x[0] = 5",
        ),
        (
            {"seasonal_random_walk": {"period": 2, "sd": 1, "before": {"x": [1, 2]}}},
            "x[t] = x[t−2] + a[t],  x[−2] = 1, x[−1] = 2",
        ),
    ],
)
def test_equations_show_the_values_that_they_go_on_from(kind, shown):
    graph = graph_of(f"  x: {json.dumps(kind)}")
    assert graph.series["x"].term.equation() == shown
