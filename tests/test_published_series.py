"""Two published models against the real series that they were estimated from.

One realisation cannot show that a model is right, and both models were fitted to these very data. What it can show:
that the theory of the spec is that of the model in the source, that it gives the data the likelihood that an
independent implementation gives them, and that the data, whitened by the theory, look like standard normal noise,
which they do not under a model with other dependence.

Data: statsmodels datasets `sunspots` and `nile` (public domain).
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import scipy.stats
import statsmodels.api as sm
from statsmodels.tsa.statespace.sarimax import SARIMAX

import procgen as pg

SPECS = Path(__file__).parent.parent / "specs"
YEARS = 100
# Chance that a true model fails one of the four tests of chance below: 4 × 2e-8 = 8e-8 of the suite's 1e-6.
LEVEL = 2e-8


@pytest.fixture(scope="module")
def sunspots() -> np.ndarray:
    """Annual sunspot numbers 1770–1869."""
    data = sm.datasets.sunspots.load_pandas().data
    return data.loc[data["YEAR"].between(1770, 1869), "SUNACTIVITY"].to_numpy()


@pytest.fixture(scope="module")
def nile() -> np.ndarray:
    """Annual flow of the Nile at Aswan 1871–1970, 10⁸ m³."""
    return sm.datasets.nile.load_pandas().data["volume"].to_numpy()


def moments(file: str, series: str) -> tuple[np.ndarray, np.ndarray]:
    """Mean (100,) and covariance (100, 100) that the theory of a spec states."""
    theory = pg.theory(pg.load(SPECS / file))[series]
    steps = np.arange(YEARS)
    mean, covariance = theory.mean(steps), theory.covariance(steps[:, None], steps[None, :])
    assert mean is not None and covariance is not None
    return mean, covariance


def whitened(x: np.ndarray, mean: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """Independent standard normals, one a year, if x is normal with these moments."""
    return np.linalg.solve(np.linalg.cholesky(covariance), x - mean)


def chance_of_size(z: np.ndarray) -> float:
    """Two-sided p of Σz², which is chi-square with len(z) degrees of freedom: exact."""
    law = scipy.stats.chi2(len(z))
    return 2 * min(law.cdf(z @ z), law.sf(z @ z))


def chance_of_memory(z: np.ndarray) -> float:
    """Two-sided p of Σz[t]z[t−1]/√(n−1), normal to first order (Box & Jenkins 1970, sec. 2.1.6)."""
    return 2 * scipy.stats.norm.sf(abs(z[1:] @ z[:-1]) / np.sqrt(len(z) - 1))


def log_density(x: np.ndarray, mean: np.ndarray, covariance: np.ndarray) -> float:
    return float(scipy.stats.multivariate_normal(mean, covariance).logpdf(x))


def test_the_packaged_sunspots_are_the_known_edition(sunspots):
    # Recomputed from the packaged data; the printed edition (Brockwell & Davis, problem 5.4) gives 46.93, 1382.2.
    centred = sunspots - sunspots.mean()
    g = [centred[k:] @ centred[: YEARS - k] / YEARS for k in range(3)]
    assert sunspots.mean() == pytest.approx(47.011, abs=5e-4)
    assert g[0] == pytest.approx(1385.1708, abs=5e-5)
    assert [g[1] / g[0], g[2] / g[0]] == pytest.approx([0.8063, 0.4283], abs=5e-5)


def test_theory_of_the_sunspot_model():
    # Brockwell & Davis, Introduction to Time Series and Forecasting, problem 5.4, and Yule (1927): φ and the mean.
    # The rest follows from AR(2) by Box & Jenkins (1970), sec. 3.2.4; digits recomputed in high precision.
    theory = pg.theory(pg.load(SPECS / "sunspots.yaml"))["sunspots"]
    assert theory.mean([0, 99]) == pytest.approx([46.93, 46.93], rel=1e-12)
    assert theory.autocorrelation([1, 2, 3]) == pytest.approx([0.80660955, 0.42911138, 0.05417835], abs=5e-9)
    assert theory.variance([0, 99]) == pytest.approx([289.2 * 4.7859431005] * 2, rel=1e-9)
    assert theory.stationarity.verdict == "strictly stationary"


def test_sunspots_have_the_likelihood_that_statsmodels_gives(sunspots):
    model = SARIMAX(sunspots - 46.93, order=(2, 0, 0))
    expected = model.loglike([1.318, -0.634, 289.2])
    assert log_density(sunspots, *moments("sunspots.yaml", "sunspots")) == pytest.approx(expected, rel=1e-7)


def test_sunspots_whitened_by_the_theory_are_noise(sunspots):
    mean, covariance = moments("sunspots.yaml", "sunspots")
    z = whitened(sunspots, mean, covariance)
    assert chance_of_size(z) > LEVEL
    assert chance_of_memory(z) > LEVEL


def test_sunspots_do_not_pass_as_independent_values_of_that_variance(sunspots):
    mean, covariance = moments("sunspots.yaml", "sunspots")
    z = whitened(sunspots, mean, np.diag(np.diag(covariance)))
    assert chance_of_memory(z) < LEVEL


def test_the_packaged_nile_is_the_known_one(nile):
    # Durbin & Koopman (2012), sec. 2.2.5 and their data set: 100 years from 1120 on, mean 919.35.
    assert (len(nile), nile[0], nile.mean()) == (YEARS, 1120, pytest.approx(919.35, abs=5e-3))


def test_theory_of_the_nile_model():
    # Durbin & Koopman (2012), sec. 2.10.3: variances 15099 and 1469.1. Harvey (1989), sec. 4.1: the change from year
    # to year is an MA(1) with ρ₁ = −1/(2 + q), q their ratio.
    mean, covariance = moments("nile.yaml", "flow")
    assert mean == pytest.approx(np.full(YEARS, 1120.0), rel=1e-12)
    change = np.diff(np.eye(YEARS), axis=0)
    spread = change @ covariance @ change.T
    assert np.diag(spread) == pytest.approx(np.full(YEARS - 1, 1469.1 + 2 * 15099), rel=1e-8)
    correlation = np.diag(spread, 1) / np.sqrt(np.diag(spread)[1:] * np.diag(spread)[:-1])
    assert correlation == pytest.approx(np.full(YEARS - 2, -0.476804002), abs=5e-9)
    assert np.diag(spread, 2) == pytest.approx(np.zeros(YEARS - 3), abs=1e-6)


def test_nile_has_the_likelihood_that_statsmodels_gives(nile):
    model = sm.tsa.UnobservedComponents(nile, "local level")
    model.ssm.initialize_known(np.array([1120.0]), np.zeros((1, 1)))
    model.ssm.loglikelihood_burn = 0
    expected = model.loglike([15099.0, 1469.1])
    assert log_density(nile, *moments("nile.yaml", "flow")) == pytest.approx(expected, rel=1e-7)


def test_nile_whitened_by_the_theory_is_noise(nile):
    z = whitened(nile, *moments("nile.yaml", "flow"))
    assert chance_of_size(z) > LEVEL
    assert chance_of_memory(z) > LEVEL


def test_nile_does_not_pass_as_noise_about_a_level_that_stays(nile):
    mean, covariance = moments("nile.yaml", "flow")
    z = whitened(nile, mean, np.full_like(covariance, 0.0) + np.diag(np.full(YEARS, covariance[0, 0])))
    assert chance_of_size(z) < LEVEL
