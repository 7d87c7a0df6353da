"""Threshold garch, exponential garch and stochastic volatility: published moments, recursions beside arch's, starts."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from arch.univariate import EGARCH, GARCH
from scipy import stats
from scipy.integrate import quad

from procgen.spec.reader import SpecError
from procgen.terms.recover import forecast
from procgen.terms.run import Run
from procgen.theory import theory

from .helpers import draw, graph_of

LAGS = np.arange(4)
ROOT = math.sqrt(2 / math.pi)


def moments(term, lags=LAGS):
    """Variance, kurtosis and autocorrelations of squares at lags 1 on, as theory states them."""
    graph = graph_of(f"  x: {{{term}}}")
    x = theory(graph.spec, graph)["x"]
    squares = x.autocovariance_of_squares(lags)
    assert np.array_equal(x.autocovariance(lags)[1:], np.zeros(len(lags) - 1)) and not x.gaussian
    return float(x.variance(0)), x.excess_kurtosis + 3, (squares[1:] / squares[0]).tolist()


@pytest.mark.parametrize(
    ("term", "variance", "kurtosis", "rho"),
    [
        # He & Teräsvirta (1999), J. Econometrics 92, for the family of Glosten, Jagannathan & Runkle; recomputed
        (
            "gjr_garch: {omega: 0.05, alpha: 0.03, gamma: 0.08, beta: 0.87}",
            0.8333333333,
            3.4302554028,
            [0.1213419563, 0.1140614390, 0.1072177526],
        ),
        # without gamma Bollerslev's (1986) garch(1,1), whose squares are in Bollerslev (1988)
        ("gjr_garch: {omega: 0.1, alpha: 0.1, gamma: 0, beta: 0.8}", 1, 3.352941176, [0.14, 0.126, 0.1134]),
        # Nelson (1991), appendix, for normal shocks; recomputed
        (
            "egarch: {omega: 0, alpha: 0.2, gamma: -0.1, beta: 0.9}",
            1.0712493068,
            3.5091227775,
            [0.1457715565, 0.1278601370, 0.1124759712],
        ),
        ("egarch: {omega: -0.1, alpha: 0.1, gamma: -0.05, beta: 0.95}", 0.1397971290, 3.2144014318, []),
    ],
)
def test_published_moments(term, variance, kurtosis, rho):
    found = moments(term)
    assert found[0] == pytest.approx(variance, rel=1e-9)
    assert found[1] == pytest.approx(kurtosis, rel=1e-9)
    assert found[2][: len(rho)] == pytest.approx(rho, rel=1e-8)


def test_stochastic_volatility_against_taylor():
    """Taylor (1986), ch. 3: kurtosis 3 exp(s²); autocorrelation of squares (exp(s² φᵏ) − 1) / (3 exp(s²) − 1)."""
    phi, eta = 0.95, 0.26
    s2 = eta**2 / (1 - phi**2)
    variance, kurtosis, rho = moments(f"stochastic_volatility: {{scale: 2, phi: {phi}, eta: {eta}}}")
    assert variance == pytest.approx(4 * math.exp(s2 / 2)) and kurtosis == pytest.approx(3 * math.exp(s2))
    wanted = [(math.exp(s2 * phi**k) - 1) / (3 * math.exp(s2) - 1) for k in LAGS[1:]]
    assert rho == pytest.approx(wanted, rel=1e-11)
    assert moments(f"stochastic_volatility: {{sd: 3, phi: {phi}, eta: {eta}}}")[0] == pytest.approx(9, rel=1e-13)


def test_leverage_against_an_integral_over_its_normals():
    """E e² e'² of neighbours, by quadrature over z and the two normals beside it, one after the other."""
    phi, eta, rho = 0.8, 0.5, -0.7
    s2 = eta**2 / (1 - phi**2)
    name = f"stochastic_volatility: {{scale: 1, phi: {phi}, eta: {eta}, rho: {rho}}}"
    variance, kurtosis, found = moments(name)
    x, w = np.polynomial.hermite_e.hermegauss(60)
    w = w / w.sum()
    level = (w * np.exp((1 + phi) * math.sqrt(s2) * x)).sum()
    own = (w * x**2 * np.exp(eta * rho * x)).sum() * (w * np.exp(eta * math.sqrt(1 - rho**2) * x)).sum()
    first = (level * own - variance**2) / ((kurtosis - 1) * variance**2)
    assert found[0] == pytest.approx(first, rel=1e-10)


