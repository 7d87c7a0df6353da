"""One pass: how the data are cut does not matter, parts merge, and what is spoiled is named."""

import numpy as np
import pytest

from procgen.checks import farthest
from procgen.checks.gather import Gather
from procgen.checks.judgement import judged
from procgen.checks.lane import Pass
from procgen.checks.planning import plan_of
from procgen.checks.verdict import Verdict
from tests.studies.departures import draw, gathered, spec_of

BODY = {
    "series": {
        "x": [{"constant": 2}, {"ar": {"phi": 0.6, "sd": 1}}, {"random_walk": {"sd": 0.2}}],
        "y": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}],
        "fixed": [{"trend": {"level": 1, "slope": 0.5}}],
    },
    "correlation": [{"between": ["x.ar", "y.garch"], "value": 0.3}],
}
PATHS, STEPS = 120, 90


@pytest.fixture(scope="module")
def plan():
    return plan_of(spec_of(BODY, PATHS, STEPS, 1))


@pytest.fixture(scope="module")
def values():
    return draw(spec_of(BODY, PATHS, STEPS, 1))


def cut(values, path_cuts, step_cuts):
    for a, b in zip([0, *path_cuts], [*path_cuts, PATHS], strict=True):
        for s, t in zip([0, *step_cuts], [*step_cuts, STEPS], strict=True):
            yield a, s, {name: x[a:b, s:t] for name, x in values.items()}


def rows(gather):
    return {(c.series, c.what, c.probe): c for c in Verdict(list(judged(gather)), 0.001).rows}


def same(one, other, but=()):
    assert one.keys() == other.keys()
    for key, check in one.items():
        if not any(word in key[1] for word in but):
            assert other[key].outcome == check.outcome, key
            if check.log_p is not None:
                assert other[key].log_p == pytest.approx(check.log_p, rel=1e-6, abs=1e-9), key


def test_a_true_ensemble_agrees(plan, values):
    assert Verdict(list(judged(gathered(plan, cut(values, [], [])))), 0.001).agrees is True


@pytest.mark.parametrize("steps", [[1], [33, 40, 88]], ids=str)
def test_cutting_along_steps_does_not_matter(plan, values, steps):
    same(rows(gathered(plan, cut(values, [], []))), rows(gathered(plan, cut(values, [], steps))))


def test_cutting_between_paths_only_loses_the_pairs_across_the_cut(plan, values):
    whole, parts = rows(gathered(plan, cut(values, [], []))), rows(gathered(plan, cut(values, [16, 50], [20])))
    same(whole, parts, but=("neighbouring",))


def test_parts_merge(plan, values):
    pieces = list(cut(values, [64], []))
    left, right = (gathered(plan, [piece]) for piece in pieces)
    left.merge(right)
    same(rows(gathered(plan, pieces)), rows(left))


def test_blocks_out_of_turn_are_refused(plan, values):
    pieces = list(cut(values, [], [30, 60]))
    gather = Pass(plan)
    gather.absorb(*pieces[0])
    with pytest.raises(ValueError, match="in the order of their steps, got step 60 of paths 0–63 out of turn"):
        gather.absorb(*pieces[2])


def test_a_value_that_is_not_finite_is_named_and_the_rest_judged(plan, values):
    spoiled = {name: x.copy() for name, x in values.items()}
    spoiled["x"][7, 40] = np.inf
    spoiled["y"][3, 5] = np.nan
    found = rows(gathered(plan, cut(spoiled, [], [45])))
    assert found["x", "finite values", "all steps"].note == "1 value is not finite, the first at path 7, step 40"
    assert found["y", "finite values", "all steps"].note == "1 value is not finite, the first at path 3, step 5"
    departs = {key for key, check in found.items() if check.outcome == "departs"}
    assert departs == {("x", "finite values", "all steps"), ("y", "finite values", "all steps")}


def test_a_known_series_must_be_its_mean(plan, values):
    spoiled = {name: x.copy() for name, x in values.items()}
    spoiled["fixed"][5, 9] += 0.25
    check = rows(gathered(plan, cut(spoiled, [], [])))["fixed", "values", "all steps"]
    assert check.outcome == "departs"
    assert (check.theory, check.estimate) == (5.5, 5.75)


def test_every_step_of_one_path():
    body = [{"ar": {"phi": 0.5, "sd": 1}}]
    values = draw(spec_of(body, 1, 1500, 2))
    verdict = Verdict(list(judged(gathered(plan_of(spec_of(body, 1, 1500, 2)), [(0, 0, values)]))), 0.001)
    assert verdict.agrees is True
    assert not any(row.what == "variance" and row.outcome == "agrees" for row in verdict.rows)


def test_memory_does_not_grow_with_paths(plan, values):
    # What is kept after 10 times the paths is the same but for fingerprints, 8 bytes a path and series, and samples.
    one = Pass(plan)
    for k in range(10):
        one.absorb(k * 128, 0, values)
    assert not one.lanes
    total = one.total()
    assert len(total.moments.products) == len(plan.moment_pairs)
    assert sum(rows.nbytes for _, rows in total.structure.prints) == 10 * PATHS * 3 * 8


def test_pairs_that_are_left_out_are_said():
    body = {"series": {f"s{k}": [{"white_noise": {"sd": 1}}] for k in range(10)}}
    spec = spec_of(body, 20, 12, 1)
    found = list(judged(gathered(plan_of(spec), [(0, 0, draw(spec))])))
    notes = [check.note for check in found if check.what == "pairs of series"]
    assert notes == ["36 of the 45 pairs of series are compared, the first ones of the spec"]


def test_what_is_known_to_lie_farther_elsewhere_changes_no_sum():
    """Paths that follow others are told how far out to look; the farthest of all are those of ranges summed alone."""
    spec = spec_of([{"white_noise": {"sd": 1}}], 192, 80, 9)
    plan, x = plan_of(spec), draw(spec)["x"]
    x[4 * np.arange(48), 60 - np.arange(48)] = 4.5  # as far out, later paths at earlier steps: more than are kept
    x[120, 3], x[0, 0] = 9.0, -9.0
    together, alone = Pass(plan), Gather(plan)
    for first in range(0, 192, 16):
        one = Pass(plan)
        for each in (together, one):
            each.absorb(first, 0, {"x": x[first : first + 16]})
        alone.merge(one.total())
    assert len(together.outmost.shocks["x"]) == farthest.KEPT
    assert together.total().structure.far == alone.structure.far
    assert together.total().shocks["x"].far == alone.shocks["x"].far


@pytest.mark.filterwarnings("error")
def test_rounding_that_leaves_one_value_is_not_divided_by():
    """Stored are 4s, where the walk lies near 3.9 with an sd of 0.01: its rounded variance underflows to 0."""
    walk = {"of": [{"random_walk": {"sd": 0.01, "drift": -5e-5, "start": 3.9}}], "decimals": 0}
    noise = [{"white_noise": {"sd": 1, "law": {"student_t": {"df": 5}}}}]
    for series in ({"a": walk}, {"b": noise, "a": walk}):
        spec = spec_of({"series": series}, 500, 8, 295)
        plan, values = plan_of(spec), draw(spec)
        assert plan.series[-1].variance[1] == 0 < plan.series[-1].drawn[1]
        rows = [row for row in judged(gathered(plan, [(0, 0, values)])) if row.series.endswith("a")]
        notes = [row for row in rows if row.what.startswith("covariance")]
        assert notes and all(row.outcome == "untestable" and "too coarse" in row.note for row in notes)
