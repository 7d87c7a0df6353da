"""Partial autocorrelations, half-lives and variances of means against statsmodels, mpmath and rational numbers."""

from __future__ import annotations

from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from statsmodels.tsa.arima_process import ArmaProcess

from tests.theory.brute import coefficients
from tests.theory.specs import series_of, tolerance

PARTIALS = st.lists(st.floats(-0.97, 0.97).map(lambda r: round(r, 3)), min_size=1, max_size=5)
SOME = settings(max_examples=20, deadline=None)


@SOME
@given(st.lists(st.floats(-0.97, 0.97).map(lambda r: round(r, 3)), min_size=1, max_size=24))
def test_an_autoregression_gives_back_the_partials_it_is_made_of(partials):
    """Durbin (1960), forwards here and backwards there; dividing by 1 - r^2 at each order magnifies rounding."""
    x = series_of({"ar": {"phi": list(coefficients(partials)), "sd": 1}})
    kappa = float(np.prod([(1 + abs(r)) / (1 - abs(r)) for r in partials]))
    found = x.partial_autocorrelation(np.arange(len(partials) + 3))
    np.testing.assert_allclose(found, [1.0, *partials, 0.0, 0.0], rtol=0, atol=tolerance(kappa))


@SOME
@given(PARTIALS, PARTIALS)
def test_an_arma_against_statsmodels(partials, others):
    """ArmaProcess.pacf; kappa by Cybenko (1980)."""
    phi, theta = coefficients(partials), coefficients(others)
    x = series_of({"arma": {"phi": list(phi), "theta": list(theta), "sd": 1}})
    expected = ArmaProcess([1, *(-c for c in phi)], [1, *theta]).pacf(12)
    kappa = float(np.prod((1 + np.abs(expected[1:])) / (1 - np.abs(expected[1:])))) * x.condition
    np.testing.assert_allclose(x.partial_autocorrelation(range(12)), expected, rtol=0, atol=tolerance(kappa))


def test_a_sum_of_parts_by_the_normal_equations_in_high_precision():
    """AR(1) plus noise plus an AR(2): the last coefficient of the best predictor from n values, in 40 digits."""
    slow, turning = {"ar": {"phi": 0.9, "sd": 1}}, {"ar": {"phi": [0.5, -0.3], "sd": 2}, "as": "b"}
    x = series_of(slow, turning, {"white_noise": {"sd": 1}})
    with mpmath.workdps(40):
        one = [mpmath.mpf(0.9) ** h / (1 - mpmath.mpf(0.9) ** 2) for h in range(9)]
        a, b = mpmath.mpf(0.5), mpmath.mpf(-0.3)
        other = [4 * (1 - b) / ((1 + b) * ((1 - b) ** 2 - a**2))]  # Box & Jenkins (1970), 3.2.4
        other.append(other[0] * a / (1 - b))
        while len(other) < 9:
            other.append(a * other[-1] + b * other[-2])
        gamma = [u + v + (h == 0) for h, (u, v) in enumerate(zip(one, other, strict=True))]
        for n in range(1, 9):
            toeplitz = mpmath.matrix(n, n)
            for i in range(n):
                for j in range(n):
                    toeplitz[i, j] = gamma[abs(i - j)]
            weights = mpmath.lu_solve(toeplitz, mpmath.matrix(gamma[1 : n + 1]))
            assert float(x.partial_autocorrelation([n])[0]) == pytest.approx(float(weights[n - 1]), rel=1e-10)


@SOME
@given(PARTIALS, PARTIALS)
def test_half_lives_against_statsmodels(partials, others):
    """The last lag with a correlation above 1/2 in size, of 5,000 given by ArmaProcess, where none is later."""
    phi, theta = coefficients([0.9 * r for r in partials]), coefficients(others)
    acf = ArmaProcess([1, *(-c for c in phi)], [1, *theta]).acf(5000)
    x = series_of({"arma": {"phi": list(phi), "theta": list(theta), "sd": 1}})
    sizes = np.sort(np.abs(np.abs(acf[:5000]) - 0.5))
    if sizes[0] > 1e-9:  # else rounding decides
        seen = np.flatnonzero(np.abs(acf) > 0.5)[-1] + 1
        assert x.half_life == seen if seen < 5000 else x.half_life >= seen


