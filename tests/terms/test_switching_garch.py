"""Markov-switching garch against every chain there is, the garch and switching noise it becomes, and statsmodels."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest
from scipy import stats
from statsmodels.tsa.regime_switching.markov_regression import MarkovRegression

import procgen as pg
from procgen.terms.markov import occupancy
from procgen.terms.ranks import ranking
from procgen.terms.recover import forecast
from procgen.terms.run import Run
from tests.theory.specs import series_of, theory_of

from .helpers import draw, graph_of

DERIVED = {"switching_garch": "test_moments_against_every_chain"}

P = np.array([[0.9, 0.1], [0.3, 0.7]])
OMEGA, ALPHA, BETA = np.array([0.2, 1.0]), np.array([0.1, 0.25]), np.array([0.15, 0.1])
ROWS = "transitions: [[0.9, 0.1], [0.3, 0.7]]"
TEXT = "switching_garch: {omega: {a: 0.2, b: 1}, alpha: {a: 0.1, b: 0.25}, beta: {a: 0.15, b: 0.1}, " + ROWS + "}"
TERM = {
    "switching_garch": {
        "omega": {"a": 0.2, "b": 1},
        "alpha": {"a": 0.1, "b": 0.25},
        "beta": {"a": 0.15, "b": 0.1},
        "transitions": P.tolist(),
    }
}
LONG = 16  # steps of a chain, of which the first ones are there to forget where the variances began


def given_chains(chains, kurtosis, lag):
    """E e², and E e² e²[+lag], `lag` steps before the end, given all states (chains, LONG): by recursion in steps."""
    every = np.arange(len(chains))
    h = np.tile(OMEGA / (1 - BETA - ALPHA), (len(chains), 1))
    hh = h[:, :, None] * h[:, None, :]
    for s in chains[:, : LONG - lag - 1].T:
        shown, with_shown = h[every, s], hh[every, s]
        square = np.empty_like(hh)
        for i, j in product(range(2), repeat=2):
            square[:, i, j] = (
                OMEGA[i] * OMEGA[j]
                + OMEGA[i] * (BETA[j] * h[:, j] + ALPHA[j] * shown)
                + OMEGA[j] * (BETA[i] * h[:, i] + ALPHA[i] * shown)
                + BETA[i] * BETA[j] * hh[:, i, j]
                + BETA[i] * ALPHA[j] * with_shown[:, i]
                + ALPHA[i] * BETA[j] * with_shown[:, j]
                + kurtosis * ALPHA[i] * ALPHA[j] * with_shown[every, s]
            )
        h, hh = OMEGA + BETA * h + ALPHA * shown[:, None], square
    now = chains[:, LONG - lag - 1]
    shown, with_shown = h[every, now], hh[every, now]
    if not lag:
        return shown, kurtosis * with_shown[every, now]
    later = OMEGA * shown[:, None] + BETA * with_shown + kurtosis * ALPHA * with_shown[every, now][:, None]
    for s in chains[:, LONG - lag : -1].T:
        later = OMEGA * shown[:, None] + BETA * later + ALPHA * later[every, s][:, None]
    return shown, later[every, chains[:, -1]]


@pytest.mark.parametrize(("law", "kurtosis"), [("normal", 3.0), ({"student_t": {"df": 9}}, 3 + 6 / 5)])
def test_moments_against_every_chain(law, kurtosis):
    """Total expectation over all 2^16 chains; what is before them still counts by 0.35^12 = 3e-6 at most."""
    known = series_of({"switching_garch": {**TERM["switching_garch"], "law": law}})
    chains = np.array(list(product(range(2), repeat=LONG)))
    weights = occupancy(P)[chains[:, 0]] * np.prod(P[chains[:, :-1], chains[:, 1:]], axis=1)
    for lag in (0, 1, 2, 3):
        square, both = (weights @ x for x in given_chains(chains, kurtosis, lag))
        assert known.variance([3])[0] == pytest.approx(square, rel=1e-5)
        covariance = both - square**2
        assert known.autocovariance_of_squares([lag])[0] == pytest.approx(covariance, rel=1e-4)
        if lag == 0:
            assert known.excess_kurtosis == pytest.approx(both / square**2 - 3, rel=1e-5)


def test_states_that_are_alike_are_one_garch():
    """Bollerslev (1986): variance ω/(1 − α − β), kurtosis 3(1 − (α+β)²)/(1 − (α+β)² − 2α²), squares (α+β)^k."""
    alike = {"omega": {"a": 0.1, "b": 0.1}, "alpha": {"a": 0.1, "b": 0.1}, "beta": {"a": 0.8, "b": 0.8}}
    known = series_of({"switching_garch": {**alike, "durations": {"a": 9, "b": 4}}})
    garch = series_of({"garch": {"omega": 0.1, "alpha": 0.1, "beta": 0.8}})
    assert known.variance([5])[0] == pytest.approx(1.0, rel=1e-12)
    assert known.excess_kurtosis == pytest.approx(3 * (1 - 0.81) / (1 - 0.81 - 0.02) - 3, rel=1e-10)
    lags = [0, 1, 2, 10]
    assert known.autocovariance_of_squares(lags) == pytest.approx(garch.autocovariance_of_squares(lags), rel=1e-9)
    assert 12 < known.highest_moment <= garch.highest_moment  # known to exist, by whole powers and a chord


def test_without_weights_it_is_a_switching_noise():
    still = {"alpha": {"a": 0, "b": 0}, "beta": {"a": 0, "b": 0}, "durations": {"a": 9, "b": 4}}
    known = series_of({"switching_garch": {"omega": {"a": 1, "b": 9}, **still}})
    noise = series_of({"switching_noise": {"sd": {"a": 1, "b": 3}, "durations": {"a": 9, "b": 4}}})
    lags = np.arange(5)
    assert known.autocovariance_of_squares(lags) == pytest.approx(noise.autocovariance_of_squares(lags), rel=1e-10)
    assert known.excess_kurtosis == pytest.approx(noise.excess_kurtosis, rel=1e-10)
    assert known.highest_moment == np.inf


def test_values_are_those_of_the_recursion_in_plain_loops():
    hidden = "\n".join(f"  {name[0]}: {{use: x.switching_garch.{name}}}" for name in ("regime", "variance"))
    graph = graph_of(f"  x: {{{TEXT}}}\n{hidden}")
    found = draw(graph, 0, 8, [40])
    z = draw(graph_of("  x: {white_noise: {sd: 1}, as: switching_garch}"), 0, 8, [40])["x"]
    assert found["x"] == pytest.approx(np.sqrt(found["v"]) * z, rel=1e-12)
    for path in range(8):
        h = OMEGA / (1 - BETA)
        for t in range(40):
            s = int(found["r"][t, path])
            if t > 30:  # what came before step 0 is forgotten: 0.15^30
                assert found["v"][t, path] == pytest.approx(h[s], rel=1e-9)
            h = OMEGA + ALPHA * found["x"][t, path] ** 2 + BETA * h


def test_ranks_are_those_of_a_filter_by_statsmodels():
    """With variances that stand still the model is statsmodels' MarkovRegression with a switching variance."""
    still = "alpha: {a: 0, b: 0}, beta: {a: 0, b: 0}, " + ROWS
    graph = graph_of(f"  x: {{switching_garch: {{omega: {{a: 1, b: 9}}, {still}}}}}", steps=200)
    x = draw(graph, 0, 4, [200])["x"]
    way = ranking(graph, "x", False, 0.0)
    z = np.concatenate([way.tile(part, np.full(part.shape, 0.5)) for part in np.split(x, [1, 50])])
    for path in range(4):
        model = MarkovRegression(x[:, path], k_regimes=2, trend="n", switching_variance=True)
        chances = model.filter([P[0, 0], P[1, 0], 1.0, 9.0]).predicted_marginal_probabilities
        expected = chances[:, 0] * stats.norm.cdf(x[:, path]) + chances[:, 1] * stats.norm.cdf(x[:, path] / 3)
        seen = np.isfinite(z[:, path])
        assert seen[60:].all() and not seen[0]
        assert z[seen, path] / np.sqrt(12) + 0.5 == pytest.approx(expected[seen], abs=1e-7)


