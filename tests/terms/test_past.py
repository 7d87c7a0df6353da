"""Series that leave from their recorded past, against forecasts of statsmodels and arch with the same numbers, and
against the best linear predictor written down with whole covariance matrices (Goldberger 1962).
"""

import warnings

import numpy as np
import pytest

import procgen as pg
from procgen.terms.graph import build
from procgen.terms.run import Run

STEPS = 25
RECORD = np.cumsum(np.random.default_rng(1).normal(size=80))
AHEAD = np.arange(STEPS)
LEVEL = {"local_level": {"level_sd": 0.7, "noise_sd": 1.1}}
AR = {"ar": {"phi": 0.6, "sd": 0.5}}


def spec_of(body, before, paths=400, **more):
    series = {"x": {"of": body, "before": [float(v) for v in before], **more}}
    return pg.load({"seed": 7, "paths": paths, "time": {"steps": STEPS}, "series": series})


def fan(body, before):
    theory = pg.theory(spec_of(body, before))["x"]
    return theory.mean(AHEAD), theory.variance(AHEAD)


def sarimax(values, order, numbers, **more):
    from statsmodels.tsa.statespace.sarimax import SARIMAX

    model = SARIMAX(np.asarray(values), order=order, **more)
    model.ssm.tolerance = 0.0  # else its gain is frozen early
    return model.smooth(numbers).get_forecast(STEPS)


def components(values, numbers, *what, **more):
    from statsmodels.tsa.statespace.structural import UnobservedComponents

    model = UnobservedComponents(np.asarray(values), *what, use_exact_diffuse=True, **more)
    model.ssm.tolerance = 0.0
    return model.smooth(numbers).get_forecast(STEPS)


def agrees(body, before, forecast, tight=1e-8):
    mean, variance = fan(body, before)
    scale = np.abs(forecast.predicted_mean).max()
    assert np.allclose(mean, forecast.predicted_mean, rtol=tight, atol=tight * scale)
    assert np.allclose(variance, forecast.var_pred_mean, rtol=tight, atol=0.0)


# SARIMAX of statsmodels 0.15, parameters fixed; it starts in the stationary law, or exactly diffuse.
@pytest.mark.parametrize("count", [1, 2, 3, 80])
@pytest.mark.parametrize(
    ("body", "order", "numbers"),
    [
        ({"ar": {"phi": [0.5, 0.3], "sd": 1.5}}, (2, 0, 0), [0.5, 0.3, 2.25]),
        ({"arma": {"phi": [0.5, 0.3], "theta": 0.4, "sd": 1.5}}, (2, 0, 1), [0.5, 0.3, 0.4, 2.25]),
        ({"ma": {"theta": [0.9, 0.5], "sd": 1.5}}, (0, 0, 2), [0.9, 0.5, 2.25]),
        ({"ma": {"theta": 1.0, "sd": 1.5}}, (0, 0, 1), [1.0, 2.25]),  # not invertible, and told all the same
    ],
)
def test_a_stationary_filter_is_forecast_as_by_statsmodels_from_records_of_any_length(body, order, numbers, count):
    values = RECORD[-count:]
    agrees(body, values, sarimax(values, order, numbers))


@pytest.mark.parametrize(
    ("body", "numbers", "more"),
    [
        ({"arima": {"phi": 0.5, "d": 1, "theta": 0.4, "sd": 1.5}}, [0.5, 0.4, 2.25], {"order": (1, 1, 1)}),
        ({"arima": {"d": 2, "theta": [-0.6, 0.2], "sd": 1.5}}, [-0.6, 0.2, 2.25], {"order": (0, 2, 2)}),
        (
            {"arima": {"d": 1, "theta": -0.4, "seasonal": {"period": 4, "d": 1, "theta": -0.6}, "sd": 1.5}},
            [-0.4, -0.6, 2.25],
            {"order": (0, 1, 1), "seasonal_order": (0, 1, 1, 4)},
        ),
        ({"random_walk": {"sd": 1.5, "start": 99}}, [2.25], {"order": (0, 1, 0)}),
        (
            {"seasonal_random_walk": {"period": 4, "sd": 1.5}},
            [2.25],
            {"order": (0, 0, 0), "seasonal_order": (0, 1, 0, 4)},
        ),
    ],
)
def test_an_integrated_filter_is_forecast_as_by_statsmodels(body, numbers, more):
    agrees(body, RECORD, sarimax(RECORD, numbers=numbers, use_exact_diffuse=True, **more))


