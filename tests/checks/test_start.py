"""A start that is not the stationary one is found and named, where no law and no moments of a step are at hand.

Series are drawn by plain NumPy. Seeds are fixed.
"""

import numpy as np
import pytest
from scipy import stats

from procgen.checks import judge
from procgen.checks.judge import Sample
from procgen.checks.planning import plan_of
from procgen.checks.start import Early, differences, from_one, stretches
from tests.studies.departures import draw, spec_of, verdict

PATHS, STEPS = 2000, 40
LONG = 300  # steps
MILD = [{"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.85}}]
GARCH = [{"garch": {"omega": 0.05, "alpha": 0.2, "beta": 0.75}}]  # no sixth moment: the variance is not judged by step
SLOW = [{"garch": {"omega": 0.01, "alpha": 0.15, "beta": 0.84}}]  # nor is its first variance forgotten
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
    way = "larger" if variance > 1 else "smaller"
    assert found.headline[0].startswith(f"x: spread: first values are mostly {way} than later ones: their ")


def test_an_autoregression_without_a_past_is_named():
    assert verdict(AR, {"x": ar(100)}).agrees is True
    found = verdict(AR, {"x": ar(0)})
    assert found.headline[0].startswith("x: spread: first values are mostly smaller than later ones: their ")


@pytest.mark.parametrize(
    "body, agrees", [(SLOW, None), (GARCH, True), (AR, True), (SEASON, True)], ids=["slow", "garch", "ar", "season"]
)
def test_a_true_start_agrees(body, agrees):
    """Of the slow garch no check says how large the spread is, without which there is no agreement."""
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


def mild(variance, seed=2):
    """GARCH(1, 1) of mean variance 1: from a variance at step 0, or after 300 steps."""
    rng, burn = np.random.default_rng(seed), 0 if variance else 300
    x, h = np.empty((LONG + burn, PATHS)), np.full(PATHS, variance or 1.0)
    for t in range(len(x)):
        x[t] = np.sqrt(h) * rng.standard_normal(PATHS)
        h = 0.05 + 0.1 * x[t] ** 2 + 0.85 * h
    return x[burn:].T


def test_a_garch_that_starts_from_its_mean_variance_on_each_path_is_named():
    found = verdict(MILD, {"x": mild(1.0)})
    said = "x: spread: paths start with variances that are not spread as those they go on with (the mean of l²/(1 + l²)"
    assert found.headline[0].startswith(said)
    assert found.checks.set_index("what").loc["size of the start", "outcome"] == "agrees"
    true = verdict(MILD, {"x": mild(None)})
    assert true.agrees is not False
    assert true.checks.set_index("what").loc["scatter of the start", "outcome"] == "agrees"


def test_the_scatter_of_the_start_has_uniform_p_values():
    """1,000 sets of 300 paths that are one t(4) times a log-normal size of each path, which all its steps share."""
    rng, p = np.random.default_rng(4), []
    for _ in range(1000):
        size = np.exp(rng.standard_normal(300))
        apart = from_one(size * np.square(rng.standard_t(4, (12, 5, 300))).mean(axis=0))
        p.append(judge.sample_mean(sample_of_rows(apart[0] - apart[1:].mean(axis=0)), 0.0).log_p)
    assert stats.kstest(np.exp(p), "uniform").pvalue > 1e-7


def sample_of_rows(x):
    d = x - x.mean()
    sd = x.std(ddof=1)
    return Sample(len(x), float(x.mean()), float(sd), float((d**3).mean() / sd**3), float((d**4).mean() / sd**4 - 3))


def test_cuts_between_tiles_leave_no_trace_and_numbers_are_those_of_a_hand():
    plan = plan_of(spec_of(MILD, 4, 128, 1)).series[0]
    x = np.random.default_rng(3).standard_normal((128, 4))
    assert stretches(128) == ([0, 120, 104, 88, 72], 8)
    found = []
    for cut in (128, 64, 5):
        early = Early(plan, 128, 4)
        for first in range(0, 128, cut):
            early.absorb(x[first : first + cut], first)
        found.append(early.differences())
    assert np.array_equal(found[0], found[1]) and np.array_equal(found[0], found[2])
    logs = [np.log(np.mean(x[first : first + 8, 0] ** 2)) for first in (0, 120, 104, 88, 72)]
    apart = [log**2 / (1 + log**2) for log in logs]
    assert found[0][0] == pytest.approx(apart[0] - np.mean(apart[1:]), rel=1e-12)
    assert from_one(np.array([0.0, 1.0, np.inf])).tolist() == [1.0, 0.0, 1.0]


@pytest.mark.parametrize("body", [AR[1:], MILD], ids=["autoregression", "garch"])
def test_the_scatter_is_asked_of_paths_that_are_long_enough(body):
    assert plan_of(spec_of(body, PATHS, 60, 1)).scattered == []
    assert plan_of(spec_of(body, PATHS, 64, 1)).scattered == [0]
    walk = [{"random_walk": {"sd": 1, "law": {"student_t": {"df": 5}}}}]
    assert plan_of(spec_of(walk, PATHS, 64, 1)).scattered == []
