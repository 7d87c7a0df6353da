"""Steps at which all that is random cancels: their variance is 0, not what rounding leaves of it.

References: weights of the shocks written down by hand from the definition of a seasonal walk that is followed backwards
(Box & Jenkins 1970, ch. 9, its weights), and the values that are drawn.
"""

import numpy as np
import pytest

from procgen.checks.probes import settled
from procgen.theory.system import System
from tests.studies.departures import draw, spec_of, verdict
from tests.theory.specs import theory_of

T = np.arange(12)


def lagged(theta, seasonal, sd=0.037):
    """Sums over three steps of (1 - B)(1 - B⁴) x = (1 + theta B)(1 + seasonal B⁴) e, two sums late."""
    arima = {"d": 1, "theta": theta, "seasonal": {"period": 4, "d": 1, "theta": seasonal}, "sd": sd}
    return [{"lag": {"of": [{"aggregate": {"of": [{"arima": arima}], "over": 3}}], "by": 2}}]


@pytest.mark.parametrize(("theta", "seasonal"), [(-0.4, -0.3), (-0.7, -0.1), (0.2, -0.6), (-0.33, 0.21)])
def test_sums_before_a_seasonal_walk_begins(theta, seasonal):
    # It is 0 at steps -4 to 0; before that x(-5) = w(0) and x(-6) = w(0) + w(-1), w the moving average.
    x = theory_of({"x": lagged(theta, seasonal, 0.5)})["x"]
    own, next_to = (1 + theta**2) * (1 + seasonal**2), theta * (1 + seasonal**2)
    assert x.variance(T)[0] == pytest.approx(0.25 * (5 * own + 4 * next_to), rel=1e-12)
    assert x.variance(T)[1] == 0.0
    assert (x.variance(T[2:]) > 0.1).all()
    assert (x.covariance(1, T) == 0.0).all() and (x.covariance(T, 1) == 0.0).all()


def test_an_integral_moves_from_its_first_step_on():
    x = theory_of({"x": [{"integrate": [{"ma": {"theta": [-0.999, 0.0005], "sd": 1}}]}]})["x"]
    assert x.variance(T)[0] == 0.0
    # Each further step adds the square of what the weights come to, 1 - 0.999 + 0.0005: little is not nothing.
    assert np.diff(x.variance(T))[3:] == pytest.approx(np.full(8, 0.0015**2), rel=1e-6)


def test_what_is_certain_is_judged_as_one_value():
    body = lagged(-0.4, -0.3)
    values = draw(spec_of(body, 300, 96, 9))
    found = verdict(body, values, 1e-9)
    assert not found.headline
    assert any(row.what == "constant" and row.probe == "step 1" for row in found.rows)
    values["x"][:, 1] += 1e-6 * np.random.default_rng(1).standard_normal(300)
    assert "every path must be 0 at step 1" in verdict(body, values, 1e-9).headline[0]


def test_a_variance_that_rounding_left_is_judged_as_none(monkeypatch):
    monkeypatch.setattr(System, "still", lambda self, i: np.zeros(0, np.int64))
    body = lagged(-0.4, -0.3)
    assert 0 < theory_of({"x": body})["x"].variance(T)[1] < 1e-30
    found = verdict(body, draw(spec_of(body, 299, 96, 9)), 1e-9)
    assert not found.headline
    assert any(row.what == "constant" and row.probe == "step 1" for row in found.rows)


def test_what_is_nothing_beside_the_largest_variance_is_none():
    assert settled(np.array([1e-26, 1e-22, 1.0])).tolist() == [0.0, 1e-22, 1.0]
    assert settled(np.array([1e-26, np.inf, np.nan]))[0] == 1e-26