def test_half_lives_of_seasons_and_of_what_has_none():
    """A seasonal autoregression of 0.7: 0.7 at lag 168, 0.49 at 336; a walk and a constant have none."""
    season = {"phi": 0.0, "d": 0, "seasonal": {"period": 168, "phi": 0.7}, "sd": 1}
    assert series_of({"arima": season}).half_life == 169
    assert series_of({"white_noise": {"sd": 1}}).half_life == 1
    walk = series_of({"random_walk": {"sd": 1}})
    assert walk.half_life is None and "unit root" in walk.reason("half_life")
    for d in (0.1, 0.4, 0.45):  # by gamma(k) = gamma(k - 1) (k - 1 + d) / (k - d) (Hosking 1981), which falls
        k = np.arange(1.0, 1000.0)
        above = np.count_nonzero(np.cumprod((k - 1 + d) / (k - d)) > 0.5)
        assert series_of({"arfima": {"d": d, "sd": 1}}).half_life == above + 1
    longest = series_of({"arfima": {"d": 0.49, "sd": 1}})
    assert longest.half_life is None and "at lag 32768 the autocorrelation is still 0.7" in longest.reason("half_life")
    level = series_of({"constant": 3})
    assert level.half_life is None and level.reason("half_life") == "the variance is 0"
    assert level.partial_autocorrelation([1]) is None and level.reason("partial_autocorrelation") == "the variance is 0"


def test_the_variance_of_a_mean_in_rational_numbers():
    """1' Gamma 1 / n^2 of an ARMA(1,1) with phi 3/4 and theta 1/2 (Box & Jenkins 1970, 3.4.7)."""
    phi, theta = Fraction(3, 4), Fraction(1, 2)
    gamma = [(1 + theta**2 + 2 * phi * theta) / (1 - phi**2), (1 + phi * theta) * (phi + theta) / (1 - phi**2)]
    while len(gamma) < 40:
        gamma.append(phi * gamma[-1])
    x = series_of({"arma": {"phi": 0.75, "theta": 0.5, "sd": 1}})
    for n in (1, 2, 3, 40):
        exact = sum(gamma[abs(i - j)] for i in range(n) for j in range(n)) / n**2
        assert float(x.variance_of_mean([n])[0]) == pytest.approx(float(exact), rel=1e-13)


def test_the_variance_of_a_mean_of_very_many_steps():
    """AR(1): gamma_0/n ((1+phi)/(1-phi) - 2 phi (1 - phi^n) / (n (1-phi)^2)), in 40 digits; a difference: 2/n^2."""
    x, d = series_of({"ar": {"phi": 0.99, "sd": 1}}), series_of({"difference": [{"white_noise": {"sd": 1}}]})
    for n in (10, 511, 513, 5_000, 10**6, 10**12):
        with mpmath.workdps(40):
            phi = mpmath.mpf(0.99)
            exact = ((1 + phi) / (1 - phi) - 2 * phi * (1 - phi**n) / (n * (1 - phi) ** 2)) / (1 - phi**2) / n
        assert float(x.variance_of_mean([n])[0]) == pytest.approx(float(exact), rel=1e-11)
        assert float(d.variance_of_mean([n])[0]) == pytest.approx(2.0 / n**2, rel=1e-12)


