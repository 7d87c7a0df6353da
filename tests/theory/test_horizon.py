"""Variances of forecast errors, and forecasts from given values, against statsmodels, SciPy and the terms' own."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import solve_discrete_are
from scipy.signal import lfilter
from statsmodels.tsa.statespace.sarimax import SARIMAX
from statsmodels.tsa.statespace.structural import UnobservedComponents
from statsmodels.tsa.stattools import levinson_durbin

from procgen.terms.base import Unknown
from procgen.terms.recover import forecast
from procgen.terms.run import Run
from tests.terms.helpers import graph_of
from tests.theory.brute import coefficients
from tests.theory.specs import series_of, theory_of

H = np.array([1, 2, 3, 5, 8, 13, 30])
PARTIALS = st.lists(st.floats(-0.9, 0.9).map(lambda r: round(r, 3)), min_size=1, max_size=4)
NUMBERS = st.floats(-1, 1).map(lambda x: round(x, 2))
SOME = settings(max_examples=15, deadline=None)


def settled(model, parameters) -> np.ndarray:
    """Forecast variances of a statsmodels filter that has seen enough values."""
    return model.filter(parameters).get_forecast(int(H[-1])).var_pred_mean[H - 1]


@pytest.mark.parametrize(
    ("kind", "order", "seasonal", "parameters"),
    [
        ({"arma": {"phi": [0.6, -0.3], "theta": 0.4, "sd": 2}}, (2, 0, 1), (0, 0, 0, 0), [0.6, -0.3, 0.4, 4]),
        ({"ma": {"theta": 2.0, "sd": 1}}, (0, 0, 1), (0, 0, 0, 0), [2.0, 1]),  # not invertible: 4 ahead of 1 step
        (
            {"arima": {"d": 1, "theta": -0.4, "seasonal": {"period": 4, "d": 1, "theta": -0.6}, "sd": 1}},
            (0, 1, 1), (0, 1, 1, 4), [-0.4, -0.6, 1],
        ),
        (
            {"arima": {"phi": 0.5, "d": 2, "theta": 0.3, "sd": 1}},
            (1, 2, 1), (0, 0, 0, 0), [0.5, 0.3, 1],
        ),
    ],
    ids=["arma", "not invertible", "airline", "integrated twice"],
)  # fmt: skip
def test_one_source_against_sarimax(kind, order, seasonal, parameters):
    """SARIMAX.get_forecast after 250 values, by its exact Kalman filter."""
    model = SARIMAX(
        np.zeros(250), order=order, seasonal_order=seasonal, enforce_invertibility=False, enforce_stationarity=False,
        initialization="approximate_diffuse" if order[1] else None,
    )  # fmt: skip
    if not order[1]:
        model.ssm.initialize_stationary()
    np.testing.assert_allclose(series_of(kind).forecast_variance(H), settled(model, parameters), rtol=1e-7)


@pytest.mark.parametrize(
    ("body", "options", "parameters"),
    [
        (
            [{"local_linear_trend": {"level_sd": 0.8, "slope_sd": 0.3, "noise_sd": 2}},
             {"seasonal_random_walk": {"period": 4, "form": "dummy", "sd": 0.5}}],
            {"level": "lltrend", "seasonal": 4}, [4, 0.64, 0.09, 0.25],
        ),
        (
            [{"local_level": {"level_sd": 0.5, "noise_sd": 1}}, {"ar": {"phi": 0.7, "sd": 0.9}}],
            {"level": "llevel", "autoregressive": 1}, [1, 0.25, 0.81, 0.7],
        ),
    ],
    ids=["structural", "level and cycle"],
)  # fmt: skip
def test_several_sources_against_unobserved_components(body, options, parameters):
    """UnobservedComponents.get_forecast after 600 values (Harvey 1989, 2.3 and 4.1)."""
    model = UnobservedComponents(np.zeros(600), **options)
    assert set(model.param_names) >= {"sigma2.irregular", "sigma2.level"}
    np.testing.assert_allclose(series_of(*body).forecast_variance(H), settled(model, parameters), rtol=1e-6)


@SOME
@given(st.floats(-0.95, 0.95), st.floats(-0.95, 0.95), st.floats(0.1, 3.0), st.floats(-0.8, 0.8))
def test_two_correlated_autoregressions_and_noise_by_the_riccati_equation(a, b, sd, rho):
    """The steady state of the Kalman filter by scipy.linalg.solve_discrete_are (Harvey 1989, 3.3)."""
    rest = {"correlation": [{"between": ["x.a", "x.b"], "value": rho}]}
    one, other = {"ar": {"phi": a, "sd": 1}, "as": "a"}, {"ar": {"phi": b, "sd": sd}, "as": "b"}
    x = series_of(one, other, {"white_noise": {"sd": 1}}, **rest)
    move, seen = np.diag([a, b]), np.ones((1, 2))
    shocks = np.array([[1.0, rho * sd], [rho * sd, sd * sd]])
    p = solve_discrete_are(move.T, seen.T, shocks, np.eye(1))
    expected = []
    for _ in range(6):
        expected.append(float((seen @ p @ seen.T)[0, 0]) + 1.0)
        p = move @ p @ move.T + shocks
    np.testing.assert_allclose(x.forecast_variance(range(1, 7)), expected, rtol=1e-9)


SPREADS = st.sampled_from([0.5, 1, 2])
PARTS = st.one_of(
    st.builds(lambda r, sd: {"ar": {"phi": list(coefficients(r)), "sd": sd}}, PARTIALS, SPREADS),
    st.builds(
        lambda r, q, sd: {"arma": {"phi": list(coefficients(r)), "theta": [q, 3 * q], "sd": sd}},
        PARTIALS, NUMBERS, SPREADS,
    ),
    st.builds(lambda sd: {"white_noise": {"sd": sd}}, SPREADS),
    st.builds(lambda sd: {"random_walk": {"sd": sd}}, SPREADS),
    st.builds(lambda sd: {"seasonal_random_walk": {"period": 3, "sd": sd, "form": "dummy"}}, SPREADS),
    st.builds(lambda sd: {"local_linear_trend": {"level_sd": sd, "slope_sd": 0.3, "noise_sd": sd}}, SPREADS),
)  # fmt: skip
BESIDE = [
    lambda parts: parts,
    lambda parts: [*parts, {"lag": {"of": [{"use": "z"}], "by": 2}}],
    lambda parts: [{"difference": parts}, {"use": "z", "times": 0.5}],
    lambda parts: [*parts, {"use": "z"}, {"lag": {"of": [{"use": "z"}], "by": 1}, "times": -0.7}],
    lambda parts: [{"integrate": parts[:1]}, {"use": "z"}],
]


@settings(max_examples=30, deadline=None)
@given(st.lists(PARTS, min_size=1, max_size=3), st.sampled_from(BESIDE))
def test_any_sum_by_a_kalman_filter_run_from_step_0(parts, beside):
    """Prediction variances of 600 steps (Kalman 1960), where they have settled: unit roots, delays, shared noises."""
    body = beside([{**part, "as": f"n{i}"} for i, part in enumerate(parts)])
    x = series_of(*body, shared={"z": [{"ar": {"phi": 0.6, "sd": 1}}]})
    system = x.system()
    move, seen, p = system.transition, system.observation[0], system.initial
    shocks, errors = system.loading @ system.noise @ system.loading.T, []
    for _ in range(600):
        reached = p @ seen
        errors.append(float(seen @ reached))
        if errors[-1] > 1e-13 * np.abs(p).max():
            p = p - np.outer(reached, reached) / errors[-1]
        p = move @ p @ move.T + shocks
    if abs(errors[-1] - errors[-60]) <= 1e-9 * errors[-1]:  # else a root on the unit circle is learnt like 1/t
        assert float(x.forecast_variance([1])[0]) == pytest.approx(errors[-1], rel=1e-6)


LINEAR = [
    "ar: {phi: [0.5, 0.3], sd: 2}",
    "arma: {phi: 0.8, theta: [0.4, 3.0], sd: 1}",
    "ar: {phi: 0.5, sd: 1, before: {x: [3]}}",
    "random_walk: {sd: 0.5, drift: 0.1}",
    "arima: {phi: 0.4, d: 2, theta: 0.3, sd: 1}",
    "arima: {d: 1, theta: -0.4, seasonal: {period: 4, d: 1, theta: -0.6}, sd: 1}",
    "arima: {phi: 0.4, d: 1, theta: 0.3, sd: 1, before: {x: [1, 2, 3], shocks: [0.5]}}",
    "local_linear_trend: {level_sd: 0.8, slope_sd: 0.3, noise_sd: 2}",
    "local_level: {level_sd: 0.8, noise_sd: 2}",
    "seasonal_random_walk: {period: 4, sd: 0.3, form: dummy}",
    "seasonal_random_walk: {period: 3, sd: 0.3}",
    "lag: {of: [{ar: {phi: 0.9, sd: 1}}], by: 3}",
]


@pytest.mark.parametrize("term", LINEAR)
def test_with_all_parts_seen_it_is_what_the_terms_forecast_from_their_states(term):
    """`ahead` runs the value code on single shocks; theory multiplies polynomials. At step 40, with noise beside."""
    graph = graph_of(f"  x: [{{{term}, as: a}}, {{white_noise: {{sd: 0.7}}}}]")
    run = Run(graph, 0, 3)
    run.tile(40)
    ahead = forecast(run, "x", int(H[-1]))
    assert not isinstance(ahead, Unknown)
    x = theory_of_graph(graph)
    spread = np.broadcast_to(ahead.variance, (H[-1], ahead.variance.shape[1]))
    np.testing.assert_allclose(x.forecast_variance(H, given="parts"), spread[H - 1, 0], rtol=1e-12)
    assert np.all(x.forecast_variance(H) >= x.forecast_variance(H, given="parts") * (1 - 1e-12))


def theory_of_graph(graph):
    from procgen.theory import theory

    return theory(graph.spec, graph)["x"]


@SOME
@given(PARTIALS, PARTIALS)
def test_an_invertible_arma_tells_its_shocks_and_another_does_not(partials, others):
    """Seen values tell the shocks where theta is invertible; roots turned round tell the same autocovariances less."""
    phi, theta = coefficients(partials), coefficients(others)
    x = series_of({"arma": {"phi": list(phi), "theta": [-c for c in theta], "sd": 1}})
    np.testing.assert_allclose(x.forecast_variance(H), x.forecast_variance(H, given="parts"), rtol=1e-12)
    if abs(theta[-1]) > 0.05:  # theta(1/B) B^q scaled: the same spectrum, all roots inside
        turned = [c / -theta[-1] for c in (*(-c for c in theta[-2::-1]), 1.0)]
        y = series_of({"arma": {"phi": list(phi), "theta": turned, "sd": abs(theta[-1])}})
        np.testing.assert_allclose(y.forecast_variance(H), x.forecast_variance(H), rtol=1e-8)


def test_a_difference_a_delay_and_a_sum_of_noises():
    """(1 - B) e has one-step variance 1 from an endless past; a delay is seen late; two noises are one."""
    x = series_of({"difference": [{"white_noise": {"sd": 1}}]})
    np.testing.assert_allclose(x.forecast_variance([1, 2, 9]), [1, 2, 2], rtol=1e-12)
    delayed = series_of({"lag": {"of": [{"ar": {"phi": 0.5, "sd": 1}}], "by": 2}})
    np.testing.assert_allclose(delayed.forecast_variance([1, 2, 3]), [1, 1.25, 1.3125], rtol=1e-12)
    np.testing.assert_allclose(delayed.forecast_variance([1, 2, 3], given="parts"), [0, 0, 1], rtol=1e-12, atol=1e-15)
    two = series_of({"white_noise": {"sd": 3}, "as": "a"}, {"white_noise": {"sd": 4}, "as": "b"})
    np.testing.assert_allclose(two.forecast_variance([1, 7]), [25, 25], rtol=1e-12)
    assert series_of({"constant": 5}).forecast_variance([1, 3]).tolist() == [0.0, 0.0]


def test_a_long_memory_is_told_by_its_weights():
    """psi(j) = Gamma(j + d) / (Gamma(d) Gamma(j + 1)) (Hosking 1981), by mpmath; then through its filter."""
    d, n = 0.3, int(H[-1])
    psi = [float(mpmath.gamma(j + d) / mpmath.gamma(d) / mpmath.gamma(j + 1)) for j in range(n)]
    filtered = lfilter([1.0, 0.4], [1.0, -0.5], psi)
    x = series_of({"arfima": {"d": d, "phi": 0.5, "theta": 0.4, "sd": 2}})
    np.testing.assert_allclose(x.forecast_variance(H), 4 * np.cumsum(filtered**2)[H - 1], rtol=1e-11)
    np.testing.assert_array_equal(x.forecast_variance(H), x.forecast_variance(H, given="parts"))


def test_far_ahead_it_is_the_variance():
    x = series_of({"ar": {"phi": [1.2, -0.5], "sd": 1}}, {"garch": {"sd": 2, "alpha": 0.1, "beta": 0.8}})
    assert float(x.forecast_variance([2000])[0]) == pytest.approx(float(x.variance(0)), rel=1e-12)


def test_a_forecast_from_values_against_sarimax():
    """The conditional law of an ARMA(1,1) given 30 values, filtered from its stationary law by statsmodels."""
    y = np.random.default_rng(5).normal(size=30)
    model = SARIMAX(y, order=(1, 0, 1))
    model.ssm.initialize_stationary()
    expected = model.filter([0.7, 0.4, 2.25]).get_forecast(30)
    x = series_of({"arma": {"phi": 0.7, "theta": 0.4, "sd": 1.5}}, {"constant": 10})
    found = x.forecast(H, y + 10.0)
    assert found.steps.tolist() == (29 + H).tolist()
    np.testing.assert_allclose(found.mean, 10.0 + expected.predicted_mean[H - 1], rtol=1e-10)
    np.testing.assert_allclose(found.variance, expected.var_pred_mean[H - 1], rtol=1e-10)


def test_one_horizon_gives_numbers():
    x = series_of({"ar": {"phi": 0.5, "sd": 1}})
    for history in ([], [2.0]):
        found = x.forecast(3, history)
        assert isinstance(found.mean, float) and isinstance(found.variance, float)
        assert x.forecast([3], history).mean.tolist() == [found.mean]


def test_a_forecast_from_a_known_start_and_from_before():
    """A local level known at step 0 by statsmodels' filter; a stated past by its recursion; a past that cannot be."""
    y = np.array([1.0, 2.0, 0.5, 1.5])
    model = UnobservedComponents(y, "llevel")
    model.ssm.initialize_known(np.array([3.0]), np.zeros((1, 1)))
    expected = model.filter([1.0, 0.25]).get_forecast(30)
    found = series_of({"local_level": {"level_sd": 0.5, "noise_sd": 1, "start": 3}}).forecast(H, y)
    np.testing.assert_allclose(found.mean, expected.predicted_mean[H - 1], rtol=1e-10)
    np.testing.assert_allclose(found.variance, expected.var_pred_mean[H - 1], rtol=1e-10)
    stated = series_of({"ar": {"phi": [0.5, 0.2], "sd": 1, "before": {"x": [1.0, 2.0]}}})
    ahead = stated.forecast([1, 2])
    np.testing.assert_allclose(ahead.mean, [1.2, 1.0], rtol=1e-12)
    np.testing.assert_allclose(ahead.variance, [1.0, 1.25], rtol=1e-12)
    walk = series_of({"random_walk": {"sd": 1, "start": 7}})
    assert walk.forecast([1], [7.0, 8.0]).mean.tolist() == [8.0]
    with pytest.raises(ValueError, match="expected 7 at step 0, which is known; got 6"):
        walk.forecast([1], [6.0, 8.0])


