"""Values with a chance of their own in series with a number drawn by path: own output agrees, a wrong share is found.

The laws are averaged a second time here, by SciPy's adaptive quadrature over the drawn number. Seeds are fixed. True
data are said to depart with probability at most 1e-8 each (2e-7 in all) under other seeds.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import quad

import procgen as pg

FALSE_ALARM = 1e-8
HEAD = {"seed": 9, "paths": 600, "time": {"steps": 8}}
X = np.array([-4.0, -1e-6, 0.0, 0.5, 3.0, 9.0, 25.0])


def path(law):
    return {"draw": law, "over": "path"}


def spec(body, **more):
    return HEAD | {"series": {"x": body}} | more


def demand(**more):
    return {"intermittent": {"share": 0.2, "size": 12, "sd": 6} | more}


def gamma(mean):
    return stats.gamma((mean / 6) ** 2, scale=36 / mean)


def shifted(mean, sd):
    return {"constant": {"level": path({"normal": {"mean": mean, "sd": sd}})}}


TIMES = path({"uniform": [0.5, 1.5]})
AR, WIDE = {"ar": {"phi": 0.8, "total_sd": 2}}, {"ar": {"phi": 0.9, "total_sd": 4}}
N = np.arange(1, 30)


def jumps(x, k):
    """A Poisson number of normals, times k (Merton 1976)."""
    return np.exp(-0.3) * (x >= 0) + stats.poisson(0.3).pmf(N) @ stats.norm(k * N, 2 * k * np.sqrt(N)).cdf(x)


def held(x, k):
    """15 less an AR about 12, where above 0, times k."""
    return (x >= 0) * stats.norm(3, 4).cdf(x / k)


# A body, what it draws between which ends with which density, P(X ≤ x) given it, and the chance of 0.
BODIES = {
    "times": ([demand() | {"times": TIMES}], (0.5, 1.5, 1.0), lambda x, k: 0.8 * (x >= 0) + 0.2 * gamma(12).cdf(x / k),
              0.8),
    "size": ([demand(size=path({"uniform": [8, 16]}))], (8, 16, 1 / 8),
             lambda x, m: 0.8 * (x >= 0) + 0.2 * gamma(m).cdf(x), 0.8),
    "share": ([demand(share=path({"uniform": [0.1, 0.4]}))], (0.1, 0.4, 1 / 0.3),
              lambda x, s: (1 - s) * (x >= 0) + s * gamma(12).cdf(x), 0.75),
    "hinge times": ([{"hinge": {"of": [WIDE, {"constant": 12}], "below": 15}, "times": TIMES}], (0.5, 1.5, 1.0), held,
                    stats.norm.cdf(-0.75)),
    "jumps": ([{"compound_poisson": {"rate": 0.3, "mean": 1, "sd": 2}, "times": TIMES}], (0.5, 1.5, 1.0), jumps,
              np.exp(-0.3)),
}  # fmt: skip
# Where a normal level is drawn the sum of both is normal, and the law is known without an average.
SHIFTED = {
    "clip": ([{"clip": {"of": [AR, shifted(0, 1)], "low": 0}}], stats.norm(0, np.sqrt(5)), 0.5),
    "hinge": ([{"hinge": {"of": [WIDE, shifted(12, 2)], "below": 15}}], stats.norm(3, np.sqrt(20)),
              stats.norm.cdf(-3 / np.sqrt(20))),
}  # fmt: skip


@pytest.mark.parametrize("name", BODIES)
def test_the_law_keeps_its_atom_over_a_drawn_number(name):
    body, (low, high, density), given, zero = BODIES[name]
    law = pg.theory(spec(body))["x"].marginal(5)
    wanted = [quad(lambda k, x=x: density * float(given(x, k)), low, high, epsabs=1e-11)[0] for x in X]
    np.testing.assert_allclose(law.cdf(X), wanted, atol=1e-8)
    assert law.atoms == pytest.approx((0.0,), abs=1e-12)
    assert law.chance(law.atoms[0]) == pytest.approx(zero, rel=1e-9)
    assert law.cdf(-1e-9) == pytest.approx(float(law.cdf(0.0)) - zero, abs=1e-7)


@pytest.mark.parametrize("name", SHIFTED)
def test_the_law_keeps_its_bound_over_a_drawn_level(name):
    body, normal, zero = SHIFTED[name]
    law = pg.theory(spec(body))["x"].marginal(5)
    np.testing.assert_allclose(law.cdf(X), (X >= 0) * normal.cdf(X), atol=1e-8)
    assert law.atoms == (0.0,) and law.chance(0.0) == pytest.approx(zero, abs=1e-9)


def test_an_atom_of_few_drawn_values_is_at_each_of_them():
    body = [{"clip": {"of": [AR], "low": -1}, "times": path({"choice": [1, 2]})}]
    law = pg.theory(spec(body))["x"].marginal(5)
    half = stats.norm.cdf(-0.5) / 2
    assert law.atoms == (-2.0, -1.0) and law.chance(np.array([-2.0, -1.0])) == pytest.approx([half, half], rel=1e-12)


@pytest.mark.parametrize("body", [
    [{"clip": {"of": [AR], "low": -1}, "times": TIMES}],
    [demand(), {"constant": {"level": path({"uniform": [0, 30]})}}],
    [demand(), {"constant": {"level": path({"uniform": [0, 0.001]})}}],
    [{"clip": {"of": [AR], "low": path({"uniform": [-1, 0]})}}],
    [{"max": {"of": [AR], "and": [{"constant": path({"uniform": [0, 1]})}]}}],
], ids=["bound", "level", "level that moves little", "low", "the larger"])  # fmt: skip
def test_of_an_atom_that_moves_with_the_drawn_number_no_law_is_given(body):
    x = pg.theory(spec(body))["x"]
    assert x.marginal(5) is None
    reason = "a value with a chance of its own moves with a drawn parameter: its law is not computed"
    assert x.reason("marginal") == reason


@pytest.mark.parametrize("name", [*BODIES, *SHIFTED])
def test_own_output_agrees_and_the_share_of_the_atom_is_judged(name):
    body, zero = (BODIES | SHIFTED)[name][0], (BODIES | SHIFTED)[name][-1]
    found = pg.validate(pg.render(spec(body)), false_alarm=FALSE_ALARM)
    assert found.agrees, found.text()
    shares = [row for row in found.rows if row.what == "share of 0" and row.kind == "law"]
    assert shares and all(row.theory == pytest.approx(zero, rel=1e-6) for row in shares)
    assert any(row.what == "law" and row.outcome == "agrees" for row in found.rows)


@pytest.mark.parametrize("seed", [1, 2])
def test_other_seeds_agree_too(seed):
    ensemble = pg.render(spec(BODIES["share"][0], seed=seed))
    assert pg.validate(ensemble, false_alarm=FALSE_ALARM).agrees


@pytest.mark.parametrize("name", ["times", "clip"])
def test_too_few_zeros_are_named(name):
    """A saboteur: of the zeros, a quarter of those of a step are given a value that the series may have."""
    stated = spec((BODIES | SHIFTED)[name][0])
    table = pg.render(stated).to_pandas()
    x, rng = table["x"].to_numpy(copy=True), np.random.default_rng(4)
    moved = (x == 0.0) & (rng.random(len(x)) < 0.25)
    x[moved] = rng.choice(x[x > 0.0], int(moved.sum()))
    found = pg.validate(table.assign(x=x), stated, false_alarm=FALSE_ALARM)
    assert "share of 0" in {row.what for row in found.rows if row.outcome == "departs"}, found.text()
