"""Innovations against statsmodels' filter, and against what they must be."""

import numpy as np
import pytest
import statsmodels.api as sm

from procgen.chance import kernel
from procgen.checks.kalman import Kalman
from procgen.checks.small import Steps


def drawn(kalman, steps, paths, seed):
    """Values of a state space with diagonal noise."""
    rng = np.random.default_rng(seed)
    state = np.sqrt(np.diag(kalman.p0))[:, None] * rng.standard_normal((len(kalman.c), paths))
    root = np.linalg.cholesky(kalman.q + 1e-300 * np.eye(len(kalman.c))) if np.all(np.diag(kalman.q) > 0) else None
    y = np.empty((steps, paths))
    for t in range(steps):
        y[t] = kalman.c @ state
        push = rng.standard_normal((len(kalman.c), paths))
        state = kalman.a @ state + (root @ push if root is not None else np.sqrt(np.diag(kalman.q))[:, None] * push)
    return y


def level_and_ar():
    """A random walk from 0 plus an AR(1)."""
    return Kalman(np.diag([1.0, 0.7]), np.diag([0.09, 1.0]), np.ones(2), np.diag([0.0, 1 / 0.51]))


def nearly_unit_ma():
    """MA(1) with coefficient 1: its gain settles as slowly as 1/t."""
    a = np.array([[0.0, 0.0], [1.0, 0.0]])
    return Kalman(a, np.diag([1.0, 0.0]), np.array([1.0, 1.0]), np.eye(2))


def seasonal_difference():
    """e[t] − e[t−4]: its gain moves once in four steps."""
    return Kalman(np.eye(5, k=-1), np.diag([1.0, 0, 0, 0, 0]), np.array([1.0, 0, 0, 0, -1]), np.eye(5))


def seasonal_walk():
    """A pattern of four that drifts, known at first, and noise beside it."""
    a = np.zeros((5, 5))
    a[0, 3] = a[1, 0] = a[2, 1] = a[3, 2] = 1.0
    return Kalman(a, np.diag([0.09, 0, 0, 0, 1]), np.array([1.0, 0, 0, 0, 1]), np.diag([0.0, 0, 0, 0, 1]))


def long_memory():
    """An autoregression of 72 coefficients beside noise: most of its state is only passed on."""
    a = np.eye(73, k=-1)
    a[0, [0, 23, 71]], a[72] = (0.5, 0.3, -0.1), 0.0
    return Kalman(a, np.diag([1.0, *[0.0] * 71, 0.5]), np.array([1.0, *[0.0] * 71, 1.0]), np.eye(73))


CASES = [level_and_ar, nearly_unit_ma, seasonal_difference, seasonal_walk, long_memory]


@pytest.mark.parametrize("make", CASES)
def test_innovations_equal_those_of_statsmodels(make):
    kalman = make()
    y, size = drawn(kalman, 300, 2, 1), len(kalman.c)
    model = sm.tsa.statespace.MLEModel(
        y[:, 0], k_states=size, initialization="known", initial_state=np.zeros(size), initial_state_cov=kalman.p0
    )
    model["transition"], model["selection"], model["state_cov"] = kalman.a, np.eye(size), kalman.q
    model["design"], model["obs_cov"] = kalman.c[None, :], np.zeros((1, 1))
    model.ssm.tolerance = 0
    theirs = model.ssm.filter()
    z = theirs.forecasts_error[0] / np.sqrt(theirs.forecasts_error_cov[0, 0])
    ours, _ = kalman.innovations(y, kalman.start(2), 0)
    np.testing.assert_allclose(ours[:, 0], z, atol=2e-9)


@pytest.mark.parametrize("make", [level_and_ar, nearly_unit_ma])
def test_tiles_do_not_matter(make):
    kalman = make()
    y = drawn(kalman, 700, 5, 2)
    whole, _ = kalman.innovations(y, kalman.start(5), 0)
    other, state, at = make(), None, 0
    state, parts = other.start(5), []
    for size in (1, 7, 100, 333, 64, 195):
        part, state = other.innovations(y[at : at + size], state, at)
        parts.append(part)
        at += size
    np.testing.assert_allclose(np.concatenate(parts), whole, atol=1e-11)


def test_they_are_white_and_standard():
    # 600 × 2,000 innovations: mean, variance and lag 1, each within 5.5 standard errors (probability 4e-8 each).
    kalman = level_and_ar()
    z, _ = kalman.innovations(drawn(kalman, 600, 2000, 3), kalman.start(2000), 0)
    n = z.size
    assert abs(z.mean()) * np.sqrt(n) < 5.5
    assert abs((z * z).mean() - 1) * np.sqrt(n / 2) < 5.5
    assert abs((z[1:] * z[:-1]).mean()) * np.sqrt(n) < 5.5


