"""Correlations that follow the state of a chain: in each state the draws are those of that state's correlation."""

from __future__ import annotations

import numpy as np
import pytest

import procgen as pg
from procgen.chance.laws import LAWS
from procgen.spec.meaning import changes
from procgen.spec.reader import SpecError, read_raw
from procgen.terms import catalogue
from procgen.terms.graph import build
from procgen.terms.recipe import recipes
from tests.theory.specs import theory_of

from .helpers import draw

T4 = {"copula": {"student_t": {"df": 4}}}
MARKET = {"market": [{"chain": {"states": ["calm", "stress"], "durations": {"calm": 6, "stress": 3}}}]}
NOISES = {name: [{"white_noise": {"sd": sd}}] for name, sd in (("a", 1), ("b", 2), ("c", 3))}
BY = {"by": "market", "value": {"calm": 0.2, "stress": 0.8}}


def spec(*items, series=NOISES, shared=MARKET, **rest):
    raw = {"procgen": 1, "seed": 5, "paths": 64, "time": {"steps": 60}, "shared": shared, "series": series}
    return read_raw({**raw, "correlation": list(items), **rest}, catalogue(), LAWS)


def drawn(*items, tiles=(60,), paths=64, **rest):
    return draw(build(spec(*items, **rest)), 0, paths, list(tiles))


@pytest.mark.parametrize("copula", [{}, T4])
def test_each_step_is_that_of_the_correlation_of_its_state(copula):
    """Bit for bit, three names in a matrix by state, one of its entries the same in both."""
    names = ["a.white_noise", "b.white_noise", "c.white_noise"]
    calm, stress = ([[1, r, 0.3], [r, 1, s], [0.3, s, 1]] for r, s in ((0.2, 0.0), (0.8, 0.5)))
    series = {**NOISES, "m": [{"use": "market"}]}
    both = {"names": names, "by": "market", "matrix": {"stress": stress, "calm": calm}, **copula}
    found = drawn(both, series=series, tiles=(7, 33, 20))
    fixed = [drawn({"names": names, "matrix": matrix, **copula}) for matrix in (calm, stress)]
    assert 0.2 < found["m"].mean() < 0.5
    for name in "abc":
        expected = np.where(found["m"] == 1, fixed[1][name], fixed[0][name])
        np.testing.assert_array_equal(found[name], expected)


ABC = [f"{name}.white_noise" for name in "abc"]
LOADINGS = {"calm": [[0.3, 0], [0.2, 0.5], [0, 0.6]], "stress": [[0.8, 0], [0.9, 0.1], [0.7, -0.4]]}
FACTORS = {"names": ABC, "by": "market", "loadings": LOADINGS}
BLOCKS = {
    "by": "market",
    "blocks": [{"names": ABC[:2], "value": {"calm": 0.1, "stress": 0.7}}, {"names": [*ABC[2:], "d.ar"], "value": 0.4}],
    "across": {"stress": 0.35, "calm": 0.0},
}


def in_each(item, state):
    """An item with the values of one state."""
    if isinstance(item, dict):
        return item[state] if state in item else {k: in_each(v, state) for k, v in item.items() if k != "by"}
    return [in_each(one, state) for one in item] if isinstance(item, list) else item


@pytest.mark.parametrize("item", [FACTORS, BLOCKS, {**FACTORS, **T4}], ids=["loadings", "blocks", "loadings, t"])
def test_factors_and_blocks_follow_too(item):
    """Bit for bit what each state's loadings, or blocks, draw alone; the series of one state each."""
    series = {**NOISES, "d": [{"ar": {"phi": 0, "sd": 1}}], "m": [{"use": "market"}]}
    found = drawn(item, series=series, tiles=(7, 33, 20))
    fixed = [drawn(in_each(item, state), series=series) for state in ("calm", "stress")]
    assert 0.2 < found["m"].mean() < 0.5
    for name in "abcd":
        np.testing.assert_array_equal(found[name], np.where(found["m"] == 1, fixed[1][name], fixed[0][name]))


