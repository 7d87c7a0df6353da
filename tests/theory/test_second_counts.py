"""Counts, demand, jumps and prices: sums over their probabilities, powers of whole chains, and impulses.

The probabilities are SciPy's; what is averaged over a Gaussian body is averaged by quadrature (tests/theory/gauss.py).
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

import procgen as pg
from procgen.theory import theory

from ..terms.helpers import draw, graph_of, jacobian
from .gauss import over_one, over_two

DERIVED = {
    "poisson": "test_counts_given_an_autoregression",
    "negative_binomial": "test_counts_given_an_autoregression",
    "inar": "test_thinned_counts_by_their_chain",
    "intermittent": "test_intermittent_demand_by_its_chain",
    "zero_inflated": "test_counts_that_are_left_out",
    "compound_poisson": "test_sums_of_jumps_by_their_number",
    "geometric_brownian_motion": "test_prices_step_by_step",
    "merton": "test_prices_step_by_step",
    "bridge": "test_a_bridge_by_impulses",
    "given": "test_given_numbers",
}
LAGS = np.array([0, 1, 3, 8])


def series_of(term):
    graph = graph_of(f"  x: {{{term}}}")
    return theory(graph.spec, graph)["x"]


def agree(found, exact, size):
    np.testing.assert_allclose(found, exact, rtol=0, atol=1e-9 * size)


def scipys(kind, mean):
    return stats.poisson(mean) if kind == "poisson" else stats.nbinom(2.5, 2.5 / (2.5 + np.asarray(mean)))


@pytest.mark.parametrize("kind", ["poisson", "negative_binomial"])
@pytest.mark.parametrize("spread", [0.3, 0.8])
def test_counts_given_an_autoregression(kind, spread):
    """Total expectation over the body: E N, E (N - m)^k, and products of conditional means at two steps."""
    size = "" if kind == "poisson" else "size: 2.5, "
    x = series_of(f"{kind}: {{mean: 4, {size}of: [{{ar: {{phi: 0.8, total_sd: {spread}}}}}]}}")

    def at(z):
        return 4.0 * np.exp(spread * z)

    mean = over_one(at)
    variance = over_one(lambda z: scipys(kind, at(z)).var() + (at(z) - mean) ** 2)
    assert float(x.mean(5)) == pytest.approx(mean, rel=1e-9)
    exact = [variance, *(over_two(lambda a, b: (at(a) - mean) * (at(b) - mean), 0.8**h) for h in LAGS[1:])]
    agree(x.autocovariance(LAGS, 5), exact, variance)

    def squared(z):
        return scipys(kind, at(z)).var() + (at(z) - mean) ** 2

    def fourth(z):
        _, var, skew, excess = scipys(kind, at(z)).stats(moments="mvsk")
        gap = at(z) - mean
        return (excess + 3) * var**2 + 4 * skew * var**1.5 * gap + 6 * var * gap**2 + gap**4

    kurtosis = over_one(fourth) / variance**2
    if x.excess_kurtosis is not None:
        assert x.excess_kurtosis == pytest.approx(kurtosis - 3, rel=1e-8)
        exact = [over_two(lambda a, b: squared(a) * squared(b), 0.8**h) - variance**2 for h in LAGS[1:]]
        agree(x.autocovariance_of_squares(LAGS[1:], 5), exact, kurtosis * variance**2)
    law = x.marginal(5)
    for k in (0, 3, 20):
        assert float(law.cdf(k)) == pytest.approx(over_one(lambda z, k=k: scipys(kind, at(z)).cdf(k)), rel=1e-8)


def thinned_chain(alpha, marginal, top):
    """Transitions of n -> Binomial(n, alpha) + arrivals, the arrivals found by dividing them out of the marginal."""
    n = np.arange(top)
    stay = stats.binom.pmf(n[None, :], n[:, None], alpha)
    kept = marginal @ stay  # the law of what is kept
    arrivals = np.zeros(top)
    for k in range(top):
        arrivals[k] = (marginal[k] - arrivals[:k] @ kept[k:0:-1]) / kept[0]
    return np.array([np.convolve(row, arrivals)[:top] for row in stay])


@pytest.mark.parametrize("size", [None, 1.5])
def test_thinned_counts_by_their_chain(size):
    """All transitions between 0 and 100 counts: powers of the whole matrix."""
    n, mean = np.arange(100), 2.0
    law = stats.poisson(mean) if size is None else stats.nbinom(size, size / (size + mean))
    shares = law.pmf(n)
    moves = thinned_chain(0.6, shares, len(n))
    np.testing.assert_allclose(shares @ moves, shares, atol=1e-12)
    x = series_of(f"inar: {{alpha: 0.6, mean: {mean}{'' if size is None else f', size: {size}'}}}")
    assert float(x.mean(3)) == pytest.approx(mean)
    for power, found in ((1, x.autocovariance(LAGS)), (2, x.autocovariance_of_squares(LAGS))):
        f = (n - mean) ** power
        centred = f - shares @ f
        exact = [shares * centred @ np.linalg.matrix_power(moves, h) @ centred for h in LAGS]
        agree(found, exact, exact[0])
    assert float(x.marginal(2).cdf(3)) == pytest.approx(law.cdf(3))
    assert x.excess_kurtosis == pytest.approx(float(law.stats("k")), rel=1e-9)


SIZES = {
    "gamma": stats.gamma(4.0, scale=3.0),
    "lognormal": stats.lognorm(np.sqrt(np.log(1.25)), scale=12 / np.sqrt(1.25)),
    "counts": stats.nbinom(121 / 25, 11 / 36, loc=1),  # 1 and a negative binomial of mean 11, variance 36
}


@pytest.mark.parametrize("law", SIZES)
def test_intermittent_demand_by_its_chain(law):
    """Mean size 12, sd 6; on with probability 0.2, for 3 steps on average: functions of a chain of two states."""
    sizes, p, stay = SIZES[law], 0.2, 1 - 1 / 3
    assert (sizes.mean(), sizes.std()) == (pytest.approx(12), pytest.approx(6))
    enter = p * (1 - stay) / (1 - p)
    moves, shares = np.array([[1 - enter, enter], [1 - stay, stay]]), np.array([1 - p, p])
    x = series_of(f"intermittent: {{share: 0.2, stay: 3, size: 12, sd: 6, law: {law}}}")
    mean = 12 * p
    gap = 12 - mean
    second = np.array([mean**2, 36 + gap**2])  # E (x - mean)^2 off and on
    variance = shares @ second
    _, var, skew, excess = (float(v) for v in sizes.stats(moments="mvsk"))
    fourth = np.array([mean**4, (excess + 3) * var**2 + 4 * skew * var**1.5 * gap + 6 * var * gap**2 + gap**4])
    first = np.array([-mean, gap])
    power = [np.linalg.matrix_power(moves, h) for h in LAGS[1:]]
    agree(x.autocovariance(LAGS), [variance, *(shares * first @ m @ first for m in power)], variance)
    squares = [shares @ fourth - variance**2, *(shares * second @ m @ second - variance**2 for m in power)]
    agree(x.autocovariance_of_squares(LAGS), squares, squares[0])
    assert x.excess_kurtosis == pytest.approx(shares @ fourth / variance**2 - 3, rel=1e-9)
    assert float(x.mean(1)) == pytest.approx(mean)


def test_counts_that_are_left_out():
    """b N with b = 1 seven times in ten: E b N = 0.7 E N, Cov = 0.49 Cov but for the same step."""
    x = series_of("zero_inflated: {of: [{poisson: {mean: 4, of: [{ar: {phi: 0.8, total_sd: 0.5}}]}}], share: 0.3}")

    def at(z):
        return 4.0 * np.exp(0.5 * z)

    mean, second = 0.7 * over_one(at), 0.7 * over_one(lambda z: at(z) + at(z) ** 2)
    variance = second - mean**2
    exact = [variance, *(0.49 * over_two(lambda a, b: at(a) * at(b), 0.8**h) - mean**2 for h in LAGS[1:])]
    assert float(x.mean(5)) == pytest.approx(mean)
    agree(x.autocovariance(LAGS, 5), exact, variance)


@pytest.mark.parametrize("law", ["normal", "laplace", "{gamma: {shape: 4}}"])
def test_sums_of_jumps_by_their_number(law):
    """Given n jumps the moments are those of a sum of n; n is added up over the Poisson law."""
    rate, m, sd = 1.7, 0.4, 1.5
    skew, excess = {"normal": (0, 0), "laplace": (0, 3)}.get(law, (1.0, 1.5))
    x = series_of(f"compound_poisson: {{rate: {rate}, mean: {m}, sd: {sd}, law: {law}}}")
    n = np.arange(80)
    p, gap = stats.poisson.pmf(n, rate), n * m - rate * m
    variance = p @ (n * sd**2 + gap**2)
    fourth = p @ (
        n * excess * sd**4 + 3 * n**2 * sd**4 + 4 * n * skew * sd**3 * gap + 6 * n * sd**2 * gap**2 + gap**4
    )
    assert float(x.mean(0)) == pytest.approx(rate * m)
    agree(x.autocovariance([0, 1, 10_000]), [variance, 0, 0], variance)
    assert x.excess_kurtosis == pytest.approx(fourth / variance**2 - 3, rel=1e-9)
    agree(x.autocovariance_of_squares([0, 1]), [fourth - variance**2, 0], fourth)


@pytest.mark.parametrize("kind", ["geometric_brownian_motion", "merton"])
def test_prices_step_by_step(kind):
    """Independent growths: E S(s) S(t) = S(0)^2 g2^s g1^(t - s), g_k = E growth^k added up over numbers of jumps."""
    drift, sd, rate, jump, jump_sd = 0.01, 0.1, 0.6 if kind == "merton" else 0.0, -0.05, 0.2
    jumps = f"rate: {rate}, jump_mean: {jump}, jump_sd: {jump_sd}, " if rate else ""
    x = series_of(f"{kind}: {{drift: {drift}, sd: {sd}, {jumps}start: 100}}")
    n = np.arange(40)
    level = drift - sd**2 / 2 - rate * (np.exp(jump + jump_sd**2 / 2) - 1)  # of the logarithm, apart from its jumps
    spread = np.sqrt(sd**2 + n * jump_sd**2)

    def grown(k):
        by_jumps = [over_one(lambda z, i=i: np.exp(k * (level + i * jump + spread[i] * z))) for i in n]
        return float(stats.poisson.pmf(n, rate) @ by_jumps)

    growth = grown(1), grown(2)
    t = np.array([0, 1, 4, 20])
    early, late = np.minimum(t[:, None], t), np.maximum(t[:, None], t)
    exact = 1e4 * (growth[1] ** early * growth[0] ** (late - early) - growth[0] ** (early + late))
    np.testing.assert_allclose(x.mean(t), 100 * growth[0] ** t, rtol=1e-10)
    np.testing.assert_allclose(x.covariance(t[:, None], t), exact, rtol=1e-8, atol=1e-8)
    law = x.marginal(20)
    for value in (50.0, 100.0, 180.0):
        z = (np.log(value / 100) - 20 * level - n * jump) / np.sqrt(20 * sd**2 + n * jump_sd**2)
        assert float(law.cdf(value)) == pytest.approx(stats.poisson.pmf(n, 20 * rate) @ stats.norm.cdf(z), rel=1e-8)


def test_a_bridge_by_impulses(monkeypatch):
    """Unit shocks through the value code, and its path without any: all pairs of steps, past its end too."""
    graph = graph_of("  x: {bridge: {start: 100, end: 120, until: 15, sd: 2}}", steps=18)
    x, t = theory(graph.spec, graph)["x"], np.arange(18)
    weights = jacobian(graph, 18, monkeypatch)["x"]
    agree(x.covariance(t[:, None], t), weights @ weights.T, 15.0)
    quiet = graph_of("  x: {bridge: {start: 100, end: 120, until: 15, sd: 1.0e-12}}", steps=18)
    np.testing.assert_allclose(x.mean(t), draw(quiet, 0, 1, [18])["x"][:, 0], rtol=1e-11)


@pytest.mark.parametrize(("after", "rest"), [("hold", [6, 6, 6]), ("repeat", [3, 5, 4])])
def test_given_numbers(after, rest):
    graph = graph_of(f"  x: {{given: {{values: [3, 5, 4, 6], after: {after}}}}}", steps=7)
    x = theory(graph.spec, graph)["x"]
    np.testing.assert_array_equal(x.mean(np.arange(7)), [3, 5, 4, 6, *rest])
    assert not x.variance(np.arange(7)).any()


@pytest.mark.parametrize("law", ["normal", "laplace"])
def test_jumps_and_their_number_go_together(law):
    """E of the number times the sum, number by number: E n · n m, less the product of means (SciPy's Poisson)."""
    rate, m, sd = 0.7, 1.5, 2.0
    graph = graph_of(
        "  a: [{use: j}]\n  b: [{use: j.compound_poisson.jumps}]\n  c: [{use: j}, {use: j.compound_poisson.jumps}]",
        rest=f"shared:\n  j: [{{compound_poisson: {{rate: {rate}, mean: {m}, sd: {sd}, law: {law}}}}}]",
    )
    known = theory(graph.spec, graph)
    n = np.arange(60)
    chance, given = stats.poisson.pmf(n, rate), n * m
    expected = chance @ (n * given) - (chance @ n) * (chance @ given)
    at = np.array([4, 5])
    for cross in (known.cross("a", "b"), known.cross("b", "a")):
        assert cross.covariance(at, np.array([4, 4])) == pytest.approx([expected, 0.0], abs=1e-14)
    spread = rate * (m**2 + sd**2) + rate + 2 * expected
    assert known["c"].variance(at) == pytest.approx([spread] * 2, rel=1e-12)


@pytest.mark.parametrize(("mean", "sd", "off"), [(1000, 0.5, 1e-11), (10_000, 1.0, 1e-5), (2, 4.6, 1e-4)])
def test_counts_over_a_mean_that_is_wide_beside_their_own_spread(mean, sd, off):
    """Poisson numbers over a lognormal mean: SciPy's distribution function, averaged over 50,001 normals.

    The function rises over 1 / (sd √k) of a normal, at least 7e-4 here: two steps of the grid, and the trapezoidal rule
    is off by exp(−2π² 2²) beside it.
    """
    head = {"procgen": 1, "seed": 3, "paths": 2000, "time": {"steps": 3}}
    spec = head | {"series": {"x": [{"poisson": {"mean": mean, "of": [{"white_noise": {"sd": sd}}]}}]}}
    law, z = pg.theory(spec)["x"].marginal(1), np.linspace(-9, 9, 50_001)
    weights = stats.norm.pdf(z) * (z[1] - z[0])

    def cdf(k):
        return float(weights @ stats.poisson.cdf(k, mean * np.exp(sd * z)))

    for k in np.round(mean * np.exp(sd * np.linspace(-2, 2, 7))):
        assert float(law.cdf(k + 0.5)) == pytest.approx(cdf(k), abs=off)
    for p in (0.3, 0.5, 0.9, 0.99):
        count = float(law.ppf(p))
        assert count == pytest.approx(round(count), abs=1e-6)
        assert cdf(round(count)) > p - off and cdf(round(count) - 1) < p + off
    assert pg.validate(pg.render(spec), false_alarm=1e-8).agrees is not False
