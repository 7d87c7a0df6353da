"""A body through a recursive filter: against statsmodels, explicit sums, and the matrices of switching intercepts."""

from __future__ import annotations

import re

import numpy as np
import pytest
from statsmodels.tsa.arima_process import ArmaProcess

import procgen as pg
from procgen.chance.kernel import compiling
from procgen.spec.model import SpecError
from procgen.theory import theory

from .helpers import draw, graph_of, jacobian
from .test_regimes import theory_of

DERIVED = {"distributed_lag": "test_switching_intercept_is_that_of_its_matrices"}

PHI = (0.5, 0.3)
MOVES = np.array([[0.9, 0.1], [0.25, 0.75]])
LEVELS = np.array([1.16, -0.36])
SWITCHING = (
    "{regimes: {branches: {up: [{constant: 1.16, as: a}], down: [{constant: -0.36, as: b}]}, "
    "transitions: [[0.9, 0.1], [0.25, 0.75]]}}, {white_noise: {sd: 0.77}}"
)


def lag(body: str, phi: str = "0.8") -> str:
    return f"{{distributed_lag: {{of: [{body}], phi: {phi}}}}}"


def summed(covariance: np.ndarray, phi: tuple[float, ...]) -> np.ndarray:
    """Covariances of y(t) = sum phi y(t-i) + x(t) from 0, from those of x: row by row, as the filter is written."""
    weights = np.eye(len(covariance))
    for t in range(len(weights)):
        for i, c in enumerate(phi, start=1):
            if t >= i:
                weights[t] += c * weights[t - i]
    return weights @ covariance @ weights.T


@pytest.mark.parametrize(
    "body",
    ["{white_noise: {sd: 2}}", "{subsample: {of: [{white_noise: {sd: 2}}], over: 5}}"],
    ids=["linear", "process"],
)
def test_a_lag_of_white_noise_is_an_autoregression(body):
    """statsmodels, ArmaProcess; read as it is, and as something of which only covariances are known."""
    known = theory_of(graph_of(f"  x: {lag(body, '[0.5, 0.3]')}"))
    expected = ArmaProcess([1, *(-c for c in PHI)]).acovf(40) * 4.0
    assert known.autocovariance(np.arange(40)) == pytest.approx(expected, rel=1e-10)
    assert known.autocovariance(np.arange(6), from_step=50) == pytest.approx(expected[:6], rel=1e-10)
    assert known.stationarity.verdict == "strictly stationary" and known.gaussian
    assert known.marginal(3).std() == pytest.approx(expected[0] ** 0.5, rel=1e-10)


def test_a_lag_of_an_arma_is_an_arma():
    """Both filters in a row are one: (1 - 0.6 B)(1 - 0.8 B) x = (1 + 0.4 B) a; statsmodels, ArmaProcess."""
    known = theory_of(graph_of(f"  x: {lag('{arma: {phi: 0.6, theta: 0.4, sd: 1}}')}"))
    expected = ArmaProcess(np.convolve([1, -0.6], [1, -0.8]), [1, 0.4]).acovf(20)
    assert known.autocovariance(np.arange(20)) == pytest.approx(expected, rel=1e-9)


def test_a_constant_body_rests_where_it_must():
    graph = graph_of(f"  x: {lag('{constant: 3}', '[0.5, 0.3]')}\n  t: {lag('{trend: {level: 2, slope: 0.5}}')}")
    found, known = draw(graph, 0, 2, [30]), theory(graph.spec, graph)
    assert found["x"] == pytest.approx(np.full((30, 2), 3 / 0.2), rel=1e-12)
    assert known["x"].mean([0, 9]) == pytest.approx([15, 15], rel=1e-13)
    # y = a + b t with b = 0.5 / 0.2 and a - 0.8 (a - b) = 2
    line = (2 - 0.8 * 2.5) / 0.2 + 2.5 * np.arange(30)
    assert found["t"][:, 0] == pytest.approx(line, rel=1e-11, abs=1e-11)
    assert known["t"].mean(np.arange(30)) == pytest.approx(line, rel=1e-11, abs=1e-11)


