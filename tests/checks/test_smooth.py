"""Precision of what may lie on a grid as it is: nothing is said of it; a detour of what is smooth is still found.

The references are the specs themselves and casts of NumPy: common practice, no source.
"""

import numpy as np
import pytest

from procgen.checks.judgement import judged
from procgen.checks.smooth import smooth
from procgen.terms.graph import build
from tests.studies.departures import draw, spec_of, sums, verdict

AR = {"ar": {"phi": 0.8, "sd": 1}}
NOISE = {"white_noise": {"sd": 3}, "as": "noise"}
ROUNDED = {"round": {"of": [AR], "to": 0.5}}
COUNTS = {"poisson": {"mean": 4}}
FLAG = {"flag": {"share": 0.3, "stay": 3}}
CHAIN = {"chain": {"states": ["low", "high"], "durations": {"low": 4, "high": 4}}}
WHOLE = {"seasonal": {"period": 4, "profile": [0, 2, 5, 1]}}
COINS = {"white_noise": {"sd": 2, "law": {"bernoulli": {"p": 0.3}}}}
REST = {"max": {"of": [AR], "and": [{"constant": 3, "as": "floor"}]}}


def after(name, **more):
    return lambda *of: [{name: {"of": list(of), **more}}]


GRIDS = {"rounded": ROUNDED, "counts": COUNTS, "flag": FLAG, "chain": CHAIN, "coins": COINS, "at rest": REST}
SHAPES = {
    "difference": after("difference"),
    "difference of a season": after("difference", by=4),
    "integrate": after("integrate"),
    "lag": after("lag", by=2),
    "abs": after("abs"),
    "power": after("power", exponent=2),
    "rolling mean": after("rolling_mean", over=4),
    "aggregate": after("aggregate", over=2),
    "clip": after("clip", low=0, high=2),
    "hold": after("hold", every=4),
    "max": lambda x: [{"max": {"of": [x], "and": [{"constant": 1}]}}],
    "min": lambda x: [{"min": {"of": [x], "and": [{"constant": 1}]}}],
    "product": lambda x: [{"product": [x, WHOLE]}],
    "sum": lambda x: [x, WHOLE, {"constant": 3}],
    "times": lambda x: [{**x, "times": 3}],
    "schedule": lambda x: [{"schedule": {"of": [x], "until": 90, "then": [NOISE]}}],
    "regimes": lambda x: [{"regimes": {"branches": {"a": [x], "b": [{"constant": 2}]}, "durations": {"a": 5, "b": 5}}}],
    "used": lambda x: {"series": {"y": [x], "x": [{"use": "y", "times": 2}, {"constant": 1}]}},
    "used twice": lambda x: {"series": {"y": [x], "x": [{"use": "y"}, {"lag": {"of": [{"use": "y"}], "by": 1}}]}},
}
MORE = {
    "a bend less itself": {
        "series": {"y": [AR], "x": [{"use": "y"}, {"abs": {"of": [{"constant": 9}, {"use": "y"}]}, "times": -1}]}
    },
    "difference of what is held": [{"difference": {"of": [{"hold": {"of": [AR], "every": 24}}]}}],
    "a schedule of little chance": [{"schedule": {"of": [{"constant": 5}], "until": 90, "then": [NOISE]}}],
    "a product with mostly nothing": [{"product": [AR, {"seasonal": {"period": 24, "profile": [1, *[0] * 23]}}]}],
    "clipped": [{"clip": {"of": [AR], "low": 5, "high": 9}}],
    "what jumps": [{"compound_poisson": {"rate": 0.01, "sd": 1}}],
    "values drawn again": [{"moving_blocks": {"values": [1, 2, 4, 3, 2, 5, 8], "length": 2}}],
}
SMOOTH = {
    "filter": [AR],
    "with a level and a season": [{"constant": 9}, WHOLE, AR],
    "with counts": [AR, {"poisson": {"mean": 4}}],
    "difference of a walk": [{"difference": {"of": [{"random_walk": {"sd": 1}}], "by": 2}}],
    "aggregate": [{"aggregate": {"of": [AR], "over": 3}}],
    "size": [{"abs": {"of": [AR]}}],
    "product": [{"product": [{"constant": 3}, {"exp": [AR]}]}],
    "used": {"series": {"y": [AR], "x": [{"use": "y"}, {"lag": {"of": [{"use": "y"}], "by": 2}, "times": -0.5}]}},
    "regimes": [{"regimes": {"branches": {"a": [AR], "b": [NOISE]}, "durations": {"a": 5, "b": 5}}}],
}
CASES = {f"{shape} of {grid}": SHAPES[shape](GRIDS[grid]) for shape in SHAPES for grid in GRIDS} | MORE


def precision(body, values):
    """The row of a verdict; of what is judged after it nothing is worked out."""
    return next(row for row in judged(sums(body, values)) if row.series == "x" and row.what == "precision")


@pytest.mark.parametrize("case", CASES)
def test_what_may_lie_on_a_grid_is_not_accused_of_it(case):
    body = CASES[case]
    spec = spec_of(body, 60, 96, 9)
    assert not smooth(build(spec), "x", 96)
    assert precision(body, draw(spec)).outcome == "agrees"


def test_the_whole_verdict_of_differences_of_rounded_values():
    body = SHAPES["difference"](ROUNDED)
    found = verdict(body, draw(spec_of(body, 300, 96, 9)), 1e-9)
    assert not found.headline


@pytest.mark.parametrize("case", SMOOTH)
@pytest.mark.parametrize("type", [np.float16, np.float32])
def test_a_detour_of_what_is_smooth_is_found(case, type):
    body = SMOOTH[case]
    values = draw(spec_of(body, 60, 96, 9))
    assert precision(body, values).outcome == "agrees"
    values["x"] = values["x"].astype(type).astype(float)
    assert f"went through {np.dtype(type).name}" in precision(body, values).note


def test_a_lag_of_most_of_the_steps_shows_little_but_what_was_before():
    body = [{"lag": {"of": [{"random_walk": {"sd": 1}}], "by": 60}}]
    graph = build(spec_of(body, 2, 96, 1))
    assert not smooth(graph, "x", 96) and smooth(graph, "x", 120)
