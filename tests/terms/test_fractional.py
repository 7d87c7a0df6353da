"""Long memory: published moments, an independent reference for the weights, and what the drawn values are made of."""

import mpmath
import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import cholesky, toeplitz
from statsmodels.tsa.arima_process import arma_acovf
from statsmodels.tsa.stattools import levinson_durbin

import procgen as pg
from procgen.chance.kernel import available, compiling
from procgen.spec.model import SpecError
from procgen.terms.exact import predict, predicted
from procgen.terms.fractional import _predictors, modes_of, remember, remembered
from procgen.terms.fractional import _predictors_of_noise as predictors_of
from procgen.terms.recover import recovery
from procgen.theory import theory
from procgen.theory.fractional import Filtered, FractionalNoise, GaussianNoise

from .helpers import draw, graph_of, jacobian

DERIVED = {
    "arfima": "test_autocovariances_against_many_digits",
    "fractional_gaussian_noise": "test_fractional_gaussian_noise_has_the_published_correlations",
}
LAGS = np.array([0, 1, 2, 3, 10, 100])


def known(body, steps=50):
    graph = graph_of(f"  x: {body}", steps=steps)
    return theory(graph.spec, graph)["x"]


# Hosking (1981), Biometrika 68, 165-176, theorem 1 (formulas from memory, values computed from them to 12 digits).
@pytest.mark.parametrize(
    ("d", "variance", "correlations"),
    [
        (0.2, 1.0986855396, {1: 0.25, 2: 0.1666666667, 3: 0.130952381, 10: 0.0636908121, 100: 0.0160009393}),
        (0.3, 1.31645606213, {1: 0.4285714286, 2: 0.3277310924, 10: 0.1727163616, 100: 0.0687691372}),
        (0.4, 2.0700983253, {1: 0.6666666667, 10: 0.4235681566}),
        (-0.3, 1.10933180138, {1: -0.2307692308, 10: -0.0052155495}),
    ],
)
def test_fractional_differences_have_the_published_moments(d, variance, correlations):
    x = known(f"{{arfima: {{d: {d}, sd: 1}}}}", 200)
    assert x.variance([0])[0] == pytest.approx(variance, rel=1e-10)
    found = x.autocorrelation(list(correlations))
    np.testing.assert_allclose(found, list(correlations.values()), rtol=0, atol=1e-10)


# Hosking (1981), lemma 1, and gamma(0) (1 + theta^2 + 2 theta rho(1)); formulas from memory, values computed from them.
@pytest.mark.parametrize(
    ("body", "variance", "correlations"),
    [
        ("phi: 0.5", 2.03753844803, {1: 0.710778008549, 2: 0.5073340256, 3: 0.3778163918, 10: 0.1413248169}),
        ("theta: 0.5", 1.64802830941, {1: 0.5972222222, 2: 0.2658730159}),
    ],
)
def test_with_an_arma_part_too(body, variance, correlations):
    x = known(f"{{arfima: {{d: 0.2, {body}, sd: 1}}}}")
    assert x.variance([7])[0] == pytest.approx(variance, rel=1e-10)
    np.testing.assert_allclose(x.autocorrelation(list(correlations)), list(correlations.values()), atol=1e-10)


# Mandelbrot & Van Ness (1968); Beran (1994), ch. 2: the autocorrelations at lags 1, 2, 3 (formula from memory).
@pytest.mark.parametrize(
    ("hurst", "correlations"),
    [
        (0.7, [0.3195079108, 0.1887525393, 0.1461734422]),
        (0.8, [0.5157165665, 0.3683399344]),
        (0.3, [-0.2421417167, -0.049125544]),
    ],
)
def test_fractional_gaussian_noise_has_the_published_correlations(hurst, correlations):
    x = known(f"{{fractional_gaussian_noise: {{hurst: {hurst}, sd: 3}}}}")
    np.testing.assert_allclose(x.autocorrelation(range(1, len(correlations) + 1)), correlations, atol=1e-10)
    n = np.arange(50)
    sums = sum(x.covariance(n, np.full(50, s)).sum() for s in range(50))
    assert sums == pytest.approx(9 * 50 ** (2 * hurst), rel=1e-12)  # partial sums have the variance n^2H


