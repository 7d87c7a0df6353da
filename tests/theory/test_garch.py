"""Garch: published moments, and the recursion of E[A (x) A] as a second derivation at any order."""

from __future__ import annotations

import mpmath as mp
import numpy as np
import pytest
from scipy.special import gamma

from procgen.theory import Garch, SeriesTheory
from procgen.theory.series import CrossTheory
from procgen.theory.verdict import INFINITE, SETTLES, STRICT, WEAK

from .references import EXPONENTIAL, LAPLACE, NORMAL, UNIFORM, student

LAGS = np.arange(6)


def series(axis, alpha, beta=(), omega=0.1, law=NORMAL, key="x.garch", **past):
    return SeriesTheory("x", axis.garch(key, law, omega, alpha, beta, **past))


# alpha, beta, omega, law, variance, kurtosis, first autocorrelations of the squares
PUBLISHED = {
    "arch(1), Engle 1982 (REFERENCES 9.1)": ((0.3,), (), 0.7, NORMAL, 1.0, 3.7397260274, [0.3, 0.09]),
    "arch(1), second (9.1)": ((0.5,), (), 1.0, NORMAL, 2.0, 9.0, [0.5, 0.25]),
    "garch(1,1), Bollerslev 1986 (9.2, 9.3)": ((0.1,), (0.8,), 0.1, NORMAL, 1.0, 3.352941176, [0.14, 0.126, 0.1134]),
    "garch(1,1), second (9.2, 9.3)": ((0.05,), (0.9,), 0.05, NORMAL, 1.0, 3.162162162, [0.0725, 0.068875, 0.06543125]),
    "garch(1,1), t(8) (9.2, 9.3)": ((0.05,), (0.9,), 0.05, student(8), 1.0, 4.943661972, [0.0725, 0.068875]),
    "mark/pound (9.7, 9.8)": ((0.153134,), (0.805974,), 0.0107613, NORMAL, 0.263163944, 7.23645, []),
}


@pytest.mark.parametrize("name", PUBLISHED)
def test_published_moments(axis, name):
    alpha, beta, omega, law, variance, kurtosis, rho = PUBLISHED[name]
    x = series(axis, alpha, beta, omega, law)
    assert x.variance(3) == pytest.approx(variance, rel=1e-8)
    assert x.excess_kurtosis == pytest.approx(kurtosis - 3, rel=3e-6)
    squares = x.autocovariance_of_squares(np.arange(len(rho) + 1))
    np.testing.assert_allclose(squares[1:] / squares[0], rho, rtol=1e-8)
    np.testing.assert_array_equal(x.autocovariance(LAGS)[1:], 0.0)
    assert x.stationarity.verdict == STRICT and not x.gaussian


def test_no_fourth_moment(axis):
    """Hull's index volatility (REFERENCES 9.9): the fourth-moment index is 1.0139, so there is no kurtosis."""
    x = series(axis, (0.13,), (0.86,), 2e-6)
    assert x.variance(0) == pytest.approx(0.0002)
    assert x.excess_kurtosis is None and "fourth moment" in x.reason("excess_kurtosis")
    assert 2 < x.highest_moment < 4


def test_variance_path_to_ten_steps(axis):
    """E h after ten steps from h = .0003 (REFERENCES 9.9): .000290438."""
    x = series(axis, (0.13,), (0.86,), 2e-6, before_variance=(0.0003,))
    first = 2e-6 + 0.99 * 0.0003  # given is the variance of step -1, and its square is taken to be the same
    assert x.variance(0) == pytest.approx(first)
    assert x.variance(9) == pytest.approx(0.000290438, rel=1e-5)
    np.testing.assert_allclose(x.variance([10**4, 10**9]), 0.0002, rtol=1e-9)
    assert x.stationarity.verdict == SETTLES


def test_start_at_the_unconditional_variance_is_weakly_stationary(axis):
    x = series(axis, (0.1,), (0.8,), 0.1, before_variance=(1.0,))
    np.testing.assert_allclose(x.variance(LAGS), 1.0, rtol=1e-12)
    assert x.stationarity.verdict == WEAK


