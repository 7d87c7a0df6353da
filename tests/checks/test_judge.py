"""Every kind of finding: its p is calibrated, and the departure it says it finds 9 times in 10 is found that often.

Statistics are drawn directly, so that many repeats are cheap. Each count of small p is binomial under a right law; it
is held to the interval that leaves 1e-8 outside, with fixed seeds. The sharp cases (p near 1e-6) are exact laws
and are compared with SciPy in test_tails.
"""

import math

import numpy as np
import pytest
from scipy import stats

from procgen.checks import judge, power

OUTSIDE = 1e-8
REPEATS = 10_000
FEW = 2_000


def within(count, n, p):
    low, high = stats.binom.ppf(OUTSIDE / 2, n, p), stats.binom.isf(OUTSIDE / 2, n, p)
    assert low <= count <= high, f"{count} of {n}, expected about {n * p:.1f} ({low:.0f} to {high:.0f})"


def calibrated(log_ps):
    log_ps = np.asarray(log_ps)
    for level in (0.1, 1e-2, 1e-3):
        within(np.count_nonzero(log_ps <= math.log(level)), log_ps.size, level)


def powerful(findings_at_departure, level):
    """Found 85 to 97 times in 100, the range in which a true `detectable` must lie, but for a chance of 1e-8."""
    hits = [finding.log_p <= math.log(level) for finding in findings_at_departure]
    low, high = stats.binom.ppf(OUTSIDE, len(hits), 0.85), stats.binom.isf(OUTSIDE, len(hits), 0.97)
    assert low <= sum(hits) <= high, (sum(hits), len(hits))


def test_normal_mean():
    rng = np.random.default_rng(1)
    means = rng.standard_normal(REPEATS) * 3 / math.sqrt(7) + 2
    calibrated([judge.normal_mean(m - 2.0, 2.0, 3.0, 7).log_p for m in means])
    off = judge.normal_mean(0.0, 2.0, 3.0, 7).detect(1e-5)
    powerful([judge.normal_mean(m + off - 2.0, 2.0, 3.0, 7) for m in means[:FEW]], 1e-5)


@pytest.mark.parametrize("dof", [1, 29, 2000])
def test_variance(dof):
    rng = np.random.default_rng(2)
    s2 = 4 * rng.chisquare(dof, REPEATS) / dof
    calibrated([judge.variance(v, 4.0, dof).log_p for v in s2])
    grown = 1 + judge.variance(4.0, 4.0, dof).detect(1e-5) / 4
    powerful([judge.variance(v * grown, 4.0, dof) for v in s2[:FEW]], 1e-5)


@pytest.mark.parametrize(("rho", "n"), [(0.0, 30), (-0.9, 30), (0.6, 500)])
def test_covariance(rho, n):
    rng = np.random.default_rng(3)

    def drawn(r, count):
        return 2.0 * 0.5 * ((1 + r) / 2 * rng.chisquare(n, count) - (1 - r) / 2 * rng.chisquare(n, count)) / n

    calibrated([judge.covariance(c, 2.0, 0.5, rho, n).log_p for c in drawn(rho, 1000)])
    if n == 500:
        off = judge.covariance(0.6, 2.0, 0.5, rho, n).detect(1e-5)
        powerful([judge.covariance(c, 2.0, 0.5, rho, n) for c in drawn(rho + off, 400)], 1e-5)


def test_quadratic_form():
    rng = np.random.default_rng(4)
    weights = np.array([1.0, 0.4, -0.3, 0.1])
    values = (rng.chisquare(12, (1000, 4)) @ weights) / 12
    calibrated([judge.quadratic(v, weights, 12).log_p for v in values])


def test_mean_of_skewed_numbers_with_known_sd():
    # Squares of normals: skewness 2.83, as in a variance. 400 paths; the matched chi-square is exact here, and a plain
    # z would be wrong by a factor of 3 at 1e-3 already (Edgeworth's skew x^3 / (6 sqrt n)).
    rng = np.random.default_rng(5)
    sums = rng.chisquare(400, REPEATS) / 400 - 1
    sample = [judge.Sample(400, m, math.sqrt(2), math.sqrt(8), 12.0) for m in sums]
    calibrated([judge.sample_mean(s, 0.0, math.sqrt(2)).log_p for s in sample])


def test_mean_of_skewed_numbers_without_known_sd():
    # Exponentials, skewness 2: both tails are wrong by factors without the correction.
    rng = np.random.default_rng(6)
    log_ps = []
    for _ in range(FEW):
        x = rng.exponential(size=3000) - 1
        log_ps.append(
            judge.sample_mean(judge.Sample.from_powers(3000, [np.sum(x**k) for k in (1, 2, 3, 4)]), 0.0).log_p
        )
    calibrated(log_ps)


@pytest.mark.parametrize("draw", ["gamma", "product", "student"])
def test_studentised_means_of_few_paths_err_on_the_safe_side(draw):
    # 200 paths; the skewness is seen in the sample only. Counts of small p may not be above the level's, but for a
    # chance of 1e-8. Without the raised exponent gammas of skewness 1 gave 2.0 times too many p below 1e-3.
    rng, n, repeats = np.random.default_rng(20), 200, 20_000
    y = {
        "gamma": lambda: rng.gamma(4, size=(repeats, n)) - 4,
        "product": lambda: rng.standard_normal((repeats, n)) * rng.standard_normal((repeats, n)),
        "student": lambda: rng.standard_t(7, size=(repeats, n)),
    }[draw]()
    sums = np.array([(y**k).sum(axis=1) for k in (1, 2, 3, 4)]).T
    log_ps = np.array([judge.sample_mean(judge.Sample.from_powers(n, row), 0.0).log_p for row in sums.tolist()])
    for level in (1e-2, 1e-3, 1e-4):
        assert np.count_nonzero(log_ps <= math.log(level)) <= stats.binom.isf(OUTSIDE, repeats, level)


