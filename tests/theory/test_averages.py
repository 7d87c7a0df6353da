"""Averages over laws by one rule, beside SciPy's adaptive quadrature and closed forms."""

from __future__ import annotations

from itertools import pairwise
from math import gamma, pi, sqrt

import numpy as np
import pytest
from scipy import integrate, stats
from scipy.special import digamma

from procgen.chance.laws import LAWS
from procgen.theory.averages import average

LAWS_TRIED = [
    LAWS["normal"](), LAWS["student_t"](df=2.5), LAWS["skewed_t"](df=5, skew=-0.4), LAWS["ged"](shape=0.5),
    LAWS["ged"](shape=20), LAWS["uniform"](), LAWS["skew_normal"](alpha=50), LAWS["gamma"](shape=0.5),
    LAWS["gamma"](shape=1000), LAWS["lognormal"](sigma=2), LAWS["mixture"](weight=0.3, ratio=0.01, shift=8),
]  # fmt: skip


@pytest.mark.parametrize("law", LAWS_TRIED, ids=str)
def test_mean_variance_and_half_of_it_below_0(law):
    assert average(law, np.ones_like) == pytest.approx(1.0, abs=1e-9)
    assert average(law, lambda z: z) == pytest.approx(0.0, abs=2e-9)
    assert average(law, lambda z: z * z) == pytest.approx(1.0, rel=1e-8)
    distribution, low = law.distribution(), law.distribution().support()[0]
    cuts = np.maximum([-1e6, -1e4, -300, -30, -9, -1.5, -0.6, -0.05, 0], low)
    below = sum(
        integrate.quad(lambda z: np.sqrt(-z) * distribution.pdf(z), a, b, limit=400)[0] for a, b in pairwise(cuts)
    )
    assert average(law, lambda z: np.sqrt(np.maximum(-z, 0.0))) == pytest.approx(below, rel=1e-6)


def test_logarithms_in_closed_form():
    """E log z^2 of a normal is digamma(1/2) + log 2; of a standardised t(df), F-distributed squares: both digammas."""
    df = 7.0
    exact = digamma(0.5) + np.log(2.0)
    assert average(LAWS["normal"](), lambda z: np.log(z * z)) == pytest.approx(exact, rel=1e-12)
    scaled = digamma(0.5) - digamma(df / 2) + np.log(df - 2)
    assert average(LAWS["student_t"](df=df), lambda z: np.log(z * z)) == pytest.approx(scaled, rel=1e-12)


def test_high_moments_far_out():
    """E abs(z)^40 of a normal, and E abs(z)^(0.99 df) of a t, whose tail is added up over hundreds of octaves."""
    assert average(LAWS["normal"](), lambda z: z**40) == pytest.approx(float(stats.norm().moment(40)), rel=1e-12)
    df, k = 3.0, 2.97
    exact = (df - 2) ** (k / 2) * gamma((k + 1) / 2) * gamma((df - k) / 2) / (sqrt(pi) * gamma(df / 2))
    assert average(LAWS["student_t"](df=df), lambda z: np.abs(z) ** k) == pytest.approx(exact, rel=0.01)
