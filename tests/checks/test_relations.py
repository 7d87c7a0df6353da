"""Gaps between series that wander together: which there are, their theory, and what is found by them."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from scipy.linalg import solve_discrete_lyapunov

import procgen as pg
from procgen.chance import kernel
from procgen.chance.laws import LAWS
from procgen.checks.planning import plan_of
from procgen.checks.pools import plan_pool
from procgen.checks.relations import Relation, RelationLane
from procgen.spec.reader import read_text
from procgen.terms import catalogue

HEAD = "procgen: 1\nseed: {seed}\npaths: {paths}\ntime: {{steps: 240}}\n"
VECM = """\
shared:
  m: [{vector_error_correction: {names: [u, v], relations: [[1, -0.8]], adjustment: [[-0.1], [0.05]], sd: [1, 2]}}]
series:
  a: [{constant: 7}, {use: m.vector_error_correction.u, times: 2}]
  b: [{use: m.vector_error_correction.v}]
"""
WALK = """\
shared:
  w: [{random_walk: {sd: 1}}]
series:
  a: [{use: w}, {ar: {phi: 0.7, sd: 1}}]
  b: [{use: w, times: 0.5}, {white_noise: {sd: 1}}]
  c: [{ar: {phi: 0.5, sd: 1}}]
"""


def spec_of(text, paths=400, seed=11):
    return read_text(HEAD.format(paths=paths, seed=seed) + text, catalogue(), LAWS)


@pytest.mark.parametrize(("text", "shown"), [(VECM, "0.5 a − 0.8 b"), (WALK, "a − 2 b")])
def test_the_gap_of_a_spec(text, shown):
    (gap,) = plan_of(spec_of(text)).relations
    assert str(gap) == shown and gap.name == "a ~ b"


def test_no_gap_where_nothing_wanders_together():
    assert plan_of(spec_of(WALK.replace("b: [{use: w, times: 0.5}, ", "b: [{random_walk: {sd: 1}}, "))).relations == []
    steady = WALK.replace("w: [{random_walk: {sd: 1}}]", "w: [{ar: {phi: 0.5, sd: 1}}]")
    assert plan_of(spec_of(steady)).relations == []


def test_the_theory_of_a_gap():
    """β′x of the error correction is an autoregression with 1 + β′α, here solved for by SciPy (Johansen 1995, 4.2)."""
    (gap,) = plan_of(spec_of(VECM)).relations
    phi, noise = 1.0 - 0.1 - 0.8 * 0.05, 1.0 + 0.64 * 4.0
    variance = float(solve_discrete_lyapunov(np.array([[phi]]), np.array([[noise]]))[0, 0])
    at = np.array([200])
    assert gap.plan.theory.variance(at)[0] == pytest.approx(variance, rel=1e-9)
    assert gap.plan.theory.covariance(at, at - 3)[0] == pytest.approx(variance * phi**3, rel=1e-9)
    assert gap.plan.theory.mean(at)[0] == pytest.approx(3.5)


@pytest.mark.parametrize(
    ("text", "old", "new"),
    [
        (VECM, "[[-0.1], [0.05]]", "[[-0.05], [0.05]]"),
        (VECM, "[[1, -0.8]]", "[[1, -0.75]]"),
        (WALK, "times: 0.5", "times: 0.45"),
    ],
)
def test_another_relation_is_named_as_the_gap(text, old, new):
    assert old in text
    right = spec_of(text)
    verdict = pg.validate(pg.render(spec_of(text.replace(old, new))), spec=right)
    assert verdict.agrees is False
    assert verdict.headline[0].startswith("a ~ b: ") and "of the gap between a and b" in verdict.headline[0]


def test_what_is_wrong_with_one_series_is_not_called_a_gap():
    wrong = pg.render(spec_of(VECM.replace("sd: [1, 2]", "sd: [1, 2.2]")))
    assert pg.validate(wrong, spec=spec_of(VECM)).headline[0].startswith("b: spread: ")


@pytest.mark.parametrize("text", [VECM, WALK])
def test_true_ensembles_agree(text):
    """12 ensembles, about 12 gap checks each: none below 1e-6, seeds fixed; their p's are spread over (0, 1)."""
    found = []
    for seed in range(12):
        rows = pg.validate(pg.render(spec_of(text, 120, 100 + seed))).checks
        found += [p for what, p in zip(rows["what"], rows["p"], strict=True) if what.endswith("of the gap")]
    assert len(found) > 100 and min(found) > 1e-6 and 0.35 < np.mean(found) < 0.65


LEADS = """\
shared:
  f: [{white_noise: {sd: 0.5}}]
series:
  a: [{use: f}, {white_noise: {sd: 1}}]
  b: [{lag: {of: [{use: f}], by: 2}}, {white_noise: {sd: 1, law: laplace}}]
"""


def test_which_of_two_steady_series_leads():
    (pair,) = plan_of(spec_of(LEADS)).relations
    total = 1.25  # of each; both in sd add up to 2 + 2 ρ(0), and have ρ(2) = 0.25 / 1.25 once at lag 2
    assert pair.plan.theory.variance(np.array([9]))[0] == pytest.approx(2.0)
    assert pair.plan.theory.autocovariance([1, 2, 3]) == pytest.approx([0.0, 0.25 / total, 0.0])
    right = spec_of(LEADS)
    line = pg.validate(pg.render(spec_of(LEADS.replace("by: 2", "by: 3"))), spec=right).headline[0]
    assert line.startswith("a ~ b: dependence: ") and "of the sum of a and b in sd" in line
    assert pg.validate(pg.render(right), false_alarm=1e-8).agrees


def test_series_whose_shocks_are_compared_are_not_added_up():
    assert plan_of(spec_of(LEADS.replace(", law: laplace", ""))).relations == []
    assert plan_of(spec_of(LEADS.replace("{use: f}], by", "{white_noise: {sd: 1}, as: own}], by"))).relations == []


@pytest.mark.skipif(not kernel.available(), reason="numba is not installed")
@pytest.mark.parametrize("cuts", [(), (64, 192), (256, 320, 576)])
@pytest.mark.parametrize("unknown", [False, True])
def test_compiled_sums_of_two_series_have_the_bits_of_plain_ones(cuts, unknown):
    pool = plan_pool(plan_of(spec_of("series:\n  a: [{ar: {phi: 0.5, sd: 1}}]\n")).series[0], 600, blind=True)
    relation = Relation({"a": 0.3, "b": 1.7}, SimpleNamespace(pool=pool))
    x, y = np.random.default_rng(5).standard_normal((2, 600, 40))
    if unknown:
        x[70, 3], y[599, 7] = np.nan, np.inf

    def averages():
        lane = RelationLane(relation, 40)
        for begin, end in zip([0, *cuts], [*cuts, 600], strict=True):
            lane.absorb({"a": x[begin:end], "b": y[begin:end]}, begin)
        return lane.pool.averages()

    plain = averages()
    with kernel.compiling():
        np.testing.assert_array_equal(averages(), plain)
    assert np.isnan(plain).any() == unknown
