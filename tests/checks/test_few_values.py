"""Shocks of few values and shocks without a variance: true data agree, planted departures are found and named.

Seeds are fixed. True data are said to depart with probability at most 1e-8 each (2e-7 in all) under other seeds; a
departure is missed with a probability that the planted sizes make smaller still.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

import procgen as pg
from procgen.chance.laws import Bernoulli, Empirical
from procgen.checks.few import Few

FALSE_ALARM = 1e-8
RNG = np.random.default_rng(21)
ONE, OTHER = (sorted(np.round(RNG.gamma(shape, 3, 150), 1).tolist()) for shape in (2.0, 2.6))
NORMALISH = np.round(RNG.standard_normal(400), 1).tolist()


def noise(law, **scale):
    return {"white_noise": {**(scale or {"sd": 2}), "law": law}}


def sample(values, **more):
    return {"empirical": {"values": values, **more}}


def stable(alpha, beta=0.0, spread=2):
    return {"white_noise": {"spread": spread, "law": {"stable": {"alpha": alpha, "beta": beta}}}}


def spec(terms, paths=400, steps=150, seed=5, **series):
    grid = {"paths": paths, "time": {"steps": steps}}
    return {"procgen": 1, "seed": seed, **grid, "series": {"x": {"of": terms, **series}}}


def verdict(drawn, stated, **sizes):
    """The verdict on data of one term, held against another."""
    table = pg.render(spec(drawn, **sizes)).to_pandas()
    return pg.validate(table, spec(stated, **sizes), false_alarm=FALSE_ALARM)


BERNOULLI = [{"constant": 1}, noise({"bernoulli": {"p": 0.3}})]
LOW, APART = 1 - 2 * np.sqrt(0.3 / 0.7).item(), 2 / np.sqrt(0.3 * 0.7).item()  # its lower value, the other above it
TRUE = {
    "bernoulli": (BERNOULLI, {}),
    "bernoulli, rounded": (BERNOULLI, {"decimals": 2}),
    "even bernoulli": ([noise({"bernoulli": {"p": 0.5}})], {}),
    "even bernoulli, rounded": ([noise({"bernoulli": {"p": 0.5}})], {"decimals": 2}),
    "filtered bernoulli": ([{"ar": {"phi": 0.6, "sd": 1, "law": {"bernoulli": {"p": 0.3}}}}], {"decimals": 3}),
    "garch of a bernoulli": ([{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8, "law": {"bernoulli": {"p": 0.2}}}}], {}),
    "sample": ([noise(sample(ONE))], {}),
    "sample, rounded to its own grain": ([noise(sample(NORMALISH), sd=float(np.std(NORMALISH)))], {"decimals": 1}),
    "sample, rounded coarsely": ([noise(sample(ONE))], {"decimals": 0}),
    "filtered sample": ([{"ma": {"theta": 0.4, "sd": 2, "law": sample(ONE)}}], {}),
    "smoothed sample": ([{"ma": {"theta": 0.4, "sd": 2, "law": sample(ONE, smoothed=True)}}], {"decimals": 2}),
    "stable": ([{"constant": 3}, stable(1.7, 0.5)], {}),
    "stable, rounded": ([{"constant": 3}, stable(1.7, 0.5)], {"decimals": 1}),
    "filtered stable": ([{"ar": {"phi": 0.6, "shock": stable(1.5, -0.5)}}], {}),
    "stable walk": ([{"random_walk": {"shock": stable(1.5)}}], {}),
    "without a mean": ([{"ma": {"theta": 0.5, "shock": stable(0.7, 1)}}], {}),
}


@pytest.mark.parametrize("name", TRUE)
def test_true_data_agree(name):
    body, stored = TRUE[name]
    found = verdict(body, body, **stored)
    assert found.agrees, found.text()
    assert found.coverage[0].missing == {}, found.text()


PLANTED = {
    "another share": (BERNOULLI, [{"constant": 1}, noise({"bernoulli": {"p": 0.32}})], "law"),
    "another share of the same two values": (
        BERNOULLI,
        [{"constant": LOW + 0.32 * APART}, noise({"bernoulli": {"p": 0.32}}, sd=APART * np.sqrt(0.32 * 0.68).item())],
        "spread",  # and the level
    ),
    "another share in a filter": (
        [{"ar": {"phi": 0.6, "sd": 1, "law": {"bernoulli": {"p": 0.3}}}}],
        [{"ar": {"phi": 0.6, "sd": 1, "law": {"bernoulli": {"p": 0.32}}}}],
        "law",
    ),
    "another column": ([noise(sample(ONE))], [noise(sample(OTHER))], "law"),
    "another column, smoothed": ([noise(sample(ONE, smoothed=True))], [noise(sample(OTHER, smoothed=True))], "law"),
    "smoothed, where it is not": ([noise(sample(ONE))], [noise(sample(ONE, smoothed=True))], "law"),
    "a normal of the same moments": ([noise({"bernoulli": {"p": 0.5}})], [{"white_noise": {"sd": 2}}], "law"),
    "another index": ([stable(1.7)], [stable(1.6)], "law"),
    "another index in a filter": (
        [{"ar": {"phi": 0.5, "shock": stable(1.7)}}],
        [{"ar": {"phi": 0.5, "shock": stable(1.6)}}],
        "law",
    ),
    "another skewness": ([stable(1.5, 0.5)], [stable(1.5, 0.3)], "level"),  # of the median
    "another spread": ([stable(1.5)], [stable(1.5, spread=2.1)], "spread"),
    "a memory": ([stable(1.5)], [{"ar": {"phi": 0.03, "shock": stable(1.5)}}], "memory"),
}


@pytest.mark.parametrize("name", PLANTED)
def test_a_departure_is_found(name):
    stated, drawn, kind = PLANTED[name]
    found = verdict(drawn, stated, paths=1000, steps=300)
    assert found.agrees is False
    assert found.headline[0].startswith(f"x: {kind}: "), found.text()


def test_the_law_of_a_value_is_judged_without_moments():
    found = verdict([stable(1.7, 0.5)], [stable(1.7, 0.5)])
    judged = found.checks[found.checks["outcome"] == "agrees"]
    assert {"law", "share below the 1% quantile", "shocks: spread score"} <= set(judged["what"])
    lone = found.checks[found.checks["outcome"] == "untestable"]
    assert lone["note"].tolist() == ["infinite variance of x.white_noise"]


@pytest.mark.parametrize("law", [Bernoulli(p=0.3), Empirical(values=ONE)], ids=str)
def test_ranks_are_uniform(law):
    """Kolmogorov's test of 100,000 ranks by SciPy; a shock that is none of the values lies beyond the ends."""
    rng = np.random.default_rng(3)
    ranks = Few(law.points).ranks(law.shocks(rng.random((100, 1000))), rng.random((100, 1000)))
    assert stats.kstest(ranks.ravel() / np.sqrt(12) + 0.5, "uniform").pvalue > 1e-8
    off = Few(law.points).ranks(np.array([law.points.values[0] + 0.01 * law.points.spacing, np.nan]), np.full(2, 0.5))
    assert off[0] > np.sqrt(3) and np.isnan(off[1])


def test_copies_are_seen_where_chance_does_not_make_them():
    """Two of 40 paths of 8 steps may be equal; of 400 steps they are copies."""
    for steps, outcome in ((8, "untestable"), (400, "departs")):
        table = pg.render(spec(BERNOULLI, paths=40, steps=steps)).to_pandas()
        table.loc[table["path"] == 7, "x"] = table.loc[table["path"] == 3, "x"].to_numpy()
        found = pg.validate(table, spec(BERNOULLI, paths=40, steps=steps)).checks
        assert found.loc[found["what"] == "copied paths", "outcome"].tolist() == [outcome]


def test_rounding_that_hides_the_values_is_said():
    body = [{"ar": {"phi": 0.5, "sd": 1, "law": sample(ONE)}}]
    found = verdict(body, body, decimals=1)
    assert "stored rounding hides which of the values of its law a shock has" in set(found.checks["note"])
