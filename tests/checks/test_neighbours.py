"""Short panels of a garch: its clustering is judged by bounded sizes of neighbours, with exact means by theory."""

import numpy as np
import pytest
from scipy import stats

from procgen.checks.judgement import judged
from procgen.checks.neighbours import plan_neighbours
from procgen.checks.planning import plan_of
from procgen.checks.verdict import Verdict
from tests.studies.departures import draw, gathered, spec_of, verdict

PATHS, STEPS = 20_000, 20


def body(alpha=0.1, beta=0.85, **more):
    return [{"constant": 3}, {"garch": {"omega": 0.05, "alpha": alpha, "beta": beta} | more}]


def test_true_paths_agree_and_other_weights_of_the_same_sum_do_not():
    assert "clustering" in verdict(body(), draw(spec_of(body(), PATHS, STEPS, 3))).coverage[0].judged
    found = verdict(body(), draw(spec_of(body(0.15, 0.8), PATHS, STEPS, 3)))
    assert found.headline[0].startswith("x: clustering: calm and wild stretches follow each other otherwise")


def test_independent_values_are_found_be_they_normal_or_of_the_right_law():
    rng, true = np.random.default_rng(1), draw(spec_of(body(), PATHS, STEPS, 4))["x"]
    for x in (3 + rng.standard_normal(true.shape), rng.permutation(true.ravel()).reshape(true.shape)):
        found = verdict(body(), {"x": x})
        assert "clustering" in found.headline[0]
        assert found.agrees is False


def test_true_paths_depart_no_more_often_than_stated():
    departed, plan = 0, plan_of(spec_of(body(), 500, 20, 1))
    for seed in range(60):
        rows = [row for row in judged(gathered(plan, [(0, 0, draw(spec_of(body(), 500, 20, seed)))]))]
        mine = [row for row in rows if row.what == "covariance of bounded sizes"]
        assert len(mine) == 3
        departed += Verdict(mine, 0.05).agrees is False
    assert departed <= stats.binom.isf(2e-7, 60, 0.05)


def test_sums_are_those_of_a_loop_however_the_steps_are_cut():
    plan = plan_of(spec_of(body(), 4, 100, 1))
    x = 3 + np.random.default_rng(2).standard_normal((4, 100))
    each = plan.squares["x"]
    y = (x - 3) ** 2 / ((x - 3) ** 2 + each.sizes.square) - each.sizes.mean
    blocks = [(0, 0, {"x": x[:, :70]}), (0, 70, {"x": x[:, 70:]})]
    whole, parts = gathered(plan, [(0, 0, {"x": x})]), gathered(plan, blocks)
    for k, (lag, stated) in enumerate(zip(each.lags, each.sizes.covariances, strict=True)):
        averages = (y[:, lag:] * y[:, : 100 - lag]).mean(axis=1) - stated
        assert whole.squares["x"].powers.sums[0, k] == pytest.approx(averages.sum())
    np.testing.assert_array_equal(whole.squares["x"].powers.sums, parts.squares["x"].powers.sums)


@pytest.mark.parametrize(
    ("other", "steps"),
    [
        (body(), 300),
        ([*body(), {"white_noise": {"sd": 1}}], 20),
        (body(before={"variance": 1, "shocks": 1}), 20),
        ([{"arch": {"omega": 1, "alpha": 0.3}}], 20),
    ],
    ids=["shocks are seen", "with noise", "given start", "arch"],
)
def test_it_is_asked_only_where_theory_covers_it_and_shocks_do_not(other, steps):
    plan = plan_of(spec_of(other, 150, steps, 1)).series[0]
    assert plan_neighbours(plan.theory, steps, 0.0) is None
