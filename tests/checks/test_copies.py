"""Values that stay, and stretches that are there twice: found wherever they are, and never where chance repeats."""

import json

import numpy as np
import pytest

from procgen.checks import copies
from procgen.checks.copies import COPIED, STUCK, Repeats, Watch, checks
from procgen.checks.judgement import judged
from procgen.checks.lane import Pass
from procgen.checks.planning import plan_of
from procgen.checks.structure import ZEROS
from procgen.checks.verdict import Verdict
from tests.studies.departures import draw, gathered, spec_of
from tests.studies.families import FAMILIES

AR = [{"constant": 5}, {"ar": {"phi": 0.6, "sd": 1}}]
ROUNDED = {"series": {"x": {"of": AR, "decimals": 2}}}
PATHS, STEPS = 120, 500


def verdict(body, values):
    spec = spec_of(body, PATHS, STEPS, 3)
    return Verdict(list(judged(gathered(plan_of(spec), [(0, 0, values)]))), 0.001)


def notes(found):
    return {row.what: row.note for row in found.rows if row.what in (STUCK, COPIED) and row.outcome == "departs"}


@pytest.fixture(scope="module", params=[AR, ROUNDED], ids=["double precision", "2 decimals"])
def true(request):
    return request.param, draw(spec_of(request.param, PATHS, STEPS, 3))["x"]


def spoiled(true, change):
    body, x = true[0], true[1].copy()
    change(x)
    return verdict(body, {"x": x})


def test_true_values_do_not_repeat(true):
    found = verdict(true[0], {"x": true[1]})
    assert {row.outcome for row in found.rows if row.what in (STUCK, COPIED)} == {"agrees"}
    assert {row.what for row in found.rows} >= {STUCK, COPIED}
    assert found.agrees is True


def half(x):
    x[20, 250:] = x[11, 250:]


def shifted_by(steps):
    def change(x):
        x[20, : STEPS - steps] = x[11, steps:].copy()

    return change


def twice_in_one_path(x):
    x[7, 300:] = x[7, 50:250].copy()


@pytest.mark.parametrize(
    ("change", "one", "other", "shift", "most"),
    [
        (half, 11, 20, 0, (250, 499)),
        (shifted_by(1), 11, 20, -1, (1, 499)),
        (shifted_by(200), 11, 20, -200, (200, 499)),
        (twice_in_one_path, 7, 7, 250, (50, 249)),
    ],
    ids=["half a path", "shifted by 1", "shifted by 200", "one path"],
)
def test_a_copied_stretch_is_named_with_both_places(true, change, one, other, shift, most):
    found = spoiled(true, change)
    assert found.agrees is False
    note = notes(found)[COPIED]
    first, last = (int(x) for x in note.split(" ")[1].split("–"))
    assert most[0] <= first < most[0] + 100 and most[1] - 100 < last <= most[1]  # a mark in 100 steps: all but 0.2 %
    place = f"in path {other}, steps" if one != other else "at steps"
    assert note == (
        f"steps {first}–{last} at least of path {one} are there again bit for bit {place} {first + shift}–"
        f"{last + shift}"
    )
    assert found.headline[0].startswith("x: structure: ")


def test_a_whole_path_is_told_once(true):
    def change(x):
        x[20] = x[11]

    found = spoiled(true, change)
    assert not notes(found)
    assert [row.what for row in found.rows if row.outcome == "departs" and row.kind == "structure"] == ["copied paths"]


def test_a_stuck_sensor_and_a_frozen_path_are_named(true):
    def stuck(x):
        x[5, 100:161] = x[5, 100]

    def frozen(x):
        x[9, 50:] = x[9, 50]

    assert notes(spoiled(true, stuck)) == {STUCK: "61 equal values in a row at path 5, steps 100–160, as if stuck"}
    assert notes(spoiled(true, frozen)) == {STUCK: "450 equal values in a row at path 9, steps 50–499, as if stuck"}


def carried(x):
    x[::7, 20::30] = x[::7, 19:-1:30]


def test_values_that_are_carried_forward_are_told(true):
    body, _ = true
    found = notes(spoiled(true, carried))
    if isinstance(body, dict):  # of 2 decimals: neighbours are equal now and then
        assert not found
        return
    said = "288 values equal the one before bit for bit, such as that of path 0, step 20, as if carried forward"
    assert found == {STUCK: said}


def filled(x):
    x[::7, 20::30] = 0.0


def test_gaps_that_are_filled_with_zeros_are_told(true):
    body, x = true
    found = spoiled(true, filled)
    assert np.count_nonzero(x == 0.0) == 0
    if isinstance(body, dict):  # of 2 decimals: 0 is a value like any other
        assert ZEROS not in {row.what for row in found.rows}
        return
    (row,) = [row for row in found.rows if row.what == ZEROS]
    assert row.note == "288 values are exactly 0, the first at path 0, step 20, as if it stood for what is missing"
    assert {row.outcome for row in verdict(body, {"x": x}).rows if row.what == ZEROS} == {"agrees"}


