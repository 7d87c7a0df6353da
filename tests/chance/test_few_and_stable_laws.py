"""Bernoulli, empirical and stable laws against SciPy, statsmodels, and characteristic functions in mpmath."""

from __future__ import annotations

import math
import pickle

import mpmath as mp
import numpy as np
import pytest
from scipy import special, stats

from procgen.chance.laws import Bernoulli, Empirical, Stable
from procgen.theory import theory
from procgen.theory.copula import hermite_coefficients, law_correlation

from ..terms.helpers import graph_of

DERIVED = {
    "bernoulli": "test_bernoulli_in_a_series",
    "empirical": "test_a_sample_in_a_series",
    "stable": "test_a_filter_of_stable_shocks_is_stable",
}
SAMPLE = tuple(np.round(np.random.default_rng(8).gamma(1.3, 3, 97), 1).tolist())  # with ties
P = np.concatenate([2.0 ** -np.arange(53, 1, -3.0), np.linspace(0.001, 0.5, 60)])
U = np.concatenate([P, 1 - P])
EXAMPLES = [
    Bernoulli(p=0.3),
    Bernoulli(p=0.999),
    Empirical(values=SAMPLE),
    Empirical(values=SAMPLE, smoothed=True),
    Empirical(values=(-3, 0, 0, 50), smoothed=0.05),
    Stable(alpha=1.7, beta=0.5),
    Stable(alpha=0.6, beta=-1),
    Stable(alpha=1),
]


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_any_memory_and_any_blocks_and_rising(law):
    u = np.random.default_rng(2).random((40, 31))
    held = u.copy()
    assert law.shocks(held, out=held) is held
    assert np.array_equal(held, np.array([law.shocks(row) for row in u]))
    x = law.shocks(np.sort(U))
    assert (np.diff(x) >= -1e-13 * np.maximum(np.abs(x[1:]), 1.0)).all()
    assert pickle.loads(pickle.dumps(law)) == law and hash(law) == hash(pickle.loads(pickle.dumps(law)))
    z = np.array([-2.2, -0.4, 0.1, 1.7])
    assert law.shocks_from_normals(z) == pytest.approx(law.shocks(stats.norm.cdf(z)), rel=1e-9)


@pytest.mark.parametrize("p", [0.02, 0.3, 0.5, 0.95])
def test_bernoulli_against_scipy(p):
    law, raw = Bernoulli(p=p), stats.bernoulli(p)
    _, _, skewness, excess = raw.stats("mvsk")
    assert (law.skewness, law.excess_kurtosis) == (pytest.approx(float(skewness)), pytest.approx(float(excess)))
    assert (law.moment(1), law.moment(2)) == (pytest.approx(0, abs=1e-15), pytest.approx(1))
    wanted = (raw.ppf(U) - p) / math.sqrt(p * (1 - p))
    assert law.shocks(U) == pytest.approx(wanted)
    assert law.shocks(np.array([1 - p - 1e-12, 1 - p + 1e-12])) == pytest.approx(law.ends)
    assert law.mean_size == pytest.approx(2 * math.sqrt(p * (1 - p)))  # from E abs(x - p) = 2 p (1 - p)
    assert law.balanced == (p == 0.5)


def test_a_sample_against_numpy():
    """NumPy's quantile by the inverted distribution function; moments of the sample by SciPy."""
    law = Empirical(values=SAMPLE)
    standard = (np.array(SAMPLE) - np.mean(SAMPLE)) / np.std(SAMPLE)
    u = np.random.default_rng(1).random(500)
    assert law.shocks(u) == pytest.approx(np.quantile(standard, u, method="inverted_cdf"))
    assert law.skewness == pytest.approx(stats.skew(SAMPLE)) and law.excess_kurtosis == pytest.approx(
        stats.kurtosis(SAMPLE)
    )
    assert law.mean_size == pytest.approx(np.abs(standard).mean())
    assert law.expect(lambda z: max(z, 0.0)) == pytest.approx(np.maximum(standard, 0).mean())
    values, counts = np.unique(standard.round(9), return_counts=True)
    assert law.points.values == pytest.approx(values, abs=2e-9) and law.points.chances * 97 == pytest.approx(counts)
    assert Empirical(values=(1, 2, 4, 5)).balanced and not law.balanced


