"""Sums in a fixed order against plain ones, bit for bit however they are cut; uniforms against SciPy."""

import math

import numpy as np
import pytest
from scipy.special import ndtr

from procgen.chance import kernel
from procgen.checks.blocks import Window, across, add_lagged, add_products, places_beyond
from procgen.checks.scores import BINS
from procgen.checks.uniforms import bin_counts, uniforms


def test_products_are_those_of_fsum_whatever_the_tiles_and_the_width():
    x = np.random.default_rng(1).standard_normal((400, 48))
    x[7, 3] = np.nan
    found = []
    for paths, height in ((48, 400), (48, 64), (16, 128), (32, 192)):
        total, window, pairs = np.zeros(paths), Window(5, paths), 0
        for start in range(0, 400, height):
            tile = x[start : start + height, :paths]
            view = window.push(tile)
            pairs += add_lagged(total, view, view, 5, len(tile))
        known = np.isfinite(x[5:, :paths] * x[:-5, :paths])
        assert pairs == np.count_nonzero(known) == 395 * paths - 2
        found.append(total[:16])
    exact = [math.fsum(p for p in x[5:, k] * x[:-5, k] if not math.isnan(p)) for k in range(16)]
    for total in found:
        np.testing.assert_array_equal(total, found[0])
        np.testing.assert_allclose(total, exact, rtol=1e-12, atol=1e-12)


def test_a_tile_may_begin_within_a_block():
    x = np.random.default_rng(2).standard_normal((200, 16))
    whole, late = np.zeros(16), np.zeros(16)
    add_products(whole, np.vstack([np.zeros((30, 16)), x[30:]]), None)
    add_products(late, x[30:], None, 30)
    np.testing.assert_array_equal(whole, late)


@pytest.mark.parametrize("paths", [1, 2, 15, 16])
@pytest.mark.parametrize("steps", [40, 64, 400])
def test_steps_are_added_one_by_one_within_a_block(paths, steps):
    a, b = np.random.default_rng(paths).standard_normal((2, steps, paths))
    one, two = np.zeros(paths), np.zeros(paths)
    for first in range(0, steps, 64):  # the bits of a plain loop
        sums, products = np.zeros(paths), np.zeros(paths)
        for t in range(first, min(first + 64, steps)):
            sums, products = sums + a[t], products + a[t] * b[t]
        one, two = one + sums, two + products
    for plain, factors in ((one, (a,)), (two, (a, b))):
        total = np.zeros(paths)
        add_products(total, *factors)
        np.testing.assert_array_equal(total, plain)


def test_a_range_of_paths_is_the_sum_of_its_halves():
    x = np.random.default_rng(3).standard_normal((3, 64))
    np.testing.assert_array_equal(across(x), across(x[:, :32]) + across(x[:, 32:]))
    np.testing.assert_allclose(across(x[:, :37]), x[:, :37].sum(axis=1), rtol=1e-12)


def test_uniforms_against_scipy():
    g = np.concatenate([np.linspace(-12, 12, 40_000), np.random.default_rng(4).standard_normal(25_536)]).reshape(64, -1)
    u = uniforms(g).copy()
    np.testing.assert_allclose(u, ndtr(g), rtol=0, atol=3e-9)
    counts = np.bincount(np.minimum((ndtr(g) * BINS).astype(int), BINS - 1).ravel(), minlength=BINS)
    assert np.abs(bin_counts(u) - counts).sum() <= 8  # a few lie within 3e-9 of an edge
    assert np.isnan(uniforms(np.full((1, 2), np.nan))).all()


@pytest.mark.skipif(not kernel.available(), reason="numba is not installed")
@pytest.mark.parametrize("bound", [0.1, 1.0, 3.0, 9.0])
def test_values_beyond_bounds_are_the_same_in_both_forms(bound):
    x = np.random.default_rng(5).standard_normal((40, 53))
    x[3, 7], x[4, 8] = np.nan, np.inf
    rows = np.array([0, 3, 4, 30])
    low, high = np.full(4, -bound), bound * np.array([1.0, 2.0, 1.0, 0.5])
    plain = places_beyond(x, rows, low, high)
    with kernel.compiling():
        compiled = places_beyond(x, rows, low, high)
    for one, other in zip(plain, compiled, strict=True):
        np.testing.assert_array_equal(one, other)
    known = (x[rows] < low[:, None]) | (x[rows] > high[:, None])
    assert len(plain[0]) == known.sum() and (plain[2] == x[rows][known]).all()
