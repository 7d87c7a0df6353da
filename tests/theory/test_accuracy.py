"""Relative error at most max(1e-9, 100 eps kappa), for drawn stable models, long lags, and near unit roots."""

from __future__ import annotations

import time

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from statsmodels.tsa.arima_process import ArmaProcess

from procgen.theory import SeriesTheory, Unknown
from procgen.theory.arma import cross_covariance

from .brute import coefficients
from .references import NORMAL

EPS = np.finfo(float).eps
near = st.floats(-0.99999, 0.99999)
models = st.tuples(st.lists(near, min_size=1, max_size=6), st.lists(st.floats(-2, 2), max_size=3))


def exact_autocovariance(phi, theta, lags):
    """Yule-Walker equations of w = e / phi(B) in 60 digits (Brockwell & Davis 1991, sec. 3.3), then delays of w."""
    p, q = len(phi), len(theta)
    with mp.workdps(60):
        a = mp.zeros(p + 1)
        for k in range(p + 1):
            a[k, k] += 1
            for i in range(1, p + 1):
                a[k, abs(k - i)] -= mp.mpf(phi[i - 1])
        gamma = list(mp.lu_solve(a, mp.matrix([1] + [0] * p)))
        while len(gamma) <= lags + q:
            gamma.append(sum(mp.mpf(phi[i]) * gamma[-1 - i] for i in range(p)))
        b = [mp.mpf(1), *map(mp.mpf, theta)]
        return [
            sum(b[i] * b[j] * gamma[abs(h + j - i)] for i in range(q + 1) for j in range(q + 1))
            for h in range(lags + 1)
        ]


@settings(max_examples=60, deadline=None, derandomize=True)
@given(models)
def test_drawn_stable_models(axis_free_model):
    kappa, theta = axis_free_model
    phi = coefficients(kappa)
    x = series(phi, tuple(theta))
    exact = exact_autocovariance(phi, theta, 25)
    allowed = max(1e-9, 100 * EPS * x.condition) * float(exact[0])
    mine = x.autocovariance(np.arange(26))
    assert max(abs(float(mp.mpf(float(v)) - e)) for v, e in zip(mine, exact, strict=True)) <= allowed


def series(phi, theta=()):
    from procgen.theory import Axis

    axis = Axis()
    return SeriesTheory("x", axis.filtered(axis.source("x.arma", NORMAL, 1.0), phi, theta))


@pytest.mark.parametrize(
    "roots", [[0.9999, 0.9999], [0.999999, 0.5], [0.99999] * 3, [0.999, 0.99, 0.9, -0.9, -0.99, 0.8]]
)
def test_near_unit_roots_keep_nine_digits(roots):
    """Condition numbers up to 1e17: the small system is solved in rational numbers, and the recursion holds."""
    phi = tuple(-np.poly(roots)[1:])
    x = series(phi)
    assert x.condition > 1e6
    exact = exact_autocovariance(phi, (), 100)
    np.testing.assert_allclose(x.autocovariance(np.arange(101)), [float(e) for e in exact], rtol=1e-9)


def test_too_near_a_unit_root_is_unknown_not_wrong():
    phi = tuple(-np.poly([0.95] * 16)[1:])
    with pytest.raises(Unknown, match="too near to a unit root"):
        cross_covariance(phi, phi)


def test_statsmodels_agrees():
    """ArmaProcess.acovf of statsmodels, an independent implementation (Brockwell & Davis 1991, sec. 3.3)."""
    phi, theta = (0.5, -0.3, 0.2), (0.4, -0.7)
    reference = ArmaProcess(np.r_[1, -np.array(phi)], np.r_[1, theta]).acovf(30)
    np.testing.assert_allclose(series(phi, theta).autocovariance(np.arange(30)), reference, rtol=0, atol=1e-12)


def test_cross_autocovariances_of_two_autoregressions():
    """Finite sums of impulse responses, at lags of both signs and unequal orders."""
    first, second = coefficients((0.5, -0.3, 0.4)), coefficients((0.8, 0.2))
    psi = [ArmaProcess(np.r_[1, -np.array(phi)], [1]).impulse_response(600) for phi in (first, second)]
    for h in range(-8, 9):
        exact = sum(psi[0][j + h] * psi[1][j] for j in range(max(0, -h), 500))
        assert cross_covariance(first, second)(np.array(h)) == pytest.approx(exact, rel=1e-12, abs=1e-14)


def test_lag_1e9_near_a_unit_root():
    """phi^h / (1 - phi^2) in 60 digits, past the longest recursion."""
    phi, h = 1 - 1e-8, 10**9
    with mp.workdps(60):
        exact = float(mp.mpf(phi) ** h / (1 - mp.mpf(phi) ** 2))
    assert cross_covariance((phi,), (phi,))(np.array(h)) == pytest.approx(exact, rel=1e-6)


def test_weekly_autoregression_at_100_000_steps_is_quick():
    """AR(168), 100,000 lags: 0.03 s seen; the bound only catches a method of another order."""
    phi = np.zeros(168)
    phi[[0, 23, 167]] = 0.3, 0.2, 0.45
    x = series(tuple(phi))
    begin = time.process_time()
    gamma = x.autocovariance(np.arange(100_000))
    assert time.process_time() - begin < 2.0
    again = phi @ np.stack([gamma[168 - i : -i] for i in range(1, 169)])
    np.testing.assert_allclose(gamma[168:], again, rtol=0, atol=1e-12)  # the Yule-Walker equations hold
