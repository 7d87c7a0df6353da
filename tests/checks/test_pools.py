"""Averages along paths where no shocks can be recovered: against NumPy by hand, however cut; and saboteurs.

Seeds are fixed. A true ensemble is flagged with probability at most 0.001 under another seed; the departures lie more
than eight standard errors beyond the point that a check must pass.
"""

import math

import numpy as np
import pytest
from scipy.stats import norm

import procgen as pg
from procgen.checks.planning import plan_of
from procgen.checks.pools import QUANTILES, PoolLane
from tests.studies.departures import Departure, draw, planted, spec_of, verdict


def counts(body):
    return [{"poisson": {"mean": 4, "of": [body]}}]


def stays(stages, mean=12):
    low = [{"white_noise": {"sd": 1}}]
    high = [{"constant": 3, "as": "lift"}, {"white_noise": {"sd": 1}, "as": "beside"}]
    lasts = {"low": {"mean": mean, "stages": stages}, "high": {"mean": mean / 2, "stages": stages}}
    return [{"regimes": {"branches": {"low": low, "high": high}, "durations": lasts}}]


HEAVY = {"student_t": {"df": 9}}
WALK = [{"random_walk": {"sd": 0.3, "law": HEAVY}}, {"white_noise": {"sd": 1, "law": HEAVY}}]
LEAVING = counts({"ar": {"phi": 0.9, "sd": 0.2, "before": {"x": [1]}}})
SEEN = {"stationary": stays(2), "wandering": WALK, "leaving": LEAVING}


def lane(pool, x, cuts):
    found, at = PoolLane(pool, x.shape[1]), 0
    for size in (*cuts, len(x)):
        if len(x[at : at + size]):
            found.absorb(x[at : at + size], at)
        at += size
    return found.averages()


