"""Compositions of linear terms against matrices of weights (tests/theory/brute.py), at all pairs of steps."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from procgen.theory import Axis, SeriesTheory
from procgen.theory.series import CrossTheory
from procgen.theory.verdict import GROWS, SETTLES, STRICT

from . import brute
from .references import NORMAL

SEEN = np.arange(21)
ROWS = brute.ZERO + SEEN
SOURCES = ("a.noise", "b.noise", "c.noise")
SCALES = {("a.noise", "a.noise"): 1.0, ("b.noise", "b.noise"): 4.0, ("c.noise", "c.noise"): 0.25}
SCALES[("a.noise", "b.noise")] = 0.6 * 1.0 * 2.0
SCALES[("b.noise", "c.noise")] = -0.3 * 2.0 * 0.5


class World:
    """An axis with three sources, two pairs correlated, and the same things as weights."""

    def __init__(self):
        pairs = {frozenset(("a.noise", "b.noise")): 0.6, frozenset(("b.noise", "c.noise")): -0.3}
        self.axis = Axis(100, pairs)
        self.noise = {key: self.axis.source(key, NORMAL, np.sqrt(SCALES[key, key])) for key in SOURCES}

    def arma(self, key, phi=(), theta=()):
        return self.axis.filtered(self.noise[key], phi, theta), brute.stationary(key, phi, theta)

    def started(self, key, phi, theta, x, shocks):
        return self.axis.filtered(self.noise[key], phi, theta, x, shocks), brute.started(key, phi, theta, x, shocks)


def agree(x, y, u, v):
    """Theory of the pair of expressions x, y is that of the weights u, v, at all steps that are defined."""
    exact = u.covariance(v, SCALES)[np.ix_(ROWS, ROWS)]
    mine = CrossTheory(SeriesTheory("x", x), SeriesTheory("y", y)).covariance(SEEN[:, None], SEEN[None, :])
    size = np.sqrt(np.outer(np.diag(u.covariance(u, SCALES)), np.diag(v.covariance(v, SCALES))))[np.ix_(ROWS, ROWS)]
    assert mine is not None
    assert np.all(np.abs(mine - exact) <= 1e-9 * size + 1e-12)
    np.testing.assert_allclose(SeriesTheory("x", x).mean(SEEN), u.mean[ROWS], rtol=1e-10, atol=1e-12)


def test_arima_by_integrate():
    """ARIMA(1,2,1): twice summed, the second difference of which is the ARMA itself."""
    w = World()
    x, u = w.arma("a.noise", (0.7,), (0.4,))
    y, v = x.integrate(2.0).integrate(1.0), u.integrate(2.0).integrate(1.0)
    agree(y, y, v, v)
    again = y.difference().difference()
    agree(again, x, u, u)
    assert SeriesTheory("y", y).stationarity.verdict == GROWS
    assert SeriesTheory("x", again).stationarity.verdict == STRICT


def test_local_linear_trend():
    """Level with a random slope plus noise: the integral of a sum that holds a walk (Harvey 1989, ch. 2)."""
    w = World()
    slope, u = w.axis.walk(w.noise["a.noise"], 0.0, 0.1), brute.stationary("a.noise").integrate(0.1)
    level, v = (slope + w.noise["b.noise"]).integrate(5.0), (u + brute.stationary("b.noise")).integrate(5.0)
    y, z = level + w.noise["c.noise"], v + brute.stationary("c.noise")
    agree(y, y, z, z)
    agree(y, slope, z, u)


def test_walk_against_its_lag_and_a_correlated_ar():
    w = World()
    walk, u = (
        w.axis.walk(w.noise["a.noise"], 0.3, 1.0),
        (brute.stationary("a.noise") + brute.constant(0.3)).integrate(1.0),
    )
    ar, v = w.arma("b.noise", (0.5, 0.2))
    agree(walk + walk.lag(7) * 0.5, ar.lag(2), u + u.lag(7).times(0.5), v.lag(2))
    agree(walk.lag(7), walk, u.lag(7), u)


def test_sums_with_shared_parts():
    w = World()
    shared, u = w.arma("a.noise", (0.9,))
    one, v = w.arma("b.noise", (), (0.5,))
    two, z = w.arma("c.noise", (0.4,))
    agree(shared * 2.0 + one, shared * -1.0 + two, u.times(2.0) + v, u.times(-1.0) + z)


def test_long_run_gain_zero_does_not_grow():
    """The sum of a difference is the series minus its value at step 0; it keeps that for ever but does not grow."""
    w = World()
    x, u = w.arma("a.noise", (0.8,))
    y, v = x.difference().integrate(0.0), (u + u.lag(1).times(-1.0)).integrate(0.0)
    exact = v.covariance(v, SCALES)
    mine = SeriesTheory("y", y)
    np.testing.assert_allclose(mine.variance(SEEN), np.diag(exact)[ROWS], rtol=1e-12, atol=1e-14)
    assert mine.variance(10**9) == pytest.approx(2 * 1 / (1 - 0.64), rel=1e-12)
    assert mine.stationarity.verdict == SETTLES


def test_far_steps_of_an_integrated_ar():
    """Var of the sum of n AR(1) values: n g0 + 2 sum (n - k) g_k (Brockwell & Davis 1991, theorem 7.1.1)."""
    phi, w = 0.9, World()
    y = SeriesTheory("y", w.arma("a.noise", (phi,))[0].integrate(0.0))
    for n in (1, 50, 10**9):
        g0 = 1 / (1 - phi**2)
        exact = g0 * (n + 2 * (n * phi / (1 - phi) - phi * (1 - phi**n) / (1 - phi) ** 2))
        assert y.variance(n) == pytest.approx(exact, rel=1e-9)


def test_steps_asked_piece_by_piece_and_all_at_once():
    """Covariances are gone on with from the last step that was asked for; each by itself is made from step 0."""

    def series(world):
        return SeriesTheory("y", world.arma("a.noise", (0.9, -0.5))[0].integrate(0.0))

    pieces, alone, steps = series(World()), series(World()), np.arange(10_000)
    for gap in (0, 3):
        found = [pieces.covariance(part + gap, part) for part in np.split(steps, [1, 700, 4096, 9000])]
        some = np.array([0, 1, 699, 700, 4095, 4096, 4097, 8999, 9000, 9999])
        each = [alone.covariance(np.array([step + gap]), np.array([step]))[0] for step in some]
        np.testing.assert_allclose(np.concatenate(found)[some], each, rtol=1e-12)


def test_far_lag_of_a_walk():
    """Beyond the largest state: Cov(w(t - k), w(s - k)) of a two-sided walk is that of the distances from step 0."""
    w = World()
    walk = w.axis.walk(w.noise["b.noise"], 0.0, 0.0)
    y = SeriesTheory("y", walk.lag(2000))
    np.testing.assert_allclose(
        y.covariance([0, 500, 2500, 1000], [0, 100, 2200, 2500]), 4.0 * np.array([2000, 1500, 200, 0])
    )
    cross = CrossTheory(y, SeriesTheory("w", walk))
    np.testing.assert_allclose(cross.covariance([2500, 100], [300, 300]), [4.0 * 300, 0.0])
    ar, phi = w.axis.filtered(w.noise["a.noise"], (0.6,)), 0.6
    mixed = SeriesTheory("m", ar.integrate(0.0).lag(1800))  # Brockwell & Davis (1991), theorem 7.1.1
    n = np.array([1800, 1700, 5])
    exact = (n + 2 * (n * phi / (1 - phi) - phi * (1 - phi**n) / (1 - phi) ** 2)) / (1 - phi**2)
    np.testing.assert_allclose(mixed.variance([0, 100, 1805]), exact, rtol=1e-10)


@pytest.mark.parametrize(
    ("phi", "theta", "x", "shocks"),
    [
        ((0.5,), (), (3.0,), ()),
        ((1.2, -0.4), (0.3,), (1.0, -2.0), (0.7,)),
        ((), (0.5, 0.2), (), (1.0, -1.0)),
        ((1.0,), (), (4.0,), ()),
        ((1.05,), (0.2,), (1.0,), (0.5,)),
    ],
)
def test_from_a_given_past(phi, theta, x, shocks):
    w = World()
    y, v = w.started("a.noise", phi, theta, x, shocks)
    agree(y, y, v, v)
    ar, u = w.arma("b.noise", (0.6,))
    agree(y, ar, v, u)


def test_given_past_is_read_by_a_lag():
    w = World()
    y, v = w.started("a.noise", (0.5, 0.1), (), (3.0, 1.0), ())
    agree(y.difference(), y.lag(2), v + v.lag(1).times(-1.0), v.lag(2))
    assert SeriesTheory("y", y.lag(3)).mean([0, 5]) is None


partials = st.lists(st.floats(-0.65, 0.65), max_size=4)
weights = st.lists(st.floats(-1.5, 1.5), max_size=3)
leaves = st.tuples(st.sampled_from(SOURCES), partials, weights)
OPERATIONS = ("lag", "difference", "integrate", "times")
steps_up = st.lists(st.tuples(st.sampled_from(OPERATIONS), st.integers(1, 4), st.floats(-2, 2)), max_size=3)


def build(w, leaf, operations):
    key, kappa, theta = leaf
    x, u = w.arma(key, brute.coefficients(kappa), tuple(theta))
    for operation, k, c in operations:
        if operation == "lag":
            x, u = x.lag(k), u.lag(k)
        elif operation == "difference":
            x, u = x.difference(k), u + u.lag(k).times(-1.0)
        elif operation == "integrate":
            x, u = x.integrate(c), _defined(u).integrate(c)
        else:
            x, u = x * c, u.times(c)
    return x, u


def _defined(u):
    """Integration runs back to FIRST: rows that are not defined there would spoil it, but are never read."""
    return u.map(np.nan_to_num, np.nan_to_num(u.mean))


@settings(max_examples=40, deadline=None, derandomize=True)
@given(st.lists(st.tuples(leaves, steps_up), min_size=1, max_size=3), st.tuples(leaves, steps_up))
def test_random_compositions(parts, other):
    """Sums of lagged, differenced, integrated, scaled ARMA series with correlated shocks."""
    w = World()
    built = [build(w, *part) for part in parts]
    x, u = built[0]
    for y, v in built[1:]:
        x, u = x + y, u + v
    y, v = build(w, *other)
    agree(x, x, u, u)
    agree(x, y, u, v)