@pytest.mark.parametrize(
    ("body", "numbers", "what"),
    [
        ([LEVEL, AR], [1.21, 0.49, 0.25, 0.6], {"level": "llevel", "autoregressive": 1}),
        (
            [{"local_linear_trend": {"level_sd": 0.7, "slope_sd": 0.2, "noise_sd": 1.1}}, AR],
            [1.21, 0.49, 0.04, 0.25, 0.6],
            {"level": "lltrend", "autoregressive": 1},
        ),
        ([{"local_linear_trend": {"slope_sd": 0.2, "noise_sd": 1.1}}], [1.21, 0.04], {"level": "strend"}),
        ([{"local_linear_trend": {"slope_sd": 0.2}}, AR], [0.04, 0.25, 0.6], {"level": "rtrend", "autoregressive": 1}),
        (
            [LEVEL, {"stochastic_cycle": {"rho": 0.8, "period": 9, "sd": 0.5}}],
            [1.21, 0.49, 0.25, 2 * np.pi / 9, 0.8],
            {"level": "llevel", "cycle": True, "stochastic_cycle": True, "damped_cycle": True},
        ),
        (
            [LEVEL, {"seasonal_random_walk": {"period": 4, "form": "dummy", "sd": 0.5}}],
            [1.21, 0.49, 0.25],
            {"level": "llevel", "seasonal": 4},
        ),
    ],
)
@pytest.mark.parametrize("count", [12, 80])
def test_sums_of_unobserved_components_are_forecast_as_by_statsmodels(body, numbers, what, count):
    # statsmodels begins a damped cycle with no knowledge, not in its stationary law; 80 steps forget that.
    values = RECORD[-80 if "cycle" in what else -count :]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # of names of the parameters
        forecast = components(values, numbers, **what)
    agrees(body, values, forecast)


def test_known_terms_factors_and_drifts_are_taken_away_before():
    known = 0.2 * np.arange(-80, STEPS) + 3 * np.cos(2 * np.pi * np.arange(-80, STEPS) / 7)
    drift = 0.3 * np.arange(-80, STEPS)
    forecast = components(
        RECORD - (known + drift)[:80], [1.21, 0.49, 0.25, 0.6], "llevel", autoregressive=1
    )  # a walk and a noise are a local level
    body = [
        {"trend": {"slope": 0.2}},
        {"product": [{"constant": 3}, {"seasonal": {"period": 7, "harmonics": [{"amplitude": 1}]}}]},
        {"random_walk": {"sd": 0.7, "drift": 0.3, "start": 7}},
        {"white_noise": {"sd": 1.1}},
        {"ar": {"phi": 0.6, "sd": 0.25}, "times": -2},
    ]
    mean, variance = fan(body, RECORD)
    assert np.allclose(mean, forecast.predicted_mean + (known + drift)[80:], rtol=1e-8, atol=1e-8)
    assert np.allclose(variance, forecast.var_pred_mean, rtol=1e-8, atol=0.0)


def test_what_the_past_can_never_tell_apart_does_not_matter():
    """A level and a seasonal walk both hold the mean: only their sum is told. Against the best linear predictor."""
    n, period = 30, 4
    steps = np.arange(1, n + STEPS + 1)
    walk = np.minimum.outer(steps, steps)
    season, turn = steps % period, (steps + period - 1) // period
    seasonal = np.where(season[:, None] == season[None, :], np.minimum.outer(turn, turn), 0)
    lags = np.abs(np.subtract.outer(steps, steps))
    cycle = 0.16 / (1 - 0.64) * 0.8**lags * np.cos(2 * np.pi * lags / 9)
    cov = 0.49 * walk + 0.09 * seasonal + 0.25 / (1 - 0.36) * 0.6**lags + cycle + 1.21 * np.eye(len(steps))
    free = np.column_stack([np.ones(len(steps)), *(season == s for s in range(period))]).astype(float)
    past, ahead = slice(0, n), slice(n, None)
    weights, y = np.linalg.inv(cov[past, past]), RECORD[-n:]
    bread = np.linalg.pinv(free[past].T @ weights @ free[past])
    fitted = bread @ free[past].T @ weights @ y
    reach = cov[ahead, past] @ weights
    mean = free[ahead] @ fitted + reach @ (y - free[past] @ fitted)
    open_ = free[ahead] - reach @ free[past]
    variance = np.diag(cov[ahead, ahead] - reach @ cov[past, ahead] + open_ @ bread @ open_.T)

    body = [LEVEL, {"seasonal_random_walk": {"period": period, "sd": 0.3}}, AR]
    body += [{"stochastic_cycle": {"rho": 0.8, "period": 9, "sd": 0.4}}]
    found = fan(body, y)
    assert np.allclose(found[0], mean, rtol=1e-8, atol=1e-8)
    assert np.allclose(found[1], variance, rtol=1e-8)


