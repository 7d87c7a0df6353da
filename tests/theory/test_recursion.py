"""Recursions in blocks against scipy.signal.lfilter, over orders below, at and above the length of a block."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import lfilter

from procgen.theory.recursion import SHORTEST, recursed
from tests.theory.brute import coefficients


@pytest.mark.parametrize(
    ("order", "steps"),
    [(0, 5), (1, 1), (3, 2), (1, 200_000), (168, 40_000), (SHORTEST - 1, 3 * SHORTEST), (1500, 4000)],
)
def test_the_same_numbers_as_lfilter(order, steps):
    """Partial autocorrelations of moderate size, so that rounding is not magnified: 1e-13 of the largest value."""
    rng = np.random.default_rng(order + steps)
    phi = coefficients(rng.uniform(-0.6, 0.6, order) / np.sqrt(order or 1))
    coming = rng.normal(size=steps)
    expected = lfilter([1.0], [1.0, *(-c for c in phi)], coming)
    np.testing.assert_allclose(recursed(phi, coming), expected, rtol=0, atol=1e-13 * np.abs(expected).max())


def test_an_explosive_recursion_ends_in_infinity_quietly():
    coming = np.zeros(3000)
    coming[0] = 1.0
    y = recursed((2.0,), coming)
    assert y[1000] == 2.0**1000 and np.isinf(y[-1])
