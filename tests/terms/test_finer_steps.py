"""Bodies on finer steps: covariances by statsmodels and by published results on temporal aggregation."""

from __future__ import annotations

import numpy as np
import pytest
from statsmodels.tsa.arima_process import arma_acovf

import procgen as pg

DERIVED = dict.fromkeys(("aggregate", "subsample"), "test_covariances_are_those_of_blocks_of_an_arma")

DAILY = {"seasonal": {"period": "1d", "profile": [1, 2]}}
HEAD = {"procgen": 1, "seed": 23, "paths": 40, "time": {"steps": 30}}
ARMA = {"arma": {"phi": [0.9, -0.2], "theta": [0.4], "sd": 1.5}}


def spec(*body, **more):
    return HEAD | {"series": {"x": list(body)}} | more


def weights(kind, k, by):
    row = {"sum": np.ones(k), "mean": np.full(k, 1 / k), "last": np.eye(k)[-1], "first": np.eye(k)[0]}
    return row["first" if kind == "subsample" else by]


CASES = [("aggregate", 4, "sum"), ("aggregate", 7, "mean"), ("aggregate", 5, "last"), ("subsample", 12, None)]


@pytest.mark.parametrize("kind, k, by", CASES)
def test_covariances_are_those_of_blocks_of_an_arma(kind, k, by):
    """statsmodels' arma_acovf of the fine steps, and the weights of a block as a matrix."""
    term = {"of": [ARMA], "over": k} | ({"by": by} if by else {})
    x = pg.theory(spec({kind: term}))["x"]
    fine = arma_acovf([1, -0.9, 0.2], [1, 0.4], nobs=6 * k, sigma2=1.5**2)
    table = fine[np.abs(np.subtract.outer(np.arange(6 * k), np.arange(6 * k)))]
    rows = np.kron(np.eye(6), weights(kind, k, by))
    exact = (rows @ table @ rows.T)[0]
    np.testing.assert_allclose(x.autocovariance(np.arange(6), 9), exact, rtol=1e-9, atol=1e-12)
    assert x.stationarity.stationary and x.gaussian


def test_an_ar_added_up_is_an_arma_whose_root_is_a_power():
    """Silvestrini & Veredas (2008), sec. 2: AR(1) with phi added up over k steps is ARMA(1, 1) with phi^k."""
    x = pg.theory(spec({"aggregate": {"of": [{"ar": {"phi": 0.9, "sd": 1}}], "over": 4}}))["x"]
    gamma = np.array(x.autocovariance(np.arange(5), 0))
    np.testing.assert_allclose(gamma[2:] / gamma[1:-1], 0.9**4, rtol=1e-10)
    assert gamma[1] / gamma[0] != pytest.approx(0.9**4, rel=0.01)


@pytest.mark.parametrize("m", [2, 5, 20])
def test_changes_of_averages_of_a_walk_are_correlated(m):
    """Working (1960), Econometrica 28, eq. 5 and 6: variance (2 m² + 1)/(3 m), correlation (m² − 1)/(2 (2 m² + 1))."""
    mean = {"aggregate": {"of": [{"random_walk": {"sd": 1}}], "over": m, "by": "mean"}}
    x = pg.theory(spec(mean))["x"]
    t = np.arange(1, 4)
    late, early = np.meshgrid(t, t, indexing="ij")
    gamma = x.covariance(late, early) - x.covariance(late - 1, early)
    gamma = gamma - x.covariance(late, early - 1) + x.covariance(late - 1, early - 1)
    assert gamma[1, 1] == pytest.approx((2 * m * m + 1) / (3 * m))
    assert gamma[1, 2] / gamma[1, 1] == pytest.approx((m * m - 1) / (2 * (2 * m * m + 1)))


def test_values_are_those_of_the_fine_steps():
    """Addresses are those of the fine grid: the same body on 30 · 4 steps of its own draws the same."""
    whole = pg.render(spec(ARMA, time={"steps": 120}))["x"].reshape(40, 30, 4)
    for by, rows in (("sum", whole.sum(axis=2)), ("mean", whole.mean(axis=2)), ("last", whole[:, :, 3])):
        found = pg.render(spec({"aggregate": {"of": [ARMA], "over": 4, "by": by}}))["x"]
        np.testing.assert_allclose(found, rows, rtol=1e-13, atol=1e-13)
    assert np.array_equal(pg.render(spec({"subsample": {"of": [ARMA], "over": 4}}))["x"], whole[:, :, 0])


def test_steps_before_step_0_and_blocks_in_blocks():
    lagged = pg.render(spec({"lag": {"of": [{"aggregate": {"of": [ARMA], "over": 3}}], "by": 2}}))["x"]
    plain = pg.render(spec({"aggregate": {"of": [ARMA], "over": 3}}))["x"]
    np.testing.assert_array_equal(lagged[:, 2:], plain[:, :-2])
    inner = {"aggregate": {"of": [ARMA], "over": 2}, "as": "inner"}
    twice = pg.render(spec({"aggregate": {"of": [inner], "over": 3}}))["x"]
    np.testing.assert_allclose(twice, pg.render(spec({"aggregate": {"of": [ARMA], "over": 6}}))["x"], rtol=1e-12)
    th = pg.theory(spec({"aggregate": {"of": [inner], "over": 3}}))["x"]
    other = pg.theory(spec({"aggregate": {"of": [ARMA], "over": 6}}))["x"]
    np.testing.assert_allclose(th.autocovariance([0, 1, 2], 4), other.autocovariance([0, 1, 2], 4), rtol=1e-10)


