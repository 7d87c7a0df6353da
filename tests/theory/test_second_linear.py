"""Linear series in 120 digits by partial autocorrelations, and beside statsmodels: high orders, far lags, running sums.

The error allowed is max(1e-9, 100 eps kappa) of the largest covariance beside it, kappa being the condition number that
the theory states of itself.
"""

from __future__ import annotations

from math import comb

import mpmath as mp
import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from statsmodels.tsa.arima_process import ArmaProcess
from statsmodels.tsa.statespace.sarimax import SARIMAX
from statsmodels.tsa.statespace.tools import solve_discrete_lyapunov

from procgen.theory import Axis, SeriesTheory
from procgen.theory import theory as theory_of

from ..terms.helpers import graph_of
from .brute import coefficients
from .exact import Autoregression, NotStationary, arma_autocovariances, running_sum_variance
from .references import LAPLACE, NORMAL

DERIVED = {
    "arima": "test_seasonal_autoregression_near_its_unit_roots",
    "ar": "test_drawn_models_of_high_order_near_and_far",
    "ma": "test_high_orders_beside_statsmodels",
    "arma": "test_drawn_models_of_high_order_near_and_far",
    "ornstein_uhlenbeck": "test_ornstein_uhlenbeck",
    "stochastic_cycle": "test_stochastic_cycle",
}
EPS = np.finfo(float).eps
FAR = 10_000
inner, edge = st.floats(-0.8, 0.8), st.floats(0.9, 0.99999).flatmap(lambda r: st.sampled_from([r, -r]))
partials = st.lists(st.one_of(inner, inner, inner, edge), min_size=1, max_size=24)
thetas = st.one_of(st.just([]), st.lists(st.floats(-1.5, 1.5), max_size=60))


def series(phi, theta=(), law=NORMAL):
    axis = Axis()
    return SeriesTheory("x", axis.filtered(axis.source("x.arma", law, 1.0), phi, theta))


def close(found, exact, condition):
    size = max(abs(value) for value in exact)
    error = max(abs(mp.mpf(float(f)) - e) for f, e in zip(found, exact, strict=True))
    return error <= max(1e-9, 100 * EPS * condition) * size + mp.mpf(10) ** -290


@settings(max_examples=30, deadline=None, derandomize=True)
@given(partials, thetas)
def test_drawn_models_of_high_order_near_and_far(kappa, theta):
    """Lags 0 to 59 and 10,000 to 10,029; a model that is refused says that it is too near to a unit root."""
    phi = coefficients(kappa)
    try:
        near = arma_autocovariances(phi, theta, 0, 60)
    except NotStationary:  # its rounded coefficients are not
        assume(False)
    x = series(phi, tuple(theta))
    found = x.autocovariance(np.arange(60))
    if found is None:
        assert "too near to a unit root" in x.reason("autocovariance") and len(phi) > 12
        return
    assert close(found, near, x.condition)
    assert close(
        x.autocovariance(np.arange(FAR, FAR + 30)), arma_autocovariances(phi, theta, FAR, 30), x.condition
    )


@pytest.mark.parametrize("period", [12, 24])
def test_seasonal_autoregression_near_its_unit_roots(period):
    """(1 - .5 B)(1 - .99 B^s) with moving averages of order 1 and s: coefficients of the product, all lags to 400."""
    body = f"{{arima: {{d: 0, phi: 0.5, theta: 0.4, seasonal: {{period: {period}, phi: 0.99, theta: -0.6}}, sd: 1}}}}"
    graph = graph_of(f"  x: {body}")
    x = theory_of(graph.spec, graph)["x"]
    phi, theta = np.zeros(period + 1), np.zeros(period + 1)
    phi[[0, period - 1, period]], theta[[0, period - 1, period]] = (0.5, 0.99, -0.5 * 0.99), (0.4, -0.6, -0.6 * 0.4)
    assert close(x.autocovariance(np.arange(400)), arma_autocovariances(phi, theta, 0, 400), x.condition)


def test_high_orders_beside_statsmodels():
    """AR(24), MA(60) and both: ArmaProcess.acovf (Brockwell & Davis 1991, sec. 3.3)."""
    phi = coefficients([0.6, -0.5, 0.4, -0.3, 0.2, 0.1] * 4)
    theta = tuple(0.9 * np.cos(np.arange(60)))
    for ar, ma in ((phi, ()), ((), theta), (phi, theta)):
        reference = ArmaProcess(np.r_[1, -np.array(ar)], np.r_[1, ma]).acovf(80)
        found = series(ar, ma).autocovariance(np.arange(80))
        np.testing.assert_allclose(found, reference, rtol=0, atol=1e-9 * reference[0])


