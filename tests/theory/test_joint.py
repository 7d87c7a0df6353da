"""Laws of the larger of two, of products with a flag and of powers, against SciPy's distributions and quadratures."""

import numpy as np
import pytest
from scipy import stats

import procgen as pg

X = np.array([-2.5, -1.0, -0.2, 0.0, 0.3, 1.0, 2.0, 4.0])
P = np.array([1e-6, 0.01, 0.2, 0.5, 0.77, 0.99, 1.0 - 1e-6])
NORMAL, WIDE = {"white_noise": {"sd": 1}}, {"white_noise": {"sd": 2}, "as": "wide"}
HEAVY = {"white_noise": {"sd": 1, "law": {"student_t": {"df": 6}}}, "as": "heavy"}
T6 = stats.t(6, scale=np.sqrt(4 / 6))
FLAG = {"flag": {"share": 0.3, "stay": 4}}


def spec(*body, paths=300, seed=3, **more):
    whole = {"series": {"x": list(body)}} | more
    return {"procgen": 1, "seed": seed, "paths": paths, "time": {"steps": 30}} | whole


def law_of(*body, step=7, **more):
    found = pg.theory(spec(*body, **more))["x"]
    law = found.marginal(step)
    assert law is not None, found.reason("marginal")
    return found, law


def of_two(kind, one, other):
    return {kind: {"of": [one], "and": [other]}}


def agrees_with(law, cdf, sf, ends=(-60.0, 60.0)):
    np.testing.assert_allclose(law.cdf(X), cdf(X), rtol=1e-10, atol=1e-15)
    np.testing.assert_allclose(law.sf(X), sf(X), rtol=1e-10, atol=1e-15)
    q = law.ppf(P)
    np.testing.assert_allclose(cdf(q), P, rtol=1e-9)
    np.testing.assert_allclose(law.isf(1.0 - P), q, rtol=1e-6)
    slope = (cdf(X + 1e-5) - cdf(X - 1e-5)) / 2e-5
    np.testing.assert_allclose(law.pdf(X), slope, rtol=1e-6, atol=1e-9)


def test_the_larger_of_two_independent_ones():
    one, other = stats.norm(), stats.norm(0, 2)
    found, law = law_of(of_two("max", NORMAL, WIDE))
    agrees_with(law, lambda x: one.cdf(x) * other.cdf(x), lambda x: 1.0 - one.cdf(x) * other.cdf(x))
    clark = np.sqrt(5.0 / (2.0 * np.pi))  # (1961), eq. 2
    assert law.mean() == pytest.approx(found.mean([7])[0]) == pytest.approx(clark)
    assert law.var() == pytest.approx(found.variance([7])[0])


def test_the_smaller_of_two_that_are_not_both_normal():
    one = stats.norm()
    found, law = law_of(of_two("min", NORMAL, HEAVY))
    agrees_with(law, lambda x: 1.0 - one.sf(x) * T6.sf(x), lambda x: one.sf(x) * T6.sf(x))
    assert found.mean([7]) is None


@pytest.mark.parametrize("rho", [0.7, -0.4])
def test_the_larger_of_two_normal_ones_that_are_correlated(rho):
    both = {"series": {"x": [of_two("max", NORMAL, WIDE)]}}
    pair = {"correlation": [{"between": ["x.white_noise", "x.wide"], "value": rho}]}
    found, law = law_of(**both, **pair)
    c = 2.0 * rho
    joint = stats.multivariate_normal([0, 0], [[1, c], [c, 4]], abseps=1e-12, releps=1e-12)
    cdf = np.vectorize(lambda x: joint.cdf([x, x]))
    np.testing.assert_allclose(law.cdf(X), cdf(X), rtol=1e-7)
    np.testing.assert_allclose(law.cdf(law.ppf(P)), P, rtol=1e-9)
    assert law.mean() == pytest.approx(found.mean([7])[0]) == pytest.approx(np.sqrt((5 - 2 * c) / (2 * np.pi)))
    assert law.var() == pytest.approx(found.variance([7])[0])


def test_what_has_no_law_says_why():
    used = {"max": {"of": [{"use": "w"}], "and": [{"use": "w", "times": 0.5, "as": "half"}]}}
    asked = {
        "one line apart": spec(shared={"w": [NORMAL]}, series={"x": [used]}),
        "chance in common": spec(shared={"w": [HEAVY]}, series={"x": [used]}),
        "on a lattice": spec(of_two("max", NORMAL, {"poisson": {"mean": 4}})),
        "both spread": spec({"product": [HEAVY, NORMAL]}),
        "lies on a lattice": spec({"power": {"of": [{"poisson": {"mean": 4}}], "exponent": 2}}),
    }
    for words, one in asked.items():
        found = pg.theory(one)["x"]
        assert found.marginal(7) is None and words in found.reason("marginal")


def test_the_larger_of_two_counts_and_of_what_is_held():
    _, law = law_of(of_two("max", {"poisson": {"mean": 4}}, {"poisson": {"mean": 3}, "as": "other"}))
    k = np.arange(12.0)
    np.testing.assert_allclose(law.cdf(k), stats.poisson(4).cdf(k) * stats.poisson(3).cdf(k), rtol=1e-12)
    held = {"hinge": {"of": [NORMAL], "above": 0}}
    _, law = law_of(of_two("min", held, {"hinge": {"of": [WIDE], "above": 1}, "as": "other"}))
    assert law.atoms == (0.0,)
    assert float(law.chance(0.0)) == pytest.approx(1.0 - 0.5 * stats.norm.sf(0.5))
    assert law.ppf(np.array([0.5, 0.9])).tolist() == [0.0, pytest.approx(float(law.ppf(0.9)))]