def test_a_known_step_gives_no_shock():
    walk = Kalman(np.ones((1, 1)), np.ones((1, 1)), np.ones(1), np.zeros((1, 1)))
    y = np.cumsum(np.vstack([np.zeros(3), np.random.default_rng(4).standard_normal((50, 3))]), axis=0)
    z, _ = walk.innovations(y, walk.start(3), 0)
    assert np.isnan(z[0]).all()
    np.testing.assert_allclose(z[1:], np.diff(y, axis=0), atol=1e-12)


def test_rounding_is_part_of_the_model():
    # Values rounded to 0.5 with shocks of sd 1: without the rounding's variance the innovations' is 3 % too high, which
    # 10^6 of them show at 20 standard errors; with it they pass at 5.5 (probability 4e-8).
    grain = 0.5
    plain = Kalman(0.6 * np.ones((1, 1)), np.ones((1, 1)), np.ones(1), np.ones((1, 1)) / 0.64)
    y = np.rint(drawn(plain, 500, 2000, 5) / grain) * grain
    aware = Kalman(plain.a, plain.q, plain.c, plain.p0, grain**2 / 12)
    spread = [(k.innovations(y, k.start(2000), 0)[0] ** 2).mean() - 1 for k in (plain, aware)]
    assert spread[0] * np.sqrt(5e5) > 15
    assert abs(spread[1]) * np.sqrt(5e5) < 5.5


def ar_two():
    """A second-order autoregression: two elements that feed each other."""
    return Kalman(np.array([[0.75, -0.5], [1.0, 0.0]]), np.diag([1.0, 0.0]), np.array([1.0, 0.0]), 2 * np.eye(2))


def six():
    """Six elements in all directions: too many products for steps one by one."""
    a = 0.1 * np.ones((6, 6)) + 0.2 * np.eye(6)
    return Kalman(a, np.eye(6), np.ones(6), np.eye(6))


MAKES = {make.__name__: make for make in (level_and_ar, nearly_unit_ma, ar_two, six)}


@pytest.mark.skipif(not kernel.available(), reason="numba is not installed")
@pytest.mark.parametrize("name", MAKES)
@pytest.mark.parametrize("mean", [None, 3.25])
def test_the_same_bits_whatever_the_tiles_and_compiled(name, mean):
    """Tiles that begin at multiples of 64, lanes of one group and of many, a gap: no bit of it shows."""
    y = np.random.default_rng(6).standard_normal((400, 96))
    y[130, 40] = np.nan
    level = np.zeros(400) if mean is None else mean + np.arange(400.0)

    def run(cuts, lanes, compile):
        kalman, out = MAKES[name](), np.empty(y.shape)
        with kernel.compiling(compile):
            for first, end in lanes:
                state = kalman.start(end - first)
                for here in np.split(np.arange(400), cuts):
                    rows = slice(here[0], here[-1] + 1)
                    given = None if mean is None else level[rows]
                    out[rows, first:end], state = kalman.innovations(y[rows, first:end], state, here[0], given)
        return out

    whole = run([], [(0, 96)], False)
    assert np.isfinite(whole[:130, 40]).sum() >= 96
    assert np.isnan(whole[130:, 40]).all()
    assert np.isfinite(np.delete(whole, 40, axis=1)).all()
    narrow = [(first, first + 16) for first in range(0, 96, 16)]
    for cuts in ([], [64], [128, 192, 320]):
        for lanes in ([(0, 96)], [(0, 32), (32, 96)], narrow):
            for compile in (False, True):
                np.testing.assert_array_equal(run(cuts, lanes, compile), whole, strict=True)


@pytest.mark.parametrize("name", MAKES)
def test_steps_and_matrix_products_agree(name):
    """Of 16 paths and of 15 the innovations are made in two ways."""
    y = np.random.default_rng(7).standard_normal((300, 16))
    kalman = MAKES[name]()
    whole, _ = kalman.innovations(y, kalman.start(16), 0)
    some, _ = kalman.innovations(y[:, :15], kalman.start(15), 0)
    np.testing.assert_allclose(some, whole[:, :15], atol=1e-11)


def test_steps_of_a_state_of_one_number_are_those_of_any_state():
    one = Steps(
        np.array([[0.7]]), np.array([1.3]), [np.array([0.5]), np.array([0.4]), np.array([0.4])], [2.0, 1.5, 0.0]
    )
    # the same state twice, of which only one is seen
    gains = [np.array([gain, 0.0]) for gain in (0.5, 0.4, 0.4)]
    two = Steps(np.diag([0.7, 0.0]), np.array([1.3, 0.0]), gains, [2.0, 1.5, 0.0])
    np.testing.assert_allclose(one.seen[:, 0], two.seen[:, 0], rtol=1e-14)
    assert one.moved[0, 0] == pytest.approx(two.moved[0, 0], rel=1e-14)
    assert one.moved[0, 0] == pytest.approx((0.7 - 0.5 * 1.3) * (0.7 - 0.4 * 1.3) ** 2, rel=1e-14)
