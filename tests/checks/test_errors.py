"""Prediction errors of linear series that are not Gaussian: calibrated over paths, and sharp."""

import math

import numpy as np
import pytest
from scipy import stats

from procgen.checks.errors import ErrorLane, ErrorSums


def summed(z, tiles=(1000,)):
    sums, lane, at = ErrorSums(), ErrorLane(z.shape[1]), 0
    while at < len(z):
        size = tiles[at % len(tiles)]
        sums.absorb(z[at : at + size], lane)
        at += size
    sums.finish(lane)
    return sums


def checks_of(sums, highest=9.0):
    return {f"{c.what} {c.probe}": c for c in sums.checks("x", highest)}


def white_but_dependent(rng, steps, paths):
    """Arch(1) shocks of unit variance: uncorrelated, not independent, heavier tails than normal ones."""
    z, out = rng.standard_normal((steps + 50, paths)), np.zeros((steps + 50, paths))
    for t in range(1, steps + 50):
        out[t] = z[t] * np.sqrt(0.8 + 0.2 * out[t - 1] ** 2)
    return out[50:]


def test_uncorrelated_errors_are_not_flagged_more_often_than_said():
    # 200 draws of 220 paths: counts of p below 0.05 may not be above the level's but for a chance of 1e-8.
    rng, found = np.random.default_rng(1), []
    for _ in range(200):
        found.append([c.log_p for c in checks_of(summed(white_but_dependent(rng, 60, 220))).values()])
    for column in np.array(found).T:
        assert np.count_nonzero(column <= math.log(0.05)) <= stats.binom.isf(1e-8, 200, 0.05)


def test_wrong_errors_are_found():
    rng = np.random.default_rng(2)
    z = white_but_dependent(rng, 300, 1000)
    for name, wrong in {
        "prediction errors: mean all steps": z + 0.02,
        "prediction errors: variance all steps": z * 1.02,
        "prediction errors: autocorrelation lag 2": z + 0.03 * np.roll(z, 2, axis=0),
        "prediction errors: neighbouring paths pairs": z + 0.2 * rng.standard_normal((300, 1)),
    }.items():
        assert checks_of(summed(wrong))[name].log_p < math.log(1e-6), name


def test_tiles_and_merging_do_not_matter():
    z = white_but_dependent(np.random.default_rng(3), 90, 240)
    whole, tiled = checks_of(summed(z)), checks_of(summed(z, tiles=(7, 40, 3)))
    left, right = summed(z[:, :100]), summed(z[:, 100:])
    left.merge(right)
    for name, check in whole.items():
        assert tiled[name].log_p == pytest.approx(check.log_p, rel=1e-9)
        assert checks_of(left)[name].log_p == pytest.approx(check.log_p, rel=1e-9)


def test_few_paths_and_missing_moments_are_said():
    z = white_but_dependent(np.random.default_rng(4), 50, 150)
    assert {c.outcome for c in summed(z[:, :60]).checks("x", 9.0)} == {"reported"}
    heavy = checks_of(summed(z), highest=4.0)
    assert heavy["prediction errors: mean all steps"].outcome == ""
    assert heavy["prediction errors: variance all steps"].outcome == "untestable"