@pytest.mark.parametrize("item", [FACTORS, BLOCKS], ids=["loadings", "blocks"])
def test_their_covariance_is_the_mean_over_the_states(item):
    """R = ΛΛ′ off the diagonal in each state (the factor model as in Anderson 2003, ch. 14; from memory).

    Of two states that last 6 and 3 steps the chain spends 2/3 and 1/3 of the time in them (Hamilton 1989).
    """
    series = {**NOISES, "d": [{"ar": {"phi": 0, "sd": 1}}]}
    th = theory_of(series, shared=MARKET, correlation=[item])
    if item is FACTORS:
        states = [np.array(LOADINGS[state]) for state in ("calm", "stress")]
        calm, stress = (loadings @ loadings.T for loadings in states)
        mean = (2 * calm + stress) / 3
        means = {"ab": mean[0, 1], "ac": mean[0, 2], "bc": mean[1, 2]}
    else:
        means = {"ab": 0.1 * 2 / 3 + 0.7 / 3, "cd": 0.4, "ac": 0.35 / 3, "bd": 0.35 / 3}
    sd = {"a": 1, "b": 2, "c": 3, "d": 1}
    for (x, y), mean in means.items():
        assert th.cross(x, y).covariance(4, 4) == pytest.approx(mean * sd[x] * sd[y], rel=1e-12)


@pytest.mark.parametrize(
    ("item", "message"),
    [
        ({**FACTORS, "by": None}, "needs `by`"),
        ({**FACTORS, "loadings": LOADINGS["calm"]}, "expected a value for each state of market"),
        ({**FACTORS, "loadings": {**LOADINGS, "stress": [[0.8], [0.9]]}}, "expected 3 rows, one a name"),
        ({**FACTORS, "loadings": {**LOADINGS, "stress": [[0.8], [0.9], [1.0]]}}, "squares that sum to less than 1"),
        ({**BLOCKS, "across": {"calm": 0, "storm": 0.3}}, "the states calm, stress, as before, got calm, storm"),
        ({**BLOCKS, "across": {"calm": 0, "stress": 0.9}}, "expected a positive definite correlation in stress"),
    ],
)
def test_faults_of_factors_and_blocks(item, message):
    item = {key: value for key, value in item.items() if value is not None}
    with pytest.raises(SpecError, match=message):
        build(spec(item, series={**NOISES, "d": [{"ar": {"phi": 0, "sd": 1}}]}))


def test_another_number_in_a_state_is_another_meaning():
    louder = {**FACTORS, "loadings": {**LOADINGS, "calm": [[0.4, 0], [0.2, 0.5], [0, 0.6]]}}
    (change,) = changes(spec(FACTORS), spec(louder))
    assert change.place == "correlation of a.white_noise and b.white_noise"
    assert "calm: 0.06" in change.old and "calm: 0.08" in change.new


def test_the_leader_and_those_before_an_appended_name_stay_as_they_are():
    alone, two = drawn(), drawn({"between": ["a.white_noise", "b.white_noise"], **BY})
    more = {"between": ["b.white_noise", "c.white_noise"], "value": 0.4}
    three = drawn({"between": ["a.white_noise", "b.white_noise"], **BY}, more)
    np.testing.assert_array_equal(two["a"], alone["a"])
    np.testing.assert_array_equal(three["a"], two["a"])
    np.testing.assert_array_equal(three["b"], two["b"])
    assert not np.array_equal(two["b"], alone["b"]) and not np.array_equal(three["c"], two["c"])


