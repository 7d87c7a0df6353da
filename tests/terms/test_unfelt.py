"""What is stated for a time that no step has is told, in text and JSON, and nothing else is.

The reference is the values themselves: drawn without that part they are the same.
"""

import json

import pytest

import procgen as pg
from procgen.report.theory import theory_json, theory_text

TIME = {"start": "2027-01-04", "every": "1d", "steps": 50}
AR = {"ar": {"phi": 0.5, "sd": 1}}
LEVEL = {"constant": 3}


def event(**more):
    return {"event": {"size": 5, **more}}


def schedule(until, **more):
    return {"schedule": {"of": [LEVEL], "until": until, "then": [AR], **more}}


def trend(*bends):
    bent = {"bends": [{"at": at, "slope": 2 + k} for k, at in enumerate(bends)]} if bends else {}
    return {"trend": {"slope": 1, **bent}}


def flag(**span):
    return {"flag": {"spans": [span]}}


def holidays(*days, **more):
    return {"holidays": {"days": list(days), "size": 2, **more}}


# A part, one that gives the same values where it is not felt, and what is said of it.
UNFELT = [
    (event(at=50), None, "x.event begins at step 50, after the last step 49: no value shows it"),
    (event(at="2027-03-01"), None, "x.event begins at step 56, after the last step 49: no value shows it"),
    (event(at=60, shape="ramp", length=5), None, "x.event begins at step 60, after the last step 49"),
    (event(at=-3, shape="pulse", length=3), None, "x.event is over at step 0, by step 0: no value shows it"),
    (schedule(50), LEVEL, "x.schedule changes at step 50, after the last step 49: its second body is never there"),
    (schedule(-4), AR, "x.schedule has changed by step −4: its first body is never there"),
    (trend(70), trend(), "x.trend bends at step 70, after the last step 49: no value shows it"),
    (flag(**{"from": 50}), None, "x.flag is on at step 50, after the last step 49: no value shows it"),
    (flag(**{"from": -9, "until": 0}), None, "x.flag is off again at step 0, by step 0: no value shows it"),
    (holidays("2028-01-08"), None, "x.holidays has none of its days, nor one beside them, within the steps"),
]
FELT = [
    (event(at=49), None),
    (event(at=-9), None),
    (event(at=-9, shape="ramp", length=30), None),
    (event(at=-3, shape="pulse", length=4), None),
    (schedule(49), LEVEL),
    (schedule(-4, fade=10), AR),
    (trend(-20, 48), trend(-20)),
    (flag(**{"from": -9, "until": 1}), None),
    (holidays("2027-01-03", day_after=1), None),
]


def spec(*parts):
    body = [{"white_noise": {"sd": 1}}, *(part for part in parts if part)]
    return {"procgen": 1, "seed": 4, "paths": 3, "time": TIME, "series": {"x": body}}


def told(one):
    read = pg.load(one)
    th = pg.theory(read)
    in_json = json.loads(theory_json(read, th, [0], 3))["series"]["x"].get("unfelt", [])
    text = " ".join(theory_text(read, th, [0], 3).split())
    assert all(line in text for line in in_json)
    return in_json


def same(a, b):
    return (pg.render(spec(a))["x"] == pg.render(spec(b))["x"]).all()


@pytest.mark.parametrize(("part", "without", "said"), UNFELT)
def test_what_no_step_shows_is_told(part, without, said):
    assert same(part, without)
    (line,) = told(spec(part))
    assert line.startswith(said)


@pytest.mark.parametrize(("part", "without"), FELT)
def test_what_a_step_shows_is_not(part, without):
    assert not same(part, without)
    assert told(spec(part)) == []


def test_within_finer_steps_the_last_step_is_a_finer_one():
    def inside(at):
        return {"aggregate": {"of": [event(at=at)], "over": 4}}

    assert told(spec(inside(199))) == []
    assert told(spec(inside(200))) == ["x.event begins at step 200, after the last step 199: no value shows it"]
