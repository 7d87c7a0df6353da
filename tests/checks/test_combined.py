"""Terms within terms: what a spec draws agrees with what the spec states.

Each stands for a fault that was met when every example of the catalogue was put under every operator. What is true
departs with a probability of at most 1e-8 each. References: the specs, numpy's functions of known values, and the
covariance of a difference by its definition.
"""

import warnings

import numpy as np
import pytest

import procgen as pg

NOISE = {"white_noise": {"sd": 1}}
PATTERN = {"seasonal_random_walk": {"period": 4, "sd": 0.3, "start": [5, -2, -4, 1]}}
WAVE = {"seasonal": {"period": 12, "harmonics": [{"amplitude": 3}]}}
ARRIVALS = {"inar": {"alpha": 0.6, "mean": 12}}
FLAG = {"flag": {"share": 0.2, "stay": 5}}
DEMAND = {"intermittent": {"share": 0.2, "stay": 3, "size": 12, "sd": 6}}
DRIFT = {"arima": {"d": 1, "theta": -0.4, "sd": 0.037}}


def within(kind, *of, **more):
    return [{kind: {"of": list(of), **more}}]


COMBINED = {
    "a drifting pattern beside noise": [PATTERN, NOISE],
    "a seasonal difference": within("difference", NOISE, by=4),
    "a seasonal difference twice": within("difference", NOISE, by=3, order=2),
    "a pattern rounded down": within("floor", PATTERN),
    "a pattern rounded up": within("ceiling", PATTERN),
    "a walk that goes up or down by one multiple": within("ceiling", DRIFT, to=0.5),
    "log odds of a wave": within("logit", WAVE, low=-100, high=500),
    "log odds of a sigmoid of a wave": within("logit", *within("sigmoid", WAVE)),
    "log odds of a flag": within("logit", FLAG, low=-1000, high=5000),
    "a sigmoid of counts": within("sigmoid", ARRIVALS),
    "sums of demand": within("integrate", DEMAND),
    "differences of a line": within("difference", {"trend": {"level": 310, "slope": 0.02}}, by=4, order=2),
    "sums of noise of no more steps": within("integrate", {"fractional_gaussian_noise": {"hurst": 0.7, "sd": 1}}),
}


def spec(body, seed=5, paths=400, steps=60):
    return {"procgen": 1, "seed": seed, "paths": paths, "time": {"steps": steps}, "series": {"x": body}}


@pytest.mark.parametrize("name", COMBINED)
def test_what_is_true_does_not_depart(name):
    with warnings.catch_warnings():
        warnings.simplefilter("error", RuntimeWarning)
        verdict = pg.validate(pg.render(spec(COMBINED[name])), false_alarm=1e-8)
    assert verdict.agrees is not False, str(verdict)


@pytest.mark.parametrize("body", [COMBINED["a drifting pattern beside noise"], COMBINED["a seasonal difference"]])
def test_a_shock_that_is_wider_is_found(body):
    wide = [{"sum": body, "times": 1.05}]
    values = pg.render(spec(wide)).to_pandas()
    assert pg.validate(values, spec(body), false_alarm=1e-8).agrees is False


@pytest.mark.parametrize(("kind", "of"), [("floor", np.floor), ("ceiling", np.ceil), ("round", np.rint)])
@pytest.mark.parametrize("start", [5.0, 4.5, -2.5, 3.2])
def test_a_known_start_on_a_border_is_rounded_as_it_is_drawn(kind, of, start):
    one = spec(within(kind, {"random_walk": {"sd": 0.3, "start": start}}), paths=2)
    assert pg.theory(one)["x"].mean([0])[0] == of(start) == pg.render(one)["x"][0, 0]


def test_log_odds_of_what_is_known_are_known():
    one = spec(COMBINED["log odds of a wave"], paths=1, steps=24)
    body = 3.0 * np.cos(2.0 * np.pi * np.arange(24) / 12.0)
    said = pg.theory(one)["x"]
    assert said.variance([0, 5]).tolist() == [0.0, 0.0]
    np.testing.assert_allclose(said.mean(np.arange(24)), np.log((body + 100.0) / (500.0 - body)), rtol=1e-12)