def test_studentised_mean_finds_what_it_says():
    rng, n = np.random.default_rng(21), 1000
    y = rng.gamma(16, size=(400, n)) - 16
    sums = [[(row**k).sum() for k in (1, 2, 3, 4)] for row in y]
    sizes = [judge.sample_mean(judge.Sample.from_powers(n, s), 0.0).detect(1e-4) for s in sums]
    moved = [[((row + size) ** k).sum() for k in (1, 2, 3, 4)] for row, size in zip(y, sizes, strict=True)]
    found = [judge.sample_mean(judge.Sample.from_powers(n, s), 0.0).log_p <= math.log(1e-4) for s in moved]
    assert sum(found) >= stats.binom.ppf(OUTSIDE, 400, 0.9)  # on its better side it finds more


def test_too_few_paths_for_a_skewed_tail_are_said_to_be():
    sample = judge.Sample(200, 0.01, 1.4, 2.8, 12.0)
    assert "too few" in judge.sample_mean(sample, 0.0).doubt(5e-6)
    assert "too few" in judge.sample_mean(judge.Sample(200, 0.01, 1.4, 1.0, 90.0), 0.0, 1.4).doubt(5e-6)
    assert judge.sample_mean(sample, 0.0).doubt(0.05) is None
    assert judge.sample_mean(judge.Sample(10**6, 0.0, 1.4, 2.8, 12.0), 0.0).doubt(5e-6) is None
    assert "only 40 paths" in judge.sample_mean(judge.Sample(40, 0.0, 1.0, 0.0, 0.0), 0.0).doubt(0.01)


def test_sums_of_squares_find_what_they_say():
    rng = np.random.default_rng(7)
    calibrated([judge.squares(q, 6, 10_000).log_p for q in rng.chisquare(6, REPEATS)])
    size = judge.squares(6.0, 6, 10_000).detect(1e-5)
    moved = stats.ncx2.rvs(6, 10_000 * size**2, size=FEW, random_state=rng)
    powerful([judge.squares(q, 6, 10_000) for q in moved], 1e-5)


def test_worst_of_many():
    rng = np.random.default_rng(8)
    calibrated([judge.worst(np.log(rng.random(50))) for _ in range(REPEATS)])
    reach = judge.reach_of_worst(1e-5, 50)
    z = rng.standard_normal((FEW, 50))
    z[:, 3] += reach
    hits = sum(judge.worst(math.log(2) + stats.norm.logsf(np.abs(row))) <= math.log(1e-5) for row in z)
    assert stats.binom.ppf(OUTSIDE, FEW, 0.85) <= hits <= stats.binom.isf(OUTSIDE, FEW, 0.97)


@pytest.mark.parametrize("n", [8, 100, 2000])
def test_anderson_darling(n):
    rng = np.random.default_rng(9)
    count = 800 if n < 2000 else 300
    calibrated([judge.anderson_darling(rng.random(n)).log_p for _ in range(count)])


def test_anderson_darling_finds_the_shift_it_says():
    # In the unit of A² a shift adds n d²/2, d the first Legendre coefficient: density 1 + d sqrt(3) (2u - 1).
    rng = np.random.default_rng(10)
    n, level = 2000, 1e-5
    d = math.sqrt(2 * judge.anderson_darling(rng.random(n)).detect(level) / n)
    slope = d * math.sqrt(3)

    def drawn():
        v = rng.random(n)
        return (slope - 1 + np.sqrt((1 - slope) ** 2 + 4 * slope * v)) / (2 * slope)

    powerful([judge.anderson_darling(drawn()) for _ in range(200)], level)


def test_kolmogorov():
    rng = np.random.default_rng(12)
    n = 500
    place = np.arange(n + 1) / n

    def gap(u):
        return max(np.max(place[1:] - np.sort(u)), np.max(np.sort(u) - place[:-1]))

    gaps = [gap(rng.random(n)) for _ in range(FEW)]
    calibrated([judge.kolmogorov(d, n).log_p for d in gaps])
    reach = judge.kolmogorov(0.0, n).detect(1e-4)
    # Uniforms moved so that the largest gap is `reach`, at 1/2.
    moved = [
        np.where(v < 0.5 + reach, v * 0.5 / (0.5 + reach), 1 - (1 - v) * 0.5 / (0.5 - reach))
        for v in rng.random((500, n))
    ]
    hits = sum(judge.kolmogorov(gap(u), n).log_p <= math.log(1e-4) for u in moved)
    assert hits >= stats.binom.ppf(OUTSIDE, 500, 0.9)  # found at least 9 times in 10


def test_share():
    rng = np.random.default_rng(13)
    calibrated_upward = [judge.share(int(k), 3000, 0.3).log_p for k in rng.binomial(3000, 0.3, REPEATS)]
    calibrated(calibrated_upward)
    off = judge.share(900, 3000, 0.3).detect(1e-5)
    powerful([judge.share(int(k), 3000, 0.3) for k in rng.binomial(3000, 0.3 + off, FEW)], 1e-5)


def test_powers_of_power():
    assert power.needed(0.05) == pytest.approx(1.959964, abs=1e-6)  # Abramowitz & Stegun, Table 26.5
    assert power.shift(0.05, 1.0) == pytest.approx(1.959964 + 1.281552, abs=1e-5)
    assert power.critical(0.01, skew=math.sqrt(8 / 50), excess=12 / 50) == pytest.approx(
        (stats.chi2.isf(0.005, 50) - 50) / 10, rel=0.01
    )  # Cornish & Fisher against the chi-square itself
