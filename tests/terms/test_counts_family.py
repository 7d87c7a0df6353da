"""Counts and demand: values by SciPy's quantiles from the same uniforms, theory by enumeration and quadrature."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from procgen.spec.model import SpecError
from procgen.terms.recover import forecast
from procgen.terms.run import Run
from procgen.theory import theory

from .helpers import draw, graph_of

STEPS, PATHS = 40, 24
TIE = 1e-12  # a uniform nearer than this to a step of the law may be told either way


def uniforms(graph, role, steps=STEPS):
    (source,) = [source for source in graph.sources if source.stream.role == role]
    return source.stream.uniforms(0, PATHS, 0, steps)


def same_counts(values, u, law):
    """Whether values are the least k with P(X <= k) >= u, by SciPy."""
    return np.all((law.cdf(values) >= u - TIE) & (law.cdf(values - 1) < u + TIE))


def known(body, steps=STEPS):
    graph = graph_of(f"  x: {{{body}}}", steps=steps)
    return theory(graph.spec, graph)["x"]


def whole(top, law):
    """Numbers from 0 on, and their chances."""
    k = np.arange(top + 1.0)
    return k, law.pmf(k)


# Poisson and negative binomial


def test_counts_are_quantiles_at_a_mean_that_moves():
    graph = graph_of(
        "  x: {poisson: {mean: 5, of: [{use: b}]}}\n  y: {negative_binomial: {mean: 30, size: 1.7, of: [{use: b}]}}\n"
        "  z: {poisson: {mean: 2.5}}\n  b: [{ar: {phi: 0.8, total_sd: 0.6}}]",
        steps=STEPS,
    )
    x = draw(graph, 0, PATHS, [STEPS])
    ways = {source.name: source.stream.uniforms(0, PATHS, 0, STEPS) for source in graph.sources}
    mean = np.exp(x["b"])
    assert same_counts(x["x"], ways["x.poisson"], stats.poisson(5 * mean))
    assert same_counts(x["y"], ways["y.negative_binomial"], stats.nbinom(1.7, 1.7 / (1.7 + 30 * mean)))
    assert same_counts(x["z"], ways["z.poisson"], stats.poisson(2.5))


@pytest.mark.parametrize("size", [None, 2.5])
def test_theory_of_counts_is_their_law_by_quadrature(size):
    """Mean, variance, kurtosis and the law itself from pmf(k) = E pmf(k | L), one integral for each k."""
    sd, mean = 0.5, 3.0
    kind = "poisson: {" if size is None else f"negative_binomial: {{size: {size}, "
    x = known(f"{kind}mean: {mean}, of: [{{ar: {{phi: 0.8, total_sd: {sd}}}}}]}}")

    def law(m):
        return stats.poisson(m) if size is None else stats.nbinom(size, size / (size + m))

    z, weight = np.linspace(-9, 9, 1801), 18 / 1800
    k = np.arange(2000.0)
    pmf = np.sum(stats.norm.pdf(z)[:, None] * weight * law(mean * np.exp(sd * z)[:, None]).pmf(k), axis=0)
    first = pmf @ k
    central = [pmf @ (k - first) ** n for n in (2, 4)]
    np.testing.assert_allclose(x.mean([0, 7]), first, rtol=1e-9)
    np.testing.assert_allclose(x.variance([0, 7]), central[0], rtol=1e-9)
    np.testing.assert_allclose(x.excess_kurtosis, central[1] / central[0] ** 2 - 3, rtol=1e-7)
    marginal = x.marginal(3)
    np.testing.assert_allclose(marginal.cdf(k[:40] + 0.5), np.cumsum(pmf)[:40], rtol=1e-9)
    np.testing.assert_allclose([marginal.mean(), marginal.var()], [first, central[0]], rtol=1e-9)


def test_memory_of_counts_is_that_of_their_mean():
    """Zeger (1988), eq. 2.3: Cov = Cov(m, m'); of squares by a double integral over two correlated normals."""
    sd, mean, phi = 0.4, 2.0, 0.7
    x = known(f"poisson: {{mean: {mean}, of: [{{ar: {{phi: {phi}, total_sd: {sd}}}}}]}}")
    level = mean * np.exp(sd * sd / 2)
    lags = np.array([1, 2, 5])
    np.testing.assert_allclose(x.autocovariance(lags), level**2 * np.expm1(sd * sd * phi**lags), rtol=1e-11)
    np.testing.assert_allclose(x.variance(np.array([4])), level + level**2 * np.expm1(sd * sd), rtol=1e-12)

    z = np.linspace(-8.5, 8.5, 601)
    a, b = np.meshgrid(z, z, indexing="ij")
    density = (
        stats.multivariate_normal([0, 0], [[1, phi], [phi, 1]]).pdf(np.stack([a, b], axis=-1)) * (z[1] - z[0]) ** 2
    )

    def square(w):  # E (X - level)^2 given the mean
        m = mean * np.exp(sd * w)
        return m + (m - level) ** 2

    exact = np.sum(density * square(a) * square(b)) - x.variance(np.array([0]))[0] ** 2
    np.testing.assert_allclose(x.autocovariance_of_squares(np.array([1])), exact, rtol=1e-8)


def test_counts_that_share_a_body_have_its_covariance():
    graph = graph_of(
        "  x: {poisson: {mean: 2, of: [{use: b}]}}\n  y: {negative_binomial: {mean: 3, size: 1, of: [{use: b}]}}\n"
        "  b: [{ar: {phi: 0.6, total_sd: 0.3}}]"
    )
    pair = theory(graph.spec, graph).cross("x", "y")
    t, s, v = np.array([3, 5]), np.array([3, 4]), 0.09
    np.testing.assert_allclose(pair.covariance(t, s), 6 * np.exp(v) * np.expm1(v * 0.6 ** np.array([0, 1])), rtol=1e-11)
    own = theory(graph.spec, graph).cross("x", "b")
    np.testing.assert_allclose(own.covariance(t, s), 2 * np.exp(v / 2) * v * 0.6 ** np.array([0, 1]), rtol=1e-11)


def test_a_season_of_counts_is_one_of_mean_and_variance():
    x = known("negative_binomial: {mean: 4, size: 2, of: [{seasonal: {period: 4, profile: [0, 1, 0, -1]}}]}")
    mean = 4 * np.exp([0, 1, 0, -1])
    np.testing.assert_allclose(x.mean(np.arange(4)), mean)
    np.testing.assert_allclose(x.variance(np.arange(4)), stats.nbinom(2, 2 / (2 + mean)).var())
    assert x.stationarity.verdict == "mean not constant" and not x.stationarity.covariance_stationary


# INAR


def transitions(alpha, new, top):
    """P(X' = j | X = i) for i, j up to `top`: binomial survivors and arrivals, all from SciPy."""
    rows = np.zeros((top + 1, top + 1))
    for i in range(top + 1):
        row = np.convolve(stats.binom.pmf(np.arange(i + 1), i, alpha), new)[: top + 1]
        rows[i, : len(row)] = row
    return rows


def test_inar_is_thinning_and_arrivals_by_scipy():
    graph = graph_of("  x: {inar: {alpha: 0.7, mean: 6}}", steps=STEPS)
    x = draw(graph, 0, PATHS, [STEPS])["x"]
    new, stay = uniforms(graph, "innovation"), uniforms(graph, "thinning")
    assert same_counts(x[0], new[0], stats.poisson(6))
    y = stats.binom.ppf(stay[1:], x[:-1], 0.7) + stats.poisson.ppf(new[1:], 6 * 0.3)
    assert np.array_equal(x[1:], y)


@pytest.mark.parametrize("size", [None, 1.3])
def test_inar_keeps_its_law(size):
    """One step of the chain leaves the law as it is; and the Poisson chain looks the same backwards (McKenzie 1985)."""
    alpha, mean, top = 0.6, 3.0, 160
    text = f"inar: {{alpha: {alpha}, mean: {mean}{'' if size is None else f', size: {size}'}}}"
    graph = graph_of(f"  x: {{{text}}}")
    places = graph.series["x"].term.arrivals
    new = np.diff(np.concatenate([np.zeros(places.first), places.places / 2.0**52]), prepend=0.0)
    law = stats.poisson(mean) if size is None else stats.nbinom(size, size / (size + mean))
    k, shares = whole(top, law)
    p = transitions(alpha, new, top)
    np.testing.assert_allclose(shares @ p, shares, rtol=0, atol=1e-14)
    if size is None:
        np.testing.assert_allclose(shares[:, None] * p, (shares[:, None] * p).T, rtol=0, atol=1e-15)
    x = theory(graph.spec, graph)["x"]
    deviation, variance = k - mean, law.var()
    np.testing.assert_allclose(x.variance(np.array([0, 9])), variance, rtol=1e-12)
    np.testing.assert_allclose(x.excess_kurtosis, float(law.stats("k")), rtol=1e-9)
    power = np.eye(top + 1)
    for lag in range(4):
        exact = shares * deviation @ power @ deviation
        np.testing.assert_allclose(x.autocovariance(np.array([lag])), exact, rtol=1e-9)
        squares = shares * deviation**2 @ power @ deviation**2 - variance**2
        np.testing.assert_allclose(x.autocovariance_of_squares(np.array([lag])), squares, rtol=1e-8)
        power = power @ p
    assert x.marginal(5).cdf(2.5) == pytest.approx(law.cdf(2))


def test_forecast_of_inar_is_the_chain_some_steps_on():
    graph = graph_of("  x: {inar: {alpha: 0.5, mean: 4, size: 2}}", steps=STEPS)
    run = Run(graph, 0, 6)
    now = run.tile(10)["x"][-1]
    answer = forecast(run, "x", 3)
    arrivals = graph.series["x"].term.arrivals
    new = np.diff(arrivals.places / 2.0**52, prepend=0.0)
    power, k = np.eye(201), np.arange(201.0)
    for h in range(3):
        power = power @ transitions(0.5, new, 200)
        rows = power[now.astype(int)]
        np.testing.assert_allclose(answer.mean[h], rows @ k, rtol=1e-9)
        np.testing.assert_allclose(answer.variance[h], rows @ k**2 - (rows @ k) ** 2, rtol=1e-8)


def test_the_past_of_inar_is_drawn_or_refused():
    late = graph_of("  x: {lag: {of: [{inar: {alpha: 0.6, mean: 5}}], by: 4}}\n  y: {use: x.inar}", steps=STEPS)
    x = draw(late, 0, PATHS, [STEPS])
    assert np.array_equal(x["x"][4:], x["y"][:-4]) and (x["x"][:4] >= 0).all()
    with pytest.raises(SpecError, match="the past of negative binomial counts is not drawn; lag less"):
        graph_of("  x: {lag: {of: [{inar: {alpha: 0.6, mean: 5, size: 2}}], by: 4}}")


# intermittent demand


def test_intermittent_demand_is_a_chain_and_sizes_by_scipy():
    graph = graph_of("  x: {intermittent: {share: 0.3, stay: 2, size: 12, sd: 6}}", steps=STEPS)
    x = draw(graph, 0, PATHS, [STEPS])["x"]
    comes, size = uniforms(graph, "chain"), uniforms(graph, "size")
    on = np.empty_like(x)
    on[0] = comes[0] < 0.3
    for t in range(1, STEPS):
        on[t] = comes[t] < np.where(on[t - 1] > 0, 0.5, 0.3 * 0.5 / 0.7)
    np.testing.assert_allclose(x, on * stats.gamma(4, scale=3).ppf(size), rtol=1e-8)


SIZES = {
    "size: 12, sd: 6": stats.gamma(4, scale=3),
    "size: 2, sd: 1, law: lognormal": stats.lognorm(np.sqrt(np.log(1.25)), scale=2 / np.sqrt(1.25)),
    "size: 3, law: counts": stats.poisson(2, loc=1),
    "size: 5, sd: 4, law: counts": stats.nbinom(16 / 12, (16 / 12) / (16 / 12 + 4), loc=1),
}


@pytest.mark.parametrize("text", SIZES)
def test_theory_of_intermittent_demand_is_that_of_its_chain(text):
    """Moments of b s for a chain b of two states, by powers of its matrix, and SciPy's moments of s."""
    law, p = SIZES[text], 0.2
    x = known(f"intermittent: {{share: {p}, stay: 4, {text}}}")
    m1, m2, m3, m4 = (float(law.moment(k)) for k in (1, 2, 3, 4))
    chain = np.array([[1 - p * 0.25 / (1 - p), p * 0.25 / (1 - p)], [0.25, 0.75]])
    mean, variance = p * m1, p * m2 - (p * m1) ** 2
    fourth = p * m4 - 4 * mean * p * m3 + 6 * mean**2 * p * m2 - 3 * mean**4
    np.testing.assert_allclose(x.mean(np.array([0, 5])), mean, rtol=1e-9)
    np.testing.assert_allclose(x.variance(np.array([0, 5])), variance, rtol=1e-9)
    np.testing.assert_allclose(x.excess_kurtosis, fourth / variance**2 - 3, rtol=1e-8)
    square = np.array([mean**2, m2 - 2 * mean * m1 + mean**2])  # E (x - mean)^2 without and with demand
    for lag in (1, 2, 6):
        both = np.array([1 - p, p])[:, None] * np.linalg.matrix_power(chain, lag)
        np.testing.assert_allclose(x.autocovariance(np.array([lag])), both[1, 1] * m1**2 - mean**2, rtol=1e-9)
        exact = square @ both @ square - variance**2
        np.testing.assert_allclose(x.autocovariance_of_squares(np.array([lag])), exact, rtol=1e-8)


def test_forecasts_of_demand_and_counts():
    """By powers of the chain from what was there last; a known mean of Poisson counts is their variance, too."""
    graph = graph_of(
        "  x: {intermittent: {share: 0.2, stay: 4, size: 12, sd: 6}}\n"
        "  y: {poisson: {mean: 4, of: [{seasonal: {period: 4, profile: [0, 1, 0, -1]}}]}}\n"
        "  z: {zero_inflated: {of: [{use: y}], share: 0.25}}"
    )
    run = Run(graph, 0, 30)
    now = run.tile(10)["x"][-1] > 0
    answer = forecast(run, "x", 3)
    chain, power = np.array([[0.9375, 0.0625], [0.25, 0.75]]), np.eye(2)
    for h in range(3):
        power = power @ chain
        p = power[now.astype(int), 1]
        np.testing.assert_allclose(answer.mean[h], 12 * p, rtol=1e-12)
        np.testing.assert_allclose(answer.variance[h], p * 180 - 144 * p * p, rtol=1e-12)
    mean = 4 * np.exp([[0], [-1], [0]])
    counts, inflated = forecast(run, "y", 3), forecast(run, "z", 3)
    np.testing.assert_allclose(counts.mean, mean)
    np.testing.assert_allclose(counts.variance, mean)
    np.testing.assert_allclose(inflated.mean, 0.75 * mean)
    np.testing.assert_allclose(inflated.variance, 0.75 * (mean + mean**2) - (0.75 * mean) ** 2)


def test_zero_inflation_is_lamberts_law():
    """Lambert (1992): P(0) = π + (1 − π) P(0), the other chances times 1 − π."""
    x = known("zero_inflated: {of: [{negative_binomial: {mean: 4, size: 2}}], share: 0.3}")
    k, pmf = whole(400, stats.nbinom(2, 2 / 6))
    pmf = 0.7 * pmf
    pmf[0] += 0.3
    mean = pmf @ k
    np.testing.assert_allclose(x.mean(np.array([2])), mean, rtol=1e-10)
    np.testing.assert_allclose(x.variance(np.array([2])), pmf @ (k - mean) ** 2, rtol=1e-10)
    np.testing.assert_allclose(x.marginal(2).cdf(k[:50]), np.cumsum(pmf)[:50], rtol=1e-10)
    u = np.array([1e-6, 0.2, 0.37, 0.6, 0.9, 0.999])
    assert np.array_equal(np.rint(x.marginal(2).ppf(u)), np.searchsorted(np.cumsum(pmf), u))


def test_what_is_hidden_is_revealed():
    graph = graph_of(
        "  x: {poisson: {mean: 5, of: [{ar: {phi: 0.8, total_sd: 0.6}}]}}\n  m: {use: x.poisson.intensity}\n"
        "  d: {intermittent: {share: 0.3, size: 2, sd: 1}}\n  o: {use: d.intermittent.occurs}\n  b: {use: x.ar}"
    )
    x = draw(graph, 0, PATHS, [20])
    np.testing.assert_allclose(x["m"], 5 * np.exp(x["b"]), rtol=1e-14)
    assert np.array_equal(x["o"], x["d"] > 0)
    th = theory(graph.spec, graph)
    np.testing.assert_allclose(th["m"].mean([3]), 5 * np.exp(0.18), rtol=1e-12)
    np.testing.assert_allclose(th["o"].mean([3]), 0.3)


FAULTS = {
    "inar: {alpha: 0.9, mean: 900, size: 0.5}": "expected counts that stay below 2,000, got a mean of 900 with a "
    "size of 0.5, whose law reaches further",
    "intermittent: {share: 0.9, stay: 2, size: 4, sd: 2}": "expected a stay of at least 9 steps for a share of 0.9",
    "intermittent: {share: 0.2, size: 4}": "expected sd, the standard deviation of a size, for law: gamma; give one",
    "intermittent: {share: 0.2, size: 4, sd: 9}": "expected an sd between 0.01 and 1.41 of the size for law: gamma, "
    "got 2.25 of it; change sd, or take lognormal",
    "intermittent: {share: 0.2, size: 1, law: counts}": "expected a mean size above 1 for law: counts, got 1",
    "intermittent: {share: 0.2, size: 5, sd: 1, law: counts}": "expected an sd above √(size − 1) = 2 for law: counts",
    "negative_binomial: {mean: 40000, size: 0.1}": "expected a size of at least mean/10,000 = 4, got 0.1",
}


@pytest.mark.parametrize("text", FAULTS)
def test_faults_say_how_to_mend_them(text):
    with pytest.raises(SpecError) as error:
        graph_of(f"  x: {{{text}}}")
    assert FAULTS[text] in str(error.value)
