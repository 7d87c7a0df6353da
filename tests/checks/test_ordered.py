"""Paths whose order tells, and values that were worked on before: found, and named in plain words by the first line.

Tables are drawn by plain NumPy, with fixed seeds. Under another seed a true one is called departing with probability
0.001, and each mistake is at 10 standard errors or more.
"""

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from procgen.checks.ordered import along, natural, scores
from procgen.checks.validate import validate
from tests.studies.departures import spec_of

PATHS, STEPS = 300, 60
AR = [{"constant": 5}, {"ar": {"phi": 0.8, "sd": 1}}]
DAY = [{"seasonal": {"period": 12, "harmonics": [{"amplitude": 2, "peak": 4}]}}, {"white_noise": {"sd": 1}}]
NOISE = [{"white_noise": {"sd": 2}}]


def ar(paths, steps, seed=1):
    a = np.random.default_rng(seed).standard_normal((paths, 100 + steps))
    for t in range(1, a.shape[1]):
        a[:, t] += 0.8 * a[:, t - 1]
    return 5 + a[:, 100:]


def found(body, **values):
    paths, steps = next(iter(values.values())).shape
    path, step = np.divmod(np.arange(paths * steps), steps)
    frame = pd.DataFrame({"path": path, "step": step} | {name: x.ravel() for name, x in values.items()})
    return validate(frame, spec_of(body, paths, steps, 3))


def windows(stride):
    return np.lib.stride_tricks.sliding_window_view(ar(1, PATHS * stride + STEPS)[0], STEPS)[::stride][:PATHS]


def day(peaks, seed=2):
    noise = np.random.default_rng(seed).standard_normal((PATHS, STEPS))
    return 2 * np.cos(2 * np.pi * (np.arange(STEPS) - peaks) / 12) + noise


def drawn_by_seed(base, shift, scale):
    return np.array([scale * np.random.default_rng(base + p + shift).standard_normal(STEPS) for p in range(PATHS)])


def test_tables_that_are_as_stated_are_let_be():
    true = found({"series": {"x": AR, "y": DAY, "z": NOISE}}, x=ar(PATHS, STEPS), y=day(4), z=drawn_by_seed(0, 0, 2))
    assert true.agrees is True
    assert sum(row.what == "values some paths apart" for row in true.rows) == 3
    assert sum(row.what == "end of a path and start of the next" for row in true.rows) == 3


@pytest.mark.parametrize(
    ("body", "x", "line"),
    [
        (AR, windows(STEPS), "each path goes on where the one before ended, as windows cut from one long path do"),
        (AR, windows(20), "paths are overlapping windows of one series: each begins 20 steps after the one before"),
        (AR, stats.zscore(ar(PATHS, STEPS), axis=1), "each path has mean 0 and standard deviation 1, as if standard"),
        (AR, stats.zscore(ar(PATHS, STEPS), axis=0, ddof=1), "each step has mean 0 and standard deviation 1, as if"),
        (AR, stats.zscore(ar(PATHS, STEPS), axis=None), "all values together have mean 0 and standard deviation 1, "),
        (AR, ar(PATHS, STEPS) - ar(PATHS, STEPS).mean(axis=1, keepdims=True), "each path has mean 0, as if its own "),
        (DAY, day(np.random.default_rng(7).uniform(0, 12, (PATHS, 1))), "the season of 12 steps is in each path at a "),
        ([{"white_noise": {"sd": 0.02}}], np.round(drawn_by_seed(0, 0, 0.02), 2), "values are rounded to 2 decimals, "),
        (AR, np.round(3 * ar(PATHS, STEPS), 3), "values are rounded to 3 decimals, which is not declared; write `dec"),
    ],
    ids=["windows", "overlap", "by path", "by step", "overall", "centred", "phases", "rounded", "rounded and wide"],
)
def test_what_was_done_is_named_by_the_first_line(body, x, line):
    verdict = found({"series": {"x": body}}, x=x)
    assert verdict.agrees is False
    assert verdict.headline[0].startswith("x: structure: ") and line in verdict.headline[0]


def test_a_season_late_on_all_paths_or_a_wrong_level_is_no_such_cause():
    for body, x in ((DAY, day(6)), (AR, ar(PATHS, STEPS) + 1), (AR, 5 + 2 * (ar(PATHS, STEPS) - 5))):
        verdict = found({"series": {"x": body}}, x=x)
        assert verdict.agrees is False
        assert "structure" not in verdict.headline[0]


def test_paths_in_the_order_of_their_ends_do_not_go_on_from_each_other():
    x = ar(PATHS, STEPS)
    verdict = found({"series": {"x": AR}}, x=x[np.argsort(x[:, 0] + x[:, -1])])
    assert verdict.agrees is False
    assert verdict.headline[0].startswith("x: dependence: paths or series hang together otherwise than stated (end of")


@pytest.mark.parametrize("shift", [1, -1, 3])
def test_seeds_of_path_and_series_added_up_are_found(shift):
    x, y = drawn_by_seed(50, 0, 2), drawn_by_seed(50, shift, 3)
    verdict = found({"series": {"x": NOISE, "y": [{"white_noise": {"sd": 3}}]}}, x=x, y=y)
    assert verdict.agrees is False
    where = f"{shift:+d}".replace("-", "−")
    assert f"path p of y repeats the draws of path p{where} of x, as where a seed is the s" in verdict.headline[0]
    assert f"(values some paths apart at path {where} is " in verdict.headline[0]


def test_p_is_that_of_a_correlation_of_independent_numbers():
    # SciPy: Pearson's correlation of normal scores is about normal of variance 1/n for independent numbers.
    rng = np.random.default_rng(5)
    p = [np.exp(along(rng.exponential(size=150), rng.exponential(size=150), 1).log_p) for _ in range(2000)]
    assert stats.kstest(p, "uniform").pvalue > 1e-7
    a, b = rng.standard_normal((2, 2000))
    expected = stats.pearsonr(scores(a)[:-2], scores(b)[2:])
    found = along(a, b, 2)
    assert found.estimate == pytest.approx(expected.statistic, abs=2e-3)
    assert np.exp(found.log_p) == pytest.approx(expected.pvalue, rel=0.05)


def test_labels_are_taken_by_their_numbers():
    assert natural(["run 1", "run 10", "run 2"]) == [0, 2, 1]
    assert natural([3, 5, 9]) == [0, 1, 2]


def test_another_number_of_paths_is_told():
    spec = spec_of({"series": {"x": NOISE}}, 400, STEPS, 3)
    x = drawn_by_seed(0, 0, 2)
    path, step = np.divmod(np.arange(x.size), STEPS)
    verdict = validate(pd.DataFrame({"path": path, "step": step, "x": x.ravel()}), spec)
    assert verdict.agrees is True
    assert "paths: 300 paths, where the spec states 400: judged on those that are there" in verdict.text()
