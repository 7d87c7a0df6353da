"""Exponentials of flags and regimes beside other chance: log levels that shift with a state.

With an independent normal y, E exp(c I + y) = (1 + p (e^c - 1)) exp(Var y / 2) (Aitchison & Brown 1957 for the second
factor), and of two steps by the joint chances of the states (Feller 1968, ch. XV), here by powers of the matrix.
"""

from __future__ import annotations

import numpy as np
import pytest

from procgen.theory import theory

from ..terms.helpers import graph_of

P = np.array([[0.9, 0.05, 0.05], [0.2, 0.8, 0.0], [0.1, 0.2, 0.7]])
LEVELS = np.array([0.0, 1.2, -0.5])
REGIMES = (
    "{regimes: {branches: {a: [{constant: 0, as: z}], b: [{constant: 1.2, as: s}], c: [{constant: -0.5, as: u}]}, "
    "transitions: [[0.9, 0.05, 0.05], [0.2, 0.8, 0], [0.1, 0.2, 0.7]]%s}}"
)
T, S = np.array([0, 3, 9, 9]), np.array([0, 1, 4, 9])


def series(text):
    graph = graph_of(text, steps=20)
    return theory(graph.spec, graph)["x"]


def moments(start, lognormal):
    """Mean at T, and covariance at T and S, of exp(level of the state) times a stationary lognormal of mean m."""
    values = np.exp(LEVELS)

    def chances(t):
        return start @ np.linalg.matrix_power(P, int(t))

    mean = np.array([chances(t) @ values for t in T]) * lognormal(0)[0]
    both = []
    for t, s in zip(T, S, strict=True):
        joint = np.diag(chances(s)) @ np.linalg.matrix_power(P, int(t - s))
        apart = (chances(t) @ values) * (chances(s) @ values) * lognormal(0)[0] ** 2
        both.append(values @ joint @ values * lognormal(t - s)[1] - apart)
    return mean, np.array(both)


def lognormal(lag):
    """E y and E y(t) y(t - lag) of exp(AR(1)), phi 0.6, sd 0.2."""
    v = 0.04 / (1 - 0.36)
    return np.exp(v / 2), np.exp(v * (1 + 0.6**lag))


@pytest.mark.parametrize("start", ["", ", start: b"])
def test_a_log_level_that_follows_a_chain(start):
    x = series(f"  x: [{{exp: [{REGIMES % start}, {{ar: {{phi: 0.6, sd: 0.2}}}}]}}]")
    first = np.array([0.0, 1.0, 0.0])
    if not start:
        values, vectors = np.linalg.eig(P.T)
        first = np.real(vectors[:, np.argmax(np.real(values))])
        first = first / first.sum()
    mean, covariance = moments(first, lognormal)
    np.testing.assert_allclose(x.mean(T), mean, rtol=1e-10)
    np.testing.assert_allclose(x.covariance(T, S), covariance, rtol=1e-9)


def test_counts_whose_rate_jumps_with_a_flag():
    """Poisson counts given a mean m: Var x = E m + Var m, and Cov x = Cov m (Cox 1955)."""
    x = series("  x: [{poisson: {mean: 5, of: [{flag: {share: 0.3, stay: 4}, times: 0.7}]}}]")
    gain, r = np.expm1(0.7), 1 - 1 / 4 - (0.3 / 0.7) / 4
    np.testing.assert_allclose(x.mean([6]), [5 * (1 + 0.3 * gain)], rtol=1e-12)
    known = 25 * gain**2 * 0.21 * r ** np.array([0, 1, 5]) + np.array([5 * (1 + 0.3 * gain), 0, 0])
    np.testing.assert_allclose(x.autocovariance([0, 1, 5]), known, rtol=1e-10)
