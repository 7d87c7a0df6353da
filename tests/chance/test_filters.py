"""Recursions of many coefficients and products of large matrices, compiled: the bits of the plain forms.

Values are held against `scipy.signal.lfilter` (SciPy reference manual) as well.
"""

import numpy as np
import pytest
from scipy.signal import lfilter

from procgen.chance import kernel
from procgen.chance.matrices import matmul
from procgen.terms.arma import inversion, recursion

pytestmark = pytest.mark.skipif(not kernel.available(), reason="compiling needs numba")

SHAPES = [(168, 3, 64, 300), (24, 0, 100, 150), (9, 60, 5, 77), (0, 60, 33, 90), (12, 12, 130, 64), (31, 2, 32, 1)]


@pytest.fixture(params=SHAPES, ids=lambda shape: "×".join(map(str, shape)))
def given(request):
    """phi, theta, past and room for values, shocks."""
    p, q, paths, steps = request.param
    rng = np.random.default_rng(7)
    phi, theta = 0.5 * rng.standard_normal(p) / max(p, 1), 0.3 * rng.standard_normal(q) / max(q, 1)
    phi[p // 3 : p // 2] = 0.0  # as in a seasonal polynomial
    x = np.zeros((p + steps, paths))
    x[:p] = rng.standard_normal((p, paths))
    return phi, theta, x, rng.standard_normal((q + steps, paths))


def bits(values):
    return values.view(np.int64)


def test_values_have_the_bits_of_the_plain_form(given):
    phi, theta, x, a = given
    plain, compiled = x.copy(), x.copy()
    recursion.plain(phi, theta, plain, a)
    with kernel.compiling():
        recursion(phi, theta, compiled, a)
    np.testing.assert_array_equal(bits(compiled), bits(plain))


def test_one_column_of_shocks_stands_for_all_paths(given):
    phi, theta, x, a = given
    plain, compiled = x.copy(), x.copy()
    recursion.plain(phi, theta, plain, a[:, :1])
    with kernel.compiling():
        recursion(phi, theta, compiled, a[:, :1])
    np.testing.assert_array_equal(bits(compiled), bits(plain))


def test_shocks_are_recovered_with_the_bits_of_the_plain_form(given):
    phi, theta, x, a = given
    recursion.plain(phi, theta, x, a)
    plain, compiled = a.copy(), a.copy()
    plain[len(theta) :] = compiled[len(theta) :] = np.nan
    inversion.plain(phi, theta, x, plain)
    with kernel.compiling():
        inversion(phi, theta, x, compiled)
    np.testing.assert_array_equal(bits(compiled), bits(plain))
    np.testing.assert_allclose(compiled, a, rtol=0, atol=1e-12)


def test_values_from_rest_are_those_of_a_library(given):
    phi, theta, x, a = given
    x[: len(phi)], a[: len(theta)] = 0.0, 0.0
    with kernel.compiling():
        recursion(phi, theta, x, a)
    expected = lfilter([1.0, *theta], [1.0, *-phi], a[len(theta) :], axis=0)
    np.testing.assert_allclose(x[len(phi) :], expected, rtol=0, atol=1e-12)


@pytest.mark.parametrize("shape", [(64, 64, 64), (70, 169, 100), (128, 65, 257)])
def test_products_have_the_bits_of_the_plain_form(shape):
    n, k, m = shape
    rng = np.random.default_rng(8)
    a, b = rng.standard_normal((k, n)).T, rng.standard_normal((k, m))  # the first is no block of memory
    plain = matmul(a, b)
    with kernel.compiling():
        compiled = matmul(a, b)
    np.testing.assert_array_equal(bits(compiled), bits(plain))
    np.testing.assert_allclose(compiled, a @ b, rtol=0, atol=1e-12)
