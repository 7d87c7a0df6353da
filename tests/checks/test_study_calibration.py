"""The study of calibration in its quick mode: no check has small p more often than it may, and a wrong one is seen.

Seeds are fixed. Each case fails under a right check with probability at most 1e-9: all of them are 1e-7 of the suite's
budget. The full study is `python tests/studies/calibration.py`.
"""

import math

import numpy as np
import pytest

from procgen.checks import judge
from tests.studies import calibration
from tests.studies.calibration import Case, of_one_number
from tests.studies.calibration_cases import CASES

CHANCE = 1e-9


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_no_check_has_small_p_more_often_than_it_may(case):
    counts = calibration.run(case, 1, calibration.quick(case))
    assert calibration.too_many(counts, CHANCE) == [], calibration.table([(case.name, counts)])


def variances(rng, count):
    return rng.chisquare(199, count) / 199


def means(rng, count):
    return rng.gamma(100, size=count) / 100 - 1  # of 100 exponentials


WRONG = {
    "variance of 200 paths by a plain z": (variances, 1.0, math.sqrt(2 / 199), lambda x: judge.unit(x, 1.0)),
    "mean of 100 exponentials by a plain z": (means, 0.0, 0.1, lambda x: judge.unit(x, 0.1)),
    "mean of 100 exponentials taken for symmetric": (
        means, 0.0, 0.1, lambda x: judge.sample_mean(judge.Sample(100, 0.1 * x, 1.0, 0.0, 0.0), 0.0, 1.0),
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", WRONG)
def test_a_wrong_tail_is_seen_to_be_wrong(name):
    draw, centre, sd, judged = WRONG[name]
    case = Case(name, 2_000_000, of_one_number(draw, lambda x: judged((x - centre) / sd), centre, sd))
    assert calibration.too_many(calibration.run(case, 1), CHANCE)


def test_edges_are_where_p_falls_to_the_level():
    edges = list(calibration._edges(lambda z: judge.unit(z, 1.0), 0.0, 1.0))
    # Two-sided normal points, by SciPy's norm.isf(level / 2).
    assert [distance for distance, _ in edges] == pytest.approx(
        [2.575829, 3.290527, 3.890592, 4.417173, 4.891638], abs=3e-5
    )


def test_what_is_untestable_counts_as_not_flagged():
    finding = judge.Finding(0.0, 9.0, 1.0, -50.0, lambda level: None, lambda level: "too few" if level < 5e-3 else None)
    counts = calibration.run(Case("few", 100, lambda rng, count: iter([(finding, count)])), 1)
    assert counts.small.tolist() == [100, 0, 0, 0, 0]
    assert "| few | 100 | · | - | - | - | - |" in calibration.table([("few", counts)])


def test_the_table_shows_observed_over_expected():
    counts = calibration.Counts(100_000, np.array([1100, 90, 12, 1, 0]), np.full(5, 100_000))
    # Clopper & Pearson's bounds by SciPy: binomtest(1100, 100_000).proportion_ci(0.999, "exact"), and so on.
    line = calibration.table([("x", counts)]).splitlines()[-1]
    assert line.startswith("| x | 100,000 | 1.10 (0.99–1.21) | 0.90 (0.62–1.26) | 1.20 (0.37–2.82) | · | · |")
