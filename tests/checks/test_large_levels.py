"""Small moves about a large level, where double precision is a coarse grid: near 1e12 its values lie 2⁻¹³ apart."""

import numpy as np
import pandas as pd
import pytest
import yaml

import procgen as pg
from procgen.chance.laws import LAWS
from procgen.report.theory import theory_text
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from procgen.theory.doubles import rounding_of

LEVEL = 1e12
CELL = 2.0**-13  # IEEE 754: 53 bits, of which 1e12 takes 40 before the point


def spec_of(*body, paths=400, steps=60, seed=3, **declared):
    series = {"x": {"of": list(body), **declared}}
    text = yaml.safe_dump({"procgen": 1, "seed": seed, "paths": paths, "time": {"steps": steps}, "series": series})
    return read_text(text, catalogue(), LAWS)


def level(value=LEVEL):
    return {"constant": value}


def noise(sd, **more):
    return {"white_noise": {"sd": sd, **more}}


def walk(sd, **more):
    return {"random_walk": {"sd": sd, **more}}


SEASON = {"seasonal": {"period": 12, "harmonics": [{"amplitude": LEVEL}]}}
T3 = {"student_t": {"df": 3}}
JUDGED = {
    "noise of 820 cells": (level(), noise(0.1)),
    "noise of 8 cells": (level(), noise(1e-3)),
    "an autoregression of 8 cells": (level(), {"ar": {"phi": 0.8, "sd": 1e-3}}),
    "a walk from there": (walk(0.1, start=LEVEL),),
    "a walk beside it": (level(), walk(1e-3)),
    "a walk of jumps": (walk(0.1, start=LEVEL, law="laplace"),),
    "noise of heavy tails": (level(), noise(0.1, law=T3)),
    "two noises": (level(), noise(1e-3), {"ar": {"phi": 0.5, "sd": 1e-3}}),
    "a garch": (level(), {"garch": {"sd": 0.1, "alpha": 0.1, "beta": 0.8}}),
    "a season": (SEASON, noise(0.1)),
    "a clip": ({"clip": {"of": [level(), {"ar": {"phi": 0.5, "sd": 0.1}}], "low": LEVEL}},),
    "its differences": ({"difference": {"of": [level(), noise(0.1)]}},),
    "counts": (level(1e15), {"poisson": {"mean": 3}}),
    "ten cells of two": (level(1e16), noise(10)),
    "a factor": ({"product": [level(), noise(1e-3)]},),
}
HIDDEN = {
    "noise of a cell": (level(), noise(1e-4)),
    "noise within a cell": (level(), noise(1e-6)),
    "a walk of roundings": (walk(1e-3, start=LEVEL),),
    "a season of a few cells": (SEASON, noise(1e-3)),
    "logarithms of a few cells": ({"exp": [{"constant": 27.6}, noise(1e-15)]},),
    "differences of a few cells": ({"difference": {"of": [level(), noise(1e-3)]}},),
    "counts of odd numbers where none are": (level(1e16), {"poisson": {"mean": 3}}),
}


def table(x):
    paths, steps = x.shape
    return pd.DataFrame(
        {"path": np.repeat(range(paths), steps), "step": np.tile(range(steps), paths), "x": x.ravel()}
    )


@pytest.mark.parametrize("body", JUDGED.values(), ids=JUDGED)
def test_true_values_agree(body):
    """False alarms: one in 1e6 each."""
    spec = spec_of(*body)
    ensemble = pg.render(spec)
    assert pg.validate(ensemble, false_alarm=1e-6).agrees
    assert pg.validate(table(ensemble["x"]), spec, false_alarm=1e-6).agrees


@pytest.mark.parametrize("body", HIDDEN.values(), ids=HIDDEN)
def test_what_rounding_hides_is_not_judged_and_said(body):
    spec = spec_of(*body)
    verdict = pg.validate(pg.render(spec))
    assert verdict.agrees is None
    assert "double precision has values" in " ".join(verdict.text().split())
    assert "double precision has values" in " ".join(theory_text(spec, pg.theory(spec), None, 40).split())


@pytest.mark.parametrize(
    ("right", "wrong"),
    [
        ((level(), noise(0.1)), (level(), noise(0.11))),
        ((level(), noise(1e-3)), (level(), noise(1.1e-3))),
        ((level(), noise(0.1)), (level(LEVEL + 0.02), noise(0.1))),
        ((level(), noise(0.1)), (level(), noise(0.1, law=T3))),
        ((level(), {"ar": {"phi": 0.8, "sd": 1e-3}}), (level(), {"ar": {"phi": 0.7, "sd": 1e-3}})),
        ((walk(0.1, start=LEVEL),), (walk(0.1, start=LEVEL, law="laplace"),)),
    ],
)
def test_mistakes_are_still_found(right, wrong):
    assert pg.validate(table(pg.render(spec_of(*wrong))["x"]), spec_of(*right)).agrees is False


def test_decimals_that_are_not_declared_are_still_found():
    x = pg.render(spec_of(level(), noise(0.1)))["x"]
    verdict = pg.validate(table(LEVEL + np.rint((x - LEVEL) * 16) / 16), spec_of(level(), noise(0.1)))
    assert "values lie on a grid of 0.0625" in verdict.headline[0]


def test_the_cell_is_that_of_ieee_754():
    spec = spec_of(level(), noise(1e-3))
    found = rounding_of(pg.theory(spec), "x", 60)
    assert found.cell == CELL == np.spacing(LEVEL)
    assert found.share == pytest.approx(CELL / 1e-3)
    told = pg.theory(spec).as_dict([0])["series"]["x"]["rounding"]
    assert told["cell"] == CELL and told["text"].startswith("near 1e+12 double precision has values 0.000122 apart")


@pytest.mark.parametrize("body", [(level(100.0), noise(1.0)), (level(1e9), noise(1.0)), (walk(1.0, start=1e8),)])
def test_nothing_is_said_where_nothing_shows(body):
    assert rounding_of(pg.theory(spec_of(*body)), "x", 60) is None


@pytest.mark.parametrize("sd", [1e-60, 1e-40, 1e40, 1e100])
def test_values_whose_powers_no_double_holds_are_not_judged_and_the_reason_says_so(sd):
    head = {"procgen": 1, "seed": 3, "paths": 300, "time": {"steps": 100}}
    spec = head | {"series": {"x": [{"ar": {"phi": 0.7, "sd": sd}}]}}
    verdict = pg.validate(pg.render(spec))
    assert verdict.agrees is None
    assert "choose another unit" in verdict.text()