def test_the_larger_of_a_walk_and_a_level():
    walk = {"random_walk": {"sd": 0.5, "start": 1}}
    _, law = law_of(of_two("max", walk, {"trend": {"level": 1, "slope": 0.1}}), step=9)
    assert law.atoms == (1.9,) and float(law.chance(1.9)) == pytest.approx(stats.norm.cdf(0.9 / 1.5))
    assert pg.theory(spec(of_two("max", walk, NORMAL)))["x"].marginal(0).atoms == (1.0,)


@pytest.mark.parametrize("times", [1, -3])
def test_a_flag_times_what_spreads(times):
    found, law = law_of({"product": [{"exp": [NORMAL]}, FLAG], "times": times})
    sized = stats.lognorm(1.0, scale=abs(times))
    assert law.atoms == (0.0,) and float(law.chance(0.0)) == pytest.approx(0.7)
    x = np.array([0.2, 1.0, 5.0])
    np.testing.assert_allclose((law.sf if times > 0 else law.cdf)(np.sign(times) * x), 0.3 * sized.sf(x), rtol=1e-10)
    assert law.mean() == pytest.approx(found.mean([7])[0]) and law.var() == pytest.approx(found.variance([7])[0])


def test_powers():
    _, square = law_of({"power": {"of": [NORMAL, {"constant": 1.5}], "exponent": 2}})
    x = np.array([1e-3, 0.1, 1.0, 4.0, 30.0])
    theirs = stats.ncx2(1, 1.5**2)
    np.testing.assert_allclose(square.cdf(x), theirs.cdf(x), rtol=1e-9)
    np.testing.assert_allclose(square.pdf(x), theirs.pdf(x), rtol=1e-9)
    np.testing.assert_allclose(square.ppf(P), theirs.ppf(P), rtol=1e-6)
    assert square.cdf(np.array([-1.0, -1e-9])).tolist() == [0.0, 0.0]
    found, cube = law_of({"power": {"of": [WIDE], "exponent": 3}})
    np.testing.assert_allclose(cube.cdf(X), stats.norm(0, 2).cdf(np.cbrt(X)), rtol=1e-12)
    assert cube.var() == pytest.approx(found.variance([7])[0])  # 15 σ⁶
    _, heavy = law_of({"power": {"of": [HEAVY], "exponent": 2}})
    np.testing.assert_allclose(heavy.sf(x), 2.0 * T6.sf(np.sqrt(x)), rtol=1e-9)


def test_the_size_and_the_square_of_what_is_held():
    clipped = {"clip": {"of": [NORMAL], "low": -1, "high": 2}}
    _, size = law_of({"abs": [clipped]})
    assert size.atoms == (1.0, 2.0)
    np.testing.assert_allclose(size.chance([1.0, 2.0]), [stats.norm.cdf(-1), stats.norm.sf(2)], rtol=1e-12)
    np.testing.assert_allclose(size.cdf([0.5, 1.0, 1.5]), [
        stats.norm.cdf(0.5) - stats.norm.cdf(-0.5), stats.norm.cdf(1.0), stats.norm.cdf(1.5)])  # fmt: skip
    _, square = law_of({"power": {"of": [clipped], "exponent": 2}})
    assert square.atoms == (1.0, 4.0) and float(square.chance(4.0)) == pytest.approx(stats.norm.sf(2))


JUDGED = {
    "larger": (of_two("max", NORMAL, HEAVY), of_two("max", NORMAL, {**HEAVY, "times": 1.6})),
    "with a flag": ({"product": [HEAVY, FLAG]}, {"product": [{**HEAVY, "times": 2.5}, FLAG]}),
    "power": ({"power": {"of": [HEAVY], "exponent": 2}}, {"power": {"of": [{**HEAVY, "times": 1.4}], "exponent": 2}}),
}


@pytest.mark.parametrize("name", JUDGED)
def test_a_law_is_judged(name):
    """The true one departs with a probability of 1e-8; another spread by 40 % or more is found."""
    true, false = (spec(body, paths=1000) for body in JUDGED[name])
    verdict = pg.validate(pg.render(true), false_alarm=1e-8)
    assert verdict.agrees is not False and any(row.what == "law" and row.outcome == "agrees" for row in verdict.rows)
    assert pg.validate(pg.render(false).to_pandas(), true, false_alarm=1e-8).agrees is False


def test_the_larger_of_a_value_and_of_the_one_that_is_held():
    """At the steps that are read both are one; between them as Clark (1961) has it, of two with covariance c."""
    body = of_two("max", {"hold": {"of": [{"use": "w"}], "every": 4}}, {"use": "w"})
    known, v = pg.theory(spec(body, shared={"w": [{"ar": {"phi": 0.5, "sd": 1}}]}))["x"], 4 / 3
    theta = np.sqrt(2 * v * (1 - 0.5 ** np.arange(4)))
    np.testing.assert_allclose(known.mean(np.arange(4)), theta / np.sqrt(2 * np.pi), rtol=1e-12)
    np.testing.assert_allclose(known.variance(np.arange(4)), v - theta**2 / (2 * np.pi), rtol=1e-12)
