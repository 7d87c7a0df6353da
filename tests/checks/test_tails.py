"""Tail probabilities against SciPy, closed forms, and published points."""

import math
from itertools import pairwise, product

import numpy as np
import pytest
from scipy import integrate, special, stats

from procgen.checks import tails


@pytest.mark.parametrize("dof", [1, 2, 5, 100, 2000])
@pytest.mark.parametrize("p", [1e-2, 1e-6, 1e-12])
def test_one_weight_is_a_chi_square(dof, p):
    upper, lower = stats.chi2.isf(p, dof), stats.chi2.ppf(p, dof)
    assert math.exp(tails.weighted_chi_squares(upper, [1.0], dof)[0]) == pytest.approx(p, rel=1e-9)
    if lower > 1e-12:
        assert math.exp(tails.weighted_chi_squares(3 * lower, [3.0], dof)[1]) == pytest.approx(p, rel=1e-9)
    assert tails.chi_square(upper, dof)[0] == pytest.approx(math.log(p), rel=1e-9)


@pytest.mark.parametrize("n", [2, 30, 100])
@pytest.mark.parametrize("rho", [0.0, 0.5, -0.5, 0.95])
@pytest.mark.parametrize("z", [0.0, 1.0, 3.0])
def test_covariance_law_against_the_integral_over_one_chi_square(n, rho, z):
    total = n * rho + z * math.sqrt(n * (1 + rho * rho))

    def weighed(y):
        return stats.chi2.pdf(y, n) * stats.chi2.sf((total + (1 - rho) / 2 * y) / ((1 + rho) / 2), n)

    top = stats.chi2.isf(1e-15, n)
    exact, _ = integrate.quad(weighed, 0, top, points=[n], epsrel=1e-11, limit=400)
    assert math.exp(tails.covariance(total / n, 1.0, 1.0, rho, n)[0]) == pytest.approx(exact, rel=1e-6)


def test_product_of_two_normals_has_the_bessel_density():
    # One pair of independent normals: density K0(|x|) / pi (Craig 1936, Ann. Math. Stat. 7, 1-15).
    for x in (0.3, 1.0, 5.0, 20.0):
        exact = integrate.quad(lambda y: special.k0(y) / math.pi, x, np.inf, epsabs=0, epsrel=1e-10)[0]
        assert math.exp(tails.covariance(x, 1.0, 1.0, 0.0, 1)[0]) == pytest.approx(exact, rel=1e-6)


def test_weighted_chi_squares_against_direct_draws():
    # 400,000 draws, three weights of both signs. Each count is binomial: 5.5 standard errors, probability 8e-8 a line.
    rng = np.random.default_rng(11)
    draws = 2.0 * rng.chisquare(3, 400_000) - rng.chisquare(4, 400_000) + 0.1 * rng.chisquare(1, 400_000)
    for x in (-6.0, 0.0, 10.0, 25.0):
        p = math.exp(tails.weighted_chi_squares(x, [2.0, -1.0, 0.1], [3, 4, 1])[0])
        count = np.count_nonzero(draws > x)
        assert abs(count - p * draws.size) < 5.5 * math.sqrt(draws.size * p * (1 - p))


def test_both_tails_add_up_to_one():
    for x in (-3.0, 0.5, 7.0):
        upper, lower = tails.weighted_chi_squares(x, [1.0, -0.5], [4, 3])
        assert math.exp(upper) + math.exp(lower) == pytest.approx(1.0, abs=1e-12)


def test_far_tails_stay_ranked():
    logs = [tails.chi_square(q, 1000.0)[0] for q in (2e3, 4e3, 1e4, 1e6)]
    assert all(a > b for a, b in pairwise(logs))
    assert tails.normal(100.0) == pytest.approx(math.log(2) + stats.norm.logsf(100.0), rel=1e-12)