def test_switching_intercept_is_that_of_its_matrices():
    """x[t] = c[s] + φ x[t−1] + e: moments given the state follow linear equations (Hamilton 1994, ch. 22.4).

    With m_j = E x 1(s = j), m = c π + φ P′ m; with q_j = E x² 1(s = j), q = (c² + σ²) π + 2 φ c P′ m + φ² P′ q.
    """
    phi, shares = 0.8, np.array([0.25, 0.1]) / 0.35
    first = np.linalg.solve(np.eye(2) - phi * MOVES.T, LEVELS * shares)
    right = (LEVELS**2 + 0.77**2) * shares + 2 * phi * LEVELS * (MOVES.T @ first)
    second = np.linalg.solve(np.eye(2) - phi**2 * MOVES.T, right)
    known = theory_of(graph_of(f"  x: {lag(SWITCHING)}"))
    mean, variance = first.sum(), second.sum() - first.sum() ** 2
    assert known.mean([0, 40]) == pytest.approx([mean] * 2, rel=1e-12)
    assert known.variance([0, 40]) == pytest.approx([variance] * 2, rel=1e-11)
    # E x[t+1] x[t] = Σ c_j E x[t] 1(s[t+1] = j) + φ E x², and so on: the state forecasts the intercepts to come.
    expected, product, given = [variance], second.sum(), first
    for _ in range(10):
        given = MOVES.T @ given
        product = LEVELS @ given + phi * product
        expected.append(product - mean**2)
    assert known.autocovariance(np.arange(11)) == pytest.approx(expected, rel=1e-10)
    assert known.stationarity.stationary


def test_what_is_drawn_has_these_moments():
    """4,000 paths of 3 far steps: means within 5.5 standard errors (probability 4e-8), one with the other."""
    known = theory_of(graph_of(f"  x: {lag(SWITCHING)}"))
    x = draw(graph_of(f"  x: {lag(SWITCHING)}", steps=60), 0, 4_000, [60])["x"][[0, 30, 59]]
    mean, variance = known.mean([0])[0], known.variance([0])[0]
    for row in x:
        squares = (row - mean) ** 2
        assert abs(row.mean() - mean) < 5.5 * (variance / 4_000) ** 0.5
        assert abs(squares.mean() - variance) < 5.5 * squares.std() / 4_000**0.5


