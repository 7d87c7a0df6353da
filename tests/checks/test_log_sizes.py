"""Clustering and leverage of stochastic volatility are seen by logarithms, however many the paths are."""

import numpy as np
import pytest
from scipy import stats

from procgen.checks.judgement import judged
from procgen.checks.planning import plan_of
from procgen.checks.verdict import Verdict
from tests.studies.departures import draw, gathered, spec_of, verdict


def body(**changes):
    return [{"constant": 3}, {"stochastic_volatility": {"sd": 2, "phi": 0.95, "eta": 0.25} | changes}]


def logs(stated, paths=150, steps=60):
    return plan_of(spec_of(stated, paths, steps, 1)).squares["x"].logs


def test_moments_of_the_logarithms_against_scipy_and_the_source():
    found = logs([{"constant": 3}, {"stochastic_volatility": {"scale": 1.5, "phi": 0.95, "eta": 0.25, "rho": -0.4}}])
    square = stats.chi2(1)
    mean = square.expect(lambda q: np.log(q), lb=1e-300)
    variance = square.expect(lambda q: (np.log(q) - mean) ** 2, lb=1e-300)
    assert (mean, variance) == (pytest.approx(-1.27, abs=0.005), pytest.approx(np.pi**2 / 2, rel=1e-4))  # the source
    own = 0.25**2 / (1 - 0.95**2)
    assert found.mean == pytest.approx(np.log(1.5) + mean / 2, abs=1e-4)
    assert found.variance == pytest.approx((own + variance) / 4, rel=1e-4)
    assert found.slopes[1] == pytest.approx(0.95**2 * own / (own + variance), rel=1e-4)
    half_normal = stats.halfnorm().mean()  # E sign(z) z
    assert found.leverage == pytest.approx(-0.4 * 0.25 / 2 * half_normal)


@pytest.mark.parametrize(
    "other",
    [
        [{"garch": {"sd": 2, "alpha": 0.1, "beta": 0.85}}],
        [*body(), {"white_noise": {"sd": 1}}],
        body(law={"student_t": {"df": 9}}),
        {"series": {"x": {"decimals": 3, "of": body()}}},
    ],
    ids=["garch", "with noise", "other law", "rounded"],
)
def test_what_theory_does_not_cover_is_left_alone(other):
    squares = plan_of(spec_of(other, 150, 60, 1)).squares.get("x")
    assert getattr(squares, "logs", None) is None


@pytest.mark.parametrize("paths", [150, 500, 2000])
def test_shocks_without_clustering_are_found_with_few_and_many_paths(paths):
    found = verdict(body(), draw(spec_of(body(phi=0), paths, 240, 5)))
    assert found.headline[0].startswith("x: clustering: calm and wild stretches follow each other otherwise")
    departs = {row.what for row in found.rows if row.outcome == "departs"}
    assert "slope of log sizes" in departs


@pytest.mark.parametrize("paths", [150, 2000])
def test_leverage_of_the_other_sign_is_found(paths):
    found = verdict(body(rho=-0.5), draw(spec_of(body(rho=0.5), paths, 240, 5)))
    assert "leverage: sign times next log size at lag 1 is 0.0" in found.headline[0]
    assert {row.what for row in found.rows if row.outcome == "departs"} == {"leverage: sign times next log size"}


def test_true_paths_depart_no_more_often_than_stated():
    departed = 0
    for seed in range(100):
        spec = spec_of(body(rho=-0.5), 120, 60, seed)
        rows = [row for row in judged(gathered(plan_of(spec), [(0, 0, draw(spec))])) if "log size" in row.what]
        assert len(rows) == 5
        departed += Verdict(rows, 0.05).agrees is False
    assert departed <= stats.binom.isf(2e-7, 100, 0.05)  # 19


def test_a_cut_does_not_show_in_a_bit():
    spec = spec_of(body(), 40, 200, 1)
    plan, x = plan_of(spec), draw(spec)["x"]
    whole = gathered(plan, [(0, 0, {"x": x})])
    parts = gathered(plan, [(0, 0, {"x": x[:, :70]}), (0, 70, {"x": x[:, 70:]})])
    for name in ("n", "sums"):
        one, other = (getattr(each.squares["x"].logs.powers, name) for each in (whole, parts))
        np.testing.assert_array_equal(one, other)