SHOCKS = np.random.default_rng(5).standard_t(8, size=400)


# arch 8.0, parameters fixed; it begins the variance elsewhere, which 400 steps forget.
@pytest.mark.parametrize(
    ("noise", "model", "numbers"),
    [
        ({"garch": {"omega": 0.1, "alpha": 0.15, "beta": 0.7}}, {"vol": "GARCH"}, [0.1, 0.15, 0.7]),
        (
            {"garch": {"omega": 0.1, "alpha": [0.1, 0.05], "beta": [0.5, 0.2]}},
            {"vol": "GARCH", "p": 2, "q": 2},
            [0.1, 0.1, 0.05, 0.5, 0.2],
        ),
        ({"arch": {"omega": 0.7, "alpha": [0.2, 0.1]}}, {"vol": "ARCH", "p": 2}, [0.7, 0.2, 0.1]),
        (
            {"gjr_garch": {"omega": 0.1, "alpha": 0.05, "gamma": 0.1, "beta": 0.8}},
            {"vol": "GARCH", "o": 1},
            [0.1, 0.05, 0.1, 0.8],
        ),
    ],
)
def test_variances_are_forecast_as_by_arch(noise, model, numbers):
    from arch import arch_model

    fixed = arch_model(SHOCKS, mean="Zero", **model).fix(numbers)
    expected = fixed.forecast(horizon=STEPS, reindex=False).variance.to_numpy()[-1]
    assert np.allclose(fan([noise], SHOCKS)[1], expected, rtol=1e-8)
    driven = arch_model(SHOCKS, mean="AR", lags=[1], **model).fix([0.3, 0.4, *numbers])
    ahead = driven.forecast(horizon=STEPS, reindex=False)
    mean, variance = fan([{"constant": 0.5}, {"ar": {"phi": 0.4, "shock": noise}}], SHOCKS)
    assert np.allclose(mean, ahead.mean.to_numpy()[-1], rtol=1e-8)
    assert np.allclose(variance, ahead.variance.to_numpy()[-1], rtol=1e-8)


def test_an_exponential_garch_leaves_from_the_variance_that_arch_filters():
    from arch import arch_model

    fixed = arch_model(SHOCKS, mean="Zero", vol="EGARCH", p=1, o=1, q=1).fix([0.02, 0.2, -0.1, 0.9])
    expected = fixed.forecast(horizon=1, reindex=False).variance.to_numpy()[-1, 0]
    body = [{"egarch": {"omega": 0.02, "alpha": 0.2, "gamma": -0.1, "beta": 0.9}}]
    assert np.isclose(fan(body, SHOCKS)[1][0], expected, rtol=1e-8)


def test_a_filter_of_other_shocks_is_inverted_once_its_record_is_long_enough():
    law = {"student_t": {"df": 5}}
    body = {"arma": {"phi": 0.5, "theta": 0.4, "sd": 1.5, "law": law}}
    values = SHOCKS - SHOCKS.mean()
    forecast = sarimax(values, (1, 0, 1), [0.5, 0.4, 2.25])  # the best linear forecast, which is also the mean here
    agrees(body, values, forecast)
    with pytest.raises(pg.SpecError, match=r"not normal: expected at least \d+ values before step 0 .* got 9"):
        build(spec_of(body, values[:9]))


BODIES = {
    "sum": [{"trend": {"level": 3, "slope": 0.1}}, LEVEL, AR],
    "cycle": [LEVEL, {"stochastic_cycle": {"rho": 0.8, "period": 9, "total_sd": 0.5}}],
    "season": [{"seasonal_random_walk": {"period": 4, "sd": 0.3}}, {"white_noise": {"sd": 0.5}}],
    "arma": [{"arma": {"phi": [0.5, 0.3], "theta": 0.4, "sd": 1.5}}],
    "student": [{"ar": {"phi": [0.5, 0.3], "sd": 1.5, "law": {"student_t": {"df": 6}}}}],
    "garch": [{"ar": {"phi": 0.5, "shock": {"garch": {"omega": 0.1, "alpha": 0.1, "beta": 0.8}}}}],
    "walk": [{"random_walk": {"sd": 0.5, "law": "laplace"}}],
}


