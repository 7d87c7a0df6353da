"""Every law from its textbook density in 20 digits: what theory says of shocks, and of series made of them."""

from __future__ import annotations

from functools import cache

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from procgen.theory import theory

from ..terms.helpers import graph_of

DIGITS = 20
TAILS = (1e-12, 0.03)


def two_halves(df, skew):
    """Student's t with its halves stretched (Hansen 1994, eq. 10)."""
    return lambda x: (1 + (x / (1 + skew if x >= 0 else 1 - skew)) ** 2 / df) ** (-(df + 1) / mp.mpf(2))


def normals(*parts):
    return lambda x: sum(w / s * mp.exp(-(((x - m) / s) ** 2) / 2) for w, m, s in parts)


INF = mp.inf
# spec of the law: density up to a factor, where to cut the line, moments below this order
DENSITIES = {
    "normal": (normals((1, 0, 1)), (-INF, -3, 0, 3, INF), INF),
    "{student_t: {df: 4.5}}": (two_halves(4.5, 0), (-INF, -30, -3, 0, 3, 30, INF), 4.5),
    "{student_t: {df: 9}}": (two_halves(9, 0), (-INF, -30, -3, 0, 3, 30, INF), 9),
    "{skewed_t: {df: 7, skew: -0.4}}": (two_halves(7, -0.4), (-INF, -30, -3, 0, 3, 30, INF), 7),
    "{ged: {shape: 1.3}}": (lambda x: mp.exp(-abs(x) ** mp.mpf(1.3)), (-INF, -9, -1, 0, 1, 9, INF), INF),
    "laplace": (lambda x: mp.exp(-abs(x)), (-INF, -9, 0, 9, INF), INF),
    "logistic": (lambda x: mp.sech(x / 2) ** 2, (-INF, -20, -4, 0, 4, 20, INF), INF),
    "uniform": (lambda x: mp.mpf(1), (0, 1), INF),
    "{skew_normal: {alpha: 3}}": (
        lambda x: mp.exp(-x * x / 2) * mp.erfc(-3 * x / mp.sqrt(2)), (-INF, -2, -0.5, 0, 0.5, 2, INF), INF),
    "{gamma: {shape: 2.5}}": (lambda x: x ** mp.mpf(1.5) * mp.exp(-x), (0, 1, 5, 20, INF), INF),
    "{lognormal: {sigma: 0.7}}": (
        lambda x: mp.exp(-((mp.log(x) / mp.mpf(0.7)) ** 2) / 2) / x, (0, 0.1, 0.5, 1, 2, 9, 99, INF), INF),
    "{mixture: {weight: 0.2, ratio: 3, shift: -1}}": (
        normals((0.8, 0, 1), (0.2, -1, 3)), (-INF, -9, -3, 0, 3, 9, INF), INF),
    "{normal_mixture: {components: [{weight: 1, mean: -2}, {weight: 2, mean: 1, sd: 2}, {weight: 1, sd: 0.5}]}}": (
        normals((0.25, -2, 1), (0.5, 1, 2), (0.25, 0, 0.5)), (-INF, -5, -2, -1, 0, 1, 3, 8, INF), INF),
}  # fmt: skip
DERIVED = {law.strip("{").partition(":")[0]: "test_a_shock_of_every_law" for law in DENSITIES}


@cache
def moments(law):
    """Area below the density as written, mean, variance, excess kurtosis."""
    density, cuts, _ = DENSITIES[law]
    with mp.workdps(DIGITS):
        mass = mp.quad(density, cuts)
        mean = mp.quad(lambda v: v * density(v), cuts) / mass
        second, fourth = (mp.quad(lambda v, k=k: (v - mean) ** k * density(v), cuts) / mass for k in (2, 4))
        return mass, mean, second, float(fourth / second**2 - 3)


@pytest.mark.parametrize("law", DENSITIES)
def test_a_shock_of_every_law(law):
    """Mean, variance, excess kurtosis, squares, highest moment, tails and quantiles of 5 - 2 z, z drawn by the law."""
    density, cuts, highest = DENSITIES[law]
    graph = graph_of(f"  x: [{{constant: 5}}, {{white_noise: {{sd: 2, law: {law}}}, times: -1}}]")
    x = theory(graph.spec, graph)["x"]
    mass, mean, variance, excess = moments(law)
    assert x.excess_kurtosis == pytest.approx(excess, rel=1e-9, abs=1e-12)
    squares = x.autocovariance_of_squares([0, 1, 10_000])
    np.testing.assert_allclose(squares, [16 * (excess + 2), 0, 0], rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(x.autocovariance([0, 1, 10_000]), [4, 0, 0], rtol=1e-14)
    assert x.highest_moment == highest and x.mean(3) == 5.0
    with mp.workdps(DIGITS):
        marginal, sd = x.marginal(0), mp.sqrt(variance)
        for p in TAILS:
            for value, upper in ((marginal.ppf(p), True), (marginal.isf(p), False)):  # 5 - 2 z is low where z is high
                at = mean + sd * (5 - mp.mpf(float(value))) / 2
                inside = [c for c in cuts if (c > at if upper else c < at)]
                area = mp.quad(density, [at, *inside] if upper else [*inside, at]) / mass
                assert float(area) == pytest.approx(p, rel=2e-9)


@settings(max_examples=8, deadline=None, derandomize=True)
@given(st.sampled_from(sorted(DENSITIES)), st.floats(-0.95, 0.95), st.floats(-1.5, 1.5))
def test_an_arma_of_any_law(law, phi, theta):
    """E (x - m)^4 by summing powers of psi(j) = phi^(j-1) (phi + theta): geometric series; one law, one number."""
    highest, (*_, excess) = DENSITIES[law][2], moments(law)
    graph = graph_of(f"  x: {{arma: {{phi: {phi!r}, theta: {theta!r}, sd: 1, law: {law}}}}}")
    x = theory(graph.spec, graph)["x"]
    with mp.workdps(DIGITS):
        a, b = mp.mpf(phi), mp.mpf(phi) + mp.mpf(theta)
        squares, powers = 1 + b**2 / (1 - a**2), 1 + b**4 / (1 - a**4)
        # psi(0)^2 psi(h)^2 + sum over j >= 1 of psi(j)^2 psi(j + h)^2
        pairs = [b**2 * a ** (2 * (h - 1)) + b**4 * a ** (2 * h) / (1 - a**4) for h in (1, 5)]
        gamma = [b * a ** (h - 1) + b**2 * a**h / (1 - a**2) for h in (1, 5)]
        exact = [float(2 * g**2 + excess * p) for g, p in zip(gamma, pairs, strict=True)]
        assert x.variance(0) == pytest.approx(float(squares), rel=1e-12)
        assert x.excess_kurtosis == pytest.approx(excess * float(powers / squares**2), rel=1e-9, abs=1e-12)
    found = x.autocovariance_of_squares([1, 5])
    np.testing.assert_allclose(found, exact, rtol=0, atol=1e-9 * (2 + abs(excess)) * float(squares) ** 2)
    assert x.highest_moment == highest
