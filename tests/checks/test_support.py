"""Values that a process cannot give are named, whatever their share; what it can give is never said to be wrong."""

import json
from pathlib import Path

import numpy as np
import pytest

import procgen as pg
from procgen.checks.judgement import judged
from procgen.checks.planning import plan_of
from procgen.checks.structure import Precision, Structure
from procgen.checks.support import HELD, POSSIBLE, Possible, possible_of, words
from procgen.terms.graph import build
from procgen.terms.support import BINARY, COUNTS, EVERYTHING, POSITIVE, Support, added, finite
from tests.studies.departures import draw, gathered, spec_of, verdict

SPECS = sorted((Path(__file__).parents[2] / "specs").glob("*.yaml"))
WIDE = [{"ar": {"phi": 0.6, "total_sd": 2}}]
FLAG = {"flag": {"share": 0.3, "stay": 4}}
RECORD = [3.0, 5.5, 4.0, 6.0, 2.0, 5.0, 7.0]

# body, a value that it cannot give, and what is said of it
WRONG = {
    "half a count": ([{"poisson": {"mean": 4}}], 2.5, "whole numbers from 0"),
    "fewer than none": ([{"poisson": {"mean": 4, "of": WIDE}}], -1.0, "whole numbers from 0"),
    "half of an overdispersed count": ([{"negative_binomial": {"mean": 4, "size": 2}}], 0.5, "whole numbers from 0"),
    "a negative count with memory": ([{"inar": {"alpha": 0.6, "mean": 5}}], -2.0, "whole numbers from 0"),
    "half a demand": (
        [{"intermittent": {"share": 0.2, "size": 5, "law": "counts"}}],
        1.5,
        "whole numbers from 0",
    ),
    "negative demand": ([{"intermittent": {"share": 0.2, "size": 12, "sd": 6}}], -0.1, "0 or more"),
    "half among zeros": (
        [{"zero_inflated": {"of": [{"poisson": {"mean": 4}}], "share": 0.3}}],
        0.5,
        "whole numbers from 0",
    ),
    "no state": ([{"chain": {"states": ["a", "b", "c"], "durations": {"a": 4, "b": 3, "c": 5}}}], 3.0, "0, 1 or 2"),
    "half on": ([FLAG], 0.5, "0 or 1"),
    "exponential of nothing": ([{"exp": WIDE}], 0.0, "above 0"),
    "negative price": ([{"geometric_brownian_motion": {"start": 5, "drift": 0.0, "sd": 0.01}}], -1.0, "above 0"),
    "negative size": ([{"abs": WIDE}], -0.5, "0 or more"),
    "beyond a level": ([{"sigmoid": {"of": WIDE, "low": 0, "high": 100}}], 100.5, "between 0 and 100"),
    "beyond a bound": ([{"clip": {"of": WIDE, "low": -1, "high": 3}}], 3.01, "between −1 and 3"),
    "below a hinge": ([{"hinge": {"of": WIDE, "above": 1}}], -0.2, "0 or more"),
    "between readings": ([{"round": {"of": WIDE, "to": 0.5}}], 0.75, "multiples of 0.5"),
    "between pallets": ([{"floor": {"of": WIDE, "to": 4}}], 2.0, "multiples of 4"),
    "between hours": ([{"ceiling": {"of": WIDE, "to": 0.1}}], 0.05, "multiples of 0.1"),
    "not in the record": (
        [{"moving_blocks": {"values": RECORD, "length": 3}}],
        4.5,
        "among 7 numbers between 2 and 7",
    ),
    "scaled and shifted": (
        [{"constant": 10}, {"poisson": {"mean": 4}, "times": 3}],
        14.0,
        "10 and multiples of 3 away from it from 10",
    ),
    "sum of both": ([{**FLAG, "times": 5}, {**FLAG, "as": "other"}], 2.0, "0, 1, 5 or 6"),
    "product": ([{"product": [FLAG, {"poisson": {"mean": 4}}]}], 1.5, "whole numbers from 0"),
    "one regime's": (
        [
            {
                "regimes": {
                    "branches": {"calm": [{"poisson": {"mean": 2}}], "busy": [{"poisson": {"mean": 9}, "as": "many"}]},
                    "durations": {"calm": 40, "busy": 8},
                }
            }
        ],
        2.5,
        "whole numbers from 0",
    ),
    "where some are missing": ([{"missing": {"of": [{"poisson": {"mean": 4}}], "share": 0.1}}], 2.5, "whole numbers"),
    "in sums of finer steps": ([{"aggregate": {"of": [{"poisson": {"mean": 1}}], "over": 4}}], 2.5, "whole numbers"),
}