@pytest.mark.parametrize("body", BODIES.values(), ids=BODIES)
def test_paths_follow_the_stated_fan(body):
    """Means and variances of 4,000 paths within 6 standard errors (under 1e-6 for the 350 of them together)."""
    spec = spec_of(body, RECORD[:40], 4000)
    x, theory = pg.render(spec)["x"], pg.theory(spec)["x"]
    mean, variance = theory.mean(AHEAD), theory.variance(AHEAD)
    assert np.all(np.abs(x.mean(axis=0) - mean) < 6 * np.sqrt(variance / 4000))
    fourth = ((x - mean) ** 4).mean(axis=0)
    assert np.all(np.abs(((x - mean) ** 2).mean(axis=0) - variance) < 6 * np.sqrt((fourth - variance**2) / 4000))


@pytest.mark.parametrize("body", BODIES.values(), ids=BODIES)
def test_validate_agrees_with_the_fan_and_departs_from_one_that_does_not_leave_from_the_past(body):
    spec = spec_of(body, RECORD[:40])
    assert pg.validate(pg.render(spec), false_alarm=1e-8).agrees
    other = RECORD[:40].copy()
    other[-1] += 3.0
    elsewhere = pg.render(spec_of(body, other))
    assert pg.validate(elsewhere, spec=spec).agrees is False


def test_a_start_without_what_the_past_leaves_open_departs():
    """Paths that all leave from the mean of where the parts may stand are too narrow, and are found."""
    from dataclasses import replace

    from procgen.spec.model import Frozen

    spec = spec_of(BODIES["sum"], RECORD[:40], 2000)
    narrow = build(spec).spec
    body = tuple(entry for entry in narrow.series["x"].of if entry.kind != "open_start")
    narrow = replace(narrow, series=Frozen({"x": replace(narrow.series["x"], of=body)}))
    verdict = pg.validate(pg.render(narrow), spec=spec)
    assert verdict.agrees is False
    assert "spread" in verdict.headline[0]


@pytest.mark.parametrize("body", BODIES.values(), ids=BODIES)
def test_neither_tiles_nor_ranges_of_paths_change_a_bit(body):
    graph = build(spec_of(body, RECORD[:40]))
    whole = Run(graph, 0, 20).tile(STEPS)["x"]
    run = Run(graph, 5, 3)
    parts = np.concatenate([run.tile(7)["x"], run.tile(1)["x"], run.tile(STEPS - 8)["x"]])
    assert np.array_equal(whole[:, 5:8], parts)
    again = Run(graph, 5, 3)
    again.restore(run.step - 0, run.state())
    assert np.array_equal(again.tile(3)["x"], run.tile(3)["x"])


def test_other_series_draw_what_they_drew():
    with_past = {"of": BODIES["sum"], "before": [float(v) for v in RECORD]}
    data = {"seed": 7, "paths": 9, "time": {"steps": 9}, "series": {"x": BODIES["sum"], "y": [AR]}}
    left = {**data, "series": {**data["series"], "x": with_past}}
    assert np.array_equal(pg.render(data)["y"], pg.render(left)["y"])
    assert not np.array_equal(pg.render(data)["x"], pg.render(left)["x"])


def test_components_add_up_to_the_series():
    ens = pg.render(spec_of(BODIES["sum"], RECORD), reveal="all")
    parts = ["trend", "local_level", "ar", "open_start"]
    assert np.allclose(sum(ens[f"x.{part}"] for part in parts), ens["x"], rtol=0, atol=1e-12)


def test_lags_read_the_record_where_it_is_the_past_of_the_series():
    data = {
        "seed": 7,
        "paths": 3,
        "time": {"steps": 4},
        "series": {"x": {"of": [{"trend": {"slope": 0.1}}, AR], "before": [1, 2, 5]}, "y": {"lag": [{"use": "x"}]}},
    }
    assert np.allclose(pg.render(data)["y"][:, 0], 5.0, rtol=1e-12)
    data["series"]["x"]["of"] = [LEVEL]
    with pytest.raises(pg.SpecError, match="begin at step 0; lag less"):
        build(pg.load(data))


