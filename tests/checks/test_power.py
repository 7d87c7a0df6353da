"""The size that a check says it finds 9 times in 10 is found about that often; departures in composed specs are named.

Quick modes of tests/studies/power.py and tests/studies/departures.py. Seeds are fixed.
"""

import math

import numpy as np
import pytest
from scipy import stats

from procgen.checks import judge, power
from tests.studies import composed, departures, planted_sizes
from tests.studies import power as study

SEEDS = 150
QUICK = [
    plant
    for plant in study.PLANTS
    if plant.what in ("shocks: variance", "shocks: distribution function", "shocks: neighbouring paths")
    and plant.stated == study.noise()
]


@pytest.mark.parametrize("plant", QUICK, ids=lambda plant: plant.what)
def test_a_printed_size_is_found_nine_times_in_ten(plant):
    # Of 150 seeds at a true share of 0.9, fewer than 108 or all are found with probability below 5e-7 (SciPy).
    assert stats.binom.cdf(107, SEEDS, 0.9) + stats.binom.sf(SEEDS - 1, SEEDS, 0.9) < 5e-7
    _, hits, runs = study.caught(plant, range(1, SEEDS + 1), shape=(80, 60))
    assert runs == SEEDS
    assert 108 <= hits < SEEDS


SHAPES = {  # of planted_sizes.py
    "memory of ranks given hidden states": (80, 60),
    "another harmonic": (1, 600),
}


@pytest.mark.parametrize("by", SHAPES)
def test_a_printed_size_of_other_data_is_found_nine_times_in_ten(by):
    # Of 200 seeds at a true share of 0.9, fewer than 152 or all are found with probability below 1e-8 (SciPy).
    assert stats.binom.cdf(151, 200, 0.9) + stats.binom.sf(199, 200, 0.9) < 1e-8
    (plant,) = [plant for plant in planted_sizes.MORE if plant.by == by]
    _, hits, runs = study.caught(plant, range(1, 201), SHAPES[by])
    assert runs == 200
    assert 152 <= hits < 200


def test_half_the_size_is_not_found_nine_times_in_ten():
    # The study can fail: half the size lies more than one standard error below the point that p must pass.
    (plant,) = [plant for plant in QUICK if plant.what == "shocks: variance"]
    halved = study.Plant(plant.what, plant.probe, plant.stated, lambda d, *at: plant.plant(d / 2, *at))
    _, hits, _ = study.caught(halved, range(1, 41), shape=(80, 60))
    assert hits < 20


def test_a_gap_is_the_one_that_kolmogorovs_test_finds():
    # A shift of a normal law by d has the gap 2 Φ(d/2) − 1; the share of samples by NumPy, their p by SciPy.
    # A gap with a sharper peak is found less often: see test_kolmogorov in test_judge.py.
    n, level, runs = 1000, 1e-3, 1000
    shift = 2 * stats.norm.ppf((1 + power.gap(level, n)) / 2)
    z = np.sort(np.random.default_rng(5).standard_normal((runs, n)) + shift, axis=1)
    u = stats.norm.cdf(z)
    at = np.arange(n)
    distance = np.maximum(u - at / n, (at + 1) / n - u).max(axis=1)
    share = np.mean(stats.kstwo.sf(distance, n) <= level)
    assert 0.92 < share < 0.98  # five standard errors of a share of 0.95


def test_no_departure_is_so_large_that_it_is_missed():
    # Squares of a Laplace law, 500 of them: what is allowed for skewness and kurtosis must not outgrow the tail.
    sd = math.sqrt(5)
    z = np.arange(1.0, 40.0)
    far = [judge.sample_mean(judge.Sample(500, x * sd / math.sqrt(500), sd, 6.6, 84.7), 1.0, sd).log_p for x in z]
    far_units = [judge.unit(x, 0.01, skew=0.1, excess=0.05).log_p for x in z]
    for falling in (far, far_units):
        assert (np.diff(falling) <= 1e-9).all()
        assert falling[-1] < -10


NAMED = (
    "trend slope doubled",
    "daily peak one step late",
    "period 24 drawn as 25",
    "factor weight −3 drawn as 3",
    "arma sign of θ",
    "decimals 2 drawn as 4",
    "ma sign of θ",
    "law t(7) drawn as normal",
    "garch drawn as white noise",
    "correlation sign",
    "event ten steps late",
    "gamma shape 2.0 drawn as 2.2",
)


@pytest.mark.parametrize("name", NAMED)
def test_a_departure_in_one_term_is_found_and_named(name):
    # At 600 × 400 each of these moves its sharpest check by more than ten standard errors: missed below 1e-9.
    (case,) = [case for case in composed.CASES if case.name == name]
    verdict = departures.planted(case, 11, paths=600, steps=400)
    assert verdict.agrees is False
    assert departures.named(case, verdict), verdict.headline