def facts(found, what=POSSIBLE):
    return [check for check in found.rows if check.what == what]


def looked(spec, x):
    """What the pass says of the values (paths, steps), without all that only theory tells."""
    possible = possible_of(build(spec), "x", spec.series["x"])
    structure = Structure([Precision("x", "float64", None, True, possible=possible)], x.shape[1])
    structure.absorb(0, x.T, 0, 0, np.zeros(len(x), np.uint64))
    return [check for check in structure.checks({}) if check.what == POSSIBLE]


@pytest.mark.parametrize("name", ["half a count", "negative demand", "half on", "beyond a bound"])
def test_it_leads_the_verdict(name):
    body, value, _ = WRONG[name]
    values = draw(spec_of(body, 60, 100, 4))
    assert [check.outcome for check in facts(verdict(body, values))] == ["agrees"]
    values["x"][41, 17] = value
    found = verdict(body, values)
    assert found.agrees is False and "that the process cannot give" in found.headline[0]


@pytest.mark.parametrize("name", WRONG)
def test_a_value_that_cannot_be_is_named_with_its_place(name):
    body, value, allowed = WRONG[name]
    spec = spec_of(body, 60, 100, 4)
    x = draw(spec)["x"].astype(float)
    (right,) = looked(spec, x)
    assert right.outcome == "agrees" and allowed in right.note
    x[41, 17] = x[50, 3] = value
    (wrong,) = looked(spec, x)
    assert wrong.outcome == "departs" and wrong.kind == "structure"
    assert "2 values that the process cannot give, the first at path 41, step 17" in wrong.note
    assert f"where values are {allowed}" in wrong.note


HOLD = [{"constant": 3}, {"hold": {"of": [{"white_noise": {"sd": 3}}], "every": 8, "first": 2}, "times": 2}]


def test_what_is_held_must_not_move():
    values = draw(spec_of(HOLD, 60, 100, 4))
    (right,) = facts(verdict(HOLD, values), HELD)
    assert right.outcome == "agrees" and right.note == "all values are held for 8 steps from step 2 on"
    values["x"][7, 61] += 0.01
    (wrong,) = facts(verdict(HOLD, values), HELD)
    assert "2 values differ from the one before, the first at path 7, step 61" in wrong.note


def test_what_is_held_a_few_steps_later_departs():
    values = draw(spec_of(HOLD, 60, 103, 4))
    assert facts(verdict(HOLD, {"x": values["x"][:, 3:].copy()}), HELD)[0].outcome == "departs"


@pytest.mark.parametrize("file", SPECS, ids=[file.stem for file in SPECS])
def test_the_gallery_is_inside_its_support(file):
    spec = pg.load(file)
    spec = spec.changed(paths=40, steps=min(spec.time.steps, 200))
    values = draw(spec)
    graph = build(spec)
    for name, declared in spec.series.items():
        x, possible = values[name].astype(float).T, possible_of(graph, name, declared)
        assert possible.outside(x) is None, words(possible.support)
        assert possible.every == 1 or possible.moved(x, None, 0) is None, name


@pytest.mark.parametrize("name", WRONG)
@pytest.mark.parametrize(("kind", "decimals"), [("float64", None), ("float64", 1), ("float32", None), ("int64", None)])
def test_what_is_stored_is_inside_in_every_precision(name, kind, decimals):
    body, _, _ = WRONG[name]
    if kind == "int64" and "missing" in body[0]:
        pytest.skip("whole numbers cannot be missing")
    declared = {"of": body, "type": kind} | ({} if decimals is None else {"decimals": decimals})
    spec = spec_of({"series": {"x": declared}}, 30, 60, 2)
    possible = possible_of(build(spec), "x", spec.series["x"])
    assert possible.outside(draw(spec)["x"].astype(float).T) is None


def test_what_a_drawn_parameter_moves_is_not_judged():
    moved = [{"clip": {"of": WIDE, "low": {"draw": {"uniform": [-2, 0]}, "over": "path"}}}]
    counts = [{"poisson": {"mean": {"draw": {"uniform": [2, 6]}, "over": "path"}}}]
    for body, expected in ((moved, EVERYTHING), (counts, COUNTS)):
        spec = spec_of(body, 30, 60, 2)
        assert possible_of(build(spec), "x", spec.series["x"]).support == expected