def test_errors_ahead_of_a_record_are_those_of_the_fan():
    """GARCH variances as in Engle (1982) and Bollerslev (1986): E h[k + 1] = ω + (α + β) E h[k]; the rest by hand."""
    record, garch = [0.2, -0.5, 1.0, -6, 8, -7], {"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.85}}
    series = {
        "r": {"of": [garch], "before": record},
        "walk": {"of": [{"random_walk": {"sd": 2}}], "before": record},
        "user": [{"use": "walk"}, {"white_noise": {"sd": 3}}],
        "late": [{"lag": {"by": 1, "of": [{"use": "own"}]}}],
        "own": [{"ar": {"phi": 0.5, "sd": 3, "before": {"x": 16}}}],
        "free": [{"ar": {"phi": 0.5, "sd": 3}}],
    }
    th = pg.theory({"procgen": 1, "seed": 5, "paths": 2, "time": {"steps": 20}, "series": series})
    h = 1.0
    for e in record:
        h = 0.05 + 0.1 * e * e + 0.85 * h
    expected = {"r": [h, 0.05 + 0.95 * h], "walk": [4, 8], "user": [13, 17], "late": [0, 9], "own": [9, 11.25]}
    for name, values in expected.items():
        assert th[name].recorded
        np.testing.assert_allclose(th[name].forecast_variance([1, 2]), values, rtol=1e-12, atol=1e-12)
    assert th["r"].forecast_variance([1], given="parts") == pytest.approx(h)
    told = th.as_dict([0, 1], 1, horizons=(1, 2))["series"]
    assert told["walk"]["forecast_variance"]["given_record"] and not told["free"]["forecast_variance"]["given_record"]
    assert th["free"].forecast_variance([2]).tolist() == [11.25]


def test_a_cycle_leaves_from_a_stated_place():
    """ψ and ψ* turn by λ and shrink by ρ a step (Harvey 1989, 2.3.3), variance σ²(1 − ρ²ᵏ)/(1 − ρ²) after k steps."""
    spec = pg.load(
        {
            "seed": 1,
            "paths": 500,
            "time": {"steps": 9},
            "series": {
                "x": {"stochastic_cycle": {"rho": 0.9, "period": 7, "sd": 2, "before": {"cycle": 3, "star": -1}}},
                "y": [{"use": "x.stochastic_cycle.star"}],
            },
        }
    )
    k, theory = np.arange(1, 10), pg.theory(spec)
    turn = 2 * np.pi * k / 7
    assert np.allclose(theory["x"].mean(k - 1), 0.9**k * (3 * np.cos(turn) - np.sin(turn)), rtol=1e-12)
    assert np.allclose(theory["y"].mean(k - 1), 0.9**k * (-3 * np.sin(turn) - np.cos(turn)), rtol=1e-12)
    for name in "xy":
        assert np.allclose(theory[name].variance(k - 1), 4 * (1 - 0.81**k) / (1 - 0.81), rtol=1e-12)
    assert np.allclose(theory.cross("x", "y").covariance(k - 1, k - 1), 0.0, atol=1e-12)
    assert pg.validate(pg.render(spec), false_alarm=1e-8).agrees


def test_correlated_shocks_stay_so_from_step_0_on():
    """Cov(x_t, y_t) = ρ Σ (φψ)ᵏ over the shocks from step 0 on, whatever the record of x was."""
    data = {
        "seed": 7,
        "paths": 2000,
        "time": {"steps": STEPS},
        "series": {"x": {"of": [AR, LEVEL], "before": RECORD.tolist()}, "y": [{"ar": {"phi": 0.8, "sd": 2}}]},
        "correlation": [{"between": ["x.ar", "y.ar"], "value": 0.5}],
    }
    theory = pg.theory(data)
    expected = 0.5 * 0.5 * 2 * np.cumsum(0.48**AHEAD)
    assert np.allclose(theory.cross("x", "y").covariance(AHEAD, AHEAD), expected, rtol=1e-10)
    assert np.allclose(theory["y"].variance(AHEAD), 4 / (1 - 0.64), rtol=1e-10)
    assert pg.validate(pg.render(data), false_alarm=1e-8).agrees
