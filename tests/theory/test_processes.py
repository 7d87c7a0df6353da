"""Processes with a memory of their own: bends of Gaussian series, chains, and what is held."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import integrate, stats

from procgen.chance.laws import LAWS
from procgen.theory import Axis, Unknown, theory
from procgen.theory.processes import hinge_covariance
from procgen.theory.series import SeriesTheory

from ..terms.helpers import graph_of

NORMAL, UNIFORM = LAWS["normal"](), LAWS["uniform"]()
STEPS = np.array([0, 1, 5, 40])


def ar(axis, key="x.ar", phi=0.8, sd=0.6, level=0.0):
    return axis.filtered(axis.source(key, NORMAL, sd), (phi,)) + axis.level(level)


NODES, WEIGHTS = np.polynomial.legendre.leggauss(120)


def pieces(cuts):
    """Nodes and weights of Gauss-Legendre rules between cuts (…, n), on the last axis."""
    low, high = cuts[..., :-1, None], cuts[..., 1:, None]
    z, w = low + (high - low) * (NODES + 1) / 2, (high - low) / 2 * WEIGHTS
    return z.reshape(*z.shape[:-2], -1), w.reshape(*w.shape[:-2], -1)


def expected(f, g, x_law, y_law, r, f_bends=(), g_bends=()):
    """Cov(f(X), g(Y)) of two normals (mean, sd) by Gauss-Legendre rules between the bends of f and g."""
    (mx, sx), (my, sy) = x_law, y_law
    z, w = pieces(np.array([-9.0, *[(k - mx) / sx for k in f_bends], 9.0]))
    rest = np.sqrt(1.0 - r * r)
    bends = [((k - my) / sy - r * z) / rest for k in g_bends]
    cuts = np.stack([np.full(z.shape, -9.0), *[np.clip(k, -9.0, 9.0) for k in bends], np.full(z.shape, 9.0)], axis=-1)
    inner_z, inner_w = pieces(cuts)
    inner = (g(my + sy * (r * z[:, None] + rest * inner_z)) * stats.norm.pdf(inner_z) * inner_w).sum(axis=1)
    density = stats.norm.pdf(z) * w
    values = f(mx + sx * z)
    return float((density * values * inner).sum() - (density * values).sum() * (density * inner).sum())


def bent(x):
    return np.maximum(x, 0.0)


@pytest.mark.parametrize(
    ("a", "b", "r"), [(0, 0, 0.5), (0.7, -1.2, 0.9), (-2, 1, -0.6), (1.5, 1.4, 0.99), (0.3, 0.3, -0.3), (2.5, 2, 0.2)]
)
def test_hinge_covariance_is_the_double_integral(a, b, r):
    """Against E (X - a)+ (Y - b)+ less the means, by a double quadrature."""
    double = expected(bent, bent, (-a, 1), (-b, 1), r, [0], [0])
    assert float(hinge_covariance(a, b, r)) == pytest.approx(double, rel=1e-9, abs=1e-12)


@pytest.mark.parametrize("a", [-6.0, -1.0, 0.0, 0.5, 4.0])
@pytest.mark.parametrize("gap", [0.0, 1e-3, 0.4])
def test_hinge_covariance_of_a_normal_with_itself(a, gap):
    """At correlation 1 it is E (X - a)(X - b) over X > max(a, b), less the means: moments of the truncated normal."""
    b = a + gap
    tail = stats.norm.sf(b)
    first = stats.truncnorm(b, np.inf).mean() * tail
    second = stats.truncnorm(b, np.inf).moment(2) * tail
    hinge = [stats.norm.pdf(k) - k * stats.norm.sf(k) for k in (a, b)]
    direct = second - (a + b) * first + a * b * tail - hinge[0] * hinge[1]
    assert float(hinge_covariance(a, b, 1.0)) == pytest.approx(direct, rel=2e-8, abs=1e-11)


def test_opposite_hinges_of_one_normal():
    """(X)+ and (-X)+ are never on together: their covariance is minus the product of means, -1/(2 pi)."""
    assert float(hinge_covariance(0.0, 0.0, -1.0)) == pytest.approx(-1.0 / (2 * np.pi), rel=1e-12)


def test_folded_normal():
    """|X| against scipy.stats.foldnorm; E|X||Y| is 2/pi (sqrt(1 - r^2) + r asin r), Kamat (1953)."""
    axis = Axis()
    x = ar(axis, level=0.5)
    folded = SeriesTheory("x", axis.hinge(x) * 2.0 + x * -1.0)
    sd = 1.0
    law = stats.foldnorm(0.5 / sd, scale=sd)
    np.testing.assert_allclose(folded.mean(STEPS), law.mean(), rtol=1e-12)
    np.testing.assert_allclose(folded.variance(STEPS), law.var(), rtol=1e-10)
    other = Axis()
    y = ar(other)
    centred = SeriesTheory("y", other.hinge(y) * 2.0 + y * -1.0)
    r = 0.8 ** np.arange(10)
    kamat = 2 / np.pi * (np.sqrt(1 - r * r) + r * np.arcsin(r)) - 2 / np.pi
    np.testing.assert_allclose(centred.autocovariance(np.arange(10)), kamat, atol=1e-12)


@pytest.mark.parametrize(("low", "high"), [(-1.0, 3.0), (-0.2, 0.3), (1.0, 2.0)])
def test_clipped_normal(low, high):
    """Mean and variance by the truncated normal of scipy between the bounds, and the two atoms on them."""
    graph = graph_of(f"  x: {{clip: {{of: [{{ar: {{phi: 0.8, total_sd: 2}}}}], low: {low}, high: {high}}}}}")
    th = theory(graph.spec, graph)["x"]
    law, inner = stats.norm(0, 2), stats.truncnorm(low / 2, high / 2, scale=2)
    below, above = law.cdf(low), law.sf(high)
    inside = 1 - below - above
    mean = below * low + above * high + inside * inner.mean()
    second = below * low**2 + above * high**2 + inside * inner.moment(2)
    np.testing.assert_allclose(th.mean(STEPS), mean, rtol=1e-11)
    np.testing.assert_allclose(th.variance(STEPS), second - mean**2, rtol=1e-8)
    assert th.stationarity.verdict == "strictly stationary"

    def held(x):
        return np.clip(x, low, high)

    at_lag = expected(held, held, (0, 2), (0, 2), 0.8, [low, high], [low, high])
    assert th.autocovariance(np.array([1]))[0] == pytest.approx(at_lag, rel=1e-9)


def test_a_bend_of_a_walk_and_of_what_moves():
    """Means and covariances at a few steps by quadrature; the verdict sees the walk."""
    graph = graph_of("  x: {hinge: {of: [{random_walk: {sd: 1, drift: 0.1, start: 0.5}}], above: 1}}")
    th = theory(graph.spec, graph)["x"]
    t, s = 9, 4
    cov = expected(bent, bent, (0.5 + 0.9 - 1, 3.0), (0.5 + 0.4 - 1, 2.0), 4 / 6, [0], [0])
    assert th.covariance(t, s) == pytest.approx(cov, rel=1e-9)
    assert th.variance(0) == 0.0 and th.mean(0) == 0.0
    assert th.stationarity.verdict == "variance grows"


def test_what_reads_the_same_body_is_exact_across_series():
    """Cov(f(X), Y) = E f'(X) Cov(X, Y), Stein (1981); two hinges of one body by quadrature."""
    graph = graph_of(
        "  heat: {hinge: {of: [{use: w}], below: 0.4}}\n  cool: {hinge: {of: [{use: w}], above: 1}}\n"
        "  shape: {sigmoid: [{use: w}]}\n  w2: [{lag: {of: [{use: w}], by: 2}}, {white_noise: {sd: 1}}]",
        rest="shared:\n  w: [{ar: {phi: 0.5, total_sd: 1.5}}]",
    )
    th = theory(graph.spec, graph)
    at = np.array([7])
    stein = -stats.norm.cdf(0.4 / 1.5) * 1.5**2 * 0.5**2
    assert th.cross("heat", "w2").covariance(at, at)[0] == pytest.approx(stein, rel=1e-12)
    two = expected(lambda x: bent(0.4 - x), lambda x: bent(x - 1), (0, 1.5), (0, 1.5), 0.5, [0.4], [1])
    assert th.cross("heat", "cool").covariance(at, at - 1)[0] == pytest.approx(two, rel=1e-9)
    slope = integrate.quad(lambda x: stats.norm(0, 1.5).pdf(x) * np.exp(-x) / (1 + np.exp(-x)) ** 2, -12, 12)[0]
    assert th.cross("shape", "w2").covariance(at, at)[0] == pytest.approx(slope * 1.5**2 * 0.25, rel=1e-9)
    mixed = th.cross("shape", "heat")
    assert mixed.covariance(at, at) is None and "not known in closed form" in mixed.reason()