def test_a_known_course_in_the_sum_leaves_nothing_to_check():
    body = [{"trend": {"slope": 0.1}}, {"poisson": {"mean": 4}}]
    assert not facts(verdict(body, draw(spec_of(body, 9, 9, 1))))


def test_any_cut_finds_the_same_and_sends_it_as_plain_numbers():
    values = draw(spec_of(HOLD, 300, 200, 4))
    values["x"][[3, 250], [70, 5]] += 1.0
    plan = plan_of(spec_of(HOLD, 300, 200, 1))
    whole = gathered(plan, [(0, 0, values)])
    cut = [
        (p, s, {"x": values["x"][p : p + 128, s : s + 37]}) for p in range(0, 300, 128) for s in range(0, 200, 37)
    ]
    pieces = gathered(plan, cut)
    assert whole.structure.moved == pieces.structure.moved and whole.structure.moved["x"][:3] == [4, 3, 70]
    facts_, arrays = whole.state()
    again = type(whole)(plan).restore(json.loads(json.dumps(facts_)), arrays)
    notes = [[c.note for c in judged(g) if c.what == HELD] for g in (whole, again)]
    assert notes[0] == notes[1] and "path 3, step 70" in notes[0][0]


def test_arithmetic_of_supports():
    assert added([COUNTS, COUNTS, finite([2.0])]) == Support(2.0, step=1.0, offset=2.0)
    assert added([COUNTS, finite([0.5])]).offset == 0.5
    assert added([POSITIVE, COUNTS]) == Support(0.0, above=True)
    assert COUNTS * finite([-2.0]) == Support(high=0.0, low=-np.inf, step=2.0, offset=-0.0)
    assert BINARY * finite([4.0]) == finite([0.0, 4.0])
    assert POSITIVE * POSITIVE == POSITIVE and (POSITIVE | finite([0.0])) == Support(0.0)
    assert (COUNTS | finite([0.5])).step == 0.0 and (COUNTS | finite([-3.0])).step == 1.0
    assert COUNTS.within(0.0, 2.5).step == 0.0 and COUNTS.within(1.0, 3.0) == Support(1.0, 3.0, 1.0)
    assert added([EVERYTHING, COUNTS]).everything and (EVERYTHING * BINARY).everything
    assert (EVERYTHING * finite([0.0])).high == 0.0


def test_words():
    assert words(finite([0.0, 1.0])) == "0 or 1"
    assert words(Support(step=0.5)) == "multiples of 0.5"
    assert words(Support(high=3.0)) == "up to 3"
    assert words(Support(-1.0, 3.0)) == "between −1 and 3"
    assert words(Support(0.0, step=1.0)) == "whole numbers from 0"


def test_what_is_not_finite_is_left_to_others():
    x = np.array([[np.nan, np.inf, 1.0]])
    assert Possible(BINARY).outside(x) is None and Possible(COUNTS).outside(x) is None


def test_what_fades_away_may_be_stored_as_nothing():
    body = [{"exp": [{"random_walk": {"sd": 1, "drift": -2}}]}]
    spec = spec_of({"series": {"x": {"of": body, "type": "float32"}}}, 20, 80, 4)
    x = draw(spec)["x"].astype(float)
    (what,) = plan_of(spec).precision
    assert (x == 0.0).any() and what.possible.outside(x.T) is None
    assert what.possible.outside(np.array([[-1e-40]])) is not None


def test_revealed_terms_are_looked_at_too(tmp_path):
    regimes = {"branches": {"a": [{"white_noise": {"sd": 1}}], "b": [{"constant": 3}]}, "durations": {"a": 9, "b": 4}}
    spec = spec_of([{"regimes": regimes, "as": "r"}, {"poisson": {"mean": 3}, "as": "p"}], 30, 60, 3)
    ensemble = pg.render(spec, out=tmp_path / "e", reveal=["x.r.regime", "x.p"])
    found = {check.series: (check.outcome, check.note) for check in facts(pg.validate(ensemble))}
    assert found["x.r.regime"] == ("agrees", "all values are 0 or 1")
    assert found["x.p"] == ("agrees", "all values are whole numbers from 0")