def test_the_variance_of_a_mean_of_what_is_not_stationary():
    """A walk from a known start: sigma^2 (n - 1)(2n - 1)/(6n); an autoregression from a given past, step by step."""
    walk = series_of({"random_walk": {"sd": 2, "start": 5}})
    n = np.array([1, 2, 3, 1000, 10**6])
    np.testing.assert_allclose(walk.variance_of_mean(n), 4 * (n - 1) * (2 * n - 1) / (6.0 * n), rtol=1e-12)
    given_past = series_of({"ar": {"phi": 0.5, "sd": 1, "before": {"x": [3]}}})
    for count in (1, 2, 7):
        weights = [sum(0.5**k for k in range(count - j)) for j in range(count)]  # of the shock of step j in the sum
        assert float(given_past.variance_of_mean([count])[0]) == pytest.approx(sum(w * w for w in weights) / count**2)


def test_the_mean_of_a_lognormal_and_of_a_chain_by_all_pairs():
    """Covariances at all pairs of steps added up: closed forms in Aitchison & Brown (1957) and Feller (1968)."""
    lags = np.abs(np.subtract.outer(np.arange(30), np.arange(30)))
    v = 0.04 / (1 - 0.81)
    x = series_of({"exp": [{"ar": {"phi": 0.9, "sd": 0.2}}]})
    expected = (np.exp(v) * np.expm1(v * 0.9**lags)).mean()
    assert float(x.variance_of_mean([30])[0]) == pytest.approx(expected, rel=1e-12)
    chain = series_of({"flag": {"share": 0.2, "stay": 8}})
    assert float(chain.variance_of_mean([30])[0]) == pytest.approx((0.16 * 0.84375**lags).mean(), rel=1e-12)


def test_squares_of_a_gaussian_and_of_a_garch():
    """rho^2 for Gaussian values; the first of a garch(1,1) as in Bollerslev (1988), J. Time Ser. Anal. 9, 121-131."""
    x = series_of({"ar": {"phi": 0.8, "sd": 1}})
    np.testing.assert_allclose(x.autocorrelation_of_squares([0, 1, 5]), [1.0, 0.64, 0.8**10], rtol=1e-12)
    a, b = 0.1, 0.8
    first = a * (1 - a * b - b * b) / (1 - 2 * a * b - b * b)
    e = series_of({"garch": {"sd": 1, "alpha": a, "beta": b}})
    lags = np.arange(1, 6)
    np.testing.assert_allclose(e.autocorrelation_of_squares(lags), first * (a + b) ** (lags - 1.0), rtol=1e-12)
    walk = series_of({"random_walk": {"sd": 1}})
    assert float(walk.autocorrelation_of_squares([3], 1)[0]) == pytest.approx(1 / 4)  # (1/2)^2, t = 1 and 4
    heavy = series_of({"garch": {"sd": 1, "alpha": 0.4, "beta": 0.55}})
    assert heavy.autocorrelation_of_squares([1]) is None
    assert "infinite fourth moment" in heavy.reason("autocorrelation_of_squares")


def test_one_half_itself_does_not_exceed_one_half():
    """Deviations of a level and of noise alike: the intraclass correlation of the textbook is 1/2 at every lag."""
    level = {"draw": {"normal": {"mean": 0, "sd": 1}}, "over": "path"}
    x = series_of({"white_noise": {"sd": 1}}, {"constant": level})
    assert x.half_life == 1
    turns = [[0, 1, 0], [0, 0, 1], [1, 0, 0]]  # three states in turn: correlations 1, -1/2, -1/2
    turning = series_of({"chain": {"states": ["a", "b", "c"], "transitions": turns}})
    assert turning.half_life is None and turning.reason("half_life").endswith("the autocorrelation is still 1")
    assert turning.stationarity.reasons == ("its joint law is the same at every step",)


def test_wrong_counts_are_refused():
    x = series_of({"white_noise": {"sd": 1}})
    with pytest.raises(ValueError, match=r"expected whole numbers of steps from 1 on, got \[0\]"):
        x.variance_of_mean([0])
    assert x.partial_autocorrelation([30_000]) is not None  # white noise is an autoregression of order 0
    y = series_of({"ma": {"theta": 0.5, "sd": 1}})
    assert y.partial_autocorrelation([30_000]) is None and "up to lag 20000" in y.reason("partial_autocorrelation")
