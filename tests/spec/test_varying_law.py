"""Numbers of laws drawn by series: as if each series had them written in; by path they are refused."""

from __future__ import annotations

import copy

import pytest

import procgen as pg
from procgen.chance.laws import LAWS
from procgen.spec.meaning import changes
from procgen.spec.model import SpecError
from procgen.spec.reader import read_raw
from procgen.terms import catalogue
from procgen.terms.by_path import varied_of
from procgen.terms.graph import build

BY_SERIES = {"draw": {"uniform": [4, 12]}, "over": "series"}
RAW = {
    "procgen": 1,
    "seed": 4,
    "paths": 20,
    "time": {"steps": 30},
    "parameters": {"tail": BY_SERIES},
    "series": {
        "a": [{"white_noise": {"sd": 1, "law": {"student_t": {"df": {"parameter": "tail"}}}}}],
        "b": [{"ar": {"phi": 0.4, "sd": 1, "law": {"student_t": {"df": {"parameter": "tail"}}}}}],
        "c": [{"random_walk": {"sd": 1, "law": {"student_t": {"df": BY_SERIES}}}}],
        "d": [{"ar": {"phi": {"draw": {"uniform": [0.1, 0.9]}, "over": "path"}, "sd": 1, "law": "laplace"}}],
    },
}  # fmt: skip
PLACES = {"a": ("white_noise", "tail"), "b": ("ar", "tail"), "c": ("random_walk", "random_walk.law.df")}


def spec_of(raw):
    return read_raw(raw, catalogue(), LAWS)


def test_each_series_has_the_law_that_its_draw_says():
    spec = spec_of(RAW)
    constants, written = varied_of(build(spec)).constants, copy.deepcopy(RAW)
    assert set(constants) == {f"{name}.{key}" for name, (_, key) in PLACES.items()}
    assert len({round(value, 6) for value in constants.values()}) == 3 and all(4 < v < 12 for v in constants.values())
    for name, (kind, key) in PLACES.items():
        written["series"][name][0][kind]["law"] = {"student_t": {"df": constants[f"{name}.{key}"]}}
    del written["parameters"]
    drawn, same = pg.render(spec), pg.render(spec_of(written))
    assert all((drawn[name] == same[name]).all() for name in RAW["series"])
    assert pg.theory(spec)["a"].excess_kurtosis == pytest.approx(6 / (constants["a.tail"] - 4), rel=1e-9)


def test_another_series_moves_no_draw():
    fewer = copy.deepcopy(RAW)
    del fewer["series"]["a"], fewer["series"]["d"]
    few, all_ = pg.render(spec_of(fewer)), pg.render(spec_of(RAW))
    assert all((few[name] == all_[name]).all() for name in "bc")


def test_a_difference_is_told():
    other = copy.deepcopy(RAW)
    other["series"]["c"][0]["random_walk"]["law"]["student_t"]["df"] = {"draw": {"uniform": [5, 12]}, "over": "series"}
    (change,) = changes(spec_of(RAW), spec_of(other))
    assert change.place == "series.c.random_walk.law" and "[4, 12]" in change.old and "[5, 12]" in change.new


def test_a_column_of_a_group_is_a_number():
    body = {"white_noise": {"sd": 1, "law": {"student_t": {"df": {"column": "df"}}}}}
    raw = {name: RAW[name] for name in ("procgen", "seed", "paths", "time")}
    raw["groups"] = {"shops": {"table": {"north": {"df": 5}, "south": {"df": 9}}, "of": [body]}}
    assert [one.of[0].values["law"].df for one in spec_of(raw).series.values()] == [5.0, 9.0]


@pytest.mark.parametrize(
    ("law", "sentence"),
    [
        ({"student_t": {"df": BY_SERIES | {"over": "path"}}}, "the numbers of a law cannot vary by path"),
        ({"student_t": {"df": BY_SERIES | {"draw": {"uniform": [1.5, 12]}}}}, "expected a number above 2, got draws"),
        ({"student_t": {"df": {"parameter": "tial"}}}, "did you mean tail?"),
        ({"stable": {"alpha": BY_SERIES | {"draw": {"uniform": [1.5, 1.9]}}}}, "expected a law with a variance"),
    ],
)
def test_what_cannot_vary_is_refused_with_the_mend(law, sentence):
    raw = copy.deepcopy(RAW)
    raw["series"]["c"][0]["random_walk"]["law"] = law
    with pytest.raises(SpecError) as caught:
        spec_of(raw)
    assert sentence in str(caught.value) and len(caught.value.faults) == 1
