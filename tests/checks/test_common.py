"""A departure of a body that several series share is laid to it, not to each of them; what they do not share is not."""

import copy

import numpy as np
import pandas as pd
import pytest

from procgen.checks.common import tell, users
from procgen.checks.validate import validate
from procgen.checks.verdict import Check
from procgen.ensemble.source import read_spec
from tests.studies.departures import draw

RAW = {
    "procgen": 1,
    "seed": 3,
    "paths": 300,
    "time": {"steps": 150},
    "shared": {"weather": [{"ar": {"phi": 0.9, "total_sd": 1}}]},
    "series": {
        "load": [{"constant": 50}, {"use": "weather", "times": 6.5}, {"white_noise": {"sd": 2}}],
        "heat": [{"use": "weather", "times": -3}, {"ar": {"phi": 0.5, "sd": 1}}],
        "wind": [{"white_noise": {"sd": 1}}],
    },
}


def told(**changes):
    raw = copy.deepcopy(RAW)
    raw["shared"]["weather"][0]["ar"] |= changes.pop("weather", {})
    raw["series"]["load"][2]["white_noise"] |= changes.pop("noise", {})
    values = draw(read_spec(raw))
    path, step = np.divmod(np.arange(300 * 150), 150)
    table = pd.DataFrame({"path": path, "step": step} | {name: x.ravel() for name, x in values.items()})
    return validate(table, read_spec(RAW)).headline


@pytest.mark.parametrize(
    ("change", "kind"), [({"phi": 0.8}, "memory"), ({"total_sd": 1.15}, "spread")], ids=["its φ", "its sd"]
)
def test_a_shared_body_is_named(change, kind):
    (line,) = told(weather=change)
    assert line.startswith("weather, which load and heat share: ") and f": {kind}: " in line
    assert line.endswith("; alike in load, heat and load ~ heat")


def test_a_term_of_one_series_is_not_laid_to_the_body():
    found = told(noise={"sd": 2.5})
    assert found[0].startswith("load: ")
    assert not any("share" in line for line in found)


def test_users_are_the_series_that_use_it_themselves():
    assert users(read_spec(RAW)) == {"weather": ["load", "heat"]}
    alone = copy.deepcopy(RAW)
    alone["series"]["heat"].pop(0)
    assert users(read_spec(alone)) == {}


def test_series_that_depart_in_other_ways_are_told_each_by_itself():
    def of(series, kind):
        return [[Check(series, "x", "", kind, 0.0, 1.0, 0.1, -50.0, "departs")]]

    found = [of("a", "memory"), of("b", "spread"), of("a ~ b", "dependence")]
    assert [each.line.partition(":")[0] for each in tell(found, {"f": ["a", "b"]})] == ["a", "b", "a ~ b"]
    found = [of("a", "memory"), of("b", "memory")]  # but not their dependence
    assert [each.line.partition(":")[0] for each in tell(found, {"f": ["a", "b"]})] == ["a", "b"]
