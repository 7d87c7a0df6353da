"""What reads far back: long autoregressions, and operators over many steps."""

from __future__ import annotations

import time
from itertools import pairwise
from math import comb

import numpy as np
import pytest
from scipy.linalg import cholesky, toeplitz
from statsmodels.tsa.arima_process import arma_acovf

from procgen.spec.model import SpecError
from procgen.terms.start import DENSE, JointStart, Member, Predictors
from procgen.theory import theory

from .helpers import draw, graph_of

SECONDS = 8.0  # on a busy machine; each of these took minutes when every power was multiplied out


def theory_of(body):
    graph = graph_of(f"  x: {body}")
    return theory(graph.spec, graph)["x"]


def quick(f, *args, **more):
    start = time.process_time()
    out = f(*args, **more)
    assert time.process_time() - start < SECONDS
    return out


@pytest.mark.parametrize("phi", [(0.5,), (1.2, -0.4), (0.3, 0.0, -0.2, 0.4)])
def test_predictors_are_rows_of_the_cholesky_factor(phi):
    # scipy's factor of the Toeplitz matrix of statsmodels' autocovariances.
    count = 12
    gamma = 4.0 * arma_acovf([1.0, *(-c for c in phi)], [1.0], count)
    z = np.random.default_rng(3).normal(size=(count, 5))
    expected = cholesky(toeplitz(gamma), lower=True) @ z
    np.testing.assert_allclose(np.array(Predictors(phi, 2.0).draw(z)), expected, rtol=0, atol=1e-12)


def test_an_autoregression_above_the_dense_order_starts_like_one_below(monkeypatch):
    member = Member((0.4, *[0.0] * (DENSE - 3), 0.3), (), 1.5)
    z = np.random.default_rng(4).normal(size=(60, 4))
    starts, shocks = [lambda first, count: z[first : first + count]], [lambda first, count: z[:0]]
    dense, _ = JointStart([member], np.ones((1, 1))).draw(shocks, starts, 60)[0]
    monkeypatch.setattr("procgen.terms.start.DENSE", 5)
    stepped, _ = JointStart([member], np.ones((1, 1))).draw(shocks, starts, 60)[0]
    np.testing.assert_allclose(stepped, dense, rtol=0, atol=1e-12)


def test_a_long_leader_keeps_its_bits_when_another_is_correlated_with_it():
    phi = ", ".join(["0.4", *["0"] * DENSE, "0.3"])
    text = "\n".join(f"  {name}: {{ar: {{phi: [{phi}], sd: 1}}}}" for name in "xy")
    alone = draw(graph_of(text), 0, 4, [30])["x"]
    together = draw(graph_of(text, rest="correlation:\n  - {between: [x.ar, y.ar], value: 0.6}"), 0, 4, [30])
    assert np.array_equal(alone, together["x"])


def test_a_long_autoregression_begins_quickly():
    phi = ", ".join(["0.6", *["0"] * 670, "0.3"])
    graph = graph_of(f"  x: {{ar: {{phi: [{phi}], sd: 1}}}}", steps=10)
    assert np.isfinite(quick(draw, graph, 0, 10, [10])["x"]).all()


def test_absurd_orders_are_refused():
    with pytest.raises(SpecError, match="at most 5,000 coefficients"):
        graph_of(f"  x: {{ar: {{phi: [{', '.join(['0.0001'] * 5001)}], sd: 1}}}}")


def test_a_difference_far_back_is_quick_and_exact():
    x = quick(theory_of, "{difference: {of: [{white_noise: {sd: 1}}], order: 12, by: 8000}}")
    weights = [(-1) ** k * comb(12, k) for k in range(13)]
    lags = np.array([0, 1, 8000, 96000])
    expected = [sum(w * w for w in weights), 0, sum(a * b for a, b in pairwise(weights)), 1]
    np.testing.assert_allclose(quick(x.autocovariance, lags), expected, rtol=1e-15)


def test_a_difference_of_too_much_is_refused():
    with pytest.raises(SpecError, match="at most 100,000 steps read back in all"):
        graph_of("  x: {difference: {of: [{white_noise: {sd: 1}}], order: 12, by: 100000}}")
