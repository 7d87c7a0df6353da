"""What pictures measure and compare it with, against published values, SciPy and statsmodels."""

import numpy as np
import pytest
from scipy import stats
from statsmodels.tsa import stattools

import procgen as pg
from procgen.report.pictures import seen
from procgen.report.pictures.stated import Stated, fisher

RNG = np.random.default_rng(20270104)


def ar(phi, paths, steps, rng=RNG):
    z = rng.normal(size=(paths, steps + 200))
    for t in range(1, steps + 200):
        z[:, t] += phi * z[:, t - 1]
    return z[:, 200:]


def stated(*terms, steps=200):
    raw = {"procgen": 1, "seed": 1, "paths": 5, "time": {"steps": steps}, "series": {"x": list(terms)}}
    return Stated(pg.theory(raw)["x"], steps)


# what is seen


def test_a_correlogram_of_one_path_is_that_of_statsmodels():
    x = ar(0.7, 1, 300)
    d = x - x.mean()
    found = seen.correlogram(d, np.arange(21))
    # statsmodels divides by n - k as we do when `adjusted`; values from statsmodels 0.14 at run time.
    assert found.value == pytest.approx(stattools.acf(x[0], nlags=20, adjusted=True, fft=False), abs=1e-12)
    assert np.isnan(found.error).all()  # one path does not tell its own error


def test_a_cross_correlogram_is_that_of_statsmodels():
    x = ar(0.5, 1, 400)
    y = 0.8 * np.roll(x, 3, axis=1) + RNG.normal(size=x.shape)
    a, b = x - x.mean(), y - y.mean()
    found = seen.cross_correlogram(a, b, np.arange(-5, 6))
    later = stattools.ccf(x[0], y[0], adjusted=True)[:6]  # x(t + k) with y(t)
    earlier = stattools.ccf(y[0], x[0], adjusted=True)[:6]
    assert found.value[5:] == pytest.approx(later, abs=1e-12)
    assert found.value[:6][::-1] == pytest.approx(earlier, abs=1e-12)


def test_errors_of_correlations_are_what_they_vary_by():
    # 400 samples of 60 paths: the sd of an estimated sd is 3.5 %, of ours within a sample 9 %; 30 % is beyond
    # six sd of their mean, false-alarm probability below 1e-8.
    lags = np.array([1, 5])
    rng = np.random.default_rng(3)
    found = [seen.correlogram(ar(0.6, 60, 50, rng), lags) for _ in range(400)]
    actual = np.std([f.value for f in found], axis=0)
    assert np.mean([f.error for f in found], axis=0) == pytest.approx(actual, rel=0.3)


def test_bands_hold_95_times_in_100():
    # 300 samples: share within at least 0.95 − 6 sd = 0.875 for each of four bands, false-alarm probability below 1e-8.
    rng, held, lags = np.random.default_rng(4), [], np.array([1, 4])
    bartlett = seen.NORMAL * stated({"ar": {"phi": 0.5, "sd": 1}}, steps=300).bartlett(lags, 1)
    for _ in range(300):
        many = ar(0.5, 60, 60, rng)
        found = seen.correlogram(seen.deviations(many, None), lags)
        one = seen.correlogram(ar(0.5, 1, 300, rng), lags)
        near = np.abs(found.value - 0.5**lags) <= seen.NORMAL * found.error
        held.append([*near, *(np.abs(one.value - 0.5**lags) <= bartlett)])
    assert np.min(np.mean(held, axis=0)) >= 0.875 and np.max(np.mean(held, axis=0)) <= 0.995


def test_missing_values_are_left_out():
    x = ar(0.6, 40, 80)
    holes = x.copy()
    holes[RNG.random(x.shape) < 0.1] = np.nan
    d = seen.deviations(holes, None)
    assert d is not None and np.isnan(d).sum() == np.isnan(holes).sum()
    full = seen.correlogram(x - x.mean(axis=0), np.arange(4)).value
    assert seen.correlogram(d, np.arange(4)).value == pytest.approx(full, abs=0.06)
    assert seen.quantiles(holes, [0.5]) == pytest.approx(np.nanmedian(holes, axis=0)[None, :])
    s2, error, n = seen.variances(holes)
    assert s2 == pytest.approx(np.nanvar(holes, axis=0, ddof=1)) and (n < 40).any() and np.isfinite(error).all()


