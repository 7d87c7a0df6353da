"""Hamilton's model of US output against the series that it was estimated from, and the recessions that the NBER dates.

One realisation of 135 quarters tells little: at the level used here (2e-8 a test) it could not even tell the growth
rates from independent ones. What can be shown: that the theory of the spec is that of the source, that its numbers
are those at which statsmodels and E-views see the best likelihood, and that the dated recessions come and last as the
chain says, which they do not by independent quarters.

Data: US GNP growth 1951Q2–1984Q4 and NBER recessions, in the tests of statsmodels (BSD-3).
"""

from __future__ import annotations

import ast
from pathlib import Path

import numpy as np
import pytest
import scipy.stats
import statsmodels.tsa.regime_switching as switching
from statsmodels.tsa.arima_process import arma_acovf
from statsmodels.tsa.regime_switching.markov_autoregression import MarkovAutoregression

import procgen as pg

from .test_published_series import SPECS, chance_of_memory, whitened

# Chance that a true model fails one of the four tests of chance below: 4 × 2e-8 = 8e-8 of the suite's 1e-6.
LEVEL = 2e-8
QUARTERS = np.arange(135)
PHI = (0.014, -0.058, -0.247, -0.213)


def packaged(name: str) -> np.ndarray:
    """A list of numbers in statsmodels' test of the model, read from its text: that module wants its own markers."""
    text = (Path(switching.__file__).parent / "tests" / "test_markov_autoregression.py").read_text(encoding="utf-8")
    lists = [n.value for n in ast.parse(text).body if isinstance(n, ast.Assign) and n.targets[0].id == name]
    return np.array(ast.literal_eval(lists[0]), float)


@pytest.fixture(scope="module")
def output() -> np.ndarray:
    """Growth of US GNP, per cent a quarter."""
    return packaged("rgnp")


@pytest.fixture(scope="module")
def dated() -> np.ndarray:
    """1 in the quarters that the NBER dates as recessions."""
    return packaged("rec")


@pytest.fixture(scope="module")
def theory():
    return pg.theory(pg.load(SPECS / "us-output.yaml"))


def moments(series) -> tuple[np.ndarray, np.ndarray]:
    """Mean (135,) and covariance (135, 135) that the theory states."""
    return series.mean(QUARTERS), series.covariance(QUARTERS[:, None], QUARTERS[None, :])


def chance_of_mean(x: np.ndarray, mean: np.ndarray, covariance: np.ndarray) -> float:
    """Two-sided p of the mean over time, normal to first order."""
    return 2 * scipy.stats.norm.sf(abs((x - mean).sum()) / np.sqrt(covariance.sum()))


def test_the_packaged_output_is_the_known_one(output, dated):
    assert (len(output), output[0], output[-1]) == (135, 2.59316421, 0.14802167)
    assert (len(dated), dated.sum()) == (135, 27)


def test_theory_of_the_model_of_output(theory):
    # Hamilton (1989), Table I; a switching mean and an autoregression are independent, so their moments add up:
    # Timmermann (2000) for the first, statsmodels for the second.
    p, q, step = 0.9049, 0.755, 1.1643 + 0.3577
    share = (1 - p) / (2 - p - q)
    switching = share * (1 - share) * step**2 * (p + q - 1) ** np.arange(12)
    around = arma_acovf([1, *(-c for c in PHI)], [1], nobs=12, sigma2=0.769**2)
    growth, recession = theory["growth"], theory["recession"]
    assert growth.mean([0, 134]) == pytest.approx([1.1643 - share * step] * 2, rel=1e-12)
    assert growth.autocovariance(np.arange(12)) == pytest.approx(switching + around, rel=1e-9, abs=1e-12)
    assert growth.stationarity.verdict == recession.stationarity.verdict == "strictly stationary"
    assert recession.mean([3])[0] == pytest.approx(0.279623640, abs=5e-10)
    cross = theory.cross("growth", "recession").covariance([5, 9], [5, 5])
    assert cross == pytest.approx(-share * (1 - share) * step * np.array([1, (p + q - 1) ** 4]), rel=1e-10)


def test_the_printed_estimates_are_the_best_ones(output):
    # E-views (in statsmodels' tests) finds a log likelihood of -181.26339 at its own estimates: none is better.
    model = MarkovAutoregression(output, k_regimes=2, order=4, switching_ar=False)
    printed = model.loglike(np.r_[0.755, 1 - 0.9049, -0.3577, 1.1643, 0.769**2, PHI])
    assert -181.264 < printed < -181.26339 + 1e-5


def test_output_whitened_by_the_theory_is_noise(theory, output):
    mean, covariance = moments(theory["growth"])
    assert chance_of_mean(output, mean, covariance) > LEVEL
    assert chance_of_memory(whitened(output, mean, covariance)) > LEVEL


def test_dated_recessions_come_and_last_as_the_chain_says(theory, dated):
    mean, covariance = moments(theory["recession"])
    assert chance_of_mean(dated, mean, covariance) > LEVEL
    assert chance_of_memory(whitened(dated, mean, covariance)) > LEVEL


def test_dated_recessions_are_not_independent_quarters(theory, dated):
    mean, covariance = moments(theory["recession"])
    assert chance_of_memory(whitened(dated, mean, np.diag(np.diag(covariance)))) < LEVEL