def autocovariances():
    """Closed forms from outside: of an exponential (Aitchison & Brown 1957), and of a chain of two states."""
    lags = np.arange(600)
    return {
        "price": ([{"exp": [{"ar": {"phi": 0.5, "sd": 0.6}}]}], np.exp(0.48) * np.expm1(0.48 * 0.5**lags)),
        "flag": ([{"flag": {"share": 0.2, "stay": 4}}], 0.16 * 0.6875**lags),
        "both": (
            [{"exp": [{"ar": {"phi": 0.5, "sd": 0.6}}]}, {"ar": {"phi": -0.8, "sd": 1}, "as": "own"}],
            np.exp(0.48) * np.expm1(0.48 * 0.5**lags) + (-0.8) ** lags / 0.36,
        ),
    }


@pytest.mark.parametrize("name", ["price", "flag", "both"])
def test_best_linear_forecasts_of_what_is_not_linear(name):
    """Durbin's recursion of statsmodels over 500 lags of a closed form, then psi weights by their recursion."""
    body, gamma = autocovariances()[name]
    _, phi, _, left, _ = levinson_durbin(gamma, nlags=500, isacov=True)
    psi = lfilter([1.0], np.concatenate([[1.0], -phi]), np.eye(1, 30)[0])
    expected = left[-1] if np.ndim(left) else left
    np.testing.assert_allclose(series_of(*body).forecast_variance(H), (expected * np.cumsum(psi**2))[H - 1], rtol=1e-8)