def test_intervals_of_a_variance():
    x = RNG.normal(size=(10, 1))
    x = (x - x.mean()) / x.std(ddof=1)  # its sample variance is 1
    s2, low, high = seen.variance_intervals(x, gaussian=True)
    # Any table of chi-square with 9 degrees of freedom: 2.700 and 19.023.
    assert (s2[0], low[0], high[0]) == pytest.approx((1.0, 9 / 19.023, 9 / 2.700), rel=2e-4)
    many = RNG.normal(size=(20_000, 1))
    _, error, _ = seen.variances(many)
    assert error[0] == pytest.approx(np.sqrt(2 / 20_000), rel=0.1)  # 2σ⁴/n for normal values
    assert np.isnan(seen.variances(many[:10])[1]).all()


def test_ranks_of_uniforms_by_the_binomial():
    ranks, values = seen.ordered(np.arange(50.0))
    assert ranks.tolist() == list(range(1, 51)) and values.tolist() == list(range(50))
    middle, low, high = seen.rank_chances(ranks, 50)
    # The k-th of n is at most x when at least k are: a binomial tail.
    for p, ends in ((0.5, middle), (0.025, low), (0.975, high)):
        assert stats.binom.sf(ranks - 1, 50, ends) == pytest.approx(np.full(50, p), rel=1e-9)
    ranks, values = seen.ordered(RNG.normal(size=10_000))
    assert len(ranks) <= 99 and ranks[:10].tolist() == list(range(1, 11)) and ranks[-1] == 10_000
    assert np.all(np.diff(values) >= 0)


@pytest.mark.parametrize("n", [30, 400])
def test_how_few_ranks_lie_within_their_chances_is_that_of_sorted_uniforms(n):
    """Beside samples that are drawn and sorted: about 1 in 100 has fewer within."""
    ranks, _ = seen.ordered(np.arange(float(n)))
    least = seen.fewest_inside(ranks, n)
    _, low, high = seen.rank_chances(ranks, n)
    u = np.sort(np.random.default_rng(5).random((4000, n)), axis=1)[:, ranks - 1]
    inside = ((u >= low) & (u <= high)).sum(axis=1)
    assert (inside < least).mean() < 0.018 and (inside <= least + 3).mean() > 0.005
    assert inside.mean() == pytest.approx(0.95 * len(ranks), rel=0.02)


def test_correlations_across_paths_are_those_of_scipy():
    x = ar(0.5, 30, 10)
    value, used = seen.across(x[:, 2], x[:, 2:6])
    expected = [stats.pearsonr(x[:, 2], x[:, k]).statistic for k in range(2, 6)]
    assert used == 30 and value == pytest.approx(expected, abs=1e-12)
    interval = stats.pearsonr(x[:, 2], x[:, 3]).confidence_interval(0.95)
    low, high = fisher(value[1:2], 30)
    assert (low[0], high[0]) == pytest.approx((interval.low, interval.high), abs=1e-12)


def test_a_histogram_has_the_area_of_what_it_shows_and_keeps_to_the_grain():
    x = RNG.normal(size=5000)
    edges, heights = seen.histogram(x)
    inside = np.mean((x >= edges[0]) & (x <= edges[-1]))
    assert np.sum(heights * np.diff(edges)) == pytest.approx(inside)
    edges, heights = seen.histogram(np.rint(3 * x), grain=1.0)
    assert (edges % 1.0 == 0.5).all()  # whole numbers lie in the middle of cells
    counts = np.array([np.sum(np.rint(3 * x) == k) for k in edges[:-1] + 0.5])
    assert heights == pytest.approx(counts / 5000)
    assert seen.histogram(np.array([np.nan]))[1].sum() == 0 and seen.histogram(np.full(40, 7.0))[1].max() > 0
    assert seen.grain_of(np.array([[1.0, 2.0]]), 0.0) == 1.0 and seen.grain_of(x, 0.0) == 0.0
    assert seen.grain_of(x, 0.01) == 0.01


# what is stated


def test_bartlett_for_an_autoregression_and_for_white_noise():
    lags = np.array([1, 2, 5, 10])
    phi, n = 0.6, 4 * 200
    error = stated({"ar": {"phi": phi, "sd": 2}}).bartlett(lags, 4)
    # Bartlett (1946): n Var r(k) = (1 + φ²)(1 − φ²ᵏ)/(1 − φ²) − 2kφ²ᵏ for a long series; we divide by n − k.
    square = (1 + phi**2) * (1 - phi ** (2 * lags)) / (1 - phi**2) - 2 * lags * phi ** (2 * lags)
    assert error**2 * (n - 4 * lags) == pytest.approx(square, rel=1e-9)
    white = stated({"white_noise": {"sd": 2}}).bartlett(lags, 1)
    assert white == pytest.approx(1 / np.sqrt(200 - lags))