@pytest.mark.parametrize("sd", [0.3, 1.0, 2.5])
def test_sigmoid_by_quadrature(sd):
    graph = graph_of(f"  x: {{sigmoid: [{{ar: {{phi: 0.6, total_sd: {sd}}}}}, {{constant: 0.7}}]}}")
    th = theory(graph.spec, graph)["x"]

    def curve(x):
        return 1 / (1 + np.exp(-x))

    law = stats.norm(0.7, sd)
    mean = integrate.quad(lambda x: curve(x) * law.pdf(x), -30, 30, points=[0.7], epsabs=1e-13)[0]
    second = integrate.quad(lambda x: curve(x) ** 2 * law.pdf(x), -30, 30, points=[0.7], epsabs=1e-13)[0]
    np.testing.assert_allclose(th.mean(STEPS), mean, rtol=1e-11)
    np.testing.assert_allclose(th.variance(STEPS), second - mean**2, rtol=1e-8)
    at_lag = expected(curve, curve, (0.7, sd), (0.7, sd), 0.6)
    assert th.autocovariance(np.array([1]))[0] == pytest.approx(at_lag, rel=1e-9)


def test_a_series_that_does_not_settle_is_refused():
    axis = Axis()
    steep = SeriesTheory("x", axis.curved(ar(axis), lambda v: np.sign(v)))
    assert steep.variance(STEPS) is None and "bends too sharply" in steep.reason("variance")
    np.testing.assert_allclose(steep.mean(STEPS), 0.0, atol=1e-12)


