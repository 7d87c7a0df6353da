"""Planted departures are found and named; true ensembles are not flagged.

Seeds are fixed. A true ensemble is flagged with probability at most 0.001 under another seed; a departure of this size
is missed with probability below 1e-6 (see tests/studies/departures.py for the shares over many seeds).
"""

import numpy as np
import pytest

from tests.studies import departures, false_alarms
from tests.studies.departures import CASES, named, planted
from tests.studies.families import OFTEN

EASY = [c for c in CASES if "sum:" not in c.name]


@pytest.mark.parametrize("case", EASY, ids=lambda case: case.name)
def test_a_departure_is_found_and_named(case):
    verdict = planted(case, seed=7, paths=1000, steps=300)
    assert verdict.agrees is False
    assert named(case, verdict), verdict.headline


SHAPES = ((1, 3000), (40, 150), (1000, 60))
TRUE = [(family, SHAPES[k % 3]) for k, family in enumerate(OFTEN)]
TRUE += [(family, shape) for family in ("ar", "several") for shape in SHAPES]


@pytest.mark.parametrize(("family", "shape"), dict.fromkeys(TRUE), ids=str)
def test_true_ensembles_are_not_flagged(family, shape):
    tally = false_alarms.run(family, shape, range(3, 4))
    assert tally.runs == 1
    assert tally.flagged[0.001] == 0, tally.lines


def test_the_study_would_show_a_wrong_validator():
    # The tally itself can fail: an ensemble with 3 % too much spread is counted as flagged.
    tally = false_alarms.Tally()
    wrong = [{"white_noise": {"sd": 1.03}}]
    values = departures.draw(departures.spec_of(wrong, 500, 100, 1))
    tally.add(departures.verdict([{"white_noise": {"sd": 1}}], values))
    assert tally.flagged[0.001] == 1
    assert "flagged at 0.001:" in false_alarms.report({"wrong": tally})


def test_interval_is_clopper_and_pearson():
    # 0 of 10 at 95 %: 1 - 0.025^(1/10) = 0.30850 (Clopper & Pearson 1934).
    assert false_alarms.interval(0, 10, 0.95)[1] == pytest.approx(0.30850, abs=1e-5)


def test_a_second_seed_draws_another_ensemble():
    one, two = (departures.draw(departures.spec_of(departures.AR, 3, 5, seed))["x"] for seed in (1, 2))
    assert not np.array_equal(one, two)
