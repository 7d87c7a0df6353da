"""A price that leaves from today's: the body of an exponential is told where it stands by the logarithms of the record.

Forecasts of the logarithms are those of statsmodels with the same numbers; the moments of an exponential of a normal
are those of the lognormal law (Aitchison & Brown 1957; SciPy's `lognorm` here).
"""

import numpy as np
import pytest
from scipy.stats import lognorm

import procgen as pg
from tests.terms.test_past import AHEAD, AR, RECORD, components, sarimax

LOGS = 3.0 + 0.02 * RECORD
SMALL_LEVEL = {"local_level": {"level_sd": 0.014, "noise_sd": 0.022}}
SMALL_AR = {"ar": {"phi": 0.6, "sd": 0.01}}


def spec_of(of, before, paths=400, **more):
    series = {"x": {"of": of, "before": [float(v) for v in before]}, **more}
    return pg.load({"seed": 7, "paths": paths, "time": {"steps": len(AHEAD)}, "series": series})


def lognormal(forecast):
    """Mean and variance of the exponential of a normal forecast, by SciPy."""
    sd = np.sqrt(forecast.var_pred_mean)
    return lognorm.stats(sd, scale=np.exp(forecast.predicted_mean), moments="mv")


@pytest.mark.parametrize(
    ("inner", "forecast"),
    [
        ([{"random_walk": {"sd": 0.03, "start": 99}}], lambda logs: sarimax(logs, (0, 1, 0), [0.0009], trend="n")),
        ([{"ar": {"phi": [0.5, 0.3], "sd": 0.03}}], lambda logs: sarimax(logs, (2, 0, 0), [0.5, 0.3, 0.0009])),
        (
            [SMALL_LEVEL, SMALL_AR],
            lambda logs: components(logs, [0.022**2, 0.014**2, 0.0001, 0.6], level="llevel", autoregressive=1),
        ),
    ],
)
@pytest.mark.parametrize(("times", "base"), [(1.0, 0.0), (2.5, -7.0)])
def test_the_fan_of_a_price_is_the_lognormal_one_of_the_forecast_of_its_logarithm(inner, forecast, times, base):
    body = [{"exp": inner, "times": times}, *([{"constant": base}] if base else [])]
    theory = pg.theory(spec_of(body, base + times * np.exp(LOGS)))["x"]
    mean, variance = lognormal(forecast(LOGS))
    assert np.allclose(theory.mean(AHEAD), base + times * mean, rtol=1e-8)
    assert np.allclose(theory.variance(AHEAD), times**2 * variance, rtol=1e-7)


def test_paths_follow_the_fan_and_another_record_departs():
    body = [{"exp": [SMALL_LEVEL, SMALL_AR]}]
    spec = spec_of(body, np.exp(LOGS), 4000)
    paths, theory = pg.render(spec), pg.theory(spec)["x"]
    error = np.sqrt(theory.variance(AHEAD) / 4000)
    assert np.all(np.abs(paths["x"].mean(axis=0) - theory.mean(AHEAD)) < 6 * error)  # 25 of 2e-9 each
    assert pg.validate(paths, false_alarm=1e-8).agrees
    other = LOGS.copy()
    other[-1] += 0.1
    assert pg.validate(pg.render(spec_of(body, np.exp(other), 400)), spec=spec).agrees is False


def test_parts_and_lags_know_of_the_record():
    spec = spec_of([{"exp": [SMALL_LEVEL, SMALL_AR]}, {"constant": 2}], 2 + np.exp(LOGS))
    ens = pg.render(spec, reveal="all")
    assert np.array_equal(ens["x.exp"] + ens["x.constant"], ens["x"])
    logs = np.log(ens["x.exp"])
    assert np.allclose(ens["x.local_level"] + ens["x.ar"] + ens["x.open_start"], logs, rtol=1e-13)
    walk = spec_of(
        [{"exp": [{"random_walk": {"sd": 0.03}}]}], np.exp(LOGS), y=[{"lag": {"of": [{"use": "x"}], "by": 1}}]
    )
    made = pg.render(walk)
    assert np.allclose(made["y"][:, 0], np.exp(LOGS[-1]), rtol=1e-14)
    assert np.array_equal(made["y"][:, 1:], made["x"][:, :-1])
    left = pg.theory(walk).graph.left["x"]
    assert (left.count, left.last) == (len(LOGS), float(np.exp(LOGS)[-1]))


@pytest.mark.parametrize(
    ("body", "before", "message"),
    [
        (
            [{"exp": [SMALL_AR]}, {"constant": 30}],
            np.exp(LOGS),
            r"the past of x is not one of x\.exp: expected values above 0, as an exponential has, got -\d",
        ),
        ([{"exp": [SMALL_LEVEL]}, AR], np.exp(LOGS), "does not tell its parts apart: .* got x.exp"),
        ([{"exp": [{"poisson": {"mean": 2}}]}], np.exp(LOGS), r"x\.poisson cannot leave from the past of x"),
        (
            [{"geometric_brownian_motion": {"sd": 0.1}}],
            np.exp(LOGS),
            r"cannot be told where it stands; .* or write it as exp: \[\{random_walk: \{sd: σ, .*, which can",
        ),
    ],
)
def test_what_is_no_past_of_an_exponential_is_told(body, before, message):
    with pytest.raises(pg.SpecError, match=message):
        pg.render(spec_of(body, before))
