"""Values that follow hidden states, judged by ranks given their past: against statsmodels' filter, and saboteurs.

Seeds are fixed. True data are said to depart with probability at most 1e-8 each under other seeds.
"""

import math

import numpy as np
import pytest
from scipy import stats
from statsmodels.tsa.regime_switching.markov_regression import MarkovRegression

import procgen as pg
from procgen.terms.ranks import Ranking, ranking
from tests.terms.helpers import draw, graph_of

FALSE_ALARM = 1e-8


def spec(body, paths, steps, seed=5):
    series = {"x": {"of": body}}
    return {"procgen": 1, "seed": seed, "paths": paths, "time": {"steps": steps}, "series": series}


def noise(a=1, b=4, lasts=(40, 8)):
    return [{"switching_noise": {"sd": {"a": a, "b": b}, "durations": dict(zip("ab", lasts, strict=True))}}]


def levels(level=3, lasts=(40, 8)):
    high = [{"constant": level}, {"white_noise": {"sd": 2}, "as": "wide"}]
    branches = {"a": [{"white_noise": {"sd": 1}}], "b": high}
    return [{"regimes": {"branches": branches, "durations": dict(zip("ab", lasts, strict=True))}}]


MIXED = {"normal_mixture": {"components": [{"weight": 5 / 6, "sd": 1}, {"weight": 1 / 6, "sd": 4}]}}
INDEPENDENT = [{"white_noise": {"sd": math.sqrt(5 / 6 + 16 / 6), "law": MIXED}}]


def ranks_of(text, steps, paths, whole=False, grain=0.0, cuts=(1, 70)):
    """Ranks and values, by the middle of what a value stands for."""
    graph = graph_of(f"  x: {text}", steps=steps)
    x = draw(graph, 0, paths, [steps])["x"]
    x = grain * np.rint(x / grain) if grain else x
    way = ranking(graph, "x", whole, grain)
    assert isinstance(way, Ranking), way
    z = np.concatenate([way.tile(part, np.full(part.shape, 0.5)) for part in np.split(x, cuts)])
    return z / np.sqrt(12) + 0.5, x


def test_ranks_are_those_of_a_filter_by_statsmodels():
    """Two levels and two spreads; the first chances are the chain's shares, as statsmodels starts as well."""
    found, x = ranks_of(
        "{regimes: {branches: {a: [{constant: 1}, {white_noise: {sd: 1}}], b: [{white_noise: {sd: 3}, as: w}]}, "
        "transitions: [[0.9, 0.1], [0.25, 0.75]]}}",
        200,
        3,
    )
    for path in range(3):
        model = MarkovRegression(x[:, path], k_regimes=2, trend="c", switching_variance=True)
        chances = model.filter([0.9, 0.25, 1.0, 0.0, 1.0, 9.0]).predicted_marginal_probabilities
        expected = chances[:, 0] * stats.norm.cdf(x[:, path] - 1) + chances[:, 1] * stats.norm.cdf(x[:, path] / 3)
        assert found[:, path] == pytest.approx(expected, abs=1e-9)


UNDONE = {
    "a filter above": "{ar: {phi: 0.6, shock: {switching_noise: {sd: {a: 1, b: 4}, durations: {a: 40, b: 8}}}}}",
    "beside a season": "[{seasonal: {period: 12, harmonics: [{amplitude: 3}]}}, "
    "{switching_noise: {sd: {a: 1, b: 4}, durations: {a: {mean: 20, stages: 3}, b: 8}, law: laplace}}]",
    "a normal law beside another": "{regimes: {branches: {a: [{white_noise: {sd: 1}}], "
    "b: [{white_noise: {sd: 2, law: laplace}, as: w}]}, durations: {a: 20, b: 8}}}",
    "two chains": "[{switching_noise: {sd: {a: 1, b: 4}, durations: {a: 9, b: 4}}}, "
    "{product: [{flag: {share: 0.3, stay: 4}}, {constant: 5}]}]",
    "started": "{regimes: {branches: {a: [{constant: 1}, {white_noise: {sd: 1}}], b: [{white_noise: {sd: 3}, as: w}]}, "
    "durations: {a: 40, b: 8}, start: b}}",
}


@pytest.mark.parametrize("name", UNDONE)
def test_ranks_are_uniform_and_white(name):
    """Kolmogorov's distance, and products of ranks and of their sizes at lag 1: a chance of 1e-9 each."""
    u, _ = ranks_of(UNDONE[name], 300, 100)
    u = u[1:]
    assert np.isfinite(u).all() and stats.kstest(u.ravel(), "uniform").pvalue > 1e-9
    z = (u - 0.5) * np.sqrt(12)
    for g in (z, (z * z - 1) / np.sqrt(0.8)):
        assert abs((g[1:] * g[:-1]).mean()) < 6.2 / np.sqrt(g.size)


def test_what_has_a_memory_that_is_hidden_is_refused():
    graph = graph_of(
        "  x: {regimes: {branches: {a: [{ar: {phi: [0.5, 0.2], sd: 1}}], b: [{white_noise: {sd: 3}}]}, "
        "durations: {a: 4, b: 8}}}"
    )
    assert "x.ar is not made of its own step alone" in ranking(graph, "x", False, 0.0).reason


STATED = {"spreads": noise(), "levels": levels()}
WRONG = {
    "independent": ("spreads", INDEPENDENT),
    "swapped spreads": ("spreads", noise(4, 1)),
    "stays half as long": ("levels", levels(lasts=(20, 4))),
    "swapped levels": ("levels", levels(-3)),
}


@pytest.mark.parametrize("shape", [(1, 20_000), (20, 500), (2000, 100)])
@pytest.mark.parametrize("name", WRONG)
def test_a_departure_is_found_by_shocks(name, shape):
    stated, drawn = WRONG[name]
    found = pg.validate(pg.render(spec(drawn, *shape)).to_pandas(), spec(STATED[stated], *shape, seed=6))
    assert any(row.what.startswith("shocks: ") and row.outcome == "departs" for row in found.rows), found.to_text()


@pytest.mark.parametrize("name", STATED)
@pytest.mark.parametrize("shape", [(1, 20_000), (200, 100)])
def test_true_data_agree(name, shape):
    found = pg.validate(pg.render(spec(STATED[name], *shape)), false_alarm=FALSE_ALARM)
    assert found.agrees and "shocks: clustering" in {row.what for row in found.rows}, found.to_text()