@pytest.mark.parametrize("name", SEEN)
def test_averages_are_those_of_numpy_however_the_steps_are_cut(name):
    steps = 5000
    pool = plan_of(spec_of(SEEN[name], 8, steps, 1)).series[0].pool
    x = np.random.default_rng(1).standard_normal((steps, 17)) + 1
    found = lane(pool, x, ())
    np.testing.assert_array_equal(lane(pool, x, (64, 1024, 640, 64)), found)
    assert found.shape == (17, pool.size)
    y = x[pool.first :] - pool.mean[:, None]
    expected = [y.mean(axis=0)]
    for row, slope, lag in zip(pool.covariance, pool.slope, pool.lags, strict=True):
        if lag:
            products = (y[lag:] - slope[lag:, None] * y[:-lag]) * y[:-lag]
        else:
            products = y * y - row[:, None]
        expected.append(products.mean(axis=0))
    for each in pool.changes:
        change = np.diff(x[each.steps] - each.mean[:, None], axis=0)
        expected.append((change**2).mean(axis=0) - each.variance)
    if pool.level:
        level = pool.level
        z = x[level.first : level.last] - level.mean[:, None]
        a, b = z[: len(z) // 2].mean(axis=0), z[len(z) // 2 :].mean(axis=0)
        expected += [((a + b) / 2) ** 2 - level.variance, a * (b - level.slope * a) / level.half]
    if pool.shares:
        window, shares = x[pool.first :], zip(pool.shares.points, pool.shares.chances, strict=True)
        expected += [(window < q).mean(axis=0) - p for q, p in shares]
    np.testing.assert_allclose(found.T, expected, rtol=1e-8, atol=1e-11)
    assert bool(pool.changes) is (name != "stationary") and bool(pool.level) is (name == "stationary")


def test_shares_below_quantiles_are_those_of_the_law():
    """Of a mixture of two normal laws, 2/3 and 1/3 of the steps, by SciPy; of rounded values, between their cells."""
    pool = plan_of(spec_of(stays(2), 8, 300, 1)).series[0].pool
    mixed = 2 / 3 * norm.cdf(pool.shares.points) + 1 / 3 * norm.cdf(pool.shares.points, 3, 1)
    np.testing.assert_allclose(mixed, QUANTILES, rtol=1e-6)
    rounded = {"series": {"x": {"of": stays(2), "decimals": 0}}}
    shares = plan_of(spec_of(rounded, 8, 300, 1)).series[0].pool.shares
    np.testing.assert_array_equal(shares.points % 1.0, 0.5)
    np.testing.assert_allclose(2 / 3 * norm.cdf(shares.points) + norm.cdf(shares.points, 3, 1) / 3, shares.chances)


def test_another_law_of_the_same_moments_is_named():
    """Two states of equal chance at -1 and 1, drawn as one normal law of the same variance and memory."""
    branches = {
        name: [{"constant": level, "as": f"{name}_level"}, {"white_noise": {"sd": 1}, "as": f"{name}_noise"}]
        for name, level in (("low", -1), ("high", 1))
    }
    stated = [{"regimes": {"branches": branches, "durations": {"low": 4, "high": 4}}}]
    drawn = [{"ar": {"phi": 0.5, "total_sd": 1}}, {"white_noise": {"sd": 1}}]
    answer = verdict(stated, draw(spec_of(drawn, 1000, 200, 1)))
    rows = {(row.what, row.outcome) for row in answer.rows if row.what.startswith("share below")}
    assert {("share below the 5% quantile", "departs"), ("share below the 95% quantile", "departs")} <= rows
    true = verdict(stated, draw(spec_of(stated, 1000, 200, 1)), 1e-8)
    assert true.agrees


def test_an_unknown_value_leaves_its_path_out():
    pool = plan_of(spec_of(stays(2), 8, 300, 1)).series[0].pool
    x = np.random.default_rng(1).standard_normal((300, 4))
    x[70, 2] = np.nan
    found = np.isfinite(lane(pool, x, (128,)))
    assert found[[0, 1, 3]].all() and not found[2].any()


def test_what_shocks_say_is_not_said_again():
    plan = plan_of(spec_of([{"random_walk": {"sd": 1}}, {"ar": {"phi": 0.5, "sd": 1}}], 8, 500, 1))
    assert plan.series[0].pool.lags == (0, 1, 2)
    assert not plan.series[0].pool.changes


def test_theory_of_changes_is_that_of_a_walk_in_noise():
    """Var of a change over k steps: k · 0.09 + 2."""
    pool = plan_of(spec_of(WALK, 8, 500, 1)).series[0].pool
    assert [each.length for each in pool.changes] == [8, 32, 128]
    assert [each.variance for each in pool.changes] == pytest.approx([k * 0.09 + 2 for k in (8, 32, 128)])


def test_halves_of_a_path_are_those_of_an_autoregression():
    """Var and Cov of the averages of halves, added up from φ^|t − s| (6 steps, φ 0.5) by hand, under a drawn level."""
    stated = {"series": {"x": [{"constant": level(0.7)}, {"ar": {"phi": 0.5, "total_sd": 1}}]}}
    found = plan_of(spec_of(stated, 8, 16, 1), same_draws=False).series[0].pool.level
    gamma = 0.5 ** np.abs(np.subtract.outer(np.arange(16.0), np.arange(16.0)))
    half, across = gamma[:8, :8].mean() + 0.49, gamma[:8, 8:].mean() + 0.49
    assert (found.half, found.slope) == (pytest.approx(half), pytest.approx(across / half))
    assert found.variance == pytest.approx(gamma.mean() + 0.49)
    assert found.exact


def level(sd, law="normal"):
    """A level by path around 10."""
    at = {"normal": {"mean": 10, "sd": sd}} if law == "normal" else {"uniform": [10 - sd, 10 + sd]}
    return {"draw": at, "over": "path"}


def test_the_fourth_moment_of_a_mean_under_a_drawn_level():
    """A uniform level on ±0.2 beside an average of 40 normal ones: 3 v² + 6 v d²/3 + d⁴/5."""
    from procgen.terms.graph import build
    from procgen.theory import theory

    spec = spec_of({"series": {"x": [{"constant": level(0.2, "uniform")}, {"white_noise": {"sd": 1}}]}}, 8, 40, 1)
    v, d = 1 / 40, 0.2
    known = theory(spec, build(spec))["x"]
    assert known.fourth_moment_of_mean(40) == pytest.approx(3 * v * v + 2 * v * d**2 + d**4 / 5, rel=1e-8)
    plain = spec_of([{"white_noise": {"sd": 1}}], 8, 40, 1)
    assert theory(plain, build(plain))["x"].fourth_moment_of_mean(40) == pytest.approx(3 * v * v)
    skewed = spec_of([{"white_noise": {"sd": 1, "law": "laplace"}}], 8, 40, 1)
    assert theory(skewed, build(skewed))["x"].fourth_moment_of_mean(40) is None


def intensity(d):
    """A fractional intensity of total sd 0.4: Γ(1 − 2d)/Γ(1 − d)² is its variance a unit of shocks (Hosking 1981)."""
    return {"arfima": {"d": d, "sd": 0.4 * math.gamma(1 - d) / math.sqrt(math.gamma(1 - 2 * d))}}


def seasonal(lag):
    return {"ar": {"phi": [0.0] * (lag - 1) + [0.8], "total_sd": 0.4}}


MEMORY = {
    "stays of two stages drawn as one": (stays(2), stays(1)),
    "long stays of two stages drawn as one": (stays(2, 60), stays(1, 60)),
    "φ of an intensity 0.9 drawn as 0.8": (
        counts({"ar": {"phi": 0.9, "total_sd": 0.4}}), counts({"ar": {"phi": 0.8, "total_sd": 0.4}})
    ),
    "d of an intensity 0.3 drawn as 0.2": (counts(intensity(0.3)), counts(intensity(0.2))),
    "an intensity that comes back after 12 steps, after 16": (counts(seasonal(12)), counts(seasonal(16))),
}  # fmt: skip


@pytest.mark.parametrize("name", MEMORY)
def test_memory_behind_shocks_that_cannot_be_recovered_is_found(name):
    stated, drawn = MEMORY[name]
    found = planted(Departure(name, stated, drawn), 7, paths=1000, steps=400)
    assert found.agrees is False
    assert found.headline[0].startswith("x: memory: "), found.headline
    assert verdict(stated, draw(spec_of(stated, 1000, 400, 8))).agrees is True


def test_memory_at_long_lags_alone_is_found_there():
    found = planted(Departure("", *MEMORY["an intensity that comes back after 12 steps, after 16"]), 7, 1000, 400)
    gone = {row.probe for row in found.rows if row.what == "slope over steps" and row.outcome == "departs"}
    assert {"steps 0–399, lag 12", "steps 0–399, lag 16"} <= gone
    assert not gone & {"steps 0–399, lag 1", "steps 0–399, lag 2"}


def test_the_spread_of_a_walk_that_cannot_be_undone_is_found():
    """A heavy walk 15 % too wide beside heavy noise: 2.9 of the 4.9 of a change over 32 steps are the walk's."""
    wide = [{"random_walk": {"sd": 0.345, "law": HEAVY}}, WALK[1]]
    found = planted(Departure("", WALK, wide), 7, paths=2000, steps=400)
    assert "variance of changes" in {row.what for row in found.rows if row.outcome == "departs"}, found.text()
    assert found.headline[0].startswith(("x: spread: ", "x: memory: "))  # its share of the variance is both
    assert verdict(WALK, draw(spec_of(WALK, 2000, 400, 8))).agrees is True


def held_against(stated, drawn, body, paths=2000, steps=300, seed=3):
    """The verdict on a table drawn with one level, held against another: whose levels are not known."""

    def whole(first):
        raw = {"procgen": 1, "seed": seed, "paths": paths, "time": {"steps": steps}}
        return raw | {"series": {"x": [{"constant": first}, *body]}}

    return pg.validate(pg.render(whole(drawn)).to_pandas(), whole(stated))


AR = [{"ar": {"phi": 0.6, "sd": 1}}]
LEVELS = {
    "a normal level that is constant": (level(0.1), 10, AR, "variance of path means"),
    "a normal level of another spread": (level(0.5), level(0.42), AR, "variance of path means"),
    "a uniform level that is constant": (level(0.2, "uniform"), 10, AR, "variance of path means"),
    "a level under regimes that is constant": (level(0.3), 10, stays(2), "slope over steps"),
}


@pytest.mark.parametrize("name", LEVELS)
def test_a_level_by_path_that_is_not_there_is_found(name):
    stated, drawn, body, what = LEVELS[name]
    found = held_against(stated, drawn, body)
    assert what in {row.what for row in found.rows if row.outcome == "departs"}, found.text()
    assert found.headline[0].startswith("x: memory: ")
    assert held_against(stated, stated, body, seed=4).agrees is True


WIDE = level(8)  # beside it products of values say next to nothing of what moves
HIDDEN = {
    "an autoregression that is white noise": [{"white_noise": {"sd": 1.25}}],
    "a shock 10 % too large": [{"ar": {"phi": 0.6, "sd": 1.1}}],
    "another φ of the same variance": [{"ar": {"phi": 0.5, "sd": 0.8660254 / 0.8}}],
}


@pytest.mark.parametrize("name", HIDDEN)
def test_what_moves_about_wide_levels_is_judged_by_its_changes(name):
    spec = {"procgen": 1, "seed": 3, "paths": 1000, "time": {"steps": 60}}
    stated = spec | {"series": {"x": [{"constant": WIDE}, *AR]}}
    found = pg.validate(pg.render(spec | {"series": {"x": [{"constant": WIDE}, *HIDDEN[name]]}}).to_pandas(), stated)
    gone = [row for row in found.rows if row.outcome == "departs"]
    assert "variance of changes" in {row.what for row in gone}, found.text()
    assert min(row.p for row in gone if row.what == "variance of changes") < 1e-12
    assert pg.validate(pg.render(stated | {"seed": 4}).to_pandas(), stated).agrees is True
