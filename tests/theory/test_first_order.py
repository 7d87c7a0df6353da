"""The variance of a garch of order (1,1) by quadrature, against closed laws and moments, and paths drawn by NumPy."""

import numpy as np
import pytest
from scipy import integrate, stats

from procgen.chance.laws import LAWS
from procgen.theory.garch import Garch
from procgen.theory.perpetuity import perpetuity
from procgen.theory.unknown import Unknown
from procgen.theory.volatility import Gjr

NORMAL = LAWS["normal"]()
T = LAWS["student_t"]


def beyond(law, model, omega, x):
    """P(a value lies above x), from the law of the variance at 96 points."""
    found = perpetuity(law, *model, 96)
    shock = law.distribution()
    return shock.sf(np.asarray(x, float)[..., None] / np.sqrt(omega * found.variances)) @ found.weights


@pytest.mark.parametrize("df", [3.5, 5.0, 8.0])
def test_arch_of_t_shocks_has_the_closed_law_of_chamayou_and_letac(df):
    """With alpha = 1 / (n - 2), values are t(n - 1) times sqrt(omega (n - 2) / (n - 1)) (J. Theor. Prob. 4, 1991)."""
    x = np.array([-50, -3, -1, -0.1, 0, 0.5, 2, 10])
    found = beyond(T(df), (1.0 / (df - 2.0), 0.0, 0.0), 2.0, x)
    exact = stats.t(df - 1.0, scale=np.sqrt(2.0 * (df - 2.0) / (df - 1.0)))
    np.testing.assert_allclose(found, exact.sf(x), rtol=1e-7, atol=1e-10)


def test_variance_and_kurtosis_of_the_law_are_those_of_bollerslev():
    """Bollerslev (1986), theorems 1 and 2: 3 (1 - s^2) / (1 - s^2 - 2 alpha^2) with s = alpha + beta.

    Up to 30 standard deviations, beyond which a tail of order 8 leaves less than 1e-5 of either.
    """

    def moment(k):
        def part(x):
            return 2 * k * x ** (k - 1) * beyond(NORMAL, (0.1, 0.0, 0.85), 0.05, x)

        return integrate.quad(part, 0.0, 30.0, limit=500, epsabs=1e-12)[0]

    assert moment(2) == pytest.approx(1.0, rel=1e-6)
    assert moment(4) == pytest.approx(3 * (1 - 0.95**2) / (1 - 0.95**2 - 2 * 0.1**2), rel=1e-4)


@pytest.mark.parametrize("model", [(0.1, 0.0, 0.85), (0.03, 0.08, 0.87), (0.05, 0.0, 0.94), (0.2, 0.0, 0.75)])
def test_twice_the_points_change_nothing(model):
    coarse, fine = (perpetuity(NORMAL, *model, points) for points in (96, 192))

    def size(x):
        return x * x / (x * x + 50.0)

    np.testing.assert_allclose(coarse.products(size, (1, 2, 5)), fine.products(size, (1, 2, 5)), rtol=0, atol=1e-10)
    assert abs(coarse.mean(size) - fine.mean(size)) < 1e-10


@pytest.mark.parametrize("gamma", [0.0, 0.1])
def test_sizes_of_neighbours_are_those_of_drawn_paths(gamma):
    """400,000 paths by NumPy, 300 steps after the mean variance; each within 5.5 standard errors (4e-8)."""
    found = Gjr(NORMAL, 0.05, 0.1 - gamma / 2, gamma, 0.85).sizes((1, 2, 5))
    rng, h, rows = np.random.default_rng(8), np.ones(400_000), []
    for t in range(306):
        x = np.sqrt(h) * rng.standard_normal(len(h))
        h = 0.05 + (0.1 - gamma / 2 + gamma * (x < 0)) * x * x + 0.85 * h
        if t >= 300:
            rows.append(x)
    y = found.of(np.array(rows))
    drawn = [y[0], *((y[0] - found.mean) * (y[lag] - found.mean) for lag in (1, 2, 5))]
    for values, stated in zip(drawn, (found.mean, *found.covariances), strict=True):
        assert abs(values.mean() - stated) < 5.5 * values.std() / np.sqrt(len(values))


@pytest.mark.parametrize(
    "process",
    [
        Garch(NORMAL, 1.0, (0.1, 0.1), (0.5,)),
        Garch(NORMAL, 1.0, (0.1,), (0.8,), (1.0,), (1.0,)),
        Garch(NORMAL, 1.0, (4.0,), (0.9,)),
    ],
    ids=["order", "given start", "not stationary"],
)
def test_what_is_not_computed_says_why(process):
    with pytest.raises(Unknown):
        process.sizes((1,))