@pytest.mark.parametrize("by", ["windy", "s.regimes.regime"])
def test_flags_and_regimes_are_followed_too(by):
    shared = {"windy": [{"flag": {"share": 0.3, "stay": 4}}]}
    branches = {"off": [{"constant": 0}], "on": [{"constant": 1, "as": "one"}]}
    regimes = {"regimes": {"branches": branches, "durations": {"off": 9, "on": 4}}}
    all_of = {"series": {**NOISES, "s": [regimes], "w": [{"use": by}]}, "shared": shared}
    names = ["a.white_noise", "b.white_noise"]
    found = drawn({"between": names, "by": by, "value": {"off": 0.1, "on": 0.9}}, **all_of)
    high = drawn({"between": names, "value": 0.9}, **all_of)
    on = found["w"] == 1
    assert on.any() and not on.all()
    np.testing.assert_array_equal(found["b"][on], high["b"][on])
    assert not np.any(found["b"][~on] == high["b"][~on])


FILTERS = {
    "x": [{"ar": {"phi": 0.6, "sd": 1}}],
    "y": [{"ma": {"theta": 0.5, "sd": 2}}],
    "m": [{"use": "market"}],
}
PAIR = {"between": ["x.ar", "y.ma"], **BY}
MEAN = (6 * 0.2 + 3 * 0.8) / 9


def test_covariances_are_those_of_the_mean_correlation():
    """Shocks of distinct steps are independent given the chain: Cov(x(t), y(s)) = E rho x sum of psi psi."""
    th = theory_of(FILTERS, shared=MARKET, correlation=[PAIR])
    cross = th.cross("x", "y")
    assert cross.covariance([9, 10, 9], [9, 9, 10]) == pytest.approx(
        [2 * MEAN * (1 + 0.3), 2 * MEAN * (0.6 + 0.18), 2 * MEAN * 0.5], rel=1e-12
    )
    assert cross.covariance(9, 12) == 0.0
    (pair,) = th.correlated
    assert pair.normals == pytest.approx(MEAN) and "0.2 in calm, 0.8 in stress" in pair.copula
    assert th["x"].gaussian and th["y"].gaussian and not cross.gaussian


def test_one_number_in_all_states_is_a_plain_correlation():
    """Stated by state, and the same everywhere: the covariance is that of this number."""
    pair = {**PAIR, "value": {"calm": 0.4, "stress": 0.4}}
    found, plain = (
        theory_of(FILTERS, shared=MARKET, correlation=[item])
        for item in (pair, {"between": PAIR["between"], "value": 0.4})
    )
    assert found.cross("x", "y").covariance(9, 9) == plain.cross("x", "y").covariance(9, 9) > 0
    both = [drawn(item, series=FILTERS)["y"] for item in (pair, {"between": PAIR["between"], "value": 0.4})]
    np.testing.assert_array_equal(both[0][1:], both[1][1:])  # what follows a chain starts by way of steps before step 0


def test_step_0_is_drawn_in_that_covariance():
    """Of 16,384 paths, at 7 standard errors: the chain is followed before step 0, too."""
    x = drawn(PAIR, series=FILTERS, paths=16_384, tiles=(3,))
    products = x["x"][0] * x["y"][0]
    assert abs(products.mean() - 2 * MEAN * 1.3) < 7 * products.std() / 128
    stress = x["m"][0] == 1  # given that, the shocks of step 0 have 0.8
    products = products[stress]
    chances = np.array([[5 / 6, 1 / 6], [1 / 3, 2 / 3]])
    back = chances[1] @ [0.2, 0.8]  # the chain of two states looks the same backwards
    assert abs(products.mean() - 2 * (0.8 + 0.3 * back)) < 7 * products.std() / np.sqrt(stress.sum())


def test_what_is_not_known_is_said():
    series = {**FILTERS, "sum": [{"use": "x"}, {"use": "y"}], "both": [{"product": [{"use": "x.ar"}, {"use": "y.ma"}]}]}
    th = theory_of(series, shared=MARKET, correlation=[PAIR])
    assert not th["sum"].gaussian and th["sum"].excess_kurtosis is None
    assert th["sum"].variance(5) == pytest.approx(1 / 0.64 + 5 + 2 * 2 * MEAN * 1.3)
    assert th["both"].mean(5) == pytest.approx(2 * MEAN * 1.3)
    # Each factor is independent of the chain, and their product is not.
    assert th.cross("x", "m").covariance(5, 5) == 0.0
    cross = th.cross("both", "m")
    assert cross.covariance(5, 5) is None and "order 3" in cross.reason()


