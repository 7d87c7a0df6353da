"""Clustering of values whose shocks cannot be recovered: the sums, and what they find."""

import numpy as np
import pytest

from procgen.checks.squares import LAGS, SquareLane, SquareSums
from procgen.checks.validate import plan_of
from tests.studies.departures import draw, spec_of, verdict


def gusts(calm, gusty):
    return [{"switching_noise": {"sd": {"calm": 1, "gusty": 3}, "durations": {"calm": calm, "gusty": gusty}}}]


def test_sums_are_those_of_a_loop_however_the_steps_are_cut():
    plan = plan_of(spec_of(gusts(30, 10), 8, 60, 1)).squares["x"]
    assert plan.variance == pytest.approx(3)  # 0.75 · 1 + 0.25 · 9
    # E h² = 0.75 + 0.25 · 81, the squares' variance is 3 E h² − 9, their covariance at lag k 12 (26/30)^k.
    assert plan.slopes == pytest.approx([12 * (26 / 30) ** lag / 54 for lag in LAGS])
    x = np.random.default_rng(1).standard_normal((60, 8))
    q = x**2 - 3
    for cuts in ([60], [1, 2, 30, 27]):
        sums, lane, step = SquareSums(plan), SquareLane(8), 0
        for rows in cuts:
            sums.absorb(x[step : step + rows], step, lane)
            step += rows
        sums.finish(lane)
        for k, lag in enumerate(LAGS):
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
    assert sum(row.what == "slope of squares" and row.outcome == "agrees" for row in true.rows) == len(LAGS)


def test_series_whose_shocks_say_it_need_no_squares():
    assert plan_of(spec_of([{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}], 8, 60, 1)).squares == {}
