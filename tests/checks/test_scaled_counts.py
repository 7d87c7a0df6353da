"""Counts on a scale that is no power of two, rounded to float32 or decimals: their ranks are those of the counts."""

import numpy as np
import pandas as pd
import pytest

import procgen as pg
from procgen.checks.special import strayed
from procgen.terms.graph import build
from procgen.theory import theory

COUNTS = {"inar": {"alpha": 0.5, "mean": 4}}


def spec(of, **said):
    raw = {"procgen": 1, "seed": 3, "paths": 200, "time": {"steps": 60}, "series": {"x": {"of": of, **said}}}
    return pg.load(raw)


def scaled(factor, *beside):
    return [{"product": [COUNTS, {"constant": factor}]}, *beside]


def off(given, grain):
    graph = build(given)
    return strayed(graph, "x", theory(given, graph)["x"], grain, given.time.steps)


@pytest.mark.parametrize(
    ("of", "said"),
    [
        (scaled(0.1), {"type": "float32"}),
        (scaled(0.3, {"trend": {"level": 1e4, "slope": 0.01}}), {"type": "float32"}),
        (scaled(1.73), {"decimals": 1}),
        ([{"integrate": {"of": scaled(0.1), "start": 0}}], {"type": "float32"}),
    ],
)
def test_shocks_are_judged_as_those_of_doubles_are(of, said):
    """Level: false alarm 1e-8 each."""
    given, doubles = spec(of, **said), spec(of)
    found = [r for r in pg.validate(pg.render(given), false_alarm=1e-8).rows if r.what.startswith("shocks")]
    expected = [r for r in pg.validate(pg.render(doubles), false_alarm=1e-8).rows if r.what.startswith("shocks")]
    assert [(r.what, r.probe) for r in found if r.kind == "memory"] == [
        (r.what, r.probe) for r in expected if r.kind == "memory"
    ]
    assert len(found) > 20 and all(row.outcome != "departs" for row in found)


def test_other_counts_are_found():
    given = spec(scaled(0.1), type="float32")
    other = np.random.default_rng(5).poisson(4, (200, 60))  # the same law, and no memory
    path, step = np.divmod(np.arange(other.size), 60)
    table = pd.DataFrame({"path": path, "step": step, "x": (0.1 * other).astype(np.float32).ravel()})
    verdict = pg.validate(table, given)
    assert verdict.agrees is False
    assert any(row.what == "shocks: autocorrelation" and row.outcome == "departs" for row in verdict.rows)


def test_how_far_rounding_brings_counts_is_half_a_grain_over_the_scale():
    assert off(spec(scaled(0.1), type="float32"), 1e-3) == pytest.approx(5e-3)
    summed = spec([{"integrate": {"of": scaled(0.1), "start": 0}}], type="float32")
    assert off(summed, 1e-3) == pytest.approx(1e-2)  # the ends of a step, each half a grain off
    assert off(spec([{"exp": scaled(0.1)}], type="float32"), 1e-3) == np.inf


def test_counts_that_rounding_mixes_have_no_ranks():
    note = "rounded after they were changed: what lies behind them is not known"
    for of, said in (
        (scaled(0.25), {"decimals": 1}),
        (scaled(0.1, {"trend": {"level": 1e6, "slope": 1}}), {"type": "float32"}),
    ):
        given = spec(of, **said)
        rows = pg.validate(pg.render(given), false_alarm=1e-8).rows
        assert any(row.note.endswith(note) or "too coarse" in row.note for row in rows)
        assert not any(row.what == "shocks: autocorrelation" for row in rows)
