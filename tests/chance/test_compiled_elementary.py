"""exp and log, compiled: the bits of the plain form, at the ends of their range too."""

import numpy as np
import pytest

from procgen.chance.elementary import exp, log, log1p
from procgen.chance.kernel import compiling
from procgen.chance.laws import Uniform
from procgen.chance.tables import Poisson, uniforms

pytest.importorskip("numba", reason="the extra `speed` compiles them")

RNG = np.random.default_rng(5)
ENDS = [709.78, 709.79, 800.0, 801.0, -708.4, -745.1, -745.2, -801.0]
ODD = np.array([0.0, -0.0, np.inf, -np.inf, np.nan, 5e-324, 2.0**-1022, *ENDS])
WIDE = np.concatenate([RNG.normal(0, 1, 40_000), RNG.uniform(-760, 720, 40_000), RNG.normal(0, 1e-9, 1_000)])
ABOVE = np.ldexp(RNG.uniform(0.5, 1, 40_000), RNG.integers(-1020, 1024, 40_000))


def same_bits(function, x):
    with np.errstate(all="ignore"):
        plain = function(x)
        with compiling():
            compiled = function(x)
            inside = x.copy()
            if function is not uniforms:
                inside = function(inside, out=inside)
    assert np.array_equal(plain.view(np.int64), compiled.view(np.int64))
    assert function is uniforms or np.array_equal(plain.view(np.int64), inside.view(np.int64))


@pytest.mark.parametrize("x", [WIDE, np.concatenate([WIDE[:9], ODD]), ODD[:0]], ids=["wide", "odd", "0"])
def test_exp(x):
    same_bits(exp, x)


@pytest.mark.parametrize("x", [ABOVE, np.concatenate([ABOVE[:9], ODD, -ABOVE[:3]]), ODD[:0]], ids=["wide", "odd", "0"])
def test_log(x):
    same_bits(log, x)


@pytest.mark.parametrize("x", [ABOVE, np.concatenate([WIDE, ODD])], ids=["wide", "odd"])
def test_log1p(x):
    same_bits(log1p, x)


def test_uniforms_of_standardised_ones():
    """Also of what no uniform gives: those are put on the ends."""
    u = (np.floor(RNG.random(40_000) * 2.0**52) + 0.5) / 2.0**52
    z = Uniform().shocks(np.concatenate([u, [2.0**-53, 1.0 - 2.0**-53]]))
    same_bits(uniforms, z)
    same_bits(uniforms, np.array([-9.0, 9.0, np.inf, -np.inf]))
    assert np.array_equal(uniforms(z)[: len(u)], u)


@pytest.mark.parametrize("mean", [1e-4, 0.7, 40.0, 5000.0])
def test_counts_by_a_table(mean):
    table = Poisson(mean).table
    ends = [2.0**-53, 1.0 - 2.0**-53, *((table.places[:50] + 0.5) / 2.0**52), *((table.places[:50] - 0.5) / 2.0**52)]
    u = np.concatenate([RNG.random(40_000), ends])
    u = u[(u > 0.0) & (u < 1.0)]
    with compiling():
        compiled = table.counts(u)
    assert np.array_equal(compiled, table.counts(u))


def test_compiled_division_by_nothing_is_as_the_plain_one():
    from procgen.chance.kernel import kernel
    from tests.chance.test_kernel import both

    with np.errstate(divide="ignore"):
        plain, compiled = both(kernel(shares), lambda: (np.zeros((2, 3)), np.empty((2, 3))))
    assert np.array_equal(plain[1], compiled[1]) and np.isinf(plain[1]).all()


def shares(z, out):
    for t in range(z.shape[0]):
        out[t] = 1.0 / z[t]
