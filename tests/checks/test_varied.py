"""Ensembles with drawn parameters against their theory: agreement, recovered shocks, and saboteurs."""

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import procgen as pg
from procgen.chance.draws import values
from procgen.checks.parameters import areas
from procgen.spec.draws import BetaDraw, LognormalDraw, NormalDraw, UniformDraw

FALSE_ALARM = 1e-8  # each, of the suite's 1e-6


def path(law):
    return {"draw": law, "over": "path"}


RAW = {
    "seed": 12,
    "paths": 300,
    "time": {"steps": 40},
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


@pytest.mark.parametrize("wrong", [{"uniform": [0.3, 0.75]}, {"choice": [0.6]}])
def test_another_law_of_the_parameter_departs(ensemble, wrong):
    """A saboteur: paths of another coefficient's law, the same in seed and in everything else."""
    spec = pg.load({**RAW, "parameters": {"k": path(wrong)}})
    assert pg.validate(ensemble, spec, false_alarm=FALSE_ALARM).agrees is False


def test_an_ensemble_without_the_spread_between_paths_departs(ensemble):
    raw = {**RAW, "series": {"y": [{"constant": 5}, {"white_noise": {"sd": float(np.hypot(2, 1.5))}}]}}
    spec = pg.load({**RAW, "series": {"y": RAW["series"]["y"]}})
    verdict = pg.validate(pg.render(raw), spec, false_alarm=FALSE_ALARM)
    assert verdict.agrees is False


def test_parameters_are_held_against_their_laws_and_their_table(tmp_path):
    raw = {**RAW, "parameters": {"k": path({"choice": {"values": [0.4, 0.6], "weights": [3, 1]}})}}
    ensemble = pg.render(raw, out=tmp_path / "out")
    found = {row.what: row.outcome for row in pg.validate(ensemble, false_alarm=FALSE_ALARM).rows if not row.series}
    wanted = ("parameter k: share of 0.4", "parameter k: share of 0.6", "parameter k: values", "table of parameters",
              "parameter y.constant.level: distribution function")  # fmt: skip
    assert all(found[what] == "agrees" for what in wanted)
    other = pg.load({**raw, "parameters": {"k": path({"choice": [0.4, 0.6]})}})
    rows = {row.what: row for row in pg.validate(ensemble, other, false_alarm=FALSE_ALARM).rows}
    assert rows["parameter k: share of 0.4"].outcome == "departs"
    table = tmp_path / "out" / "tables" / "parameters.parquet"
    frame = pd.read_parquet(table)
    frame.loc[3, "k"] = 0.5
    frame.to_parquet(table)
    (row,) = [row for row in pg.validate(tmp_path / "out").rows if row.what == "table of parameters"]
    assert row.outcome == "departs"
    assert row.note == "tables/parameters.parquet is not what the spec draws (k); it was changed"


@pytest.mark.parametrize("law, frozen", [
    (UniformDraw((1.0, 3.0)), stats.uniform(1, 2)),
    (NormalDraw(1.0, 2.0, (0.0, 4.0)), stats.truncnorm(-0.5, 1.5, 1, 2)),
    (NormalDraw(0.0, 1.0, (7.0, 9.0)), stats.truncnorm(7, 9)),
    (LognormalDraw(2.0, 0.5), stats.lognorm(0.5, scale=2)),
    (BetaDraw(2.0, 3.0, (1.0, 5.0)), stats.beta(2, 3, 1, 4)),
], ids=lambda law: "" if hasattr(law, "ppf") else str(law))  # fmt: skip
def test_areas_are_those_of_draws(law, frozen):
    u = np.linspace(0.01, 0.99, 99)
    assert np.allclose(areas(law, values(law, u)), u, atol=1e-9)
    assert np.allclose(areas(law, frozen.ppf(u)), u, atol=1e-12)
