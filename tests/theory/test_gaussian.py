"""The normal law of our own against that of `scipy.stats`, which is not loaded for what every call asks."""

from __future__ import annotations

import copy
import pickle
import subprocess
import sys

import numpy as np
import pytest
from scipy import stats

from procgen.theory.gaussian import Gaussian

LAWS = [(0.0, 1.0), (-3.5, 0.02), (1e12, 1e3)]
POINTS = np.array([-40.0, -8.3, -1.0, -1e-9, 0.0, 0.3, 2.0, 9.0, 38.5])
CHANCES = np.array([0.0, 1e-300, 1e-12, 0.03, 0.5, 0.8, 1 - 1e-12, 1.0])


@pytest.mark.parametrize("law", LAWS, ids=str)
@pytest.mark.parametrize("name", ["pdf", "logpdf", "cdf", "logcdf", "sf", "logsf", "ppf", "isf"])
def test_functions_are_those_of_scipy(law, name):
    at = CHANCES if name in ("ppf", "isf") else law[0] + law[1] * POINTS
    ours, theirs = (np.asarray(getattr(one, name)(at)) for one in (Gaussian(*law), stats.norm(*law)))
    np.testing.assert_allclose(ours, theirs, rtol=1e-14)


@pytest.mark.parametrize("law", LAWS, ids=str)
def test_moments_are_those_of_scipy(law):
    ours, theirs = Gaussian(*law), stats.norm(*law)
    for name in ("mean", "var", "std", "median", "entropy", "support"):
        assert getattr(ours, name)() == pytest.approx(getattr(theirs, name)(), rel=1e-14)
    assert ours.interval(0.9) == pytest.approx(theirs.interval(0.9), rel=1e-14)
    assert ours.moment(3) == pytest.approx(theirs.moment(3), rel=1e-14)
    assert ours.stats("mvsk") == pytest.approx(theirs.stats("mvsk"))
    assert ours.expect(lambda x: x) == pytest.approx(law[0])
    np.testing.assert_array_equal(ours.rvs(5, random_state=3), theirs.rvs(5, random_state=3))


def test_it_is_copied_and_has_no_other_names():
    law = Gaussian(1.0, 2.0)
    assert pickle.loads(pickle.dumps(law)) == copy.copy(law) == law
    with pytest.raises(AttributeError, match="spacing"):
        _ = law.spacing


def test_asking_what_it_lacks_does_not_load_the_laws_of_scipy():
    asked = "from procgen.theory.gaussian import Gaussian; import sys; law = Gaussian(); law.cdf(0.1)"
    asked += "; assert getattr(law, 'spacing', None) is None; assert 'scipy.stats' not in sys.modules"
    subprocess.run([sys.executable, "-c", asked], check=True)
