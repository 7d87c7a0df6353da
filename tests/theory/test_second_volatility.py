"""Conditional variances over drawn parameters: Kronecker systems and closed products in 30 digits, and arch.

The error allowed is max(1e-9, 100 eps kappa), kappa being E h^2 / (E h)^2, which grows without bound towards where
the fourth moment ends.
"""

from __future__ import annotations

import math
from itertools import pairwise

import mpmath as mp
import numpy as np
import pytest
from arch import arch_model
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.stats import t as student_t

from procgen.chance.laws import LAWS as LAWS_OF_OURS
from procgen.theory import Axis, SeriesTheory, theory

from ..terms.helpers import graph_of

DERIVED = {
    "garch": "test_garch_of_any_order_up_to_where_its_fourth_moment_ends",
    "arch": "test_variances_from_a_given_past_are_the_forecasts_of_arch",
    "gjr_garch": "test_threshold_garch_of_symmetric_laws",
    "egarch": "test_exponential_garch_by_products",
    "stochastic_volatility": "test_stochastic_volatility_by_one_gaussian_exponent",
}
EPS = np.finfo(float).eps
FAR = 10_000
LAGS = np.array([0, 1, 2, 3, 40, FAR])
weights = st.floats(0.01, 0.6)
models = st.tuples(st.lists(weights, min_size=1, max_size=2), st.lists(weights, max_size=2), st.floats(0.3, 0.9999))
LAWS = {"normal": 3, "laplace": 6, "{student_t: {df: 9}}": mp.mpf(3) + mp.mpf(6) / 5, "uniform": mp.mpf(9) / 5}


def series_of(term):
    graph = graph_of(f"  x: {{{term}}}")
    return theory(graph.spec, graph)["x"]


class Moments:
    """E h, E e^4 and Cov(e^2(t + k), e^2(t)) from E[A (x) A] (He & Terasvirta 1999; Hamilton 1994, ch. 21, for A)."""

    def __init__(self, omega, alpha, beta, kurtosis):
        p, q = len(alpha), max(len(beta), 1)
        n = p + q - 1
        fixed, random = mp.zeros(n), mp.zeros(n)
        for j, b in enumerate(beta):
            fixed[0, j] = mp.mpf(b)
        for i, a in enumerate(alpha[1:]):
            fixed[0, q + i] = mp.mpf(a)
        random[0, 0] = mp.mpf(alpha[0])
        for i in [*range(1, q), *range(q + 1, n)]:
            fixed[i, i - 1] = 1
        if p > 1:
            random[q, 0] = 1
        self.mean, self.start = fixed + random, mp.zeros(n, 1)
        self.start[0] = mp.mpf(omega)
        one = mp.eye(n)
        self.level = mp.lu_solve(one - self.mean, self.start)
        whole = mp.eye(n * n) - kron(self.mean, self.mean) - (kurtosis - 1) * kron(random, random)
        known = self.start * self.start.T + self.start * (self.mean * self.level).T
        known += self.mean * self.level * self.start.T
        second = mp.lu_solve(whole, mp.matrix([known[i, j] for i in range(n) for j in range(n)]))
        self.square = second[0]  # E h^2
        self.fourth = kurtosis * second[0]
        lead = mp.matrix([second[i * n] for i in range(n)])  # E v h
        self.ahead = self.start * self.level[0] + (fixed + kurtosis * random) * lead

    def squares(self, lags):
        out = []
        for k in lags:
            if k == 0:
                out.append(self.fourth - self.level[0] ** 2)
                continue
            power = self.mean ** (int(k) - 1)  # E v after a square, less its mean, forgets by the mean of A
            out.append((power * (self.ahead - self.level * self.level[0]))[0])
        return out