@settings(max_examples=25, deadline=None, derandomize=True)
@given(st.floats(-0.49, 0.499).filter(lambda d: abs(d) > 1e-3), st.integers(0, 10**9))
def test_autocovariances_against_many_digits(d, lag):
    """Gamma functions by mpmath, 40 digits."""
    with mpmath.workdps(40):
        exact = mpmath.gamma(1 - 2 * mpmath.mpf(d)) / (mpmath.gamma(1 - mpmath.mpf(d)) * mpmath.gamma(d))
        exact *= mpmath.gammaprod([lag + mpmath.mpf(d)], [lag + 1 - mpmath.mpf(d)])
        assert float(FractionalNoise(d)(np.array([lag]))[0] / exact - 1) == pytest.approx(0, abs=1e-12)
        h = 2 * mpmath.mpf(d + 0.5)
        noise = (mpmath.mpf(lag + 1) ** h - 2 * mpmath.mpf(lag) ** h + abs(mpmath.mpf(lag - 1)) ** h) / 2
        assert float(GaussianNoise(d + 0.5)(np.array([lag]))[0] / noise - 1) == pytest.approx(0, abs=1e-10)


@settings(max_examples=15, deadline=None, derandomize=True)
@given(st.floats(-0.49, 0.499), st.floats(0.0, 9.0), st.floats(0.0, 9.0))
def test_the_modes_have_the_ideal_covariances_at_any_step_and_lag(d, log_step, log_lag):
    """The stated bound of 1e-11 of the variance, from the modes' own law, up to steps and lags of 1e9."""
    modes, t, k = modes_of(d), int(10**log_step), int(10**log_lag)
    rate = -np.log1p(-np.minimum(modes.lost, 1 - 1e-16))
    both = rate[:, None] + rate[None, :]
    gained = np.where(both > 0, -np.expm1(-both * t) / np.where(both > 0, -np.expm1(-both), 1.0), t)
    start = modes.factor @ modes.factor.T
    w, e = modes.weights, np.exp(-rate * t)
    found = (w * e * np.exp(-rate * k)) @ start @ (w * e) + (w * np.exp(-rate * k)) @ gained @ w
    found += (w * np.exp(-rate * (k - 1))).sum() if k else 1.0
    ideal = FractionalNoise(d)
    assert abs(found - ideal(np.array([k]))[0]) <= 1e-11 * ideal.variance


def test_the_weights_are_those_of_the_binomial_series():
    """psi_j = Gamma(j + d) / (Gamma(j + 1) Gamma(d)) (Hosking 1981), by mpmath, out to lag 1e9."""
    for d in (0.45, 0.1, -0.4):
        modes = modes_of(d)
        rate = -np.log1p(-np.minimum(modes.lost, 1 - 1e-16))
        for j in (1, 2, 10, 10**4, 10**9):
            with mpmath.workdps(30):
                exact = mpmath.gammaprod([j + mpmath.mpf(d)], [j + 1, mpmath.mpf(d)])
            assert (modes.weights * np.exp(-rate * (j - 1))).sum() == pytest.approx(float(exact), abs=1e-11)


def test_the_predictors_are_the_inverse_of_a_cholesky_factor():
    """Rows of the factor of SciPy's Toeplitz matrix: best predictors and what they leave."""
    for hurst in (0.15, 0.6, 0.95):
        lower = cholesky(toeplitz(GaussianNoise(hurst)(np.arange(120))), lower=True)
        inverse = np.linalg.inv(lower)
        for t in (0, 1, 7, 119):
            weights, spread = predictors_of(hurst).at(t)
            assert spread == pytest.approx(lower[t, t], rel=1e-10)
            np.testing.assert_allclose(weights[::-1], -inverse[t, :t] * lower[t, t], rtol=0, atol=1e-10)


@pytest.mark.skipif(not available(), reason="the speed extra is not installed")
def test_compiled_and_plain_draw_the_same_bits_over_many_tiles():
    graph = graph_of("  x: {arfima: {d: 0.4, phi: 0.5, sd: 1}}\n  y: {fractional_gaussian_noise: {hurst: 0.9, sd: 1}}\n"
        "  z: {arfima: {d: 0.4, phi: 0.5, sd: 1, method: exact}}")
    plain = draw(graph, 3, 5, [20, 30])
    with compiling(True):
        compiled = draw(graph, 3, 5, [7, 43])
    assert all(np.array_equal(plain[name], compiled[name]) for name in plain)


def test_a_filtered_memory_is_the_convolution_of_both():
    """Against the sum of the squared weights of (1 - B)^-d / (1 - 0.8 B), 200,000 of them, by plain convolution."""
    d, phi = -0.4, 0.8
    j = np.arange(1.0, 200_000)
    memory = np.concatenate([[1.0], np.cumprod((j - 1 + d) / j)])
    weights = np.convolve(memory, phi ** np.arange(400))[: len(memory)]
    found = Filtered(FractionalNoise(d), (phi,), ())(np.zeros(1))[0]
    assert found == pytest.approx((weights**2).sum(), rel=1e-9)


