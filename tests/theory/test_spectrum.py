"""Spectral densities and long-run variances against SciPy, mpmath and sums of autocovariances."""

from __future__ import annotations

import math
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import freqz

from tests.theory.brute import coefficients
from tests.theory.specs import series_of, theory_of, tolerance

F = np.linspace(0.0, 0.5, 41)
PARTIALS = st.lists(st.floats(-0.97, 0.97).map(lambda r: round(r, 3)), min_size=1, max_size=6)
SOME = settings(max_examples=25, deadline=None)


@pytest.mark.parametrize(("p", "q"), [(1, 0), (0, 1), (2, 2), (24, 0), (0, 60), (5, 12)])
def test_an_arma_against_scipy(p, q):
    """sigma^2 abs(H)^2 of scipy.signal.freqz: two-sided, per cycle (Brockwell & Davis 1991, 4.4.2, times 2 pi)."""
    rng = np.random.default_rng(p + 100 * q)
    phi, theta = coefficients(rng.uniform(-0.5, 0.5, p)), coefficients(rng.uniform(-0.5, 0.5, q))
    kind = {"arma": {"phi": list(phi), "theta": list(theta)}} if p and q else {}
    kind = kind or ({"ar": {"phi": list(phi)}} if p else {"ma": {"theta": list(theta)}})
    next(iter(kind.values()))["sd"] = 1.5
    _, response = freqz([1.0, *theta], [1.0, *(-c for c in phi)], 2 * np.pi * F)
    np.testing.assert_allclose(series_of(kind).spectral_density(F), 2.25 * np.abs(response) ** 2, rtol=1e-10)


@SOME
@given(PARTIALS, PARTIALS)
def test_an_arma_near_its_border_against_high_precision(partials, others):
    """The ratio of polynomials in 40 digits; kappa is what evaluating both magnifies rounding by."""
    phi, theta = coefficients(partials), coefficients(others)
    found = series_of({"arma": {"phi": list(phi), "theta": list(theta), "sd": 1.0}}).spectral_density(F[::8])
    with mpmath.workdps(40):
        for f, value in zip(F[::8], found, strict=True):
            z = mpmath.expjpi(-2 * mpmath.mpf(float(f)))
            above, below = ([1, *theta], [1, *(-c for c in phi)])
            top, bottom = (mpmath.fsum(c * z**k for k, c in enumerate(part)) for part in (above, below))
            exact = abs(top / bottom) ** 2
            kappa = sum(map(abs, above)) / abs(top) + sum(map(abs, below)) / abs(bottom)
            assert abs(value - exact) <= tolerance(float(kappa)) * exact


def test_the_long_run_variance_is_exact():
    """(sigma (1 + sum theta) / (1 - sum phi))^2 in rational numbers, and 0 for a difference."""
    x = series_of({"arma": {"phi": [0.5, 0.25], "theta": [0.5], "sd": 2}})
    assert x.long_run_variance == float((2 * Fraction(3, 2) / (1 - Fraction(3, 4))) ** 2)
    assert series_of({"difference": [{"ar": {"phi": 0.5, "sd": 1}}]}).long_run_variance == 0.0


def test_correlated_parts_against_their_autocovariances():
    """Cov of x = u + 2 v, u an AR(1) and v an MA(1) with shocks of correlation 0.4, added up from their weights."""
    rest = {"correlation": [{"between": ["x.ar", "x.ma"], "value": 0.4}]}
    x = series_of({"ar": {"phi": 0.7, "sd": 1}}, {"ma": {"theta": 0.5, "sd": 1}, "times": 2}, **rest)
    psi = np.stack([0.7 ** np.arange(400), np.array([2.0, 1.0, *[0.0] * 398])])
    both = np.array([[1.0, 0.4], [0.4, 1.0]])
    gamma = np.array([np.einsum("ij,it,jt->", both, psi[:, h:], psi[:, : 400 - h]) for h in range(120)])
    expected = gamma[0] + 2 * np.cos(2 * np.pi * np.outer(F, np.arange(1, 120))) @ gamma[1:]
    np.testing.assert_allclose(x.spectral_density(F), expected, rtol=1e-12)
    assert x.long_run_variance == pytest.approx(expected[0], rel=1e-12)


