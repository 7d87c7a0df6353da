"""Laws with values that have a chance of their own, against SciPy's laws and areas, written down a second time here.

Held between bounds: Tobin (1958); folded: Leone, Nelson & Nottingham (1961), scipy.stats.foldnorm; logit-normal from
its definition. Shares and checks: seeds fixed, true data depart with probability at most 1e-8 each.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.special import expit, logit

import procgen as pg

HEAD = {"procgen": 1, "seed": 3, "paths": 500, "time": {"steps": 20}}
AR = {"ar": {"phi": 0.8, "total_sd": 2}}
U = np.array([1e-6, 0.02, 0.2, 0.5, 0.8, 0.98])
X = np.linspace(-6, 9, 61)
FALSE_ALARM = 1e-8


def theory(body, **more):
    return pg.theory(HEAD | {"series": {"x": body}} | more)["x"]


def censored(law, low, high):
    """cdf, quantiles and mean of what is held between bounds."""
    return (
        np.where(X < low, 0.0, np.where(X >= high, 1.0, law.cdf(X))),
        np.clip(law.ppf(U), low, high),
        law.expect(lambda x: min(max(x, low), high), epsabs=1e-13, limit=500),
    )


BODIES = {
    "normal": (AR, stats.norm(0, 2)),
    "lognormal": ({"exp": [{"ar": {"phi": 0.8, "total_sd": 1}}]}, stats.lognorm(1)),
    "laplace": ({"white_noise": {"sd": 2, "law": "laplace"}}, stats.laplace(0, np.sqrt(2))),
}


@pytest.mark.parametrize("name", BODIES)
def test_what_is_held_between_bounds(name):
    body, law = BODIES[name]
    known = theory({"clip": {"of": [body], "low": -1, "high": 1.5}}).marginal(7)
    cdf, quantiles, mean = censored(law, -1, 1.5)
    np.testing.assert_allclose(known.cdf(X), cdf, rtol=1e-12, atol=1e-14)
    np.testing.assert_allclose(known.sf(X), 1 - cdf, rtol=1e-9, atol=1e-14)
    np.testing.assert_allclose(known.ppf(U), quantiles, rtol=1e-11)
    np.testing.assert_allclose(known.isf(U), np.clip(law.isf(U), -1, 1.5), rtol=1e-11)
    assert known.mean() == pytest.approx(mean, rel=1e-8)
    assert known.atoms == ((-1.0, 1.5) if name != "lognormal" else (1.5,))
    assert known.chance(np.array([-1.0, 0.3, 1.5])) == pytest.approx([law.cdf(-1), 0, law.sf(1.5)], abs=1e-15)


def test_moments_by_areas_are_those_by_closed_forms():
    for body in ({"clip": {"of": [AR], "low": -1}}, {"hinge": {"of": [AR], "below": 1}}, {"abs": [AR]},
                 {"sigmoid": {"of": [AR], "high": 7}}, {"min": {"of": [AR], "and": [{"constant": 0.8}]}}):  # fmt: skip
        x = theory(body)
        assert x.marginal(4).mean() == pytest.approx(x.mean([4])[0], rel=1e-9)
        assert x.marginal(4).var() == pytest.approx(x.variance([4])[0], rel=1e-9)


def test_a_factor_and_a_known_path_go_through():
    """−3 × (an AR held above −1) + t: the upper bound at step t is 3 + t."""
    x = theory([{"clip": {"of": [AR], "low": -1}, "times": -3}, {"trend": {"slope": 1}}])
    law = x.marginal(5)
    assert law.atoms == (8.0,) and law.chance(8.0) == pytest.approx(stats.norm.cdf(-0.5), rel=1e-12)
    assert law.cdf([7.9, 8.0]) == pytest.approx([stats.norm(0, 2).sf((5 - 7.9) / 3), 1], rel=1e-12)
    assert law.sf([7.9, 8.0]) == pytest.approx([stats.norm(0, 2).cdf((5 - 7.9) / 3), 0], rel=1e-12)
    assert theory([{"poisson": {"mean": 3}, "times": -2}]).marginal(0).cdf([-7, -6, -5]) == pytest.approx(
        stats.poisson(3).sf([3, 2, 2]), rel=1e-12
    )


def test_counts_held_at_a_bound():
    law = theory({"clip": {"of": [{"poisson": {"mean": 3}}], "high": 5}}).marginal(2)
    k = np.arange(7)
    assert law.cdf(k) == pytest.approx(np.where(k < 5, stats.poisson(3).cdf(k), 1), rel=1e-12)
    assert law.spacing == 1.0 and law.atoms == ()
    off = theory({"clip": {"of": [{"poisson": {"mean": 3}}], "high": 4.5}})
    assert off.marginal(2) is None and "bounds are no values of its body" in off.reason("marginal")


def test_folded_and_curved():
    law = theory({"abs": [AR, {"constant": 0.5}]}).marginal(3)
    known = stats.foldnorm(0.25, scale=2)
    np.testing.assert_allclose(law.cdf(X), known.cdf(X), rtol=1e-11, atol=1e-14)
    np.testing.assert_allclose(law.pdf(X[1:]), known.pdf(X[1:]), rtol=1e-11, atol=1e-14)
    np.testing.assert_allclose(law.ppf(U), known.ppf(U), rtol=1e-8)
    np.testing.assert_allclose(law.isf(U), known.isf(U), rtol=1e-8)
    curve = theory({"sigmoid": {"of": [AR], "low": -2, "high": 8}}).marginal(3)
    inside = X[(X > -2) & (X < 8)]
    normal, odds = stats.norm(0, 2), logit((inside + 2) / 10)
    np.testing.assert_allclose(curve.cdf(inside), normal.cdf(odds), rtol=1e-11)
    np.testing.assert_allclose(curve.pdf(inside), normal.pdf(odds) * 10 / ((inside + 2) * (8 - inside)), rtol=1e-10)
    np.testing.assert_allclose(curve.ppf(U), -2 + 10 * expit(normal.ppf(U)), rtol=1e-12)
    undone = theory({"logit": {"of": [{"sigmoid": {"of": [AR], "low": -2, "high": 8}}], "low": -2, "high": 8}})
    np.testing.assert_allclose(undone.marginal(3).ppf(U), normal.ppf(U), rtol=1e-9, atol=1e-12)
    assert undone.marginal(3).var() == pytest.approx(4, rel=1e-7)


def test_demand_with_nothing_most_of_the_time():
    share, at = 0.2, np.array([-1.0, 0.0, 3.0, 12.0, 30.0])
    law = theory({"intermittent": {"share": share, "stay": 3, "size": 12, "sd": 5}}).marginal(9)
    gamma = stats.gamma((12 / 5) ** 2, scale=25 / 12)
    assert law.cdf(at) == pytest.approx((1 - share) * (at >= 0) + share * gamma.cdf(at), rel=1e-9)
    assert law.atoms == (0.0,) and law.ppf([0.3, 0.8, 0.9]) == pytest.approx([0, 0, gamma.ppf(0.5)], rel=1e-8)
    counts = theory({"intermittent": {"share": share, "size": 3, "law": "counts"}}).marginal(9)
    k = np.arange(9)
    assert counts.cdf(k) == pytest.approx(1 - share + share * stats.poisson(2).cdf(k - 1), rel=1e-12)
    zeros = theory({"zero_inflated": {"of": [AR], "share": 0.3}}).marginal(9)
    assert zeros.cdf(at) == pytest.approx(0.3 * (at >= 0) + 0.7 * stats.norm(0, 2).cdf(at), rel=1e-12)


def test_few_values():
    flag = theory({"flag": {"share": 0.3, "stay": 4}}).marginal(2)
    assert flag.cdf([-0.1, 0, 0.5, 1]) == pytest.approx([0, 0.7, 0.7, 1]) and flag.atoms == (0.0, 1.0)
    chain = theory({"chain": {"states": ["a", "b", "c"], "durations": {"a": 3, "b": 4, "c": 5}}}).marginal(2)
    assert chain.chance(np.arange(3.0)) == pytest.approx([3 / 12, 4 / 12, 5 / 12], rel=1e-12)
    blocks = theory({"moving_blocks": {"values": [3, 1, 4, 1, 5], "length": 2}})
    for step, drawn in ((4, [3, 1, 4, 1]), (5, [1, 4, 1, 5])):
        assert blocks.marginal(step).cdf(X) == pytest.approx(stats.ecdf(drawn).cdf.evaluate(X), abs=1e-12)


def test_a_bound_that_is_a_value_of_the_body():
    """Counted from what is resampled: 3, 4, 5, 6, 2, 5, 7 in blocks, so each is as likely where all can be met."""
    recorded = [3, 5, 4, 6, 2, 5, 7]
    law = theory(
        {"clip": {"of": [{"moving_blocks": {"values": recorded, "length": 3}}], "low": 3, "high": 5}}
    ).marginal(50)
    windows = [recorded[k + 50 % 3] for k in range(len(recorded) - 2)]
    held = np.clip(windows, 3, 5)
    assert [round(x) for x in law.atoms] == sorted(set(held.tolist()))
    for value in (3.0, 4.0, 5.0):
        at = law.atoms[[round(x) for x in law.atoms].index(value)]
        assert float(law.chance(at)) == pytest.approx(np.mean(held == value), rel=1e-12)


def test_jumps_or_none():
    """A Poisson number of normals, added up over the number (Merton 1976)."""
    law, k = theory({"compound_poisson": {"rate": 0.4, "mean": 1, "sd": 2}}).marginal(2), np.arange(1, 40)
    rest = stats.norm(k, 2 * np.sqrt(k)).cdf(X[:, None]) @ stats.poisson(0.4).pmf(k)
    np.testing.assert_allclose(law.cdf(X), rest + np.exp(-0.4) * (X >= 0), rtol=1e-10)
    assert law.atoms == (0.0,) and law.ppf(0.5) == 0.0


@pytest.mark.parametrize("decimals", [None, 1])
def test_a_bound_that_is_met_too_often_is_named(decimals):
    """30.9 % of N(0, 2²) lie at or below −1, and 38.2 % at or below −0.6."""
    stated, other = ({"clip": {"of": [AR], "low": low, "high": 3}} for low in (-1.0, -0.6))
    more = {} if decimals is None else {"decimals": decimals}
    spec, wrong = (HEAD | {"paths": 3000, "series": {"x": {"of": [b], **more}}} for b in (stated, other))
    true = pg.validate(pg.render(spec).to_pandas(), spec, false_alarm=FALSE_ALARM)
    assert true.agrees, true.text()
    (row,) = [row for row in true.rows if row.what == "share of -1" and row.probe == "step 0"]
    assert row.theory == pytest.approx(stats.norm.cdf(-0.475 if decimals else -0.5), rel=1e-6)
    values = pg.render(wrong).to_pandas()
    values["x"] = np.where(values["x"] <= -0.6, -1.0, values["x"])
    found = pg.validate(values, spec, false_alarm=FALSE_ALARM)
    assert "share of -1" in {row.what for row in found.rows if row.outcome == "departs"}, found.text()


def test_what_is_held_at_its_bound_more_than_half_of_the_time():
    # The median is the bound then; mean of max(X, c) of a normal X: c Phi(c/s) + s phi(c/s) (Tobin 1958).
    held = {"hold": {"of": [{"max": {"of": [AR], "and": [{"constant": 3}]}}], "every": 4}}
    law = theory(held).marginal(5)
    assert law.mean() == pytest.approx(3 * stats.norm.cdf(1.5) + 2 * stats.norm.pdf(1.5), rel=1e-9)
    assert law.cdf(3.0) == pytest.approx(stats.norm.cdf(1.5), rel=1e-12)
