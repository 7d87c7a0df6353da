"""Products and exponentials of dependent Gaussian series against quadrature, and published lognormal moments."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.polynomial.hermite_e import hermegauss

from procgen.theory import Axis, SeriesTheory
from procgen.theory.series import CrossTheory
from procgen.theory.verdict import CYCLES, GROWS, STRICT

from .references import EXPONENTIAL, LAPLACE, NORMAL, student

LAGS = np.arange(6)


def quadrature(f, covariance, nodes=24):
    """E f(x) for a centred Gaussian vector x, by Gauss-Hermite rules along its principal axes."""
    values, vectors = np.linalg.eigh(np.asarray(covariance, float))
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    z, w = hermegauss(nodes)
    grids = np.meshgrid(*[z] * len(values), indexing="ij")
    weights = np.prod(np.meshgrid(*[w / np.sqrt(2 * np.pi)] * len(values), indexing="ij"), axis=0)
    x = np.tensordot(root, np.stack(grids), axes=1)
    return float((weights * f(*x)).sum())


@pytest.fixture
def pair():
    """Two AR series with correlated shocks, and their joint covariance at (t, t, t + h, t + h)."""
    axis = Axis(100, {frozenset(("x.ar", "y.ar")): 0.7})
    x = axis.filtered(axis.source("x.ar", NORMAL, 0.5), (0.8,))
    y = axis.filtered(axis.source("y.ar", NORMAL, 0.8), (0.3,))
    sx, sy, sxy = 0.25 / (1 - 0.64), 0.64 / (1 - 0.09), 0.7 * 0.5 * 0.8 / (1 - 0.24)

    def joint(h):
        now = np.array([[sx, sxy], [sxy, sy]])
        later = np.diag([0.8**h, 0.3**h]) @ now  # Cov of (x, y)(t + h) with (x, y)(t)
        return np.block([[now, later.T], [later, now]])

    return axis, x, y, joint


CASES = {
    "x y": lambda a, x, y: (a.product((x, y)), lambda x, y: x * y),
    "x x y": lambda a, x, y: (a.product((x, x, y)), lambda x, y: x * x * y),
    "exp x": lambda a, x, y: (x.exp(), lambda x, y: np.exp(x)),
    "y exp x": lambda a, x, y: (a.product((y, x.exp())), lambda x, y: y * np.exp(x)),
    "x y exp(x - y)": lambda a, x, y: (
        a.product((x, y, (x + y * -1.0).exp())),
        lambda x, y: x * y * np.exp(x - y),
    ),
    "(2 + x)(1 - y) + x": lambda a, x, y: (
        a.product((x + number(a, 2.0), y * -1.0 + number(a, 1.0))) + x,
        lambda x, y: (2 + x) * (1 - y) + x,
    ),
}


def number(axis, c):
    return axis.known(lambda steps: np.full(steps.shape, c), constant=True)


@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("h", [0, 1, 3])
def test_dependent_gaussians_by_quadrature(pair, name, h):
    axis, x, y, joint = pair
    expression, f = CASES[name](axis, x, y)
    series = SeriesTheory("z", expression)
    mean = quadrature(f, joint(0)[:2, :2], 40)
    both = quadrature(lambda a, b, c, d: f(a, b) * f(c, d), joint(h))
    assert series.mean(7) == pytest.approx(mean, rel=1e-9, abs=1e-12)
    assert series.covariance(7 + h, 7) == pytest.approx(both - mean**2, rel=1e-8)
    assert series.stationarity.verdict == STRICT and not series.gaussian


def test_exponential_against_a_linear_series(pair):
    """Cov(exp x, y) = E exp(x) Cov(x, y) (Stein 1981), and the quadrature of the same."""
    _, x, y, joint = pair
    cross = CrossTheory(SeriesTheory("e", x.exp()), SeriesTheory("y", y))
    s = joint(0)
    stein = np.exp(s[0, 0] / 2) * s[0, 1]
    assert cross.covariance(4, 4) == pytest.approx(stein, rel=1e-12)
    assert stein == pytest.approx(quadrature(lambda a, b: np.exp(a) * b, s[:2, :2], 40), rel=1e-10)


def test_kurtosis_of_products(pair):
    axis, x, y, joint = pair
    z = SeriesTheory("z", axis.product((x, y)))
    s = joint(0)[:2, :2]
    m = quadrature(lambda a, b: a * b, s)
    fourth, second = (quadrature(lambda a, b, k=k: (a * b - m) ** k, s) for k in (4, 2))
    assert z.excess_kurtosis == pytest.approx(fourth / second**2 - 3, rel=1e-10)
    square = quadrature(lambda a, b, c, d: (a * b - m) ** 2 * (c * d - m) ** 2, joint(2), 12)
    assert z.autocovariance_of_squares(2) == pytest.approx(square - second**2, rel=1e-10)


def test_small_lognormal_keeps_its_digits(axis):
    """exp of a spread of 1e-6: Cov is E^2 expm1(g), not a difference of two numbers near 1."""
    x = axis.filtered(axis.source("x.ar", NORMAL, 1e-6), (0.5,)).exp()
    g = 1e-12 / 0.75 * 0.5**LAGS
    series = SeriesTheory("x", x)
    np.testing.assert_allclose(series.autocovariance(LAGS), np.exp(1e-12 / 0.75) * np.expm1(g), rtol=1e-12)


@pytest.mark.parametrize(("s", "skew", "kurtosis"), [(0.2, 0.614294761987, 3.678365777175)])
def test_published_lognormal_shape(axis, s, skew, kurtosis):
    """Skewness and kurtosis of a lognormal (REFERENCES 11.5)."""
    x = SeriesTheory("x", axis.source("x.noise", NORMAL, s).exp())
    assert x.excess_kurtosis == pytest.approx(kurtosis - 3, rel=1e-11)
    assert float(x.marginal(0).stats("s")) == pytest.approx(skew, rel=1e-11)


def test_geometric_walk(axis):
    """Hull, lognormal chapter, example 2 (REFERENCES 11.3): S = 20, m = .2, s = .4, t = 1, here in 100 steps."""
    mu, sd = (0.2 - 0.08) / 100, 0.4 / 10
    x = SeriesTheory("x", axis.walk(axis.source("x.walk", NORMAL, sd), mu, np.log(20.0)).exp())
    assert x.mean(100) == pytest.approx(24.4280551632, rel=1e-11)
    assert x.variance(100) == pytest.approx(103.539121062, rel=1e-11)
    assert x.stationarity.verdict == GROWS


def test_seasonal_factor_is_cyclostationary(axis):
    """Cov(s(t) x(t), s(u) x(u)) = s(t) s(u) g(t - u), the mean stays 0."""
    axis.at_work("x.seasonal", 12.0)
    wave = axis.known(lambda steps: 1.0 + 0.5 * np.cos(2 * np.pi * steps / 12))
    x = SeriesTheory("x", axis.product((wave, axis.filtered(axis.source("x.ar", NORMAL, 1.0), (0.5,)))))
    t = np.arange(12)
    s = 1.0 + 0.5 * np.cos(2 * np.pi * t / 12)
    np.testing.assert_allclose(x.covariance(t[:, None], t), np.outer(s, s) * 0.5 ** abs(t[:, None] - t) / 0.75)
    assert x.stationarity.verdict == CYCLES and x.gaussian and "12" in x.stationarity.reasons[0]


def test_running_sum_of_an_exponential(axis):
    """Sum of lognormal values: the double sum of their covariances, written out."""
    x = axis.filtered(axis.source("x.ar", NORMAL, 0.4), (0.6,)).exp()
    y = SeriesTheory("y", x.integrate(3.0))
    g = 0.16 / 0.64
    each = np.exp(g) * np.expm1(g * 0.6 ** np.arange(30))
    exact = sum(each[abs(i - j)] for i in range(1, 21) for j in range(1, 11))
    assert y.covariance(20, 10) == pytest.approx(exact, rel=1e-12)
    np.testing.assert_allclose(y.mean([0, 1, 10]), 3.0 + np.exp(g / 2) * np.array([0, 1, 10]), rtol=1e-14)
    back = SeriesTheory("x", x.integrate(3.0).difference())
    np.testing.assert_allclose(back.autocovariance(LAGS), each[:6], rtol=1e-12)
    assert y.variance(10**7) is None and "1048576" in y.reason("variance")


def test_running_sum_at_far_steps_and_against_what_it_sums(axis):
    """Sums over lags against sums over all pairs, and one-sided sums; a moving factor is summed over all pairs."""
    x = axis.filtered(axis.source("x.ar", NORMAL, 0.4), (0.9,)).exp()
    y = x.integrate(0.0)
    g = 0.16 / 0.19
    each = np.exp(g) * np.expm1(g * 0.9 ** np.arange(3001))
    far = 3000 * each[0] + 2 * ((3000 - np.arange(1, 3000)) * each[1:3000]).sum()
    assert SeriesTheory("y", y).variance(3000) == pytest.approx(far, rel=1e-11)
    cross = CrossTheory(SeriesTheory("y", y), SeriesTheory("x", x))
    assert cross.covariance(5, 9) == pytest.approx(sum(each[abs(k - 9)] for k in range(1, 6)), rel=1e-11)
    other = CrossTheory(cross.second, cross.first)
    assert other.covariance(2, 7) == pytest.approx(sum(each[abs(2 - k)] for k in range(1, 8)), rel=1e-11)
    assert other.covariance(2, 0) == 0.0
    ramp = axis.known(lambda steps: 1.0 + steps)
    z = SeriesTheory("z", axis.product((ramp, x)).integrate(0.0))
    exact = sum((1 + i) * (1 + j) * each[abs(i - j)] for i in range(1, 8) for j in range(1, 6))
    assert z.covariance(7, 5) == pytest.approx(exact, rel=1e-12)
    assert z.variance(5000) is None and "2048" in z.reason("variance")


def test_independent_parts_that_are_not_gaussian(axis):
    """Var xy = Var x Var y + m_x^2 Var y + m_y^2 Var x (Goodman 1960); kurtosis of xy is the product of both."""
    x, y = axis.source("x.t", student(10), 2.0), axis.filtered(axis.source("y.ar", NORMAL, 1.0), (0.5,))
    z = SeriesTheory("z", axis.product((x, y)))
    np.testing.assert_allclose(z.autocovariance([0, 1]), [4 / 0.75, 0.0], atol=1e-14)
    assert z.excess_kurtosis == pytest.approx(4.0 * 3.0 - 3.0)
    shifted = SeriesTheory("z", axis.product((x + number(axis, 1.0), y + number(axis, 2.0))))
    assert shifted.variance(0) == pytest.approx(4 / 0.75 + 4 * 4 + 1 / 0.75)


def test_kurtosis_of_filters_of_independent_shocks(axis):
    """AR(1): excess k (1 - phi^2)^2 / (1 - phi^4), a walk: k / t, from sums of fourth powers of the weights."""
    ar = SeriesTheory("x", axis.filtered(axis.source("x.ar", LAPLACE, 1.5), (0.8,)))
    assert ar.excess_kurtosis == pytest.approx(3 * (1 - 0.64) ** 2 / (1 - 0.8**4), rel=1e-9)
    walk = SeriesTheory("w", axis.walk(axis.source("w.walk", LAPLACE, 1.5), 0.0, 0.0))
    assert walk.excess_kurtosis_at(7) == pytest.approx(3 / 7, rel=1e-12)
    assert walk.excess_kurtosis is None and "excess_kurtosis_at" in walk.reason("excess_kurtosis")
    twice = SeriesTheory("i", axis.walk(axis.source("i.walk", LAPLACE, 1.0), 0.0, 0.0).integrate(0.0))
    w = np.arange(1, 6)  # the twice summed noise at step 5 has these weights
    assert twice.excess_kurtosis_at(5) == pytest.approx(3 * (w**4).sum() / (w**2).sum() ** 2, rel=1e-12)


def test_squares_of_filters_of_independent_shocks(axis):
    """Cov(x_t^2, x_s^2) = 2 g(h)^2 + k sum psi_j^2 psi_{j+h}^2 for an AR(1) of Laplace shocks, plus Gaussian noise."""
    ar = axis.filtered(axis.source("x.ar", LAPLACE, 1.0), (0.8,))
    x = SeriesTheory("x", ar + axis.source("x.noise", NORMAL, 0.7))
    g = 0.8**LAGS / 0.36 + 0.49 * (LAGS == 0)
    exact = 2 * g**2 + 3 * 0.64**LAGS / (1 - 0.8**4)
    np.testing.assert_allclose(x.autocovariance_of_squares(LAGS), exact, rtol=1e-9)


def test_skewed_shocks_have_a_third_moment(axis):
    """Cov(x^2, y) = skewness for shocks with skewness 2 (the exponential law, SciPy's own moments)."""
    x = axis.source("x.noise", EXPONENTIAL, 1.0)
    square = SeriesTheory("q", axis.product((x, x)))
    assert CrossTheory(square, SeriesTheory("x", x)).covariance(3, 3) == pytest.approx(2.0)
    assert square.variance(3) == pytest.approx(6 + 3 - 1)


def test_a_skewed_filter_looks_forward_otherwise_than_back(axis):
    """E x(t)^2 y(t + h) = k sum over shocks of the weights' products (Brillinger 1975): of AR(1)s with coefficients
    a and b, k b^h / (1 - a^2 b) for h >= 0 and k a^(2|h|) / (1 - a^2 b) before."""
    source = axis.source("x.ar", EXPONENTIAL, 1.0)
    x, y = axis.filtered(source, (0.8,)), axis.filtered(source, (0.5,))
    cross = CrossTheory(SeriesTheory("q", axis.product((x, x))), SeriesTheory("y", y))
    h = np.arange(-6, 7)
    exact = 2.0 * np.where(h >= 0, 0.5 ** np.abs(h), 0.64 ** np.abs(h)) / (1 - 0.64 * 0.5)
    np.testing.assert_allclose(cross.covariance(50, 50 + h), exact, rtol=1e-9)
    three = SeriesTheory("three", axis.product((x, x, x)))
    assert three.mean(9) == pytest.approx(2.0 / (1 - 0.8**3), rel=1e-9)


def test_unknown_has_a_reason(axis):
    x = axis.source("x.t", student(5), 1.0)
    e = SeriesTheory("e", x.exp())
    assert e.mean(0) is None and "x.t" in e.reason("mean")
    assert "no finite mean" in e.reason("mean")
    six = SeriesTheory("s", axis.product((x, x, x)))
    assert six.variance(0) is None and "order 6" in six.reason("variance")
    nested = SeriesTheory("n", axis.product((x, x)).exp())
    assert nested.mean(0) is None and "not worked out" in nested.reason("mean")