SYSTEM = {"names": ["a", "b"], "sd": [1.0, 2.0], "correlation": [[1, 0.3], [0.3, 1]]}
STATIONARY = {"vector_arma": SYSTEM | {"phi": [[[0.5, 0.3], [-0.2, 0.4]]], "theta": [[[0.3, 0], [0.1, -0.4]]]}}
PULLED = {
    "vector_error_correction": SYSTEM
    | {"relations": [[1, -1]], "adjustment": [[-0.1], [0.2]], "phi": [[[0.1, 0], [0.25, 0.1]]]}
}


@pytest.mark.parametrize("term", [STATIONARY, PULLED], ids=["stationary", "cointegrated"])
@pytest.mark.parametrize("factor", [0, -1], ids=["component", "difference"])
def test_components_of_a_system_against_dense_conditioning(term, factor):
    """Given 250 values long after the start, by the covariances of all (Brockwell & Davis 1991, 5.1)."""
    body = [{"use": "w.v.a"}, {"use": "w.v.b", "times": factor}] if factor else [{"use": "w.v.a"}]
    x = theory_of({"x": [*body, {"ar": {"phi": 0.7, "sd": 0.5}}], "z": body}, shared={"w": [{**term, "as": "v"}]})
    for series in x.values():
        known = series.forecast(H, series.mean(np.arange(400, 650)), from_step=400)
        np.testing.assert_allclose(series.forecast_variance(H), known.variance, rtol=1e-8)
    all_seen = x["z"].forecast_variance(H, given="parts")
    step = np.array([1.0, factor]) @ [[1.0, 0.6], [0.6, 4.0]] @ [1.0, factor]
    assert all_seen[0] == pytest.approx(step, rel=1e-12) and (all_seen <= x["z"].forecast_variance(H)).all()