def test_path_of_a_higher_order(axis):
    """E h(t) written out from given variances and shocks, oldest first, orders 2 and 2."""
    alpha, beta, h, e = (0.1, 0.05), (0.3, 0.4), [2.0, 3.0], [1.5, -0.5]
    x = series(axis, alpha, beta, 0.2, before_variance=tuple(h), before_shocks=tuple(e))
    squares, variances = [v * v for v in e], list(h)
    for _ in range(8):
        now = 0.2 + sum(a * squares[-1 - i] for i, a in enumerate(alpha))
        now += sum(b * variances[-1 - j] for j, b in enumerate(beta))
        squares.append(now)
        variances.append(now)
    np.testing.assert_allclose(x.variance(np.arange(8)), variances[2:], rtol=1e-13)
    np.testing.assert_allclose(SeriesTheory("d", x.expression.lag(2)).mean([0, 1, 2]), [1.5, -0.5, 0.0])


def kronecker(alpha, beta, omega, kurtosis):
    """E v, E v v' and Cov(h(t + k), e^2(t)) of v = (h(t), .., h(t - q + 1), e^2(t - 1), .., e^2(t - p + 1)).

    v(t + 1) = c + A(z^2) v(t), so vec E v v' solves a linear system with E[A (x) A] (He & Terasvirta 1999,
    Econometric Theory 15, 824-846; Hamilton 1994, ch. 21, for the companion form).
    """
    p, q = len(alpha), max(len(beta), 1)
    beta = (*beta, *([0.0] * (q - len(beta))))
    n = q + p - 1
    fixed, random = np.zeros((n, n)), np.zeros((n, n))  # A = fixed + z^2 random
    fixed[0, :q] = beta
    fixed[0, q:] = alpha[1:]
    random[0, 0] = alpha[0]
    for i in range(1, q):
        fixed[i, i - 1] = 1.0
    if p > 1:
        random[q, 0] = 1.0
        for i in range(q + 1, n):
            fixed[i, i - 1] = 1.0
    c, a = np.eye(n)[0] * omega, fixed + random
    mean = np.linalg.solve(np.eye(n) - a, c)
    both = np.kron(fixed, fixed) + np.kron(fixed, random) + np.kron(random, fixed) + kurtosis * np.kron(random, random)
    rest = np.kron(c, c) + np.kron(c, a @ mean) + np.kron(a @ mean, c)
    second = np.linalg.solve(np.eye(n * n) - both, rest).reshape(n, n)
    # E[e^2(t) v(t + 1)] = E[z^2 h (c + A v)], then v moves on in the mean
    ahead = c * mean[0] + (fixed + kurtosis * random) @ second[:, 0]
    squares = [kurtosis * second[0, 0] - mean[0] ** 2]
    for _ in range(5):
        squares.append(ahead[0] - mean[0] ** 2)
        ahead = c * mean[0] + a @ ahead
    return mean[0], kurtosis * second[0, 0] / mean[0] ** 2, np.array(squares)


ORDERS = [
    ((0.1,), (0.8,)),
    ((0.1, 0.05), ()),
    ((0.2, 0.1, 0.05), ()),
    ((0.05,), (0.3, 0.5)),
    ((0.1, 0.05), (0.3, 0.4)),
    ((0.02, 0.0, 0.08), (0.5, 0.2)),
]


@pytest.mark.parametrize(("alpha", "beta"), ORDERS)
@pytest.mark.parametrize("law", [NORMAL, student(9), LAPLACE, UNIFORM], ids=lambda law: law.name)
def test_any_order_by_the_vector_recursion(axis, alpha, beta, law):
    x = series(axis, alpha, beta, 0.3, law)
    variance, kurtosis, squares = kronecker(alpha, beta, 0.3, law.excess_kurtosis + 3)
    assert x.variance(0) == pytest.approx(variance, rel=1e-11)
    assert x.excess_kurtosis == pytest.approx(kurtosis - 3, rel=1e-9)
    np.testing.assert_allclose(x.autocovariance_of_squares(LAGS), squares, rtol=1e-9)


