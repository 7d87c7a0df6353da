"""One series that repeats another bit for bit is named, also where shocks cannot be recovered."""

import numpy as np
import pytest

from procgen.checks.repeated import checks
from tests.studies.departures import draw, spec_of, verdict

NOISE = {"white_noise": {"sd": 1}}
SWITCHING = {"switching_noise": {"sd": {"calm": 1, "wild": 3}, "durations": {"calm": 20, "wild": 5}}}
COUNTS = {"poisson": {"mean": 2.0}}


def two(one, other=None):
    return {"series": {"x": [one], "y": [other or one]}}


def repeats(body, values):
    return [row for row in verdict(body, values).rows if row.what == "repeated series"]


@pytest.mark.parametrize("order", ["same", "next", "any"])
@pytest.mark.parametrize("term", [NOISE, SWITCHING], ids=["noise", "switching"])
def test_a_series_that_repeats_another_is_named(term, order):
    values = draw(spec_of(two(term), 200, 60, 3))
    assert [row.outcome for row in repeats(two(term), values)] == ["agrees"]
    rng = np.random.default_rng(1)
    which = {"same": np.arange(200), "next": (np.arange(200) + 1) % 200, "any": rng.permutation(200)}[order]
    values["y"] = values["x"][which]
    (row,) = repeats(two(term), values)
    assert (row.series, row.outcome) == ("x ~ y", "departs")
    assert row.note.startswith("200 paths of y repeat x bit for bit")
    if order == "same":
        assert "x ~ y: structure: 200 paths of y repeat x" in verdict(two(term), values).headline[0]


def test_counts_that_repeat_path_by_path_are_named_and_chance_is_not():
    values = draw(spec_of(two(COUNTS), 200, 60, 3))
    values["y"] = values["x"].copy()
    (row,) = repeats(two(COUNTS), values)
    assert row.outcome == "departs" and row.note.endswith("200 times in the same path")
    short = draw(spec_of(two(COUNTS), 2000, 2, 3))  # hardly a path that another one is not like
    assert [row.outcome for row in repeats(two(COUNTS), short)] == ["agrees"]


def test_twenty_paths_match_by_their_number_and_ten_may_by_chance():
    prints = np.arange(200, dtype=np.uint64).reshape(100, 2)
    for count, outcome in ((10, "agrees"), (20, "departs")):  # 1/10! = 3e-7, 1/20! = 4e-19
        prints[:count, 1] = prints[:count, 0]
        (row,) = checks([("x", "y", False)], ["x", "y"], np.arange(100), prints, {"x": 1.0, "y": 1.0})
        assert row.outcome == outcome


def test_a_series_that_is_said_to_be_another_is_let_be():
    body = {"series": {"x": [NOISE], "y": [{"use": {"name": "x"}}]}}
    assert repeats(body, draw(spec_of(body, 50, 20, 3))) == []


def test_correlated_series_are_not_copies_of_each_other():
    stated = [{"between": ["x.white_noise", "y.white_noise"], "value": 0.5}]
    body = two(NOISE) | {"correlation": stated}
    values = draw(spec_of(body, 200, 60, 3))
    assert [row.outcome for row in repeats(body, values)] == ["agrees"]
    values["y"] = draw(spec_of(two(NOISE), 200, 60, 4))["y"]
    values["y"][:100] = values["x"][:100]  # of the stated correlation, over all paths
    (row,) = repeats(body, values)
    assert row.note == "100 paths of y repeat x bit for bit, 100 times in the same path"


def test_a_table_with_a_series_twice_is_told_in_its_own_words():
    import procgen as pg

    spec = spec_of(two(NOISE), 120, 30, 3)
    frame = pg.render(spec).to_pandas()
    frame["path"] += 1000
    frame["y"] = frame["x"]
    verdict = pg.validate(frame, spec)
    assert any("120 paths of y repeat x bit for bit, 120 times in the same path" in line for line in verdict.headline)
