"""Autoregressions in hidden regimes, judged by ranks given their past: against all ways of the chain, and saboteurs.

Seeds are fixed. True data are said to depart with probability at most 1e-8 each under other seeds.
"""

from itertools import pairwise, product

import numpy as np
import pytest
from scipy import stats

import procgen as pg
from procgen.terms.ranks import ranking
from tests.checks.test_hidden_states import FALSE_ALARM, ranks_of, spec
from tests.terms.helpers import graph_of

TWO = (
    "{regimes: {branches: {a: [{constant: 1}, {ar: {phi: 0.8, sd: 1}}], b: [{ar: {phi: -0.5, sd: 3}, as: w}]}, "
    "transitions: [[0.7, 0.3], [0.4, 0.6]]}}"
)
ONE = (
    "{regimes: {branches: {a: [{white_noise: {sd: 2, law: laplace}}], b: [{ar: {phi: 0.9, total_sd: 1}}], "
    "c: [{constant: 3}, {white_noise: {sd: 1}, as: w}]}, durations: {a: {mean: 9, stages: 2}, b: 12, c: 4}}}"
)


def by_all_ways(x):
    """P(X ≤ x) given the past for `TWO`, by the normal law of what is seen on each way that the chain may have gone."""
    moves, first = np.array([[0.7, 0.3], [0.4, 0.6]]), np.array([4 / 7, 3 / 7])
    bodies = ((0.8, 1 / (1 - 0.8**2), 1.0), (-0.5, 9 / (1 - 0.5**2), 0.0))
    found = np.empty(len(x))
    for t in range(len(x)):
        chances, areas = [], []
        for way in product((0, 1), repeat=t + 1):
            chance, at = first[way[0]], np.array(way)
            for before, after in pairwise(way):
                chance *= moves[before, after]
            for k, (phi, variance, level) in enumerate(bodies):
                seen = np.flatnonzero(at[:t] == k)
                law = variance * phi ** np.abs(np.subtract.outer(seen, seen))
                past = x[seen] - level
                if len(seen):
                    chance *= stats.multivariate_normal(cov=law).pdf(past)
                if way[t] == k:
                    weights = np.linalg.solve(law, variance * phi ** (t - seen)) if len(seen) else np.zeros(0)
                    rest = variance - weights @ (variance * phi ** (t - seen))
                    areas.append(stats.norm.cdf(x[t] - level, weights @ past, np.sqrt(rest)))
            chances.append(chance)
        found[t] = np.dot(chances, areas) / np.sum(chances)
    return found


def test_ranks_are_those_of_all_ways_of_the_chain():
    found, x = ranks_of(TWO, 8, 2, cuts=(1, 3))
    for path in range(2):
        assert found[:, path] == pytest.approx(by_all_ways(x[:, path]), abs=1e-9)


@pytest.mark.parametrize("text", [TWO, ONE], ids=["two that remember", "one beside others"])
def test_ranks_are_uniform_and_white_however_steps_and_paths_are_cut(text):
    """Kolmogorov's distance, and products of ranks and of their sizes at lag 1: a chance of 1e-9 each."""
    u, _ = ranks_of(text, 300, 100)
    assert np.isfinite(u).all() and stats.kstest(u.ravel(), "uniform").pvalue > 1e-9
    z = (u - 0.5) * np.sqrt(12)
    for g in (z, (z * z - 1) / np.sqrt(0.8)):
        assert abs((g[1:] * g[:-1]).mean()) < 6.2 / np.sqrt(g.size)
    np.testing.assert_array_equal(ranks_of(text, 300, 100, cuts=(40, 41, 200))[0], u)
    np.testing.assert_array_equal(ranks_of(text, 300, 1)[0][:, 0], u[:, 0])


def test_what_is_missing_ends_what_is_known_of_a_path():
    graph = graph_of(f"  x: {ONE}", steps=20)
    x = np.zeros((20, 2))
    x[7, 1] = np.nan
    z = ranking(graph, "x", False, 0.0).tile(x, np.full(x.shape, 0.5))
    assert np.isfinite(z[:, 0]).all() and np.isfinite(z[:7, 1]).all() and np.isnan(z[7:, 1]).all()


@pytest.mark.parametrize(
    "bodies",
    [
        "a: [{ar: {phi: [0.5, 0.2], sd: 1}}], b: [{white_noise: {sd: 3}}]",
        "a: [{ar: {phi: 0.5, sd: 1, law: laplace}}], b: [{white_noise: {sd: 3}}]",
        "a: [{ar: {phi: 0.5, sd: 1}}, {white_noise: {sd: 1}}], b: [{white_noise: {sd: 3}, as: w}]",
        "a: [{ar: {phi: 0.99, sd: 1}}], b: [{white_noise: {sd: 3}}]",
        "a: [{ar: {phi: 0.5, sd: 1}}], b: [{ar: {phi: 0.6, sd: 3}, as: v}], c: [{ar: {phi: 0.6, sd: 9}, as: w}]",
    ],
    ids=["order 2", "not normal", "beside noise", "too long", "three"],
)
def test_what_cannot_be_followed_is_said(bodies):
    stays = ", ".join(f"{name}: 5" for name in "abc" if f"{name}: [" in bodies)
    graph = graph_of(f"  x: {{regimes: {{branches: {{{bodies}}}, durations: {{{stays}}}}}}}")
    assert "is not made of its own step alone" in ranking(graph, "x", False, 0.0).reason


def calm(phi=0.6, stay=40):
    """An autoregression of variance 1 beside larger noise."""
    branches = {"a": [{"ar": {"phi": phi, "total_sd": 1}}], "b": [{"white_noise": {"sd": 3}}]}
    return [{"regimes": {"branches": branches, "durations": {"a": stay, "b": 8}}}]


@pytest.mark.parametrize("seed", range(3))
def test_a_longer_memory_is_found_on_thirty_paths(seed):
    """φ 0.9 for 0.6: the ranks' correlation is off by over ten standard errors."""
    found = pg.validate(pg.render(spec(calm(0.9), 30, 200, seed)).to_pandas(), spec(calm(), 30, 200))
    assert any(row.what.startswith("shocks: ") and row.outcome == "departs" for row in found.rows), found.to_text()
    assert found.headline[0].startswith("x: memory"), found.headline


@pytest.mark.parametrize("paths,steps", [(1, 5000), (30, 200), (300, 100)])
def test_true_data_agree(paths, steps):
    found = pg.validate(pg.render(spec(calm(), paths, steps)), false_alarm=FALSE_ALARM)
    assert found.agrees and "shocks: autocorrelation" in {row.what for row in found.rows}, found.to_text()
