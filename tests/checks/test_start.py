"""A start that is not the stationary one is found and named, where no law and no moments of a step are at hand.

Series are drawn by plain NumPy. Seeds are fixed.
"""

import numpy as np
import pytest

from procgen.checks.start import differences
from procgen.checks.validate import plan_of
from tests.studies.departures import draw, spec_of, verdict

PATHS, STEPS = 2000, 40
GARCH = [{"garch": {"omega": 0.05, "alpha": 0.2, "beta": 0.75}}]  # no sixth moment: the variance is not judged by step
AR = [{"constant": 5}, {"ar": {"phi": 0.6, "sd": 1, "law": {"student_t": {"df": 5}}}}]
SEASON = [{"seasonal": {"period": 12, "harmonics": [{"amplitude": 2}]}}, *AR]


def garch(variance):
    """GARCH(1, 1) from a variance at step 0."""
    z = np.random.default_rng(2).standard_normal((STEPS, PATHS))
    x, h = np.empty((STEPS, PATHS)), np.full(PATHS, variance)
    for t in range(STEPS):
        h = h if t == 0 else 0.05 + 0.2 * x[t - 1] ** 2 + 0.75 * h
        x[t] = np.sqrt(h) * z[t]
    return x.T


def ar(burn):
    """5 + AR(1) whose first shock comes `burn` steps before step 0."""
    shocks = np.random.default_rng(2).standard_t(5, (burn + STEPS, PATHS)) * np.sqrt(3 / 5)
    for t in range(1, burn + STEPS):
        shocks[t] += 0.6 * shocks[t - 1]
    return 5 + shocks[burn:].T


def of_start(found):
    return found.checks[found.checks["what"] == "size of the start"]


@pytest.mark.parametrize("variance", [0.0, 0.05, 3.0])
def test_a_garch_that_starts_from_another_variance_is_named(variance):
    found = verdict(GARCH, {"x": garch(variance)})
    way = "wider" if variance > 1 else "narrower"
    assert found.headline[0].startswith(f"x: spread: the series starts {way} than it goes on (the first values' mean")


def test_an_autoregression_without_a_past_is_named():
    assert verdict(AR, {"x": ar(100)}).agrees is True
    found = verdict(AR, {"x": ar(0)})
    assert found.headline[0].startswith("x: spread: the series starts narrower than it goes on (the first values' mean")


@pytest.mark.parametrize("body, agrees", [(GARCH, None), (AR, True), (SEASON, True)], ids=["garch", "ar", "season"])
def test_a_true_start_agrees(body, agrees):
    """Of this garch no check says how large the spread is, without which there is no agreement."""
    found = verdict(body, draw(spec_of(body, PATHS, STEPS, 4)))
    assert found.agrees is agrees
    assert of_start(found)["outcome"].tolist() == ["agrees"]


@pytest.mark.parametrize(
    "body",
    [
        [{"white_noise": {"sd": 1, "law": {"student_t": {"df": 5}}}}],  # its law is known
        [{"ar": {"phi": 0.6, "sd": 1}}],  # and so is a normal one
        [{"garch": {"omega": 0.05, "alpha": 0.2, "beta": 0.75, "before": {"variance": 3, "shocks": [2]}}}],
        [{"random_walk": {"sd": 1, "law": {"student_t": {"df": 5}}}}],
    ],
    ids=["law known", "normal", "given start", "walk"],
)
def test_it_is_asked_only_where_the_start_is_the_stationary_one_and_its_law_not_known(body):
    assert plan_of(spec_of(body, PATHS, STEPS, 1)).starts == []


def test_differences_are_those_of_a_hand():
    rows = [[1.0, 0.0, 9.0, 9.0, 2.0, 0.0], [3.0, -1.0, 0.0, 0.0, 1.0, 3.0], [np.nan, 0.0, 0.0, 0.0, 0.0, 0.0]]
    found = differences(np.array(rows), 4.0)
    assert found[:2] == pytest.approx([(1 / 5 - 1 / 2) / 2, 0.0])
    assert np.isnan(found[2])
