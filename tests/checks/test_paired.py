"""Paired figures against SciPy's paired t test and correlation, and against values derived by hand."""

import numpy as np
import pytest
from scipy import stats

import procgen as pg
from procgen.checks.paired import Sums


def figures(x, y, cuts=()):
    sums = Sums(x.shape[1])
    for a, b in zip(np.split(x, cuts), np.split(y, cuts), strict=True):
        sums.add(a, b, list(range(x.shape[1])))
    return sums.figures("x", list(range(x.shape[1])))


@pytest.mark.parametrize("cuts", [(), (1, 2, 90), (50,)])
def test_the_figures_are_those_of_scipy(cuts):
    draws = np.random.default_rng(3).normal(size=(3, 100, 4))
    x = draws[0] * [1, 5, 0.1, 2] + 1000
    y = 0.7 * x + draws[1] * [1, 0, 3, 2] - draws[2]
    for row in figures(x, y, cuts):
        a, b = x[:, row.step], y[:, row.step]
        test = stats.ttest_rel(b, a)  # Student (1908)
        assert row.change / row.standard_error == pytest.approx(test.statistic, rel=1e-10)
        assert row.correlation == pytest.approx(stats.pearsonr(a, b).statistic, rel=1e-10)
        assert (row.mean_a, row.mean_b) == (pytest.approx(a.mean(), rel=1e-12), pytest.approx(b.mean(), rel=1e-12))
        # against the error of independent draws, of Welch's test (1947): error² = var(a)/n + var(b)/n
        apart = stats.ttest_ind(b, a, equal_var=False)
        error = (b.mean() - a.mean()) / apart.statistic
        assert row.saved == pytest.approx(1 - row.standard_error**2 / error**2, rel=1e-9)
        assert row.paths == 100


@pytest.mark.parametrize("cuts", [(), (1, 2, 90), (50,)])
def test_figures_of_missing_values_are_those_of_scipy_over_the_paths_that_have_both(cuts):
    rng = np.random.default_rng(4)
    x = rng.normal(size=(100, 3)) + 1000
    y = 0.7 * x + rng.normal(size=(100, 3))
    x[rng.random(x.shape) < 0.3] = np.nan
    y[rng.random(y.shape) < 0.3] = np.nan
    x[:, 2] = np.nan
    rows = figures(x, y, cuts)
    for row in rows[:2]:
        both = ~np.isnan(x[:, row.step] + y[:, row.step])
        a, b = x[both, row.step], y[both, row.step]
        test = stats.ttest_rel(x[:, row.step], y[:, row.step], nan_policy="omit")
        assert -row.change / row.standard_error == pytest.approx(test.statistic, rel=1e-10)
        assert row.correlation == pytest.approx(stats.pearsonr(a, b).statistic, rel=1e-10)
        assert row.paths == both.sum() < 80 and row.mean_a == pytest.approx(a.mean(), rel=1e-12)
    none = rows[2]
    assert none.paths == 0 and (none.mean_a, none.mean_b, none.change, none.saved) == (None,) * 4


def test_what_does_not_vary_has_no_correlation_and_no_error_that_rounding_made():
    steady = np.full((7, 1), 0.1)
    row = figures(steady, steady + 0.2, (3,))[0]
    assert (row.standard_error, row.correlation, row.saved) == (0.0, None, None)
    moving = np.arange(7.0).reshape(-1, 1)
    row = figures(steady, moving)[0]
    assert row.correlation is None and row.saved == pytest.approx(0.0, abs=1e-15)
    alone = figures(steady[:1], moving[:1])[0]
    assert (alone.paths, alone.standard_error, alone.saved) == (1, None, None)


def test_a_change_that_is_the_same_on_every_path_has_no_error_whatever_rounding_makes_of_it():
    x = np.random.default_rng(5).normal(61, 8, (400, 3))
    y = x + 18.3
    assert (y - x).std() > 0  # rounding, some 1e-15
    for row in figures(x, y, (100,)):
        assert row.change == pytest.approx(18.3, rel=1e-14) and row.standard_error == 0.0 and row.saved == 1.0
    for row in figures(x, y + 1e-11 * x, (100,)):  # small, and no rounding
        assert row.standard_error == pytest.approx(1e-11 * x[:, row.step].std(ddof=1) / 20, rel=0.01)


def spec(**series):
    return pg.load({"seed": 8, "paths": 4000, "time": {"steps": 12}, "series": series})


def far(saved):
    """5.6 standard deviations (2e-8 of false alarm), or more, of a share saved that 4,000 normal pairs show.

    Of var(d)/(var x + var y) both parts have a relative sd of at most √(2/n), hence the ratio of about twice that.
    """
    return 5.6 * 2 * np.sqrt(2 / 4000) * (1 - saved)


def at(a, b, step=11):
    return next(row for row in pg.difference(pg.render(a), pg.render(b), at=[step]).paired)


def test_a_shifted_level_is_known_exactly_from_shared_shocks():
    base = spec(x=[{"constant": 10}, {"ar": {"phi": 0.8, "sd": 3}}])
    row = at(base, base.set({"series.x.constant": 14}))
    assert row.change == pytest.approx(4, abs=1e-13)
    assert row.standard_error < 1e-15 and row.correlation == pytest.approx(1, abs=1e-14)
    assert row.saved == pytest.approx(1, abs=1e-14)


def test_a_scaled_spread_saves_what_the_algebra_says():
    # y = (4/3) x in every path: saved = 2 cov/(var x + var y) = 2·(4/3)/(1 + 16/9) = 24/25
    base = spec(x={"ar": {"phi": 0.8, "sd": 3}})
    row = at(base, base.set({"series.x.ar.sd": 4}))
    assert row.correlation == pytest.approx(1, abs=1e-13) and row.saved == pytest.approx(24 / 25, rel=1e-12)


def test_another_memory_saves_what_the_analytic_covariance_says():
    # Two AR(1) of one shock stream, stationary: var = s²/(1 − φ²), and cov(x, y) = s²/(1 − φψ) once starts are
    # forgotten (sum of φ^k ψ^k). Correlation r = √((1 − φ²)(1 − ψ²))/(1 − φψ); saved = 2 cov/(var x + var y).
    phi, psi = 0.3, 0.6
    base = spec(x={"ar": {"phi": phi, "sd": 1}})
    row = at(base, base.set({"series.x.ar.phi": psi}))
    r = np.sqrt((1 - phi**2) * (1 - psi**2)) / (1 - phi * psi)
    # Fisher (1915): artanh of a correlation of n normal pairs has sd 1/√(n − 3); 5.6 of them: 2e-8 of false alarm
    assert abs(np.arctanh(row.correlation) - np.arctanh(r)) < 5.6 / np.sqrt(4000 - 3)
    saved = 2 / (1 - phi * psi) / (1 / (1 - phi**2) + 1 / (1 - psi**2))
    assert abs(row.saved - saved) < far(saved)


def test_half_the_shocks_shared_correlate_by_half():
    # x = u + v, y = u + w with var u = var v = var w: correlation 1/2, saved 2·1/(2 + 2) = 1/2
    noise = {"white_noise": {"sd": 1}}
    base = spec(x=[{**noise, "as": "u"}, {**noise, "as": "v"}])
    row = at(base, spec(x=[{**noise, "as": "u"}, {**noise, "as": "w"}]))
    assert abs(np.arctanh(row.correlation) - np.arctanh(0.5)) < 5.6 / np.sqrt(4000 - 3)
    assert abs(row.saved - 0.5) < far(0.5)
