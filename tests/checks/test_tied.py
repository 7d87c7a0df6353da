"""Shocks under a t copula: what is drawn agrees, and a normal copula in its place is found."""

from __future__ import annotations

import numpy as np
import pytest

import procgen as pg
from procgen.theory.ties import StudentTie

T4 = {"student_t": {"df": 4}}


def spec(value=0.5, copula=True, paths=2000, steps=500, **rest):
    item = {"between": ["x.ar", "y.white_noise"], "value": value} | ({"copula": T4} if copula else {})
    series = {"x": [{"ar": {"phi": 0.6, "sd": 1}}], "y": [{"white_noise": {"sd": 2}}]}
    raw = {"procgen": 1, "seed": 21, "paths": paths, "time": {"steps": steps}, "series": series}
    return pg.load({**raw, "correlation": [item], **rest})


def between(verdict):
    rows = verdict.checks[verdict.checks.series == "x ~ y"]
    return rows.set_index(rows.what + ", " + rows.probe)


TAILS = "shocks: both in their outer 1%, same step"
SCORES = "shocks: correlation between series, same step"


@pytest.mark.parametrize("value", [0.5, -0.7, 0.0])
def test_what_is_drawn_agrees(value):
    verdict = pg.validate(pg.render(spec(value, paths=400, steps=200)), false_alarm=1e-7)
    rows = between(verdict)
    assert verdict.agrees and rows.p[TAILS] > 1e-6 and rows.p[SCORES] > 1e-6
    tie = StudentTie(4.0, value)
    assert rows.theory[SCORES] == pytest.approx(tie.scores[0], abs=1e-3)
    assert rows.theory[TAILS] == pytest.approx(2 * StudentTie(4.0, abs(value)).joint_tail(0.01))


def test_a_normal_copula_of_the_same_correlation_is_found():
    """Also when its correlation is that which the normal scores have under the t copula: then the tails tell."""
    same_scores = round(StudentTie(4.0, 0.5).scores[0], 6)
    for value in (0.5, same_scores):
        verdict = pg.validate(pg.render(spec(value, copula=False)).to_pandas(), spec(0.5))
        assert verdict.agrees is False
        rows = between(verdict)
        assert rows.outcome[TAILS] == "departs" and rows.p[TAILS] < 1e-20
        if value == same_scores:
            assert rows.outcome[SCORES] == "agrees"


def test_sums_are_merged_and_cut_alike():
    whole = pg.validate(pg.render(spec(paths=96, steps=200)))
    data = pg.render(spec(paths=96, steps=200)).to_pandas()
    assert between(whole).estimate[TAILS] == between(pg.validate(data, spec(paths=96, steps=200))).estimate[TAILS]


def test_ways_to_the_shocks_may_settle_at_steps_far_apart():
    """garch of other decays: what came before step 0 is forgotten sooner by one; only steps that both know count."""
    series = {
        "x": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}],
        "y": [{"garch": {"sd": 1, "alpha": 0.05, "beta": 0.92}}],
    }
    item = {"between": ["x.garch", "y.garch"], "value": 0.5, "copula": T4}
    verdict = pg.validate(pg.render(spec(series=series, paths=100, steps=600, correlation=[item])), false_alarm=1e-7)
    rows = between(verdict)
    assert verdict.agrees and rows.p[TAILS] > 1e-6 and rows.p[SCORES] > 1e-6


def test_a_sum_of_several_shocks_is_not_judged_by_their_scores():
    series = {"x": [{"ar": {"phi": 0.6, "sd": 1}}, {"random_walk": {"sd": 1}}], "y": [{"white_noise": {"sd": 2}}]}
    verdict = pg.validate(pg.render(spec(series=series, paths=200, steps=100)), false_alarm=1e-7)
    rows = verdict.checks[verdict.checks.series == "x ~ y"]
    (found,) = rows[rows.what == "shocks: correlation between series"].itertuples()
    assert found.outcome == "untestable" and "not jointly normal" in found.note
    assert np.isfinite(rows[rows.what == "slope between series"].p).any() and verdict.agrees
