"""The t copula against SciPy's multivariate t law, and who is moved by whom."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import quad

from procgen.chance.laws import LAWS, Normal, StudentT
from procgen.chance.student_copula import normals, spherical
from procgen.spec.reader import read_raw
from procgen.terms import catalogue
from procgen.terms.graph import build
from procgen.terms.mixing import Group
from tests.terms.helpers import draw


class Member:
    def __init__(self, law):
        self.law = law


@pytest.mark.parametrize("df", [2.05, 3, 4, 7.3, 30, 1000])
def test_normals_of_ranks(df):
    """Phi^-1 of the t distribution function, both by SciPy."""
    x = np.concatenate([np.linspace(0, 10, 5001), np.exp(np.linspace(0, 40 / np.sqrt(df), 5001))])
    tail = stats.t.sf(x, df)
    x = x[tail > 2.0**-64]
    expected = -stats.norm.ppf(stats.t.sf(x, df))
    np.testing.assert_allclose(normals(df, x), expected, rtol=0, atol=1e-12)
    np.testing.assert_array_equal(normals(df, -x[1:]), -normals(df, x[1:]))
    assert np.isfinite(normals(df, np.array([-1e300, 1e300]))).all()


@pytest.mark.parametrize("df", [2.5, 4.0, 20.0])
@pytest.mark.parametrize("u", [(0.3, 0.8, 0.1), (0.001, 0.5, 0.97), (0.9, 0.02, 0.6)])
def test_conditional_laws_are_those_of_the_multivariate_t(df, u):
    """Each uniform is P(X_k <= x_k given those before), by integrals of SciPy's multivariate_t density."""
    r = np.array([[1, 0.6, -0.3], [0.6, 1, 0.2], [-0.3, 0.2, 1]])
    group = Group((Member(Normal()),) * 3, (r,), df)
    scores = group.shocks(lambda k, out: out.fill(u[k]), (1, 1))
    x = [float(stats.t.ppf(stats.norm.cdf(z), df).item()) for z in scores]
    assert stats.t.cdf(x[0], df) == pytest.approx(u[0], rel=1e-9)
    for k in (1, 2):
        part = stats.multivariate_t(shape=r[: k + 1, : k + 1], df=df)
        known = x[:k]
        pieces = [quad(lambda s: part.pdf([*known, s]), a, b, epsabs=0, epsrel=1e-11, limit=400)[0]  # noqa: B023
                  for a, b in ((-np.inf, x[k]), (x[k], np.inf))]  # fmt: skip
        assert pieces[0] / sum(pieces) == pytest.approx(u[k], rel=1e-8)


def test_a_t_law_under_its_own_copula_is_the_vector_itself():
    u = [np.array([[0.2, 0.9]]), np.array([[0.7, 0.01]])]
    group = Group((Member(StudentT(5.0)),) * 2, (np.array([[1, 0.5], [0.5, 1]]),), 5.0)
    e = spherical(5.0, u)
    scale = np.sqrt(3 / 5)
    first, second = group.shocks(lambda k, out: np.copyto(out, u[k]), u[0].shape)
    np.testing.assert_allclose(first, scale * e[0], rtol=1e-9)
    np.testing.assert_allclose(second, scale * (0.5 * e[0] + np.sqrt(0.75) * e[1]), rtol=1e-8)


SERIES = {
    "a": [{"white_noise": {"sd": 1}}],
    "b": [{"ar": {"phi": 0.5, "sd": 1}}],
    "c": [{"random_walk": {"sd": 1, "law": "laplace"}}],
}
T4 = {"student_t": {"df": 4}}


def drawn(*items):
    raw = {"procgen": 1, "seed": 5, "paths": 64, "time": {"steps": 30}, "series": SERIES, "correlation": list(items)}
    return draw(build(read_raw(raw, catalogue(), LAWS)), 0, 64, [7, 23])


def test_an_appended_name_moves_nobody_and_the_leader_is_what_it_is_alone():
    alone = drawn()
    two = drawn({"between": ["a.white_noise", "b.ar"], "value": 0.5, "copula": T4})
    three = drawn(
        {"between": ["a.white_noise", "b.ar"], "value": 0.5, "copula": T4},
        {"between": ["b.ar", "c.random_walk"], "value": 0.4, "copula": T4},
    )
    np.testing.assert_array_equal(alone["a"], two["a"])
    for name in ("a", "b"):
        np.testing.assert_array_equal(two[name], three[name])
    assert not np.array_equal(alone["b"], two["b"]) and not np.array_equal(two["c"], three["c"])


def test_uncorrelated_names_of_one_copula_are_tied():
    """The sizes of shocks go together where their signs do not: 2 × 4,000 squares, at 6 standard errors."""
    x = drawn({"between": ["a.white_noise", "c.random_walk"], "value": 0, "copula": {"student_t": {"df": 2.1}}})
    a, c = np.abs(x["a"][1:]).ravel(), np.abs(np.diff(x["c"], axis=0)).ravel()
    rank = stats.spearmanr(a, c).statistic
    assert rank > 6 / np.sqrt(len(a))