@pytest.mark.parametrize(
    ("body", "message"),
    [
        ("{arfima: {d: 0.5, sd: 1}}", "expected a number in (-0.5, 0.5), got 0.5 (d: memory:"),
        ("{arfima: {d: 0.2, phi: 1.1, sd: 1}}", "expected all roots of 1 − φ₁z − … outside the unit circle"),
        ("{lag: {of: [{arfima: {d: 0.2, sd: 1}}], by: 1}}", "a long memory has no past that could be drawn"),
        ("{fractional_gaussian_noise: {hurst: 1, sd: 1}}", "expected a number in (0, 1), got 1 (hurst:"),
    ],
)
def test_refusals_say_what_was_expected(body, message):
    with pytest.raises(SpecError) as error:
        graph_of(f"  x: {body}")
    assert message in str(error.value)


def test_the_exact_recursion_refuses_more_steps_than_it_is_for():
    with pytest.raises(SpecError) as error:
        graph_of("  x: {fractional_gaussian_noise: {hurst: 0.7, sd: 1}}", steps=10_001)
    expected = "expected at most 10,000 steps with fractional_gaussian_noise, got 10,001; ask for fewer"
    assert error.value.faults[0].message == expected


def covariances(d, phi, theta, count):
    """Of unit shocks, at lags 0 … count − 1: statsmodels' of the ARMA part, Hosking's by mpmath, convolved."""
    reach = 400
    filtered = arma_acovf([1, *(-c for c in phi)], [1, *theta], reach)
    with mpmath.workdps(30):
        d = mpmath.mpf(d)
        memory = [mpmath.gamma(1 - 2 * d) / mpmath.gamma(1 - d) ** 2]
        for k in range(1, count + reach):
            memory.append(memory[-1] * (k - 1 + d) / (k - d))
    memory = np.array(memory, dtype=float)
    both = np.concatenate([memory[:0:-1], memory])
    return np.convolve(np.concatenate([filtered[:0:-1], filtered]), both)[len(both) // 2 + reach - 1 :][:count]


EXACT = [(0.3, (), ()), (-0.45, (), ()), (0.45, (0.6, -0.3), (0.5,)), (-0.2, (0.9,), ()), (0.0, (0.5,), (0.4, 0.2))]


@pytest.mark.parametrize(("d", "phi", "theta"), EXACT)
def test_by_the_exact_method_values_have_the_exact_covariances(d, phi, theta, monkeypatch):
    """J J′ of the value code, without theory and without chance; statsmodels and Hosking (1981) as the reference."""
    steps, body = 40, f"{{arfima: {{d: {d}, phi: {list(phi)}, theta: {list(theta)}, sd: 3, method: exact}}}}"
    body = body.replace("phi: [], ", "").replace("theta: [], ", "")
    j = jacobian(graph_of(f"  x: {body}", steps=steps), steps, monkeypatch, 64)["x"]
    ideal = 9 * covariances(d, phi, theta, steps)
    np.testing.assert_allclose(j @ j.T, toeplitz(ideal), rtol=0, atol=1e-13 * ideal[0])


@pytest.mark.parametrize("d", [0.3, 0.49, -0.45])
def test_the_partial_autocorrelations_are_those_published(d):
    """d/(k − d) at lag k (Hosking 1981, theorem 1; Brockwell & Davis 1991, 13.2), out to the last step."""
    predictors = _predictors(d, (), ())
    for k in (1, 2, 7, 100, 3000):
        weights, _ = predictors.at(k)
        assert weights[-1] == pytest.approx(d / (k - d), rel=1e-9)


def test_the_exact_recursion_is_that_of_statsmodels():
    """Its Levinson-Durbin recursion: predictors and the variance of what is new."""
    gamma = covariances(0.4, (0.5,), (0.3,), 60)
    variance, weights, *_ = levinson_durbin(gamma, nlags=59, isacov=True)
    own, spread = _predictors(0.4, (0.5,), (0.3,)).at(59)
    np.testing.assert_allclose(own, weights, rtol=0, atol=1e-12)
    assert spread**2 == pytest.approx(variance / gamma[0], rel=1e-12)


@pytest.mark.parametrize(("d", "phi", "theta"), EXACT)
def test_the_exact_covariances_out_to_the_last_step_are_those_that_theory_states(d, phi, theta):
    """But for the roundings of a product of so many ratios, 2e-16 each."""
    lags = np.array([0, 1, 2, 77, 5000, 9999])
    ideal = Filtered(FractionalNoise(d), phi, theta)(lags)
    found = _predictors(d, phi, theta).gamma[lags]
    np.testing.assert_allclose(found, ideal / ideal[0], rtol=1e-12, atol=1e-15)
    body = f"{{arfima: {{d: {d}, sd: 2, method: exact}}}}"
    assert np.array_equal(known(body).covariance(lags, 0 * lags), 4 * FractionalNoise(d)(lags))


@pytest.mark.parametrize("spread", ["sd: 2", "total_sd: 5"])
def test_shocks_come_back_and_tiles_change_nothing(spread):
    graph = graph_of(f"  x: {{arfima: {{d: 0.4, phi: 0.5, {spread}, method: exact}}}}")
    x = draw(graph, 3, 70, [50])["x"]
    for first, paths, tiles in ((3, 70, [7, 43]), (3, 70, [1] * 50), (20, 2, [20, 30])):
        assert np.array_equal(draw(graph, first, paths, tiles)["x"], x[:, first - 3 : first - 3 + paths])
    back = recovery(graph, "x", 70)
    z = np.concatenate([back.tile(x[:9]), back.tile(x[9:])])
    source = graph.source_of("x.arfima")
    ideal = source.law.shocks(source.stream.uniforms(3, 70, 0, 50))
    np.testing.assert_allclose(z, ideal, rtol=0, atol=1e-12)


def test_the_mixture_cannot_be_undone_but_the_exact_method_can():
    assert "cannot be undone" in recovery(graph_of("  x: {arfima: {d: 0.4, sd: 1}}"), "x", 1).reason


def test_validation_recovers_its_shocks_and_finds_a_mistake():
    """False alarms: one in 1e6; d 0.30 drawn as 0.27 is found by the autocorrelation of shocks."""
    bodies = [f"{{arfima: {{d: {d}, phi: 0.4, total_sd: 1, method: exact}}}}" for d in (0.3, 0.27)]
    right, wrong = (graph_of(f"  x: {body}", steps=300).spec.changed(paths=200) for body in bodies)
    verdict = pg.validate(pg.render(right), false_alarm=1e-6)
    assert verdict.agrees
    assert "shocks: autocorrelation" in set(verdict.checks["what"])
    x = pg.render(wrong)["x"].ravel()
    table = pd.DataFrame({"path": np.repeat(range(200), 300), "step": np.tile(range(300), 200), "x": x})
    assert pg.validate(table, spec=right, false_alarm=1e-6).agrees is False


def test_by_the_exact_method_more_steps_than_it_is_for_are_refused():
    with pytest.raises(SpecError) as error:
        graph_of("  x: {arfima: {d: 0.3, sd: 1, method: exact}}", steps=10_001)
    expected = "expected at most 10,000 steps with arfima, got 10,001; ask for fewer, or leave out `method: exact`"
    assert error.value.faults[0].message == expected
    assert graph_of("  x: {arfima: {d: 0.3, sd: 1}}", steps=10_001)


@pytest.mark.parametrize(("steps", "paths"), [(0, 2), (1, 1), (2, 3), (700, 1), (301, 30)])
def test_few_paths_take_all_steps_before_in_one_call(steps, paths):
    """The same bits as step by step: the sums are in the same order."""
    rng = np.random.default_rng(1)
    weights, past, z = rng.standard_normal(steps), rng.standard_normal((steps, paths)), rng.standard_normal((1, paths))
    one, other = np.empty((1, paths)), np.empty((1, paths))
    predict(weights, past, z, one)
    predicted(weights, past, z, other)
    np.testing.assert_array_equal(one, other)


@pytest.mark.parametrize("paths", [1, 3])
def test_few_paths_take_the_same_steps_as_many(paths):
    """One call for all modes adds in the order of the recursion; the past as rows of the factor, added up."""
    rng = np.random.default_rng(8)
    modes = modes_of(0.3)
    z, a = rng.standard_normal((len(modes.weights), paths)), rng.standard_normal((50, paths))
    past = modes.past(z)
    by_rows = [sum((w * v for w, v in zip(row[1:], z[1:], strict=True) if w), row[0] * z[0]) for row in modes.factor]
    assert np.array_equal(past, np.array(by_rows))
    one, other, out, same = past.copy(), past.copy(), np.empty_like(a), np.empty_like(a)
    remember(a, modes.weights, modes.lost, one, out)
    remembered(a, modes.weights, modes.lost, other, same)
    assert np.array_equal(out, same) and np.array_equal(one, other)