def test_shocks_that_are_correlated_on_the_fine_steps():
    """Sums of 4 of two AR(1) with shocks correlated by 0.6: all pairs of steps, with Cov = 0.6 phi^d/(1 − phi psi)."""
    block = [{"aggregate": {"of": [{"ar": {"phi": phi, "sd": 1}}], "over": 4}} for phi in (0.5, 0.8)]
    pair = [{"between": ["x.ar", "y.ar"], "value": 0.6}]
    both = HEAD | {"paths": 2000, "series": {"x": [block[0]], "y": [block[1]]}, "correlation": pair}
    d = np.subtract.outer(np.arange(4), np.arange(4))  # step of x less step of y
    exact = 0.6 * np.where(d >= 0, 0.5 ** np.abs(d), 0.8 ** np.abs(d)).sum() / (1 - 0.4)
    assert float(pg.theory(both).cross("x", "y").covariance(3, 3)) == pytest.approx(exact, rel=1e-10)
    assert pg.validate(pg.render(both), false_alarm=1e-8).agrees


def test_lengths_and_rates_are_read_on_the_finer_grid():
    """Hours cut into quarters: a day is 96 fine steps, and an hour of drift is spread over four of them."""
    time = {"start": "2027-01-04T00:00", "every": "1h", "steps": 48}
    trend = {"trend": {"slope": {"value": 4, "per": "hour"}}}
    wave = {"seasonal": {"period": "1d", "harmonics": [{"amplitude": 1, "peak": "06:00"}]}}
    th = pg.theory(HEAD | {"time": time, "series": {"x": [{"subsample": {"of": [trend, wave], "over": 4}}]}})["x"]
    np.testing.assert_allclose(th.mean([0, 6, 24, 30]), [0, 25, 96, 121], atol=1e-9)


@pytest.mark.parametrize(
    "wrong, says",
    [
        ({"series": {"x": [{"aggregate": {"of": [ARMA], "over": 1}}]}}, "expected a whole number in [2, 10000], got 1"),
        (
            {"shared": {"w": [ARMA]}, "series": {"x": [{"aggregate": {"of": [{"use": "w"}], "over": 2}}]}},
            "what is used runs at the steps of the spec; write its terms here, or share the whole aggregate",
        ),
        (
            {"series": {"x": [{"aggregate": {"of": [ARMA], "over": 2}}], "y": [{"use": "x.arma"}]}},
            "x.arma has 2 steps in one of the spec; name what is made of it",
        ),
        (
            {
                "series": {"x": [{"aggregate": {"of": [ARMA], "over": 2}}], "y": [{"white_noise": {"sd": 1}}]},
                "correlation": [{"between": ["x.arma", "y.white_noise"], "value": 0.5}],
            },
            "x.arma and y.white_noise have steps of different length; correlate what runs at the same pace",
        ),
        (
            {
                "time": {"start": "2027-01-01", "every": "1month", "steps": 9},
                "series": {"x": [{"aggregate": {"of": [DAILY], "over": 2}}]},
            },
            "parts of 1 month have no fixed length, so choose other steps, or write a number of steps",
        ),
    ],
)
def test_what_cannot_run_on_finer_steps(wrong, says):
    with pytest.raises(pg.SpecError) as error:
        pg.render(HEAD | wrong)
    assert says in str(error.value)


def test_only_what_runs_at_the_steps_of_the_spec_is_revealed():
    from procgen.ensemble.errors import EnsembleError
    from procgen.ensemble.source import revealable

    known = pg.load(spec({"aggregate": {"of": [ARMA], "over": 4}}))
    assert revealable(known) == ("x.aggregate",)
    with pytest.raises(EnsembleError, match="has 4 steps in one of the spec"):
        pg.render(known, reveal=["x.arma"])


def test_many_fine_steps_are_drawn_a_few_at_a_time():
    whole = pg.render(spec({"subsample": {"of": [{"ar": {"phi": 0.5, "sd": 1}}], "over": 10_000}}, paths=3))["x"]
    alone = pg.render(spec({"ar": {"phi": 0.5, "sd": 1}}, paths=3, time={"steps": 20_001}))["x"]
    assert np.array_equal(whole[:, :3], alone[:, ::10_000])


@pytest.mark.parametrize("drawn, found", [("sum", True), ("mean", False)])
def test_a_mean_drawn_in_place_of_a_sum_is_found(drawn, found):
    stated = spec({"aggregate": {"of": [ARMA], "over": 4, "by": "sum"}}, paths=400)
    other = spec({"aggregate": {"of": [ARMA], "over": 4, "by": drawn}}, paths=400)
    assert pg.validate(pg.render(other), spec=pg.load(stated), false_alarm=1e-8).agrees is found
