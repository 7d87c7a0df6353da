"""Ensembles with drawn parameters against their theory: agreement, recovered shocks, and saboteurs."""

import numpy as np
import pytest

import procgen as pg

FALSE_ALARM = 1e-8  # each, of the suite's 1e-6


def path(law):
    return {"draw": law, "over": "path"}


RAW = {
    "seed": 12,
    "paths": 400,
    "time": {"steps": 60},
    "parameters": {"k": path({"uniform": [0.3, 0.9]})},
    "series": {
        "x": [{"ar": {"phi": {"parameter": "k"}, "sd": 1}}],
        "y": [{"constant": path({"normal": {"mean": 5, "sd": 2}})}, {"white_noise": {"sd": 1.5}}],
        "z": [{"constant": {"parameter": "k"}}],
    },
}


@pytest.fixture(scope="module")
def ensemble():
    return pg.render(RAW)


def rows(verdict, series, outcome):
    return [row for row in verdict.rows if row.series == series and row.outcome == outcome]


def test_it_agrees_and_shocks_are_recovered_with_each_paths_own_parameters(ensemble):
    verdict = pg.validate(ensemble, false_alarm=FALSE_ALARM)
    assert verdict.agrees
    for series in ("x", "y"):
        assert any(row.what.startswith("shocks") for row in rows(verdict, series, "agrees"))


def test_of_a_table_the_parameters_are_not_known_and_said_so(ensemble):
    verdict = pg.validate(ensemble.to_pandas(), RAW, false_alarm=FALSE_ALARM)
    assert verdict.agrees
    (row,) = [row for row in rows(verdict, "x", "untestable") if row.what == "recovered shocks"]
    assert row.note == "the parameters of its paths are drawn, and not known of data that this spec has not drawn"


def test_the_same_process_of_another_seed_agrees_without_shocks(ensemble):
    verdict = pg.validate(ensemble, pg.load({**RAW, "seed": 13}), false_alarm=FALSE_ALARM)
    assert verdict.agrees
    assert any("not known of data" in row.note for row in rows(verdict, "x", "untestable"))


@pytest.mark.parametrize("wrong", [
    {"uniform": [0.3, 0.7]},
    {"uniform": [0.5, 0.9]},
    {"choice": [0.6]},
])  # fmt: skip
def test_another_law_of_the_parameter_departs(ensemble, wrong):
    """A saboteur: paths of another coefficient's law, the same in seed and in everything else."""
    spec = pg.load({**RAW, "parameters": {"k": path(wrong)}})
    assert pg.validate(ensemble, spec, false_alarm=FALSE_ALARM).agrees is False


def test_an_ensemble_without_the_spread_between_paths_departs(ensemble):
    raw = {**RAW, "series": {"y": [{"constant": 5}, {"white_noise": {"sd": float(np.hypot(2, 1.5))}}]}}
    spec = pg.load({**RAW, "series": {"y": RAW["series"]["y"]}})
    verdict = pg.validate(pg.render(raw), spec, false_alarm=FALSE_ALARM)
    assert verdict.agrees is False