@pytest.mark.parametrize(("a2", "p"), [(1.9329578, 0.10), (2.4923672, 0.05), (3.0774642, 0.025), (3.878125, 0.01)])
def test_anderson_darling_limits(a2, p):
    # REFERENCES 12.6: limits computed; Stephens (1974) prints 1.933 2.492 3.070 3.857.
    assert math.exp(tails.anderson_darling(a2)) == pytest.approx(p, rel=5e-6)


@pytest.mark.parametrize(("k", "p"), [(1.22384787, 0.10), (1.35809864, 0.05), (1.62762361, 0.01)])
def test_kolmogorov_limits(k, p):
    # REFERENCES 12.5: Miller (1956); Stephens (1974).
    n = 10**15
    assert math.exp(tails.kolmogorov(k / math.sqrt(n), n)) == pytest.approx(p, rel=1e-6)


@pytest.mark.parametrize(("n", "d", "p"), [(10, 0.40925, 0.05), (20, 0.29408, 0.05), (100, 0.16081, 0.01)])
def test_kolmogorov_small_samples(n, d, p):
    # REFERENCES 12.5, Miller's table to five digits.
    assert math.exp(tails.kolmogorov(d, n)) == pytest.approx(p, rel=2e-4)


@pytest.mark.parametrize("n", [3, 8, 50, 1_000, 9_999, 10_001, 60_000])
def test_kolmogorov_against_the_exact_law(n):
    for x, rel in ((0.5, 1e-2), (0.8, 1e-2), (1.3, 2e-4), (1.6, 2e-4), (2.0, 1e-3), (2.6, 2e-3)):
        distance = x / math.sqrt(n)
        if distance < 1.0:
            exact = stats.kstwo.sf(distance, n)  # SciPy, after Simard & L'Ecuyer (2011)
            assert math.exp(tails.kolmogorov(distance, n)) == pytest.approx(exact, rel=rel)


def test_anderson_darling_statistic_against_scipy():
    z = np.random.default_rng(3).standard_normal(57)
    fitted = stats.anderson(z, "norm", method="interpolate").statistic
    u = stats.norm.cdf((z - z.mean()) / z.std(ddof=1))
    assert tails.anderson_darling_statistic(u) == pytest.approx(fitted, rel=1e-9)


@pytest.mark.parametrize("skew", [0.4, -0.4, 0.05])
def test_pearson3_is_exact_for_gamma_sums(skew):
    for z in (-2.0, 0.5, 4.5):
        upper, lower = tails.pearson3(z, skew)
        assert math.exp(upper) == pytest.approx(stats.pearson3.sf(z, skew), rel=1e-6)
        assert math.exp(lower) == pytest.approx(stats.pearson3.cdf(z, skew), rel=1e-6)


@pytest.mark.parametrize("tiny", [1e-8, 1e-12, 1e-16, 1e-27])
@pytest.mark.parametrize("dof", [1, 2, 30, 20_000])
def test_a_chi_square_beside_a_weight_of_nearly_nothing_has_its_own_tails(dof, tiny):
    """Against scipy's chi2: the second weight puts the border of the transform far away, or gives it a pole."""
    for sign, side, z in product((1, -1), (1, -1), (-12, -3, -0.1, 0, 1, 3, 12)):
        if (q := dof + z * math.sqrt(2 * dof)) > 0:
            upper, lower = float(stats.chi2.logsf(q, dof)), float(stats.chi2.logcdf(q, dof))
            found = tails.weighted_chi_squares(sign * q, [sign, side * tiny], [dof, 1])
            expected = (upper, lower) if sign > 0 else (lower, upper)
            assert found == pytest.approx(expected, rel=1e-6, abs=1e-6), (sign, side, z)


@pytest.mark.parametrize("size", [1e3, 1e9, 1e150, 1e300])
def test_any_size_has_a_tail_that_ranks(size):
    """Farther out than the saddle can be told from the pole, tails still fall, and nothing divides by 0."""
    near, far = (tails.weighted_chi_squares(x, [1.0, 0.5, -0.2], 60)[0] for x in (size / 2, size))
    assert far < near < -100