@pytest.mark.parametrize(
    ("law", "scipys"),
    [
        ("{ged: {shape: 1.3}}", stats.gennorm(1.3)),
        ("laplace", stats.laplace()),
        ("{gamma: {shape: 4}}", stats.gamma(4)),
        ("{skew_normal: {alpha: 3}}", stats.skewnorm(3)),
        ("uniform", stats.uniform()),
    ],
)
def test_egarch_under_other_laws_by_products_of_quadratures(law, scipys):
    """Nelson's (1991) products E exp(β^i g), one SciPy quadrature a factor."""
    a, g, b = 0.3, -0.15, 0.25
    mean, sd = scipys.mean(), scipys.std()

    def expect(f):
        points = [scipys.ppf(q) for q in (1e-200, 1e-15, 1e-6, 0.3, 0.7, 1 - 1e-6)]
        points += [mean, scipys.isf(1e-15), scipys.isf(1e-200)]
        points = sorted(points)

        def value(x):
            return f((x - mean) / sd) * scipys.pdf(x)

        return sum(quad(value, *ends, epsabs=1e-14, limit=200)[0] for ends in pairwise(points))

    size = expect(abs)

    def power(q):
        return expect(lambda z: math.exp(q * (a * (abs(z) - size) + g * z)))

    def product(q):
        return math.prod(power(q * b**i) for i in range(18))

    variance, kurtosis, rho = moments(f"egarch: {{omega: 0, alpha: {a}, gamma: {g}, beta: {b}, law: {law}}}")
    fourth = expect(lambda z: z**4)
    assert variance == pytest.approx(product(1), rel=2e-9)
    assert kurtosis == pytest.approx(fourth * product(2) / product(1) ** 2, rel=2e-8)
    tilted = expect(lambda z: z * z * math.exp(a * (abs(z) - size) + g * z))
    first = product(1 + b) * tilted / product(1) ** 2 - 1
    assert rho[0] == pytest.approx(first / (kurtosis - 1), rel=2e-7)


def test_gjr_under_a_skewed_law_by_quadrature():
    """He & Teräsvirta's E c, E c² and E z² c with SciPy's own integrals over the exponential law."""
    a, g, b = 0.05, 0.15, 0.7

    def inner(f):
        ends = ((0, 1), (1, 80))
        return sum(quad(lambda x: f(x - 1) * math.exp(-x), *end, epsabs=1e-13)[0] for end in ends)

    def c(z):
        return b + (a + g * (z < 0)) * z * z

    first, second, crossed = inner(c), inner(lambda z: c(z) ** 2), inner(lambda z: z * z * c(z))
    variance = 1 / (1 - first)
    square = (1 + first) / ((1 - first) * (1 - second))
    found = moments(f"gjr_garch: {{omega: 1, alpha: {a}, gamma: {g}, beta: {b}, law: {{gamma: {{shape: 1}}}}}}")
    assert found[0] == pytest.approx(variance, rel=1e-9)
    assert found[1] == pytest.approx(9 * square / variance**2, rel=1e-9)
    rho = (variance + crossed * square - variance**2) / (9 * square - variance**2)
    assert found[2] == pytest.approx([rho, rho * first, rho * first**2], rel=1e-8)


@pytest.mark.parametrize(
    ("term", "process", "coefficients", "start"),
    [
        ("gjr_garch: {omega: 0.05", GARCH(p=1, o=1, q=1), (0.05, 0.03, 0.08, 0.87), float),
        ("egarch: {omega: -0.1", EGARCH(p=1, o=1, q=1), (-0.1, 0.03, 0.08, 0.87), math.log),
    ],
)
def test_recursions_beside_arch_fed_with_the_same_shocks(term, process, coefficients, start):
    """The library arch, from the same variance at step 0, over the same 300 shocks."""
    rest = "alpha: 0.03, gamma: 0.08, beta: 0.87, before: {variance: 0.9, shocks: -1.2}"
    kind = term.partition(":")[0]
    graph = graph_of(f"  x: {{{term}, {rest}}}}}\n  h: {{use: x.{kind}.variance}}", steps=300)
    run = draw(graph, 0, 3, [300])
    (source,) = graph.sources
    z = source.law.shocks(source.stream.uniforms(0, 3, 0, 300))
    for path in range(3):
        shocks, first = z[:, path], run["h"][0, path]
        values, variances = process.simulate(coefficients, 300, lambda n, shocks=shocks: shocks, 0, start(first))
        np.testing.assert_allclose(run["h"][:, path], variances, rtol=1e-11)
        np.testing.assert_allclose(run["x"][:, path], values, rtol=1e-11)