@pytest.mark.parametrize("values", [SAMPLE, (-3, 0, 0, 50)], ids=["many", "few"])
@pytest.mark.parametrize("width", [True, 0.05, 0.6])
def test_a_smoothed_sample_against_scipys_kernel_density(values, width):
    law = Empirical(values=values, smoothed=width)
    h = law.bandwidth
    standard = (np.array(values) - np.mean(values)) / np.std(values)
    kernel = stats.gaussian_kde(standard, bw_method=h / standard.std(ddof=1))
    whole = math.sqrt(1 + h * h)
    for u, x in zip(P.tolist(), law.shocks(P).tolist(), strict=True):
        below = special.ndtr((x * whole - standard) / h).mean()
        assert below == pytest.approx(u, rel=1e-9)
        if u > 1e-3:
            assert kernel.integrate_box_1d(-np.inf, x * whole) == pytest.approx(u, rel=1e-7)
    above = law.shocks(1 - P)
    assert special.ndtr((standard[:, None] - above * whole) / h).mean(axis=0) == pytest.approx(P, rel=1e-9)
    for k in (1, 2, 3, 4, 6):
        assert law.moment(k) == pytest.approx(law.expect(lambda z, k=k: z**k), rel=1e-8, abs=1e-9)
    assert law.moment(2) == pytest.approx(1, rel=1e-12)
    assert law.mean_size == pytest.approx(law.expect(abs), rel=1e-9)
    distribution = law.distribution()
    x = law.shocks(U)
    assert distribution.ppf(U) == pytest.approx(x, abs=1e-8) and distribution.cdf(x) == pytest.approx(U, rel=1e-9)
    assert distribution.pdf(0.3) == pytest.approx(float(kernel(0.3 * whole)[0]) * whole, rel=1e-9)


def test_the_bandwidth_is_silvermans():
    """statsmodels takes 1.349 where Silverman (1986, eq. 3.31) has 1.34, and n - 1: the difference is below 1.5 %."""
    from statsmodels.nonparametric.bandwidths import bw_silverman

    law = Empirical(values=SAMPLE, smoothed=True)
    assert law.bandwidth == pytest.approx(bw_silverman(np.array(SAMPLE)) / np.std(SAMPLE), rel=0.015)
    low, high = np.quantile(SAMPLE, [0.25, 0.75]) / np.std(SAMPLE)
    assert law.bandwidth == pytest.approx(0.9 * min(1, (high - low) / 1.34) * 97 ** (-0.2), rel=1e-12)


def test_levys_law_to_the_last_uniform():
    """alpha = 1/2, beta = 1 is the law of 1 / n^2: closed in SciPy, and so is Cauchy's."""
    law, other = Stable(alpha=0.5, beta=1), Stable(alpha=0.5, beta=-1)
    assert stats.levy.sf(law.shocks(1 - P)) == pytest.approx(P, rel=1e-9)
    assert stats.levy.cdf(law.shocks(P)) == pytest.approx(P, rel=1e-9)
    assert other.shocks(P) == pytest.approx(-law.shocks(1 - P), rel=1e-9)
    assert stats.cauchy.cdf(Stable(alpha=1).shocks(P)) == pytest.approx(P, rel=1e-12)
    assert Stable(alpha=1).shocks(1 - P) == pytest.approx(-Stable(alpha=1).shocks(P), rel=1e-12)


STABLE = [(1.7, 0), (1.5, 0.5), (1.9, -1), (1.1, 0.3), (0.8, -0.6), (1.5, 1), (0.3, 0.5), (1.98, 0.9)]


def by_characteristic_function(alpha, beta, x):
    """F(x) = 1/2 - (1 / pi) integral of Im(exp(-i t x) phi(t)) / t (Gil-Pelaez 1951), phi of S(alpha, beta; 1)."""
    with mp.workdps(20):
        tangent, a, x = beta * mp.tan(mp.pi * mp.mpf(alpha) / 2), mp.mpf(alpha), mp.mpf(x)

        def integrand(t):
            return mp.exp(-(t**a)) * mp.sin(tangent * t**a - t * x) / t

        last = mp.mpf(46) ** (1 / a)
        period = mp.pi / max(abs(x), 1)
        cuts = [0, *[10 ** mp.mpf(-k) for k in range(12, 0, -1)], *mp.arange(0.1 + period, last, period), last]
        return float(mp.mpf(1) / 2 - mp.quad(integrand, cuts) / mp.pi)


@pytest.mark.parametrize(("alpha", "beta"), [(a, b) for a, b in STABLE if a > 1])
def test_stable_quantiles_against_their_characteristic_function(alpha, beta):
    u = np.array([0.02, 0.3, 0.65, 0.98])
    for area, x in zip(u.tolist(), Stable(alpha=alpha, beta=beta).shocks(u).tolist(), strict=True):
        assert by_characteristic_function(alpha, beta, x) == pytest.approx(area, abs=1e-11)


