"""Linear series: published autocovariances, and a second derivation by finite sums of filters."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from procgen.theory import SeriesTheory
from procgen.theory.verdict import GROWS, MEAN, SETTLES, STRICT

from .references import NORMAL

LAGS = np.arange(9)


def arma(axis, phi=(), theta=(), sd=1.0, key="x.arma"):
    return SeriesTheory("x", axis.filtered(axis.source(key, NORMAL, sd), phi, theta))


# (phi, theta, g0 or None, autocorrelations from lag 1), all with unit shocks
PUBLISHED = {
    "AR(1), Box & Jenkins ch. 3 (REFERENCES 5.1)": ((0.8,), (), 2.7777777778, [0.8, 0.64, 0.512]),
    "AR(2), Box & Jenkins 3.2.4 (5.3)": ((0.75, -0.5), (), 1.7777777778, [0.5, -0.125, -0.34375, -0.1953125]),
    "AR(2), Box & Jenkins exercise 3.6 (5.4)": (
        (1.0, -0.5),
        (),
        2.4,
        [2 / 3, 1 / 6, -1 / 6, -1 / 4, -1 / 6, -1 / 24, 1 / 24, 1 / 16],
    ),
    "AR(2), sunspots (5.8)": ((1.318, -0.634), (), 4.7859431005, [0.80660955, 0.42911138, 0.05417835]),
    "MA(1), Box & Jenkins 3.3.3 (5.9)": ((), (0.5,), 1.25, [0.4, 0.0]),
    "MA(2) (5.10)": ((), (0.4, 0.2), 1.2, [0.48 / 1.2, 0.2 / 1.2, 0.0]),
    "ARMA(1,1), Box & Jenkins 3.4.3 (5.11)": ((0.8,), (0.4,), 5.0, [0.88, 0.704]),
    "ARMA(1,1), second row (5.11)": ((0.5,), (0.4,), 2.08, [0.692307692, 0.346153846]),
    "ARMA(2,1), Brockwell & Davis 3.3.2 (5.12)": ((1.0, -0.25), (1.0,), 32 / 3, [0.875, 0.625, 0.40625, 0.25]),
}


@pytest.mark.parametrize("name", PUBLISHED)
def test_published_autocovariances(axis, name):
    phi, theta, g0, rho = PUBLISHED[name]
    x = arma(axis, phi, theta)
    np.testing.assert_allclose(x.variance(0), g0, rtol=1e-9)
    np.testing.assert_allclose(x.autocorrelation(np.arange(1, len(rho) + 1)), rho, rtol=0, atol=6e-9)


def test_brockwell_davis_arma23(axis):
    """Brockwell & Davis (1991), example 5.3.4: g 0..2 to five decimals (REFERENCES 5.13)."""
    x = arma(axis, (1.0, -0.24), (0.4, 0.2, 0.1))
    np.testing.assert_allclose(x.autocovariance([0, 1, 2]), [7.17133, 6.44139, 5.06027], atol=6e-6)


def test_airline_moving_average(axis):
    """Box & Jenkins (1970) ch. 9, (1 - .4B)(1 - .6B^12): rho at 1, 11, 12, 13 (REFERENCES 6.1)."""
    theta = np.zeros(13)
    theta[0], theta[11], theta[12] = -0.4, -0.6, 0.24
    x = arma(axis, (), tuple(theta))
    assert x.variance(0) == pytest.approx(1.5776, rel=1e-12)
    expected = np.zeros(21)
    expected[[0, 1, 11, 12, 13]] = [1, -0.3448275862, 0.1521298174, -0.4411764706, 0.1521298174]
    np.testing.assert_allclose(x.autocorrelation(np.arange(21)), expected, atol=1e-10)


def test_exact_fractions_of_an_arma(axis):
    """Autocovariances as sums of 400 exact fractions of the moving-average weights; what is left out is below 1e-60."""
    phi, theta = (Fraction(1, 2), Fraction(-1, 4)), (Fraction(1, 3), Fraction(1, 5))
    psi = [Fraction(1)]
    for j in range(1, 400):
        ahead = sum(phi[i] * psi[j - 1 - i] for i in range(2) if j > i)
        psi.append(ahead + (theta[j - 1] if j <= 2 else 0))
    exact = [float(sum(psi[j] * psi[j + h] for j in range(400 - h))) for h in range(9)]
    x = arma(axis, tuple(map(float, phi)), tuple(map(float, theta)))
    np.testing.assert_allclose(x.autocovariance(LAGS), exact, rtol=1e-13)
    assert x.stationarity.verdict == STRICT and x.gaussian


def test_random_walk(axis):
    """Variance t s2, covariance min(s, t) s2, correlation sqrt(s/t) (Box & Jenkins ch. 4; REFERENCES 4.1)."""
    x = SeriesTheory("x", axis.walk(axis.source("x.walk", NORMAL, 1.5), 0.25, 10.0))
    t = np.array([0, 1, 7, 10**9])
    np.testing.assert_allclose(x.mean(t), 10.0 + 0.25 * t, rtol=1e-15)
    np.testing.assert_allclose(x.variance(t), 2.25 * t, rtol=1e-14)
    np.testing.assert_allclose(x.covariance(100, [5, 100, 400]), 2.25 * np.array([5, 100, 100]), rtol=1e-14)
    np.testing.assert_allclose(x.autocorrelation([300], 100), np.sqrt(100 / 400), rtol=1e-14)
    assert x.stationarity.verdict == GROWS


def test_difference_of_a_walk_is_its_increment(axis):
    noise = axis.source("x.walk", NORMAL, 1.5)
    walk = axis.walk(noise, 0.25, 10.0)
    increment = walk.difference()
    assert increment.linear == noise.linear and increment.mean_path.value == 0.25
    assert SeriesTheory("d", increment).stationarity.verdict == STRICT


def test_what_cancels_leaves_nothing(axis):
    walk = axis.walk(axis.source("x.walk", NORMAL, 1.5), 0.0, 1.0)
    nothing = SeriesTheory("0", walk + walk * -1.0)
    np.testing.assert_array_equal(nothing.variance(np.arange(5)), 0.0)
    assert nothing.stationarity.verdict == STRICT


def test_trend_and_given_start_have_their_verdicts(axis):
    noise = axis.source("x.ar", NORMAL, 1.0)
    trend = axis.known(lambda steps: 5.0 + 0.5 * steps)
    assert SeriesTheory("x", trend + noise).stationarity.verdict == MEAN
    started = axis.filtered(axis.source("y.ar", NORMAL, 1.0), (0.5,), (), before_x=(4.0,))
    y = SeriesTheory("y", started)
    assert y.stationarity.verdict == SETTLES
    np.testing.assert_allclose(y.mean([0, 1, 2]), [2.0, 1.0, 0.5])
    np.testing.assert_allclose(y.variance([0, 1, 2]), [1.0, 1.25, 1.3125])