def test_hidden_variance(axis):
    """Cov(h, h): the autocovariance of squares from lag 1 on is that of h one step on; E h is the variance."""
    garch = axis.garch("x.garch", NORMAL, 0.1, (0.1,), (0.8,))
    h, x = SeriesTheory("h", garch.hidden("variance")), SeriesTheory("x", garch)
    _, kurtosis, _ = kronecker((0.1,), (0.8,), 0.1, 3.0)
    second = kurtosis / 3.0  # E h^2
    assert h.mean(0) == pytest.approx(1.0)
    np.testing.assert_allclose(h.autocovariance(LAGS), (second - 1) * 0.9**LAGS, rtol=1e-10)
    assert CrossTheory(x, h).covariance(5, 3) == 0.0  # symmetric law: uncorrelated with its own variance
    assert h.stationarity.verdict == STRICT


@pytest.mark.parametrize(("alpha", "beta"), [(0.1, 0.85), (0.4, 0.7), (1.0, 0.0), (0.2, 0.8)])
def test_exponent_by_high_precision(alpha, beta):
    """E log(beta + alpha z^2) (Nelson 1990) by mpmath, split at 0."""

    def density(z):
        return mp.log(beta + alpha * z * z) * mp.npdf(z)

    exact = 2 * mp.quad(density, [0, 0.1, 1, 3, 12])
    assert Garch(NORMAL, 1.0, (alpha,), (beta,)).exponent == pytest.approx(float(exact), abs=1e-8)


def test_integrated_garch_is_strictly_stationary_without_a_variance(axis):
    """Nelson (1990): alpha + beta = 1 is strictly stationary, with infinite variance."""
    x = series(axis, (0.2,), (0.8,))
    assert x.variance(0) is None and "infinite variance" in x.reason("variance")
    assert x.mean(0) == 0.0
    assert x.stationarity.verdict == INFINITE and "strictly stationary" in x.stationarity.reasons[0]
    assert x.highest_moment == pytest.approx(2.0, rel=1e-8)


@pytest.mark.parametrize("order", [1.0, 2.0, 3.0])
def test_tail_index_of_arch(order):
    """E (alpha z^2)^s = 1 where (2 alpha)^s Gamma(s + 1/2) = sqrt(pi) (Embrechts, Klueppelberg & Mikosch 1997, 8.4)."""
    alpha = (np.sqrt(np.pi) / gamma(order + 0.5)) ** (1 / order) / 2
    assert Garch(NORMAL, 1.0, (alpha,)).highest_moment == pytest.approx(2 * order, rel=1e-7)


def test_tail_index_at_the_fourth_moment():
    """(a + b)^2 + 2 a^2 = 1 is where the fourth moment is lost (REFERENCES 9.2)."""
    a, b = 0.2, np.sqrt(1 - 2 * 0.04) - 0.2
    assert Garch(NORMAL, 1.0, (a,), (b,)).highest_moment == pytest.approx(4.0, rel=1e-7)
    assert Garch(student(3.5), 1.0, (0.05,), (0.5,)).highest_moment <= 3.5


def test_linear_filters_of_a_garch_are_filters_of_white_noise(axis):
    garch = axis.garch("x.garch", NORMAL, 0.1, (0.1,), (0.8,))
    x = SeriesTheory("x", axis.filtered(garch, (0.5,), (0.3,)))
    white = SeriesTheory("y", axis.filtered(axis.source("y.noise", NORMAL, 1.0), (0.5,), (0.3,)))
    np.testing.assert_allclose(x.autocovariance(LAGS), white.autocovariance(LAGS), rtol=1e-13)
    assert not x.gaussian and x.stationarity.verdict == STRICT
    moving = SeriesTheory("m", axis.filtered(garch, (), (0.5,)))
    e4, rho = 3.352941176470588, 0.14 * 2.352941176470588 + 1.0  # E e^4 and E e_t^2 e_{t-1}^2
    fourth = e4 * (1 + 0.5**4) + 6 * 0.25 * rho
    assert moving.excess_kurtosis == pytest.approx(fourth / 1.25**2 - 3, rel=1e-10)