@pytest.mark.parametrize(("alpha", "beta"), STABLE)
def test_stable_quantiles_against_scipy(alpha, beta):
    """scipy.stats.levy_stable integrates Nolan's (1997) form; where it loses digits far out, the body is compared."""
    u = np.array([0.005, 0.02, 0.1, 0.3, 0.5, 0.7, 0.9, 0.98, 0.995])
    x = Stable(alpha=alpha, beta=beta).shocks(u)
    assert stats.levy_stable.parameterization == "S1"
    assert stats.levy_stable.cdf(x, alpha, beta) == pytest.approx(u, abs=1e-9)
    law = Stable(alpha=alpha, beta=beta).distribution()
    assert law.cdf(x) == pytest.approx(u, rel=1e-10) and law.ppf(u) == pytest.approx(x, rel=1e-8, abs=1e-10)
    assert law.isf(1 - u) == pytest.approx(x, rel=1e-8, abs=1e-10) and law.sf(x) == pytest.approx(1 - u, rel=1e-10)
    assert law.pdf(x) == pytest.approx(stats.levy_stable.pdf(x, alpha, beta), rel=1e-6)


@pytest.mark.parametrize(("alpha", "beta"), [(1.7, 0.5), (1.3, -0.2), (0.7, 0.4)])
def test_stable_tails_are_power_laws(alpha, beta):
    """x^alpha P(z > x) -> (1 + beta) sin(pi alpha / 2) Gamma(alpha) / pi (Nolan 2020, theorem 1.2; from memory)."""
    p = 2.0**-52
    x = float(Stable(alpha=alpha, beta=beta).shocks(1 - p))
    limit = (1 + beta) * math.sin(math.pi * alpha / 2) * math.gamma(alpha) / math.pi
    assert p * x**alpha == pytest.approx(limit, rel=1e-4)


def test_what_exists_of_a_stable_law():
    law = Stable(alpha=1.7, beta=0.5)
    assert (law.moment(1), law.moment(2), law.highest_moment) == (0.0, None, 1.7) and law.needs_spread
    assert Stable(alpha=0.7).moment(1) is None and math.isnan(Stable(alpha=0.7).distribution().mean())
    u = (np.arange(200_000) + 0.5) / 200_000
    capped = np.abs(law.shocks(u)) < 1e3
    far = 1e3**-0.7 * 1.7 / 0.7 * math.sin(math.pi * 0.85) * math.gamma(1.7) / math.pi  # mean beyond 1000, each side
    assert law.shocks(u)[capped].mean() == pytest.approx(-(1.5 - 0.5) * far, abs=2e-3)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Bernoulli(p=1), "bernoulli: expected p to be a number in (0, 1), got 1"),
        (
            lambda: Empirical(values=(2, 2)),
            "empirical: expected at least two different values, all finite, got 2 values between 2 and 2",
        ),
        (lambda: Stable(alpha=2), "stable: expected alpha to be a number in [0.2, 2), got 2"),
        (lambda: Stable(alpha=1.01), "stable: expected alpha to be 1 or at least 0.05 away from 1, got 1.01"),
        (
            lambda: Stable(alpha=1, beta=0.5),
            "stable: expected beta to be 0 where alpha is 1, got 0.5; change one",
        ),
    ],
)
def test_parameters_out_of_their_domain(make, message):
    with pytest.raises(ValueError) as error:
        make()
    assert str(error.value) == message


@pytest.mark.parametrize(("p", "q", "rho"), [(0.3, 0.8, 0.6), (0.5, 0.5, -0.9), (0.05, 0.4, 0.3)])
def test_correlation_of_two_bernoullis(p, q, rho):
    """By the bivariate normal area of SciPy: P(both upper) under a normal copula."""
    both = stats.multivariate_normal(cov=[[1, rho], [rho, 1]]).cdf([special.ndtri(p), special.ndtri(q)])
    wanted = (both - p * q) / math.sqrt(p * (1 - p) * q * (1 - q))
    seen, bound = law_correlation(Bernoulli(p=p), Bernoulli(p=q), rho)
    assert seen == pytest.approx(wanted, abs=1e-7) and bound < 1e-7
    assert 0.95 < float((hermite_coefficients(Bernoulli(p=p)) ** 2).sum()) < 1.0  # all of them: its variance, 1


# in series


def moments_of(body, **rest):
    graph = graph_of(f"  x: {body}", **rest)
    return theory(graph.spec, graph)["x"]


