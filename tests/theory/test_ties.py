"""What shocks under a t copula have in common, against SciPy's multivariate laws and integrals of another kind."""

from __future__ import annotations

from itertools import pairwise, product

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import dblquad, quad

from procgen.chance.laws import LAWS
from procgen.theory.ties import NormalTie, StateTie, StudentTie, t_coefficients

from .specs import theory_of

NORMAL, UNIFORM, LAPLACE = (LAWS[name]() for name in ("normal", "uniform", "laplace"))
T4 = {"student_t": {"df": 4}}


@pytest.mark.parametrize("rho", [-0.6, 0.0, 0.5, 0.9])
def test_joint_tails(rho):
    """SciPy's multivariate_normal, and the double integral of the density of its multivariate_t."""
    r = [[1, rho], [rho, 1]]
    at = [stats.norm.ppf(0.01)] * 2
    assert NormalTie(rho).joint_tail(0.01) == pytest.approx(stats.multivariate_normal(cov=r).cdf(at), rel=1e-7)
    t, end = stats.multivariate_t(shape=r, df=4), stats.t.ppf(0.01, 4)
    corner = dblquad(lambda y, x: t.pdf([x, y]), -np.inf, end, -np.inf, end, epsabs=1e-11, epsrel=1e-8)[0]
    assert StudentTie(4.0, rho).joint_tail(0.01) == pytest.approx(corner, rel=1e-6)


def test_the_figures_that_are_quoted():
    """At rho = 0.5 about 13 % of the lowest 1 % are joint under a normal copula, 29 % under t(4).

    In the limit 2 T(-sqrt((v + 1)(1 - rho) / (1 + rho))) with v + 1 degrees of freedom (Embrechts, McNeil & Straumann
    2002; from memory).
    """
    assert NormalTie(0.5).joint_tail(0.01) / 0.01 == pytest.approx(0.129, abs=5e-4)
    assert StudentTie(4, 0.5).joint_tail(0.01) / 0.01 == pytest.approx(0.288, abs=5e-4)
    limit = 2 * stats.t.cdf(-np.sqrt(5 / 3), 5)
    assert StudentTie(4, 0.5).joint_tail(1e-10) / 1e-10 == pytest.approx(limit, rel=1e-4)


@pytest.mark.parametrize("df", [3.0, 4.0, 12.0])
@pytest.mark.parametrize("rho", [-0.9, 0.5])
def test_the_vector_itself_has_its_own_correlation(df, rho):
    """An elliptical law: the correlation of t values is rho. Asked of the sums that serve any law."""
    c, seen = t_coefficients(LAWS["student_t"](df=df), df)
    from procgen.theory.ties import _mixing

    weights = _mixing(df)[1]
    assert float((rho ** np.arange(len(c)) @ (c * c)) @ weights) == pytest.approx(rho, abs=1e-8)
    assert seen == pytest.approx(1.0, abs=1e-8)
    assert StudentTie(df, rho).law_correlation(LAWS["student_t"](df=df), LAWS["student_t"](df=df)) == (rho, 0.0)


def polar(df, rho, f, g):
    """E f(X) g(Y) of a bivariate t vector R (cos a, cos(a - b)): R^2 / 2 is an F variable, a is uniform."""
    turn = np.arccos(rho)

    def around(w):
        r = np.sqrt(df * np.expm1(2 * w * w / df))  # P(R > r) = exp(-w^2)
        edges = np.sort(np.mod(np.array([np.pi / 2, 3 * np.pi / 2, turn + np.pi / 2, turn - np.pi / 2]), 2 * np.pi))
        edges = [*edges, edges[0] + 2 * np.pi]
        nodes, weights = np.polynomial.legendre.leggauss(60)
        total = 0.0
        for a, b in pairwise(edges):
            s = (nodes + 1) / 2  # towards both ends, where a value is small and bends
            angle, slope = a + (b - a) * s**3 * (10 - 15 * s + 6 * s * s), 30 * (s * (1 - s)) ** 2
            values = f(r * np.cos(angle)) * g(r * np.cos(angle - turn))
            total += (b - a) / 2 * float((weights * slope) @ values)
        return total / (2 * np.pi) * 2 * w * np.exp(-w * w)

    return quad(around, 0, 7, epsabs=1e-10, epsrel=1e-10, limit=400)[0]


@pytest.mark.parametrize(("df", "rho"), [(4.0, 0.5), (3.0, -0.7), (9.0, 0.2)])
def test_correlations_of_values_of_other_laws(df, rho):
    def score(x):
        return np.sign(x) * -stats.norm.ppf(stats.t.sf(np.abs(x), df))

    def uniform(x):
        return np.sqrt(12.0) * (stats.t.cdf(x, df) - 0.5)

    def laplace(x):
        return -np.sign(x) * np.log(2 * stats.t.sf(np.abs(x), df)) / np.sqrt(2)

    tie = StudentTie(df, rho)
    for law, f in ((NORMAL, score), (UNIFORM, uniform), (LAPLACE, laplace)):
        assert tie.law_correlation(law, NORMAL)[0] == pytest.approx(polar(df, rho, f, score), abs=3e-8)
        assert tie.law_correlation(law, law)[0] == pytest.approx(polar(df, rho, f, f), abs=3e-8)
    first, second = tie.scores
    assert first == pytest.approx(polar(df, rho, score, score), abs=3e-8)
    assert second == pytest.approx(polar(df, rho, lambda x: score(x) ** 2, lambda x: score(x) ** 2), abs=1e-7)


