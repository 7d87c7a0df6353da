"""Distributions of our own against those of `scipy.stats`, which is not loaded for what every call asks."""

from __future__ import annotations

import copy
import pickle
import subprocess
import sys

import numpy as np
import pytest
from scipy import stats

from procgen.chance.laws.distributions import Gaussian, Lognormal, Student

PAIRS = {
    "standard normal": (Gaussian(), stats.norm()),
    "narrow normal": (Gaussian(-3.5, 0.02), stats.norm(-3.5, 0.02)),
    "far normal": (Gaussian(1e12, 1e3), stats.norm(1e12, 1e3)),
    "lognormal": (Lognormal(0.4, 3.0, -1.5), stats.lognorm(0.4, loc=-1.5, scale=3.0)),
    "wide lognormal": (Lognormal(2.5), stats.lognorm(2.5)),
    "Student 5.5": (Student(5.5, 0.7), stats.t(5.5, scale=0.7)),
    "Student 2": (Student(2.0), stats.t(2.0)),
    "Student 0.8": (Student(0.8), stats.t(0.8)),
    "Student 300": (Student(300.0, 4.0), stats.t(300.0, scale=4.0)),
}
POINTS = np.array([-40.0, -8.3, -1.0, -1e-9, 0.0, 0.3, 2.0, 9.0, 38.5])
CHANCES = np.array([0.0, 1e-100, 1e-12, 0.03, 0.5, 0.8, 1 - 1e-12, 1.0])
pairs = pytest.mark.parametrize(("ours", "theirs"), PAIRS.values(), ids=PAIRS)


@pairs
@pytest.mark.parametrize("name", ["pdf", "logpdf", "cdf", "logcdf", "sf", "logsf", "ppf", "isf"])
def test_functions_are_those_of_scipy(ours, theirs, name):
    quarter, middle = theirs.ppf([0.25, 0.5])
    at = CHANCES if name in ("ppf", "isf") else middle + (middle - quarter) * POINTS
    np.testing.assert_allclose(getattr(ours, name)(at), getattr(theirs, name)(at), rtol=3e-13, atol=2e-16)


@pairs
def test_moments_are_those_of_scipy(ours, theirs):
    for name in ("mean", "var", "std", "median", "entropy", "support"):
        assert getattr(ours, name)() == pytest.approx(getattr(theirs, name)(), rel=1e-13, nan_ok=True)
    assert ours.interval(0.9) == pytest.approx(theirs.interval(0.9), rel=1e-13)
    assert ours.moment(3) == pytest.approx(theirs.moment(3), rel=1e-13, nan_ok=True)
    with np.errstate(invalid="ignore"):  # of moments that do not exist
        assert ours.stats("mvsk") == pytest.approx(theirs.stats("mvsk"), nan_ok=True)
    assert ours.expect(np.tanh) == pytest.approx(theirs.expect(np.tanh))
    np.testing.assert_array_equal(ours.rvs(5, random_state=3), theirs.rvs(5, random_state=3))


def test_it_is_copied_and_has_no_other_names():
    law = Gaussian(1.0, 2.0)
    assert pickle.loads(pickle.dumps(law)) == copy.copy(law) == law
    with pytest.raises(AttributeError, match="spacing"):
        _ = law.spacing


def test_asking_what_it_lacks_does_not_load_the_laws_of_scipy():
    asked = "from procgen.chance.laws.distributions import Gaussian, Lognormal, Student; import sys"
    asked += "; law = Gaussian(); law.cdf(0.1); Student(5).sf(2); Lognormal(0.3).ppf(0.1)"
    asked += "; assert getattr(law, 'spacing', None) is None; assert 'scipy.stats' not in sys.modules"
    subprocess.run([sys.executable, "-c", asked], check=True)