def test_bernoulli_in_a_series():
    """A moving average of two shocks, by enumeration of the four pairs of values."""
    x = moments_of("{ma: {theta: 0.5, sd: 2, law: {bernoulli: {p: 0.3}}}}")
    raw = {1: 0.3, 0: 0.7}
    pairs = [
        (p * q, 2 / math.sqrt(0.21) * ((a - 0.3) + 0.5 * (b - 0.3))) for a, p in raw.items() for b, q in raw.items()
    ]
    second, fourth = (sum(w * v**k for w, v in pairs) for k in (2, 4))
    assert x.variance([7]) == pytest.approx(second) and x.autocovariance([1]) == pytest.approx(4 * 0.5)
    assert x.excess_kurtosis == pytest.approx(fourth / second**2 - 3)
    y = moments_of("[{constant: 1}, {white_noise: {sd: 2, law: {bernoulli: {p: 0.3}}}}]")
    values = 1 + 2 * (np.array([0, 1]) - 0.3) / math.sqrt(0.21)
    law = y.marginal(3)
    assert law.cdf(values - 0.01) == pytest.approx([0, 0.7]) and law.cdf(values + 0.01) == pytest.approx([0.7, 1])
    assert law.ppf([0.69, 0.71]) == pytest.approx(values) and (law.mean(), law.var()) == pytest.approx((1, 4))
    assert y.lumpy and y.highest_moment == math.inf


def test_a_sample_in_a_series():
    """Moments of a sample and of the mixture of normals about it, by SciPy's mixture of their moments."""
    listed = ", ".join(map(str, SAMPLE))
    for smoothed in ("false", "0.4"):
        law = f"{{empirical: {{values: [{listed}], smoothed: {smoothed}}}}}"
        x = moments_of(f"{{ma: {{theta: 0.5, sd: 2, law: {law}}}}}")
        z = np.array(SAMPLE)
        fourth = stats.kurtosis(z)
        if smoothed != "false":  # cumulants add; those of a normal beyond the second are 0
            fourth = fourth / (1 + 0.4**2) ** 2
        assert x.variance([7]) == pytest.approx(4 * 1.25)
        assert x.excess_kurtosis == pytest.approx(fourth * (1 + 0.5**4) / 1.25**2)


@pytest.mark.parametrize(("alpha", "beta", "phi"), [(1.7, 0.5, 0.6), (1.4, -1, -0.8), (0.8, 0.3, 0.5), (1, 0, 0.9)])
def test_a_filter_of_stable_shocks_is_stable(alpha, beta, phi):
    """An autoregression x = sum of phi^k a: geometric sums of abs(phi)^alpha give spread and skewness (by hand)."""
    shock = f"{{white_noise: {{spread: 2, law: {{stable: {{alpha: {alpha}, beta: {beta}}}}}}}}}"
    x = moments_of(f"[{{constant: 5}}, {{ar: {{phi: {phi}, shock: {shock}}}, times: -1}}]")
    size = abs(phi) ** alpha
    spread = 2 / (1 - size) ** (1 / alpha)
    skew = -beta * (1 if phi > 0 else (1 - size) / (1 + size))
    law, u = x.marginal(9), np.array([0.02, 0.3, 0.9])
    wanted = 5 + spread * Stable(alpha=alpha, beta=skew).shocks(u)
    assert law.ppf(u) == pytest.approx(wanted, rel=1e-8)
    if alpha != 1:
        assert stats.levy_stable.cdf(law.ppf(u), alpha, skew, 5, spread) == pytest.approx(u, abs=1e-8)
    assert x.variance([3]) is None and x.reason("variance") == "infinite variance of x.ar"
    assert x.highest_moment == alpha and x.stationarity.verdict == "infinite variance"
    if alpha > 1:
        assert x.mean([3]) == [5]
    else:
        assert x.mean([3]) is None and x.reason("mean") == "x.ar has a law without a mean"


def test_other_sums_of_stable_shocks():
    """A walk after t steps has spread t^(1/alpha); two noises of one index add; of two indices there is no law."""
    noise = "{{white_noise: {{spread: {}, law: {{stable: {{alpha: {}, beta: {}}}}}}}, as: {}}}"
    walk = moments_of(f"{{random_walk: {{start: 3, shock: {noise.format(2, 1.5, 0.4, 'w')}}}}}".replace(", as: w", ""))
    u = np.array([0.1, 0.8])
    wanted = 3 + 2 * 10 ** (1 / 1.5) * Stable(alpha=1.5, beta=0.4).shocks(u)
    assert walk.marginal(10).ppf(u) == pytest.approx(wanted, rel=1e-8)
    assert walk.marginal(0) is None and "known, not random" in walk.reason("marginal")
    both = moments_of(f"[{noise.format(2, 1.5, 1, 'a')}, {noise.format(1, 1.5, -1, 'b')}]")
    size = 2**1.5 + 1
    law = Stable(alpha=1.5, beta=(2**1.5 - 1) / size)
    assert both.marginal(4).ppf(u) == pytest.approx(size ** (1 / 1.5) * law.shocks(u), rel=1e-8)
    mixed = moments_of(f"[{noise.format(2, 1.5, 1, 'a')}, {noise.format(1, 1.6, -1, 'b')}]")
    assert mixed.marginal(4) is None and "with one index" in mixed.reason("marginal")