def test_the_integral_over_a_cycle_is_the_variance():
    """For a sum of filters, a lognormal and a chain: a Fourier sum over 4,096 frequencies, exact to what is left."""
    f = np.arange(4096) / 4096 - 0.5
    for body in (
        ({"ar": {"phi": [1.2, -0.5], "sd": 1}}, {"white_noise": {"sd": 2}}),
        ({"exp": [{"ar": {"phi": 0.8, "sd": 0.3}}]},),
        ({"flag": {"share": 0.2, "stay": 8}},),
        ({"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}},),
    ):
        x = series_of(*body)
        assert x.spectral_density(f).mean() == pytest.approx(float(x.variance(0)), rel=1e-10), body


def test_what_is_not_linear_is_added_up():
    """exp of an AR(1): sum of e^(m + v) (e^(v phi^h) - 1) (Aitchison & Brown 1957); a chain: p(1-p)(1+r)/(1-r)."""
    v, h = 0.09 / 0.36, np.arange(1, 2000)
    gamma = np.exp(v) * np.expm1(v * 0.8 ** np.append(0, h))
    x = series_of({"exp": [{"ar": {"phi": 0.8, "sd": 0.3}}]})
    assert x.long_run_variance == pytest.approx(gamma[0] + 2 * gamma[1:].sum(), rel=1e-12)
    chain = series_of({"flag": {"share": 0.2, "stay": 8}})
    p, r = 0.2, 1 - 1 / (8 * 0.8)
    assert chain.long_run_variance == pytest.approx(p * (1 - p) * (1 + r) / (1 - r), rel=1e-12)


@pytest.mark.parametrize(
    "body",
    [
        {"arfima": {"d": 0.3, "phi": 0.5, "theta": 0.2, "sd": 2}},
        {"arfima": {"d": -0.3, "sd": 2}},
        {"fractional_gaussian_noise": {"hurst": 0.8, "sd": 2}},
        {"fractional_gaussian_noise": {"hurst": 0.3, "sd": 2}},
    ],
    ids=str,
)
def test_a_long_memory_against_its_autocovariances(body):
    """Herglotz: gamma(h) is the integral of S(f) cos(2 pi f h) (Brockwell & Davis 1991, 4.3.1), by mpmath."""
    x = series_of(body, {"white_noise": {"sd": 0.5}})
    for lag in (0, 1, 7):

        def share(u, lag=lag):  # f = u^5 takes the pole away
            f = float(u**5)
            return float(x.spectral_density([f])[0]) * mpmath.cos(2 * mpmath.pi * f * lag) * 5 * u**4

        ends = [0, 0.5, 0.7, mpmath.mpf(0.5) ** 0.2]
        exact = pytest.approx(float(x.autocovariance([lag])[0]), abs=1e-11 * float(x.variance(0)))
        assert float(2 * mpmath.quad(share, ends, maxdegree=5)) == exact


def test_a_pole_from_very_near():
    """c |f|^(1-2H) (1 + O(f^2)) towards 0 (Beran 1994, eq. 2.15), down to the smallest frequencies there are."""
    x = series_of({"fractional_gaussian_noise": {"hurst": 0.8, "sd": 2}})
    f = np.array([1e-6, 1e-100, 1e-150, 1e-300])
    c = 4 * math.gamma(2.6) * math.sin(0.8 * math.pi) * (2 * math.pi) ** -0.6
    np.testing.assert_allclose(x.spectral_density(f), c * f**-0.6, rtol=1e-9)


def test_the_long_run_variance_of_a_long_memory():
    """Infinite above d = 0, 0 below, and white at H = 1/2 (Beran 1994, ch. 2)."""
    long = series_of({"arfima": {"d": 0.2, "sd": 1}})
    assert long.long_run_variance is None and "a long memory" in long.reason("long_run_variance")
    assert series_of({"arfima": {"d": -0.2, "sd": 1}}).long_run_variance == 0.0
    assert series_of({"fractional_gaussian_noise": {"hurst": 0.5, "sd": 3}}).long_run_variance == 9.0


def test_reasons_and_refusals():
    whole = theory_of(
        {
            "walk": [{"random_walk": {"sd": 1}}],
            "slow": [{"exp": [{"ar": {"phi": 0.99999, "total_sd": 0.1}}]}],
            "wild": [{"garch": {"omega": 1, "alpha": 0.5, "beta": 0.6, "allow_infinite_variance": True}}],
        }
    )
    assert whole["walk"].spectral_density([0.1]) is None
    assert whole["walk"].reason("spectral_density") == (
        "its autocovariances depend on the step: unit root in walk.random_walk"
    )
    assert whole["slow"].long_run_variance is None
    assert whole["slow"].reason("long_run_variance") == "its autocovariances have not died out after 32768 lags"
    assert whole["wild"].long_run_variance is None and "no autocovariances" in whole["wild"].reason("long_run_variance")
    with pytest.raises(ValueError, match=r"expected frequencies in cycles a step, from -0.5 to 0.5, got \[0.6\]"):
        whole["walk"].spectral_density([0.6])