def test_ranks_are_uniform_with_variances_that_move():
    """Kolmogorov's distance of 200 × 200 ranks, and their first autocorrelation: a chance of 1e-9 each."""
    graph = graph_of(f"  x: {{{TEXT}}}", steps=260)
    way = ranking(graph, "x", False, 0.0)
    z = way.tile(draw(graph, 0, 200, [260])["x"], np.full((260, 200), 0.5))[60:]
    assert np.isfinite(z).all()
    assert stats.kstest(z.ravel() / np.sqrt(12) + 0.5, "uniform").pvalue > 1e-9
    assert abs((z[1:] * z[:-1]).mean()) < 6.2 / np.sqrt(z.size)


def test_forecasts_are_means_over_the_chains_ahead():
    graph = graph_of(f"  x: {{{TEXT}}}")
    run = Run(graph, 0, 5)
    run.tile(40)
    answer = forecast(run, "x", 4)
    state = run.state_of(graph.series["x"])
    for path in range(5):
        now, h0 = int(state["s"][0, path]), state["h"][:, path]
        for ahead in range(4):
            total = 0.0
            for chain in product(range(2), repeat=ahead + 1):
                weight, h, before = 1.0, h0, now
                for step, s in enumerate(chain):
                    weight, before = weight * P[before, s], s
                    if step < ahead:
                        h = OMEGA + BETA * h + ALPHA * h[s]
                total += weight * h[chain[-1]]
            assert answer.variance[ahead, path] == pytest.approx(total, rel=1e-12)