def test_a_given_past_leads_to_the_first_variance():
    """By hand from the definitions: h(0) of h(−1) = 0.9 and e(−1) = −1.2."""
    past = "before: {variance: 0.9, shocks: -1.2}"
    gjr = graph_of(f"  x: {{gjr_garch: {{omega: 0.05, alpha: 0.03, gamma: 0.08, beta: 0.87, {past}}}}}")
    known = theory(gjr.spec, gjr)["x"]
    first = 0.05 + 0.11 * 1.44 + 0.87 * 0.9
    assert known.variance([0, 1]) == pytest.approx([first, 0.05 + 0.94 * first], rel=1e-14)
    assert known.variance(10**6) == pytest.approx(0.05 / 0.06, rel=1e-12)
    egarch = graph_of(f"  x: {{egarch: {{omega: -0.1, alpha: 0.2, gamma: -0.1, beta: 0.9, {past}}}}}")
    known = theory(egarch.spec, egarch)["x"]
    z = -1.2 / math.sqrt(0.9)
    log_h = -0.1 + 0.9 * math.log(0.9) + 0.2 * (abs(z) - ROOT) - 0.1 * z
    assert known.variance(0) == pytest.approx(math.exp(log_h), rel=1e-9)
    stationary = graph_of("  x: {egarch: {omega: -0.1, alpha: 0.2, gamma: -0.1, beta: 0.9}}")
    assert known.variance(5000) == pytest.approx(theory(stationary.spec, stationary)["x"].variance(0), rel=1e-12)


TERMS = {
    "gjr_garch": "gjr_garch: {omega: 0.05, alpha: 0.03, gamma: 0.08, beta: 0.8}",
    "egarch": "egarch: {scale: 1, alpha: 0.2, gamma: -0.1, beta: 0.8}",
    "stochastic_volatility": "stochastic_volatility: {scale: 1, phi: 0.8, eta: 0.3}",
    "leverage": "stochastic_volatility: {scale: 1, phi: 0.8, eta: 0.3, rho: -0.6}",
}


@pytest.mark.parametrize("name", TERMS)
def test_revealed_variances_and_squares_are_what_theory_states(name):
    """From step 0 on, over 32,768 paths: 14 numbers a term within 7 standard errors (below 2e-10 in all)."""
    kind = TERMS[name].partition(":")[0]
    graph = graph_of(f"  x: {{{TERMS[name]}}}\n  h: {{use: x.{kind}.variance}}", steps=8)
    run, known = draw(graph, 0, 32_768, [8]), theory(graph.spec, graph)
    x, h = known["x"], known["h"]
    lags = np.array([0, 1, 2, 5])
    assert within(run["h"][lags], h.mean(lags))
    centred = run["h"] - h.mean(0)
    assert within(centred[lags] * centred[0], h.autocovariance(lags))
    squares = run["x"] ** 2 - x.variance(0)
    expected = x.autocovariance_of_squares(lags)
    assert within(squares[lags] * squares[0], expected)
    assert not within(squares[lags] * squares[0], 1.5 * expected)  # the check can fail
    assert h.stationarity.verdict == "strictly stationary" and x.stationarity.verdict == "strictly stationary"


def within(sample, expected):
    error = sample.std(axis=1) / math.sqrt(sample.shape[1])
    return bool((np.abs(sample.mean(axis=1) - expected) <= 7 * error).all())


def test_leverage_is_what_the_sign_of_a_shock_does_to_the_next_variance():
    """Cov(z(t), ln h(t+1)) = ρ η, and none with ln h(t), over 65,536 paths within 7 standard errors (2e-11 in all)."""
    graph = graph_of("  x: {stochastic_volatility: {scale: 1, phi: 0.8, eta: 0.3, rho: -0.6}}\n"
                     "  h: {use: x.stochastic_volatility.variance}", steps=4)  # fmt: skip
    run = draw(graph, 0, 65_536, [4])
    logs = np.log(run["h"])
    z = run["x"] / np.sqrt(run["h"])
    assert within(z[:3] * logs[1:], -0.6 * 0.3) and within(z * logs, 0.0)


@pytest.mark.parametrize("rho", [0, -0.6])
def test_a_deeper_look_back_moves_nothing(rho):
    text = "  {}: {{lag: {{of: [{{stochastic_volatility: {{scale: 1, phi: 0.8, eta: 0.3, rho: {}}}}}], by: {}}}}}"
    few, many = (draw(graph_of(text.format("x", rho, by)), 0, 8, [20])["x"] for by in (3, 9))
    assert np.array_equal(few[:14], many[6:])


def test_a_skewed_law_or_a_sign_leaves_filtered_squares_unknown():
    graph = graph_of(f"  x: {{ar: {{phi: 0.5, shock: {{{TERMS['egarch']}}}}}}}")
    x = theory(graph.spec, graph)["x"]
    assert x.variance(0) is not None and x.autocorrelation([1]) == pytest.approx([0.5])
    assert x.excess_kurtosis is None and "signs of x.ar move its variance" in x.reason("excess_kurtosis")