def test_a_body_that_is_not_stationary():
    """A value held for four steps: Cov(x(t), x(s)) is 9 within a reading, else 0; summed as the filter is written."""
    t = np.arange(-200, 60)
    body = 9.0 * (t[:, None] // 4 == t[None, :] // 4)
    known = theory_of(graph_of(f"  x: {lag('{hold: {of: [{white_noise: {sd: 3}}], every: 4}}', '[0.5, 0.2]')}"))
    expected = summed(body, (0.5, 0.2))[200:, 200:]
    late, early = np.meshgrid(np.arange(60), np.arange(60), indexing="ij")
    assert known.covariance(late, early) == pytest.approx(expected, rel=1e-10, abs=1e-10)
    assert known.stationarity.verdict == "cyclostationary"


@pytest.mark.parametrize(
    "body",
    [
        "{random_walk: {sd: 1, start: 3}}",
        "{integrate: {of: [{ar: {phi: 0.5, sd: 1}}], start: 2}}",
        "{seasonal: {period: 6, harmonics: [{amplitude: 2}]}}, {ma: {theta: 0.4, sd: 1}}",
    ],
    ids=["walk", "integrated", "with a season"],
)
def test_theory_is_the_response_to_every_shock(body, monkeypatch):
    graph = graph_of(f"  x: {lag(body, '[0.4, 0.2]')}", steps=20)
    known, response = theory_of(graph), jacobian(graph, 20, monkeypatch)["x"]
    late, early = np.meshgrid(np.arange(20), np.arange(20), indexing="ij")
    assert known.covariance(late, early) == pytest.approx(response @ response.T, rel=1e-9, abs=1e-9)


def test_means_of_few_steps_far_apart_are_those_of_many():
    """A season times an autoregression: its mean at a step is the same whatever else is asked for."""
    season = "{seasonal: {period: 6, harmonics: [{amplitude: 2}]}}"
    body = f"{{product: [{season}, {{sum: [{{constant: 3}}, {{ma: {{theta: 1, sd: 1}}}}]}}]}}"
    known = theory_of(graph_of(f"  x: {lag(body)}"))
    assert known.mean([3, 90_000]) == pytest.approx(known.mean(np.arange(90_001))[[3, -1]], rel=1e-12)


def test_a_season_passes_with_its_gain():
    """cos(ωt) becomes Re e^(iωt) / (1 − φ e^(−iω)) (Box & Jenkins 1970, ch. 2: the gain of a filter)."""
    known = theory_of(graph_of(f"  x: {lag('{seasonal: {period: 6, harmonics: [{amplitude: 2}]}}')}"))
    t, w = np.arange(40), 2 * np.pi / 6
    expected = (2 * np.exp(1j * w * t) / (1 - 0.8 * np.exp(-1j * w))).real
    assert known.mean(t) == pytest.approx(expected, abs=1e-12)


def test_beside_what_it_is_made_of():
    """Cov(y(t), x(s)) = Σ φʲ γ(t − j − s); γ of two states is geometric (Feller 1968, XV.1)."""
    body = "{use: s}"
    graph = graph_of(f"  s: {SWITCHING.split(', {white')[0]}\n  x: {lag(body)}\n  z: {lag(body, '0.5')}")
    known = theory(graph.spec, graph)
    spread, r = 0.25 * 0.1 / 0.35**2 * (1.16 + 0.36) ** 2, 0.65
    lags = np.arange(-6, 7)
    j = np.arange(400)
    expected = [spread * (0.8**j * r ** np.abs(h - j)).sum() for h in lags]
    assert known.cross("x", "s").covariance(20 + lags, 20) == pytest.approx(expected, rel=1e-11)
    assert known.cross("s", "x").covariance(20, 20 + lags) == pytest.approx(expected, rel=1e-11)
    both = [spread * (np.outer(0.8**j, 0.5**j) * r ** np.abs(h - j[:, None] + j)).sum() for h in lags]
    assert known.cross("x", "z").covariance(20 + lags, 20) == pytest.approx(both, rel=1e-11)


def test_values_follow_the_recursion_from_the_past_of_the_body():
    """The filter, as it is written, from 300 steps before step 0; the same bits in tiles and compiled."""
    graph = graph_of(f"  b: [{SWITCHING}]\n  x: {lag('{use: b}', '[0.5, 0.3]')}")
    deep = graph_of(f"  b: [{SWITCHING}]\n  c: {{lag: {{of: [{{use: b}}], by: 300}}}}", steps=340)
    found, body = draw(graph, 0, 5, [40]), draw(deep, 0, 5, [340])["c"]
    assert np.array_equal(body[300:], found["b"])
    y = np.zeros((342, 5))
    for t in range(340):
        y[t + 2] = 0.5 * y[t + 1] + 0.3 * y[t] + body[t]
    assert found["x"] == pytest.approx(y[302:], rel=1e-12, abs=1e-12)
    with compiling(True):
        assert np.array_equal(draw(graph, 0, 5, [1, 7, 32])["x"], found["x"])


def test_what_reads_its_past_changes_none_of_its_bits():
    one = f"  x: {lag(SWITCHING)}"
    alone = draw(graph_of(one), 0, 5, [40])["x"]
    both = draw(graph_of(one + "\n  l: {lag: {of: [{use: x}], by: 12}}"), 0, 5, [40])
    assert np.array_equal(both["x"], alone) and np.array_equal(both["l"][12:], alone[:28])


@pytest.mark.parametrize("body", ["{poisson: {mean: 4}}", "{flag: {share: 0.2, stay: 5}}", "{ar: {phi: 0.5, sd: 1}}"])
def test_a_true_ensemble_is_not_called_departing(body):
    """Counts come back from the filter up to rounding only: their ranks must not be taken from them."""
    spec = graph_of(f"  x: {lag(body, '0.5')}").spec
    verdict = pg.validate(pg.render(spec.changed(paths=4000)), false_alarm=1e-9)
    assert "departs" not in verdict.counts and verdict.counts["agrees"] > 10, verdict.text()


@pytest.mark.parametrize(
    "body, phi, message",
    [
        ("{constant: 1}", "1.2", r"expected all roots of 1 − φ₁z − … outside the unit circle.*inside `integrate`$"),
        ("{constant: 1}", str([0.001] * 501), "expected at most 500 coefficients, got 501"),
        ("{constant: 1}", "0.99999", "expected a filter that forgets within 100,000 steps"),
        ("{bridge: {start: 1, end: 2, until: 30, sd: 1}}", "0.5", "a bridge begins at step 0; lag less"),
        ("{ar: {phi: 0.5, sd: 1, before: {x: [1]}}}", "0.5", "`before` gives 1; give .* values there"),
    ],
)
def test_what_is_refused_and_why(body, phi, message):
    with pytest.raises(SpecError) as error:
        graph_of(f"  x: {lag(body, phi)}")
    fault = error.value.faults[0].message
    assert re.search(message, fault), fault