@pytest.mark.parametrize(
    ("item", "message"),
    [
        ({"value": {"calm": 0.2, "stress": 0.8}}, "needs `by`"),
        ({"by": "market", "value": 0.2}, "expected a value for each state of market"),
        ({"by": "nothing", "value": {"calm": 0.2}}, "there is no series or shared body named nothing"),
        ({"by": "market", "value": {"calm": 0.2, "storm": 0.8}}, r"state of market \(calm, stress\), got calm, storm"),
        ({"by": "a.white_noise", "value": {"calm": 0.2, "storm": 0.8}}, "expected `by` to name a chain"),
        ({"by": "started", "value": {"calm": 0.2, "stress": 0.8}}, "to name a chain that starts stationary"),
        ({"by": "market", "value": {"calm": 0.2, "stress": 1.8}}, r"expected a number in \(-1, 1\)"),
    ],
)
def test_faults(item, message):
    started = {"chain": {**MARKET["market"][0]["chain"], "start": "calm"}}
    with pytest.raises(SpecError, match=message):
        build(spec({"between": ["a.white_noise", "b.white_noise"], **item}, shared={**MARKET, "started": [started]}))


def test_every_state_needs_a_correlation_matrix():
    names = [f"{name}.white_noise" for name in "abc"]
    with pytest.raises(SpecError, match="expected a positive definite correlation in stress, got one whose smallest"):
        spec({"within": names, "by": "market", "value": {"calm": 0.2, "stress": -0.6}})
    other = {"other": MARKET["market"], **MARKET}
    with pytest.raises(SpecError, match="names that are linked follow market"):
        spec({"between": names[:2], **BY}, {"between": names[1:], **BY, "by": "other"}, shared=other)


def test_paths_with_parameters_of_their_own():
    """A path has the bits of the spec with its values in place."""
    varied = {**FILTERS, "x": [{"ar": {"phi": {"draw": {"uniform": [0.2, 0.8]}, "over": "path"}, "sd": 1}}]}
    found = pg.render(pg.load({**spec(PAIR, series=varied).raw, "paths": 5}))
    alone = drawn(PAIR, series=FILTERS, paths=5)
    np.testing.assert_array_equal(found["y"], alone["y"].T)


def test_another_chain_is_another_recipe():
    one = recipes(spec(PAIR, series=FILTERS))
    longer = {"market": [{"chain": {"states": ["calm", "stress"], "durations": {"calm": 7, "stress": 3}}}]}
    two = recipes(spec(PAIR, series=FILTERS, shared=longer))
    assert one["x"] == two["x"]  # it leads
    assert two["y"].moved_from(one["y"]) and one["y"].moved_from(recipes(spec(PAIR, series=FILTERS))["y"]) == ()


def long(correlation):
    raw = {"procgen": 1, "seed": 5, "paths": 2000, "time": {"steps": 300}, "shared": MARKET, "series": FILTERS}
    return pg.load({**raw, "correlation": [correlation]})


@pytest.mark.parametrize("copula", [{}, T4])
def test_what_is_drawn_agrees_and_a_constant_correlation_is_found(copula):
    stated = long({**PAIR, **copula})
    verdict = pg.validate(pg.render(stated), false_alarm=1e-7)
    rows = verdict.checks[verdict.checks.series == "x ~ y"]
    judged = set(rows[rows.outcome == "agrees"].what)
    assert verdict.agrees and {"shocks: signs that go together", "shocks: both in their outer 1%"} <= judged
    constant = long({"between": PAIR["between"], "value": MEAN, **copula})
    other = pg.validate(pg.render(constant).to_pandas(), stated)
    rows = other.checks[other.checks.series == "x ~ y"].set_index("what")
    assert other.agrees is False and rows.outcome["shocks: signs that go together"] == "departs"
