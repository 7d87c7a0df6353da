"""Whole numbers from uniforms: against SciPy's laws and mpmath's incomplete functions, down to the last uniform."""

from __future__ import annotations

import mpmath as mp
import numpy as np
import pytest
from scipy import stats

from procgen.chance import counting
from procgen.chance.laws import LAWS
from procgen.chance.tables import GRID, NegativeBinomial, Poisson, Table, Thinning, uniforms

CLAIMED = 1e-9  # of the smaller of both tail areas


def some_uniforms(seed, count=2000):
    """Ordinary uniforms, and those of both tails down to the last one."""
    rng = np.random.default_rng(seed)
    small = np.maximum(np.rint(2.0 ** -rng.uniform(1, 53, count) * 2**52), 1.0)
    grid = np.concatenate([rng.integers(0, 2**52, count), small - 1.0, 2.0**52 - small, [0.0, 2.0**52 - 1]])
    return (grid + 0.5) / GRID


def right(law, k, u, grid=0.0):
    """Whether k is the least number with P(X <= k) >= u, but for the claimed error of the nearer tail area."""
    room = CLAIMED * np.minimum(u, 1 - u) + grid
    low = (law.cdf(k) >= u - room) & (law.cdf(k - 1) < u + room)
    high = (law.sf(k) <= 1 - u + room) & (law.sf(k - 1) > 1 - u - room)
    return np.where(u < 0.5, low, high)


@pytest.mark.parametrize("mean", [1e-9, 0.001, 0.3, 4.0, 25.9, 26.0, 70.0, 400.0, 3e4])
def test_poisson_counts_are_scipys(mean):
    u = some_uniforms(1)
    assert right(stats.poisson(mean), counting.poisson(u, np.full(u.shape, mean)), u).all()


@pytest.mark.parametrize("size", [0.05, 1.0, 3.7, 60.0, 1e4])
@pytest.mark.parametrize("mean", [0.001, 0.7, 12.0, 40.0, 3e3])
def test_negative_binomial_counts_are_scipys(mean, size):
    u = some_uniforms(2, 300)
    law = stats.nbinom(size, size / (size + mean))
    assert right(law, counting.negative_binomial(u, np.full(u.shape, mean), size), u).all()


def test_areas_are_those_of_mpmath():
    """Where SciPy has lost digits itself (Poisson of mean 1e7, upper tail: its relative error is 1e-2)."""
    with mp.workdps(40):
        for mean, k in ((1e7, 10_024_006.0), (1e7, 9_980_000.0), (1e5, 98_000.0), (30.0, 3.0), (30.0, 79.0)):
            lower, upper, _ = counting._poisson_areas(np.array([k]), np.array([mean]))
            exact = mp.gammainc(mp.mpf(k) + 1, mp.mpf(mean), regularized=True)
            assert abs(lower[0] / exact - 1) < CLAIMED and abs(upper[0] / (1 - exact) - 1) < CLAIMED
        for size, mean, k in ((0.2, 1e5, 8_452_690.0), (0.2, 1e5, 300.0), (50.0, 1e5, 200_000.0), (3.0, 50.0, 1.0)):
            lower, upper, _ = counting._negative_binomial_areas(np.array([k]), np.array([mean]), size)
            share = mp.mpf(mean) / (mp.mpf(size) + mean)
            above = mp.betainc(mp.mpf(k) + 1, size, 0, share, regularized=True)
            below = mp.betainc(size, mp.mpf(k) + 1, 0, 1 - share, regularized=True)
            assert abs(lower[0] / below - 1) < CLAIMED and abs(upper[0] / above - 1) < CLAIMED


def test_counts_rise_with_the_uniform_and_their_mean():
    u = np.sort(some_uniforms(3))
    for mean in (0.5, 20.0, 26.5, 90.0, 5e3):
        assert (np.diff(counting.poisson(u, np.full(u.shape, mean))) >= 0).all()
        assert (np.diff(counting.negative_binomial(u, np.full(u.shape, mean), 2.5)) >= 0).all()
    means = np.linspace(0.01, 60.0, 5000)
    for level in (1e-9, 0.3, 0.99, 1 - 1e-12):
        assert (np.diff(counting.poisson(np.full(5000, level), means)) >= 0).all()


def test_a_count_does_not_depend_on_what_it_is_drawn_beside():
    u, mean = some_uniforms(4), np.exp(np.random.default_rng(4).normal(2.5, 2.0, 6002))
    whole = counting.poisson(u, mean), counting.negative_binomial(u, mean, 0.7)
    for part in (slice(17, 18), slice(100, 4000)):
        assert np.array_equal(counting.poisson(u[part], mean[part]), whole[0][part])
        assert np.array_equal(counting.negative_binomial(u[part], mean[part], 0.7), whole[1][part])


def test_means_that_no_count_can_have_are_not_numbers():
    u = np.full(4, 0.5)
    assert np.isnan(counting.poisson(u, np.array([np.nan, -1.0, np.inf, 2.0**51]))).all()
    assert np.array_equal(counting.poisson(u, np.zeros(4)), np.zeros(4))


def test_standardised_uniforms_give_back_the_uniforms():
    u = some_uniforms(5)
    assert np.array_equal(uniforms(LAWS["uniform"]().shocks(u)), u)


@pytest.mark.parametrize(
    "law", [Poisson(0.02), Poisson(3.3), Poisson(900.0), NegativeBinomial(4.0, 0.3), NegativeBinomial(200.0, 12.0)]
)
def test_tables_are_scipys_laws(law):
    u, known = some_uniforms(6), law.distribution()
    table = law.table
    numbers = table.first + np.arange(len(table.places))
    np.testing.assert_allclose(table.places / GRID, known.cdf(numbers), rtol=0, atol=2e-13)
    assert right(known, law.counts(u), u, grid=1 / GRID).all()
    counts = np.arange(50_000.0)
    for k, moment in zip((2, 3, 4), law.central, strict=True):
        np.testing.assert_allclose(np.sum(known.pmf(counts) * (counts - law.mean) ** k), moment, rtol=1e-9)


def test_thinning_is_scipys_binomial_law():
    u = some_uniforms(7)
    n = np.random.default_rng(7).integers(0, 300, len(u)).astype(float)
    thinned = Thinning(0.3, 300).counts(n, u)
    assert right(stats.binom(n, 0.3), thinned, u, grid=1 / GRID).all()
    assert np.array_equal(Thinning(0.3, 512).counts(n, u), thinned)  # a longer table has the same entries


def test_a_table_answers_its_ends():
    table = Table(np.array([0.25, 0.0, 0.5, 0.25]), first=3)
    assert np.array_equal(table.counts(np.array([1e-16, 0.2, 0.26, 0.74, 0.76, 1 - 1e-16])), [3, 3, 5, 5, 6, 6])