def test_a_walk_may_begin_at_zero():
    body = [{"random_walk": {"sd": 1}}]
    x = draw(spec_of(body, PATHS, STEPS, 3))["x"]
    assert not x[:, 0].any()
    assert {row.outcome for row in verdict(body, {"x": x}).rows if row.what == ZEROS} == {"agrees"}
    x[3:7, 29] = 0.0
    (row,) = [row for row in verdict(body, {"x": x}).rows if row.what == ZEROS]
    assert row.note.startswith("4 values are exactly 0, the first at path 3, step 29")


def test_the_least_lengths_follow_from_the_chance_of_a_cell():
    # 1e10 values and a chance of 0.004 a step: 1e10 q^(n-1) < 1e-12 from n = 11 on, and 1e20 q^m < 1e-12 from 14 on.
    assert Repeats(0.004).stays == 1 + 10
    assert Repeats(0.004).length == 14
    assert (Repeats(1e-15).stays, Repeats(1e-15).length) == (4, 4)


def test_how_often_rounded_values_stay_is_within_the_bound(true):
    body, x = true
    repeats = plan_of(spec_of(body, PATHS, STEPS, 3)).precision[0].repeats
    share = np.count_nonzero(x[:, 1:] == x[:, :-1]) / x[:, 1:].size
    # Binomial: 59,880 steps; five standard deviations are passed with probability 3e-7.
    assert share <= repeats.chance + 5 * np.sqrt(repeats.chance / x[:, 1:].size)


@pytest.mark.parametrize("width", [1, 64, 500])
def test_the_cut_into_tiles_and_paths_does_not_show(width, monkeypatch):
    monkeypatch.setattr(copies, "KEPT", 500)
    x = np.rint(50 * np.random.default_rng(4).standard_normal((500, 40))) / 100
    x[100:130, 33] = x[100, 33]
    runs, marks = [], copies.Marks.none()
    for paths in np.split(np.arange(40), [11, 30]):
        watch = Watch(Repeats(0.01), int(paths[0]), len(paths))
        for step in range(0, 500, width):
            watch.absorb(x[step : step + width, paths])
        run, mine = watch.finish()
        runs.append(json.loads(json.dumps(run)))
        marks = mine.joined(marks)
    whole = Watch(Repeats(0.01), 0, 40)
    whole.absorb(x)
    run, expected = whole.finish()
    assert max(runs) == run and run[0] >= 30 and run[1] == -33
    assert len(expected.hashes) == 500
    for mine, theirs in zip(marks.ordered().arrays, expected.ordered().arrays, strict=True):
        np.testing.assert_array_equal(mine, theirs)


def test_parts_merge_and_travel():
    values = draw(spec_of(AR, PATHS, STEPS, 3))
    half(values["x"])
    plan = plan_of(spec_of(AR, PATHS, STEPS, 3))
    whole = gathered(plan, [(0, 0, values)])
    one = Pass(plan)
    one.absorb(0, 0, values)
    facts, arrays = one.total().state()
    again = Pass(plan).total().restore(json.loads(json.dumps(facts)), arrays)
    for part in (again, gathered(plan, cut_of(values))):
        assert notes(Verdict(list(judged(part)), 0.001)) == notes(Verdict(list(judged(whole)), 0.001))


def cut_of(values):
    for first, end in ((0, 16), (16, 64), (64, PATHS)):
        yield first, 0, {name: x[first:end] for name, x in values.items()}


HOLDING = [
    [{"hold": {"every": 10, "of": [{"white_noise": {"sd": 1}}]}}],
    [{"clip": {"of": AR, "low": 5}}],
    {"series": {"x": {"of": [{"ar": {"phi": 0.6, "sd": 0.1}}], "decimals": 1}}},
    [{"poisson": {"mean": 2}}],
    [{"white_noise": {"sd": 1, "law": {"empirical": {"values": [1, 2.5, 4, 7.1]}}}}],
]


@pytest.mark.parametrize("body", HOLDING, ids=["hold", "clip", "coarse", "counts", "few values"])
def test_what_may_stay_is_not_asked(body):
    found = plan_of(spec_of(body, 10, 50, 1)).precision[0]
    assert found.repeats is None


@pytest.mark.parametrize("family", sorted(FAMILIES))
def test_no_family_repeats_by_chance(family):
    from tests.studies.families import stated

    spec = spec_of(stated(family, 200), 64, 200, 11)
    plan = plan_of(spec)
    values = draw(spec)
    for column, what in enumerate(plan.precision):
        if what.repeats is None:
            continue
        watch = Watch(what.repeats, 0, 64)
        watch.absorb(np.ascontiguousarray(values[what.name].T))
        run, marks = watch.finish()
        found = checks(what.name, what.repeats, run, marks, np.arange(64), np.arange(64))
        assert [row.note for row in found if row.outcome == "departs"] == [], column
        assert what.repeats.chance > 1e-9 or not np.count_nonzero(values[what.name][:, 1:] == 0.0), column