def test_chain_is_the_powers_of_its_matrix():
    """Covariances of a two-state chain from powers of its transition matrix (numpy)."""
    axis = Axis()
    p, stay = 0.3, 1 - 1 / 6
    enter = p / 6 / (1 - p)
    chain = SeriesTheory("x", axis.chain("x.flag", UNIFORM, p, stay - enter))
    matrix = np.array([[1 - enter, enter], [1 - stay, stay]])
    powers = [p * np.linalg.matrix_power(matrix, k)[1, 1] - p * p for k in range(9)]
    np.testing.assert_allclose(chain.autocovariance(np.arange(9)), powers, rtol=1e-10)
    np.testing.assert_allclose(chain.mean(STEPS), p)
    assert chain.stationarity.verdict == "strictly stationary" and not chain.gaussian


def test_fourth_moments_of_a_chain():
    """Excess kurtosis of scipy's Bernoulli law; squares of its deviations from the powers of the matrix."""
    axis = Axis()
    p, r = 0.3, 0.6
    chain = SeriesTheory("x", axis.chain("x.flag", UNIFORM, p, r) * 2.5)
    assert chain.excess_kurtosis == pytest.approx(float(stats.bernoulli(p).stats("k")), rel=1e-12)
    squares = 2.5**2 * np.array([p * p, (1 - p) ** 2])  # of the deviation when off and when on
    matrix = np.array([[1 - p * (1 - r), p * (1 - r)], [(1 - p) * (1 - r), r + p * (1 - r)]])
    shares = np.array([1 - p, p])
    for lag in range(5):
        joint = shares[:, None] * np.linalg.matrix_power(matrix, lag)
        expected_covariance = squares @ joint @ squares - (shares @ squares) ** 2
        assert chain.autocovariance_of_squares(np.array([lag]))[0] == pytest.approx(expected_covariance, rel=1e-9)
    two = SeriesTheory("y", axis.chain("y.flag", UNIFORM, p, r) + axis.chain("z.flag", UNIFORM, p, r).lag(3))
    assert two.excess_kurtosis == pytest.approx(float(stats.bernoulli(p).stats("k")) / 2, rel=1e-9)


def test_a_chain_times_noise_and_a_sum_of_it_are_exact():
    axis = Axis()
    chain, noise = axis.chain("x.flag", UNIFORM, 0.25, 0.5), axis.source("x.e", NORMAL, 2.0)
    gated = SeriesTheory("x", axis.product([chain, noise]))
    np.testing.assert_allclose(gated.autocovariance(np.arange(3)), [0.25 * 4, 0, 0], atol=1e-15)
    total = SeriesTheory("y", chain.integrate(0.0))
    pairs = [0.25 * 0.75 * 0.5 ** np.abs(np.subtract.outer(np.arange(t), np.arange(t))) for t in STEPS]
    np.testing.assert_allclose(total.variance(STEPS), [each.sum() for each in pairs], rtol=1e-12)


def test_held_reads_the_covariance_of_its_body():
    axis = Axis()
    x = ar(axis)
    held = SeriesTheory("x", axis.held(x, lambda t: t - t % 3, 3))
    t, s = np.meshgrid(np.arange(10), np.arange(10))
    np.testing.assert_allclose(held.covariance(t, s), 0.8 ** np.abs(3 * (t // 3) - 3 * (s // 3)), rtol=1e-12)
    assert held.stationarity.verdict == "cyclostationary"
    assert held.marginal(5).var() == pytest.approx(1.0)


def test_a_lagged_process_reads_before_step_0():
    axis = Axis()
    hinge = axis.hinge(ar(axis, level=0.3))
    now, then = SeriesTheory("a", hinge), SeriesTheory("b", hinge.lag(7))
    np.testing.assert_allclose(now.autocovariance(np.arange(4)), then.autocovariance(np.arange(4)), rtol=1e-12)


def test_a_bend_of_what_is_not_normal_is_unknown():
    axis = Axis()
    bent = SeriesTheory("x", axis.hinge(axis.source("x.e", LAWS["laplace"](), 1.0)))
    assert bent.variance(STEPS) is None and "not Gaussian" in bent.reason("variance")
    with pytest.raises(Unknown):
        axis.hinge(axis.source("x.f", UNIFORM, 1.0)).mean(STEPS)


def test_a_verdict_without_a_mean_is_a_verdict():
    graph = graph_of("  x: {hold: {of: [{exp: [{garch: {sd: 1, alpha: 0.1}}]}], every: 3}}")
    held = theory(graph.spec, graph)["x"]
    assert held.stationarity.verdict == "infinite variance" and held.mean([0]) is None
    assert any(reason.startswith("mean unknown: an exponential of x.garch") for reason in held.stationarity.reasons)