def test_reasons_and_refusals():
    whole = theory_of(
        {
            "price": [{"exp": [{"ar": {"phi": 0.5, "sd": 1}}]}],
            "heavy": [{"garch": {"omega": 1, "alpha": 0.5, "beta": 0.6, "allow_infinite_variance": True}}],
            "twice": [{"ar": {"phi": 0.5, "sd": 1}}],
            "drifting": [
                {"seasonal_random_walk": {"period": 500, "form": "dummy", "sd": 0.01}},
                {"white_noise": {"sd": 1}},
            ],
        }
    )
    price, twice, drifting = whole["price"], whole["twice"], whole["drifting"]
    grown = series_of({"exp": [{"random_walk": {"sd": 0.1}}]})
    assert drifting.forecast_variance([1]) is None and "too long to settle" in drifting.reason("forecast_variance")
    assert drifting.forecast_variance([1], given="parts") is not None
    assert price.forecast_variance([1], given="parts") is None
    assert "through a product or an exponential" in price.reason("forecast_variance")
    assert grown.forecast_variance([1]) is None
    assert "covariances depend on the step" in grown.reason("forecast_variance")
    assert whole["heavy"].forecast_variance([1]) is None
    assert "infinite variance" in whole["heavy"].reason("forecast_variance")
    assert twice.forecast_variance([10**7]) is None and "up to 1000000 steps" in twice.reason("forecast_variance")
    with pytest.raises(ValueError, match=r"expected whole horizons from 1 on, got \[0\]"):
        twice.forecast_variance([0])
    with pytest.raises(ValueError, match="expected `given` to be values or parts, got 'all'"):
        twice.forecast_variance([1], given="all")
    with pytest.raises(ValueError, match="finite values"):
        twice.forecast([1], [np.nan])