@pytest.mark.parametrize("seasonal", [(1, 0, 1, 4), (2, 0, 0, 6)])
def test_seasonal_arma_beside_a_state_space_of_statsmodels(seasonal):
    """Cov(y(t + h), y(t)) = Z T^h P Z' from SARIMAX's own matrices and its stationary P."""
    ar, ma, sar = [0.6, -0.2], [0.4], [0.5, 0.3][: seasonal[0]]
    sma = [-0.3] * seasonal[2]
    model = SARIMAX(np.zeros(8), order=(2, 0, 1), seasonal_order=seasonal)
    model.update([*ar, *ma, *sar, *sma, 1.0])
    z, transition, loading = model["design"], model["transition"], model["selection"]
    state = solve_discrete_lyapunov(transition, loading @ model["state_cov"] @ loading.T)
    found, power = [], np.eye(len(transition))
    for _ in range(40):
        found.append((z @ power @ state @ z.T).item())
        power = transition @ power
    season = f"{{period: {seasonal[3]}, phi: {sar}, theta: {sma}}}" if sma else f"{{period: {seasonal[3]}, phi: {sar}}}"
    graph = graph_of(f"  x: {{arima: {{d: 0, phi: {ar}, theta: {ma}, seasonal: {season}, sd: 1}}}}")
    mine = theory_of(graph.spec, graph)["x"].autocovariance(np.arange(40))
    np.testing.assert_allclose(mine, found, rtol=0, atol=1e-9 * found[0])


@settings(max_examples=12, deadline=None, derandomize=True)
@given(st.lists(st.one_of(inner, edge), min_size=1, max_size=4), st.sampled_from([1, 2, 17, 400]))
def test_running_sums(kappa, steps):
    """Var of the sum of n values: n g(0) + 2 sum (n - k) g(k) (Brockwell & Davis 1991, theorem 7.1.1)."""
    phi = coefficients(kappa)
    exact = running_sum_variance(Autoregression(phi).gamma(0, steps), steps)
    y = SeriesTheory("y", series(phi).expression.integrate(0.0))
    assert close([y.variance(steps)], [exact], y.condition)


@settings(max_examples=12, deadline=None, derandomize=True)
@given(st.lists(inner, min_size=1, max_size=4), st.integers(1, 7), st.integers(1, 4))
def test_differences(kappa, by, order):
    """(1 - B^k)^d as a moving average with binomial weights."""
    phi = coefficients(kappa)
    theta = np.zeros(by * order + 1)
    theta[::by] = [(-1) ** k * comb(order, k) for k in range(order + 1)]
    x = SeriesTheory("x", series(phi).expression.difference(by, order))
    exact = arma_autocovariances(phi, theta[1:], 0, 30)
    assert close(x.autocovariance(np.arange(30)), exact, x.condition)


@pytest.mark.parametrize(
    ("roots", "order"), [([0.99999, 0.5], 2), ([0.9999] * 2, 2), ([0.999, 0.999, 0.9], 3), ([0.9999] * 3, 3)]
)
def test_differences_near_unit_roots_keep_their_digits(roots, order):
    """What is left is 1e-6 to 1e-21 of the series: rounded autocovariances would leave nothing of it."""
    phi = tuple(-np.poly(roots)[1:])
    x = SeriesTheory("x", series(phi).expression.difference(1, order))
    theta = [(-1) ** k * comb(order, k) for k in range(1, order + 1)]
    exact = [float(v) for v in arma_autocovariances(phi, theta, 0, 60)]
    np.testing.assert_allclose(x.autocovariance(np.arange(60)), exact, rtol=0, atol=1e-12 * exact[0])
    assert x.excess_kurtosis == 0.0


def test_what_cancels_beyond_help_is_unknown():
    """A triple root near 1 and 20 other roots: too large a system for whole numbers."""
    phi = tuple(-np.poly([0.999] * 3 + [0.3, -0.3] * 10)[1:])
    x = SeriesTheory("x", series(phi).expression.difference(1, 3))
    assert x.variance(0) is None and "unit root" in x.reason("variance")


