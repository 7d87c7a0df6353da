"""Curves so flat that double precision has one value for many: what is true of them is not called departing.

How far digits reach is held against mpmath; the specs are their own reference. Seeds are fixed.
"""

import mpmath
import numpy as np
import pytest

import procgen as pg
from procgen.checks.atoms import flattened
from procgen.terms.combine import Exp
from procgen.terms.shape import Sigmoid


def body(sd, level):
    return [{"ar": {"phi": 0.5, "sd": sd}}, {"constant": level}]


def spec(of, seed=1, paths=300):
    return {"procgen": 1, "seed": seed, "paths": paths, "time": {"steps": 40}, "series": {"x": of}}


AR = {"ar": {"phi": 0.5, "sd": 5}}
FLAT = {
    "an exponential of nothing": [{"exp": body(100, -4400)}],
    "an exponential of little": [{"exp": body(3, -740)}],
    "an exponential that is one number": [{"exp": body(1, -800)}],
    "a sigmoid at its level": [{"sigmoid": body(1, 60)}],
    "a sigmoid near its level": [{"sigmoid": body(1, 34)}],
    "a sigmoid of large bodies": [{"sigmoid": body(500, 0)}],
    "a sigmoid at its lower level": [{"sigmoid": {"of": body(1, -40), "low": 5, "high": 6}}],
    "a sigmoid at 0": [{"sigmoid": body(1, -720)}],
    "a sigmoid of a walk": [{"sigmoid": [{"random_walk": {"sd": 30}}]}],
}
HELD = [{"max": {"of": [{"logit": [{"sigmoid": [AR]}]}], "and": [{"constant": 30}]}}]


@pytest.mark.parametrize("name", FLAT)
def test_what_is_flat_does_not_depart(name):
    said = pg.theory(spec(FLAT[name]))["x"]
    assert said.marginal(39) is None and "double precision" in said.reason("marginal")
    assert pg.validate(pg.render(spec(FLAT[name]))).agrees is None


def test_what_is_held_by_a_bend_without_moments_does_not_depart():
    assert pg.validate(pg.render(spec(HELD))).agrees is None


PRICE = {"merton": {"drift": 0.001, "sd": 0.01, "rate": 0.02, "jump_mean": -0.02, "jump_sd": 0.05, "start": 100}}
RARE = {"intermittent": {"share": 0.2, "stay": 3, "size": 12, "sd": 6}}


@pytest.mark.parametrize("of", [{"floor": {"of": [PRICE], "to": 20}}, {"difference": {"of": [RARE], "by": 4}}])
def test_paths_that_are_equal_now_and_then_are_no_copies(of):
    """Prices in steps far wider than they move, and demand that comes so seldom that two paths may have none."""
    one = spec([of], paths=600)
    assert len(np.unique(pg.render(one)["x"], axis=0)) < 600
    assert "departs" not in pg.validate(pg.render(one)).counts


@pytest.mark.parametrize("of", [{"exp": body(1, -300)}, {"sigmoid": body(1, 20)}, {"sigmoid": body(1, -40)}])
def test_what_is_not_flat_is_judged_and_its_copies_are_found(of):
    one = spec([of])
    values = pg.render(one).to_pandas()
    assert pg.validate(values, one).agrees
    values.loc[values["path"] == 7, "x"] = values.loc[values["path"] == 3, "x"].to_numpy()
    assert any(row.what == "copied paths" and row.outcome == "departs" for row in pg.validate(values, one).rows)


def test_noise_beside_what_is_flat_parts_its_paths():
    one = spec([*FLAT["a sigmoid at its level"], {"white_noise": {"sd": 1}}])
    assert flattened(pg.theory(one), "x", 40)
    values = pg.render(one).to_pandas()
    values.loc[values["path"] == 7, "x"] = values.loc[values["path"] == 3, "x"].to_numpy()
    assert any(row.what == "copied paths" and row.outcome == "departs" for row in pg.validate(values, one).rows)


@pytest.mark.parametrize(("low", "high"), [(0.0, 1.0), (0.0, 500.0), (5.0, 6.0), (-1.0, 0.0), (-3.0, 40.0)])
def test_how_far_a_sigmoid_tells(low, high):
    term = Sigmoid({"low": low, "high": high})
    with mpmath.workdps(60):
        for end, level in zip(term.told, (low, high), strict=True):
            for x, within in ((end * 0.999, 0.1), (end * 0.7, 1e-3)):
                exact = low + (high - low) / (1 + mpmath.exp(-mpmath.mpf(x)))
                left, stored = float(abs(exact - level)), abs(term.of_value(np.array([x]))[0] - level)
                assert stored == pytest.approx(left, rel=within)
            beyond = term.of_value(np.array([end - 4.0, end + 4.0]))
            coarse = np.abs(beyond - level) / float((high - low) / (1 + mpmath.exp(abs(end) + 4)))
            assert abs(coarse[0 if end < 0 else 1] - 1.0) > 0.03


def test_how_far_an_exponential_tells():
    least = Exp.told[0]
    with mpmath.workdps(60):
        exact = mpmath.exp(least - 20)
        stored = np.exp([least, least - 20])
        assert float(mpmath.mpf(stored[0]) / mpmath.exp(least) - 1) == pytest.approx(0.0, abs=1e-15)
        assert abs(float(mpmath.mpf(stored[1]) / exact - 1)) > 1e-9
