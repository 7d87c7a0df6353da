"""A share that leaves from today's: the body of an S-curve is told where it stands by the log odds of the record.

Forecasts of the log odds are those of statsmodels with the same numbers; moments of the curve by SciPy's quadrature.
"""

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import expit, logit
from scipy.stats import norm

import procgen as pg
from procgen.spec.model import SpecError
from tests.terms.test_past import AHEAD, RECORD, components, sarimax

ODDS = 0.4 * RECORD - 0.2
AR = {"ar": {"phi": [0.5, 0.3], "sd": 0.3}}
LEVEL, SMALL = {"local_level": {"level_sd": 0.14, "noise_sd": 0.22}}, {"ar": {"phi": 0.6, "sd": 0.1}}


def spec_of(of, before, paths=400, **more):
    series = {"x": {"of": of, "before": [float(v) for v in before]}, **more}
    return {"procgen": 1, "seed": 7, "paths": paths, "time": {"steps": len(AHEAD)}, "series": series}


def curve(forecast, low, high):
    """Mean and variance of an S-curve of a normal forecast."""
    found = []
    for m, sd in zip(forecast.predicted_mean, np.sqrt(forecast.var_pred_mean), strict=True):
        def average(of, m=m, sd=sd):
            return quad(lambda z: of(low + (high - low) * expit(m + sd * z)) * norm.pdf(z), -12, 12, epsabs=1e-12)[0]

        mean = average(lambda y: y)
        found.append((mean, average(lambda y, mean=mean: (y - mean) ** 2)))
    return np.array(found).T


@pytest.mark.parametrize(
    ("inner", "forecast"),
    [
        ([AR], lambda odds: sarimax(odds, (2, 0, 0), [0.5, 0.3, 0.09])),
        (
            [LEVEL, SMALL],
            lambda odds: components(odds, [0.22**2, 0.14**2, 0.01, 0.6], level="llevel", autoregressive=1),
        ),
    ],
)
@pytest.mark.parametrize(("low", "high", "base"), [(0.0, 1.0, 0.0), (20.0, 120.0, -7.0)])
def test_the_fan_of_a_share_is_the_curve_of_the_forecast_of_its_log_odds(inner, forecast, low, high, base):
    body = [{"sigmoid": {"of": inner, "low": low, "high": high}}, *([{"constant": base}] if base else [])]
    theory = pg.theory(spec_of(body, base + low + (high - low) * expit(ODDS)))["x"]
    mean, variance = curve(forecast(ODDS), low, high)
    np.testing.assert_allclose(theory.mean(AHEAD), base + mean, rtol=1e-6)
    np.testing.assert_allclose(theory.variance(AHEAD), variance, rtol=1e-6)


def test_paths_follow_the_fan_and_another_record_departs():
    spec = spec_of([{"sigmoid": [AR]}], expit(ODDS))
    assert pg.validate(pg.render(spec), false_alarm=1e-8).agrees
    other = ODDS.copy()
    other[-1] += 1.5
    drawn = pg.render(spec_of([{"sigmoid": [AR]}], expit(other)))
    assert pg.validate(drawn.to_pandas(), spec, false_alarm=1e-8).agrees is False


def test_log_odds_leave_from_what_they_are_of():
    """A logit of a sigmoid is the body itself, but for rounding."""
    whole, plain = (pg.render(spec_of(of, ODDS, 5)) for of in ([{"logit": [{"sigmoid": [AR]}]}], [AR]))
    np.testing.assert_allclose(whole["x"], plain["x"], rtol=1e-9, atol=1e-12)
    shares = pg.render(spec_of([{"sigmoid": [AR]}], expit(ODDS), 5))
    np.testing.assert_allclose(logit(shares["x"]), plain["x"], rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize(("before", "message"), [
    ([0.5, 1.2], "the past of x is not one of x.sigmoid: some values are not between 0 and 1, when what is known"),
    ([0.5, 1.0 - 1e-16], "the past of x is not one of x.sigmoid: some values are nearer to 0 or 1 than double"),
    ([0.5], "x.ar cannot leave from the past of x: expected at least 2 values before step 0"),
])  # fmt: skip
def test_what_is_no_share_is_refused(before, message):
    with pytest.raises(SpecError) as error:
        pg.theory(spec_of([{"sigmoid": [{"ar": {"phi": [0.5, 0.3], "sd": 1, "law": "laplace"}}]}], before))
    assert str(error.value).startswith(message)