@settings(max_examples=15, deadline=None, derandomize=True)
@given(st.lists(st.floats(-0.9, 0.9), min_size=1, max_size=5), st.lists(st.floats(-1.5, 1.5), max_size=4))
def test_kurtosis_and_squares_of_filtered_shocks(kappa, theta):
    """Excess kurtosis k sum psi^4 / (sum psi^2)^2 and Cov(x^2, x^2) = 2 g^2 + k sum psi^2 psi^2, by plain addition.

    psi are statsmodels' impulse responses, added up until they are below 1e-13 of the first.
    """
    phi = coefficients(kappa)
    count = 4000
    psi = ArmaProcess(np.r_[1, -np.array(phi)], np.r_[1, theta]).impulse_response(count)
    assume(abs(psi[-50:]).max() < 1e-13)
    x = series(phi, tuple(theta), LAPLACE)
    second, fourth = (psi**2).sum(), (psi**4).sum()
    assert x.excess_kurtosis == pytest.approx(3.0 * fourth / second**2, rel=1e-9)
    squares = psi**2
    exact = [
        2.0 * (psi[h:] @ psi[: count - h]) ** 2 + 3.0 * (squares[h:] @ squares[: count - h]) for h in (0, 1, 2, 5, 20)
    ]
    found = x.autocovariance_of_squares(np.array([0, 1, 2, 5, 20]))
    np.testing.assert_allclose(found, exact, rtol=0, atol=1e-9 * exact[0])


@settings(max_examples=15, deadline=None, derandomize=True)
@given(st.floats(1e-7, 3.0), st.floats(-4, 4), st.sampled_from([1, 10, FAR]))
def test_ornstein_uhlenbeck(rate, mean, lag):
    """exp(-rate lag) sd^2 (1 - exp(-2 rate)) / (2 rate) / (1 - exp(-2 rate)): the exact discretisation, in 50 digits.

    `sd` is that of the driving motion a step, so that the stationary variance is sd^2 / (2 rate) (Vasicek 1977).
    """
    graph = graph_of(f"  x: {{ornstein_uhlenbeck: {{rate: {rate!r}, mean: {mean!r}, sd: 1.5}}}}")
    x = theory_of(graph.spec, graph)["x"]
    with mp.workdps(50):
        exact = mp.mpf(1.5) ** 2 / (2 * mp.mpf(rate)) * mp.exp(-mp.mpf(rate) * lag)
    assert x.mean(3) == pytest.approx(mean, rel=1e-14, abs=1e-300)
    found, condition = x.autocovariance(np.array([lag]))[0], x.condition
    assert abs(found - float(exact)) <= max(1e-9, 100 * EPS * condition) * float(exact) + 1e-300


@settings(max_examples=12, deadline=None, derandomize=True)
@given(st.floats(0.05, 0.9999), st.floats(2.1, 400.0), st.sampled_from([0, 3, 1000]))
def test_stochastic_cycle(rho, period, lag):
    """rho^k cos(2 pi k / period) (Harvey 1989, eq. 2.3.38), in 50 digits."""
    graph = graph_of(f"  x: {{stochastic_cycle: {{rho: {rho!r}, period: {period!r}, total_sd: 3}}}}")
    x = theory_of(graph.spec, graph)["x"]
    with mp.workdps(50):
        envelope = 9 * mp.mpf(rho) ** lag
        exact = envelope * mp.cos(2 * mp.pi * lag / mp.mpf(period))
    allowed = max(1e-9, 100 * EPS * x.condition) * float(envelope) + 1e-300
    assert abs(float(x.autocovariance(np.array([lag]))[0]) - float(exact)) <= allowed


def test_the_condition_number_is_told_where_it_matters():
    """Near a double unit root the promise of nine digits is taken back, in the numbers and in the text."""
    from procgen.report.theory import theory_text

    graph = graph_of("  x: {ar: {phi: [1.9998, -0.99980001], sd: 1}}\n  y: {ar: {phi: 0.5, sd: 1}}")
    th = theory_of(graph.spec, graph)
    told = th.as_dict([0, 1], 3)["series"]
    assert told["x"]["condition"] > 1e9 and "condition" not in told["y"]
    text = theory_text(graph.spec, th, [0, 1], 3)
    assert text.count("condition number") == 1
