"""Correlations of values under a Gaussian copula against closed forms and quadrature by SciPy."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from procgen.theory import Axis, SeriesTheory
from procgen.theory.copula import hermite_coefficients, law_correlation
from procgen.theory.series import CrossTheory

from .references import EXPONENTIAL, LAPLACE, NORMAL, UNIFORM, student


def at_normals(law, z):
    """Quantiles of a law at the ranks of normals, by SciPy."""
    return np.where(z < 0, law.distribution().ppf(stats.norm.cdf(z)), law.distribution().isf(stats.norm.sf(z)))


@pytest.mark.parametrize("r", [-0.95, -0.3, 0.2, 0.8, 0.99])
def test_uniform_laws(r):
    """Spearman's rho of a normal pair, 6/pi asin(r/2) (Pearson 1907; Kruskal 1958)."""
    value, tolerance = law_correlation(UNIFORM, UNIFORM, r)
    assert value == pytest.approx(6 / np.pi * np.arcsin(r / 2), rel=1e-11)
    assert tolerance < 2e-9


def test_uniform_and_normal():
    """r sqrt(3/pi): the covariance of a normal and its own probability."""
    assert law_correlation(UNIFORM, NORMAL, 0.6)[0] == pytest.approx(0.6 * np.sqrt(3 / np.pi), rel=1e-12)


@pytest.mark.parametrize(("one", "other"), [(LAPLACE, LAPLACE), (student(5), LAPLACE), (student(4.5), EXPONENTIAL)])
@pytest.mark.parametrize("r", [-0.6, 0.5])
def test_double_integral(one, other, r):
    """E q1(z1) q2(z2) as a double integral over the normals, with SciPy's density, in panels that meet at 0."""
    nodes, weights = np.polynomial.legendre.leggauss(20)
    edges = np.arange(-12.0, 12.0, 1.5)
    z = (edges[:, None] + 0.75 * (nodes + 1.0)).ravel()
    w = np.tile(0.75 * weights, len(edges))
    x, y = np.meshgrid(z, z, indexing="ij")
    density = stats.multivariate_normal(cov=[[1, r], [r, 1]]).pdf(np.stack([x, y], axis=-1))
    exact = (w * at_normals(one, z)) @ density @ (w * at_normals(other, z))
    assert law_correlation(one, other, r)[0] == pytest.approx(exact, abs=1e-9)


@pytest.mark.parametrize("law", [LAPLACE, student(5), EXPONENTIAL, UNIFORM], ids=lambda law: law.name)
def test_coefficients_have_unit_length(law):
    """Parseval: the squares of the Hermite coefficients of a standardised law add up to 1."""
    c = hermite_coefficients(law)
    assert c[0] == pytest.approx(0.0, abs=1e-12)
    assert 1.0 - 1e-3 < float((c * c).sum()) <= 1.0 + 1e-12


def test_correlated_filters_of_different_laws():
    """Cov(x, y) = rho* sx sy / (1 - phi psi) for AR(1) filters, rho* from the laws."""
    axis = Axis(100, {frozenset(("x.ar", "y.ar")): 0.5})
    x = SeriesTheory("x", axis.filtered(axis.source("x.ar", UNIFORM, 2.0), (0.8,)))
    y = SeriesTheory("y", axis.filtered(axis.source("y.ar", UNIFORM, 0.5), (0.4,)))
    rho = 6 / np.pi * np.arcsin(0.25)
    assert CrossTheory(x, y).covariance(9, 7) == pytest.approx(rho * 0.64 / (1 - 0.32), rel=1e-10)
    assert CrossTheory(x, y).covariance(7, 9) == pytest.approx(rho * 0.16 / (1 - 0.32), rel=1e-10)
