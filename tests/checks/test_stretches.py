"""Sums of shocks over stretches of steps: against NumPy's sums and SciPy's F law, however cut, and saboteurs."""

import math

import numpy as np
import pytest
from scipy import stats

from procgen.checks import judge
from procgen.checks.stretches import LENGTHS, StretchLane, StretchSums
from tests.studies import departures
from tests.studies.departures import Departure

NAMES = ("shocks: variance of sums", "shocks: autocorrelation")


def summed(g, tiles, first=0):
    sums, lane, at = StretchSums(), StretchLane(g.shape[1]), 0
    for size in tiles:
        sums.absorb(g[at : at + size], first + at, lane)
        at += size
    sums.absorb(g[at:], first + at, lane)
    sums.finish(lane)
    return sums


def by_hand(g, first, length):
    """Number and sum of squared sums of the whole stretches that begin at multiples of their length."""
    starts = range(-(-first // length) * length - first, len(g) - length + 1, length)
    sums = np.array([g[t : t + length].sum(axis=0) for t in starts]).ravel()
    return int(np.isfinite(sums).sum()), float(np.nansum(sums**2))


@pytest.mark.parametrize("first", [0, 5, 64, 200])
@pytest.mark.parametrize("paths", [1, 16, 33])
def test_stretches_are_those_of_numpy(first, paths):
    g = np.random.default_rng(first + paths).standard_normal((1100, paths))
    g[400, 0] = np.nan
    for (length, count, total), wanted in zip(summed(g, (), first).ratios(), LENGTHS, strict=True):
        assert length == wanted
        assert (count, total) == (by_hand(g, first, length)[0], pytest.approx(by_hand(g, first, length)[1] / length))


def test_how_steps_are_cut_does_not_show_in_a_bit():
    g = np.random.default_rng(1).standard_normal((1100, 20))
    whole = summed(g, ()).sums
    for tiles in ((64,) * 10, (3, 200, 61, 500), (1099,)):
        np.testing.assert_array_equal(summed(g, tiles).sums, whole)


@pytest.mark.parametrize(("m", "n", "f"), [(12, 180, 2.9), (12, 180, 0.1), (2, 510, 9.0), (62_000, 900_000, 0.98)])
def test_the_law_is_fishers(m, n, f):
    expected = 2 * min(stats.f.sf(f, m, n), stats.f.cdf(f, m, n))
    assert judge.ratio(f * m, m, float(n), n).log_p == pytest.approx(math.log(expected), abs=1e-8)


def test_another_spread_is_not_told_as_memory():
    """All shocks 10 % too wide: the ratio does not move."""
    noise = [{"white_noise": {"sd": 1}}]
    found = departures.planted(Departure("", noise, [{"white_noise": {"sd": 1.1}}]), 3, paths=400, steps=300)
    rows = [row for row in found.rows if row.what == "shocks: variance of sums"]
    assert [row.probe for row in rows if row.outcome == "departs"] == []
    assert len(rows) == 3


def test_a_slow_sway_is_found_more_sharply_than_by_any_lag():
    """0.36 % of the variance sways with φ 0.99: the variance of sums over 256 steps is 1.48, by 19 standard errors."""
    noise = [{"white_noise": {"sd": 1}}]
    slow = [{"ar": {"phi": 0.99, "total_sd": 0.06}}, {"white_noise": {"sd": (1 - 0.06**2) ** 0.5}}]
    found = departures.planted(Departure("", noise, slow), 4, paths=400, steps=2048)
    sharpest = {what: min(row.log_p for row in found.rows if row.what == what) for what in NAMES}
    assert sharpest["shocks: variance of sums"] < 2 * sharpest["shocks: autocorrelation"]
    assert "shocks: variance of sums" in {row.what for row in found.rows if row.outcome == "departs"}


def test_the_spread_of_a_walk_inside_a_sum_is_found():
    """sd 3 % high beside an autoregression: 99 of 100 at 2,000 × 500 (departures.py); here 6 % at half the paths.

    The variance ratio at 16 steps is then above the point by more than 5 standard errors: missed below 1e-6.
    """
    drawn = [{"random_walk": {"sd": 0.3 * 1.06}}, departures.SUM[1]]
    found = departures.planted(Departure("", departures.SUM, drawn), 5, paths=1000, steps=500)
    assert "shocks: variance of sums" in {row.what for row in found.rows if row.outcome == "departs"}