def test_bartlett_is_not_used_where_it_does_not_hold():
    garch = stated({"garch": {"omega": 0.1, "alpha": 0.1, "beta": 0.8}})
    assert garch.bartlett(np.array([1]), 1) is None
    assert garch.chance(np.array([1]), np.array([np.nan]), 1) == (None, "")
    assert stated({"random_walk": {"sd": 1}}).bartlett(np.array([1]), 1) is None


def test_stated_quantiles_are_exact_or_said_not_to_be():
    at, levels = np.array([0, 3, 150]), (0.05, 0.25, 0.5, 0.75, 0.95)
    found, kind = stated({"trend": {"level": 5, "slope": 0.1}}, {"random_walk": {"sd": 2}}).quantiles(at, levels)
    expected = [stats.norm(5 + 0.1 * t, 2 * np.sqrt(t)).ppf(levels) if t else np.full(5, 5.0) for t in at]
    assert kind == "exact" and found.T == pytest.approx(np.array(expected))
    found, kind = stated({"exp": [{"constant": 1}, {"ar": {"phi": 0.5, "sd": 0.3}}]}).quantiles(at, levels)
    law = stats.lognorm(0.3 / np.sqrt(0.75), scale=np.e)
    assert kind == "exact" and found.T == pytest.approx(np.array([law.ppf(levels)] * 3))
    found, kind = stated({"exp": [{"random_walk": {"sd": 0.2, "start": 1}}]}).quantiles(at, levels)  # known at step 0
    spread = 0.2 * np.sqrt(at) * stats.norm.ppf(levels)[:, None]
    assert kind == "exact" and found == pytest.approx(np.exp(1 + spread))
    found, kind = stated({"constant": 1}, {"garch": {"omega": 0.2, "alpha": 0.1, "beta": 0.7}}).quantiles(at, levels)
    assert kind == "2 sd" and found[[0, 2, 4], 1] == pytest.approx([-1, 1, 3]) and np.isnan(found[1]).all()
    unknown = {"exp": [{"random_walk": {"sd": 0.1, "law": {"student_t": {"df": 5}}}}]}
    found, reason = stated(unknown).quantiles(at, levels)
    assert found is None and "no finite mean" in reason


def test_laws_over_drawn_parameters_are_exact_at_a_few_steps_and_joined_between():
    raw = {"procgen": 1, "seed": 1, "paths": 5, "time": {"steps": 100}, "series": {}}
    drawn = {"draw": {"uniform": [0.5, 2]}, "over": "path"}
    raw["series"]["x"] = [{"trend": {"level": 0, "slope": 1}}, {"white_noise": {"sd": drawn}}]
    theory = pg.theory(pg.load(raw))["x"]
    found, kind = Stated(theory, 100).quantiles(np.arange(100), (0.05, 0.5, 0.95))
    assert kind == "exact at 12 steps"
    # P(x ≤ q) = mean of Φ(q/s) over s, by a fine grid of s.
    spread = np.linspace(0.5, 2, 20_001)
    assert np.mean(stats.norm.cdf((found[2, 50] - 50) / spread)) == pytest.approx(0.95, abs=1e-5)
    assert found[1] == pytest.approx(np.arange(100), abs=1e-6)


def test_what_may_be_pooled():
    assert stated({"seasonal": {"period": 12, "harmonics": [{"amplitude": 1}]}}, {"white_noise": {"sd": 1}}).steady
    walk = stated({"random_walk": {"sd": 1}})
    assert not walk.pooled and not walk.steady and not walk.still
    constant = stated({"constant": 3})
    assert constant.still and constant.law(0) is None
    garch = stated({"garch": {"omega": 0.2, "alpha": 0.1, "beta": 0.7}})
    assert garch.volatile and garch.steady and not stated({"ar": {"phi": 0.5, "sd": 1}}).volatile
    lags = np.array([0, 1, 2])
    # Bollerslev (1986): ρ₁ of squares = α(1 − αβ − β²)/(1 − 2αβ − β²), then (α + β) a lag.
    first = 0.1 * (1 - 0.07 - 0.49) / (1 - 0.14 - 0.49)
    assert garch.squares(lags, 0) == pytest.approx([1, first, 0.8 * first])
