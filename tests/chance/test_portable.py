"""Accuracy of the portable functions against mpmath, in units in the last place (ulp)."""

import math

import mpmath
import numpy as np
import pytest
from scipy.linalg import solve_discrete_lyapunov

from procgen.chance.portable import (
    cholesky,
    cos_turns,
    exp,
    log,
    log1p,
    matmul,
    normal_quantile,
    normal_tail,
    sin_turns,
    sum_doubling,
)

RNG = np.random.default_rng(20240607)
COUNT = 1500


def worst_ulp(values, arguments, exact):
    """The largest error of values, in spacings of float64 at the exact value."""
    with mpmath.workprec(220):
        worst = 0.0
        for argument, value in zip(arguments.tolist(), values.tolist(), strict=True):
            truth = exact(mpmath.mpf(argument))
            error = abs(mpmath.mpf(value) - truth) / mpmath.mpf(float(np.spacing(abs(float(truth)))))
            worst = max(worst, float(error))
    return worst


def spread(*parts):
    return np.concatenate(parts)


TURNS = spread(
    RNG.uniform(-1, 1, COUNT),
    RNG.uniform(-1e4, 1e4, COUNT),
    0.25 * RNG.integers(-8, 8, COUNT) + 2.0 ** -RNG.uniform(3, 50, COUNT) * RNG.choice([-1, 1], COUNT),
)
CASES = {
    "exp": (
        exp,
        mpmath.exp,
        spread(RNG.uniform(-745, 709.7, COUNT), RNG.uniform(-1, 1, COUNT), RNG.uniform(-1e-6, 1e-6, 200)),
        1.0,
    ),
    "log": (
        log,
        mpmath.log,
        spread(np.ldexp(RNG.uniform(1, 2, COUNT), RNG.integers(-1074, 1023, COUNT)), RNG.uniform(0.5, 2, COUNT)),
        1.0,
    ),
    "log near 1": (log, mpmath.log, 1 + RNG.uniform(-1e-6, 1e-6, 300), 1.0),
    "log1p": (
        log1p,
        mpmath.log1p,
        spread(2.0 ** RNG.uniform(-60, 60, COUNT), -(2.0 ** -RNG.uniform(0.01, 60, COUNT))),
        3.0,
    ),
    "sin_turns": (sin_turns, lambda x: mpmath.sinpi(2 * x), TURNS, 2.0),
    "cos_turns": (cos_turns, lambda x: mpmath.cospi(2 * x), TURNS, 2.0),
    "normal_tail": (
        normal_tail,
        lambda x: mpmath.erfc(x / mpmath.sqrt(2)) / 2,
        spread(RNG.uniform(0, 9, COUNT), RNG.uniform(0, 0.3, 500), RNG.uniform(9, 38.4, COUNT)),
        2.0,
    ),
}


@pytest.mark.parametrize("name", CASES)
def test_accuracy_against_mpmath(name):
    function, exact, arguments, bound = CASES[name]
    assert worst_ulp(function(arguments), arguments, exact) <= bound


def test_special_values():
    with np.errstate(all="raise"):
        x = np.array([0.0, -0.0, np.inf, -np.inf, np.nan, 800.0, -800.0])
        assert np.array_equal(exp(x), [1, 1, np.inf, 0, np.nan, np.inf, 0], equal_nan=True)
        x = np.array([0.0, -0.0, -1.0, np.inf, np.nan, 1.0, -np.inf])
        assert np.array_equal(log(x), [-np.inf, -np.inf, np.nan, np.inf, np.nan, 0, np.nan], equal_nan=True)
        x = np.array([0.0, -1.0, -2.0, np.inf, 1e-300, np.nan])
        assert np.array_equal(log1p(x), [0, -np.inf, np.nan, np.inf, 1e-300, np.nan], equal_nan=True)
        x = np.array([0.0, np.inf, 39.0, -1.0, np.nan])
        assert np.array_equal(normal_tail(x), [0.5, 0, 0, np.nan, np.nan], equal_nan=True)


def test_quarter_turns_are_exact():
    x = np.array([-2, -0.75, -0.5, -0.25, 0, 0.25, 0.5, 0.75, 1, 1e300, 2.0**52 + 1])
    assert sin_turns(x).tolist() == [0, 1, 0, -1, 0, 1, 0, -1, 0, 0, 0]
    assert cos_turns(x).tolist() == [1, 0, -1, 0, 1, 0, -1, 0, 1, 1, 1]
    assert not np.signbit(sin_turns(x)[[0, 2, 4, 6]]).any()
    assert np.isnan(sin_turns(np.array([np.inf, np.nan]))).all()


def test_scalars_in_scalars_out():
    assert exp(1) == pytest.approx(math.e, rel=3e-16) and isinstance(exp(1), float)
    assert float(log(np.float64(1.0))) == 0.0
    assert np.ndim(cos_turns(0.125)) == 0
    assert exp(np.zeros((2, 0))).shape == (2, 0)


LAYOUTS = {
    "in place": lambda x: x,
    "another array": np.empty_like,
    "every other column": lambda x: np.empty((x.shape[0], 2 * x.shape[1]))[:, ::2],
    "transposed": lambda x: np.empty(x.shape[::-1]).T,
}


@pytest.mark.parametrize("function", [exp, log, log1p, sin_turns, cos_turns, normal_tail, normal_quantile])
@pytest.mark.parametrize("layout", LAYOUTS)
def test_out_and_blocks(function, layout):
    """Longer than a block, into any memory, by part or whole: the same bits."""
    x = RNG.random((300, 177))
    expected = np.array([[function(value) for value in row] for row in x[:4].tolist()])
    source = x.copy()
    out = LAYOUTS[layout](source)
    assert function(source, out=out) is out
    assert np.array_equal(out[:4], expected)
    assert np.array_equal(out, function(x.T).T)