@pytest.mark.parametrize("law", [NORMAL, student(9)], ids=lambda law: law.name)
def test_kurtosis_of_an_autoregression_of_a_garch(axis, law):
    """E x^4 = phi^4 E x^4 + 6 phi^2 m + E e^4 with m = E x(t-1)^2 h(t) from one more recursion: own derivation."""
    phi, omega, a, b, kz = 0.7, 0.1, 0.1, 0.8, law.excess_kurtosis + 3
    h2 = (1 - 0.81) / (1 - 0.81 - (kz - 1) * a * a)
    m = (omega / (1 - phi**2) + (a * kz + b) * h2) / (1 - (a + b) * phi**2)
    fourth = (6 * phi**2 * m + kz * h2) / (1 - phi**4)
    x = SeriesTheory("x", axis.filtered(axis.garch("x.ar", law, omega, (a,), (b,)), (phi,)))
    assert x.excess_kurtosis == pytest.approx(fourth * (1 - phi**2) ** 2 - 3, rel=1e-8)


def test_kurtosis_of_a_walk_of_a_garch(axis):
    """E of (e_1 + .. + e_n)^4 = n E e^4 + 3 sum over i != j of E e_i^2 e_j^2."""
    x = SeriesTheory("x", axis.walk(axis.garch("x.walk", NORMAL, 0.1, (0.1,), (0.8,)), 0.0, 0.0))
    _, kurtosis, squares = kronecker((0.1,), (0.8,), 0.1, 3.0)
    n = 5
    fourth = n * kurtosis + 3 * sum(1 + squares[abs(i - j)] for i in range(n) for j in range(n) if i != j)
    assert x.excess_kurtosis_at(n) == pytest.approx(fourth / n**2 - 3, rel=1e-10)


def test_filter_from_a_garch_with_a_given_past(axis):
    """Var x(t) = sum of psi_j^2 E h(t - j), written out."""
    garch = axis.garch("x.arma", NORMAL, 0.1, (0.1,), (0.8,), before_variance=(4.0,), before_shocks=(2.0,))
    x = SeriesTheory("x", axis.filtered(garch, (0.5,), (), before_x=(1.0,), before_shocks=()))
    h = [0.1 + 0.4 + 3.2]
    for _ in range(9):
        h.append(0.1 + 0.9 * h[-1])
    exact = [sum(0.25 ** (t - u) * h[u] for u in range(t + 1)) for t in range(10)]
    np.testing.assert_allclose(x.variance(np.arange(10)), exact, rtol=1e-13)
    np.testing.assert_allclose(x.covariance(6, 4), 0.25 * exact[4], rtol=1e-13)
    assert x.variance(10**8) == pytest.approx(1 / 0.75, rel=1e-10)


def test_correlated_garch_is_unknown_and_independent_garch_is_not():
    from procgen.theory import Axis

    axis = Axis(100, {frozenset(("a.garch", "b.garch")): 0.5})
    a, b, c = (series(axis, (0.1,), (0.8,), key=f"{n}.garch") for n in "abc")
    assert CrossTheory(a, c).covariance(3, 3) == 0.0
    cross = CrossTheory(a, b)
    assert cross.covariance(3, 3) is None and "conditionally heteroskedastic" in cross.reason()
    total = SeriesTheory("t", a.expression + b.expression)
    assert total.variance(3) is None and "heteroskedastic" in total.reason("variance")


def test_skewed_garch_is_not_uncorrelated_with_its_variance(axis):
    garch = axis.garch("x.garch", EXPONENTIAL, 0.1, (0.1,), (0.5,))
    cross = CrossTheory(SeriesTheory("x", garch), SeriesTheory("h", garch.hidden("variance")))
    assert cross.covariance(1, 3) is None and "skewed" in cross.reason()


def test_a_garch_that_grows_has_variances_but_no_limit_of_them(axis):
    """E h(t) written out from 2 on: omega + 1.02 E h(t - 1); what speaks of ever is unknown."""
    x = series(axis, (0.15,), (0.87,), 0.3, before_variance=(2.0,))
    path = [0.3 + 1.02 * 2.0]
    for _ in range(20):
        path.append(0.3 + 1.02 * path[-1])
    np.testing.assert_allclose(x.variance(np.arange(21)), path, rtol=1e-13)
    assert x.covariance(7, 3) == 0.0 and x.forecast_variance([1, 5]) is None
    assert "infinite variance" in x.reason("forecast_variance")