def test_covariance_with_its_own_variance_is_unknown_under_leverage():
    for name, wanted in (("stochastic_volatility", 0.0), ("leverage", None)):
        kind = TERMS[name].partition(":")[0]
        graph = graph_of(f"  x: {{{TERMS[name]}}}\n  h: {{use: x.{kind}.variance}}")
        cross = theory(graph.spec, graph).cross("x", "h")
        assert cross.covariance(1, 2) == wanted
    assert len(cross.reason()) > 20


def test_moments_end_where_the_law_says():
    """E exp(q |z|) of Laplace shocks ends at q = √2: with alpha 0.9 there is a variance, and no kurtosis."""
    graph = graph_of("  x: {egarch: {scale: 1, alpha: 0.9, gamma: 0, beta: 0.5, law: laplace}}")
    x = theory(graph.spec, graph)["x"]
    assert x.variance(0) is not None and x.excess_kurtosis is None
    assert x.highest_moment == pytest.approx(2 * math.sqrt(2) / 0.9)
    graph = graph_of("  x: {egarch: {scale: 1, alpha: 0.2, gamma: 0, beta: 0.5, law: {student_t: {df: 9}}, "
                     "allow_infinite_variance: true}}")  # fmt: skip
    x = theory(graph.spec, graph)["x"]
    assert x.variance(0) is None and x.stationarity.verdict == "infinite variance"


def test_forecasts_of_the_variance_are_means_over_what_may_come():
    """Two and three steps ahead of 65,536 paths: what comes less its forecast has mean 0 (7 errors: 1e-11 in all)."""
    for term in ("gjr_garch: {omega: 0.05", "egarch: {omega: -0.1"):
        kind = term.partition(":")[0]
        text = f"  x: {{{term}, alpha: 0.1, gamma: 0.08, beta: 0.8}}}}\n  h: {{use: x.{kind}.variance}}"
        graph = graph_of(text, steps=4)
        run = Run(graph, 0, 65_536)
        run.tile(1)
        ahead, h = forecast(run, "x", 3).variance, run.tile(3)["h"]
        np.testing.assert_allclose(ahead[0], h[0], rtol=1e-12)
        assert within(h[1:] - ahead[1:], 0.0) and not within(h[1:] - 0.98 * ahead[1:], 0.0)


MESSAGES = {
    "gjr_garch: {alpha: 0.1, gamma: 0, beta: 0.5}": "expected `omega` or `sd` (the unconditional one), exactly one",
    "gjr_garch: {sd: 1, alpha: 0.1, gamma: -0.2, beta: 0.5}": "alpha + gamma must be at least 0, or a variance could "
    "be negative, got −0.1; raise one",
    "gjr_garch: {sd: 1, alpha: 0.1, gamma: 0.1, law: {gamma: {shape: 1}}}": "gamma(shape=1) is skewed",
    "gjr_garch: {omega: 1, alpha: 0.3, gamma: 0.1, beta: 0.7}": "alpha + beta + gamma E z² I(z < 0) must be below 1 "
    "for a finite variance, got 1.05; lower one, or say `allow_infinite_variance: true`",
    "gjr_garch: {omega: 1, alpha: 5, gamma: 0, beta: 0.7}": "expected E log(β + (α + γ I(z < 0)) z²) below 0",
    "egarch: {scale: 1, omega: 1, alpha: 0.1, gamma: 0, beta: 0.5}": "expected `scale` or `omega`, exactly one of them",
    "egarch: {scale: 1, alpha: 0.1, gamma: 0, beta: 0.5, law: {student_t: {df: 5}}}": "alpha + gamma must be at most 0 "
    "for a finite variance, since the tail of student_t(df=5) is as heavy as it is, got 0.1",
    "egarch: {scale: 1, alpha: 0.1, gamma: 0, beta: 1}": "expected a number in [0, 1), got 1",
    "stochastic_volatility: {scale: 1, phi: 0.9, eta: 0.1, rho: 0.5, law: laplace}": "expected a normal law beside "
    "rho, got laplace: leverage is the correlation of two normals; leave out rho, or law",
    "stochastic_volatility: {phi: 0.9, eta: 0.1}": "expected `scale` or `sd` (the unconditional one), exactly one",
}


@pytest.mark.parametrize("term", MESSAGES)
def test_faults_say_the_rule_the_value_and_the_repair(term):
    with pytest.raises(SpecError) as error:
        graph_of(f"  x: {{{term}}}")
    assert MESSAGES[term] in str(error.value)