def exploding(stay, alpha=None):
    weights = {"omega": {"a": 1, "b": 1}, "alpha": alpha or {"a": 0.1, "b": 0.9}, "beta": {"a": 0.3, "b": 0.4}}
    return series_of({"switching_garch": {**weights, "durations": {"a": 20, "b": stay}}})


def test_a_variance_without_a_mean_is_refused():
    """One state may explode where its stays are short (Haas, Mittnik & Paolella 2004), and not where they are long."""
    with pytest.raises(pg.SpecError, match=r"expected variances whose means settle, got a spectral radius of 1\."):
        exploding(20)
    assert np.isfinite(exploding(2).variance([0])[0])
    with pytest.raises(pg.SpecError, match="expected one for each of a, b, got a"):
        exploding(2, {"a": 0.1})


def test_the_chain_and_the_shocks_are_uncorrelated_and_a_filter_keeps_the_squares():
    th = theory_of({"x": [{"ma": {"theta": 0.5, "shock": TERM}}], "r": [{"use": "x.ma.regime"}]})
    assert th.cross("x", "r").covariance([3, 5], [5, 3]) == pytest.approx([0, 0])
    assert th["x"].autocovariance([0, 1, 2]) == pytest.approx(th["x"].variance([0])[0] * np.array([1, 0.4, 0]))
    assert th["x"].autocovariance_of_squares([1])[0] > 0
    assert th["r"].mean([4])[0] == pytest.approx(0.25)


def spec(alpha):
    term = {**TERM["switching_garch"], "alpha": {"a": 0.1, "b": alpha}}
    raw = {"procgen": 1, "seed": 8, "paths": 2000, "time": {"steps": 500}, "series": {"x": [{"switching_garch": term}]}}
    return pg.load(raw)


def test_another_weight_in_one_state_is_found_and_the_stated_one_is_not():
    stated = spec(0.25)
    assert pg.validate(pg.render(stated), false_alarm=1e-7).agrees
    verdict = pg.validate(pg.render(spec(0.33)).to_pandas(), stated)
    assert verdict.agrees is False
