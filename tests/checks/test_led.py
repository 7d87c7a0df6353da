"""Ranks given the past against the value before: the law of the sum is exact, and a wrong memory is found and named.

Seeds are fixed. Under others true ensembles are said to depart with probability 1e-8 each.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from procgen.checks.led import LedSums
from procgen.checks.verdict import Verdict
from procgen.checks.words import LED
from tests.studies.departures import draw, spec_of, sums, verdict


class Standard:
    """Moments of what has mean 0 and variance 1 at every step."""

    def mean(self, at):
        return np.zeros(len(at))

    def variance(self, at):
        return np.ones(len(at))


@pytest.mark.parametrize("steps", [5, 30])
@pytest.mark.parametrize("phi", [0.0, 0.95])
def test_the_sum_of_a_few_steps_is_normal(steps, phi):
    """Of an autoregression on its own past, whose plain sum of products is far from normal (White 1958)."""
    rng, paths = np.random.default_rng(8), 40_000
    g = rng.normal(size=(steps, paths))
    x = g.copy()
    for t in range(1, steps):
        x[t] = phi * x[t - 1] + np.sqrt(1 - phi * phi) * g[t]
    each = LedSums(Standard(), steps, "x")
    lane = each.lane(paths)
    each.absorb(x[:3], g[:3], 0, lane)
    each.absorb(x[3:], g[3:], 3, lane)
    held = lane.total, lane.squares
    one = LedSums(Standard(), steps, "x")
    whole = one.lane(paths)
    one.absorb(x, g, 0, whole)
    assert all(np.array_equal(a, b) for a, b in zip(held, (whole.total, whole.squares), strict=True))
    assert (whole.squares > 0).any() and (whole.squares <= one.wanted).all()
    filled = whole.total + np.sqrt(one.wanted - whole.squares) * rng.normal(size=paths)
    assert stats.kstest(filled / np.sqrt(one.wanted), "norm").pvalue > 1e-8
    plain = (x[:-1] * g[1:]).sum(axis=0) / np.sqrt(steps - 1)
    assert phi == 0.0 or stats.kstest(plain, "norm").pvalue < 1e-8
    each.finish(lane)
    (check,) = each.checks("x")
    assert check.log_p > np.log(1e-8) and check.standard_error == pytest.approx((one.wanted * paths) ** -0.5)


def inar(alpha):
    return [{"inar": {"alpha": alpha, "mean": 5}}]


@pytest.mark.parametrize("alpha", [0.63, 0.57])
@pytest.mark.parametrize("seed", [1, 2, 3, 4])
def test_a_wrong_memory_of_counts_is_no_matter_of_their_law(alpha, seed):
    found = verdict(inar(0.6), draw(spec_of(inar(alpha), 1, 50_000, seed)))
    assert found.headline[0].startswith("x: memory: "), found.headline


def test_arrivals_of_another_law_are_no_matter_of_memory():
    wide = [{"inar": {"alpha": 0.6, "mean": 5, "size": 8}}]
    line = verdict(inar(0.6), draw(spec_of(wide, 1, 20_000, 3))).headline[0]
    assert line.startswith(("x: spread: ", "x: law: ")), line


CHAIN = {"branches": {"a": [{"white_noise": {"sd": 1}}], "b": [{"constant": 2}, {"white_noise": {"sd": 1}, "as": "n"}]}}
TRUE = {
    "inar": inar(0.8),
    "flag": [{"flag": {"share": 0.1, "stay": 6}}],
    "regimes": [{"regimes": {**CHAIN, "durations": {"a": 9, "b": 3}}}],
    "intermittent": [{"intermittent": {"share": 0.2, "stay": 3, "size": 12, "sd": 5}}],
}


@pytest.mark.parametrize("shape", [(1, 3000), (60, 40)])
@pytest.mark.parametrize("name", TRUE)
def test_true_ensembles_agree(name, shape):
    for seed in range(12):
        found = Verdict(list(_rows(TRUE[name], draw(spec_of(TRUE[name], *shape, seed)))), 1e-8)
        assert any(row.what == LED for row in found.rows)
        assert found.agrees is not False, found.text()


def _rows(stated, values):
    from procgen.checks.judgement import judged

    return judged(sums(stated, values))


def test_ranks_that_are_not_given_the_first_value_are_not_held_against_what_is_left_of_it():
    """Of a filter whose past is unknown; its 20,000 paths of 20 steps were accused with p of 1e-18."""
    body = TRUE["regimes"]
    for lagged, told in ((body, True), ([{"distributed_lag": {"of": body, "phi": 0.7}}], False)):
        found = verdict(lagged, draw(spec_of(lagged, 2000, 20, 7)))
        assert any(row.what == LED for row in found.rows) is told
        assert any(row.what == "shocks: autocorrelation" and row.p is not None for row in found.rows)
