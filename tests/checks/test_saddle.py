"""Saddle-point tails of sums against exact laws; what is equal by chance; samples of two values."""

import math
from fractions import Fraction

import numpy as np
import pytest
from scipy import stats

from procgen.checks import judge, saddle
from procgen.checks.planning import plan_of
from tests.studies.departures import draw, spec_of, verdict


def line(z):
    return z


@pytest.mark.parametrize("n", [1, 5, 50])
@pytest.mark.parametrize("z", [-2.5, -1.0, -1e-4, 0.5, 3.0, 6.0])
def test_sums_of_exponentials_are_gamma(n, z):
    total = n + z * math.sqrt(n)
    if total <= 0:
        return
    # For a gamma law the formula is off by Stirling's series, about 1/(12 n) of the tail far out.
    upper, lower = saddle.summand(stats.expon(-1), line).tails(z, n)
    assert math.exp(upper) == pytest.approx(stats.gamma.sf(total, n), rel=0.12 / n + 2e-3)
    assert math.exp(lower) == pytest.approx(stats.gamma.cdf(total, n), rel=0.12 / n + 2e-3)


def irwin_hall(x, n):
    """P(sum of n uniforms > x), exactly (Irwin 1927; Hall 1927)."""
    rest = n - Fraction(x)
    terms = ((-1) ** k * math.comb(n, k) * (rest - k) ** n for k in range(math.floor(rest) + 1))
    return float(sum(terms) / math.factorial(n))


@pytest.mark.parametrize("x", [7, 9, 10, 11])
def test_sums_of_uniforms(x):
    z = (x - 6) / math.sqrt(12 / 12)
    upper, _ = saddle.summand(stats.uniform(-0.5, 1), line).tails(z, 12)
    assert math.exp(upper) == pytest.approx(irwin_hall(x, 12), rel=0.02)


def test_what_no_sum_can_reach_has_next_to_no_chance():
    law = saddle.summand(stats.uniform(-0.5, 1), line)
    assert law.tails(1000.0, 4)[0] < -100
    assert law.tails(-1000.0, 4)[1] < -100


def test_a_law_is_brought_to_mean_0_and_variance_1_and_its_far_values_are_left_out():
    law = saddle.summand(stats.gamma(4, loc=3), line)
    assert law.skew == pytest.approx(1.0, rel=1e-3)  # 2 / sqrt(shape), 6 / shape
    assert law.excess == pytest.approx(1.5, rel=1e-3)
    assert np.abs(saddle.summand(stats.t(3), line, 10.0).values).max() < 12


def test_two_values_are_told_from_more():
    # 30 ones and 170 zeros: the values lie 1 apart.
    one = judge.Sample.from_powers(200, [30.0] * 4)
    assert one.gap == pytest.approx(1.0, rel=0.01)
    three = np.repeat([0.0, 1.0, 2.0], [150, 30, 20])
    assert judge.Sample.from_powers(200, [(three**k).sum() for k in (1, 2, 3, 4)]).gap == 0.0


def test_a_mean_of_flags_has_no_smaller_p_than_the_binomial():
    # 400 flags of share 0.1, k of them 1; exact p by SciPy's binomial.
    for k in (22, 60, 64):
        sample = judge.Sample.from_powers(400, [k * 0.9**j + (400 - k) * (-0.1) ** j for j in (1, 2, 3, 4)])
        exact = 2 * min(stats.binom.sf(k - 1, 400, 0.1), stats.binom.cdf(k, 400, 0.1))
        assert math.exp(judge.sample_mean(sample, 0.1, 0.3).log_p) >= 0.95 * exact


HELD = [{"clip": {"of": [{"ar": {"phi": 0.95, "total_sd": 2}}], "low": -1, "high": 3}}]


def test_equal_paths_of_held_values_are_no_fault():
    values = draw(spec_of(HELD, 3000, 12, 1))
    assert len(np.unique(values["x"], axis=0)) < 3000  # some paths rest on the bound all along
    copies = next(row for row in verdict(HELD, values).rows if row.what == "copied paths")
    assert copies.outcome == "untestable"
    assert "can be held" in copies.note


def test_noise_that_is_added_parts_held_values():
    assert plan_of(spec_of(HELD, 5, 12, 1)).series[0].may_stay
    assert not plan_of(spec_of([*HELD, {"white_noise": {"sd": 1}}], 5, 12, 1)).series[0].may_stay
    assert not plan_of(spec_of([{"ar": {"phi": 0.5, "sd": 1}}], 5, 12, 1)).series[0].may_stay
