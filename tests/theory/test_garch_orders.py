"""Which moments a garch of any order has: Kronecker powers written out, the tail index, and sums in closed form."""

from __future__ import annotations

from itertools import product
from math import comb, exp

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from procgen.chance.laws import LAWS
from procgen.theory import Garch
from procgen.theory.powers import existing_orders, log_radius

from .references import LAPLACE, NORMAL, UNIFORM, student

LAW = LAWS["normal"]()


def even(k: int) -> float:
    """E z^2k of a normal: 1 3 5 .. (2k - 1)."""
    return float(np.prod(np.arange(1, 2 * k, 2))) if k else 1.0


def written_out(alpha, beta, s, even_moment):
    """Spectral radius of E A^(s), all n^s by n^s of it, as the sum over which factors carry z^2."""
    p, q = len(alpha), max(len(beta), 1)
    n = q + p - 1
    fixed, random = np.zeros((n, n)), np.zeros((n, n))
    fixed[0, : len(beta)], fixed[0, q:], random[0, 0] = beta, alpha[1:], alpha[0]
    for i in [*range(1, q), *range(q + 1, n)]:
        fixed[i, i - 1] = 1.0
    if p > 1:
        random[q, 0] = 1.0
    total = np.zeros((n**s, n**s))
    for carry in product((0, 1), repeat=s):
        whole = np.ones((1, 1))
        for bit in carry:
            whole = np.kron(whole, random if bit else fixed)
        total += even_moment(sum(carry)) * whole
    return np.abs(np.linalg.eigvals(total)).max()


weights = st.floats(0.01, 0.6)
models = st.tuples(st.lists(weights, min_size=1, max_size=3), st.lists(weights, max_size=2), st.floats(0.3, 0.99))


def scaled(model):
    alpha, beta, total = model
    size = (sum(alpha) + sum(beta)) / total
    return tuple(a / size for a in alpha), tuple(b / size for b in beta)


@settings(max_examples=25, deadline=None, derandomize=True)
@given(models, st.sampled_from([2, 3]))
def test_powers_of_the_state_written_out(model, s):
    alpha, beta = scaled(model)
    assert exp(log_radius(alpha, beta, s, even)) == pytest.approx(written_out(alpha, beta, s, even), rel=1e-8)


@settings(max_examples=40, deadline=None, derandomize=True)
@given(models, st.sampled_from([NORMAL, LAPLACE, UNIFORM, student(9)]))
def test_fourth_moments_by_two_criteria(model, law):
    """The radius of E A^(2) is below 1 where (kz - 1) Psi is (Karanasos 1999), which knows of no matrix."""
    alpha, beta = scaled(model)
    left = log_radius(alpha, beta, 2, lambda k: law.moment(2 * k))
    if abs(left) > 1e-6:
        assert (left < 0.0) == np.isfinite(Garch(law, 1.0, alpha, beta).shock_variance)


@pytest.mark.parametrize(("a", "b"), [(0.1, 0.8), (0.3, 0.6), (0.05, 0.9), (0.5, 0.2)])
def test_bounds_of_a_higher_order_hold_the_tail_index(a, b):
    """At order (1,1), also written with a coefficient of 0, E (b + a z^2)^s = 1 has its root between them."""
    growth = [sum(comb(s, k) * a**k * b ** (s - k) * even(k) for k in range(s + 1)) for s in range(1, 5)]
    for s in range(1, 5):
        assert exp(log_radius((a,), (b,), s, even)) == pytest.approx(growth[s - 1], rel=1e-10)
    low, high = existing_orders((a, 0.0), (b,), even)
    exact = Garch(LAW, 1.0, (a,), (b,)).orders
    assert exact[0] == exact[1] and low <= exact[0] <= high
    assert high - low <= 2.0 or low > 16.0  # where it is looked for no further


def test_arch_of_order_two_has_a_fourth_moment_where_milhoj_says():
    """Normal shocks: a2 + 3 a1^2 + 3 a2^2 + 3 a1^2 a2 - 3 a2^3 < 1 (Milhoj 1985; the formula from memory)."""
    seen = set()
    for a1, a2 in product(np.arange(0.05, 0.9, 0.1), repeat=2):
        if a1 + a2 < 1.0:
            exists = a2 + 3 * a1**2 + 3 * a2**2 + 3 * a1**2 * a2 - 3 * a2**3 < 1
            garch = Garch(LAW, 1.0, (float(a1), float(a2)))
            assert (garch.highest_moment > 4.0) == exists and (garch.orders[1] <= 4.0) == (not exists)
            seen.add(bool(exists))
    assert seen == {True, False}


def test_what_the_law_and_the_sum_allow():
    t = LAWS["student_t"]
    assert Garch(t(7), 1.0, (0.1, 0.05), (0.3,)).orders == (np.nextafter(6.0, 7.0), 7.0)
    assert Garch(LAW, 1.0, (0.3, 0.2), (0.5,)).orders == (2.0, 2.0)
    assert Garch(LAW, 1.0, (0.3, 0.3), (0.5,)).orders == (0.0, 2.0)
    assert Garch(LAWS["uniform"](), 1.0, (0.1, 0.1), (0.5,)).orders[0] > 16.0
    assert Garch(LAW, 1.0, (0.1, 0.05), (0.3, 0.4)).power_tailed and not Garch(LAW, 1.0, (0.0, 0.0)).power_tailed


def test_the_variance_of_a_higher_order_can_be_judged():
    """It needs six moments, which four are not enough to tell of."""
    assert Garch(LAW, 1.0, (0.05, 0.05), (0.4, 0.4)).highest_moment > 6.0