@pytest.mark.parametrize("over", [2, 3, 4, 6, 7])
def test_a_rolling_mean_tells_its_shocks_though_its_roots_are_on_the_circle(over):
    """e[t] + … + e[t−k+1] has no root inside the circle: its shocks are its innovations (Wold 1938)."""
    mean = {"rolling_mean": {"of": [{"ar": {"phi": 0.5, "sd": 1}}], "over": over}}
    x = series_of(mean)
    psi = np.convolve(0.5 ** np.arange(H[-1]), np.ones(over) / over)[: H[-1]]
    np.testing.assert_allclose(x.forecast_variance(H), np.cumsum(psi**2)[H - 1], rtol=1e-12)


def test_a_rolling_mean_of_a_level_in_noise_is_what_regression_on_long_pasts_comes_near():
    """Least squares on 200 and 400 values before: what is left falls to it like 1/n, for roots on the circle."""
    k = 4
    x = series_of({"rolling_mean": {"of": [{"local_level": {"level_sd": 1, "noise_sd": 2}}], "over": k}})
    stated, left = x.forecast_variance([1, 6]), []
    for n in (200, 400):
        steps = np.arange(n + 6 + k)
        path = np.tril(np.ones((len(steps), len(steps))), -1)  # a level that moves from step 1 on
        rows = np.hstack([path, 2.0 * np.eye(len(steps))])
        means = sum(rows[k - 1 - j : len(steps) - j] for j in range(k)) / k
        joint = means @ means.T
        past, ahead = slice(0, n), [n, n + 5]
        weights = np.linalg.solve(joint[past, past], joint[past][:, ahead])
        left.append(np.diag(joint[np.ix_(ahead, ahead)] - joint[ahead][:, past] @ weights))
    assert np.all(left[0] > left[1]) and np.all(left[1] > stated)
    np.testing.assert_allclose(2.0 * left[1] - left[0], stated, rtol=1e-3)