def test_out_of_another_shape_is_refused():
    with pytest.raises(ValueError, match=r"expected out to be float64 of shape \(3,\)"):
        exp(np.zeros(3), out=np.zeros(4))


@pytest.mark.parametrize(
    ("p", "z"),
    [
        # Wichura (1988), Algorithm AS 241, Applied Statistics 37: his test values
        (0.25, -0.6744897501960817),
        (0.001, -3.090232306167814),
        (1e-20, -9.262340089798408),
        # Abramowitz & Stegun (1964), Table 26.5 (from memory; the digits recomputed)
        (0.95, 1.6448536269514727),
        (0.975, 1.9599639845400542),
        (0.99, 2.3263478740408411),
        (0.995, 2.5758293035489008),
        # a 60-digit solve
        (1e-5, -4.2648907939228246),
        (1e-10, -6.3613409024040562),
        (1e-100, -21.273453560965324),
        (1e-300, -37.047096299361199),
        (2.0**-53, -8.2095361516013869),
    ],
)
def test_normal_quantile_of_known_areas(p, z):
    assert normal_quantile(p) == pytest.approx(z, rel=1e-15, abs=0)


def test_normal_quantile_against_mpmath():
    """AS 241 promises about 1 part in 1e16; here 8 parts, over all uniforms, in either half."""
    p = (np.floor(2.0 ** -RNG.uniform(1, 53, 400) * 2.0**52) + 0.5) * 2.0**-52
    for u, sign in ((p, -1), (1 - p, 1)):
        z = normal_quantile(u)
        with mpmath.workprec(200):
            for area, value in zip(p.tolist(), z.tolist(), strict=True):
                truth = sign * mpmath.sqrt(2) * mpmath.erfinv(1 - 2 * mpmath.mpf(area))
                assert abs(value - truth) <= 8e-16 * abs(truth)


def test_normal_quantile_is_odd_and_rising():
    u = np.concatenate([np.linspace(0.074, 0.076, 20001), np.linspace(1e-11, 2e-11, 2001), np.linspace(0.4, 0.6, 2001)])
    u = np.sort((np.floor(u * 2.0**52) + 0.5) * 2.0**-52)
    z = normal_quantile(u)
    assert np.array_equal(normal_quantile(1 - u), -z)
    assert (np.diff(z) >= -4 * np.spacing(np.abs(z[1:]))).all()  # across both seams, but for rounding


@pytest.mark.parametrize(("x", "digits"), [(5, 6.54265), (10, 23.11805), (20, 88.56010)])
def test_normal_tail_far_out(x, digits):
    """-log10 Q(x): Abramowitz & Stegun (1964), Table 26.2 (from memory; the digits recomputed)."""
    assert -math.log10(normal_tail(x)) == pytest.approx(digits, abs=5e-6)


def random_covariance(size, rank):
    factor = RNG.standard_normal((size, rank))
    return factor @ factor.T


@pytest.mark.parametrize(("size", "rank"), [(1, 1), (4, 4), (7, 7), (6, 3), (5, 1)])
def test_cholesky(size, rank):
    s = random_covariance(size, rank)
    lower = cholesky(s)
    assert np.array_equal(lower, np.tril(lower))
    assert np.abs(lower @ lower.T - s).max() <= 1e-13 * np.abs(s).max()
    if rank == size:
        assert lower == pytest.approx(np.linalg.cholesky(s), rel=1e-9)
    assert np.count_nonzero(np.diagonal(lower)) == rank


def test_cholesky_of_a_repeated_variable_has_a_zero_column():
    lower = cholesky([[4, 4, 2], [4, 4, 2], [2, 2, 2]])
    assert lower.tolist() == [[2, 0, 0], [2, 0, 0], [1, 0, 1]]


def test_cholesky_refuses_what_is_no_covariance():
    with pytest.raises(ValueError, match=r"pivot -3 in row 1"):
        cholesky([[1, 2], [2, 1]])
    with pytest.raises(ValueError, match="expected a square matrix, got shape"):
        cholesky([[1, 2, 3]])


def test_matmul():
    a, b = RNG.standard_normal((2, 3, 4)), RNG.standard_normal((2, 4, 5))
    assert matmul(a, b) == pytest.approx(a @ b, rel=1e-12, abs=1e-14)
    assert matmul(a[0], b[0]).tolist() == matmul(a, b)[0].tolist()
    with pytest.raises(ValueError, match="inner sizes"):
        matmul(a, a)


@pytest.mark.parametrize("radius", [0.0, 0.5, 0.999])
def test_sum_doubling_solves_the_lyapunov_equation(radius):
    """scipy.linalg.solve_discrete_lyapunov; relative error up to 1e-13 / (1 - radius**2)."""
    a = RNG.standard_normal((4, 4))
    a *= radius / np.abs(np.linalg.eigvals(a)).max()
    q = random_covariance(4, 4)
    s = sum_doubling(a, q)
    assert np.abs(s - solve_discrete_lyapunov(a, q)).max() <= 1e-13 / (1 - radius**2) * np.abs(s).max()


@pytest.mark.parametrize("radius", [1.0, 1.01, 5.0])
def test_sum_doubling_refuses_what_does_not_settle(radius):
    with pytest.raises(ValueError, match="spectral radius below 1"):
        sum_doubling(np.array([[radius]]), np.array([[1.0]]))
