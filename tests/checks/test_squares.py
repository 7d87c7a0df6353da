"""Clustering of values whose shocks cannot be recovered: the sums, and what they find."""

import numpy as np
import pytest

from procgen.checks.planning import plan_of
from procgen.checks.squares import LAGS, SquareLane, SquareSums
from tests.studies.departures import draw, spec_of, verdict


def gusts(calm, gusty):
    return [{"switching_noise": {"sd": {"calm": 1, "gusty": 3}, "durations": {"calm": calm, "gusty": gusty}}}]


def test_sums_are_those_of_a_loop_however_the_steps_are_cut():
    plan = plan_of(spec_of(gusts(30, 10), 8, 60, 1)).squares["x"]
    assert plan.variance == pytest.approx(3)  # 0.75 · 1 + 0.25 · 9
    # E h² = 0.75 + 0.25 · 81, the squares' variance is 3 E h² − 9, their covariance at lag k 12 (26/30)^k.
    assert plan.lags == LAGS[:4]  # a quarter of 60 steps
    assert plan.slopes == pytest.approx([12 * (26 / 30) ** lag / 54 for lag in plan.lags])
    x = np.random.default_rng(1).standard_normal((60, 8))
    q = x**2 - 3
    for cuts in ([60], [1, 2, 30, 27]):
        sums, lane, step = SquareSums(plan), SquareLane(plan.lags, 8), 0
        for rows in cuts:
            sums.absorb(x[step : step + rows], step, lane)
            step += rows
        sums.finish(lane)
        for k, lag in enumerate(plan.lags):
            beside = [(q[t] - plan.slopes[k] * q[t - lag]) * q[t - lag] for t in range(lag, 60)]
            expected = np.mean(beside, axis=0) / 54
            assert sums.powers.sums[0, k] == pytest.approx(expected.sum())
            assert sums.powers.sums[1, k] == pytest.approx((expected**2).sum())


def test_stays_half_as_long_are_called_clustering():
    # Seed fixed; at this size the slope at lag 4 is off by over 15 standard errors.
    found = verdict(gusts(30, 10), draw(spec_of(gusts(15, 5), 600, 200, 4)))
    assert found.agrees is False
    assert found.headline[0].startswith("x: clustering: ")
    # A true ensemble departs with probability 0.001 under another seed.
    # Fewer paths are too few for the tail of products of squares, and are said to be.
    true = verdict(gusts(30, 10), draw(spec_of(gusts(30, 10), 1500, 200, 4)))
    assert true.agrees is True
    rows = {row.probe: row.outcome for row in true.rows if row.what == "slope of squares"}
    assert {rows[f"lag {lag}"] for lag in (1, 2, 4)} == {"agrees"}, rows
    assert len(rows) == len(LAGS)


def test_series_whose_shocks_say_it_need_no_squares():
    assert plan_of(spec_of([{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}], 8, 200, 1)).squares == {}


def spreads(stages):
    return [
        {
            "regimes": {
                "branches": {"calm": [{"white_noise": {"sd": 1}}], "wild": [{"white_noise": {"sd": 3}, "as": "wild"}]},
                "durations": {"calm": {"mean": 24, "stages": stages}, "wild": {"mean": 12, "stages": stages}},
            }
        }
    ]


def test_stays_of_another_law_but_the_same_mean_are_called_clustering():
    """Stays of three stages drawn as memoryless ones: the same shares and means, squares of neighbours alike.

    Seed fixed; the slope at lag 4 is off by 11 standard errors. It is not at lag 1, where only the means count.
    """
    found = verdict(spreads(3), draw(spec_of(spreads(1), 2000, 500, 4)))
    gone = {row.probe for row in found.rows if row.what == "slope of squares" and row.outcome == "departs"}
    assert "lag 4" in gone and "lag 1" not in gone, found.text()
    assert found.headline[0].startswith("x: clustering: ")
    true = verdict(spreads(3), draw(spec_of(spreads(3), 2000, 500, 4)))
    assert true.agrees is True, true.text()