def test_a_distributed_lag_of_a_walk_is_an_arima():
    """(1 − φB) y = x for a random walk, and for a level in noise, which is an IMA(1, 1) (Box & Jenkins 1970, ch. 4)."""
    lagged = {"distributed_lag": {"of": [{"random_walk": {"sd": 2}}], "phi": 0.7}}
    same = {"arima": {"phi": 0.7, "d": 1, "sd": 2}}
    for what in ("values", "parts"):
        ours, theirs = (series_of(one).forecast_variance(H, given=what) for one in (lagged, same))
        np.testing.assert_allclose(ours, theirs, rtol=1e-12)
    twice = {"distributed_lag": {"of": [{**lagged, "times": 3}], "phi": [0.2, 0.1]}}
    whole = np.convolve([1.0, -0.2, -0.1], [1.0, -0.7])
    same = {"arima": {"phi": (-whole[1:]).tolist(), "d": 1, "sd": 6}}
    np.testing.assert_allclose(series_of(twice).forecast_variance(H), series_of(same).forecast_variance(H), rtol=1e-12)
    level = {"distributed_lag": {"of": [{"local_level": {"level_sd": 1, "noise_sd": 2}}], "phi": 0.7}}
    variance = (9.0 + np.sqrt(9.0**2 - 4.0 * 16.0)) / 2.0  # σ²(1 + θ²) = 1 + 2·4 and −σ²θ = 4
    same = {"arima": {"phi": 0.7, "d": 1, "theta": -4.0 / variance, "sd": np.sqrt(variance).item()}}
    np.testing.assert_allclose(series_of(level).forecast_variance(H), series_of(same).forecast_variance(H), rtol=1e-9)


def test_a_distributed_lag_beside_another_term_says_what_is_not_worked_out():
    lagged = {"distributed_lag": {"of": [{"random_walk": {"sd": 2}}], "phi": 0.7}}
    x = series_of(lagged, {"white_noise": {"sd": 1}})
    assert x.forecast_variance(H) is None
    assert "x.distributed_lag, whose forecasts are not worked out" in x.reason("forecast_variance")