def kron(a, b):
    n, m = a.rows, b.rows
    out = mp.zeros(n * m)
    for i in range(n * m):
        for j in range(n * m):
            out[i, j] = a[i // m, j // m] * b[i % m, j % m]
    return out


@settings(max_examples=10, deadline=None, derandomize=True)
@given(models, st.sampled_from(sorted(LAWS)))
def test_garch_of_any_order_up_to_where_its_fourth_moment_ends(model, law):
    alpha, beta, total = model
    size = (sum(alpha) + sum(beta)) / total
    alpha, beta = [a / size for a in alpha], [b / size for b in beta]
    x = series_of(f"garch: {{omega: 0.3, alpha: {alpha}, beta: {beta or [0.0]}, law: {law}}}")
    with mp.workdps(30):
        exact = Moments(0.3, alpha, beta, LAWS[law])
        kappa = float(abs(exact.square) / exact.level[0] ** 2)
        assert x.variance(3) == pytest.approx(float(exact.level[0]), rel=max(1e-9, 100 * EPS / (1 - total)))
        kurtosis = exact.fourth / exact.level[0] ** 2 - 3
        squares = exact.squares(LAGS)
    if x.excess_kurtosis is None:
        assert x.highest_moment <= 4.0
        return
    allowed = max(1e-9, 100 * EPS * kappa)
    assert x.highest_moment > 4.0
    assert x.excess_kurtosis == pytest.approx(float(kurtosis), rel=allowed, abs=allowed)
    found = x.autocovariance_of_squares(LAGS)
    np.testing.assert_allclose(found, [float(v) for v in squares], rtol=10 * allowed, atol=1e-12 * float(squares[0]))
    np.testing.assert_array_equal(x.autocovariance(LAGS)[1:], 0.0)


def test_the_condition_number_is_told_near_the_end_of_a_moment():
    """Of the variance and of the fourth moment of order (1,1), from the exact values of the coefficients."""
    axis, normal = Axis(), LAWS_OF_OURS["normal"]()
    near = SeriesTheory("x", axis.garch("x.garch", normal, 1.0, (0.1,), (0.8999999,)))
    beta = float(np.sqrt(1 - 2 * 0.04 - 1e-7)) - 0.2
    fourth = SeriesTheory("y", axis.garch("y.garch", normal, 1.0, (0.2,), (beta,)))
    far = SeriesTheory("z", axis.gjr_garch("z.gjr_garch", normal, 1.0, 0.05, 0.1, 0.7))
    with mp.workdps(40):
        error = abs(mp.mpf(float(near.variance(0))) * (1 - mp.mpf(0.1) - mp.mpf(0.8999999)) - 1)
        a, b = mp.mpf(0.2), mp.mpf(beta)
        kurtosis = 3 * (1 - (a + b) ** 2) / (1 - (a + b) ** 2 - 2 * a**2)  # Bollerslev (1986)
        off = abs(mp.mpf(fourth.excess_kurtosis + 3) / kurtosis - 1)
    assert error <= 100 * EPS * near.condition and off <= 100 * EPS * fourth.condition
    assert near.as_dict([0], 2)["condition"] > 9e6 and fourth.as_dict([0], 2)["condition"] > 5e5
    assert "condition" not in far.as_dict([0], 2) and far.condition < 50


@settings(max_examples=12, deadline=None, derandomize=True)
@given(st.floats(0.0, 0.3), st.floats(-0.2, 0.3), st.floats(0.0, 0.95), st.sampled_from(sorted(LAWS)))
def test_threshold_garch_of_symmetric_laws(alpha, gamma, beta, law):
    """E c and E c^2 by halves: c is beta + alpha z^2 or beta + (alpha + gamma) z^2, either with probability 1/2."""
    assume(alpha + gamma >= 0.0)
    with mp.workdps(30):
        k, sides = LAWS[law], (mp.mpf(alpha), mp.mpf(alpha) + mp.mpf(gamma))
        first = mp.fsum(beta + a for a in sides) / 2
        second = mp.fsum(mp.mpf(beta) ** 2 + 2 * a * beta + k * a * a for a in sides) / 2
        led = mp.fsum(beta + k * a for a in sides) / 2
        assume(first < 0.999 and abs(second - 1) > 1e-6)
        mean = 1 / (1 - first)
        square = (1 + 2 * first * mean) / (1 - second)
        squares = [k * square - mean**2] + [
            (mean + led * square - mean**2) * first ** (int(lag) - 1) for lag in LAGS[1:]
        ]
    x = series_of(f"gjr_garch: {{omega: 1, alpha: {alpha}, gamma: {gamma}, beta: {beta}, law: {law}}}")
    assert x.variance(3) == pytest.approx(float(mean), rel=1e-9)
    if second >= 1:
        assert x.excess_kurtosis is None and x.highest_moment <= 4.0
        return
    allowed = max(1e-9, 100 * EPS / float(1 - second))
    assert x.excess_kurtosis == pytest.approx(float(k * square / mean**2 - 3), rel=allowed, abs=allowed)
    found = x.autocovariance_of_squares(LAGS)
    np.testing.assert_allclose(found, [float(v) for v in squares], rtol=10 * allowed, atol=1e-12 * float(squares[0]))


def grown(q, alpha, gamma, power=0):
    """E z^power exp(q (alpha (abs(z) - sqrt(2/pi)) + gamma z)) of a normal z, power 0 or 2, in closed form."""
    total = mp.mpf(0)
    for c in (q * (alpha + gamma), q * (alpha - gamma)):
        half = mp.exp(c * c / 2) * mp.ncdf(c)
        total += half if power == 0 else (1 + c * c) * half + c / mp.sqrt(2 * mp.pi)
    return total * mp.exp(-q * alpha * mp.sqrt(2 / mp.pi))


@settings(max_examples=8, deadline=None, derandomize=True)
@given(st.floats(-0.2, 0.4), st.floats(-0.3, 0.3), st.floats(0.0, 0.97))
def test_exponential_garch_by_products(alpha, gamma, beta):
    """Nelson's (1991) products over the past, each factor in closed form, until what is left is below 1e-25."""
    x = series_of(f"egarch: {{scale: 1.3, alpha: {alpha}, gamma: {gamma}, beta: {beta}}}")
    with mp.workdps(30):
        a, g, b = mp.mpf(alpha), mp.mpf(gamma), mp.mpf(beta)
        count = 2 if b == 0 else int(mp.ceil(mp.log(mp.mpf(10) ** -26) / mp.log(b))) + 2

        def product(q):
            return mp.fprod(grown(q * b**i, a, g) for i in range(min(count, 3000)))

        level = mp.mpf(1.3) ** 2
        mean, square = level * product(1), level**2 * product(2)
        squares = [3 * square - mean**2]
        for k in (1, 2, 9):
            now = grown(b ** (k - 1), a, g, 2) * mp.fprod(grown(b**i, a, g) for i in range(k - 1))
            squares.append(level**2 * now * product(1 + b**k) - mean**2)
    assert x.variance(3) == pytest.approx(float(mean), rel=1e-9)
    assert x.excess_kurtosis == pytest.approx(float(3 * square / mean**2 - 3), rel=1e-9, abs=1e-9)
    found = x.autocovariance_of_squares([0, 1, 2, 9])
    np.testing.assert_allclose(found, [float(v) for v in squares], rtol=0, atol=1e-9 * float(squares[0]))


@settings(max_examples=10, deadline=None, derandomize=True)
@given(st.floats(0.0, 0.99), st.floats(0.01, 0.5), st.floats(-0.9, 0.9), st.sampled_from([1, 2, 30, FAR]))
def test_stochastic_volatility_by_one_gaussian_exponent(phi, eta, rho, lag):
    """ln h(t) + ln h(t + k) and z(t) are jointly normal: E z^2 exp(s) = (1 + Cov(z, s)^2) exp(E s + Var s / 2).

    Variances of the sum are added up shock by shock (Taylor 1994 for the leverage).
    """
    x = series_of(f"stochastic_volatility: {{scale: 1.1, phi: {phi}, eta: {eta}, rho: {rho}}}")
    with mp.workdps(30):
        f, n, r = mp.mpf(phi), mp.mpf(eta), mp.mpf(rho)
        own, far = n**2 / (1 - f**2), n**2 * f**lag / (1 - f**2)
        level = mp.mpf(1.1) ** 2
        mean = level * mp.exp(own / 2)
        with_shock = r * n * f ** (lag - 1)  # Cov(z(t), ln h(t + k))
        both = level**2 * (1 + with_shock**2) * mp.exp(own + far)
        fourth = 3 * level**2 * mp.exp(2 * own)
        squares = [fourth - mean**2, both - mean**2]
    assert x.variance(0) == pytest.approx(float(mean), rel=1e-9)
    assert x.excess_kurtosis == pytest.approx(float(fourth / mean**2 - 3), rel=1e-9)
    found = x.autocovariance_of_squares([0, lag])
    np.testing.assert_allclose(found, [float(v) for v in squares], rtol=1e-9, atol=1e-12 * float(squares[0]))


@pytest.mark.parametrize(
    ("term", "orders", "parameters"),
    [
        ("garch: {omega: 0.2, alpha: [0.1, 0.05], beta: [0.3, 0.4], ", (2, 0, 2), [0.2, 0.1, 0.05, 0.3, 0.4]),
        ("arch: {omega: 0.2, alpha: [0.3, 0.2, 0.1], ", (3, 0, 0), [0.2, 0.3, 0.2, 0.1]),
        ("gjr_garch: {omega: 0.2, alpha: 0.05, gamma: 0.1, beta: 0.8, ", (1, 1, 1), [0.2, 0.05, 0.1, 0.8]),
    ],
)
def test_variances_from_a_given_past_are_the_forecasts_of_arch(term, orders, parameters):
    """E h over 30 steps from the last shocks and variances of a series: arch's analytic forecasts."""
    shocks = np.array([0.3, -1.2, 0.8, 2.1, -0.4, 0.1, -1.7, 0.9, 1.1, -0.6])
    p, o, q = orders
    fitted = arch_model(shocks, mean="Zero", vol="GARCH", p=p, o=o, q=q, rescale=False).fix(parameters)
    forecast = fitted.forecast(horizon=30, reindex=False).variance.to_numpy()[-1]
    variances = (fitted.conditional_volatility**2).tolist()
    x = series_of(f"{term}before: {{variance: {variances[-3:]}, shocks: {shocks[-3:].tolist()}}}}}")
    np.testing.assert_allclose(x.variance(np.arange(30)), forecast, rtol=1e-10)


def test_exponential_garch_from_a_given_variance():
    """E h(t) = exp(mean + beta^t (l(0) - mean)) times the growths of t shocks, near and far; l(0) by hand."""
    a, g, b = mp.mpf(0.2), mp.mpf(-0.1), mp.mpf(0.9)
    x = series_of("egarch: {scale: 1.3, alpha: 0.2, gamma: -0.1, beta: 0.9, before: {variance: 3, shocks: -2}}")
    with mp.workdps(30):
        mean, z = mp.log(mp.mpf(1.3) ** 2), -2 / mp.sqrt(3)
        first = mean + b * (mp.log(3) - mean) + a * (abs(z) - mp.sqrt(2 / mp.pi)) + g * z
        steps = [0, 1, 5, 300, 1_000_000]
        exact = [
            float(mp.exp(mean + b**t * (first - mean)) * mp.fprod(grown(b**i, a, g) for i in range(min(t, 700))))
            for t in steps
        ]
    np.testing.assert_allclose(x.variance(np.array(steps)), exact, rtol=1e-9)
    np.testing.assert_allclose([float(x.variance(t)) for t in steps], exact, rtol=1e-9)


@pytest.mark.parametrize("df", [3, 8])
def test_exponential_garch_of_heavy_tails_whose_sizes_lower_the_variance(df):
    """E h = Π E exp(βʲ g) and Cov(e²(t+1), e²(t)) by the quadrature of SciPy over its t (Nelson 1991, appendix)."""
    unit = np.sqrt(df / (df - 2.0))
    top = float(student_t.pdf(0.0, df))

    def density(y):  # a formula of its own: SciPy's takes 60 times as long, and is asked some 500,000 times
        return top * (1.0 + y * y / df) ** (-0.5 * (df + 1.0))

    assert [density(y) for y in (-300.0, -1.0, 4.0)] == pytest.approx(student_t.pdf([-300.0, -1.0, 4.0], df), rel=1e-12)
    size = 2.0 * quad(lambda y: y * density(y), 0.0, np.inf)[0] / unit

    def mean(q, power=0):
        def integrand(y):
            z = y / unit
            return z**power * math.exp(q * (-0.3 * (abs(z) - size) + 0.2 * z)) * density(y)

        ends = (-np.inf, -300.0, -30.0, -3.0, 0.0, 3.0, 30.0, 300.0, np.inf)
        return sum(quad(integrand, *piece, epsabs=1e-14)[0] for piece in pairwise(ends))

    def level(q):
        return np.prod([mean(q * 0.8**j) for j in range(150)])

    x = series_of(f"egarch: {{scale: 1, alpha: -0.3, gamma: 0.2, beta: 0.8, law: {{student_t: {{df: {df}}}}}}}")
    assert x.mean(LAGS) == pytest.approx(np.zeros(len(LAGS)))
    assert x.variance(LAGS) == pytest.approx(level(1.0), rel=1e-9)
    assert x.autocorrelation([0, 1, 5]) == pytest.approx([1.0, 0.0, 0.0])
    if df > 4:
        lag_1 = mean(1.0, 2) * level(1.8) - level(1.0) ** 2
        assert x.autocovariance_of_squares([1]) == pytest.approx(lag_1, rel=1e-8)