def test_each_alone_is_gaussian_and_not_both():
    both = [{"between": ["x.ar", "y.random_walk"], "value": 0.5, "copula": T4}]
    th = theory_of({"x": [{"ar": {"phi": 0.6, "sd": 1}}], "y": [{"random_walk": {"sd": 2}}]}, correlation=both)
    assert th["x"].gaussian and th["y"].gaussian and not th.cross("x", "y").gaussian
    assert th["x"].stationarity.verdict == "strictly stationary"
    rho, _ = StudentTie(4.0, 0.5).law_correlation(NORMAL, NORMAL)
    # Cov(x(t), y(t)) adds up 2 rho 0.6^k over the shocks of steps 1 to t.
    assert th.cross("x", "y").covariance(4, 4) == pytest.approx(2 * rho * (1 - 0.6**4) / 0.4, rel=1e-12)
    (pair,) = th.correlated
    assert pair.values == rho and pair.joint_tail() == pytest.approx(0.288, abs=5e-4)
    told = th.as_dict([0])["correlation"][0]
    assert told["copula"] == "t copula with 4 degrees of freedom"
    assert told["joint_tail"]["normal"] == pytest.approx(0.129, abs=5e-4)


def test_a_sum_of_tied_shocks_is_not_gaussian():
    """Its variance is known; its fourth moment is not, and says so. Nor is the larger of the two."""
    tied = [{"between": ["x.white_noise", "x.other"], "value": 0.0, "copula": T4}]
    body = [{"white_noise": {"sd": 1}}, {"white_noise": {"sd": 1}, "as": "other"}]
    th = theory_of({"x": body, "y": [{"max": {"of": [{"use": "x.white_noise"}], "and": [{"use": "x.other"}]}}]},
                   correlation=tied)  # fmt: skip
    assert not th["x"].gaussian and th["x"].variance(3) == pytest.approx(2.0, abs=1e-8)
    assert th["x"].excess_kurtosis is None and "x.white_noise" in th["x"].reason("excess_kurtosis")
    assert th["y"].variance(3) is None


def test_exponentials_of_tied_normals():
    """Each is lognormal; of their product nothing is known."""
    tied = [{"between": ["x.white_noise", "y.white_noise"], "value": 0.5, "copula": T4}]
    th = theory_of({n: [{"exp": [{"white_noise": {"sd": 0.3}}]}] for n in ("x", "y")}, correlation=tied)
    assert th["x"].variance(0) == pytest.approx(np.exp(0.09) * np.expm1(0.09))
    cross = th.cross("x", "y")
    assert cross.covariance(0, 0) is None and "exponential" in cross.reason()


def test_a_tie_by_state_is_the_mean_of_those_of_its_states():
    tie = by_state(0.2, 0.8)
    assert tie.rho == pytest.approx(0.4)
    assert tie.law_correlation(NORMAL, NORMAL)[0] == pytest.approx(0.4)
    assert tie.scores[1] == pytest.approx(1 + 2 * (2 / 3 * 0.04 + 1 / 3 * 0.64))
    assert tie.turned().rho == pytest.approx(-0.4)


def by_state(first, second):
    moves = (np.array([[0.8, 0.2], [0.4, 0.6]]), np.array([2 / 3, 1 / 3]), (0, 1))
    return StateTie("s", ("a", "b"), (NormalTie(first), NormalTie(second)), moves)


def test_sums_over_a_chain_against_all_chains():
    """The variance of a sum of numbers of the state, and of signs one step apart, over all chains and all signs."""
    tie, count = by_state(0.2, 0.8), 5
    p, shares, _ = tie.moves
    chains = np.array(list(product(range(2), repeat=count + 1)))
    weights = shares[chains[:, 0]] * np.prod(p[chains[:, :-1], chains[:, 1:]], axis=1)
    sums = np.array([3.0, -1.0])[chains[:, :count]].sum(axis=1)
    assert tie.spread_of_sum([3.0, -1.0], count) == pytest.approx(weights @ sums**2 - (weights @ sums) ** 2, rel=1e-12)
    means = 2 / np.pi * np.arcsin([0.2, 0.8])
    signs = np.array(list(product([-1.0, 1.0], repeat=count + 1)))
    given = np.prod((1 + signs[None] * means[chains][:, None]) / 2, axis=2)  # (chains, signs)
    chances = weights @ given
    products = (signs[:, 1:] * signs[:, :-1]).sum(axis=1)
    mean, whole, between = tie.signs(count)
    expected = (means[chains][:, 1:] * means[chains][:, :-1]).sum(axis=1)
    assert between == pytest.approx(weights @ expected**2 - (weights @ expected) ** 2, rel=1e-12)
    assert count * mean == pytest.approx(chances @ products, rel=1e-12)
    assert whole == pytest.approx(chances @ products**2 - (chances @ products) ** 2, rel=1e-12)


def test_signs_of_elliptical_pairs():
    """E sign(x y) = 2/pi asin(rho) whatever the radius, by the polar integral."""
    assert polar(4.0, 0.6, np.sign, np.sign) == pytest.approx(2 / np.pi * np.arcsin(0.6), abs=1e-8)
